"""A run directory, read back with Python's own modules and judged by what its columns promise.

usage: check_run.py PROGRAM RUN     RUN is the directory of a finished fold of generated or read events; PROGRAM is not used

* numbers are the shortest that read back as the same value (Python's `repr` gives the shortest too);
* edges of neighbouring bins are the same text; the bins and the parts outside of the axis add to 1;
* the digests of `run.json` are those of the files;
* the efficiency of `summary.csv` is a share, not below the acceptance, and without error where it is 1;
* the widths of `summary.csv`, against SciPy: mean and standard deviation from the bin centres with Sheppard's correction
  (W. F. Sheppard, Proc. London Math. Soc. 29 (1898) 353), the others from a monotone cubic of the running sum.
"""

import csv
import hashlib
import json
import math
import pathlib
import sys
from decimal import Decimal

import numpy as np
from scipy.interpolate import PchipInterpolator

# The sum of up to 1000 rounded probabilities.
SUM_TOLERANCE = 1e-13
# In units of the standard deviation. What Sheppard's correction leaves out is the slope of the density at both ends of the
# axis; 2e-6 in the demo. Without the correction the deviation would be off by (bin/deviation)²/24, 1e-4 and more.
MOMENT_TOLERANCE = 2e-5
# Relative. Two monotone cubics through the same running sum differ in their slopes at the edges: by up to 1.2e-4 in the
# widths of the demo, whose bins are narrower than a quarter of sigma_eff.
WIDTH_TOLERANCE = 5e-4
FRACTION = math.erf(math.sqrt(0.5))


def read(path):
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def number(text):
    value = float(text)
    assert math.isfinite(value), text
    assert Decimal(text) == Decimal(repr(value)), f"{text} is not the shortest form of {value!r}"
    return value


def label(row):
    return tuple(row[key] for key in ("channel", "category", "mass_gev", "shift"))


def near(what, found, expected, tolerance):
    assert abs(found - expected) <= tolerance, f"{what}: {found!r}, expected {expected!r} within {tolerance:g}"


def check_bins(rows, generated):
    """Edges and probabilities of one template."""
    assert [row["bin"] for row in rows] == [str(k) for k in range(len(rows))]
    for left, right in zip(rows, rows[1:]):
        assert left["high_gev"] == right["low_gev"], (label(left), left["bin"])
    for row in rows:
        assert number(row["low_gev"]) < number(row["high_gev"])
        assert number(row["error"]) >= 0.0
        list_error = number(row["list_error"])
        assert list_error == 0.0 if generated else list_error >= 0.0
    edges = np.array([number(row["low_gev"]) for row in rows] + [number(rows[-1]["high_gev"])])
    return edges, np.array([number(row["probability"]) for row in rows])


def narrowest(curve, low, high, below, above):
    """Half the narrowest interval that holds FRACTION, by trying many starts."""
    inverse_at = lambda p: float(curve.solve(p, extrapolate=False)[0])
    starts = np.linspace(low, inverse_at(1.0 - above - FRACTION - 1e-9), 4001)
    sums = curve(starts)
    grid = np.linspace(low, high, 40001)
    ends = np.interp(sums + FRACTION, curve(grid), grid)
    return 0.5 * float(np.min(ends - starts))


def check_widths(row, edges, probability):
    name = " ".join(label(row))
    bin_width = edges[1] - edges[0]
    below, above = number(row["below_axis"]), number(row["above_axis"])
    near(f"{name}: sum", math.fsum(probability) + below + above, 1.0, SUM_TOLERANCE)

    total = probability.sum()
    centres = 0.5 * (edges[:-1] + edges[1:])
    mean = float((probability * centres).sum() / total)
    variance = float((probability * (centres - mean) ** 2).sum() / total) - bin_width**2 / 12.0
    deviation = math.sqrt(variance)
    near(f"{name}: mean", number(row["mean_gev"]), mean, MOMENT_TOLERANCE * deviation)
    near(f"{name}: deviation", number(row["standard_deviation_gev"]), deviation, MOMENT_TOLERANCE * deviation)

    if row["monotone"] != "true":
        return
    assert bin_width < 0.25 * number(row["sigma_eff_gev"]), f"{name}: bins too wide for the tolerance"
    running = below + np.concatenate([[0.0], np.cumsum(probability)])
    curve = PchipInterpolator(edges, running)
    tail = 0.5 * (1.0 - FRACTION)
    central = 0.5 * float(curve.solve(1.0 - tail, extrapolate=False)[0] - curve.solve(tail, extrapolate=False)[0])
    near(f"{name}: central", number(row["central_68_gev"]), central, WIDTH_TOLERANCE * central)
    sigma_eff = narrowest(curve, edges[0], edges[-1], below, above)
    near(f"{name}: sigma_eff", number(row["sigma_eff_gev"]), sigma_eff, WIDTH_TOLERANCE * sigma_eff)
    assert number(row["sigma_eff_gev"]) <= number(row["central_68_gev"]) * (1.0 + 1e-9), name


def check_efficiency(key, row):
    # Positive weights: a share of what passes the cuts. The acceptance includes it, so it cannot be larger.
    efficiency, error = number(row["efficiency"]), number(row["efficiency_error"])
    assert 0.0 <= efficiency <= 1.0 + 1e-12, (key, efficiency)
    assert error >= 0.0 and number(row["efficiency_list_error"]) >= 0.0, key
    assert number(row["acceptance"]) <= efficiency * (1.0 + 1e-12), (key, efficiency)
    assert efficiency < 1.0 or error == 0.0, (key, error)


def main():
    directory = pathlib.Path(sys.argv[2])
    run = json.loads((directory / "run.json").read_text(encoding="utf-8"))
    templates = {}
    for row in read(directory / "templates.csv"):
        templates.setdefault(label(row), []).append(row)
    assert templates, "no templates"
    every = {label(row): row for row in read(directory / "summary.csv")}
    summary = {key: row for key, row in every.items() if row["shift"] == "nominal"}
    assert list(summary) == list(templates), "templates and summary have other rows"
    shifts = directory / "shifts.csv"
    shifted = {label(row) for row in read(shifts)} if shifts.exists() else set()
    assert set(every) - set(summary) == shifted, "shifts and summary have other rows"
    for key, row in every.items():
        check_efficiency(key, row)

    accepted = {}
    for key, rows in templates.items():
        row = summary[key]
        edges, probability = check_bins(rows, generated=row["events_used"] == "")
        check_widths(row, edges, probability)
        near(f"{key}: fraction", number(row["sigma_eff_fraction"]), FRACTION, 1e-15)
        assert row["reached"] == "true" and number(row["precision_reached"]) <= run["precision"], key
        fold = (row["channel"], row["mass_gev"])
        accepted[fold] = accepted.get(fold, 0.0) + number(row["acceptance"])
    assert all(0.0 < share <= 1.0 for share in accepted.values()), accepted
    assert len(accepted) == len(run["folds"])

    for entry in run["files"]:
        found = hashlib.sha256((directory / entry["path"]).read_bytes()).hexdigest()
        assert found == entry["sha256"], entry["path"]
    written = {path.relative_to(directory).as_posix() for path in directory.rglob("*") if path.is_file()}
    assert written == {entry["path"] for entry in run["files"]} | {"run.json"}, written
    print(f"check_run: {len(templates)} templates, {len(run['files'])} files agree")


if __name__ == "__main__":
    main()
