"""From the logit scale to prevalence, under a stated setting of the nugget.

With linear predictor ``eta`` and nugget sd ``s``, the prevalence of a place is ``h(eta)``:

- "average": ``h(eta) = E expit(eta + s Z)``, the mean over settlements at that place;
- "omit": ``h(eta) = expit(eta)``, a typical settlement;
- "draw": one new settlement, ``expit(eta + s Z)``: ``h = expit`` with the nugget's variance added to eta's.

The posterior of ``eta`` is a mixture over hyperparameters; every summary of prevalence is the mixture's own,
found without Monte-Carlo error.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.special import expit, ndtri

NUGGET_SETTINGS = ("average", "omit", "draw")

_EDGE = 40.0  # expit(-40) = 4e-18: prevalence beyond is 0 or 1 in every use
_STEP = 0.02
_GRID = np.arange(-_EDGE, _EDGE + _STEP / 2, _STEP)
_COARSE = np.arange(0.0, _EDGE + 0.025, 0.05)
# Equally spaced nodes over a Gaussian converge exponentially (Trefethen & Weideman 2014, SIAM Review 56).
_Z = np.arange(-9.0, 9.0 + 0.075, 0.15)
_Z_WEIGHT = np.exp(-0.5 * _Z**2) / np.sum(np.exp(-0.5 * _Z**2))
_ETA = np.arange(-7.0, 7.0 + 0.125, 0.25)
_ETA_WEIGHT = np.exp(-0.5 * _ETA**2) / np.sum(np.exp(-0.5 * _ETA**2))
_NARROW = 1.5  # below this sd every second node is enough: the error is exp(-2 pi^2 / (0.5 sd)) = 4e-12


@dataclass(frozen=True, slots=True)
class Links:
    """Tables of ``logit h`` and its inverse for each component of the mixture.

    Attributes
    ----------
    forward : (n_components, n_grid) float
        logit h(eta) on an even grid of eta from -40 to 40.
    backward : (n_components, n_grid) float
        eta with logit h(eta) equal to the same even grid.
    added_variance : (n_components,) float
        Variance added to that of eta ("draw" only).
    """

    forward: NDArray[np.float64]
    backward: NDArray[np.float64]
    added_variance: NDArray[np.float64]


@njit(cache=True)
def _logit_average(eta, s, node, weight):  # type: ignore[no-untyped-def]
    """Logit of E expit(eta + s Z) for eta <= 0, accurate where prevalence is tiny."""
    out = np.empty(eta.size)
    for i in range(eta.size):
        # E expit(eta + s Z) = exp(eta) E[exp(s Z) / (1 + exp(eta + s Z))], free of cancellation.
        total = 0.0
        for q in range(node.size):
            total += weight[q] / (np.exp(-s * node[q]) + np.exp(eta[i]))
        out[i] = eta[i] + np.log(total) - np.log1p(-np.exp(eta[i]) * total)
    return out


def _average_table(s: float) -> NDArray[np.float64]:
    """Logit of the average over settlements on the grid: odd in eta, smooth, so a coarse table is splined."""
    half = _logit_average(-_COARSE, s, _Z, _Z_WEIGHT)
    return CubicSpline(
        np.concatenate([-_COARSE[::-1], _COARSE[1:]]), np.concatenate([half[::-1], -half[1:]])
    )(_GRID)


def links(nugget_sd: NDArray[np.float64], setting: str = "average") -> Links:
    """Tables for the nugget of each component.

    Parameters
    ----------
    nugget_sd : (n_components,) float, logit scale, 0 without a nugget
    setting : {"average", "omit", "draw"}

    Raises
    ------
    ValueError
        For any other setting.
    """
    if setting not in NUGGET_SETTINGS:
        raise ValueError(f"nugget setting {setting!r}: expected one of {', '.join(NUGGET_SETTINGS)}")
    s = np.asarray(nugget_sd, dtype=float)
    forward = np.tile(_GRID, (s.size, 1))
    backward = forward.copy()
    if setting == "average":
        for k in np.flatnonzero(s > 0):
            forward[k] = _average_table(float(s[k]))
            start = np.interp(_GRID, forward[k], _GRID)
            # One secant-like correction through the table's slope leaves an error of order step^4.
            slope = np.gradient(forward[k], _STEP)
            for _ in range(3):
                start -= (_interpolate(forward[k], start) - _GRID) / np.interp(start, _GRID, slope)
            backward[k] = start
    return Links(forward, backward, s**2 if setting == "draw" else np.zeros(s.size))


@njit(cache=True)
def _cubic(table, x):  # type: ignore[no-untyped-def]
    """Four-point Lagrange interpolation on the even grid, linear with slope 1 outside."""
    n = table.size
    t = (x + _EDGE) / _STEP
    if t <= 1.0:
        return table[1] + (t - 1.0) * _STEP
    if t >= n - 2.0:
        return table[n - 2] + (t - (n - 2.0)) * _STEP
    i = int(t)
    if i > n - 3:
        i = n - 3
    u = t - i
    a = table[i - 1]
    b = table[i]
    c = table[i + 1]
    d = table[i + 2]
    return (
        -a * u * (u - 1.0) * (u - 2.0) / 6.0
        + b * (u + 1.0) * (u - 1.0) * (u - 2.0) / 2.0
        - c * (u + 1.0) * u * (u - 2.0) / 2.0
        + d * (u + 1.0) * u * (u - 1.0) / 6.0
    )


@njit(cache=True)
def _interpolate(table, x):  # type: ignore[no-untyped-def]
    out = np.empty_like(x)
    for i in range(x.size):
        out[i] = _cubic(table, x[i])
    return out


@njit(cache=True)
def _expit(x):  # type: ignore[no-untyped-def]
    if x >= 0:
        return 1.0 / (1.0 + np.exp(-x))
    e = np.exp(x)
    return e / (1.0 + e)


@njit(cache=True)
def _apply(table, x):  # type: ignore[no-untyped-def]
    out = np.empty(x.shape)
    for i in range(x.shape[0]):
        for j in range(x.shape[1]):
            out[i, j] = _expit(_cubic(table, x[i, j]))
    return out


@njit(cache=True)
def _moments(mean, variance, weight, forward, node, node_weight):  # type: ignore[no-untyped-def]
    n = mean.shape[1]
    first = np.zeros(n)
    second = np.zeros(n)
    for k in range(weight.size):
        for i in range(n):
            s = np.sqrt(variance[k, i])
            p1 = 0.0
            p2 = 0.0
            stride = 2 if s < _NARROW else 1
            for q in range(0, node.size, stride):
                p = _expit(_cubic(forward[k], mean[k, i] + s * node[q]))
                p1 += node_weight[q] * p
                p2 += node_weight[q] * p * p
            first[i] += weight[k] * stride * p1
            second[i] += weight[k] * stride * p2
    return first, second


@njit(cache=True)
def _upper_tail(mean, variance, weight, cut):  # type: ignore[no-untyped-def]
    out = np.zeros(mean.shape[1])
    for k in range(weight.size):
        for i in range(out.size):
            s = np.sqrt(variance[k, i])
            if s > 0.0:
                out[i] += weight[k] * 0.5 * math.erfc((cut[k] - mean[k, i]) / (s * np.sqrt(2.0)))
            elif mean[k, i] > cut[k]:
                out[i] += weight[k]
    return out


@njit(cache=True)
def _quantile(mean, variance, weight, forward, backward, q, normal_quantile, tolerance):  # type: ignore[no-untyped-def]
    """Logit of the q-quantile of each column's mixture: Newton's method, kept inside a shrinking bracket."""
    out = np.empty(mean.shape[1])
    root_two = np.sqrt(2.0)
    for i in range(out.size):
        lo = np.inf
        hi = -np.inf
        first = 0.0
        second = 0.0
        for k in range(weight.size):
            s = np.sqrt(variance[k, i])
            # Nine standard deviations hold every quantile that can be asked for in double precision.
            lo = min(lo, _cubic(forward[k], mean[k, i] - 9.0 * s))
            hi = max(hi, _cubic(forward[k], mean[k, i] + 9.0 * s))
            first += weight[k] * mean[k, i]
            second += weight[k] * (mean[k, i] ** 2 + variance[k, i])
        x = first + normal_quantile * np.sqrt(max(second - first * first, 0.0))
        x = min(max(x, lo), hi)
        while hi - lo > tolerance:
            below = 0.0
            density = 0.0
            for k in range(weight.size):
                s = np.sqrt(variance[k, i])
                g = _cubic(backward[k], x)
                if s > 0.0:
                    z = (g - mean[k, i]) / s
                    below += weight[k] * 0.5 * math.erfc(-z / root_two)
                    density += weight[k] * np.exp(-0.5 * z * z) / s
                elif g >= mean[k, i]:
                    below += weight[k]
            if below < q:
                lo = x
            else:
                hi = x
            # The slope of the inverse table is left out: it is close to 1, and the bracket catches the rest.
            step = (q - below) * np.sqrt(2.0 * np.pi) / density if density > 0.0 else np.inf
            if abs(step) < 0.25 * tolerance:
                break
            x = x + step
            if not lo < x < hi:
                x = 0.5 * (lo + hi)
        out[i] = x
    return out


@dataclass(frozen=True, slots=True)
class Mixture:
    """Posterior of the linear predictor at ``n`` places: a Gaussian mixture, place by place.

    Attributes
    ----------
    mean, variance : (n_components, n) float, logit scale
        The variance includes what the nugget setting adds.
    weight : (n_components,) float, sums to 1
    links : Links
    """

    mean: NDArray[np.float64]
    variance: NDArray[np.float64]
    weight: NDArray[np.float64]
    links: Links


def prevalence_moments(mixture: Mixture) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean and standard deviation (n,) of prevalence."""
    first, second = _moments(
        mixture.mean, mixture.variance, mixture.weight, mixture.links.forward, _ETA, _ETA_WEIGHT
    )
    return first, np.sqrt(np.maximum(second - first**2, 0.0))


