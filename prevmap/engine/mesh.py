"""Graded triangulation of the study area, its finite-element matrices, and the projector onto points."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix
from scipy.spatial import ConvexHull, Delaunay, cKDTree

from prevmap.errors import InputError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_ROW = math.sqrt(3.0) / 2.0  # distance between lattice rows, in edges
_NEIGHBOURS = np.array([[0, 0], [1, 0], [-1, 0], [0, 1], [0, -1], [1, -1], [-1, 1]], dtype=np.int64)
_ON_EDGE = 1e-9  # barycentric slack: a point this near the outer edge is on it, whatever the rounding says
_SLIVER_DEG = 20.0  # hull triangles narrower than this only fill the notches between outer nodes
_LATTICE_LIMIT = 10_000_000
_WINDOW = 65_536


@dataclass(frozen=True, eq=False)
class Mesh:
    """A conforming triangulation; triangles are stored anticlockwise and the arrays are read-only.

    Parameters
    ----------
    points : (m, 2) float, km
        Node positions; every node belongs to a triangle.
    triangles : (t, 3) int
        Node numbers of each triangle's corners.
    edge_km : float, optional
        Edge of the lattice in the inner zone; the median edge where it is not given.
    margin_km : float, optional
        How far the mesh reaches beyond the inner zone.

    Raises
    ------
    ValueError
        If a corner is no node, a node has no triangle, a triangle has no area, or an edge has
        three triangles.
    """

    points: Floats
    triangles: Integers
    edge_km: float = math.nan
    margin_km: float = 0.0

    def __post_init__(self) -> None:
        points = np.array(self.points, dtype=np.float64)
        triangles = np.array(self.triangles, dtype=np.int64)
        if points.ndim != 2 or points.shape[1] != 2 or not np.isfinite(points).all():
            raise ValueError(f"points must be finite and of shape (m, 2); found shape {points.shape}")
        if triangles.ndim != 2 or triangles.shape[1] != 3 or len(triangles) == 0:
            raise ValueError(f"triangles must have shape (t, 3) with t >= 1; found {triangles.shape}")
        if triangles.min() < 0 or triangles.max() >= len(points):
            raise ValueError(f"triangles name nodes outside 0..{len(points) - 1}")
        unused = np.setdiff1d(np.arange(len(points)), triangles)
        if len(unused):
            raise ValueError(f"{len(unused)} nodes belong to no triangle, first: {unused[:5].tolist()}")
        area = _signed_areas(points, triangles)
        triangles[area < 0] = triangles[area < 0][:, [0, 2, 1]]
        longest = np.sqrt((_edge_vectors(points, triangles) ** 2).sum(axis=2)).max(axis=1)
        flat = np.flatnonzero(np.abs(area) <= 1e-12 * longest**2)
        if len(flat):
            raise ValueError(f"{len(flat)} triangles have no area, first: {flat[:5].tolist()}")
        _, uses = np.unique(_edge_keys(triangles, len(points)), return_counts=True)
        if uses.max() > 2:
            raise ValueError("an edge belongs to more than two triangles")
        edge = self.edge_km
        if math.isnan(edge):
            edge = float(np.median(np.sqrt((_edge_vectors(points, triangles) ** 2).sum(axis=2))))
        points.setflags(write=False)
        triangles.setflags(write=False)
        for name, value in (("points", points), ("triangles", triangles), ("edge_km", edge)):
            object.__setattr__(self, name, value)

    @property
    def nodes(self) -> int:
        """Number of nodes."""
        return len(self.points)

    @cached_property
    def area_km2(self) -> float:
        """Area covered by the triangles."""
        return float(_signed_areas(self.points, self.triangles).sum())

    @cached_property
    def smallest_angles_deg(self) -> Floats:
        """Smallest angle of each triangle, (t,) float, degrees."""
        return _smallest_angles(self.points, self.triangles)

    @cached_property
    def _buckets(self) -> _Buckets:
        return _fill_buckets(self.points, self.triangles)

    def __repr__(self) -> str:
        return (
            f"Mesh({self.nodes} nodes, {len(self.triangles)} triangles, edge {self.edge_km:g} km, "
            f"margin {self.margin_km:g} km)"
        )


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


def grade_mesh(
    inner: ArrayLike,
    edge_km: float,
    margin_km: float,
    growth: float = 1.5,
    max_nodes: int = 100_000,
) -> Mesh:
    """Triangulate lattice points and surround them with rings whose edge grows with the distance.

    Parameters
    ----------
    inner : (k, 2) float, km
        The points of `equilateral_lattice` that lie in the inner zone, in any order. The zone may be
        concave, have holes or several parts: what lies between them is meshed as well.
    edge_km : float
        Edge of that lattice.
    margin_km : float
        Every point up to this distance from an inner point lies in the mesh.
    growth : float
        How much the edge may grow from ring to ring, between 1.1 and 1.5.
    max_nodes : int
        Most nodes accepted.

    Returns
    -------
    Mesh
        Nodes ordered by row from the south, then west to east; the same for any order of `inner`.

    Raises
    ------
    InputError
        If more than `max_nodes` would be needed; raised before anything is triangulated.
    ValueError
        If `inner` is no part of an equilateral lattice of that edge.

    Notes
    -----
    At distance d from the zone the edge may be edge_km (1 + (growth - 1) d / edge_km), which grows by
    the factor `growth` per ring of its own width. The largest edge_km 2^k within that is used: the
    points with every 2^k-th row and column are again an equilateral lattice, so that rings need no
    new directions, and where they meet the triangles have angles of 30 degrees or more.
    """
    _check_lengths(edge_km, margin_km)
    _check_growth(growth)
    given = np.asarray(inner, dtype=np.float64)
    if given.ndim != 2 or given.shape[1] != 2 or len(given) == 0 or not np.isfinite(given).all():
        raise ValueError(f"inner must be finite and of shape (k, 2) with k >= 1; found shape {given.shape}")
    origin = given[np.lexsort((given[:, 0], given[:, 1]))[0]]
    zone = _unique_cells(_lattice_cells(given, origin, edge_km))
    if len(zone) > max_nodes:
        _refuse(zone, len(zone), edge_km, margin_km, growth, max_nodes)
    cells = np.concatenate([zone, *_rings(zone, edge_km, margin_km, growth)])
    if len(cells) > max_nodes:
        _refuse(zone, len(cells), edge_km, margin_km, growth, max_nodes)
    cells = cells[np.lexsort((cells[:, 0], cells[:, 1]))]
    shape = _cell_positions(cells)
    triangles = _peel_hull(shape, _triangulate(shape))
    return Mesh(origin + edge_km * shape, triangles, float(edge_km), float(margin_km))


def finite_elements(mesh: Mesh) -> tuple[Floats, csc_matrix]:
    """Assemble the lumped mass and the stiffness of piecewise linear elements.

    Parameters
    ----------
    mesh : Mesh
        m nodes.

    Returns
    -------
    lumped : (m,) float, km2
        A third of the area of the triangles at each node: the row sums of the mass matrix.
    stiffness : (m, m) csc
        G with G_ij = sum over triangles of e_i . e_j / (4 A), where e_i is the edge opposite node i.
        Entries of neighbours that cancel stay stored as zeros.

    Notes
    -----
    Lindgren, Rue & Lindstrom (2011), J. R. Stat. Soc. B 73:423-498, section 2.3, with piecewise linear
    elements; the mass is lumped there to keep the precision sparse.
    """
    area = _signed_areas(mesh.points, mesh.triangles)
    opposite = _edge_vectors(mesh.points, mesh.triangles)
    lumped = np.zeros(mesh.nodes)
    np.add.at(lumped, mesh.triangles, (area / 3.0)[:, None])
    local = np.einsum("tik,tjk->tij", opposite, opposite) / (4.0 * area)[:, None, None]
    rows = np.repeat(mesh.triangles, 3, axis=1).ravel()
    columns = np.tile(mesh.triangles, (1, 3)).ravel()
    stiffness = coo_matrix((local.ravel(), (rows, columns)), shape=(mesh.nodes, mesh.nodes)).tocsc()
    stiffness.sort_indices()
    return lumped, stiffness


def locate(mesh: Mesh, xy: ArrayLike) -> tuple[Integers, Floats]:
    """Find the triangle and the barycentric coordinates of points.

    Parameters
    ----------
    mesh : Mesh
    xy : (n, 2) float, km

    Returns
    -------
    triangle : (n,) int
        A triangle that contains the point, -1 off the mesh (also for a position that is not finite).
    weights : (n, 3) float
        Barycentric coordinates in [0, 1] for that triangle's corners, summing to 1; zero off the mesh.
    """
    points = np.asarray(xy, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != 2:
        raise ValueError(f"xy must have shape (n, 2); found {points.shape}")
    triangle = np.full(len(points), -1, dtype=np.int64)
    weights = np.zeros((len(points), 3))
    for start in range(0, len(points), _WINDOW):
        window = slice(start, start + _WINDOW)
        _locate_window(mesh._buckets, points[window], triangle[window], weights[window])
    return triangle, weights


def projector(mesh: Mesh, xy: ArrayLike) -> tuple[csr_matrix, NDArray[np.bool_]]:
    """Build the matrix that interpolates node values linearly at points.

    Parameters
    ----------
    mesh : Mesh
        m nodes.
    xy : (n, 2) float, km

    Returns
    -------
    projection : (n, m) csr
        Three stored entries per row (zeros kept) that sum to 1; an empty row off the mesh.
    inside : (n,) bool
        Whether the point lies on the mesh.
    """
    triangle, weights = locate(mesh, xy)
    inside = triangle >= 0
    corners = mesh.triangles[triangle[inside]]
    order = np.argsort(corners, axis=1)
    indptr = np.concatenate([[0], np.cumsum(3 * inside.astype(np.int64))])
    data = np.take_along_axis(weights[inside], order, axis=1).ravel()
    indices = np.take_along_axis(corners, order, axis=1).ravel()
    return csr_matrix((data, indices, indptr), shape=(len(inside), mesh.nodes)), inside


@dataclass(frozen=True, slots=True, eq=False)
class _Buckets:
    """Triangles by the cells of a rectangular grid that their bounding boxes touch."""

    corner: Floats  # (2,) lower left of the grid, km
    step: Floats  # (2,) cell size, km
    shape: tuple[int, int]  # cells along x, along y
    start: Integers  # (cells + 1,) where a cell's triangles begin
    triangle: Integers  # triangles, cell after cell
    first: Floats  # (t, 2) first corner of each triangle
    inverse: Floats  # (t, 4) rows of the map from a position to the second and third coordinate


def _fill_buckets(points: Floats, triangles: Integers) -> _Buckets:
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
    return _Buckets(low, step, shape, start, triangle[order], corners[:, 0].copy(), inverse)


def _locate_window(buckets: _Buckets, points: Floats, triangle: Integers, weights: Floats) -> None:
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


def _check_lengths(edge_km: float, margin_km: float) -> None:
    if not (math.isfinite(edge_km) and edge_km > 0):
        raise InputError(f"The mesh edge must be a positive number of km; found {edge_km}.")
    if not (math.isfinite(margin_km) and margin_km >= 0):
        raise InputError(f"The mesh margin must be zero or a positive number of km; found {margin_km}.")


def _check_growth(growth: float) -> None:
    if not 1.1 <= growth <= 1.5:  # above, a level of the rings gets too thin to part the next two
        raise InputError(f"The growth of the mesh edge from ring to ring must be 1.1 to 1.5; found {growth}.")


def _level(distance: Any, growth: float) -> Any:
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


def _edge_that_fits(needed: Any, edge_km: float, max_nodes: int) -> float:
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


def _cell_positions(cells: Integers) -> Floats:
    """Position in edges of lattice cells (column, row), columns leaning by half an edge per row."""
    return np.column_stack([cells[:, 0] + 0.5 * cells[:, 1], _ROW * cells[:, 1]])


def _lattice_cells(points: Floats, origin: Floats, edge_km: float) -> Integers:
    scaled = (points - origin) / edge_km
    row = np.rint(scaled[:, 1] / _ROW)
    column = np.rint(scaled[:, 0] - 0.5 * row)
    cells = np.column_stack([column, row]).astype(np.int64)
    off = np.abs(_cell_positions(cells) - scaled).max()
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
    positions = _cell_positions(outline)
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
        places = _cell_positions(cells)
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


def _triangulate(shape: Floats) -> Integers:
    triangles = Delaunay(shape - shape.mean(axis=0)).simplices.astype(np.int64)
    area = _signed_areas(shape, triangles)
    triangles[area < 0] = triangles[area < 0][:, [0, 2, 1]]
    return triangles[np.abs(area) > 1e-7]  # in squared edges: what is below only spans nodes on one line


def _peel_hull(shape: Floats, triangles: Integers) -> Integers:
    """Drop narrow triangles from the outer edge while every node stays and the mesh stays whole."""
    bad = _smallest_angles(shape, triangles) < _SLIVER_DEG
    keep = np.ones(len(triangles), dtype=bool)
    while True:
        kept = np.flatnonzero(keep)
        keys = _edge_keys(triangles[kept], len(shape)).reshape(-1, 3)
        _, back, uses = np.unique(keys, return_inverse=True, return_counts=True)
        outer = uses[back].reshape(-1, 3) == 1  # column i: the edge opposite corner i
        corners = triangles[kept]
        on_edge = np.zeros(len(shape), dtype=bool)
        for i in range(3):
            on_edge[corners[outer[:, i]][:, [(i + 1) % 3, (i + 2) % 3]]] = True
        apex = corners[np.arange(len(kept)), outer.argmax(axis=1)]
        loose = np.flatnonzero(bad[kept] & (outer.sum(axis=1) == 1) & ~on_edge[apex])
        if not len(loose):
            return triangles[keep]
        # Two triangles with one apex would leave it as a pinch: one of them per round.
        loose = loose[np.unique(apex[loose], return_index=True)[1]]
        keep[kept[loose]] = False


def _edge_vectors(points: Floats, triangles: Integers) -> Floats:
    """Edge opposite each corner, (t, 3, 2)."""
    corners = points[triangles]
    return corners[:, [2, 0, 1]] - corners[:, [1, 2, 0]]


def _signed_areas(points: Floats, triangles: Integers) -> Floats:
    corners = points[triangles]
    a, b = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    return 0.5 * (a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0])


def _smallest_angles(points: Floats, triangles: Integers) -> Floats:
    opposite = _edge_vectors(points, triangles)
    double = 2.0 * np.abs(_signed_areas(points, triangles))
    angles = []
    for i in range(3):
        inner = -(opposite[:, (i + 1) % 3] * opposite[:, (i + 2) % 3]).sum(axis=1)
        angles.append(np.degrees(np.arctan2(double, inner)))
    return np.min(angles, axis=0)


def _edge_keys(triangles: Integers, nodes: int) -> Integers:
    """One number per edge, the same from both sides; in the order of the opposite corners."""
    a, b = triangles[:, [1, 2, 0]], triangles[:, [2, 0, 1]]
    return (np.minimum(a, b) * nodes + np.maximum(a, b)).ravel()
