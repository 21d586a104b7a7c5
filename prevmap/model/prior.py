"""Priors resolved against a study area: what the engine needs, and the sentence the report prints."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import partial

import numpy as np

from prevmap.engine.posterior import LogPrior
from prevmap.engine.priors import pc_range, pc_range_median, pc_sd, pc_sd_median
from prevmap.errors import InputError
from prevmap.model.spec import Above, Below, Priors

DEFAULT_RANGE_SHARE = 0.05  # of the region's diagonal
DEFAULT_PROBABILITY = 0.05
MOST_DIAGONALS = 1000.0  # a fixed range above that, or below its inverse, cannot be told from a slip
FIXED_SD = (1e-6, 100.0)  # on the logit scale


@dataclass(frozen=True, slots=True)
class Resolved:
    """One hyperparameter's prior.

    Attributes
    ----------
    log_density : callable or None
        Log density of the log of the hyperparameter and its derivative; None where it is fixed.
    middle : float
        Prior median, or the fixed value; 0 for a nugget that is left out.
    sentence : str
    """

    log_density: LogPrior | None
    middle: float
    sentence: str

    @property
    def free(self) -> bool:
        """Whether the hyperparameter is estimated."""
        return self.log_density is not None

    @property
    def log_middle(self) -> float:
        """Log of the middle; minus infinity for a nugget that is left out."""
        return math.log(self.middle) if self.middle > 0 else -math.inf


def resolve_priors(priors: Priors, diagonal_km: float) -> tuple[Resolved, Resolved, Resolved]:
    """Priors of range, sd and nugget sd for a study area with that diagonal in km.

    Raises
    ------
    InputError
        A fixed range or sd is too large or too small for any map.
    """
    given = priors.range_km
    default = given is None
    if given is None:
        given = Below(float(f"{DEFAULT_RANGE_SHARE * diagonal_km:.3g}"), DEFAULT_PROBABILITY)
    if isinstance(given, Below):
        origin = " (default: 5 % of the study area's diagonal)" if default else ""
        of_range = Resolved(
            partial(pc_range, rho0=given.value, alpha=given.probability),
            pc_range_median(given.value, given.probability),
            f"P(range < {given.value:g} km) = {given.probability:g}{origin}",
        )
    else:
        shortest, longest = diagonal_km / MOST_DIAGONALS, diagonal_km * MOST_DIAGONALS
        if not shortest <= float(given) <= longest:
            raise InputError(
                f"range_km: fixed at {float(given):g} km; accepted: from {shortest:.3g} to {longest:.3g} km, a "
                f"thousandth to a thousand times the study area's diagonal"
            )
        of_range = Resolved(None, float(given), f"range fixed at {float(given):g} km")
    return (
        of_range,
        _deviation(priors.sd, "sd", "sd of the field"),
        _deviation(priors.nugget_sd, "nugget_sd", "sd of the nugget"),
    )


def _deviation(given: Above | float | None, key: str, name: str) -> Resolved:
    if given is None:
        return Resolved(None, 0.0, "no nugget")
    if isinstance(given, Above):
        return Resolved(
            partial(pc_sd, sd0=given.value, alpha=given.probability),
            pc_sd_median(given.value, given.probability),
            f"P({name} > {given.value:g}) = {given.probability:g} on the logit scale",
        )
    least, most = FIXED_SD
    if not least <= float(given) <= most:
        raise InputError(
            f"{key}: fixed at {float(given):g}; accepted: from {least:g} to {most:g} on the logit scale"
        )
    return Resolved(None, float(given), f"{name} fixed at {float(given):g} on the logit scale")


def prior_sentences(
    priors: Priors, resolved: tuple[Resolved, ...], terms: int
) -> tuple[tuple[str, str], ...]:
    """Name and sentence of every prior, for the report."""
    mean, sd = priors.intercept
    out = [(n, r.sentence) for n, r in zip(("range_km", "sd", "nugget_sd"), resolved, strict=True)]
    out.append(("intercept", f"Gaussian, mean {mean:g}, sd {sd:g} on the logit scale"))
    if terms > 1:
        out.append(("coefficients", f"Gaussian, mean 0, sd {priors.coefficient_sd:g}, covariates as scaled"))
    return tuple(out)


def coefficient_prior(priors: Priors, terms: int) -> tuple[np.ndarray, np.ndarray]:
    """Mean and sd (p,) of the intercept and the coefficients."""
    mean, sd = np.zeros(terms), np.full(terms, float(priors.coefficient_sd))
    mean[0], sd[0] = priors.intercept
    return mean, sd


def default_reach_km(of_range: Resolved) -> float:
    """How far outside the study area a site still tells something: the range to be expected."""
    return float(f"{of_range.middle:.3g}")
