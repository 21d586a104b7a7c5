"""Region: the implementation units, the land a survey speaks about, and the working coordinate system."""

from __future__ import annotations

import html
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS
from scipy.spatial import cKDTree

from prevmap.errors import InputError
from prevmap.inputs.attributes import free_names
from prevmap.inputs.findings import Finding, findings_frame, number_text
from prevmap.inputs.grid import build_grid
from prevmap.inputs.layer import column, features, label_text, polygons, read_layer, reproject
from prevmap.inputs.placement import assign_units, assign_unplaced, site_findings
from prevmap.inputs.working_crs import choose_working_crs

if TYPE_CHECKING:
    from prevmap.inputs.grid import Grid
    from prevmap.inputs.population import Population

__all__ = ["Region", "assign_units", "assign_unplaced", "hull_region", "read_region", "site_findings"]

LONE_SITE_BUFFER_KM = 10.0  # round a single position, where there is no spacing to go by
OVERLAP_SHARE = 1e-4  # of the smaller unit; less is rounding of shared borders
GAP_KM2 = 0.01  # smaller holes are rounding of shared borders


@dataclass(frozen=True, slots=True, eq=False)
class Region:
    """Implementation units, the land inside them, and the coordinate system all distances are taken in.

    Attributes
    ----------
    units : GeoDataFrame
        One row per unit in the order of the file: unit (str), code, parent (None where not given), every
        other attribute of the file (renamed where the results have a column of that name), geometry in the
        working coordinate system (metres), whole: excluded land is not cut out. No rows where the study
        area is the hull of the sites.
    boundary : shapely geometry
        Union of the units without the excluded land, in metres.
    crs : pyproj.CRS
        The working coordinate system: projected, in metres.
    distortion : float
        Largest |scale - 1| of distances in `crs` over the region.
    findings : DataFrame
        What was noticed or repaired: row (feature number in the file, from 1), site, field, severity, what,
        action.
    source : str
        File the units came from, or a description.
    exclude : shapely geometry or None
        Excluded land (for example lakes) near the region, in metres.
    buffer_km : float or None
        Buffer round the hull of the sites, where that is the region.
    """

    units: gpd.GeoDataFrame
    boundary: Any
    crs: CRS
    distortion: float
    findings: pd.DataFrame
    source: str
    exclude: Any = None
    buffer_km: float | None = None

    @property
    def has_units(self) -> bool:
        """Whether the region is divided into units."""
        return len(self.units) > 0

    @property
    def area_km2(self) -> float:
        """Area of the land inside the boundary, in square kilometres of the working coordinate system."""
        return float(self.boundary.area) / 1e6

    def land(self) -> NDArray[Any]:
        """Return the (n_units,) unit polygons without the excluded land, in metres."""
        whole = np.asarray(self.units.geometry.array, dtype=object)
        return whole if self.exclude is None else np.asarray(shapely.difference(whole, self.exclude))

    def project(self, points: gpd.GeoSeries | gpd.GeoDataFrame) -> NDArray[np.float64]:
        """Return (n, 2) coordinates in km of points in the working coordinate system.

        Raises
        ------
        InputError
            If the points have no coordinate system or cannot be shown in the region's.
        """
        return _point_coordinates(points, self.crs) / 1000.0

    def grid(
        self,
        cell_km: float | None = None,
        *,
        cells: int | None = None,
        population: Population | None = None,
        progress: bool = False,
    ) -> Grid:
        """Return square cells over the region, with each unit's share of every cell and the people in it.

        Parameters
        ----------
        cell_km : float, optional
            Edge of a cell in km. Without `cell_km` and `cells`, about 5,000 cells.
        cells : int, optional
            Wanted number of cells instead of an edge.
        population : Population, optional
            From `read_population`.
        progress : bool
            Show a progress bar while people are counted.

        Returns
        -------
        Grid

        Raises
        ------
        InputError
            If both or impossible sizes are given, or more cells than fit are asked for.
        """
        return build_grid(self, cell_km, cells=cells, population=population, progress=progress)

    def __repr__(self) -> str:
        parts = f"{len(self.units)} units" if self.has_units else "study area without units"
        return (
            f"Region({parts}, {self.area_km2:,.0f} km², {self.crs.name}, distances within "
            f"{100.0 * self.distortion:.2g} %, {len(self.findings)} findings)"
        )

    def _repr_html_(self) -> str:
        facts = [
            ("Source", self.source),
            ("Units", f"{len(self.units):,}" if self.has_units else "none (the study area is one piece)"),
            ("Area", f"{self.area_km2:,.0f} km²"),
            ("Coordinates", f"{self.crs.name}, metres"),
            ("Distances off by at most", f"{100.0 * self.distortion:.2g} %"),
        ]
        if self.buffer_km is not None:
            facts.append(("Buffer round the sites", f"{number_text(self.buffer_km)} km"))
        rows = "".join(f"<tr><th>{html.escape(k)}</th><td>{html.escape(v)}</td></tr>" for k, v in facts)
        found = self.findings.to_html(index=False, escape=True) if len(self.findings) else ""
        return f"<table>{rows}</table>{found}"


