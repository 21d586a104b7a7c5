"""Design: covariates as columns of a matrix, at the sites and wherever is predicted."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from statsmodels.stats.outliers_influence import variance_inflation_factor

from prevmap.errors import InputError
from prevmap.inputs.covariates import (
    TRANSFORMS,
    ColumnCovariate,
    Covariate,
    DistanceCovariate,
    FactorCovariate,
    RasterCovariate,
    metric_crs,
    transformed,
)
from prevmap.inputs.findings import Finding, findings_frame, listed, row_label
from prevmap.inputs.layer import label_text, nearest

Floats = NDArray[np.float64]

COLLINEAR_ABOVE = 10.0  # variance inflation factor; common practice, no source
NEARLY_CONSTANT = 0.95  # share of distinct sites with one and the same value


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """Covariates as columns of a matrix, with what was learned at the sites to rebuild it anywhere.

    Attributes
    ----------
    covariates : tuple of covariates
    terms : (p,) tuple of str
        "intercept", then covariate names; "sampling[community]" for the level of a factor.
    centre, scale : (p,) float
        A column is (transformed value - centre) / scale; 0 and 1 for intercept, factor levels and
        ``scale=False``. Mean and standard deviation over distinct (site, position, values), so that
        splitting a row changes nothing.
    lower, upper : (p,) float
        Smallest and largest transformed value at the sites, before centring.
    levels : dict of str to tuple of str
        Levels of each factor, the reference first.
    at : dict of str to value
        What a column or factor covariate is predicted for.
    X : (n_rows, p) float
        Rows in the order of the sites given; NaN where a covariate is missing.
    kept : (n_rows,) bool
        Rows with every covariate.
    crs : pyproj.CRS
        Projected, in metres: distances are taken in it.
    findings : DataFrame
    """

    covariates: tuple[Covariate, ...]
    terms: tuple[str, ...]
    centre: Floats
    scale: Floats
    lower: Floats
    upper: Floats
    levels: dict[str, tuple[str, ...]]
    at: dict[str, Any]
    X: Floats
    kept: NDArray[np.bool_]
    crs: CRS
    findings: pd.DataFrame

    def matrix(
        self, points: gpd.GeoDataFrame, *, grid: bool = False
    ) -> tuple[Floats, NDArray[np.bool_], NDArray[np.bool_]]:
        """Return the matrix at new points, to be called window by window.

        Parameters
        ----------
        points : GeoDataFrame, n rows
            In any coordinate system. Column and factor covariates are read from columns of the same name,
            or, where the points lack them or `grid` is true, set to their ``at``.
        grid : bool
            Whether the points are cells of a grid.

        Returns
        -------
        X : (n, p) float
            NaN in rows with a missing covariate.
        outside : (n,) bool
            Some covariate is outside the range seen at the sites.
        missing : (n,) bool
            Some covariate has no value.

        Raises
        ------
        InputError
            If a column or factor covariate has neither a column nor an ``at``, or a level is unknown.
        """
        if CRS.from_user_input(points.crs or self.crs) != self.crs:
            points = points.to_crs(self.crs)
        raws = [self._raw(covariate, points, grid) for covariate in self.covariates]
        plain = _plain(self.covariates, raws, self.levels, len(points))
        missing = np.asarray(np.isnan(plain).any(axis=1), dtype=bool)
        slack = 1e-9 * (self.upper - self.lower)
        with np.errstate(invalid="ignore"):
            beyond = (plain < self.lower - slack) | (plain > self.upper + slack)
        X = (plain - self.centre) / self.scale
        X[missing, 1:] = np.nan
        return X, np.asarray(beyond.any(axis=1), dtype=bool) & ~missing, missing

    def _raw(self, covariate: Covariate, points: gpd.GeoDataFrame, grid: bool) -> NDArray[Any]:
        if isinstance(covariate, RasterCovariate | DistanceCovariate):
            return covariate.raw(points)
        if not grid and covariate.column in points.columns:
            raw = covariate.raw(points)
            if isinstance(covariate, FactorCovariate):
                _check_levels(covariate, raw, self.levels[covariate.label], points.index)
            return raw
        if covariate.at is None:
            where = "on a grid" if grid else f"at points without a column {covariate.column!r}"
            raise InputError(
                f"Covariate {covariate.label!r} is known at the sites only: to predict {where}, say for "
                "which value, with at=."
            )
        if isinstance(covariate, FactorCovariate):
            return np.full(len(points), label_text(covariate.at), dtype=object)
        return np.full(len(points), float(covariate.at))


def design(covariates: Sequence[Covariate], sites: gpd.GeoDataFrame, site_ids: Sequence[Any]) -> Design:
    """Return the design of a model: the covariates at the sites, checked.

    Parameters
    ----------
    covariates : sequence of covariates
        May be empty.
    sites : GeoDataFrame, n rows
        Survey rows in any coordinate system, best the region's.
    site_ids : (n,) sequence
        Which site each row belongs to.

    Returns
    -------
    Design

    Raises
    ------
    InputError
        If two covariates have one name, one is constant, a factor has a single level, an ``at`` is no level,
        a raster does not meet the sites, or no row has every covariate.
    """
    covariates = tuple(covariates)
    _check_labels(covariates)
    crs = metric_crs(sites)
    if CRS.from_user_input(sites.crs) != crs:
        sites = sites.to_crs(crs)
    ids = [str(each) for each in site_ids]
    findings: list[Finding] = []
    raws = []
    kept = np.ones(len(sites), dtype=bool)
    for covariate in covariates:
        raw, present = _at_sites(covariate, sites, ids, findings)
        raws.append(raw)
        kept &= present
    if not kept.any():
        raise InputError(
            "No survey row has a value of every covariate: "
            + listed(
                f"{each.label} ({_count(each, raws[k])} of {len(sites)})" for k, each in enumerate(covariates)
            )
        )
    distinct = _distinct(raws, sites, ids, kept)
    levels = {
        each.label: _levels(each, raw[distinct])
        for each, raw in zip(covariates, raws, strict=True)
        if isinstance(each, FactorCovariate)
    }
    plain = _plain(covariates, raws, levels, len(sites))
    terms, scaled = _terms(covariates, levels)
    values = plain[distinct]
    _check_constant(covariates, raws, distinct, findings)
    centre = np.where(scaled, values.mean(axis=0), 0.0)
    scale = np.where(scaled, values.std(axis=0), 1.0)
    X = (plain - centre) / scale
    X[~kept, 1:] = np.nan
    at = {
        each.label: each.at
        for each in covariates
        if isinstance(each, ColumnCovariate | FactorCovariate) and each.at is not None
    }
    lower, upper = values.min(axis=0), values.max(axis=0)
    _check_at(covariates, terms, lower, upper, findings)
    findings += _collinear(X[distinct], terms)
    return Design(
        covariates, terms, centre, scale, lower, upper, levels, at, X, kept, crs, findings_frame(findings)
    )


def _check_labels(covariates: tuple[Covariate, ...]) -> None:
    for each in covariates:
        if not isinstance(each, Covariate):
            raise InputError(
                f"{each!r} is no covariate. Accepted: RasterCovariate, DistanceCovariate, ColumnCovariate, "
                "FactorCovariate."
            )
    labels = [each.label for each in covariates]
    twice = sorted({label for label in labels if labels.count(label) > 1})
    if twice:
        raise InputError(
            f"Several covariates are called {listed(map(repr, twice))}. Tell them apart by name=."
        )


def _at_sites(
    covariate: Covariate, sites: gpd.GeoDataFrame, ids: list[str], findings: list[Finding]
) -> tuple[NDArray[Any], NDArray[np.bool_]]:
    """Return raw values at the sites and which rows can be used; add a finding for each that cannot."""
    raw = covariate.raw(sites)
    transform = None
    if isinstance(covariate, FactorCovariate):
        present = np.asarray([level is not None for level in raw], dtype=bool)
        texts: dict[int, str] = {}
        lost = np.zeros(len(raw), dtype=bool)
    else:
        texts = covariate.texts(sites) if isinstance(covariate, ColumnCovariate) else {}
        transform = covariate.transform
        found = np.isfinite(raw)
        present = np.isfinite(transformed(raw, transform))
        lost = found & ~present
        if isinstance(covariate, RasterCovariate) and not found.any():
            covariate.check_overlap(sites)
        if isinstance(covariate, RasterCovariate):
            findings += covariate.findings(sites)
        if lost.any() and not present.any():
            raise InputError(
                f"Covariate {covariate.label!r}: no site has a value that {transform} accepts "
                f"({TRANSFORMS[str(transform)][3]}); found for example {raw[lost][0]:g}."
            )
        if len(texts) > 0.5 * len(raw):
            raise InputError(
                f"Column {covariate.label!r} holds text such as {next(iter(texts.values()))!r}, not numbers. "
                "A category is entered as FactorCovariate."
            )
    for place in np.flatnonzero(~present):
        if lost[place]:
            needed = TRANSFORMS[str(transform)][3]
            what = f"{covariate.label} is {raw[place]:g}: its {transform} needs values {needed}"
        elif place in texts:
            what = f"{covariate.label} is {texts[int(place)]!r}, which is no number"
        else:
            what = f"{covariate.label} has no value: {covariate.absence}"
        row = row_label(sites.index[place])
        findings.append(Finding(row, ids[place], covariate.label, "error", what, "row not used in the model"))
    return raw, present


def _count(covariate: Covariate, raw: NDArray[Any]) -> int:
    if isinstance(covariate, FactorCovariate):
        return sum(level is not None for level in raw)
    return int(np.isfinite(transformed(raw, covariate.transform)).sum())


def _distinct(
    raws: list[NDArray[Any]], sites: gpd.GeoDataFrame, ids: list[str], kept: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Return the first kept row of every distinct (site, position, values)."""
    shapes = sites.geometry.array
    table = pd.DataFrame({"site": ids, "x": shapely.get_x(shapes), "y": shapely.get_y(shapes)})
    for number, raw in enumerate(raws):
        table[f"covariate {number}"] = raw
    rows = np.flatnonzero(kept)
    return rows[~table.iloc[rows].duplicated().to_numpy()]


