"""Where survey sites lie: inside the study area or how far from it, and in which unit."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray

from prevmap.errors import InputError
from prevmap.inputs.findings import Finding, number_text, row_label
from prevmap.inputs.layer import nearest

if TYPE_CHECKING:
    from prevmap.inputs.region import Region
    from prevmap.inputs.survey import Survey

OUTSIDE = -1


def site_findings(
    frame: gpd.GeoDataFrame, region: Region, margin_km: float
) -> tuple[NDArray[np.bool_], list[Finding]]:
    """Return which rows of a survey lie near enough to the region to be kept, and the findings.

    Parameters
    ----------
    frame : GeoDataFrame, n rows
        Accepted rows of a survey; column "site" where there is one.
    region : Region
        The study area.
    margin_km : float
        Rows outside by up to this distance are kept with a note; rows farther out are errors.

    Returns
    -------
    keep : (n,) bool
    findings : list of Finding
    """
    xy = 1000.0 * region.project(frame)
    points = shapely.points(xy)
    distance_km = shapely.distance(region.boundary, points) / 1000.0
    excluded = np.zeros(len(points), dtype=bool)
    if region.exclude is not None:
        excluded = (distance_km > 0.0) & shapely.intersects(region.exclude, points)
    keep = excluded | (distance_km <= margin_km)
    sites = _texts(frame, "site")
    findings = []
    for place in np.flatnonzero(distance_km > 0.0):
        row, site = row_label(frame.index[place]), sites[place]
        away = f"{number_text(distance_km[place])} km"
        if excluded[place]:
            what = f"lies on excluded land (such as water), {away} from the study area's land"
            findings.append(Finding(row, site, "position", "note", what, "kept; check the position"))
        elif keep[place]:
            what = f"lies {away} outside the study area"
            action = f"kept: it is within {number_text(margin_km)} km"
            findings.append(Finding(row, site, "position", "note", what, action))
        else:
            what = f"lies {away} outside the study area (more than {number_text(margin_km)} km)"
            action = "row not used; check longitude and latitude, or the region"
            findings.append(Finding(row, site, "position", "error", what, action))
    return keep, findings


def exchange_hint(frame: gpd.GeoDataFrame, region: Region, margin_km: float) -> str:
    """Return a sentence where sites miss the region and would meet it with lon and lat exchanged, else "".

    Nothing is exchanged: which of the two is at fault, and whether, only their makers can know.

    Parameters
    ----------
    frame : GeoDataFrame, n rows
        Accepted rows of a survey, in degrees; in another coordinate system there is no hint.
    region : Region
        The study area. Its file may be the one with exchanged coordinates: the sentence is the same.
    margin_km : float
        Sites outside the region by up to this distance meet it.

    Returns
    -------
    str
        For the end of a message, beginning with a space; empty where a site meets the region as it is, or
        most would not with the coordinates exchanged.
    """
    if not len(frame) or frame.crs is None or not frame.crs.is_geographic:
        return ""
    lon, lat = frame.geometry.x.to_numpy(), frame.geometry.y.to_numpy()
    possible = np.abs(lon) <= 90.0
    exchanged = gpd.GeoSeries(gpd.points_from_xy(lat[possible], lon[possible]), crs=frame.crs)
    near = int(_near(exchanged, region, margin_km).sum())
    if _near(frame.geometry, region, margin_km).any() or 2 * near <= len(frame):
        return ""
    return (
        f" With lon and lat exchanged, {near:,} of {len(frame):,} rows would lie in or near it: exchange lon= "
        f"and lat= if so, or correct {region.source} if its own coordinates are exchanged"
    )


def _near(points: gpd.GeoSeries, region: Region, margin_km: float) -> NDArray[np.bool_]:
    try:
        xy = 1000.0 * region.project(points)
    except InputError:  # too far away for the region's coordinate system
        return np.zeros(len(points), dtype=bool)
    return np.asarray(shapely.distance(region.boundary, shapely.points(xy)) <= 1000.0 * margin_km)


def assign_units(
    survey: Survey, region: Region, keep: NDArray[np.bool_] | None = None
) -> tuple[NDArray[np.int64], list[Finding]]:
    """Return the unit each accepted row of a survey lies in, by position, and the findings.

    A row outside every unit counts in the unit it declares where that is also the nearest unit (a school on
    the shore of a roughly drawn coast); the finding says so.

    Parameters
    ----------
    survey : Survey
        With n accepted rows.
    region : Region
    keep : (n,) bool, optional
        Rows near enough to the region (`site_findings`); the others are in no unit, without a finding.

    Returns
    -------
    unit : (n,) int
        Row of ``region.units``; -1 outside every unit. The first of overlapping units is taken.
    findings : list of Finding
        A declared unit that is unknown or is not the one at the position.
    """
    frame = survey.frame
    unit = np.full(len(frame), OUTSIDE, dtype=np.int64)
    if not region.has_units or not len(frame):
        return unit, []
    points = shapely.points(1000.0 * region.project(frame))
    tree = shapely.STRtree(np.asarray(region.units.geometry.array, dtype=object))
    which, inside = tree.query(points, predicate="intersects")
    # Written in reverse order of units, so that the first of overlapping units stays.
    order = np.argsort(-inside, kind="stable")
    unit[which[order]] = inside[order]
    kept = np.ones(len(frame), dtype=bool) if keep is None else keep
    unit[~kept] = OUTSIDE
    if not survey.has_unit:
        return unit, []
    names = region.units["unit"].tolist()
    codes = region.units["code"].tolist()
    declared = _texts(frame, "unit")
    sites = _texts(frame, "site")
    findings = []
    for place, text in enumerate(declared):
        if not text or not kept[place]:
            continue
        row = row_label(frame.index[place])
        here = names[unit[place]] if unit[place] >= 0 else None
        named = _place_of(text, names, codes)
        if named == unit[place]:
            continue
        if named < 0:
            what = f"declares unit {text!r}, which is not in the region{_hint(text, names)}"
            action = f"counted in {here!r} by position" if here is not None else "counted in no unit"
        elif here is None and tree.nearest(points[place]) == named:
            unit[place] = named
            what = f"lies outside every unit; the nearest is the unit it declares, {text!r}"
            findings.append(Finding(row, sites[place], "unit", "note", what, f"counted in {text!r}"))
            continue
        elif here is None:
            what = f"lies outside every unit but declares {text!r}, which is not the nearest"
            action = "counted in no unit; check the position"
        else:
            what = f"declares unit {text!r} but lies in {here!r}"
            action = f"counted in {here!r} by position; check both"
        findings.append(Finding(row, sites[place], "unit", "warning", what, action))
    return unit, findings


def assign_unplaced(survey: Survey, region: Region) -> tuple[NDArray[np.int64], list[Finding]]:
    """Return the unit each row without a position names, and the findings.

    Returns
    -------
    unit : (k,) int
        Row of ``region.units`` for each row of ``survey.unplaced``, by the unit's name or else its code; -1
        where the region has no such unit.
    findings : list of Finding
        Units the region lacks, and those it writes in another way.
    """
    frame = survey.unplaced
    unit = np.full(len(frame), OUTSIDE, dtype=np.int64)
    findings = []
    names = region.units["unit"].tolist()
    codes = region.units["code"].tolist()
    sites = _texts(frame, "site")
    for place, text in enumerate(_texts(frame, "unit")):
        row = row_label(frame.index[place])
        unit[place] = _place_of(text or "", names, codes)
        if unit[place] < 0:
            what = f"has no position, and its unit {text!r} is not in the region{_hint(text or '', names)}"
            findings.append(Finding(row, sites[place], "unit", "error", what, "row not used"))
        elif names[unit[place]] != (text or "").strip():
            # A unit named as in the region needs no note: the survey has one for every such row.
            what = f"has no position; its unit {text!r} is {names[unit[place]]!r} of the region"
            action = "enters only the unit's direct estimate"
            findings.append(Finding(row, sites[place], "unit", "note", what, action))
    return unit, findings


def _place_of(text: str, names: list[str], codes: list[Any]) -> int:
    wanted = text.strip().casefold()
    for labels in (names, codes):
        folded = [str(label).strip().casefold() if label is not None else None for label in labels]
        if wanted and wanted in folded:
            return folded.index(wanted)
    return OUTSIDE


def _hint(text: str, names: list[str]) -> str:
    near = nearest(text, names)
    return f" (did you mean {near}?)" if near else ""


def _texts(frame: Any, name: str) -> list[str | None]:
    if name not in frame.columns:
        return [None] * len(frame)
    return [None if value is None or pd.isna(value) else str(value) for value in frame[name]]
