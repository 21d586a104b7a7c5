"""Direct estimates: what the counts of a unit say by themselves."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtri


def wilson_interval(
    positive: ArrayLike, examined: ArrayLike, level: float = 0.95
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Wilson's score interval for a binomial proportion.

    Parameters
    ----------
    positive, examined : array_like
        Counts, or effective counts; NaN where nobody was examined.
    level : float

    Returns
    -------
    lower, upper : arrays
        NaN where ``examined`` is 0.

    Notes
    -----
    Wilson (1927), J. Am. Stat. Assoc. 22:209-212. Takes no account of clustering between sites.
    """
    y, n = np.broadcast_arrays(np.asarray(positive, dtype=float), np.asarray(examined, dtype=float))
    z = float(ndtri(0.5 + 0.5 * level))
    with np.errstate(invalid="ignore", divide="ignore"):
        p = y / n
        middle = (p + z * z / (2.0 * n)) / (1.0 + z * z / n)
        half = z * np.sqrt(p * (1.0 - p) / n + z * z / (4.0 * n * n)) / (1.0 + z * z / n)
        # At 0 and n the limit is exactly 0 or 1; rounding must not leave it a hair beside.
        lower = np.where(y <= 0, 0.0, np.maximum(middle - half, 0.0))
        upper = np.where(y >= n, 1.0, np.minimum(middle + half, 1.0))
    none = ~(n > 0)
    return np.where(none, np.nan, lower), np.where(none, np.nan, upper)


def weighted_proportion(
    positive: NDArray[np.float64], examined: NDArray[np.float64], weight: NDArray[np.float64]
) -> tuple[float, float]:
    """Weighted proportion and the effective number examined after Kish (1965, Survey Sampling, section 11.7).

    Parameters
    ----------
    positive, examined, weight : (n_rows,) float
        The weight is one per person examined in that row.

    Returns
    -------
    proportion, effective : float
        NaN and 0 where nobody was examined.
    """
    total = float(np.sum(weight * examined))
    if total <= 0:
        return float("nan"), 0.0
    effective = total**2 / float(np.sum(weight**2 * examined))
    return float(np.sum(weight * positive)) / total, effective
