"""Binomial counts on the logit scale, one nugget per site integrated out, imperfect tests allowed.

For the rows ``i`` of one site, with linear predictors ``eta_i``,

    L(eta) = integral of prod_i Binomial(y_i | n_i, p_i(eta_i + z)) N(z; 0, nugget_sd^2) dz,
    p_i(t) = Se_i expit(t) + (1 - Sp_i) (1 - expit(t)).

The integral is taken by the trapezoid rule on nodes placed around the mode of its integrand, as wide as the
integrand is and as fine as its curvature asks: for an integrand analytic in a strip the error falls
exponentially with the step (Trefethen & Weideman 2014, SIAM Review 56:385-458, theorem 5.1). Derivatives in
``eta`` are cumulants of the scores under the conditional density of ``z``, so value, gradient, curvature and
third derivatives share one rule.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.special import gammaln

from prevmap.errors import FitError

_NEWTON_STEPS = 100
_STEP_IN_SCALES = 0.5  # error exp(-2 pi^2 / 0.5^2) for a Gaussian integrand
_LONGEST_STEP = 0.45  # error exp(-pi^2 / 0.45) = 3e-10 where counts of 0 cut a wide nugget off like exp(-e^z)
_DROP = 32.0  # log of what is left out at both ends: 1e-14
_MOST_NODES = 400


@dataclass(frozen=True, slots=True)
class Observations:
    """Pooled survey rows, ordered so that the rows of one site are neighbours.

    Attributes
    ----------
    examined, positive : (n_rows,) float
        Counts, ``0 <= positive <= examined``.
    site_start : (n_sites + 1,) int
        Row where each site starts; the last entry is ``n_rows``.
    sensitivity, specificity : (n_rows,) float
        Accuracy of the test behind each row; both 1 for a perfect test.
    """

    examined: NDArray[np.float64]
    positive: NDArray[np.float64]
    site_start: NDArray[np.int64]
    sensitivity: NDArray[np.float64]
    specificity: NDArray[np.float64]

    @property
    def block_start(self) -> NDArray[np.int64]:
        """(n_sites + 1,) int: where each site's curvature block starts in the flat array of blocks."""
        size = np.diff(self.site_start)
        return np.concatenate([[0], np.cumsum(size * size)]).astype(np.int64)

    @property
    def perfect(self) -> bool:
        """Whether every row comes from a test without error, so that the likelihood is log-concave."""
        return bool(np.all(self.sensitivity == 1.0) and np.all(self.specificity == 1.0))

    @property
    def log_constant(self) -> float:
        """Sum of log binomial coefficients of the pooled rows."""
        n, y = self.examined, self.positive
        return float(np.sum(gammaln(n + 1.0) - gammaln(y + 1.0) - gammaln(n - y + 1.0)))


def observations(
    examined: NDArray[np.float64],
    positive: NDArray[np.float64],
    site: NDArray[np.int64] | None = None,
    sensitivity: NDArray[np.float64] | float = 1.0,
    specificity: NDArray[np.float64] | float = 1.0,
) -> Observations:
    """Check and freeze the rows of a survey.

    Parameters
    ----------
    examined, positive : (n_rows,) float
    site : (n_rows,) int, optional
        Site of each row, non-decreasing; every row is its own site where it is left out.
    sensitivity, specificity : float or (n_rows,) float

    Raises
    ------
    ValueError
        Where counts are impossible, sites are not in order, or a test tells nothing (Se + Sp <= 1).
    """
    n = np.ascontiguousarray(examined, dtype=float)
    y = np.ascontiguousarray(positive, dtype=float)
    if n.ndim != 1 or y.shape != n.shape:
        raise ValueError(f"examined {n.shape} and positive {y.shape} must be two equally long vectors")
    if not (np.all(n > 0) and np.all((y >= 0) & (y <= n))):
        bad = np.flatnonzero(~((n > 0) & (y >= 0) & (y <= n)))[:5]
        raise ValueError(
            f"counts must satisfy 0 <= positive <= examined and examined > 0; rows {bad.tolist()}"
        )
    code = np.arange(n.size) if site is None else np.asarray(site)
    if np.any(np.diff(code) < 0):
        raise ValueError("rows must be ordered by site")
    start = np.concatenate([[0], np.flatnonzero(np.diff(code)) + 1, [n.size]]).astype(np.int64)
    se = np.ascontiguousarray(np.broadcast_to(np.asarray(sensitivity, dtype=float), n.shape))
    sp = np.ascontiguousarray(np.broadcast_to(np.asarray(specificity, dtype=float), n.shape))
    if np.any(se + sp <= 1.0):
        raise ValueError("a test with sensitivity + specificity <= 1 carries no information on prevalence")
    return Observations(n, y, start, se, sp)


