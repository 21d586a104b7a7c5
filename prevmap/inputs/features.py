"""Distance from many points to the nearest feature of a layer."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import CRS

from prevmap.errors import InputError
from prevmap.inputs.layer import read_layer, reproject

Floats = NDArray[np.float64]

CORNERS = 15  # edges per piece of outline: a distance then looks at the few edges nearby


@dataclass(frozen=True, slots=True, eq=False)
class _Features:
    """Outlines, lines and points in short pieces, and the polygons whose inside is at distance 0."""

    pieces: Any
    inside: NDArray[Any]


def nearest_km(path: str | Path, crs: CRS, xy_m: Floats) -> Floats:
    """Return the distance in km from points to the nearest feature of a file.

    Parameters
    ----------
    path : str or Path
        Points, lines or polygons in any coordinate system.
    crs : pyproj.CRS
        Projected, in metres: the plane in which distances are taken.
    xy_m : (n, 2) float
        Points in `crs`; NaN for a missing position.

    Returns
    -------
    (n,) float
        0 inside polygons, NaN for missing positions.

    Raises
    ------
    InputError
        If the file holds no feature that can be shown in `crs`.
    """
    file = Path(path)
    if not file.exists():
        raise InputError(f"{file}: there is no such file.")
    stamp = file.stat()
    layer = _load(str(file), stamp.st_mtime_ns, stamp.st_size, crs.to_wkt())
    distance = np.full(len(xy_m), np.nan)
    placed = np.flatnonzero(np.isfinite(xy_m).all(axis=1))
    if not len(placed):
        return distance
    points = shapely.points(xy_m[placed])
    found, metres = layer.pieces.query_nearest(points, return_distance=True, all_matches=False)
    distance[placed[found[0]]] = metres / 1000.0
    if len(layer.inside):
        # Polygons ask for points, not the other way round: a polygon is indexed once for all its points.
        within = shapely.STRtree(points).query(layer.inside, predicate="intersects")[1]
        distance[placed[within]] = 0.0
    return distance


@lru_cache(maxsize=8)
def _load(path: str, modified: int, size: int, wkt: str) -> _Features:
    """Return the features of a file in a coordinate system; time and size of the file key the cache."""
    frame, _ = read_layer(path)
    shapes = shapely.force_2d(np.asarray(frame.geometry.array, dtype=object))
    shapes = shapes[~(shapely.is_missing(shapes) | shapely.is_empty(shapes))]
    parts = shapely.get_parts(shapely.get_parts(shapes))
    parts = reproject(parts, CRS.from_user_input(frame.crs), CRS.from_wkt(wkt))
    # What cannot be projected lies on the far side of the globe and is nobody's nearest feature.
    parts = parts[np.isfinite(shapely.bounds(parts)).all(axis=1)]
    if not len(parts):
        raise InputError(f"{path}: no feature near the sites to measure a distance to.")
    kind = shapely.get_type_id(parts)
    inside = parts[kind == 3]
    broken = ~shapely.is_valid(inside)
    inside[broken] = shapely.make_valid(inside[broken])
    lines = np.concatenate([parts[(kind == 1) | (kind == 2)], shapely.get_rings(parts[kind == 3])])
    pieces = np.concatenate([parts[kind == 0], _short_pieces(lines)])
    return _Features(shapely.STRtree(pieces), inside)


def _short_pieces(lines: NDArray[Any]) -> NDArray[Any]:
    """Return lines cut into pieces of at most `CORNERS` edges that share their ends."""
    if not len(lines):
        return lines
    xy, line = shapely.get_coordinates(lines, return_index=True)
    position = np.arange(len(xy)) - np.searchsorted(line, line)
    piece = position // CORNERS
    shared = np.flatnonzero((position % CORNERS == 0) & (position > 0))
    lines_of = np.concatenate([line, line[shared]])
    pieces_of = np.concatenate([piece, piece[shared] - 1])
    places = np.concatenate([np.arange(len(xy)), shared])
    order = np.lexsort((places, pieces_of, lines_of))
    new = np.r_[True, (np.diff(lines_of[order]) != 0) | (np.diff(pieces_of[order]) != 0)]
    group = np.cumsum(new) - 1
    # A last corner that starts a piece of its own already ends the piece before.
    whole = np.bincount(group)[group] > 1
    group = np.unique(group[whole], return_inverse=True)[1]
    return np.asarray(shapely.linestrings(xy[places[order][whole]], indices=group), dtype=object)
