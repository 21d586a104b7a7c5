"""From a study area and its sites to a mesh: the inner zone, and edges and margins by default."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from prevmap.engine.mesh import Mesh, check_node_cap, equilateral_lattice, grade_mesh
from prevmap.errors import InputError

DEFAULT_NODES = 4_000  # a default edge asks for no more nodes than this in the region
REFINED_NODES = 6_000  # and no more than this after a look at the fitted range
EDGES_PER_RANGE = 10.0
DEFAULT_MARGIN = 10.0  # diagonals of the study area: rings grow, so that distance costs few nodes
RANGES_PER_MARGIN = 2.0  # up to here the border raises the variance in the region by less than 3 %
LARGEST_MARGIN = 2_000.0  # diagonals


def diagonal_km(boundary: Any) -> float:
    """Diagonal of the bounding box of a boundary in metres, in km."""
    west, south, east, north = boundary.bounds
    return math.hypot(east - west, north - south) / 1000.0


def site_spacing_km(xy_km: NDArray[np.float64]) -> float:
    """Median distance from a position to the nearest other one; infinite with one position."""
    distinct = np.unique(xy_km, axis=0)
    if len(distinct) < 2:
        return math.inf
    return float(np.median(cKDTree(distinct).query(distinct, k=2)[0][:, 1]))


def inner_zone_km(boundary: Any, xy_km: NDArray[np.float64]) -> Any:
    """Region (metres) and sites (km) as one shape in km, holes filled: a lake is no edge for the field."""
    land = shapely.transform(boundary, lambda xy: np.round(xy / 1000.0, 6))
    outer = [shapely.Polygon(part.exterior) for part in shapely.get_parts(land)]
    return shapely.union_all([*outer, *shapely.points(np.unique(xy_km, axis=0))])


def default_edge_km(zone: Any, range_km: float, spacing_km: float, nodes: int = DEFAULT_NODES) -> float:
    """Edge from the range to be expected and the spacing of sites, coarser where that takes too many nodes."""
    wanted = min(range_km / EDGES_PER_RANGE, spacing_km)
    affordable = math.sqrt(max(zone.area, 1e-12) / (nodes * math.sqrt(3.0) / 2.0))
    return float(f"{max(wanted, affordable):.3g}")


def default_margin_km(boundary: Any, reach_km: float) -> float:
    """Margin for every range that the data may leave open, and for the range to be expected."""
    diagonal = diagonal_km(boundary)
    return float(f"{min(max(DEFAULT_MARGIN * diagonal, 1.2 * reach_km), LARGEST_MARGIN * diagonal):.3g}")


def mesh_over(zone: Any, edge_km: float, margin_km: float, max_nodes: int) -> Mesh:
    """Mesh of the zone grown by one edge, with a margin beyond.

    Raises
    ------
    InputError
        Above ``max_nodes``, before any work, with the edge that would fit; or for a margin out of all proportion.
    """
    west, south, east, north = zone.bounds
    most = LARGEST_MARGIN * max(math.hypot(east - west, north - south), edge_km)
    if margin_km > most * 1.01:
        raise InputError(
            f"margin_km = {margin_km:g}: expected at most {most:.3g} km for a study area of this size"
        )
    check_node_cap(
        zone.area, edge_km, margin_km, max_nodes, zone_perimeter_km=shapely.convex_hull(zone).length
    )
    grown = shapely.simplify(zone, edge_km / 50.0).buffer(edge_km)
    lattice = equilateral_lattice(grown.bounds, edge_km)
    inner = lattice[shapely.contains_xy(grown, lattice[:, 0], lattice[:, 1])]
    return grade_mesh(inner, edge_km, margin_km, max_nodes=max_nodes)