@njit(cache=True)
def _row_terms(eta, n, y, se, sp):  # type: ignore[no-untyped-def]
    """Log likelihood of one row without its binomial coefficient, and its first three derivatives."""
    if eta >= 0:
        e = np.exp(-eta)
        p = 1.0 / (1.0 + e)
        q = e / (1.0 + e)
        log_p = -np.log1p(e)
        log_q = log_p - eta
    else:
        e = np.exp(eta)
        p = e / (1.0 + e)
        q = 1.0 / (1.0 + e)
        log_q = -np.log1p(e)
        log_p = log_q + eta
    v = p * q
    if se == 1.0 and sp == 1.0:
        return y * log_p + (n - y) * log_q, y - n * p, -n * v, -n * v * (q - p)
    j = se + sp - 1.0
    positive = se * p + (1.0 - sp) * q
    negative = (1.0 - se) * p + sp * q
    d1 = j * v
    d2 = d1 * (q - p)
    d3 = d1 * (1.0 - 6.0 * v)
    value = 0.0
    a1 = 0.0
    a2 = 0.0
    a3 = 0.0
    if y > 0:
        value += y * np.log(positive)
        a1 += y / positive
        a2 -= y / positive**2
        a3 += 2.0 * y / positive**3
    if n > y:
        value += (n - y) * np.log(negative)
        a1 -= (n - y) / negative
        a2 -= (n - y) / negative**2
        a3 -= 2.0 * (n - y) / negative**3
    return value, a1 * d1, a2 * d1 * d1 + a1 * d2, a3 * d1**3 + 3.0 * a2 * d1 * d2 + a1 * d3


@njit(cache=True)
def _nugget_mode(eta, n, y, se, sp, lo, hi, nugget_sd, steps):  # type: ignore[no-untyped-def]
    """Mode and scale of the integrand over one site's nugget; scale is negative where no mode was found."""
    inv = 1.0 / (nugget_sd * nugget_sd)
    z = 0.0
    f = 0.0
    for i in range(lo, hi):
        f += _row_terms(eta[i], n[i], y[i], se[i], sp[i])[0]
    if se[lo] < 1.0 or sp[lo] < 1.0:
        # An imperfect test is flat far from the data, where Newton's method would stay: try the data's own place.
        share = (y[lo] / n[lo] + sp[lo] - 1.0) / (se[lo] + sp[lo] - 1.0)
        share = min(max(share, 0.5 / n[lo]), 1.0 - 0.5 / n[lo])
        other = np.log(share / (1.0 - share)) - eta[lo]
        g = -0.5 * other * other * inv
        for i in range(lo, hi):
            g += _row_terms(eta[i] + other, n[i], y[i], se[i], sp[i])[0]
        if g > f:
            z = other
            f = g
    for _ in range(steps):
        g = -z * inv
        h = inv
        for i in range(lo, hi):
            _, l1, l2, _ = _row_terms(eta[i] + z, n[i], y[i], se[i], sp[i])
            g += l1
            h -= l2
        curved = h if h > inv else inv
        step = g / curved
        if abs(g * step) < 1e-18 or abs(step) < 1e-14 * (1.0 + abs(z)):
            if h <= 0.0:
                return z, -1.0
            return z, 1.0 / np.sqrt(h)
        for _half in range(40):
            trial = z + step
            ft = -0.5 * trial * trial * inv
            for i in range(lo, hi):
                ft += _row_terms(eta[i] + trial, n[i], y[i], se[i], sp[i])[0]
            if ft >= f - 1e-12 * (1.0 + abs(f)):
                break
            step *= 0.5
        z = trial
        f = ft
    return z, -1.0


@njit(cache=True)
def _nodes(eta, n, y, se, sp, lo, hi, nugget_sd):  # type: ignore[no-untyped-def]
    """First node, step and number of nodes of the rule for one site; a step of -1 where there is no mode."""
    mode, scale = _nugget_mode(eta, n, y, se, sp, lo, hi, nugget_sd, _NEWTON_STEPS)
    if scale < 0.0:
        return mode, -1.0, 0
    top = -0.5 * (mode / nugget_sd) ** 2
    for i in range(lo, hi):
        top += _row_terms(eta[i] + mode, n[i], y[i], se[i], sp[i])[0]
    ends = np.empty(2)
    for side in range(2):
        reach = 6.0 * scale
        for _ in range(60):
            z = mode + (reach if side == 1 else -reach)
            value = -0.5 * (z / nugget_sd) ** 2
            for i in range(lo, hi):
                value += _row_terms(eta[i] + z, n[i], y[i], se[i], sp[i])[0]
            if value < top - _DROP:
                break
            reach *= 1.3
        ends[side] = reach
    step = min(_STEP_IN_SCALES * scale, _LONGEST_STEP)
    count = min(int(np.ceil((ends[0] + ends[1]) / step)) + 1, _MOST_NODES)
    return mode - ends[0], (ends[0] + ends[1]) / (count - 1), count