def exceedance(mixture: Mixture, threshold: float) -> NDArray[np.float64]:
    """P(prevalence > threshold), (n,)."""
    if threshold <= 0.0:
        return np.ones(mixture.mean.shape[1])
    if threshold >= 1.0:
        return np.zeros(mixture.mean.shape[1])
    logit = np.array([np.log(threshold) - np.log1p(-threshold)])
    cut = np.array([_interpolate(table, logit)[0] for table in mixture.links.backward])
    return _upper_tail(mixture.mean, mixture.variance, mixture.weight, cut)


def prevalence_quantile(mixture: Mixture, probability: float) -> NDArray[np.float64]:
    """Quantile (n,) of prevalence at one probability strictly between 0 and 1."""
    if not 0.0 < probability < 1.0:
        raise ValueError(f"probability {probability}: expected a number strictly between 0 and 1")
    tables = mixture.links
    logit = _quantile(
        mixture.mean, mixture.variance, mixture.weight, tables.forward, tables.backward,
        probability, float(ndtri(probability)), 1e-9,
    )  # fmt: skip
    return np.asarray(expit(logit))


def prevalence_of(table: NDArray[np.float64], eta: NDArray[np.float64]) -> NDArray[np.float64]:
    """Prevalence h(eta) for draws (n, count), through one component's forward table."""
    return _apply(table, eta)