def _levels(covariate: FactorCovariate, raw: NDArray[Any]) -> tuple[str, ...]:
    names, counts = np.unique(raw.astype(str), return_counts=True)
    levels = [str(name) for name in names]
    if len(levels) < 2:
        raise InputError(
            f"Factor {covariate.label!r} has a single level at the sites, {levels[0]!r}: it explains "
            "nothing. Leave it out."
        )
    # The first of equally frequent levels in alphabetical order, so that row order does not matter.
    reference = levels.pop(int(np.argmax(counts)))
    known = (reference, *levels)
    if covariate.at is not None:
        _check_levels(covariate, np.asarray([label_text(covariate.at)], dtype=object), known, None)
    return known


def _check_levels(covariate: FactorCovariate, raw: NDArray[Any], levels: tuple[str, ...], index: Any) -> None:
    for place, level in enumerate(raw):
        if level is None or level in levels:
            continue
        where = "at=" if index is None else f"row {index[place]}: "
        near = nearest(level, levels)
        hint = f" Did you mean {near}?" if near else ""
        raise InputError(
            f"Factor {covariate.label!r}: {where}{level!r} is no level seen at the sites.{hint} "
            f"Levels: {', '.join(repr(each) for each in sorted(levels))}."
        )


def _plain(
    covariates: tuple[Covariate, ...], raws: list[NDArray[Any]], levels: dict[str, tuple[str, ...]], rows: int
) -> Floats:
    """Return (rows, p) transformed values before centring, NaN where missing."""
    columns: list[Floats] = [np.ones(rows)]
    for covariate, raw in zip(covariates, raws, strict=True):
        if isinstance(covariate, FactorCovariate):
            known = np.asarray([level is not None for level in raw], dtype=bool)
            for level in levels[covariate.label][1:]:
                columns.append(np.where(known, (raw == level).astype(float), np.nan))
        else:
            columns.append(transformed(np.asarray(raw, dtype=float), covariate.transform))
    plain = np.column_stack(columns)
    plain[~np.isfinite(plain)] = np.nan
    return plain