@njit(cache=True)
def _first(eta, n, y, se, sp, start, block, nugget_sd, gradient, curvature):  # type: ignore[no-untyped-def]
    """Fill gradient and flat curvature blocks; return the log likelihood (NaN where quadrature failed)."""
    total = 0.0
    largest = 0
    for s in range(start.size - 1):
        largest = max(largest, start[s + 1] - start[s])
    a = np.empty((_MOST_NODES, largest))
    b = np.empty(largest)
    lw = np.empty(_MOST_NODES)
    for s in range(start.size - 1):
        lo = start[s]
        hi = start[s + 1]
        k = hi - lo
        at = block[s]
        if nugget_sd <= 0.0:
            for i in range(k):
                for j in range(k):
                    curvature[at + i * k + j] = 0.0
                value, l1, l2, _ = _row_terms(eta[lo + i], n[lo + i], y[lo + i], se[lo + i], sp[lo + i])
                total += value
                gradient[lo + i] = l1
                curvature[at + i * k + i] = -l2
            continue
        origin, step, count = _nodes(eta, n, y, se, sp, lo, hi, nugget_sd)
        if step < 0.0:
            return np.nan
        top = -np.inf
        for q in range(count):
            z = origin + q * step
            lw[q] = -0.5 * (z / nugget_sd) ** 2
            for i in range(k):
                value, l1, _, _ = _row_terms(eta[lo + i] + z, n[lo + i], y[lo + i], se[lo + i], sp[lo + i])
                lw[q] += value
                a[q, i] = l1
            top = max(top, lw[q])
        mass = 0.0
        for q in range(count):
            lw[q] = np.exp(lw[q] - top)
            mass += lw[q]
        total += top + np.log(mass * step / nugget_sd) - 0.5 * np.log(2.0 * np.pi)
        for i in range(k):
            gradient[lo + i] = 0.0
            b[i] = 0.0
            for j in range(k):
                curvature[at + i * k + j] = 0.0
        for q in range(count):
            w = lw[q] / mass
            lw[q] = w
            z = origin + q * step
            for i in range(k):
                gradient[lo + i] += w * a[q, i]
                b[i] += w * _row_terms(eta[lo + i] + z, n[lo + i], y[lo + i], se[lo + i], sp[lo + i])[2]
        for q in range(count):
            for i in range(k):
                ci = lw[q] * (a[q, i] - gradient[lo + i])
                for j in range(k):
                    curvature[at + i * k + j] -= ci * (a[q, j] - gradient[lo + j])
        for i in range(k):
            curvature[at + i * k + i] -= b[i]
    return total


@njit(cache=True)
def _second(eta, n, y, se, sp, start, block, nugget_sd, cov, third, nugget_score):  # type: ignore[no-untyped-def]
    """Third derivatives contracted with the covariance blocks, and derivatives in log nugget_sd.

    Returns the derivative of the log likelihood in log nugget_sd and of its Hessian, contracted with ``cov``.
    """
    largest = 0
    for s in range(start.size - 1):
        largest = max(largest, start[s + 1] - start[s])
    a = np.empty((_MOST_NODES, largest))
    b = np.empty((_MOST_NODES, largest))
    c = np.empty((_MOST_NODES, largest))
    mean_a = np.empty(largest)
    mean_b = np.empty(largest)
    ca = np.empty(largest)
    lw = np.empty(_MOST_NODES)
    d_value = 0.0
    d_hessian = 0.0
    for s in range(start.size - 1):
        lo = start[s]
        hi = start[s + 1]
        k = hi - lo
        at = block[s]
        if nugget_sd <= 0.0:
            for i in range(k):
                _, _, _, l3 = _row_terms(eta[lo + i], n[lo + i], y[lo + i], se[lo + i], sp[lo + i])
                third[lo + i] = cov[at + i * k + i] * l3
                nugget_score[lo + i] = 0.0
            continue
        origin, step, count = _nodes(eta, n, y, se, sp, lo, hi, nugget_sd)
        top = -np.inf
        for q in range(count):
            z = origin + q * step
            lw[q] = -0.5 * (z / nugget_sd) ** 2
            for i in range(k):
                value, a[q, i], b[q, i], c[q, i] = _row_terms(
                    eta[lo + i] + z, n[lo + i], y[lo + i], se[lo + i], sp[lo + i]
                )
                lw[q] += value
            top = max(top, lw[q])
        mass = 0.0
        for q in range(count):
            lw[q] = np.exp(lw[q] - top)
            mass += lw[q]
        mean_r = 0.0
        for i in range(k):
            mean_a[i] = 0.0
            mean_b[i] = 0.0
            third[lo + i] = 0.0
            nugget_score[lo + i] = 0.0
        for q in range(count):
            lw[q] /= mass
            z = origin + q * step
            mean_r += lw[q] * ((z / nugget_sd) ** 2 - 1.0)
            for i in range(k):
                mean_a[i] += lw[q] * a[q, i]
                mean_b[i] += lw[q] * b[q, i]
                third[lo + i] += lw[q] * cov[at + i * k + i] * c[q, i]
        d_value += mean_r
        for q in range(count):
            w = lw[q]
            z = origin + q * step
            r = (z / nugget_sd) ** 2 - 1.0 - mean_r
            quadratic = 0.0
            weighted_b = 0.0
            for i in range(k):
                ca[i] = 0.0
                for j in range(k):
                    ca[i] += cov[at + i * k + j] * (a[q, j] - mean_a[j])
                quadratic += ca[i] * (a[q, i] - mean_a[i])
                weighted_b += cov[at + i * k + i] * (b[q, i] - mean_b[i])
            d_hessian += w * r * (quadratic + weighted_b)
            for i in range(k):
                da = a[q, i] - mean_a[i]
                third[lo + i] += w * (2.0 * (b[q, i] - mean_b[i]) * ca[i] + da * (weighted_b + quadratic))
                nugget_score[lo + i] += w * da * r
    return d_value, d_hessian


