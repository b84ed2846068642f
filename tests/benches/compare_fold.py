#!/usr/bin/env python3
"""Ratios of CPU time to a template of a given error: peakfold against plain NumPy smearing and against its own method
in NumPy, run in turn on one machine.

Build first: `cargo bench --bench fold --no-run`. The error of plain smearing is computed from its own histogram: the RMS
over bins of sqrt(p(1-p)/N), relative to the highest bin, scaled as 1/sqrt(N) to the error aimed at.

usage: compare_fold.py SMEARING_BASELINE.py [--bench target/release/deps/fold-…] [--rounds 3]
"""
import argparse
import glob
import json
import os
import pathlib
import subprocess
import sys
import tempfile

import numpy as np

HERE = pathlib.Path(__file__).resolve().parent
ONE_THREAD = dict(os.environ, OMP_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1")


def run(command):
    out = subprocess.run(command, check=True, capture_output=True, text=True, env=ONE_THREAD).stdout
    return json.loads(out.strip().splitlines()[-1])


def newest_bench():
    root = HERE.parents[1] / "target/release/deps"
    found = [p for p in glob.glob(str(root / "fold-*")) if os.access(p, os.X_OK) and not p.endswith(".d")]
    if not found:
        sys.exit("no bench found: run `cargo bench --bench fold --no-run` first")
    return max(found, key=os.path.getmtime)


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("baseline")
    parser.add_argument("--bench")
    parser.add_argument("--rounds", type=int, default=3)
    a = parser.parse_args()
    bench = a.bench or newest_bench()
    rows = {}
    for _ in range(a.rounds):
        for response in ("gauss", "dscb"):
            with tempfile.TemporaryDirectory() as folder:
                file = f"{folder}/template.npy"
                plain = run([sys.executable, a.baseline, "--n", str(1 << 20), "--response", response, "--out", file])
                p = np.load(file)
            # Per accepted event, as peakfold normalises.
            p = p / p.sum() if p.sum() else p
            accepted = plain["accepted_in_window"] * plain["n"]
            error = np.sqrt(np.mean(p * (1 - p)) / accepted) / p.max()
            tails = ["--tails"] if response == "dscb" else []
            for precision in (1e-3, 1e-4):
                plain_s = plain["wall_s"] * (error / precision) ** 2
                for threads in (1, 2):
                    ours = run([bench, "--precision", str(precision), "--threads", str(threads), "--repeats", "25" if precision > 5e-4 else "5"] + tails)
                    key = (response, precision, threads)
                    # One thread: the best wall time is its CPU time.
                    seconds = ours["wall_s"]
                    rows.setdefault(key, []).append((plain_s, seconds, ours["points"], ours["precision"]))
        numpy = run([sys.executable, str(HERE / "numpy_last_leg.py"), "--points", "8192"])
        ours = run([bench, "--precision", "1e-3", "--threads", "1", "--repeats", "25"])
        rows.setdefault("method", []).append((numpy["cpu_s"] / numpy["points"], ours["wall_s"] / ours["points"]))
    for key, values in rows.items():
        first, second = (min(v[i] for v in values) for i in (0, 1))
        if key == "method":
            print(f"same method in NumPy, per point: {1e9 * first:.0f} ns against {1e9 * second:.0f} ns, ratio {first / second:.1f}")
        else:
            response, precision, threads = key
            print(f"{response:5} {precision:g} {threads} thread(s): plain {first:.3g} s, peakfold {second:.3g} s "
                  f"({values[0][2]} points, error {values[0][3]:.2g}), ratio {first / second:.0f}")
