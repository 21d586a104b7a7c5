"""Exact overlaps of polygons with raster cells: shares, pieces and sums."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import shapely
from exactextract import exact_extract
from exactextract.feature import Feature, FeatureSource
from exactextract.raster import NumPyRasterSource
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Bounds = tuple[float, float, float, float]  # left, bottom, right, top

LEAF = 12  # boxes cut one by one below this number
DIGITS = 9  # decimals of a pixel: the overlay loses its way where a corner misses an edge by a hair
ASTRAY = 1e-4  # of a pixel; a larger difference from the polygon's area is a fault of the overlay
ROUNDING = 1e-6  # relative; sums take shares in single precision


class _Shape(Feature):
    def __init__(self, wkb: bytes) -> None:
        super().__init__()
        self._wkb = wkb

    def geometry(self) -> bytes:
        return self._wkb

    def fields(self) -> list[str]:
        return []


class _Shapes(FeatureSource):
    """Polygons handed over as bytes: several times faster than through a table for many small pieces."""

    def __init__(self, shapes: NDArray[Any]) -> None:
        super().__init__()
        self._wkb = shapely.to_wkb(shapes)

    def count(self) -> int:
        return len(self._wkb)

    def __iter__(self) -> Iterator[_Shape]:
        for wkb in self._wkb:
            yield _Shape(wkb)

    def srs_wkt(self) -> None:
        return None


def cell_shares(shape: Any, size: tuple[int, int], bounds: Bounds) -> tuple[NDArray[np.int64], Floats]:
    """Return the cells a polygon covers and the covered share of each.

    Parameters
    ----------
    shape : shapely polygon or multipolygon
        Inside `bounds`.
    size : (rows, cols)
        Number of cells; row 0 is at the top.
    bounds : (left, bottom, right, top)
        Of the whole grid, in the polygon's coordinates.

    Returns
    -------
    cell : (k,) int, flat index row * cols + col, ascending
    share : (k,) float in (0, 1]
    """
    snapped = _snapped(np.asarray([shape], dtype=object), size, bounds)
    if snapped[0].is_empty:
        return np.empty(0, dtype=np.int64), np.empty(0)
    # Only the geometry of the grid matters: one zero stands for all its values.
    source = NumPyRasterSource(np.broadcast_to(np.zeros((), dtype=np.uint8), size))
    ops, most = ["cell_id", "coverage"], max(size[0] * size[1], 1)
    try:
        table = exact_extract(source, _Shapes(snapped), ops, output="pandas", max_cells_in_memory=most)
    except RuntimeError:  # a corner too near an edge of a cell
        return _plain_shares(snapped[0], size)
    cell = np.asarray(table["cell_id"].iloc[0], dtype=np.int64)
    share = np.asarray(table["coverage"].iloc[0], dtype=float)
    if abs(share.sum() - snapped[0].area) > ASTRAY:
        cell, share = _plain_shares(snapped[0], size)
    return cell, share


def raster_sums(shapes: NDArray[Any], values: Floats, bounds: Bounds) -> tuple[Floats, Floats]:
    """Return the sum of raster values over each polygon, pixels weighted by their covered share.

    Parameters
    ----------
    shapes : (k,) array of polygons
        May be empty polygons or reach beyond the raster.
    values : (rows, cols) float
        NaN where there is no value; row 0 is at the top.
    bounds : (left, bottom, right, top)
        Of the raster, in the polygons' coordinates.

    Returns
    -------
    sums : (k,) float
        0 where no pixel with a value is touched.
    pixels : (k,) float
        Number of pixels with a value, by covered share.
    """
    snapped = _snapped(np.asarray(shapes, dtype=object), values.shape, bounds)
    known = np.isfinite(values)
    # Pixels without a value count as 0 and are told apart by a raster of ones.
    ones, people = known.astype(np.float64), np.where(known, values, 0.0)
    found = np.zeros((len(shapes), 3))
    filled = np.flatnonzero(~shapely.is_empty(snapped))
    found[filled] = _overlay(snapped[filled], ones, people)
    area = shapely.area(snapped)
    for place in np.flatnonzero(np.abs(found[:, 0] - area) > ASTRAY + ROUNDING * area):
        found[place] = _plain_sums(snapped[place], ones, people)
    return found[:, 2], found[:, 1]


def _overlay(snapped: NDArray[Any], ones: Floats, people: Floats) -> Floats:
    """Return pixels, pixels with a value and sum, (k, 3), of polygons in pixels."""
    if not len(snapped):
        return np.empty((0, 3))
    ops = ["count", "sum", "weighted_sum"]
    source, weights = NumPyRasterSource(ones), NumPyRasterSource(people)
    try:
        table = exact_extract(source, _Shapes(snapped), ops, weights=weights, output="pandas")
    except RuntimeError:  # a corner too near an edge of a pixel: find the polygon
        if len(snapped) == 1:
            return _plain_sums(snapped[0], ones, people)[None, :]
        middle = len(snapped) // 2
        return np.vstack([_overlay(snapped[:middle], ones, people), _overlay(snapped[middle:], ones, people)])
    return np.asarray(table[ops], dtype=float)


def _plain_sums(shape: Any, ones: Floats, people: Floats) -> Floats:
    cell, share = _plain_shares(shape, ones.shape)
    return np.array([share.sum(), share @ ones.ravel()[cell], share @ people.ravel()[cell]])


def _snapped(shapes: NDArray[Any], size: tuple[int, ...], bounds: Bounds) -> NDArray[Any]:
    """Return valid polygons in pixels from the lower left corner, clipped to the grid, corners rounded."""
    left, bottom, right, top = bounds
    unit = np.array([(right - left) / size[1], (top - bottom) / size[0]])
    scaled = shapely.transform(np.asarray(shapes, dtype=object), lambda xy: (xy - (left, bottom)) / unit)
    limits = shapely.bounds(scaled)
    beyond = np.flatnonzero(
        (limits[:, :2] < 0.0).any(axis=1) | (limits[:, 2:] > (size[1], size[0])).any(axis=1)
    )
    if len(beyond):
        inside = shapely.intersection(shapely.make_valid(scaled[beyond]), shapely.box(0, 0, size[1], size[0]))
        scaled[beyond] = [areal(each) for each in inside]
    snapped = np.asarray(shapely.transform(scaled, lambda xy: np.round(xy, DIGITS)), dtype=object)
    bad = np.flatnonzero(~shapely.is_valid(snapped))
    if len(bad):
        # Thin parts that rounding alone would fold over themselves; slower, so only where needed.
        whole = [areal(shapely.make_valid(each)) for each in scaled[bad]]
        snapped[bad] = [areal(each) for each in shapely.set_precision(whole, 10.0**-DIGITS)]
    return snapped


def _plain_shares(shape: Any, size: tuple[int, ...]) -> tuple[NDArray[np.int64], Floats]:
    """Return cells and shares of a polygon in pixels by intersecting it with every cell near it."""
    rows, cols = size
    left, bottom, right, top = shape.bounds
    col = np.arange(max(int(left), 0), min(int(np.ceil(right)), cols))
    up = np.arange(max(int(bottom), 0), min(int(np.ceil(top)), rows))
    col, up = (each.ravel() for each in np.meshgrid(col, up[::-1]))
    share = shapely.area(cut(shape, np.atleast_1d(shapely.box(col, up, col + 1, up + 1))))
    cell = (rows - 1 - up) * cols + col
    return cell[share > 0.0].astype(np.int64), share[share > 0.0]


def cut(shape: Any, boxes: NDArray[Any]) -> NDArray[Any]:
    """Return the part of a polygon inside each of many small quadrilaterals.

    The polygon is clipped to halves of the set again and again, so that every quadrilateral meets only the
    few corners near it.

    Parameters
    ----------
    shape : shapely polygon or multipolygon
    boxes : (k,) array of convex polygons

    Returns
    -------
    (k,) array of polygons, multipolygons or empty geometries
    """
    parts = np.full(len(boxes), shapely.Polygon(), dtype=object)
    _cut_into(parts, np.arange(len(boxes)), shape, boxes, shapely.bounds(boxes))
    return parts


def _cut_into(
    parts: NDArray[Any], which: NDArray[np.int64], shape: Any, boxes: NDArray[Any], limits: Floats
) -> None:
    if not len(which) or shape.is_empty:
        return
    if len(which) <= LEAF:
        pieces = np.atleast_1d(shapely.intersection(shape, boxes[which]))
        for place, piece in zip(which, pieces, strict=True):
            parts[place] = piece if piece.geom_type in ("Polygon", "MultiPolygon") else areal(piece)
        return
    low, high = limits[which, :2].min(axis=0), limits[which, 2:].max(axis=0)
    axis = int(np.argmax(high - low))
    order = which[np.argsort(limits[which, axis], kind="stable")]
    for half in (order[: len(order) // 2], order[len(order) // 2 :]):
        low, high = limits[half, :2].min(axis=0), limits[half, 2:].max(axis=0)
        # A hair of slack keeps the clip's own edge off the edges of the quadrilaterals.
        slack = 1e-3 * float((high - low).max())
        clipped = shapely.intersection(shape, shapely.box(*(low - slack), *(high + slack)))
        _cut_into(parts, half, areal(clipped), boxes, limits)


def areal(geometry: Any) -> Any:
    """Return the polygons of a geometry as one, lines and points left out."""
    if geometry.geom_type in ("Polygon", "MultiPolygon"):
        return geometry
    parts = [part for part in shapely.get_parts(geometry) if part.geom_type in ("Polygon", "MultiPolygon")]
    return shapely.union_all(parts) if parts else shapely.MultiPolygon()
