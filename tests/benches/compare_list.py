#!/usr/bin/env python3
"""Ratio of CPU time to a template of a list of events with a given error from the smearing: peakfold against plain NumPy
smearing of the same list, run in turn on one machine.

Build first: `cargo bench --bench fold --no-run`. The events are those of the smearing baseline (its physics, this script's
code), written as CSV. NumPy smears the list several times; the spread of its passes is the error of one, scaled as
1/sqrt(passes). Reading the file is told apart: NumPy has the list in memory.

usage: compare_list.py [--events 100000] [--bench target/release/deps/fold-…] [--rounds 3] [--precision 1e-4]
"""
import argparse
import json
import os
import subprocess
import tempfile
import time

import numpy as np

from compare_fold import ONE_THREAD, newest_bench

MASS, LOW, HIGH, BINS = 180.0, 150.0, 210.0, 200


def truth(rng, n):
    """Energies, polar angles and azimuths of two photons."""
    pt, y = rng.exponential(40.0, n), rng.normal(0.0, 1.2, n)
    mt = np.hypot(MASS, pt)
    cos, phi = rng.uniform(-1, 1, n), rng.uniform(0, 2 * np.pi, n)
    sin = np.sqrt(1 - cos * cos)
    legs = []
    for sign in (1, -1):
        e_rest, px, py, pz = (0.5 * MASS * v for v in (1, sign * sin * np.cos(phi), sign * sin * np.sin(phi), sign * cos))
        e = (mt * e_rest + pt * px) / MASS
        px = (pt * e_rest + mt * px) / MASS
        e, pz = e * np.cosh(y) + pz * np.sinh(y), pz * np.cosh(y) + e * np.sinh(y)
        legs.append((np.hypot(px, py), np.arcsinh(pz / np.hypot(px, py)), np.arctan2(py, px)))
    return legs


def smear(rng, legs):
    """One pass of plain smearing: a histogram."""
    n = len(legs[0][0])
    dz = np.where(rng.random(n) < 0.8, 0.1, 45.0) * rng.standard_normal(n)
    measured = []
    for pt, eta, phi in legs:
        e = pt * np.cosh(eta)
        a, b, c = (np.where(np.abs(eta) < 1.4, x, y) for x, y in zip((0.095, 0.25, 0.007), (0.12, 0.40, 0.011)))
        e = e * (1 + np.sqrt(a * a / e + (b / e) ** 2 + c * c) * rng.standard_normal(n))
        theta = 2 * np.arctan(np.exp(-eta)) + 1e-3 * rng.standard_normal(n)
        eta = np.arcsinh(1 / np.tan(theta) + dz / 1500.0)
        measured.append((e / np.cosh(eta), eta, phi + 1e-3 * rng.standard_normal(n)))
    (pa, ea, fa), (pb, eb, fb) = measured
    m = np.sqrt(np.maximum(2 * pa * pb * (np.cosh(ea - eb) - np.cos(fa - fb)), 0))
    lead, sub = np.maximum(pa, pb), np.minimum(pa, pb)
    ok = (np.abs(ea) < 2.5) & (np.abs(eb) < 2.5) & (lead > 0.35 * m) & (sub > 0.25 * m)
    return np.histogram(m[ok], BINS, (LOW, HIGH))[0], ok.sum()


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--events", type=int, default=100000)
    parser.add_argument("--bench")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--precision", type=float, default=1e-4)
    a = parser.parse_args()
    bench = a.bench or newest_bench()
    rng = np.random.default_rng(5)
    legs = truth(rng, a.events)
    passes = max(8, 2_000_000 // a.events)
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        file = f"{folder}/events.csv"
        names = [f"{name}{k}{unit}" for k in (1, 2) for name, unit in (("code", ""), ("pt", "_gev"), ("eta", ""), ("phi", "_rad"))]
        with open(file, "w") as out:
            out.write(",".join(names) + "\n")
            for row in zip(*legs[0], *legs[1]):
                cells = [repr(float(v)) for v in row]
                out.write(",".join(["22", *cells[:3], "22", *cells[3:]]) + "\n")
        for _ in range(a.rounds):
            smear(rng, legs)
            start = time.process_time()
            results = [smear(rng, legs) for _ in range(passes)]
            per_pass = (time.process_time() - start) / passes
            p = np.array([h / accepted for h, accepted in results])
            error = np.sqrt(np.mean(p.var(axis=0, ddof=1))) / p.mean(axis=0).max()
            plain = per_pass * (error / a.precision) ** 2
            command = [bench, "--precision", repr(a.precision), "--threads", "1", "--repeats", "3", "--list", file]
            ours = json.loads(subprocess.run(command, check=True, capture_output=True, text=True, env=ONE_THREAD).stdout.splitlines()[-1])
            rows.append((plain, ours["wall_s"], ours["fold_s"], ours["points"], ours["precision"], error))
    plain, wall, fold = (min(row[i] for row in rows) for i in range(3))
    print(f"{a.events} events: plain {plain:.3g} s (one pass errs by {rows[0][5]:.2g}), peakfold {fold:.3g} s, with reading {wall:.3g} s "
          f"({rows[0][3]} points, error {rows[0][4]:.2g}); ratio {plain / fold:.0f}, with reading {plain / wall:.0f}")
