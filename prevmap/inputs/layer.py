"""A layer of polygons or features read from a file, with its faults named by feature number."""

from __future__ import annotations

import difflib
import warnings
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from prevmap.errors import InputError
from prevmap.inputs.coverage import areal
from prevmap.inputs.findings import Finding
from prevmap.inputs.working_crs import check_degrees

LONG_EDGE_DEG = 0.02  # longer edges in degrees get extra corners, so that they stay straight in degrees


def read_layer(
    path: str | Path, *, crs: Any = None, must_agree: bool = True
) -> tuple[gpd.GeoDataFrame, list[Finding]]:
    """Return the features of a vector file and what was noticed while reading.

    Parameters
    ----------
    path : str or Path
        GeoJSON, GeoPackage, Shapefile, GeoParquet or another format that GDAL reads.
    crs : optional
        Coordinate system where the file names none (an EPSG code, WKT, or a pyproj.CRS).
    must_agree : bool
        Whether a file that names another coordinate system than `crs` is an error.

    Returns
    -------
    frame : GeoDataFrame
        Indexed by feature number, from 1, in the order of the file.
    findings : list of Finding

    Raises
    ------
    InputError
        If the file is missing, unreadable or empty, or has no coordinate system and none is given, or has
        one that contradicts `crs`.
    """
    file = Path(path)
    if not file.exists():
        raise InputError(f"{file}: there is no such file.")
    findings: list[Finding] = []
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        frame = _read(file, findings)
    for message in dict.fromkeys(str(warning.message) for warning in heard):
        findings.append(Finding(None, None, None, "note", f"reading {file.name}: {message}", "read as it is"))
    if frame.empty:
        raise InputError(f"{file}: the file holds no features.")
    frame = frame.set_crs(_agreed_crs(file, frame.crs, crs, must_agree), allow_override=True)
    check_degrees(np.asarray(frame.geometry.array, dtype=object), frame.crs, str(file))
    frame.index = np.arange(1, len(frame) + 1)
    frame.index.name = "row"
    return frame, findings


def polygons(frame: gpd.GeoDataFrame, source: str) -> tuple[NDArray[Any], list[Finding]]:
    """Return (n,) valid polygons or multipolygons, in the order of the frame, and what was repaired.

    Raises
    ------
    InputError
        If a feature has no geometry, no finite coordinates, or is not a polygon.
    """
    shapes = np.asarray(frame.geometry.array, dtype=object)
    shapes = shapely.force_2d(shapes)
    missing = shapely.is_missing(shapes) | shapely.is_empty(shapes)
    if missing.any():
        raise InputError(
            f"{source}: no geometry in {features(frame.index[missing])}. Remove or complete them."
        )
    bounds = shapely.bounds(shapes)
    if not np.isfinite(bounds).all():
        broken = frame.index[~np.isfinite(bounds).all(axis=1)]
        raise InputError(f"{source}: coordinates that are not numbers in {features(broken)}.")
    wrong = ~np.isin(shapely.get_type_id(shapes), (3, 6))
    if wrong.any():
        kinds = ", ".join(sorted(set(frame.geom_type[wrong])))
        raise InputError(f"{source}: polygons are expected, found {kinds} in {features(frame.index[wrong])}.")
    findings = []
    for place in np.flatnonzero(~shapely.is_valid(shapes)):
        row = int(frame.index[place])
        reason = shapely.is_valid_reason(shapes[place])
        repaired = areal(shapely.make_valid(shapes[place]))
        if repaired.is_empty:
            raise InputError(f"{source}: feature {row} encloses no area ({reason}).")
        shapes[place] = repaired
        what = f"the polygon of feature {row} is invalid: {reason}"
        action = "repaired so that every enclosed part is kept; check its outline on the map"
        findings.append(Finding(row, None, "geometry", "warning", what, action))
    return shapes, findings


