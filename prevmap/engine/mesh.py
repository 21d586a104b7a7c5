"""Graded triangulation of the study area, its finite-element matrices, and the projector onto points."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix
from scipy.spatial import Delaunay

from prevmap.engine.lattice import (
    cell_positions,
    check_node_cap,
    equilateral_lattice,
    graded_cells,
    lattice_nodes_needed,
)
from prevmap.engine.location import Buckets, fill_buckets, locate_in

__all__ = [
    "Mesh",
    "check_node_cap",
    "equilateral_lattice",
    "finite_elements",
    "grade_mesh",
    "lattice_nodes_needed",
    "locate",
    "projector",
]

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

_SLIVER_DEG = 20.0  # hull triangles narrower than this only fill the notches between outer nodes


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
    def _buckets(self) -> Buckets:
        return fill_buckets(self.points, self.triangles)

    def __repr__(self) -> str:
        return (
            f"Mesh({self.nodes} nodes, {len(self.triangles)} triangles, edge {self.edge_km:g} km, "
            f"margin {self.margin_km:g} km)"
        )


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
    new directions, and where they meet the triangles have angles of 30 degrees or more. Only
    single triangles at the outer edge, beside a bay of the zone, may be narrower (about 10 degrees).
    """
    given = np.asarray(inner, dtype=np.float64)
    if given.ndim != 2 or given.shape[1] != 2 or len(given) == 0 or not np.isfinite(given).all():
        raise ValueError(f"inner must be finite and of shape (k, 2) with k >= 1; found shape {given.shape}")
    origin, cells = graded_cells(given, edge_km, margin_km, growth, max_nodes)
    shape = cell_positions(cells)
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
    return locate_in(mesh._buckets, points)


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
