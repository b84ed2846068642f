"""Independent reading of Les Houches event files, with the standard library only.

Written against the accord (J. Alwall et al., Comput. Phys. Commun. 176 (2007) 300), and against no other reader of this
project. Prints one line for every event that serves a channel, and nothing for the others:

    number channel weight mass px1 py1 pz1 m1 px2 py2 pz2 m2

`number` counts all events from 1; events in which an incoming (-1), intermediate (2) or final (1) particle has a negative
energy serve no channel; the negative lepton comes first; floats are printed as `float.hex`.

usage: lhe_read.py FILE CHANNEL     (two-electron or two-muon)
"""

import gzip
import math
import re
import sys

LEPTON = {"two-electron": 11, "two-muon": 13}


def text_of(path):
    with open(path, "rb") as file:
        data = file.read()
    if data[:2] == b"\x1f\x8b":
        data = gzip.decompress(data)
    return data.decode("utf-8", "replace")


def events(text):
    """Weight and rows of each event; the header is cut out before any event is looked for."""
    text = re.sub(r"<header>.*?</header>", "", text, flags=re.S)
    text = re.sub(r"<!--.*?-->", "", text, flags=re.S)
    for body in re.findall(r"<event(?:\s[^>]*)?>(.*?)</event>", text, flags=re.S):
        lines = [line.split() for line in body.strip().splitlines()]
        count, weight = int(lines[0][0]), float(lines[0][2])
        rows = []
        for words in lines[1 : 1 + count]:
            assert len(words) == 13, words
            rows.append([int(w) for w in words[:6]] + [float(w) for w in words[6:]])
        yield weight, rows


def descends(rows, index, ancestor):
    """Whether row `index` comes from row `ancestor` alone, both counted from 1."""
    seen = 0
    while index and seen <= len(rows):
        first, last = rows[index - 1][2], rows[index - 1][3]
        if last not in (0, first):
            return False
        index = first
        if index == ancestor:
            return True
        seen += 1
    return False


def transverse(row):
    return math.hypot(row[6], row[7])


def mass_of(legs):
    """Invariant mass by m² = sum of m_i² + 2 (E1 E2 - p1 p2), energies from momentum and mass."""
    (a, b) = legs
    energies = [math.sqrt(math.fsum(x * x for x in (l[6], l[7], l[8], l[10]))) for l in legs]
    product = energies[0] * energies[1] - math.fsum(a[k] * b[k] for k in (6, 7, 8))
    return math.sqrt(a[10] ** 2 + b[10] ** 2 + 2.0 * product)


def pick(rows, code):
    """The two legs and the truth mass, or None."""
    if any(row[9] < 0.0 for row in rows if row[1] in (-1, 1, 2)):
        return None
    final = [i for i in range(1, len(rows) + 1) if rows[i - 1][1] == 1]

    def pair(indices):
        negative = [rows[i - 1] for i in indices if rows[i - 1][0] == code]
        positive = [rows[i - 1] for i in indices if rows[i - 1][0] == -code]
        if not negative or not positive:
            return None
        return max(negative, key=transverse), max(positive, key=transverse)

    best = None
    for resonance in range(1, len(rows) + 1):
        if rows[resonance - 1][1] != 2:
            continue
        below = [i for i in final if descends(rows, i, resonance)]
        leptons = [i for i in below if abs(rows[i - 1][0]) == code]
        others = [i for i in below if abs(rows[i - 1][0]) != code]
        if len(leptons) != 2 or any(rows[i - 1][0] != 22 for i in others):
            continue
        legs = pair(leptons)
        if legs is None:
            continue
        score = transverse(legs[0]) + transverse(legs[1])
        if best is None or score > best[0]:
            mass = mass_of(legs) if others else rows[resonance - 1][10]
            best = (score, legs, mass)
    if best is not None:
        return best[1], best[2]
    legs = pair(final)
    return None if legs is None else (legs, mass_of(legs))


def main():
    path, channel = sys.argv[1:]
    for number, (weight, rows) in enumerate(events(text_of(path)), start=1):
        found = pick(rows, LEPTON[channel])
        if found is None:
            continue
        legs, mass = found
        values = [weight, mass] + [leg[k] for leg in legs for k in (6, 7, 8, 10)]
        print(number, channel, *(value.hex() for value in values))


if __name__ == "__main__":
    main()
