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


def cell_shares(
    shape: Any, shape_of_grid: tuple[int, int], bounds: Bounds
) -> tuple[NDArray[np.int64], Floats]:
    """Return the cells a polygon covers and the covered share of each.

    Parameters
    ----------
    shape : shapely polygon or multipolygon
    shape_of_grid : (rows, cols)
        The grid's cells; row 0 is at the top.
    bounds : (left, bottom, right, top)
        Of the whole grid, in the polygon's coordinates.

    Returns
    -------
    cell : (k,) int, flat index row * cols + col, ascending
    share : (k,) float in (0, 1]
    """
    if shape.is_empty:
        return np.empty(0, dtype=np.int64), np.empty(0)
    # Only the geometry of the grid matters: one zero stands for all its values.
    flat = np.broadcast_to(np.zeros((), dtype=np.uint8), shape_of_grid)
    source = NumPyRasterSource(flat, *bounds)
    shapes = _Shapes(np.asarray([shape], dtype=object))
    cells = int(np.prod(shape_of_grid))
    table = exact_extract(
        source, shapes, ["cell_id", "coverage"], output="pandas", max_cells_in_memory=max(cells, 1)
    )
    return np.asarray(table["cell_id"].iloc[0], dtype=np.int64), np.asarray(
        table["coverage"].iloc[0], dtype=float
    )


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
    sums, pixels = np.zeros(len(shapes)), np.zeros(len(shapes))
    filled = np.flatnonzero(~shapely.is_empty(shapes))
    if len(filled):
        source = NumPyRasterSource(values, *bounds)
        table = exact_extract(source, _Shapes(shapes[filled]), ["sum", "count"], output="pandas")
        sums[filled] = np.nan_to_num(np.asarray(table["sum"], dtype=float))
        pixels[filled] = np.asarray(table["count"], dtype=float)
    return sums, pixels


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