def reproject(shapes: NDArray[Any], given: CRS, wanted: CRS) -> NDArray[Any]:
    """Return (n,) shapes in another coordinate system; long edges in degrees get extra corners first."""
    if given == wanted:
        return shapes
    if given.is_geographic:
        shapes = shapely.segmentize(shapes, LONG_EDGE_DEG)
    return np.asarray(gpd.GeoSeries(shapes, crs=given).to_crs(wanted).array, dtype=object)


def column(frame: Any, name: str, source: str, role: str) -> Any:
    """Return a column of a table, or raise an InputError that names the nearest columns."""
    if name in frame.columns:
        return frame[name]
    have = [str(each) for each in frame.columns if each != "geometry"]
    near = nearest(name, have)
    hint = f" Did you mean {near}?" if near else ""
    raise InputError(f"{source}: no column {name!r} ({role}).{hint} Columns: {', '.join(have) or 'none'}.")


def label_text(value: Any) -> str:
    """Return an entry of a table as text: trimmed, whole numbers without a decimal point, "" where empty.

    Examples
    --------
    >>> label_text(12.0), label_text(" north "), label_text(None)
    ('12', 'north', '')
    """
    if value is None or value is pd.NA or value is pd.NaT or value != value:  # NaN alone differs from itself
        return ""
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value).strip()


def nearest(name: str, known: Iterable[str]) -> str:
    """Return the known names closest to `name`, quoted and joined by "or" ("" where none is close)."""
    by_fold: dict[str, str] = {}
    for each in known:
        by_fold.setdefault(each.casefold(), each)
    close = difflib.get_close_matches(name.casefold(), by_fold, n=3, cutoff=0.6)
    return " or ".join(repr(by_fold[each]) for each in close)


def features(rows: Sequence[Any] | Any) -> str:
    """Return "feature 3" or "features 3, 4, 5, 6, 7 and 12 more"."""
    rows = list(rows)
    shown = ", ".join(str(row) for row in rows[:5])
    more = f" and {len(rows) - 5} more" if len(rows) > 5 else ""
    return f"feature{'s' if len(rows) > 1 else ''} {shown}{more}"


def _read(file: Path, findings: list[Finding]) -> gpd.GeoDataFrame:
    try:
        if file.suffix.lower() in (".parquet", ".geoparquet"):
            return gpd.read_parquet(file)
        layers = [str(name) for name, kind in pyogrio.list_layers(file) if kind is not None]
        if not layers:
            raise InputError(f"{file}: the file holds a table without geometry.")
        if len(layers) > 1:
            what = f"{file.name} holds {len(layers)} layers: {', '.join(layers[:5])}"
            findings.append(Finding(None, None, None, "warning", what, f"only {layers[0]!r} was read"))
        return gpd.read_file(file, layer=layers[0], engine="pyogrio")
    except InputError:
        raise
    except Exception as error:  # each driver has errors of its own; all mean the same to the reader
        raise InputError(
            f"{file}: cannot be read as polygons or features ({error}). "
            "Accepted: GeoJSON, GeoPackage, Shapefile, GeoParquet."
        ) from error


def _agreed_crs(file: Path, found: Any, given: Any, must_agree: bool) -> CRS:
    if given is not None:
        try:
            given = CRS.from_user_input(given)
        except CRSError as error:
            raise InputError(
                f"crs={given!r} is not a coordinate system. Accepted: e.g. 'EPSG:32736'."
            ) from error
    if found is None:
        if given is None:
            raise InputError(
                f"{file}: the file names no coordinate system (for a Shapefile: no .prj beside it). "
                "Give it as crs=, e.g. crs='EPSG:4326' for longitude and latitude."
            )
        return given
    found = CRS.from_user_input(found)
    if must_agree and given is not None and not found.equals(given, ignore_axis_order=True):
        raise InputError(
            f"{file}: the file says its coordinate system is {found.name!r}, crs= says {given.name!r}. "
            "Leave crs= out, or correct the file."
        )
    return found
