#!/usr/bin/env python3
"""The method of peakfold's engine in NumPy: scrambled Sobol points, the last leg exactly. One thread.

The scenario is that of the smearing baseline: two photons at 180 GeV, Gaussian responses. Prints one JSON line with the
CPU time and the error of the template (RMS over bins of the standard error over 16 scramblings, relative to the
highest bin).

usage: numpy_last_leg.py [--points 8192]
"""
import argparse
import json
import time

import numpy as np
from scipy.special import ndtr, ndtri
from scipy.stats import qmc

M, PT_MEAN, SIG_Y = 180.0, 40.0, 1.2
EDGES = np.linspace(150.0, 210.0, 201)
ETA_SPLIT, ETA_MAX, CUT1, CUT2 = 1.4, 2.5, 0.35, 0.25
TERMS = np.array([[0.095, 0.25, 0.007], [0.12, 0.40, 0.011]])
ANGLE, RADIUS, RIGHT, GOOD, BAD = 1e-3, 1500.0, 0.8, 0.1, 45.0


def cumulative(u):
    """Accepted probability below each edge, summed over points, and the accepted total."""
    c = 2 * u[:, 0] - 1
    s = np.sqrt(1 - c * c)
    y = SIG_Y * ndtri(u[:, 1])
    phi = 2 * np.pi * u[:, 4]
    pt = -PT_MEAN * np.log(u[:, 5])
    gamma, beta_gamma = np.sqrt(M * M + pt * pt) / M, pt / M
    wrong = u[:, 3] >= RIGHT
    dz = np.where(wrong, BAD, GOOD) * ndtri(u[:, 6])
    legs = []
    for k, sign in enumerate((1.0, -1.0)):
        e0 = 0.5 * M
        e1 = e0 * (gamma + sign * beta_gamma * s * np.cos(phi))
        px = e0 * (beta_gamma + sign * gamma * s * np.cos(phi))
        py = e0 * sign * s * np.sin(phi)
        pz0 = e0 * sign * c
        e, pz = e1 * np.cosh(y) + pz0 * np.sinh(y), pz0 * np.cosh(y) + e1 * np.sinh(y)
        theta, azimuth = np.arctan2(np.hypot(px, py), pz), np.arctan2(py, px)
        eta = np.arcsinh(1 / np.tan(theta))
        a, b, n = TERMS[(np.abs(eta) >= ETA_SPLIT).astype(int)].T
        sigma = np.sqrt(a * a / e + (b / e) ** 2 + n * n)
        cot = 1 / np.tan(theta + ANGLE * ndtri(u[:, 7 + 2 * k])) + dz / RADIUS
        legs.append((e, sigma, cot, azimuth + ANGLE * ndtri(u[:, 8 + 2 * k])))
    (ea, sa, ca, fa), (eb, sb, cb, fb) = legs
    ok = (np.abs(ca) < np.sinh(ETA_MAX)) & (np.abs(cb) < np.sinh(ETA_MAX))
    last_is_b = sb > sa
    pick = lambda x, y: np.where(last_is_b, x, y)[ok]
    e1, s1, c1 = pick(ea, eb), pick(sa, sb), pick(ca, cb)
    e2, s2, c2 = pick(eb, ea), pick(sb, sa), pick(cb, ca)
    other = e1 * (1 + s1 * ndtri(u[ok, 2]))
    sin1, sin2 = 1 / np.sqrt(1 + c1 * c1), 1 / np.sqrt(1 + c2 * c2)
    k = 2 * other * (1 - sin1 * sin2 * (np.cos((fa - fb)[ok]) + c1 * c2))      # m^2 = k E
    pt1 = other * sin1
    # Limits of E from the cuts: the harder leg above CUT1 m, the softer above CUT2 m.
    low = CUT2 ** 2 * k / sin2 ** 2
    high = (pt1 / CUT2) ** 2 / k
    both = np.maximum(low, np.where((pt1 / CUT1) ** 2 / k > CUT1 ** 2 * k / sin2 ** 2, 0, CUT1 ** 2 * k / sin2 ** 2))
    value = lambda e: (e / e2 - 1) / s2
    t = np.clip((np.outer(EDGES ** 2, 1 / k) / e2 - 1) / s2, value(both), np.maximum(value(high), value(both)))
    below = ndtr(t) - ndtr(value(both))
    return below.sum(axis=1), np.maximum(ndtr(value(high)) - ndtr(value(both)), 0).sum()


def template(points, seed):
    rows = []
    for r in range(16):
        sampler = qmc.Sobol(11, seed=seed + r)
        total, accepted, done = np.zeros(EDGES.size), 0.0, 0
        while done < points // 16:
            n = min(4096, points // 16 - done)
            a, b = cumulative(np.clip(sampler.random(n), 1e-16, 1 - 1e-16))
            total, accepted, done = total + a, accepted + b, done + n
        rows.append(np.diff(total) / accepted)
    return np.array(rows)


if __name__ == "__main__":
    parser = argparse.ArgumentParser()
    parser.add_argument("--points", type=int, default=8192)
    arguments = parser.parse_args()
    template(1024, 1)
    best = min((lambda t0: (template(arguments.points, 100), time.process_time() - t0)[1])(time.process_time()) for _ in range(3))
    rows = template(arguments.points, 100)
    error = np.sqrt(np.mean(rows.var(axis=0, ddof=1) / 16)) / rows.mean(axis=0).max()
    print(json.dumps(dict(method="last leg in NumPy", points=arguments.points, cpu_s=best, precision=error)))
