"""What lies under every map: the study area, its units, water and land that is not mapped, the sites."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import rasterio.features
import shapely
from shapely.geometry import shape

from prevmap.show.outline import Bounds, draw_lines, fill, hatch, in_km
from prevmap.show.palette import BLANK, INK, LINE, PREVALENCE
from prevmap.show.sheet import MapSheet, line_entry, swatch

HATCH_PT = 5.5


@dataclass(frozen=True, slots=True)
class Ground:
    """Geometry of the study area, km in the working CRS.

    Attributes
    ----------
    units : tuple of shapely geometry
        The implementation units in the order of ``region.units``; empty without a region file.
    parents : tuple of shapely geometry
        Units merged by their parent; empty where no parent is known.
    boundary : shapely geometry
        The study area without what is excluded.
    water : bool
        Whether an excluded area (water) was given.
    bounds : tuple of float
        West, south, east, north of study area and sites.
    """

    units: tuple[Any, ...]
    parents: tuple[Any, ...]
    boundary: Any
    water: bool
    bounds: Bounds


def read_ground(region: Any, sites: Any = None) -> Ground:
    """Take the geometry of a region (metres) and the extent of the sites shown with it."""
    frame = region.units
    units = tuple(in_km(geometry) for geometry in frame.geometry)
    parents: tuple[Any, ...] = ()
    if len(frame) and "parent" in frame and frame["parent"].notna().any():
        known = frame[frame["parent"].notna()]
        parents = tuple(
            in_km(shapely.union_all(group.geometry.to_numpy())) for _, group in known.groupby("parent")
        )
    boundary = in_km(region.boundary)
    west, south, east, north = boundary.bounds
    for geometry in units:
        w, s, e, n = geometry.bounds
        west, south, east, north = min(west, w), min(south, s), max(east, e), max(north, n)
    if sites is not None and len(sites):
        w, s, e, n = (float(v) / 1000.0 for v in sites.total_bounds)
        west, south, east, north = min(west, w), min(south, s), max(east, e), max(north, n)
    return Ground(units, parents, boundary, region.exclude is not None, (west, south, east, north))


def draw_ground(sheet: MapSheet, ground: Ground) -> None:
    """Paint the whole area, water included, in the grey of "not mapped"."""
    for geometry in ground.units or (ground.boundary,):
        fill(sheet.ax, thin(geometry, sheet), facecolor=BLANK, edgecolor="none", zorder=1)


def draw_borders(sheet: MapSheet, ground: Ground) -> None:
    """Draw unit borders, the borders of their parents stronger, and the outline of the study area."""
    if ground.units:
        shapes = [thin(geometry, sheet) for geometry in ground.units]
        draw_lines(sheet.ax, shapes, colour=LINE, width=0.5, zorder=5)
    if len(ground.parents) > 1:
        draw_lines(sheet.ax, [thin(g, sheet) for g in ground.parents], colour=INK, width=1.1, zorder=5.2)
    draw_lines(sheet.ax, [thin(ground.boundary, sheet)], colour=INK, width=0.8, zorder=5.4)


def border_entries(ground: Ground) -> list[Any]:
    """Legend entries of the borders that are drawn, where they have to be told apart from other lines."""
    entries = [line_entry("unit border", "solid", width=0.5, colour=LINE)] if ground.units else []
    if len(ground.parents) > 1:
        entries.append(line_entry("border of several units", "solid", width=1.1))
    return entries


def draw_sites(sheet: MapSheet, sites: Any, norm: Any, *, sized: bool = False) -> Any:
    """Draw raw site proportions on the colour scale of the surface; optionally area by number examined.

    Returns
    -------
    PathCollection
        The drawn markers, for a colour bar.
    """
    x = np.asarray(sites.geometry.x, dtype=float) / 1000.0
    y = np.asarray(sites.geometry.y, dtype=float) / 1000.0
    proportion = np.asarray(sites["proportion"], dtype=float)
    examined = np.asarray(sites["examined"], dtype=float)
    # Crowded maps get smaller markers.
    base = 26.0 if len(sites) <= 250 else 12.0 if len(sites) <= 1000 else 5.0
    size = base * site_size(examined, examined.max()) if sized and len(sites) else np.full(len(sites), base)
    order = np.argsort(-size, kind="stable")
    markers = sheet.ax.scatter(
        x[order],
        y[order],
        s=size[order],
        c=proportion[order],
        cmap=PREVALENCE,
        norm=norm,
        edgecolors=INK,
        linewidths=0.6,
        zorder=7,
    )
    return markers


def site_size(examined: Any, largest: float) -> Any:
    """Relative marker area, proportional to the number examined, with a floor that stays visible."""
    return np.maximum(np.asarray(examined, dtype=float) / max(float(largest), 1.0), 0.12) * 1.6


def cells_polygon(grid: Any, chosen: Any, boundary: Any) -> Any:
    """Outline (km) of the chosen cells of a grid, cut at the study area's boundary."""
    mask = np.asarray(grid.to_raster(np.asarray(chosen, dtype=float), 0.0) > 0.5, dtype=np.uint8)
    pieces = [
        shape(geometry)
        for geometry, _ in rasterio.features.shapes(mask, mask=mask.astype(bool), transform=grid.transform)
    ]
    return shapely.intersection(in_km(shapely.union_all(pieces)), boundary) if pieces else shapely.Polygon()


def hatch_area(sheet: MapSheet, geometry: Any) -> None:
    """Hatch an area (km) as extrapolated."""
    if not geometry.is_empty:
        hatch(sheet.ax, geometry, HATCH_PT * sheet.km_per_pt, zorder=3.5)


def blank_entry(reasons: Sequence[str]) -> Any:
    """Legend entry of land that is not mapped, with the reasons that occur."""
    return swatch(f"not mapped ({', '.join(reasons)})" if reasons else "not mapped", BLANK)


def thin(geometry: Any, sheet: MapSheet) -> Any:
    """Drop detail finer than a sixth of a point: it cannot be seen and makes files large."""
    return shapely.simplify(geometry, sheet.km_per_pt / 6.0, preserve_topology=True)