def read_region(
    path: str | Path,
    *,
    name: str | None = None,
    code: str | None = None,
    parent: str | None = None,
    exclude: str | Path | None = None,
    crs: Any = None,
) -> Region:
    """Read implementation units from a file of polygons.

    Parameters
    ----------
    path : str or Path
        GeoJSON, GeoPackage, Shapefile or GeoParquet.
    name : str, optional
        Column with the units' names; without it a column called "name" or "unit", else `code`.
    code, parent : str, optional
        Columns with the units' codes and the area each belongs to.
    exclude : str or Path, optional
        Polygons to leave out, for example lakes or parks.
    crs : optional
        Coordinate system of files that name none.

    Returns
    -------
    Region

    Raises
    ------
    InputError
        If a file cannot be read, a column is missing, a name or code is empty or repeated, a feature is no
        polygon, or nothing is left after `exclude`.
    """
    source = str(path)
    frame, findings = read_layer(path, crs=crs)
    shapes, repairs = polygons(frame, source)
    findings += repairs
    table = _unit_table(frame, source, name, code, parent, findings)
    working = choose_working_crs(shapes, frame.crs)
    findings += working.findings
    shapes = _still_valid(reproject(shapes, frame.crs, working.crs), frame.index, findings)
    whole = shapely.union_all(shapes)
    findings += _overlaps(shapes, whole, table["unit"].tolist())
    excluded = None
    if exclude is not None:
        excluded = _read_exclude(exclude, crs, working.crs, whole, findings)
    boundary = whole if excluded is None else shapely.difference(whole, excluded)
    if boundary.is_empty:
        raise InputError(f"{exclude}: the excluded polygons cover the whole region of {source}.")
    findings += _gaps(whole, excluded)
    if excluded is not None:
        left = shapely.area(shapely.difference(shapes, excluded))
        for place in np.flatnonzero(left == 0.0):
            what = f"unit {table['unit'].iloc[place]!r} lies wholly inside the excluded land"
            findings.append(
                Finding(int(frame.index[place]), None, "exclude", "warning", what, "it gets no cells")
            )
    units = gpd.GeoDataFrame(table, geometry=shapes, crs=working.crs)
    shapely.prepare(boundary)
    return Region(
        units, boundary, working.crs, working.distortion, findings_frame(findings), source, excluded
    )


def hull_region(points: gpd.GeoSeries, *, buffer_km: float | None = None) -> Region:
    """Return the buffered convex hull of site positions as a region without units.

    Parameters
    ----------
    points : GeoSeries
        Site positions in any coordinate system, one or more.
    buffer_km : float, optional
        Buffer in km. By default the larger of the median distance between nearest distinct positions and a
        twentieth of the extent's diagonal; 10 km round a single position.

    Returns
    -------
    Region
        With `units` empty and the buffer used in `buffer_km`.

    Raises
    ------
    InputError
        If there is no position, no coordinate system, or the buffer is not positive.
    """
    if points.crs is None:
        raise InputError("The site positions have no coordinate system. Set one, for example EPSG:4326.")
    placed = points[~(points.is_empty | points.isna())]
    if placed.empty:
        raise InputError("There is no site position to draw a study area round.")
    if buffer_km is not None and not (np.isfinite(buffer_km) and buffer_km > 0.0):
        raise InputError(f"buffer_km={buffer_km!r}: a positive number of km is expected.")
    working = choose_working_crs(np.asarray(placed.array, dtype=object), CRS.from_user_input(placed.crs))
    xy = np.unique(_point_coordinates(placed, working.crs), axis=0)
    used = default_buffer_km(xy / 1000.0) if buffer_km is None else float(buffer_km)
    boundary = shapely.buffer(shapely.convex_hull(shapely.multipoints(xy)), 1000.0 * used, quad_segs=16)
    shapely.prepare(boundary)
    what = f"no region was given: the study area is the hull of the sites with a buffer of {number_text(used)} km"
    note = Finding(None, None, "region", "note", what, "no unit tables are made")
    units = gpd.GeoDataFrame(
        {name: pd.Series([], dtype=object) for name in ("unit", "code", "parent")},
        geometry=[],
        crs=working.crs,
    )
    findings = findings_frame([*working.findings, note])
    return Region(units, boundary, working.crs, working.distortion, findings, "hull of the sites", None, used)