def _terms(
    covariates: tuple[Covariate, ...], levels: dict[str, tuple[str, ...]]
) -> tuple[tuple[str, ...], NDArray[np.bool_]]:
    terms, scaled = ["intercept"], [False]
    for covariate in covariates:
        if isinstance(covariate, FactorCovariate):
            terms += [f"{covariate.label}[{level}]" for level in levels[covariate.label][1:]]
            scaled += [False] * (len(levels[covariate.label]) - 1)
        else:
            terms.append(covariate.label)
            scaled.append(covariate.scale)
    return tuple(terms), np.asarray(scaled, dtype=bool)


def _check_constant(
    covariates: tuple[Covariate, ...],
    raws: list[NDArray[Any]],
    distinct: NDArray[np.int64],
    findings: list[Finding],
) -> None:
    for covariate, raw in zip(covariates, raws, strict=True):
        if isinstance(covariate, FactorCovariate):
            continue
        values = transformed(np.asarray(raw, dtype=float), covariate.transform)[distinct]
        largest = float(np.max(np.abs(values)))
        if float(np.ptp(values)) <= 1e-12 * largest:
            raise InputError(
                f"Covariate {covariate.label!r} is constant: {raw[distinct][0]:g} at every site used "
                f"({len(distinct)} of them). It explains nothing; leave it out."
            )
        counts = np.unique(values, return_counts=True)[1]
        if counts.max() >= NEARLY_CONSTANT * len(values):
            what = f"{covariate.label} has one and the same value at {counts.max()} of {len(values)} sites"
            action = "kept: its coefficient rests on the few others"
            findings.append(Finding(None, None, covariate.label, "warning", what, action))


