"""Rows are not sites: pool a survey's rows into the observations of the likelihood."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from prevmap.engine.likelihood import Observations, observations
from prevmap.errors import InputError
from prevmap.inputs.survey import Survey
from prevmap.model.spec import DiagnosticAccuracy

_MANY_FALSE = 0.3  # share of the positives that may be false before the limits are called into question
_MILLIMETRE_KM = 6  # decimals kept of a position in km: the unit of the coordinates must not matter


@dataclass(frozen=True, slots=True)
class Rows:
    """Pooled observations in an order that does not depend on that of the survey.

    Attributes
    ----------
    data : Observations
    xy_km : (n_rows, 2) float
    design : (n_rows, p) float
    site : (n_rows,) object
        Site id of each pooled row.
    first : (n_rows,) int
        One survey row behind each pooled row.
    """

    data: Observations
    xy_km: NDArray[np.float64]
    design: NDArray[np.float64]
    site: NDArray[np.object_]
    first: NDArray[np.int64]


def row_accuracy(
    survey: Survey, kept: NDArray[np.bool_], tests: Mapping[str, DiagnosticAccuracy] | None
) -> NDArray[np.float64]:
    """Sensitivity and specificity (n_kept, 2) of the test behind each kept row.

    Raises
    ------
    InputError
        Where accuracy is given for tests but the survey does not say which test a row used.
    """
    out = np.ones((int(kept.sum()), 2))
    if not tests:
        return out
    column = survey.row_values("test")
    if column is None:
        stated = survey.about.test
        if stated is None:
            raise InputError(
                "test accuracy is given for "
                + ", ".join(repr(t) for t in tests)
                + " but the survey does not say which test was used; state it with SurveyNotes(test=...)"
            )
        names = np.full(int(kept.sum()), str(stated), dtype=object)
    else:
        names = column.to_numpy(dtype=object)[kept]
    found = {str(n) for n in names}
    unknown = sorted(set(tests) - found)
    if unknown:
        raise InputError(
            f"accuracy is given for the test {unknown[0]!r}, which no row of the survey used; "
            f"found: {', '.join(sorted(repr(f) for f in found))}"
        )
    for name, accuracy in tests.items():
        at = np.array([str(n) == name for n in names])
        out[at] = accuracy.sensitivity, accuracy.specificity
    return out


def false_positive_warning(rows: Rows) -> list[str]:
    """Warn where false positives could make up much of what was found positive."""
    imperfect = rows.data.specificity < 1.0
    positive = float(rows.data.positive[imperfect].sum())
    false = float((rows.data.examined * (1.0 - rows.data.specificity))[imperfect].sum())
    if not imperfect.any() or false < _MANY_FALSE * positive:
        return []
    return [
        f"with the stated specificity about {false:,.0f} of the {positive:,.0f} positives could be false: lower "
        "limits of prevalence and probabilities of being above a low threshold come out too high"
    ]


def pool_rows(
    frame: pd.DataFrame,
    xy_km: NDArray[np.float64],
    design: NDArray[np.float64],
    accuracy: NDArray[np.float64],
) -> Rows:
    """Pool rows of one site with equal position, covariates and test; the site's other rows share its nugget.

    Parameters
    ----------
    frame : DataFrame, n rows
        Columns site, examined, positive.
    xy_km : (n, 2) float
    design : (n, p) float
    accuracy : (n, 2) float
        Sensitivity and specificity.
    """
    xy = np.round(xy_km, _MILLIMETRE_KM)
    site = frame["site"].astype(str).to_numpy(dtype=object)
    keys = np.column_stack([xy, design, accuracy])
    # A site's place in the order is its lowest position, so that shuffled rows give the same order.
    code = np.unique(site, return_inverse=True)[1]
    lowest = np.lexsort((xy[:, 1], xy[:, 0], code))
    start = lowest[np.unique(code[lowest], return_index=True)[1]]
    rank = np.empty(start.size, dtype=np.int64)
    rank[np.lexsort((np.arange(start.size), xy[start, 1], xy[start, 0]))] = np.arange(start.size)
    whole = np.column_stack([rank[code].astype(float), keys])
    distinct, first, inverse = np.unique(whole, axis=0, return_index=True, return_inverse=True)
    inverse = inverse.ravel()
    examined = np.bincount(inverse, weights=frame["examined"].to_numpy(dtype=float)).astype(float)
    positive = np.bincount(inverse, weights=frame["positive"].to_numpy(dtype=float)).astype(float)
    p = design.shape[1]
    data = observations(
        examined, positive, distinct[:, 0].astype(np.int64), distinct[:, -2].copy(), distinct[:, -1].copy()
    )
    return Rows(data, distinct[:, 1:3].copy(), distinct[:, 3 : 3 + p].copy(), site[first], first)
