"""Unit decisions: above, below or undecided, each with the probability that it is wrong."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from numbers import Real
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from prevmap.errors import InputError

if TYPE_CHECKING:
    from prevmap.model.units import UnitEstimates

UNDECIDED = "undecided"
ABOVE = "above"
BELOW = "below"

_MOST_MISSING = 0.2  # share of a unit without a prediction, above which it is not decided
_MOST_DRAWS = 64_000
_MORE_DRAWS = 4
_NEAR_ERRORS = 2.0

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class UnitDecisions:
    """The decision for each implementation unit.

    Attributes
    ----------
    frame : DataFrame
        One row per unit: unit, code, parent, sites, basis, p_class_0 .. p_class_K (the probability of each
        class, in the order of ``classes``), decision, p_wrong (1 minus the probability of the chosen class;
        NaN where undecided), monte_carlo_error (of the probability that the decision rests on), reason.
    thresholds : tuple of float
        Increasing prevalence thresholds, shares in (0, 1).
    certainty : mapping
        ``above`` and ``below``: the probability needed for either statement.
    classes : tuple of str
        Labels of the classes from low to high, each with its inequality.
    units : UnitEstimates
        The estimates behind the decisions, with the number of draws that was needed in the end.
    """

    frame: pd.DataFrame
    thresholds: tuple[float, ...]
    certainty: Mapping[str, float]
    classes: tuple[str, ...]
    units: UnitEstimates

    @property
    def outcomes(self) -> tuple[str, ...]:
        """Every value that ``frame.decision`` can take, from high to low, undecided last."""
        if len(self.thresholds) == 1:
            return (ABOVE, BELOW, UNDECIDED)
        return (*reversed(self.classes), UNDECIDED)

    @property
    def counts(self) -> dict[str, int]:
        """Number of units by outcome, zeros included."""
        found = self.frame["decision"].value_counts()
        return {outcome: int(found.get(outcome, 0)) for outcome in self.outcomes}

    def _repr_html_(self) -> str:
        return self.frame.to_html(index=False, float_format=lambda value: f"{value:.3g}")

    @property
    def expected_wrong(self) -> float:
        """Expected number of wrong decisions: the sum of p_wrong over the decided units."""
        return float(self.frame["p_wrong"].sum(skipna=True))


def classify_units(
    units: UnitEstimates,
    thresholds: Sequence[float] | float,
    certainty: float | Mapping[str, float] = 0.90,
    *,
    decide_without_sites: bool = False,
) -> UnitDecisions:
    """Decide for each unit whether its prevalence is above or below the threshold, or leave it undecided.

    A unit is above (below) when the probability of its population-weighted prevalence being above (below)
    the threshold reaches the certainty asked for. With several thresholds the unit gets the class whose
    probability reaches the certainty: ``below`` for the lowest class, ``above`` for the highest, the larger
    of the two for a class in between. While the probability of a unit lies within two Monte-Carlo errors of
    its cut-off, more joint draws are made (four times as many each time, up to 64,000).

    Parameters
    ----------
    units : UnitEstimates
        Joint unit estimates, as returned by ``fit.units(grid)``.
    thresholds : sequence of float
        One or more increasing prevalence thresholds, shares between 0 and 1.
    certainty : float or mapping
        Probability in (0.5, 1] needed for a decision; or ``{"above": .., "below": ..}``.
    decide_without_sites : bool
        Also decide units that have no surveyed site of their own.

    Returns
    -------
    UnitDecisions

    Raises
    ------
    InputError
        If a threshold or a certainty is outside its range, or thresholds do not increase.

    Notes
    -----
    The classes are half-open: a class includes its lower edge. Since the posterior is continuous, the
    probability of lying exactly on an edge is zero, so P(above t) is also P(at or above t).
    """
    edges = checked_thresholds(thresholds)
    levels = checked_certainty(certainty)
    cutoffs = _class_cutoffs(len(edges) + 1, levels)
    barriers = _barriers(units.frame, decide_without_sites)
    predicted = units.frame["mean"].notna().to_numpy(dtype=bool)
    may_decide = predicted & np.array([barrier == "" for barrier in barriers])

    while True:
        probability, error = _class_probabilities(units, edges)
        near = np.any(np.abs(probability - cutoffs) < _NEAR_ERRORS * error, axis=1)
        if not (near & may_decide).any() or units.draws >= _MOST_DRAWS:
            break
        units = units.with_draws(min(units.draws * _MORE_DRAWS, _MOST_DRAWS))

    classes = class_labels(edges)
    names = (BELOW, ABOVE) if len(edges) == 1 else classes
    source = units.frame.reset_index(drop=True)
    rows: list[dict[str, Any]] = []
    for i in range(len(source)):
        p = probability[i]
        chosen = int(np.argmax(p >= cutoffs)) if may_decide[i] and (p >= cutoffs).any() else None
        # The likeliest class is the one that came closest to a decision.
        leading = chosen if chosen is not None else _likeliest(p)
        row: dict[str, Any] = {
            "unit": source["unit"].iloc[i],
            "code": source["code"].iloc[i] if "code" in source else None,
            "parent": source["parent"].iloc[i] if "parent" in source else None,
            "sites": int(source["sites"].iloc[i]),
            "basis": source["basis"].iloc[i],
        }
        row |= {f"p_class_{k}": float(p[k]) for k in range(len(classes))}
        row["decision"] = UNDECIDED if chosen is None else names[chosen]
        row["p_wrong"] = math.nan if chosen is None else float(max(0.0, 1.0 - p[chosen]))
        row["monte_carlo_error"] = math.nan if leading is None else float(error[i, leading])
        row["reason"] = _reason(
            p,
            cutoffs,
            names,
            chosen,
            barrier=barriers[i],
            on_edge=bool(near[i]),
            draws=units.draws,
        )
        rows.append(row)
    columns = ["unit", "code", "parent", "sites", "basis", *(f"p_class_{k}" for k in range(len(classes)))]
    columns += ["decision", "p_wrong", "monte_carlo_error", "reason"]
    frame = pd.DataFrame(rows, columns=columns)
    return UnitDecisions(frame, edges, MappingProxyType(levels), classes, units)


def _number(value: object) -> float | None:
    """Return the value as a float, None for anything that is not a real number (True and False are not)."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, Real):
        return None
    return float(value)