@dataclass(frozen=True, slots=True)
class Terms:
    """Log likelihood with its first two derivatives in the linear predictor.

    Attributes
    ----------
    value : float
        Binomial coefficients included.
    gradient : (n_rows,) float
    curvature : (sum of squared block sizes,) float
        Minus the Hessian, block by block, each block row by row.
    """

    value: float
    gradient: NDArray[np.float64]
    curvature: NDArray[np.float64]


def evaluate(data: Observations, eta: NDArray[np.float64], nugget_sd: float) -> Terms:
    """Log likelihood, gradient and curvature at a linear predictor.

    Parameters
    ----------
    data : Observations
    eta : (n_rows,) float, logit scale
    nugget_sd : float
        Standard deviation of the nugget on the logit scale; 0 leaves it out.

    Raises
    ------
    FitError
        Where a site's nugget integral has no usable mode (only possible with an imperfect test).
    """
    gradient = np.empty_like(eta)
    block = data.block_start
    curvature = np.empty(block[-1])
    value = _first(
        eta, data.examined, data.positive, data.sensitivity, data.specificity, data.site_start, block,
        float(nugget_sd), gradient, curvature,
    )  # fmt: skip
    if not np.isfinite(value):
        raise FitError(
            "the likelihood of at least one site could not be evaluated: its nugget integral has no mode "
            f"(nugget sd {nugget_sd:.4g}, linear predictor between {np.min(eta):.4g} and {np.max(eta):.4g})"
        )
    return Terms(value + data.log_constant, gradient, curvature)


@dataclass(frozen=True, slots=True)
class HigherTerms:
    """What the gradient of the Laplace log-evidence needs beyond the curvature.

    Attributes
    ----------
    third : (n_rows,) float
        ``sum_jk (d^3 log L / d eta_i d eta_j d eta_k) cov_jk``.
    nugget_value, nugget_hessian : float
        Derivatives in log nugget_sd of log L, and of its Hessian contracted with ``cov``.
    nugget_gradient : (n_rows,) float
        Derivative in log nugget_sd of the gradient.
    """

    third: NDArray[np.float64]
    nugget_value: float
    nugget_hessian: float
    nugget_gradient: NDArray[np.float64]


def higher_terms(
    data: Observations, eta: NDArray[np.float64], nugget_sd: float, covariance: NDArray[np.float64]
) -> HigherTerms:
    """Third derivatives contracted with covariance blocks, and derivatives in log nugget_sd.

    Parameters
    ----------
    data : Observations
    eta : (n_rows,) float, logit scale
    nugget_sd : float
    covariance : (sum of squared block sizes,) float
        Covariance of the linear predictor within each site, laid out as `Terms.curvature`.
    """
    third = np.empty_like(eta)
    score = np.empty_like(eta)
    d_value, d_hessian = _second(
        eta, data.examined, data.positive, data.sensitivity, data.specificity, data.site_start,
        data.block_start, float(nugget_sd), covariance, third, score,
    )  # fmt: skip
    return HigherTerms(third, d_value, d_hessian, score)