def default_buffer_km(xy_km: NDArray[np.float64]) -> float:
    """Return the buffer round the hull of (n, 2) distinct positions in km (see `hull_region`)."""
    if len(xy_km) < 2:
        return LONE_SITE_BUFFER_KM
    spacing = cKDTree(xy_km).query(xy_km, k=2)[0][:, 1]
    diagonal = float(np.hypot(*np.ptp(xy_km, axis=0)))
    return max(float(np.median(spacing)), diagonal / 20.0)


def _point_coordinates(points: gpd.GeoSeries | gpd.GeoDataFrame, crs: CRS) -> NDArray[np.float64]:
    shapes = points.geometry
    if shapes.crs is None:
        raise InputError("The points have no coordinate system. Set one, for example EPSG:4326.")
    wrong = np.flatnonzero((shapes.geom_type != "Point").to_numpy() | shapes.is_empty.to_numpy())
    if len(wrong):
        raise InputError(
            f"Points are expected; row {shapes.index[wrong[0]]} holds none ({len(wrong)} such rows)."
        )
    xy = shapely.get_coordinates(shapes.to_crs(crs).array)
    lost = np.flatnonzero(~np.isfinite(xy).all(axis=1))
    if len(lost):
        raise InputError(
            f"The position of row {shapes.index[lost[0]]} ({shapes.iloc[lost[0]].wkt}) cannot be shown in "
            f"{crs.name!r} ({len(lost)} such rows). Is its coordinate system right?"
        )
    return np.asarray(xy, dtype=float)


def _unit_table(
    frame: gpd.GeoDataFrame,
    source: str,
    name: str | None,
    code: str | None,
    parent: str | None,
    findings: list[Finding],
) -> pd.DataFrame:
    plain = pd.DataFrame(frame.drop(columns=frame.geometry.name))
    used = name if name is not None else _name_column(plain, source, code)
    table = pd.DataFrame(index=plain.index)
    table["unit"] = _labels(column(plain, used, source, "name of the units"), used, source)
    table["code"] = None
    table["parent"] = None
    if code is not None:
        table["code"] = _labels(column(plain, code, source, "code of the units"), code, source)
    if parent is not None:
        table["parent"] = [
            label_text(value) or None for value in column(plain, parent, source, "parent area")
        ]
    table = table.astype(object)
    others = [each for each in plain.columns if each not in (used, code, parent)]
    free, renamed = free_names(others)
    findings += renamed
    for each, kept in zip(others, free, strict=True):
        table[kept] = plain[each]
    return table.reset_index(drop=True)


def _name_column(plain: pd.DataFrame, source: str, code: str | None) -> str:
    for each in plain.columns:
        if str(each).casefold() in ("name", "unit"):
            return str(each)
    if code is not None:
        return code
    have = ", ".join(str(each) for each in plain.columns)
    raise InputError(
        f"{source}: which column holds the units' names? Give it as name=. Columns: {have or 'none'}."
    )