def checked_thresholds(thresholds: Sequence[float] | float) -> tuple[float, ...]:
    """Return thresholds as a tuple of increasing shares in (0, 1).

    Raises
    ------
    InputError
        Naming the value that is not accepted.
    """
    given: list[object] = list(thresholds) if isinstance(thresholds, Iterable) else [thresholds]
    if not given:
        raise InputError("thresholds is empty: give at least one prevalence threshold, for example [0.10].")
    edges: list[float] = []
    for value in given:
        number = _number(value)
        if number is None or not 0.0 < number < 1.0:
            percent = number is not None and 1.0 <= number < 100.0
            hint = f" If {value} per cent is meant, write {number / 100:g}." if number and percent else ""
            raise InputError(
                f"thresholds: found {value!r}; a threshold is a share above 0 and below 1, "
                f"for example 0.10 for 10 %.{hint}"
            )
        edges.append(number)
    for lower, upper in itertools.pairwise(edges):
        if not lower < upper:
            raise InputError(f"thresholds: {lower:g} is followed by {upper:g}; thresholds must increase.")
    return tuple(edges)


def checked_certainty(certainty: float | Mapping[str, float]) -> dict[str, float]:
    """Return the certainty as ``{"above": .., "below": ..}`` with both values in (0.5, 1].

    Raises
    ------
    InputError
        Naming the key or value that is not accepted.
    """
    if isinstance(certainty, Mapping):
        unknown = sorted(str(key) for key in set(certainty) - {ABOVE, BELOW})
        missing = [key for key in (ABOVE, BELOW) if key not in certainty]
        if unknown or missing:
            found = ", ".join(str(key) for key in certainty) or "nothing"
            raise InputError(
                f"certainty: found the keys {found}; a table needs exactly the two keys above and below."
            )
        given: dict[str, object] = {key: certainty[key] for key in (ABOVE, BELOW)}
    else:
        given = {ABOVE: certainty, BELOW: certainty}
    levels: dict[str, float] = {}
    for key, value in given.items():
        number = _number(value)
        if number is None or not 0.5 < number <= 1.0:
            where = f"certainty.{key}" if isinstance(certainty, Mapping) else "certainty"
            raise InputError(
                f"{where}: found {value!r}; a certainty is a probability above 0.5 and at most 1, "
                "for example 0.90 for 90 %."
            )
        levels[key] = number
    return levels


