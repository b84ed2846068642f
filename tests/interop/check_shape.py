"""`peakfold shape` against the distributions of SciPy on grids that reach far into the tails.

usage: check_shape.py PROGRAM RUN     RUN is not used

The judge of what SciPy has no closed form for (the distribution function of a Voigt profile) is its quadrature of SciPy's
density.
"""

import csv
import io
import subprocess
import sys

import numpy as np
from scipy import integrate, special, stats

MASS, WIDTH, SIGMA = 91.188, 2.4955, 1.7
ALPHA, POWER = 1.3, 3.7
FROM, TO, POINTS = 40.0, 140.0, 401


def shape(program, *options):
    """Columns m_gev, pdf, cdf."""
    grid = ["--mass", MASS, "--from", FROM, "--to", TO, "--points", POINTS]
    command = [program, "shape", *map(str, [*options, *grid])]
    text = subprocess.run(command, check=True, capture_output=True, text=True).stdout
    rows = list(csv.DictReader(io.StringIO(text)))
    assert len(rows) == POINTS, len(rows)
    return tuple(np.array([float(row[key]) for row in rows]) for key in ("m_gev", "pdf", "cdf"))


def compare(what, found, expected, tolerance):
    """Relative to the expected value, everywhere."""
    worst = float(np.max(np.abs(found / expected - 1.0)))
    print(f"check_shape: {what}: largest relative difference {worst:.1e}, allowed {tolerance:.0e}")
    assert worst <= tolerance, what


def main():
    program = sys.argv[1]
    natural = lambda kind: ("--natural", kind, "--width", WIDTH)
    gaussian = ("--resolution", "gaussian", "--sigma", SIGMA)

    # Closed forms: 1e-12, out to 30 standard deviations.
    m, pdf, cdf = shape(program, *gaussian)
    judge = stats.norm(MASS, SIGMA)
    compare("Gaussian density", pdf, judge.pdf(m), 1e-12)
    compare("Gaussian distribution", cdf, judge.cdf(m), 1e-12)

    m, pdf, cdf = shape(program, "--resolution", "crystal-ball", "--sigma", SIGMA, "--alpha-low", ALPHA, "--n-low", POWER)
    judge = stats.crystalball(ALPHA, POWER, loc=MASS, scale=SIGMA)
    compare("Crystal Ball density", pdf, judge.pdf(m), 1e-12)
    compare("Crystal Ball distribution", cdf, judge.cdf(m), 1e-12)

    m, pdf, cdf = shape(program, *natural("breit-wigner"))
    judge = stats.cauchy(MASS, 0.5 * WIDTH)
    compare("Breit-Wigner density", pdf, judge.pdf(m), 1e-12)
    compare("Breit-Wigner distribution", cdf, judge.cdf(m), 1e-12)

    m, pdf, cdf = shape(program, *natural("relativistic"))
    judge = stats.rel_breitwigner(MASS / WIDTH, scale=WIDTH)
    compare("relativistic density", pdf, judge.pdf(m), 1e-12)
    compare("relativistic distribution", cdf, judge.cdf(m), 1e-12)

    m, pdf, cdf = shape(program, *natural("breit-wigner"), *gaussian)
    voigt = lambda x: special.voigt_profile(x - MASS, SIGMA, 0.5 * WIDTH)
    compare("Voigt density", pdf, voigt(m), 1e-12)
    steps = [integrate.quad(voigt, low, high, epsabs=0.0, epsrel=1e-12)[0] for low, high in zip(m, m[1:])]
    # Rounding near 1, 1e-16, is some 1e-11 of the smallest step.
    compare("Voigt distribution, steps", np.diff(cdf), np.array(steps), 1e-10)


if __name__ == "__main__":
    main()
