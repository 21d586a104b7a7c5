"""The slips of hand that a set of positions gives away: impossible, exchanged, signless, in other units."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from pyproj.exceptions import CRSError

from prevmap.inputs.findings import Remark, listed
from prevmap.inputs.reading import cell_text

# A site is an outlier beyond this many median distances from the median position, and this far away.
OUTLIER_RADII = 6.0
OUTLIER_FLOOR = {"degrees": 1.0, "projected": 100_000.0}


def position_remarks(xy: NDArray[np.float64], crs: CRS, fields: tuple[str, str]) -> list[Remark]:
    """Return what is wrong with positions; an error means that the position must not be used.

    Parameters
    ----------
    xy : (n, 2) float array
        Longitude and latitude in degrees, or x and y in the unit of `crs`; NaN rows are left aside.
    crs : pyproj.CRS
        Geographic or projected.
    fields : (str, str)
        What findings call the two coordinates.

    Notes
    -----
    Exchanged coordinates and lost signs are proposed, never applied: a row is suspected where it lies more
    than `OUTLIER_RADII` median distances from the median position (and a fixed floor away), and the
    correction would bring it among the other sites. The row is then not used until the table is corrected.
    """
    remarks: list[Remark] = []
    known = np.asarray(~np.isnan(xy).any(axis=1))
    zero = known & np.asarray((np.abs(xy) < 1e-9).all(axis=1))
    if not crs.is_geographic and _origin_is_among(
        xy[known & ~zero], OUTLIER_FLOOR["projected"] / _metres_per_unit(crs)
    ):
        for at in np.flatnonzero(zero).tolist():
            what = "the position is (0, 0): a place among the other sites, or one that was not taken"
            remarks.append(Remark(at, "position", "warning", what, "used as it is; check the position"))
        zero[:] = False
    for at in np.flatnonzero(zero).tolist():
        what = (
            f"the position is ({xy[at, 0]:g}, {xy[at, 1]:g}), which stands for a position that was not taken"
        )
        remarks.append(Remark(at, "position", "error", what, "row not used: no position"))
    usable = known & ~zero
    if crs.is_geographic:
        impossible = usable & ((np.abs(xy[:, 0]) > 180.0) | (np.abs(xy[:, 1]) > 90.0))
        remarks += _impossible_degrees(xy, impossible, usable, fields)
        return remarks + _misplaced(xy, usable & ~impossible, OUTLIER_FLOOR["degrees"], fields)
    unlike = usable & _degrees_among_metres(xy, usable)
    for at in np.flatnonzero(unlike).tolist():
        what = f"({xy[at, 0]:g}, {xy[at, 1]:g}) look like degrees among projected coordinates"
        action = "row not used: convert it to the coordinate system of the other rows"
        remarks.append(Remark(at, "position", "error", what, action))
    usable &= ~unlike
    misplaced = _misplaced(xy, usable, OUTLIER_FLOOR["projected"] / _metres_per_unit(crs), fields)
    usable[[remark.at for remark in misplaced if remark.at is not None and remark.severity == "error"]] = (
        False
    )
    return [*remarks, *misplaced, *_outside_area_of_use(xy, usable, crs)]


def stated_crs_remarks(name: str, cells: Sequence[object], crs: CRS) -> list[Remark]:
    """Return what a column that names coordinate systems says about the one the table is read in.

    Parameters
    ----------
    name : str
        The column, e.g. "crs" or "epsg".
    cells : (n,) sequence
        What it holds; empty cells are taken to agree.
    crs : pyproj.CRS
        The system all rows are read in.

    Notes
    -----
    Where rows differ, those in another system are errors, because their position would be wrong. Where all
    rows state one and the same other system, that is a warning: the caller may know better.
    """
    texts = [cell_text(cell) for cell in cells]
    kinds = {text: _known_crs(text) for text in dict.fromkeys(texts) if text is not None}
    other = {text for text, found in kinds.items() if found and not found.equals(crs, ignore_axis_order=True)}
    unknown = [text for text, found in kinds.items() if found is None]
    remarks: list[Remark] = []
    if len(kinds) == 1 and other:
        what = f"column {name!r} states {next(iter(other))!r} in all rows, the table is read in {crs.name!r}"
        remarks.append(Remark(None, "crs", "warning", what, f"read in {crs.name!r}"))
    elif len(kinds) > 1:
        for at, text in enumerate(texts):
            if text in other:
                what = f"column {name!r} states {text!r}, the table is read in {crs.name!r}"
                action = "row not used: convert its position to the coordinate system of the table"
                remarks.append(Remark(at, "crs", "error", what, action))
        if unknown:
            what = f"column {name!r} states several coordinate systems: {listed(map(repr, kinds))}"
            action = f"{listed(map(repr, unknown))} cannot be looked up; those rows are read in {crs.name!r}"
            remarks.append(Remark(None, "crs", "warning", what, action))
    return remarks


def _known_crs(text: str) -> CRS | None:
    try:
        return CRS.from_user_input(int(text) if text.isdecimal() else text)
    except CRSError:
        return None


def _origin_is_among(others: NDArray[np.float64], floor: float) -> bool:
    """Whether the origin of a projected coordinate system is where a survey could be."""
    if not len(others):
        return True
    centre = np.median(others, axis=0)
    radius = float(np.median(np.hypot(*(others - centre).T)))
    return float(np.hypot(*centre)) <= max(OUTLIER_RADII * radius, floor)


def _impossible_degrees(
    xy: NDArray[np.float64], impossible: NDArray[np.bool_], usable: NDArray[np.bool_], fields: tuple[str, str]
) -> list[Remark]:
    remarks: list[Remark] = []
    exchangeable = impossible & (np.abs(xy[:, 0]) <= 90.0) & (np.abs(xy[:, 1]) <= 180.0)
    possible = np.unique(xy[usable & ~impossible], axis=0)
    if len(possible) >= 4 and len(possible) > exchangeable.sum():
        # Among known sites an exchange is worth proposing only where it leads to them.
        centre, radius = _centre(possible)
        away = np.hypot(*(xy[:, ::-1] - centre).T)
        exchangeable &= away <= max(OUTLIER_RADII * radius, OUTLIER_FLOOR["degrees"])
    for at in np.flatnonzero(impossible):
        x, y = xy[at]
        k = 1 if abs(y) > 90.0 else 0
        what = f"{fields[k]} is {xy[at, k]:g}, outside -{(180, 90)[k]} to {(180, 90)[k]}"
        action = "row not used: no position"
        if exchangeable[at]:
            what += f"; {fields[0]} and {fields[1]} may be exchanged ({fields[0]} {y:g}, {fields[1]} {x:g})"
            action += "; correct the table if so, nothing was exchanged"
        elif max(abs(x), abs(y)) > 1000.0:
            what += "; it looks like a projected coordinate"
            action += "; convert it to degrees, or give the columns as x= and y= with crs="
        remarks.append(Remark(int(at), fields[k], "error", what, action))
    if exchangeable.sum() >= max(2, 0.2 * usable.sum()):
        rows = int(exchangeable.sum())
        total = int(usable.sum())
        what = f"{rows} of {total} positions are possible only with {fields[0]} and {fields[1]} exchanged"
        action = f"nothing was exchanged; check which column is {fields[0]} and which is {fields[1]}"
        remarks.insert(0, Remark(None, "position", "warning", what, action))
    return remarks


def _degrees_among_metres(xy: NDArray[np.float64], usable: NDArray[np.bool_]) -> NDArray[np.bool_]:
    small = (np.abs(xy[:, 0]) <= 180.0) & (np.abs(xy[:, 1]) <= 90.0)
    others = usable & ~small
    if not others.any() or np.median(np.abs(xy[others]).max(axis=1)) < 10_000.0:
        return np.zeros(len(xy), dtype=bool)
    return small


def _metres_per_unit(crs: CRS) -> float:
    return float(crs.axis_info[0].unit_conversion_factor) if crs.axis_info else 1.0


def _outside_area_of_use(xy: NDArray[np.float64], usable: NDArray[np.bool_], crs: CRS) -> list[Remark]:
    """Say where positions lie far outside the area a projected CRS is made for (wrong zone, or km for m)."""
    area = crs.area_of_use
    if area is None or not usable.any():
        return []
    lon, lat = Transformer.from_crs(crs, "EPSG:4326", always_xy=True).transform(xy[usable, 0], xy[usable, 1])
    margin = 5.0
    width = (area.east - area.west) % 360.0 or 360.0
    inside = (lat >= area.south - margin) & (lat <= area.north + margin) & np.isfinite(lon)
    inside &= ((lon - area.west + margin) % 360.0 <= width + 2.0 * margin) | (width + 2.0 * margin >= 360.0)
    if inside.all():
        return []
    places = np.flatnonzero(usable)[~inside]
    x, y = xy[places[0]]
    what = (
        f"{len(places)} of {int(usable.sum())} positions, e.g. ({x:g}, {y:g}), lie far outside the area "
        f"of use of {crs.name!r}"
    )
    action = (
        "used as they are; check the coordinate system, and that the unit is its own (metres, not kilometres)"
    )
    return [Remark(int(places[0]) if len(places) == 1 else None, "position", "warning", what, action)]


def _misplaced(
    xy: NDArray[np.float64], usable: NDArray[np.bool_], floor: float, fields: tuple[str, str]
) -> list[Remark]:
    """Find positions that leave the other sites and would return with one usual slip undone."""
    places = np.unique(xy[usable], axis=0)
    if len(places) < 4:
        return []
    centre, radius = _centre(places)
    distance = np.hypot(*(xy - centre).T)
    far = usable & (distance > max(OUTLIER_RADII * radius, floor))
    core = usable & ~far
    if not far.any() or not core.any():
        return []
    reach = float(distance[core].max()) * 1.05 + 0.05 * floor
    slips: list[tuple[str, Any]] = [
        (f"{fields[0]} and {fields[1]} exchanged", lambda p: p[::-1]),
        (f"the sign of {fields[0]} changed", lambda p: p * (-1.0, 1.0)),
        (f"the sign of {fields[1]} changed", lambda p: p * (1.0, -1.0)),
        (f"both exchanged and the sign of {fields[0]} changed", lambda p: p[::-1] * (-1.0, 1.0)),
        (f"both exchanged and the sign of {fields[1]} changed", lambda p: p[::-1] * (1.0, -1.0)),
    ]
    remarks: list[Remark] = []
    unexplained: list[int] = []
    for at in map(int, np.flatnonzero(far)):
        x, y = xy[at]
        here = f"({x:g}, {y:g}) is far from the other sites (around {centre[0]:g}, {centre[1]:g})"
        for slip, undone in slips:
            proposed = undone(xy[at])
            if np.hypot(*(proposed - centre)) <= reach:
                what = f"{here}; with {slip} it would be among them, at ({proposed[0]:g}, {proposed[1]:g})"
                action = "row not used: correct the table if so, nothing was exchanged"
                remarks.append(Remark(at, "position", "error", what, action))
                break
        else:
            unexplained.append(at)
            remarks.append(Remark(at, "position", "warning", here, "used as it is; check the position"))
    if len(unexplained) > 10:
        shown = listed(f"({xy[at, 0]:g}, {xy[at, 1]:g})" for at in unexplained)
        what = f"{len(unexplained)} positions are far from the other sites: {shown}"
        kept = [remark for remark in remarks if remark.severity == "error"]
        return [*kept, Remark(None, "position", "warning", what, "used as they are; check the positions")]
    return remarks


def _centre(places: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
    """Return the median position and the median distance from it; neither is moved by a few slips."""
    centre = np.median(places, axis=0)
    return centre, float(np.median(np.hypot(*(places - centre).T)))
