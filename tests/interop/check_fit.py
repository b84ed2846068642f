#!/usr/bin/env python3
"""Fits the same files with `peakfold fit` and with iminuit 2.33.0, and compares values and errors.

usage: check_fit.py PROGRAM [RUN], the second for the sake of a common call

The likelihoods are written here from their definitions (normalised in the window; extended with a background; Poisson or
chi-square for a histogram), with NumPy and SciPy, and share nothing with the program. Values must agree to 1e-3 of the
errors and errors to 2 % (tol 1e-3, strategy 2, final HESSE without limits). Exit status 1 if one does not.
"""
import json
import os
import subprocess
import sys
import tempfile

import iminuit
import numpy as np
from iminuit import Minuit
from scipy.special import erf, voigt_profile

assert iminuit.__version__ == "2.33.0", iminuit.__version__


def dscb_parts(sigma, al, nl, ah, nh):
    """Areas of low tail, core below, core above and high tail of the shape with peak 1."""
    tail = lambda a, n: n / a / (n - 1) * np.exp(-0.5 * a * a)
    core = lambda a: np.sqrt(np.pi / 2) * erf(a / np.sqrt(2))
    return sigma * np.array([tail(al, nl), core(al), core(ah), tail(ah, nh)])


def dscb_raw(x, mu, sigma, al, nl, ah, nh):
    t = (x - mu) / sigma
    with np.errstate(all="ignore"):
        low = np.exp(-0.5 * al * al) * (1 - al / nl * (al + t)) ** -nl
        high = np.exp(-0.5 * ah * ah) * (1 - ah / nh * (ah - t)) ** -nh
    return np.where(np.real(t + al) < 0, low, np.where(np.real(t - ah) > 0, high, np.exp(-0.5 * t * t)))


def dscb_below(x, mu, sigma, al, nl, ah, nh):
    """Integral of the shape with peak 1 up to x."""
    t = (np.asarray(x) - mu) / sigma
    low, below, above, high = dscb_parts(sigma, al, nl, ah, nh)
    tail = lambda t, a, n: sigma * np.exp(-0.5 * a * a) * n / a / (n - 1) * (1 + a / n * (t - a)) ** (1 - n)
    with np.errstate(all="ignore"):
        in_low, in_high = tail(-t, al, nl), low + below + above + high - tail(t, ah, nh)
    core = low + below + sigma * np.sqrt(np.pi / 2) * erf(t / np.sqrt(2))
    return np.where(np.real(t + al) < 0, in_low, np.where(np.real(t - ah) > 0, in_high, core))


def sample_dscb(random, n, mu, sigma, al, nl, ah, nh):
    """By inversion on a fine table."""
    grid = mu + sigma * np.concatenate([-np.geomspace(60, 6, 4000), np.linspace(-6, 6, 40001)[1:-1], np.geomspace(6, 60, 4000)])
    below = dscb_below(grid, mu, sigma, al, nl, ah, nh)
    return np.interp(random.uniform(below[0], below[-1], n), below, grid)


class Case:
    def __init__(self, label, header, rows, options, names, start, limits, cost, correct=None, analytic=True):
        self.label, self.header, self.rows, self.options = label, header, rows, options
        self.names, self.start, self.limits, self.cost, self.correct, self.analytic = names, start, limits, cost, correct, analytic


