#!/usr/bin/env python3
"""Runs an unbinned fit by a baseline and by the benchmark in turn, on the same 10^6 masses, and prints the ratio of times.

usage: compare_fit.py BASELINE.py [ROUNDS]

BASELINE.py takes --data FILE, writes 64-bit masses there if there is no such file, and prints JSON lines with "what",
"migrad_s" and "hesse_s" (needs numpy, scipy, numba, iminuit). Build first: cargo bench --bench fit --no-run
"""
import json
import os
import subprocess
import sys
import tempfile


def rows(command, directory):
    run = subprocess.run(command, cwd=directory, check=True, capture_output=True, text=True,
                         env={**os.environ, "NUMBA_NUM_THREADS": "1", "OMP_NUM_THREADS": "1", "RAYON_NUM_THREADS": "1"})
    return [json.loads(line) for line in run.stdout.splitlines() if line.startswith("{")]


def main():
    if len(sys.argv) not in (2, 3):
        sys.exit(__doc__)
    baseline = os.path.abspath(sys.argv[1])
    rounds = int(sys.argv[2]) if len(sys.argv) == 3 else 2
    project = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
    slow, fast, kept, fitted = {}, float("inf"), {}, None
    with tempfile.TemporaryDirectory() as scratch:
        data = os.path.join(scratch, "fit_data.f64")
        for _ in range(rounds):
            for row in rows([sys.executable, baseline, "--data", data], scratch):
                time = row["migrad_s"] + row["hesse_s"]
                slow[row["what"]] = min(time, slow.get(row["what"], float("inf")))
                kept[row["what"]] = row
            fitted = rows(["cargo", "bench", "--quiet", "--bench", "fit", "--", data], project)[-1]
            fast = min(fast, fitted["seconds"])
    print(f"{fitted['n']} masses, one thread, sorting, minimum and errors: {fast:.4f} s")
    for what, time in slow.items():
        row = kept[what]
        shift = max(abs(a - b) / e for a, b, e in zip(fitted["values"], row["values"], fitted["errors"]))
        print(f"{what:<24}{time:>9.3f} s   ratio {time / fast:>7.1f}   values within {shift:.1e} errors, valid: {row['valid']}")


if __name__ == "__main__":
    main()
