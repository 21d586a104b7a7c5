"""Which triangle a point lies in: the triangles sorted into the cells of a rectangular grid."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_ON_EDGE = 1e-9  # barycentric slack: a point this near the outer edge is on it, whatever the rounding says
_WINDOW = 65_536  # points located at a time, so that memory does not grow with their number


@dataclass(frozen=True, slots=True, eq=False)
class Buckets:
    """Triangles by the cells of a rectangular grid that their bounding boxes touch; see the comments."""

    corner: Floats  # (2,) lower left of the grid, km
    step: Floats  # (2,) cell size, km
    shape: tuple[int, int]  # cells along x, along y
    start: Integers  # (cells + 1,) where a cell's triangles begin
    triangle: Integers  # triangles, cell after cell
    first: Floats  # (t, 2) first corner of each triangle
    inverse: Floats  # (t, 4) rows of the map from a position to the second and third coordinate


def fill_buckets(points: Floats, triangles: Integers) -> Buckets:
    """Sort triangles (t, 3) of points (m, 2) into the cells that their bounding boxes touch."""
    corners = points[triangles]
    low, high = points.min(axis=0), points.max(axis=0)
    extent = high - low
    side = math.sqrt(extent[0] * extent[1] / (2.0 * len(triangles)))
    count = np.maximum(1, np.ceil(extent / side)).astype(np.int64)
    step = extent / count
    slack = 1e-6 * step  # so that a point on a cell's edge finds the triangles on both sides
    begin = np.clip(np.floor((corners.min(axis=1) - slack - low) / step).astype(np.int64), 0, count - 1)
    end = np.clip(np.floor((corners.max(axis=1) + slack - low) / step).astype(np.int64), 0, count - 1)
    span = end - begin + 1
    number = span[:, 0] * span[:, 1]
    triangle = np.repeat(np.arange(len(triangles)), number)
    within = np.arange(len(triangle)) - np.repeat(np.cumsum(number) - number, number)
    row, column = np.divmod(within, span[triangle, 0])
    cell = (begin[triangle, 1] + row) * count[0] + begin[triangle, 0] + column
    order = np.argsort(cell, kind="stable")
    start = np.concatenate([[0], np.cumsum(np.bincount(cell, minlength=int(count[0] * count[1])))])
    a, b = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    double = a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]
    inverse = np.column_stack([b[:, 1], -b[:, 0], -a[:, 1], a[:, 0]]) / double[:, None]
    shape = (int(count[0]), int(count[1]))
    return Buckets(low, step, shape, start, triangle[order], corners[:, 0].copy(), inverse)


def locate_in(buckets: Buckets, points: Floats) -> tuple[Integers, Floats]:
    """Find the triangle (-1 for none) and the barycentric coordinates of points (n, 2)."""
    triangle = np.full(len(points), -1, dtype=np.int64)
    weights = np.zeros((len(points), 3))
    for start in range(0, len(points), _WINDOW):
        window = slice(start, start + _WINDOW)
        _locate_window(buckets, points[window], triangle[window], weights[window])
    return triangle, weights


def _locate_window(buckets: Buckets, points: Floats, triangle: Integers, weights: Floats) -> None:
    """Fill `triangle` and `weights` for the points of one window."""
    place = (points - buckets.corner) / buckets.step
    limit = np.array(buckets.shape)
    near = np.flatnonzero(((place >= -1e-6) & (place <= limit + 1e-6)).all(axis=1))
    cell_xy = np.clip(np.floor(place[near]).astype(np.int64), 0, limit - 1)
    cell = cell_xy[:, 1] * buckets.shape[0] + cell_xy[:, 0]
    pointer, stop = buckets.start[cell], buckets.start[cell + 1]
    best = np.full(len(points), -_ON_EDGE)
    while True:
        going = pointer < stop
        near, pointer, stop = near[going], pointer[going], stop[going]
        if not len(near):
            break
        candidate = buckets.triangle[pointer]
        dx, dy = (points[near] - buckets.first[candidate]).T
        inverse = buckets.inverse[candidate]
        second = inverse[:, 0] * dx + inverse[:, 1] * dy
        third = inverse[:, 2] * dx + inverse[:, 3] * dy
        coordinates = np.column_stack([1.0 - second - third, second, third])
        least = coordinates.min(axis=1)
        better = least >= best[near]
        chosen = near[better]
        best[chosen], triangle[chosen], weights[chosen] = (
            least[better],
            candidate[better],
            coordinates[better],
        )
        pending = ~(better & (least >= 0.0))
        near, pointer, stop = near[pending], pointer[pending] + 1, stop[pending]
    found = triangle >= 0
    clipped = np.clip(weights[found], 0.0, 1.0)
    weights[found] = clipped / clipped.sum(axis=1, keepdims=True)