def cases():
    random = np.random.default_rng(11)
    tails = ["alpha_low", "n_low", "alpha_high", "n_high"]
    tail_start, tail_limits = [1.4, 3.5, 1.8, 6.0], [(0.1, 5), (1.01, 100), (0.1, 5), (1.01, 100)]
    truth = (180.0, 1.6, 1.6, 4.0, 2.0, 8.0)

    x = sample_dscb(random, 60000, *truth)
    whole = lambda m, s, *t: -np.sum(np.log(dscb_raw(x, m, s, *t))) + x.size * np.log(dscb_parts(s, *t).sum())
    yield Case("double-sided Crystal Ball", "mass_gev", x[:, None], "--resolution double-crystal-ball",
               ["mass", "sigma"] + tails, [179.8, 1.7] + tail_start, [None, (0.1, 20)] + tail_limits, whole)

    y = x[(x > 172) & (x < 190)]
    inside = lambda m, s, *t: dscb_below(190.0, m, s, *t) - dscb_below(172.0, m, s, *t)
    window = lambda m, s, a, n, b: (-np.sum(np.log(dscb_raw(y, m, s, a, n, b, 8.0)))
                                    + y.size * np.log(inside(m, s, a, n, b, 8.0)))
    yield Case("the same in a window, n_high fixed", "mass_gev", x[:, None],
               "--resolution double-crystal-ball --from 172 --to 190 --fix n_high=8", ["mass", "sigma"] + tails[:3],
               [179.8, 1.7] + tail_start[:3], [None, (0.1, 20)] + tail_limits[:3], window)

    # Weights: the sandwich with derivatives by differences of the cost of single masses.
    w = random.uniform(0.3, 1.7, x.size)
    one = lambda p: -np.log(dscb_raw(x, *p)) + np.log(dscb_parts(*p[1:]).sum())
    weighted = lambda *p: np.sum(w * one(p))

    def sandwich(fitted):
        names = ["mass", "sigma"] + tails
        p = np.array([fitted[k][0] for k in names])
        h = np.array([1e-4 * (1 if k == "mass" else v) for k, v in zip(names, p)])
        step = lambda k, f: p + f * h * (np.arange(p.size) == k)
        g = np.array([(one(step(k, 1)) - one(step(k, -1))) / (2 * h[k]) for k in range(p.size)])
        inverse = fitted["covariance"]
        return np.sqrt(np.diag(inverse @ ((w * w * g) @ g.T) @ inverse))
    yield Case("with weights", "mass_gev,weight", np.c_[x, w], "--resolution double-crystal-ball", ["mass", "sigma"] + tails,
               [179.8, 1.7] + tail_start, [None, (0.1, 20)] + tail_limits, weighted, sandwich)

    # Breit-Wigner with a Gaussian and an exponential background.
    b = 70 + random.exponential(25.0, 20000)
    z = np.concatenate([91 + 1.25 * random.standard_cauchy(20000) + random.normal(0, 1.7, 20000), b])
    z = z[(z >= 70) & (z <= 110)]
    nodes, node_weights = np.polynomial.legendre.leggauss(400)
    nodes, node_weights = 90 + 20 * nodes, 20 * node_weights

    def extended(m, s, signal, background, slope):
        area = np.sum(node_weights * voigt_profile(nodes - m, s, 1.25))
        fall = np.exp(-slope * (z - 90)) * slope / (2 * np.sinh(20 * slope))
        return signal + background - np.sum(np.log(signal * voigt_profile(z - m, s, 1.25) / area + background * fall))
    yield Case("Breit-Wigner, Gaussian, exponential", "mass_gev", z[:, None],
               "--natural breit-wigner --width 2.5 --resolution gaussian --from 70 --to 110 --background exponential",
               ["mass", "sigma", "signal_yield", "background_yield", "background_slope"], [90.8, 1.5, 18000.0, 15000.0, 0.03],
               [None, (0.1, 10), (0, None), (0, None), (1e-6, 1)], extended, analytic=False)

    # Histograms of the same: a straight line below a double-sided Crystal Ball.
    flat = 165 + 30 * np.concatenate([np.sqrt(random.uniform(0, 1, 5000)), random.uniform(0, 1, 4000)])
    edges = np.linspace(165, 195, 61)
    counts = np.histogram(np.concatenate([x[:20000], flat]), edges)[0]
    u = (edges - 165) / 30
    parts = np.diff(np.array([2 * u - u * u, u * u]))
    fixed = (1.6, 4.0, 2.0, 8.0)

    def expected(m, s, signal, b0, b1):
        below = dscb_below(edges, m, s, *fixed)
        return signal * np.diff(below) / (below[-1] - below[0]) + b0 * parts[0] + b1 * parts[1]
    poisson = lambda *p: np.sum(expected(*p) - counts * np.log(expected(*p)))
    names = ["mass", "sigma", "signal_yield", "background_0", "background_1"]
    start, limits = [180.0, 1.6, 20000.0, 3000.0, 5000.0], [None, (0.1, 10), (0, None), (0, None), (0, None)]
    options = ("--resolution double-crystal-ball --from 165 --to 195 --background polynomial --degree 1 "
               "--fix alpha_low=1.6,n_low=4,alpha_high=2,n_high=8")
    yield Case("histogram, Poisson", "low_gev,high_gev,count", np.c_[edges[:-1], edges[1:], counts], options, names, start,
               limits, poisson)
    errors = np.sqrt(counts + 1.0)
    square = lambda *p: 0.5 * np.sum(((expected(*p) - counts) / errors) ** 2)
    yield Case("histogram, errors", "low_gev,high_gev,count,error", np.c_[edges[:-1], edges[1:], counts, errors], options,
               names, start, limits, square)