def _labels(values: pd.Series, name: str, source: str) -> list[str]:
    labels = [label_text(value) for value in values]
    empty = [row for row, label in zip(values.index, labels, strict=True) if not label]
    if empty:
        raise InputError(f"{source}: column {name!r} is empty in {features(empty)}. Every unit needs one.")
    rows: dict[str, list[int]] = {}
    for row, label in zip(values.index, labels, strict=True):
        rows.setdefault(label, []).append(int(row))
    twice = [f"{label!r} in {features(where)}" for label, where in rows.items() if len(where) > 1]
    if twice:
        more = f" and {len(twice) - 5} more" if len(twice) > 5 else ""
        raise InputError(
            f"{source}: column {name!r} repeats {'; '.join(twice[:5])}{more}. "
            "If they are parts of one unit, dissolve them into one feature; if not, tell them apart by name."
        )
    return labels


def _still_valid(shapes: NDArray[Any], rows: Any, findings: list[Finding]) -> NDArray[Any]:
    if not np.isfinite(shapely.bounds(shapes)).all():
        broken = rows[~np.isfinite(shapely.bounds(shapes)).all(axis=1)]
        raise InputError(
            f"The polygons of {features(broken)} cannot be projected. Is the coordinate system right?"
        )
    frame = gpd.GeoDataFrame(geometry=shapes, index=rows)
    repaired, repairs = polygons(frame, "after projection")
    findings += repairs
    return repaired


def _overlaps(shapes: NDArray[Any], whole: Any, names: list[str]) -> list[Finding]:
    areas = shapely.area(shapes)
    if areas.sum() - whole.area <= OVERLAP_SHARE * areas.min():
        return []
    first, second = shapely.STRtree(shapes).query(shapes, predicate="intersects")
    first, second = first[first < second], second[first < second]
    shared = shapely.area(shapely.intersection(shapes[first], shapes[second]))
    large = np.flatnonzero(shared > OVERLAP_SHARE * np.minimum(areas[first], areas[second]))
    if not len(large):
        return []
    large = large[np.argsort(-shared[large])]
    worst = [
        f"{names[first[k]]} and {names[second[k]]} ({number_text(shared[k] / 1e6)} km²)" for k in large[:5]
    ]
    more = f" and {len(large) - 5} more pairs" if len(large) > 5 else ""
    what = f"units overlap, {number_text(shared[large].sum() / 1e6)} km² in all: {'; '.join(worst)}{more}"
    action = "kept: land and people there count in each of these units, once in the region"
    return [Finding(None, None, "geometry", "warning", what, action)]


def _gaps(whole: Any, excluded: Any) -> list[Finding]:
    holes = [shapely.polygons(ring) for part in shapely.get_parts(whole) for ring in part.interiors]
    if not holes:
        return []
    left = np.asarray(holes, dtype=object)
    if excluded is not None:
        left = shapely.difference(left, excluded)
    area_km2 = shapely.area(left) / 1e6
    area_km2 = area_km2[area_km2 > GAP_KM2]
    if not len(area_km2):
        return []
    what = (
        f"{len(area_km2)} gap{'s' if len(area_km2) > 1 else ''} inside the region belong to no unit: "
        f"{number_text(area_km2.sum())} km² in all, the largest {number_text(area_km2.max())} km²"
    )
    return [Finding(None, None, "geometry", "warning", what, "left out of the map and of every unit")]


def _read_exclude(path: str | Path, crs: Any, working: CRS, whole: Any, findings: list[Finding]) -> Any:
    file = Path(path)
    frame, heard = read_layer(file, crs=crs, must_agree=False)
    shapes, repairs = polygons(frame, str(path))
    findings += heard + repairs
    shapes = reproject(shapes, frame.crs, working)
    # Polygons on the far side of the globe have no place in the working system and cannot touch the region.
    shapes = shapes[np.isfinite(shapely.bounds(shapes)).all(axis=1)]
    shapes = np.asarray([_made_valid(shape) for shape in shapes], dtype=object)
    near = shapes[shapely.intersects(shapes, shapely.box(*whole.bounds))] if len(shapes) else shapes
    excluded = shapely.union_all(near) if len(near) else shapely.MultiPolygon()
    if not shapely.intersects(excluded, whole) or shapely.intersection(excluded, whole).area == 0.0:
        what = f"no polygon of {file.name} meets the region"
        findings.append(Finding(None, None, "exclude", "warning", what, "nothing is left out"))
        return None
    return excluded


def _made_valid(shape: Any) -> Any:
    """Return a polygon made valid after projection (itself where it already is)."""
    return shape if shape.is_valid else shapely.make_valid(shape)
