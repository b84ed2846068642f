"""Independent reading of Les Houches event files, with the standard library only.

Written against the accord (J. Alwall et al., Comput. Phys. Commun. 176 (2007) 300) and the documented rules for the choice of
legs, and against no other reader of this project. Prints one line for every event that serves a channel, and nothing for the
others:

    number channel weight mass px1 py1 pz1 m1 px2 py2 pz2 m2

`number` counts all events from 1; events in which an incoming (-1), intermediate (2) or final (1) particle has a negative
energy serve no channel; the negative lepton comes first; floats are printed as `float.hex`.

usage: lhe_read.py FILE CHANNEL ANCESTRY PICK DELTA_R

CHANNEL is two-electron or two-muon, ANCESTRY prefer, ignore or require, PICK hardest or nearest (to 91.188 GeV), DELTA_R the
distance up to which photons are added to leptons; 0: none are.
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


def momentum(row):
    """px, py, pz and the energy that follows from momentum and mass."""
    p = row[6:9]
    return (*p, math.sqrt(math.fsum(x * x for x in (*p, row[10]))))


def mass_of(legs):
    """Invariant mass by m² = sum of m_i² + 2 (E1 E2 - p1 p2)."""
    (a, b) = map(momentum, legs)
    product = a[3] * b[3] - math.fsum(a[k] * b[k] for k in range(3))
    return math.sqrt(legs[0][10] ** 2 + legs[1][10] ** 2 + 2.0 * product)


def dressed(rows, delta_r):
    """The rows with each final photon added to the nearest final electron or muon within the distance."""

    def direction(row):
        return math.asinh(row[8] / transverse(row)), math.atan2(row[7], row[6])

    parts = {i: [row] for i, row in enumerate(rows) if row[1] == 1 and abs(row[0]) in (11, 13)}
    for photon in rows:
        if photon[1] != 1 or photon[0] != 22:
            continue
        eta, phi = direction(photon)
        distances = []
        for i, (lepton, *_) in parts.items():
            eta_l, phi_l = direction(lepton)
            turn = math.remainder(phi - phi_l, 2.0 * math.pi)
            distances.append((math.hypot(eta - eta_l, turn), i))
        if distances and min(distances)[0] <= delta_r:
            parts[min(distances)[1]].append(photon)
    result = [list(row) for row in rows]
    for i, group in parts.items():
        if len(group) > 1:
            vectors = [momentum(row) for row in group]
            result[i][6:10] = [math.fsum(v[k] for v in vectors) for k in range(4)]
            # m² = sum of m_i² + 2 sum over pairs of E_i E_j - p_i p_j, the latter by the angle between them.
            square = math.fsum(row[10] ** 2 for row in group)
            for k, a in enumerate(vectors):
                for b in vectors[:k]:
                    square += 2.0 * (a[3] * b[3] - math.fsum(a[n] * b[n] for n in range(3)))
            result[i][10] = math.sqrt(square)
    return result


def pick(rows, code, ancestry, choice, delta_r):
    """The two legs and the truth mass, or None."""
    if any(row[9] < 0.0 for row in rows if row[1] in (-1, 1, 2)):
        return None
    if delta_r > 0.0:
        rows = dressed(rows, delta_r)
    final = [i for i in range(1, len(rows) + 1) if rows[i - 1][1] == 1]
    families = {
        i: [k for k in final if descends(rows, k, i)] for i in range(1, len(rows) + 1) if rows[i - 1][1] == 2
    }

    def score(pair):
        legs = [rows[i - 1] for i in pair]
        return -abs(mass_of(legs) - 91.188) if choice == "nearest" else sum(map(transverse, legs))

    def best(indices):
        pairs = [(a, b) for a in indices if rows[a - 1][0] == code for b in indices if rows[b - 1][0] == -code]
        return max(pairs, key=score, default=None)

    def is_pair_of(pair, family):
        return set(pair) <= set(family) and all(i in pair or rows[i - 1][0] == 22 for i in family)

    of_rows = [(best(family), family) for family in families.values()]
    of_rows = [pair for pair, family in of_rows if pair is not None and is_pair_of(pair, family)]
    found = max(of_rows, key=score, default=None) if ancestry != "ignore" else None
    if found is None and ancestry != "require":
        found = best(final)
    if found is None:
        return None
    legs = [rows[i - 1] for i in found]
    sizes = [(len(family), row) for row, family in families.items() if is_pair_of(found, family)]
    return legs, rows[min(sizes)[1] - 1][10] if sizes else mass_of(legs)


def main():
    path, channel, ancestry, choice, delta_r = sys.argv[1:]
    for number, (weight, rows) in enumerate(events(text_of(path)), start=1):
        found = pick(rows, LEPTON[channel], ancestry, choice, float(delta_r))
        if found is None:
            continue
        legs, mass = found
        values = [weight, mass] + [leg[k] for leg in legs for k in (6, 7, 8, 10)]
        print(number, channel, *(value.hex() for value in values))


if __name__ == "__main__":
    main()
