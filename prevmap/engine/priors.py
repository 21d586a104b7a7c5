"""Penalised-complexity priors of the field's range and of standard deviations, in their logarithms."""

from __future__ import annotations

import math

import numpy as np

from prevmap.errors import InputError


def pc_range(log_range: float, rho0: float, alpha: float) -> tuple[float, float]:
    """Log density of log range under the prior with P(range < rho0) = alpha, in the plane.

    Parameters
    ----------
    log_range : float
        Natural logarithm of the range (in the unit of `rho0`, km).
    rho0 : float, km
        A range that is unlikely to be undercut.
    alpha : float in (0, 1)
        The probability that it is.

    Returns
    -------
    value : float
        Log density *of log range*: the Jacobian log(range) is included.
    gradient : float
        Its derivative with respect to log range.

    Raises
    ------
    InputError
        If `rho0` is not positive or `alpha` is not between 0 and 1.

    Notes
    -----
    Fuglstad, Simpson, Lindgren & Rue (2019), J. Am. Stat. Assoc. 114:445-452, theorem 2.6 with d = 2:
    the density of the range is lambda range^-2 exp(-lambda / range), lambda = -rho0 log(alpha). Its
    mean is infinite.

    Examples
    --------
    >>> value, gradient = pc_range(math.log(150.0), 50.0, 0.05)
    >>> round(value, 6), round(gradient, 6)
    (-1.000001, -0.001423)
    """
    rate = _range_rate(rho0, alpha)
    with np.errstate(over="ignore"):  # a vanishing range has density zero, its logarithm is -inf
        ratio = float(rate * np.exp(-log_range))
    return math.log(rate) - log_range - ratio, ratio - 1.0


def pc_sd(log_sd: float, sd0: float, alpha: float) -> tuple[float, float]:
    """Log density of log sd under the prior with P(sd > sd0) = alpha.

    Parameters
    ----------
    log_sd : float
        Natural logarithm of a standard deviation (of the field or of the nugget, logit scale).
    sd0 : float
        A standard deviation that is unlikely to be exceeded.
    alpha : float in (0, 1)
        The probability that it is.

    Returns
    -------
    value : float
        Log density *of log sd*: the Jacobian log(sd) is included.
    gradient : float
        Its derivative with respect to log sd.

    Raises
    ------
    InputError
        If `sd0` is not positive or `alpha` is not between 0 and 1.

    Notes
    -----
    The sd is exponential with rate -log(alpha) / sd0: Simpson, Rue, Riebler, Martins & Sorbye (2017),
    Stat. Sci. 32:1-28; for the field Fuglstad et al. (2019), theorem 2.6.

    Examples
    --------
    >>> value, gradient = pc_sd(math.log(0.5), 1.0, 0.05)
    >>> round(value, 6), round(gradient, 6)
    (-1.093825, -0.497866)
    """
    rate = _sd_rate(sd0, alpha)
    with np.errstate(over="ignore"):  # an endless sd has density zero, its logarithm is -inf
        product = float(rate * np.exp(log_sd))
    return math.log(rate) + log_sd - product, 1.0 - product


def pc_range_median(rho0: float, alpha: float) -> float:
    """Median range under `pc_range`, in the unit of `rho0`."""
    return _range_rate(rho0, alpha) / math.log(2.0)


def pc_sd_median(sd0: float, alpha: float) -> float:
    """Median standard deviation under `pc_sd`."""
    return math.log(2.0) / _sd_rate(sd0, alpha)


def _range_rate(rho0: float, alpha: float) -> float:
    _check(rho0, alpha, "range")
    return -math.log(alpha) * rho0


def _sd_rate(sd0: float, alpha: float) -> float:
    _check(sd0, alpha, "standard deviation")
    return -math.log(alpha) / sd0


def _check(bound: float, alpha: float, what: str) -> None:
    if not (math.isfinite(bound) and bound > 0):
        raise InputError(f"The {what} in a prior must be a positive number; found {bound}.")
    if not 0 < alpha < 1:
        raise InputError(f"The probability in a prior must lie between 0 and 1; found {alpha}.")
