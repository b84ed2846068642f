#!/usr/bin/env python3
"""Runs the benchmark of the line shapes in turn with a baseline and prints the ratios of their best times.

usage: compare_shapes.py BASELINE.py [ROUNDS]

BASELINE.py prints JSON lines with "what" and "ms" (needs numpy, scipy, numba). Build first: cargo bench --bench shapes --no-run
"""
import json
import os
import subprocess
import sys
import tempfile

PAIRS = [
    ("10^6 double-sided Crystal Ball densities", "dscb_numba", "double-crystal-ball pdf"),
    ("10^6 Voigt densities", "voigt_profile", "voigt pdf"),
    ("Breit-Wigner with double-sided Crystal Ball, 1000 points", "conv quad",
     "breit-wigner with double-crystal-ball, slice"),
    ("relativistic with double-sided Crystal Ball, 1000 points", "conv quad",
     "relativistic with double-crystal-ball, slice"),
]


def times(command, directory):
    text = subprocess.run(command, cwd=directory, check=True, capture_output=True, text=True).stdout
    rows = [json.loads(line) for line in text.splitlines() if line.startswith("{")]
    return {row["what"]: row["ms"] for row in rows}


def main():
    if len(sys.argv) not in (2, 3):
        sys.exit(__doc__)
    baseline = os.path.abspath(sys.argv[1])
    rounds = int(sys.argv[2]) if len(sys.argv) == 3 else 3
    project = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
    theirs, ours = {}, {}
    # The baseline leaves a file behind; it goes with the directory.
    with tempfile.TemporaryDirectory() as scratch:
        for _ in range(rounds):
            for best, command, where in (
                    (theirs, [sys.executable, baseline], scratch),
                    (ours, ["cargo", "bench", "--quiet", "--bench", "shapes"], project)):
                for what, ms in times(command, where).items():
                    best[what] = min(ms, best.get(what, float("inf")))
    print(f"{'work':<60}{'baseline ms':>14}{'ours ms':>12}{'ratio':>9}")
    for label, slow, fast in PAIRS:
        print(f"{label:<60}{theirs[slow]:>14.3f}{ours[fast]:>12.3f}{theirs[slow] / ours[fast]:>9.1f}")


if __name__ == "__main__":
    main()
