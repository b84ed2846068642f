"""Reference values of tests/model.rs, with SciPy and no code of the project: python tests/reference/shape_fit.py

A double-sided Crystal Ball and a Gaussian fitted to a sum of three Gaussians in bins (minimum of -sum p ln q, both
normalised on the axis), and the error of a fitted mass for one signal event over a flat background.
"""
import numpy as np
from scipy.optimize import minimize
from scipy.special import erf
from scipy.stats import norm

edges = np.linspace(115, 135, 101)


def area(a, n):
    return n / a / (n - 1) * np.exp(-a * a / 2) + np.sqrt(np.pi / 2) * erf(a / np.sqrt(2))


def beyond(t, a, n):
    def tail(t):
        return np.exp(-a * a / 2) * (n / a) / (n - 1) * (1 + (a / n) * (np.maximum(t, a) - a)) ** (1 - n)

    core = tail(np.array(a)) + np.sqrt(np.pi / 2) * (erf(a / np.sqrt(2)) - erf(np.minimum(t, a) / np.sqrt(2)))
    return np.where(t < a, core, tail(t))


def cdf(x, bias, sigma, al, nl, ah, nh):
    whole = area(al, nl) + area(ah, nh)
    d = (x - bias) / sigma
    return np.where(d < 0, beyond(np.maximum(-d, 0), al, nl) / whole, 1 - beyond(np.maximum(d, 0), ah, nh) / whole)


def minimum(bins, start):
    def loss(z):
        q = bins(z)
        return -(p * np.log(q / q.sum())).sum() if (q > 0).all() else 1e9

    z = np.array(start)
    for _ in range(6):
        options = dict(xatol=1e-11, fatol=1e-16, maxiter=20000, maxfev=20000)
        z = minimize(loss, z, method="Nelder-Mead", options=options).x
    return z


p = np.diff(0.6 * norm.cdf(edges, 125, 1.5) + 0.25 * norm.cdf(edges, 124.2, 2.5) + 0.15 * norm.cdf(edges, 122, 5))
p /= p.sum()


def values(z):
    return z[0], np.exp(z[1]), np.exp(z[2]), 1 + np.exp(z[3]), np.exp(z[4]), 1 + np.exp(z[5])


z = minimum(lambda z: np.diff(cdf(edges, *values(z))), [125, 0.4, 0.3, 1.0, 0.5, 1.5])
q = np.diff(cdf(edges, *values(z)))
q /= q.sum()
print("bias, sigma, alpha_low, n_low, alpha_high, n_high:", *values(z))
print("divergence:", (p * np.log(p / q)).sum(), "largest |dCDF|:", abs(np.cumsum(q - p)).max())
z = minimum(lambda z: np.diff(norm.cdf(edges, z[0], np.exp(z[1]))), [125, 0.5])
print("Gaussian:", z[0], np.exp(z[1]))

mass, relative = 125.0, 0.0128


def shape(mass):
    q = np.diff(norm.cdf(edges, mass, relative * mass))
    return q / q.sum()


# As many background events as signal within 2 sigma.
inside = norm.cdf(2) - norm.cdf(-2)
background = inside / (4 * relative * mass) * (edges[-1] - edges[0])
flat = np.full(100, 0.01)
by_mass = (shape(mass + 1e-4) - shape(mass - 1e-4)) / 2e-4
gradient = np.array([by_mass, shape(mass), flat])
information = (gradient / (shape(mass) + background * flat)) @ gradient.T
print("error of the mass for one event, GeV:", np.sqrt(np.linalg.inv(information)[0, 0]))
