"""Positions: coordinates read from two columns (decimal, or degrees and minutes) or from a geometry."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import geopandas as gpd
import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from prevmap.errors import InputError
from prevmap.inputs.findings import Remark
from prevmap.inputs.reading import (
    Reading,
    cell_text,
    is_decimal_comma,
    is_missing,
    plain,
    quoted,
    read_number,
)

Axis = Literal["lon", "lat"]

_NUMBER = r"\d+(?:[.,]\d+)?"
_DEGREES = r"\s*(?:[°º˚:]|deg)\s*|\s+"
_MINUTES = r"\s*(?:['′’´`ʹ:]|min)\s*|\s+"
_SECONDS = r"\s*(?:[\"″”ʺ]|''|′′|’’|´´|sec)\s*"
_SYMBOLS = re.compile(
    rf"(?P<first>[NSEWO])?\s*(?P<sign>[+-])?\s*(?P<d>{_NUMBER})"
    rf"(?:(?P<d_mark>{_DEGREES})(?:(?P<m>{_NUMBER})(?:(?P<m_mark>{_MINUTES})(?:(?P<s>{_NUMBER})(?:{_SECONDS})?)?)?)?)?"
    r"\s*(?P<last>[NSEWO])?",
    flags=re.IGNORECASE,
)
# In "1d17m30s" the s is a mark; as a hemisphere it has to be a capital, or the sign would be a guess.
_LETTERS = re.compile(
    rf"(?P<first>[NSEWO])?\s*(?P<sign>[+-])?\s*(?P<d>{_NUMBER})\s*d\s*(?P<m>{_NUMBER})\s*m"
    rf"(?:\s*(?P<s>{_NUMBER})\s*s)?\s*(?P<last>[NSEWO])?"
)


@dataclass(frozen=True, slots=True)
class Positions:
    """Where the rows are.

    Parameters
    ----------
    xy : (n, 2) float array
        x and y (longitude, latitude) as read; NaN where there is no usable position.
    absent : (n,) bool array
        Rows that state no position at all, which is different from a wrong one.
    remarks : list of Remark
        What was noticed; a row with an error has no usable position.
    decimal : {".", ","}
        Decimal sign of the table, as declared or as the coordinates show it.
    """

    xy: NDArray[np.float64]
    absent: NDArray[np.bool_]
    remarks: list[Remark]
    decimal: str


def read_degrees(value: object, axis: Axis, decimal: str | None = None) -> tuple[Reading, bool]:
    r"""Read one longitude or latitude.

    Parameters
    ----------
    value : object
        A number, or text: "36.82", "36,82", "36°49'12.5\"E", "S 1 17.5", "1d17m30s".
    axis : {"lon", "lat"}
        Which coordinate it is: "N" or "S" is refused in a longitude.
    decimal : {".", ","}, optional
        Declared decimal sign; left out, a comma counts as one, since degrees have no thousands.

    Returns
    -------
    reading : Reading
        Degrees, south and west negative; the range is not checked here.
    in_parts : bool
        Whether the cell held degrees and minutes, or a hemisphere letter, and was converted.

    Examples
    --------
    >>> read_degrees("1°17'30\"S", "lat")
    (Reading(value=-1.2916666666666667, problem=None), True)
    >>> read_degrees("36 49", "lon")[0].problem
    "'36 49' can be read in two ways: mark degrees and minutes, or write one number"
    """
    if not isinstance(value, str) or is_missing(value):
        return read_number(value), False
    text = plain(value).replace("d.", "d")
    simple = read_number(text, "," if decimal is None and "," in text else decimal or ".")
    if simple.problem is None or re.fullmatch(r"[+-]?[\d.,]+", text):
        return simple, False
    match = _SYMBOLS.fullmatch(text) or _LETTERS.fullmatch(text)
    if match is None:
        return Reading(problem=f"{quoted(value)} is not a coordinate"), False
    return _from_parts(match, value, axis), True


def read_positions(
    first: Sequence[object],
    second: Sequence[object],
    *,
    fields: tuple[str, str],
    decimal: str | None,
    degrees: bool,
) -> Positions:
    """Read two columns of coordinates.

    Parameters
    ----------
    first, second : (n,) sequences
        Cells of longitude and latitude, or of x and y.
    fields : (str, str)
        What findings call them: ("lon", "lat") or ("x", "y").
    decimal : {".", ","} or None
        Declared decimal sign; None: judged from the cells.
    degrees : bool
        Whether they are degrees (which may be written in degrees, minutes and seconds).
    """
    n = len(first)
    values = np.full((n, 2), np.nan)
    absent = np.zeros((n, 2), dtype=bool)
    remarks: list[Remark] = []
    sign = decimal or _decimal_sign([first, second], degrees)
    commas = 0
    for k, (cells, axis) in enumerate(zip((first, second), ("lon", "lat"), strict=True)):
        parts: list[int] = []
        for at, cell in enumerate(cells):
            if degrees:
                reading, in_parts = read_degrees(cell, axis, decimal)  # type: ignore[arg-type]
            else:
                reading, in_parts = read_number(cell, sign), False
            absent[at, k] = reading == Reading()
            commas += isinstance(cell, str) and "," in cell and reading.value is not None
            if reading.problem:
                remarks.append(Remark(at, fields[k], "error", reading.problem, "row not used: no position"))
            elif reading.value is not None:
                values[at, k] = reading.value
                if in_parts:
                    parts.append(at)
        remarks += _parts_remarks(parts, cells, values[:, k], fields[k])
    if commas and decimal is None:
        what = f"{commas} coordinates are written with a decimal comma"
        remarks.append(Remark(None, f"{fields[0]}, {fields[1]}", "note", what, "read as decimal numbers"))
    for at in map(int, np.flatnonzero(absent[:, 0] != absent[:, 1])):
        field, given = fields if absent[at, 0] else fields[::-1]
        cell = first[at] if given == fields[0] else second[at]
        what = f"{field} is missing, {given} is {quoted(cell)}"
        remarks.append(Remark(at, field, "error", what, "row not used: no position"))
    values[np.isnan(values).any(axis=1)] = np.nan
    return Positions(values, np.asarray(absent.all(axis=1)), remarks, sign)


def geometry_positions(geometry: gpd.GeoSeries, decimal: str) -> Positions:
    """Read the positions of a layer; a line or an area is placed by a point inside it."""
    shapes = shapely.force_2d(np.asarray(geometry.array, dtype=object))
    absent = shapely.is_missing(shapes) | shapely.is_empty(shapes)
    single = shapely.get_type_id(shapes) == 0
    xy = np.full((len(shapes), 2), np.nan)
    points = shapes.copy()
    wide = ~absent & ~single
    points[wide] = shapely.point_on_surface(shapely.make_valid(shapes[wide]))
    xy[~absent] = shapely.get_coordinates(points[~absent])
    broken = ~absent & ~np.isfinite(xy).all(axis=1)
    xy[broken] = np.nan
    remarks = [
        Remark(
            int(at),
            "position",
            "error",
            "the coordinates are not finite numbers",
            "row not used: no position",
        )
        for at in np.flatnonzero(broken)
    ]
    if wide.any():
        kinds = ", ".join(sorted(set(geometry.geom_type[wide])))
        what = f"{int(wide.sum())} rows have a shape instead of a point ({kinds})"
        remarks.append(
            Remark(None, "position", "note", what, "a point inside each shape is used as its position")
        )
    return Positions(xy, absent, remarks, decimal)


def crs_from(value: Any) -> CRS:
    """Return a coordinate system from an EPSG code, WKT or a pyproj.CRS, or raise an InputError naming it."""
    try:
        system = CRS.from_user_input(value)
    except (CRSError, TypeError, ValueError) as error:
        raise InputError(
            f"crs={value!r} is not a known coordinate system; accepted is e.g. 'EPSG:32736' or WKT."
        ) from error
    if not (system.is_geographic or system.is_projected):
        raise InputError(f"crs={value!r} ({system.name}) is neither geographic nor projected.")
    return system


def geometry_crs(geometry: gpd.GeoSeries, crs: Any, label: str) -> CRS:
    """Return the coordinate system of a geometry; `crs` names it where the geometry does not."""
    found = geometry.crs
    if found is None and crs is None:
        raise InputError(
            f"{label}: the geometry names no coordinate system (for a Shapefile: no .prj beside it). "
            "Give it as crs=, e.g. 'EPSG:4326' for longitude and latitude."
        )
    system = crs_from(found if crs is None else crs)
    if found is not None and not system.equals(CRS.from_user_input(found), ignore_axis_order=True):
        raise InputError(
            f"{label}: the geometry is in {CRS.from_user_input(found).name!r}, crs= says {system.name!r}. "
            "Leave crs= out, or correct the file."
        )
    return system


def _from_parts(match: re.Match[str], value: str, axis: Axis) -> Reading:
    found = match.groupdict()
    letters = [letter.upper() for letter in (found["first"], found["last"]) if letter]
    numbers = [found[name].replace(",", ".") for name in ("d", "m", "s") if found[name] is not None]
    if len(letters) > 1 or (letters and found["sign"]):
        return Reading(problem=f"{quoted(value)} gives its hemisphere twice")
    if letters == ["O"]:
        return Reading(
            problem=f"{quoted(value)} has the hemisphere O, which is east or west by language: write E or W"
        )
    if letters and letters[0] not in ("EW" if axis == "lon" else "NS"):
        names = ("longitude", "latitude") if axis == "lon" else ("latitude", "longitude")
        return Reading(
            problem=f"{quoted(value)} is a {names[1]} where a {names[0]} is expected: are the two exchanged?"
        )
    # "36 49" may be 36.49 with a lost point; three numbers, a mark or a letter leave one reading only.
    marked = letters or len(numbers) == 3 or (found.get("d_mark") or "d").strip()
    if len(numbers) == 2 and not marked:
        return Reading(
            problem=f"{quoted(value)} can be read in two ways: mark degrees and minutes, or write one number"
        )
    if any("." in number for number in numbers[:-1]):
        return Reading(problem=f"{quoted(value)} has decimals before its last part")
    parts = [float(number) for number in numbers]
    if any(part >= 60.0 for part in parts[1:]):
        return Reading(problem=f"{quoted(value)} has 60 minutes or seconds or more")
    degrees = sum(part * unit for part, unit in zip(parts, (3600.0, 60.0, 1.0), strict=False)) / 3600.0
    return Reading(-degrees if found["sign"] == "-" or letters in (["S"], ["W"]) else degrees)


def _decimal_sign(columns: list[Sequence[object]], degrees: bool) -> str:
    texts = [plain(cell) for cells in columns for cell in cells if isinstance(cell, str)]
    if degrees:
        return "," if any(re.fullmatch(r"[+-]?\d*,\d+", text) for text in texts) else "."
    return (
        ","
        if any(is_decimal_comma(text) for text in texts) and not any("." in text for text in texts)
        else "."
    )


def _parts_remarks(
    parts: list[int], cells: Sequence[object], values: NDArray[np.float64], field: str
) -> list[Remark]:
    """Note converted cells one by one where they are the exception, once where they are the rule."""
    texts = [f"{quoted(cell_text(cells[at]))} is in degrees, minutes or with a hemisphere" for at in parts]
    reads = [f"read as {values[at]:.6f} degrees" for at in parts]
    if len(parts) <= max(10, len(cells) // 10):
        return [
            Remark(at, field, "note", text, read) for at, text, read in zip(parts, texts, reads, strict=True)
        ]
    first = cell_text(cells[parts[0]])
    what = f"{len(parts)} cells are in degrees, minutes or with a hemisphere, e.g. {quoted(first)}"
    return [Remark(None, field, "note", what, f"converted to degrees, that one {reads[0]}")]
