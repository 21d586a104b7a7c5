"""Polygons as matplotlib paths in km, and pattern fills that stay visible on light and dark colours."""

from __future__ import annotations

from typing import Any

import numpy as np
import shapely
from matplotlib.collections import LineCollection, PathCollection
from matplotlib.patches import PathPatch
from matplotlib.path import Path
from matplotlib.patheffects import withStroke
from shapely.affinity import scale
from shapely.geometry.polygon import orient

Bounds = tuple[float, float, float, float]


def in_km(geometry: Any) -> Any:
    """Turn a geometry of a working CRS in metres into km."""
    return scale(geometry, 0.001, 0.001, origin=(0.0, 0.0))


def polygon_path(geometry: Any) -> Path | None:
    """Make one path of all polygons of a geometry, holes included; None where there is no area.

    Shells run against and holes with the clock, so that a hole stays open under the non-zero fill rule.
    """
    paths: list[Path] = []
    for part in shapely.get_parts(geometry):
        if part.geom_type != "Polygon" or part.is_empty:
            if part.geom_type in ("MultiPolygon", "GeometryCollection"):
                inner = polygon_path(part)
                paths += [inner] if inner is not None else []
            continue
        oriented = orient(part, 1.0)
        for ring in (oriented.exterior, *oriented.interiors):
            corners = np.asarray(ring.coords)[:, :2]
            codes = np.full(len(corners), Path.LINETO, dtype=Path.code_type)
            codes[0], codes[-1] = Path.MOVETO, Path.CLOSEPOLY
            paths.append(Path(corners, codes))
    return Path.make_compound_path(*paths) if paths else None


def fill(ax: Any, geometry: Any, **style: Any) -> PathPatch | None:
    """Draw a geometry (km) as one patch; None where it has no area."""
    path = polygon_path(geometry)
    if path is None:
        return None
    patch = PathPatch(path, **style)
    # Limits are set beforehand; add_patch would walk every vertex to update them.
    ax.add_artist(patch)
    return patch


def draw_lines(ax: Any, geometries: Any, *, colour: str, width: float, zorder: float) -> None:
    """Draw the outlines of geometries (km) as one collection."""
    segments = []
    for line in shapely.get_parts(shapely.boundary(np.asarray(geometries, dtype=object))):
        for piece in shapely.get_parts(line):
            segments.append(np.asarray(piece.coords)[:, :2])
    ax.add_collection(
        LineCollection(segments, colors=colour, linewidths=width, zorder=zorder, capstyle="round"),
        autolim=False,
    )


def hatch(ax: Any, geometry: Any, spacing_km: float, *, zorder: float, colour: str = "#222222") -> None:
    """Fill a geometry (km) with diagonal lines, dark with a light edge: seen on any colour under them."""
    path = polygon_path(geometry)
    if path is None:
        return
    west, south, east, north = geometry.bounds
    # Lines start on multiples of the spacing, so that neighbouring polygons continue each other's pattern.
    first = np.floor((south - east) / spacing_km) * spacing_km
    offsets = np.arange(first, north - west + spacing_km, spacing_km)
    segments = [[(west, west + c), (east, east + c)] for c in offsets]
    lines = LineCollection(
        segments,
        colors=colour,
        linewidths=0.55,
        zorder=zorder,
        path_effects=[withStroke(linewidth=1.7, foreground=(1.0, 1.0, 1.0, 0.75))],
    )
    ax.add_collection(lines, autolim=False)
    lines.set_clip_path(path, ax.transData)


def dots(ax: Any, geometry: Any, spacing_km: float, *, zorder: float, colour: str = "#12384F") -> None:
    """Fill a geometry (km) with a sparse lattice of small dots."""
    path = polygon_path(geometry)
    if path is None:
        return
    west, south, east, north = geometry.bounds
    xs = np.arange(np.floor(west / spacing_km), np.ceil(east / spacing_km) + 1) * spacing_km
    ys = np.arange(np.floor(south / spacing_km), np.ceil(north / spacing_km) + 1) * spacing_km
    grid_x, grid_y = np.meshgrid(xs, ys)
    grid_x[1::2] += spacing_km / 2.0
    points: PathCollection = ax.scatter(
        grid_x.ravel(), grid_y.ravel(), s=1.6, c=colour, linewidths=0, zorder=zorder
    )
    points.set_clip_path(path, ax.transData)