def _check_at(
    covariates: tuple[Covariate, ...],
    terms: tuple[str, ...],
    lower: Floats,
    upper: Floats,
    findings: list[Finding],
) -> None:
    for covariate in covariates:
        if not isinstance(covariate, ColumnCovariate) or covariate.at is None:
            continue
        term = terms.index(covariate.label)
        value = transformed(np.array([float(covariate.at)]), covariate.transform)[0]
        if not lower[term] <= value <= upper[term]:
            what = f"at={covariate.at:g} is outside the values of {covariate.label} at the sites"
            action = "every cell is marked as extrapolated"
            findings.append(Finding(None, None, covariate.label, "warning", what, action))


def _collinear(X: Floats, terms: tuple[str, ...]) -> list[Finding]:
    """Return a warning for every term that is nearly a combination of the others."""
    if X.shape[1] < 3:
        return []
    if len(X) <= X.shape[1]:
        what = f"{len(terms)} coefficients for {len(X)} distinct sites"
        action = "kept: the priors of the coefficients decide more than the data"
        return [Finding(None, None, None, "warning", what, action)]
    findings = []
    with np.errstate(divide="ignore", invalid="ignore"), warnings.catch_warnings():
        # An exact combination divides by zero: its factor is infinite.
        warnings.simplefilter("ignore")
        factors = [float(variance_inflation_factor(X, term)) for term in range(1, X.shape[1])]
        likeness = np.asarray(np.corrcoef(X[:, 1:], rowvar=False))
    np.fill_diagonal(likeness, 0.0)
    for place, factor in enumerate(factors):
        if factor <= COLLINEAR_ABOVE:
            continue
        other = int(np.argmax(np.abs(likeness[place])))
        size = f"{factor:.3g}" if factor < 1e6 else "without bound"
        what = (
            f"{terms[place + 1]} is nearly a combination of other covariates: variance inflation factor "
            f"{size}, closest to {terms[other + 1]} (correlation {likeness[place, other]:.2f})"
        )
        action = "kept: coefficients cannot be told apart; leave one out"
        findings.append(Finding(None, None, terms[place + 1], "warning", what, action))
    return findings
