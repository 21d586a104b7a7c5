"""What the accepted rows say about each other: repeats, sites with several rows or places, missing zeros."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pyproj import CRS, Geod

from prevmap.inputs.findings import Finding, listed, row_label
from prevmap.inputs.reading import cell_text

# Where more sites than this share a finding, one finding for all of them is easier to read.
LISTED_SITES = 10

# A survey without one negative site is doubted where that has less than this probability.
NO_ZERO_PROBABILITY = 0.01

# Or where at least this many should be there whatever the spread between sites. Of complete surveys without
# a zero, simulated with 10 to 150 sites, about 1 in 100 and at most 1 in 40 reach it.
FEWEST_UNSEEN = 4.0


def comparison_findings(frame: gpd.GeoDataFrame, unplaced: pd.DataFrame) -> list[Finding]:
    """Return what the rows of a survey say about each other.

    Parameters
    ----------
    frame : GeoDataFrame
        Accepted rows with columns site, examined, positive, geometry; index: row.
    unplaced : DataFrame
        Rows without a position, same columns without geometry.

    Returns
    -------
    list of Finding
        No error among them: every row stays in use.
    """
    placed = pd.DataFrame(frame.drop(columns="geometry"))
    placed["geometry"] = frame.geometry.to_wkb(hex=True)
    # As objects, because concat would look for a common type of columns that are empty in one part.
    rows = pd.concat([placed.astype(object), unplaced.astype(object)]) if len(unplaced) else placed
    return [
        *_missing_zeros(rows),
        *_identical(rows),
        *_several_rows(rows),
        *_several_positions(frame),
        *_shared_positions(frame),
    ]


def _identical(rows: pd.DataFrame) -> list[Finding]:
    columns = [[_comparable(cell) for cell in rows[name]] for name in rows.columns]
    keys = pd.Series(list(zip(*columns, strict=True)), dtype=object)
    repeated = keys.duplicated().to_numpy()
    if not repeated.any():
        return []
    if (rows["examined"] == 1).all():
        what = f"{int(repeated.sum())} rows are identical to another; every row is one person"
        return [Finding(None, None, None, "note", what, "kept and pooled by site")]
    first: dict[object, int] = {}
    findings = []
    for at, key in enumerate(keys):
        origin = first.setdefault(key, at)
        if origin != at:
            what = f"identical to row {row_label(rows.index[origin])} in every column"
            action = "kept and pooled; leave it out if it was entered twice"
            row, site = row_label(rows.index[at]), str(rows["site"].iloc[at])
            findings.append(Finding(row, site, None, "warning", what, action))
    return findings


def _several_rows(rows: pd.DataFrame) -> list[Finding]:
    groups = {site: list(map(row_label, labels)) for site, labels in _by(rows["site"], rows.index)}
    found = [
        Finding(labels[0], site, "site", "note", f"site has {len(labels)} rows: {listed(labels)}", _POOLED)
        for site, labels in groups.items()
        if len(labels) > 1
    ]
    return _gathered(found, "sites have several rows", _POOLED)


_POOLED = "rows with equal covariates are pooled; other rows of the site share one site effect"


def _several_positions(frame: gpd.GeoDataFrame) -> list[Finding]:
    action = "each row keeps its position; correct the site or the position if they are one place"
    x, y = frame.geometry.x.to_numpy(), frame.geometry.y.to_numpy()
    rows, crs = list(map(row_label, frame.index)), frame.crs
    found = []
    for site, places in _by(frame["site"], range(len(frame))):
        positions = {(x[at], y[at]) for at in places}
        if len(positions) > 1:
            away = _distance_km(crs, x[places], y[places])
            farthest = places[int(np.argmax(away))]
            distance = f"row {rows[farthest]} is {_length(away.max())} from row {rows[places[0]]}"
            what = f"site has {len(positions)} positions; {distance}"
            found.append(Finding(rows[farthest], site, "site", "warning", what, action))
    return _gathered(found, "sites have several positions", action)


def _shared_positions(frame: gpd.GeoDataFrame) -> list[Finding]:
    action = "kept as different sites with a site effect each; give them one site id if they are one place"
    where = zip(frame.geometry.x, frame.geometry.y, strict=True)
    rows, names = list(map(row_label, frame.index)), list(frame["site"])
    found = []
    for _, places in _by(where, range(len(frame))):
        sites = list(dict.fromkeys(names[at] for at in places))
        if len(sites) > 1:
            what = f"sites share one position: {listed(sites)}"
            found.append(Finding(rows[places[0]], sites[0], "site", "note", what, action))
    return _gathered(found, "positions are shared by several sites", action)


def _missing_zeros(rows: pd.DataFrame) -> list[Finding]:
    """Warn where no site is free of positives although some should be.

    Two rules, either is enough. Under one common prevalence p the probability that none of the sites has
    zero positive is prod(1 - (1 - p)^n). Where prevalence varies between sites, those with one and with two
    positives tell how many with none there are at least (`unseen_zeros`).
    """
    sites = rows.groupby("site")[["examined", "positive"]].sum().astype(float)
    examined = sites["examined"].to_numpy(dtype=float)
    positive = sites["positive"].to_numpy(dtype=float)
    share = float(positive.sum() / examined.sum())
    if (positive == 0).any() or share >= 1.0:
        return []
    zero = np.exp(examined * np.log1p(-share))
    none = float(np.exp(np.log1p(-zero).sum()))
    unseen = unseen_zeros(positive)
    if none < NO_ZERO_PROBABILITY:
        why = (
            f"at the overall {100 * share:.1f} % about {zero.sum():.1f} would be expected, and none at all "
            f"has probability {none:.2g}"
        )
    elif unseen >= FEWEST_UNSEEN:
        why = (
            f"with {int((positive == 1).sum())} sites with one positive and {int((positive == 2).sum())} with "
            f"two, about {unseen:.0f} or more would be expected"
        )
    else:
        return []
    what = f"none of the {len(sites)} sites has zero positive; {why}"
    action = "used as they are; if sites without positives were left out, prevalence is too high: add them"
    return [Finding(None, None, "positive", "warning", what, action)]


def unseen_zeros(positive: NDArray[np.float64]) -> float:
    """Return a lower bound of the number of sites with zero positive, from those with one and with two.

    Parameters
    ----------
    positive : (n,) float
        Positive persons at each site.

    Returns
    -------
    float
        f1 (f1 - 1) / (2 (f2 + 1)), with f1 and f2 the numbers of sites with exactly one and two positives: the
        form of f1^2 / (2 f2) that needs no f2 above zero.

    Notes
    -----
    Chao, A. (1984). Nonparametric estimation of the number of classes in a population. Scandinavian Journal
    of Statistics 11:265-270. By the inequality of Cauchy and Schwarz it holds for counts that are Poisson
    with any distribution of means, so that it does not mistake spread between sites for missing zeros.

    Examples
    --------
    >>> unseen_zeros(np.array([1.0, 1.0, 1.0, 1.0, 2.0, 2.0, 7.0]))
    2.0
    """
    once, twice = float((positive == 1).sum()), float((positive == 2).sum())
    return once * (once - 1.0) / (2.0 * (twice + 1.0))


def _comparable(cell: object) -> object:
    """Return a cell so that equal cells are equal keys: text trimmed, empty cells None."""
    if isinstance(cell, str | int | float):
        return cell_text(cell) if isinstance(cell, str) else cell if cell == cell else None
    return repr(cell) if isinstance(cell, list | dict | set) else cell_text(cell)


def _by(keys: Iterable[Any], members: Iterable[Any]) -> list[tuple[Any, list[Any]]]:
    groups: dict[Any, list[Any]] = {}
    for key, member in zip(keys, members, strict=True):
        groups.setdefault(key, []).append(member)
    return list(groups.items())


def _gathered(found: list[Finding], text: str, action: str) -> list[Finding]:
    if len(found) <= LISTED_SITES:
        return found
    what = f"{len(found)} {text}: {listed(finding.site for finding in found)}"
    return [Finding(None, None, "site", found[0].severity, what, action)]


def _distance_km(crs: CRS, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Return (n,) distances from the first point to each."""
    if crs.is_geographic:
        ellipsoid = crs.get_geod() or Geod(ellps="WGS84")
        start = (np.full(len(x), x[0]), np.full(len(y), y[0]))
        return np.asarray(ellipsoid.inv(*start, x, y)[2]) / 1000.0
    return np.hypot(x - x[0], y - y[0]) * crs.axis_info[0].unit_conversion_factor / 1000.0


def _length(km: float) -> str:
    return f"{km:,.1f} km" if km >= 1.0 else f"{1000.0 * km:.0f} m"
