"""Writes `tests/data/lhe/x_radiating.lhe.gz`: invented events with photons near and far from leptons, more leptons than a
pair, and with or without a row of the resonance. Standard library only.

usage: lhe_make_radiating.py FILE
"""

import gzip
import math
import random
import sys

EVENTS = 120
MASS = {11: 0.000511, 13: 0.105658, 22: 0.0}


def vector(pt, eta, phi, mass):
    p = (pt * math.cos(phi), pt * math.sin(phi), pt * math.sinh(eta))
    return (*p, math.sqrt(math.fsum(x * x for x in p) + mass * mass))


def event(rng):
    code = rng.choice([11, 13])
    rows = []  # code, momentum, belongs to the resonance
    phi = rng.uniform(-math.pi, math.pi)
    for sign, back in ((1, 0.0), (-1, math.pi)):
        pt, eta, angle = rng.uniform(20, 60), rng.uniform(-2, 2), phi + back + rng.gauss(0, 0.2)
        rows.append((sign * code, vector(pt, eta, angle, MASS[code]), True))
        for _ in range(rng.choice([0, 0, 1, 2])):
            near = vector(rng.expovariate(0.2) + 0.1, eta + rng.gauss(0, 0.08), angle + rng.gauss(0, 0.08), 0.0)
            rows.append((22, near, True))
    for _ in range(rng.choice([0, 0, 1, 2])):
        other = rng.choice([11, -11, 13, -13])
        pt, eta, angle = rng.uniform(5, 70), rng.uniform(-2, 2), rng.uniform(-math.pi, math.pi)
        rows.append((other, vector(pt, eta, angle, MASS[abs(other)]), False))
    for _ in range(rng.choice([0, 1, 3])):
        beside = rows[rng.randrange(len(rows))][1]
        eta = math.asinh(beside[2] / math.hypot(beside[0], beside[1]))
        angle = math.atan2(beside[1], beside[0])
        rows.append((22, vector(rng.uniform(1, 20), eta + rng.gauss(0, 0.1), angle + rng.gauss(0, 0.1), 0.0), False))
    rng.shuffle(rows)
    lines = []
    resonance = rng.random() < 0.6
    if resonance:
        total = [math.fsum(p[k] for _, p, own in rows if own) for k in range(4)]
        mass = math.sqrt(total[3] ** 2 - math.fsum(x * x for x in total[:3]))
        lines.append((23, 2, 0, total, mass))
    for code, p, own in rows:
        lines.append((code, 1, 1 if own and resonance else 0, p, MASS[abs(code)]))
    text = [f" {len(lines)} 1 1.0 91.188 0.0078 0.118"]
    for code, status, mother, p, mass in lines:
        numbers = " ".join(f"{x:.10e}" for x in (*p, mass))
        text.append(f" {code} {status} {mother} {mother} 0 0 {numbers} 0 9")
    return "<event>\n" + "\n".join(text) + "\n</event>\n"


def main():
    rng = random.Random(20261)
    events = "".join(event(rng) for _ in range(EVENTS))
    head = (
        '<LesHouchesEvents version="1.0">\n<!-- invented events -->\n<init>\n'
        " 2212 2212 6500 6500 0 0 247000 247000 3 1\n 1 0.1 1 1\n</init>\n"
    )
    data = (head + events + "</LesHouchesEvents>\n").encode()
    with open(sys.argv[1], "wb") as file:
        file.write(gzip.compress(data, 9, mtime=0))


if __name__ == "__main__":
    main()
