"""Equilateral lattices: over a rectangle, and thinning out in rings around a zone.

Lattice points are handled as cells (column, row), whole numbers that lean by half an edge per row, so that
their neighbours, their coarser sublattices and their identity are exact.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import ConvexHull, cKDTree

from prevmap.errors import InputError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_ROW = math.sqrt(3.0) / 2.0  # distance between lattice rows, in edges
_NEIGHBOURS = np.array([[0, 0], [1, 0], [-1, 0], [0, 1], [0, -1], [1, -1], [-1, 1]], dtype=np.int64)
_LATTICE_LIMIT = 10_000_000


def equilateral_lattice(bounds: tuple[float, float, float, float], edge_km: float) -> Floats:
    """Lay an equilateral lattice over a rectangle, anchored at its lower left corner.

    Parameters
    ----------
    bounds : (xmin, ymin, xmax, ymax), km
        The rectangle; every point of it lies in a triangle of the lattice.
    edge_km : float
        Distance between neighbouring lattice points.

    Returns
    -------
    (k, 2) float, km
        Lattice points row by row from the south, west to east.

    Raises
    ------
    InputError
        If the lattice would have more than 10 million points.

    Examples
    --------
    >>> equilateral_lattice((0.0, 0.0, 1.0, 0.5), 1.0).round(3).tolist()
    [[0.0, 0.0], [1.0, 0.0], [-0.5, 0.866], [0.5, 0.866], [1.5, 0.866]]
    """
    xmin, ymin, xmax, ymax = (float(value) for value in bounds)
    if not (xmax >= xmin and ymax >= ymin and math.isfinite(xmax - xmin + ymax - ymin)):
        raise ValueError(f"bounds must be finite with xmin <= xmax and ymin <= ymax; found {bounds}")
    _check_lengths(edge_km, 0.0)
    # A hair is taken off so that a rectangle of whole edges gets no extra row from rounding.
    rows = math.ceil((ymax - ymin) / (edge_km * _ROW) - 1e-9) + 1
    columns = math.ceil((xmax - xmin) / edge_km - 1e-9) + 1
    if rows * (columns + 1) > _LATTICE_LIMIT:
        raise InputError(
            f"An edge of {edge_km:g} km over {xmax - xmin:g} km x {ymax - ymin:g} km needs "
            f"{rows * (columns + 1):,} lattice points; at most {_LATTICE_LIMIT:,} are "
            "accepted. Give a longer edge."
        )
    even = xmin + edge_km * np.arange(columns)
    odd = xmin + edge_km * (np.arange(columns + 1) - 0.5)
    x = [odd if row % 2 else even for row in range(rows)]
    y = ymin + edge_km * _ROW * np.repeat(np.arange(rows), [len(row) for row in x])
    return np.column_stack([np.concatenate(x), y])


def lattice_nodes_needed(
    zone_area_km2: float,
    edge_km: float,
    margin_km: float,
    *,
    zone_perimeter_km: float | None = None,
    growth: float = 1.5,
) -> int:
    """Estimate the nodes of a graded mesh over a zone that is first grown by one edge.

    Parameters
    ----------
    zone_area_km2 : float
        Area of the zone before it is grown (the region with the sites).
    edge_km, margin_km : float
        As in `grade_mesh`.
    zone_perimeter_km : float, optional
        Length of the zone's outline; that of a square of the same area where it is not given.
        The outline enters as if the zone were convex, so a ragged one gives an upper estimate.
    growth : float
        As in `grade_mesh`.

    Returns
    -------
    int
        Expected number of nodes.
    """
    _check_lengths(edge_km, margin_km)
    _check_growth(growth)
    if not (math.isfinite(zone_area_km2) and zone_area_km2 >= 0):
        raise ValueError(f"zone_area_km2 must be finite and not negative; found {zone_area_km2}")
    perimeter = 4.0 * math.sqrt(zone_area_km2) if zone_perimeter_km is None else float(zone_perimeter_km)
    # Steiner's formula for the zone grown by one edge.
    area = zone_area_km2 + perimeter * edge_km + math.pi * edge_km**2
    return _nodes_estimate(area, perimeter + 2.0 * math.pi * edge_km, edge_km, margin_km, growth)


def check_node_cap(
    zone_area_km2: float,
    edge_km: float,
    margin_km: float,
    max_nodes: int = 100_000,
    *,
    zone_perimeter_km: float | None = None,
    growth: float = 1.5,
) -> int:
    """Refuse a mesh that would pass the node cap, before any work, and name the edge that would fit.

    Parameters are those of `lattice_nodes_needed`, and the cap.

    Returns
    -------
    int
        The estimated number of nodes.

    Raises
    ------
    InputError
        If the estimate is above `max_nodes`.
    """

    def needed(edge: float) -> int:
        return lattice_nodes_needed(
            zone_area_km2, edge, margin_km, zone_perimeter_km=zone_perimeter_km, growth=growth
        )

    estimate = needed(edge_km)
    if estimate > max_nodes:
        fitting = _edge_that_fits(needed, edge_km, max_nodes)
        raise InputError(_too_many_nodes(edge_km, f"about {estimate:,}", max_nodes, fitting))
    return estimate


def _check_lengths(edge_km: float, margin_km: float) -> None:
    if not (math.isfinite(edge_km) and edge_km > 0):
        raise InputError(f"The mesh edge must be a positive number of km; found {edge_km}.")
    if not (math.isfinite(margin_km) and margin_km >= 0):
        raise InputError(f"The mesh margin must be zero or a positive number of km; found {margin_km}.")


def _check_growth(growth: float) -> None:
    if not 1.1 <= growth <= 1.5:  # above, a level of the rings gets too thin to part the next two
        raise InputError(f"The growth of the mesh edge from ring to ring must be 1.1 to 1.5; found {growth}.")


def _level(distance: Floats | float, growth: float) -> Integers:
    """Largest k such that an edge of 2^k is allowed at a distance from the zone, all in edges."""
    return np.floor(np.log2(1.0 + (growth - 1.0) * np.asarray(distance)) + 1e-9).astype(np.int64)


def _nodes_estimate(area: float, perimeter: float, edge: float, margin: float, growth: float) -> int:
    """Nodes of a mesh over a zone that is already grown, given its area and outline."""
    cell = _ROW * edge**2
    nodes = area / cell
    top = int(_level(margin / edge, growth))
    for level in range(top + 1):
        spacing = 2.0**level * edge
        near = (2.0**level - 1.0) / (growth - 1.0) * edge
        far = (2.0 ** (level + 1) - 1.0) / (growth - 1.0) * edge if level < top else margin + spacing
        band = perimeter * (far - near) + math.pi * (far**2 - near**2)
        nodes += band / (_ROW * spacing**2)
    return math.ceil(nodes)


def _edge_that_fits(needed: Callable[[float], int], edge_km: float, max_nodes: int) -> float:
    """Smallest edge, rounded up to three figures, with a node estimate a little under the cap."""
    target = 0.95 * max_nodes
    low, high = edge_km, edge_km
    while needed(high) > target:
        low, high = high, 2.0 * high
        if high > 1e6 * edge_km:
            return math.inf
    for _ in range(40):
        middle = math.sqrt(low * high)
        low, high = (low, middle) if needed(middle) <= target else (middle, high)
    step = 10.0 ** (math.floor(math.log10(high)) - 2)
    return float(f"{math.ceil(high / step - 1e-9) * step:.3g}")


def _too_many_nodes(edge_km: float, found: str, max_nodes: int, fitting: float) -> str:
    remedy = (
        f"The smallest edge that fits is about {fitting:g} km."
        if math.isfinite(fitting)
        else "No edge fits that cap."
    )
    return (
        f"A mesh edge of {edge_km:g} km needs {found} nodes; at most {max_nodes:,} are accepted (max_nodes). "
        f"{remedy}"
    )


def _refuse(inner: Integers, found: int, edge: float, margin: float, growth: float, cap: int) -> None:
    area, perimeter = len(inner) * _ROW * edge**2, len(_outline(inner)) * edge

    def needed(edge_km: float) -> int:
        return _nodes_estimate(area, perimeter, edge_km, margin, growth)

    fitting = _edge_that_fits(needed, edge, cap)
    raise InputError(_too_many_nodes(edge, f"{found:,} or more", cap, fitting))


def graded_cells(
    inner: Floats, edge_km: float, margin_km: float, growth: float, max_nodes: int
) -> tuple[Floats, Integers]:
    """Give the lattice cells of a zone and of its rings, as `prevmap.engine.mesh.grade_mesh` documents.

    Returns
    -------
    origin : (2,) float, km
        Position of cell (0, 0), the southernmost inner point, of those the westernmost.
    cells : (m, 2) int
        Column and row of the nodes, row by row from the south, west to east.
    """
    _check_lengths(edge_km, margin_km)
    _check_growth(growth)
    origin = inner[np.lexsort((inner[:, 0], inner[:, 1]))[0]]
    zone = _unique_cells(_lattice_cells(inner, origin, edge_km))
    if len(zone) > max_nodes:
        _refuse(zone, len(zone), edge_km, margin_km, growth, max_nodes)
    cells = np.concatenate([zone, *_rings(zone, edge_km, margin_km, growth)])
    if len(cells) > max_nodes:
        _refuse(zone, len(cells), edge_km, margin_km, growth, max_nodes)
    return origin, cells[np.lexsort((cells[:, 0], cells[:, 1]))]


def cell_positions(cells: Integers) -> Floats:
    """Position in edges of lattice cells (column, row), columns leaning by half an edge per row."""
    return np.column_stack([cells[:, 0] + 0.5 * cells[:, 1], _ROW * cells[:, 1]])


def _lattice_cells(points: Floats, origin: Floats, edge_km: float) -> Integers:
    scaled = (points - origin) / edge_km
    row = np.rint(scaled[:, 1] / _ROW)
    column = np.rint(scaled[:, 0] - 0.5 * row)
    cells = np.column_stack([column, row]).astype(np.int64)
    off = np.abs(cell_positions(cells) - scaled).max()
    if off > 1e-3:  # far above rounding, far below a lattice of another edge
        raise ValueError(
            f"inner points are off the equilateral lattice of edge {edge_km:g} km by {off:.3g} edges"
        )
    return cells


def _cell_keys(cells: Integers) -> Integers:
    return (cells[:, 1] << 32) + cells[:, 0] + (1 << 31)


def _unique_cells(cells: Integers) -> Integers:
    return cells[np.unique(_cell_keys(cells), return_index=True)[1]]


def _outline(cells: Integers) -> Integers:
    """Return the cells that miss at least one of their six neighbours."""
    keys = np.sort(_cell_keys(cells))
    whole = np.ones(len(cells), dtype=bool)
    for step in _NEIGHBOURS[1:]:
        wanted = _cell_keys(cells + step)
        whole &= keys[np.minimum(np.searchsorted(keys, wanted), len(keys) - 1)] == wanted
    return cells[~whole]


def _rings(inner: Integers, edge_km: float, margin_km: float, growth: float) -> list[Integers]:
    """Lattice cells around the inner ones: every 2^k-th row and column at the distances of level k."""
    outline = _outline(inner)
    positions = cell_positions(outline)
    tree = cKDTree(positions)
    inner_keys = _cell_keys(inner)
    margin = margin_km / edge_km
    top = int(_level(margin, growth))
    # One spacing more, so that the triangle around any point of the margin has its corners.
    reach = margin + 2.0**top
    limits = _around(positions, reach)
    widest = float(np.ptp(positions, axis=0).sum()) + 2.0 * reach
    rings = []
    far = 0.0
    level = 0
    while far <= widest:
        spacing = 1 << level
        near, far = far, (2.0 ** (level + 1) - 1.0) / (growth - 1.0)
        if level == top:
            far = max(far, reach)
        coarse = _unique_cells(outline // spacing)
        # A step of six neighbours reaches at least sqrt(3)/2 spacings; two more cover the rounding above.
        for _ in range(math.ceil(min(far, widest) / spacing / _ROW) + 2):
            coarse = _unique_cells((coarse[:, None, :] + _NEIGHBOURS).reshape(-1, 2))
        cells = coarse * spacing
        cells = cells[~np.isin(_cell_keys(cells), inner_keys)]
        places = cell_positions(cells)
        distance = tree.query(places)[0]
        kept = (distance > near - 1e-9) & (distance <= far - 1e-9)
        if level >= top:
            # Coarser levels go a little beyond the convex edge to complete the triangles that it cuts.
            slack = spacing - 2.0**top + 1e-9
            kept &= (places @ limits[:, :2].T <= slack - limits[:, 2]).all(axis=1)
        rings.append(cells[kept])
        level += 1
    return rings


def _around(positions: Floats, reach: float) -> Floats:
    """Half-planes (normal and offset, (h, 3)) around all points within a distance of the positions.

    The outer edge is convex: between parts of a zone and in its bays the rings go on growing, which takes
    few nodes and leaves no gap to be bridged by needles.
    """
    angle = 2.0 * math.pi * (np.arange(24) + 0.5) / 24
    circle = reach / math.cos(math.pi / 24) * np.column_stack([np.cos(angle), np.sin(angle)])
    return ConvexHull((positions[:, None, :] + circle).reshape(-1, 2)).equations