def class_labels(thresholds: Sequence[float]) -> tuple[str, ...]:
    """Label the classes between increasing thresholds, each with its inequality.

    Examples
    --------
    >>> class_labels([0.1])
    ('< 10 %', '>= 10 %')
    >>> class_labels([0.005, 0.1])
    ('< 0.5 %', '>= 0.5 % and < 10 %', '>= 10 %')
    """
    edges = [f"{100.0 * value:.6g} %" for value in thresholds]
    middle = [f">= {lower} and < {upper}" for lower, upper in itertools.pairwise(edges)]
    return (f"< {edges[0]}", *middle, f">= {edges[-1]}")


def _class_cutoffs(classes: int, levels: Mapping[str, float]) -> Array:
    """Probability that each class (classes,) must reach to be decided."""
    cutoffs = np.full(classes, max(levels[ABOVE], levels[BELOW]))
    cutoffs[0] = levels[BELOW]
    cutoffs[-1] = levels[ABOVE]
    return cutoffs


def _barriers(frame: pd.DataFrame, decide_without_sites: bool) -> list[str]:
    """Why a unit may not be decided, whatever its probability; empty where it may."""
    sites = frame["sites"].to_numpy(dtype=int)
    own = (frame["basis"] == "own sites").to_numpy(dtype=bool)
    missing = frame.get("share_without_prediction", pd.Series(0.0, index=frame.index)).to_numpy(dtype=float)
    out = []
    for i, basis in enumerate(frame["basis"]):
        if not own[i] and not decide_without_sites:
            place = "no surveyed site" if sites[i] == 0 else "no site with a position"
            out.append(f"{place} in the unit (basis: {basis})")
        elif missing[i] > _MOST_MISSING:
            out.append(f"a covariate is missing on {100.0 * missing[i]:.0f} % of the unit")
        else:
            out.append("")
    return out


def _class_probabilities(units: UnitEstimates, edges: Sequence[float]) -> tuple[Array, Array]:
    """Class probabilities and their Monte-Carlo errors, both (units, classes)."""
    names = units.frame["unit"].to_list()
    above = np.column_stack([units.exceedance(t).loc[names].to_numpy(dtype=float) for t in edges])
    noise = np.column_stack([units.exceedance_error(t).loc[names].to_numpy(dtype=float) for t in edges])
    ends = np.zeros((len(names), 1))
    reached = np.hstack([np.ones_like(ends), above, ends])
    reached[np.isnan(above).any(axis=1)] = np.nan
    # Two exceedances of one unit are positively correlated, so the sum of variances is an upper bound.
    variance = np.hstack([ends, noise**2, ends])
    return reached[:, :-1] - reached[:, 1:], np.sqrt(variance[:, :-1] + variance[:, 1:])


def _likeliest(p: Array) -> int | None:
    return None if np.isnan(p).any() else int(np.argmax(p))


def _reason(
    p: Array,
    cutoffs: Array,
    names: Sequence[str],
    chosen: int | None,
    *,
    barrier: str,
    on_edge: bool,
    draws: int,
) -> str:
    """One printable clause saying why the unit has its decision."""
    leading = _likeliest(p)
    if leading is None:
        return "no prediction for this unit"
    if chosen is not None:
        text = f"P({names[chosen]}) = {p[chosen]:.3f}, needed {cutoffs[chosen]:g}"
    elif barrier:
        return f"{barrier}; P({names[leading]}) = {p[leading]:.3f}"
    else:
        text = f"P({names[leading]}) = {p[leading]:.3f}, short of {cutoffs[leading]:g}"
    if on_edge:
        text += f"; within {_NEAR_ERRORS:g} Monte-Carlo errors of the cut-off after {draws:,} draws"
    return text