def complex_step(cost):
    """Gradient to full precision: Minuit's own differences stumble over the joins of core and tail."""
    def gradient(*p):
        step = 1e-30
        return np.array([np.imag(cost(*[v + 1j * step * (i == k) for i, v in enumerate(p)])) / step for k in range(len(p))])
    return gradient


def iminuit_with_covariance(case):
    m = Minuit(case.cost, *case.start, name=case.names, grad=complex_step(case.cost) if case.analytic else None)
    m.errordef, m.strategy, m.tol = Minuit.LIKELIHOOD, 2, 1e-3
    for name, limit in zip(case.names, case.limits):
        m.limits[name] = limit
    # One call stops at an estimated distance of 1e-6, 1.4e-3 errors away; further calls go on from there.
    for _ in range(4):
        m.migrad(ncall=100000)
    for name in case.names:
        m.limits[name] = None
    m.hesse()
    assert m.valid, m
    fitted = {k: (m.values[k], m.errors[k]) for k in case.names}
    fitted["covariance"] = np.array(m.covariance)
    if case.correct:
        corrected = case.correct(fitted)
        for k, error in zip(case.names, corrected):
            fitted[k] = (fitted[k][0], error)
    return fitted


def main():
    if len(sys.argv) not in (2, 3):
        sys.exit(__doc__)
    program = os.path.abspath(sys.argv[1])
    worst = 0
    with tempfile.TemporaryDirectory() as scratch:
        for case in cases():
            path = os.path.join(scratch, "data.csv")
            np.savetxt(path, case.rows, delimiter=",", fmt="%.17g", header=case.header, comments="")
            run = subprocess.run([program, "fit", path, "--json", *case.options.split()], check=True, capture_output=True, text=True)
            ours = json.loads(run.stdout)["parameters"]
            theirs = iminuit_with_covariance(case)
            free = sorted(k for k, v in ours.items() if v["free"])
            assert free == sorted(case.names), (free, case.names)
            at = lambda values: case.cost(*(values(name) for name in case.names))
            lower = at(lambda name: theirs[name][0]) - at(lambda name: ours[name]["value"])
            print(f"{case.label}: -ln L {lower:+.1e} lower with the program's values")
            for name in case.names:
                value, error = theirs[name]
                shift = (ours[name]["value"] - value) / error
                ratio = ours[name]["error"] / error - 1
                good = abs(shift) < 1e-3 and abs(ratio) < 2e-2
                worst += not good
                print(f"  {name:<18}{value:>14.6f} +- {error:<11.6f} difference {shift:+.1e} errors, errors {ratio:+.1e}"
                      + ("" if good else "   DISAGREES"))
    sys.exit(1 if worst else 0)


if __name__ == "__main__":
    main()
