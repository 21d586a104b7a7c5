"""Triangulation, finite elements and projector: exact small cases, identities and properties."""

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay, cKDTree
from tolerances import ALGEBRA

from prevmap.engine.mesh import (
    Mesh,
    _peel_hull,
    check_node_cap,
    equilateral_lattice,
    finite_elements,
    grade_mesh,
    lattice_nodes_needed,
    locate,
    projector,
)
from prevmap.errors import InputError

SQUARE = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]])
REFERENCE = Mesh([[0, 0], [1, 0], [0, 1]], [[0, 1, 2]])


def random_mesh(seed, points=120):
    places = np.random.default_rng(seed).random((points, 2))
    return Mesh(places, Delaunay(places).simplices)


def disc(edge_km=1.0, radius=8.0):
    lattice = equilateral_lattice((0, 0, 20, 20), edge_km)
    return lattice[np.hypot(*(lattice - 10.0).T) < radius]


def scattered_zone(seed):
    """Inner points of one to four discs: convex, concave, in several parts, or a single point."""
    rng = np.random.default_rng(seed)
    lattice = equilateral_lattice((0, 0, *rng.integers(2, 30, 2)), 1.0)
    centres = lattice[rng.integers(0, len(lattice), rng.integers(1, 5))]
    return lattice[cKDTree(centres).query(lattice)[0] <= rng.random() * 5.0]


def undirected_edges(mesh):
    pairs = np.sort(mesh.triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    return np.unique(pairs, axis=0, return_counts=True)


# --- finite elements -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("corners", "stiffness"),
    [
        # computed independently in exact arithmetic from G_ij = e_i . e_j / (4 A)
        ([[0, 0], [1, 0], [0, 1]], np.array([[2, -1, -1], [-1, 1, 0], [-1, 0, 1]]) / 2),
        ([[0, 0], [2, 0], [0, 1]], np.array([[5, -1, -4], [-1, 1, 0], [-4, 0, 4]]) / 4),
        (
            [[0, 0], [1, 0], [0.5, np.sqrt(3) / 2]],
            np.sqrt(3) / 6 * np.array([[2, -1, -1], [-1, 2, -1], [-1, -1, 2]]),
        ),
    ],
)
def test_stiffness_of_one_triangle(corners, stiffness):
    mesh = Mesh(corners, [[0, 1, 2]])
    lumped, found = finite_elements(mesh)
    np.testing.assert_allclose(found.toarray(), stiffness, atol=ALGEBRA)
    np.testing.assert_allclose(lumped, mesh.area_km2 / 3.0, rtol=ALGEBRA)


@pytest.mark.parametrize(
    ("triangles", "lumped"),
    [
        ([[0, 1, 2], [0, 2, 3]], [1 / 3, 1 / 6, 1 / 3, 1 / 6]),
        ([[0, 1, 3], [1, 2, 3]], [1 / 6, 1 / 3, 1 / 6, 1 / 3]),
    ],
)
def test_unit_square_has_one_stiffness_for_both_diagonals(triangles, lumped):
    # computed independently in exact arithmetic
    expected = np.array([[2, -1, 0, -1], [-1, 2, -1, 0], [0, -1, 2, -1], [-1, 0, -1, 2]]) / 2
    mass, stiffness = finite_elements(Mesh(SQUARE, triangles))
    np.testing.assert_allclose(stiffness.toarray(), expected, atol=ALGEBRA)
    np.testing.assert_allclose(mass, lumped, rtol=ALGEBRA)
    # the diagonal's cancelled entry stays stored, so that the pattern does not depend on the shape
    assert stiffness.nnz == 14


@pytest.mark.parametrize("mesh", [random_mesh(1), random_mesh(2), grade_mesh(disc(), 1.0, 12.0)])
def test_mass_sums_to_the_area_and_stiffness_measures_slopes(mesh):
    lumped, stiffness = finite_elements(mesh)
    x, y = mesh.points.T
    assert lumped.sum() == pytest.approx(mesh.area_km2, rel=ALGEBRA)
    np.testing.assert_allclose(stiffness @ np.ones(mesh.nodes), 0.0, atol=ALGEBRA)
    assert abs(stiffness - stiffness.T).max() < ALGEBRA
    # u'Gv is the integral of grad u . grad v, exact for linear u and v
    assert x @ stiffness @ x == pytest.approx(mesh.area_km2, rel=ALGEBRA)
    assert y @ stiffness @ y == pytest.approx(mesh.area_km2, rel=ALGEBRA)
    assert x @ stiffness @ y == pytest.approx(0.0, abs=ALGEBRA * mesh.area_km2)
    assert np.linalg.eigvalsh(stiffness.toarray())[1] > 0  # only constants have no slope


def test_lumped_mass_integrates_linear_functions():
    mesh = random_mesh(3)
    lumped, _ = finite_elements(mesh)
    corners = mesh.points[mesh.triangles]
    area = 0.5 * abs(np.linalg.det(corners[:, 1:] - corners[:, :1]))
    np.testing.assert_allclose(lumped @ mesh.points, area @ corners.mean(axis=1), rtol=ALGEBRA)


# --- point location and projector ------------------------------------------------------------------


def test_projector_row_is_barycentric():
    # computed independently: the point (0.25, 0.5) of the reference triangle
    projection, inside = projector(REFERENCE, [[0.25, 0.5]])
    assert inside.tolist() == [True]
    np.testing.assert_allclose(projection.toarray(), [[0.25, 0.25, 0.5]], atol=ALGEBRA)


@pytest.mark.parametrize("seed", range(6))
def test_location_agrees_with_delaunay(seed):
    mesh = random_mesh(seed, points=15 + 40 * seed)
    places = np.random.default_rng(100 + seed).random((3000, 2)) * 1.2 - 0.1
    triangle, weights = locate(mesh, places)
    # the constructor keeps the order of the triangles
    expected = Delaunay(mesh.points).find_simplex(places)
    assert (expected == -1).any()
    np.testing.assert_array_equal(triangle, expected)
    found = triangle >= 0
    corners = mesh.points[mesh.triangles[triangle[found]]]
    np.testing.assert_allclose(np.einsum("ni,nik->nk", weights[found], corners), places[found], atol=ALGEBRA)
    assert weights[found].min() >= 0
    assert not weights[~found].any()


@pytest.mark.parametrize("mesh", [random_mesh(7), grade_mesh(disc(), 1.0, 12.0)])
def test_projector_is_one_at_its_node_and_zero_at_the_others(mesh):
    projection, inside = projector(mesh, mesh.points)
    assert inside.all()
    np.testing.assert_allclose(projection.toarray(), np.eye(mesh.nodes), atol=ALGEBRA)


def test_points_on_edges_are_interpolated_between_the_two_ends():
    mesh = grade_mesh(disc(), 1.0, 5.0)
    edges, _ = undirected_edges(mesh)
    share = np.random.default_rng(4).random(len(edges))
    places = (1 - share)[:, None] * mesh.points[edges[:, 0]] + share[:, None] * mesh.points[edges[:, 1]]
    projection, inside = projector(mesh, places)
    assert inside.all()
    rows = np.arange(len(edges))
    expected = coo_matrix(
        (np.concatenate([1 - share, share]), (np.tile(rows, 2), edges.T.ravel())), projection.shape
    )
    assert abs(projection - expected).max() < ALGEBRA


def test_outer_edge_has_the_slack_of_rounding_and_no_more():
    places = [[0.5, -1e-12], [-1e-12, 0.3], [0.5 + 1e-12, 0.5], [0.5, -1e-6], [-1e-6, 0.3], [0.5 + 1e-6, 0.5]]
    projection, inside = projector(REFERENCE, places)
    assert inside.tolist() == [True, True, True, False, False, False]
    np.testing.assert_allclose(projection.sum(axis=1).ravel(), [[1, 1, 1, 0, 0, 0]], atol=ALGEBRA)
    assert projection.nnz == 9


@pytest.mark.parametrize("place", [[5.0, 5.0], [np.nan, 0.2], [np.inf, 0.2], [-1e300, 0.2]])
def test_places_off_the_mesh_are_not_inside(place):
    projection, inside = projector(REFERENCE, [place, [0.2, 0.2]])
    assert inside.tolist() == [False, True]
    assert projection[0].nnz == 0


def test_notch_of_a_concave_mesh_is_outside():
    corner = Mesh(
        [[0, 0], [2, 0], [2, 1], [1, 1], [1, 2], [0, 2]], [[0, 1, 3], [1, 2, 3], [0, 3, 5], [3, 4, 5]]
    )
    _, inside = projector(corner, [[1.5, 1.5], [1.5, 0.5], [0.5, 1.5], [1.0, 1.0]])
    assert inside.tolist() == [False, True, True, True]


def test_windows_do_not_change_the_projector():
    mesh = random_mesh(8)
    places = np.random.default_rng(9).random((150_000, 2))
    whole, inside = projector(mesh, places)
    part, part_inside = projector(mesh, places[65_000:66_000])
    assert abs(whole[65_000:66_000] - part).max() == 0
    np.testing.assert_array_equal(inside[65_000:66_000], part_inside)
    assert inside[65_000:66_000].any()
    assert not inside[65_000:66_000].all()


@given(seed=st.integers(0, 10**6), scale=st.floats(1e-3, 1e4), shift=st.floats(-1e4, 1e4))
@settings(max_examples=40, deadline=None)
def test_projector_reproduces_linear_functions(seed, scale, shift):
    rng = np.random.default_rng(seed)
    base = random_mesh(seed, points=30)
    mesh = Mesh(base.points * scale + shift, base.triangles)
    places = rng.random((50, 2)) * scale + shift
    projection, inside = projector(mesh, places)
    np.testing.assert_allclose(np.asarray(projection.sum(axis=1)).ravel(), inside, atol=ALGEBRA)
    size = scale + abs(shift)
    np.testing.assert_allclose((projection @ mesh.points)[inside], places[inside], atol=1e-9 * size)  # slack
    assert projection.nnz == 3 * inside.sum()


# --- lattice ---------------------------------------------------------------------------------------

LENGTH = st.floats(0.0, 50.0)


@given(
    west=st.floats(-500, 500), south=st.floats(-500, 500), width=LENGTH, height=LENGTH, edge=st.floats(0.8, 9)
)
@settings(max_examples=60, deadline=None)
def test_lattice_covers_the_rectangle_with_equal_edges(west, south, width, height, edge):
    points = equilateral_lattice((west, south, west + width, south + height), edge)
    assert points[0].tolist() == [west, south]
    if len(points) > 1:
        nearest = cKDTree(points).query(points, k=2)[0][:, 1]
        np.testing.assert_allclose(nearest, edge, rtol=1e-8)  # offsets of 500 km cost digits
    # no place of an equilateral triangle is farther than edge / sqrt(3) from a corner
    places = np.random.default_rng(0).random((200, 2)) * [width, height] + [west, south]
    assert cKDTree(points).query(places)[0].max() <= edge / np.sqrt(3) * (1 + 1e-8)


def test_lattice_of_whole_edges_has_no_extra_row():
    points = equilateral_lattice((0.0, 0.0, 3.0, np.sqrt(3.0)), 1.0)
    assert len(points) == 4 + 5 + 4


@pytest.mark.parametrize("bounds", [(0, 0, -1, 1), (0, 0, np.nan, 1), (0, 0, np.inf, 1)])
def test_lattice_refuses_impossible_bounds(bounds):
    with pytest.raises(ValueError, match="bounds must be finite"):
        equilateral_lattice(bounds, 1.0)


def test_lattice_refuses_more_points_than_memory_should_hold():
    with pytest.raises(
        InputError, match=r"An edge of 0\.001 km over 1000 km x 1000 km needs .* Give a longer edge"
    ):
        equilateral_lattice((0, 0, 1000, 1000), 0.001)


# --- graded mesh -----------------------------------------------------------------------------------


@given(seed=st.integers(0, 10**6), margin=st.floats(0.0, 60.0), growth=st.floats(1.1, 1.5))
@settings(max_examples=60, deadline=None)
def test_graded_mesh_is_one_sound_sheet(seed, margin, growth):
    inner = scattered_zone(seed)
    mesh = grade_mesh(inner, 1.0, margin, growth=growth)
    edges, uses = undirected_edges(mesh)
    # Euler: one sheet without holes and without pinched nodes on its outline
    assert mesh.nodes - len(edges) + len(mesh.triangles) == 1
    outline = edges[uses == 1]
    assert np.bincount(outline.ravel(), minlength=mesh.nodes).max() == 2
    links = coo_matrix((np.ones(len(edges)), edges.T), (mesh.nodes, mesh.nodes))
    assert connected_components(links, directed=False)[0] == 1
    # every inner point is a node, no two nodes coincide, the zone keeps its equilateral triangles
    distance, node = cKDTree(mesh.points).query(inner)
    assert distance.max() < ALGEBRA
    assert cKDTree(mesh.points).query(mesh.points, k=2)[0][:, 1].min() > 1.0 - ALGEBRA
    within = np.isin(mesh.triangles, node).all(axis=1)
    longest = np.ptp(mesh.points[mesh.triangles], axis=1).max(axis=1)
    lattice_triangles = within & (longest < 1.01)
    np.testing.assert_allclose(mesh.smallest_angles_deg[lattice_triangles], 60.0, atol=1e-6)  # arctan near 60
    # a coarse node of a bay may come to lie beside the outer edge: single narrow triangles, no needles
    assert mesh.smallest_angles_deg.min() > 8.0
    assert (mesh.smallest_angles_deg < 29.9).sum() <= 8


@given(
    radius=st.floats(0.0, 9.0), east=st.floats(0, 1), margin=st.floats(0.0, 60.0), growth=st.floats(1.1, 1.5)
)
@settings(max_examples=40, deadline=None)
def test_rings_of_a_convex_zone_keep_thirty_degrees(radius, east, margin, growth):
    lattice = equilateral_lattice((0, 0, 20, 20), 1.0)
    distance = np.hypot(*(lattice - np.array([10.0 + east, 10.0])).T)
    mesh = grade_mesh(lattice[distance <= max(radius, distance.min())], 1.0, margin, growth=growth)
    assert mesh.smallest_angles_deg.min() > 29.9


@given(seed=st.integers(0, 10**6), margin=st.floats(0.0, 60.0))
@settings(max_examples=40, deadline=None)
def test_mesh_covers_the_margin_once(seed, margin):
    inner = scattered_zone(seed)
    mesh = grade_mesh(inner, 1.0, margin)
    rng = np.random.default_rng(seed)
    angle, radius = 2 * np.pi * rng.random(200), margin * np.sqrt(rng.random(200))
    circle = np.column_stack([np.cos(angle), np.sin(angle)])
    places = inner[rng.integers(0, len(inner), 200)] + radius[:, None] * circle
    assert projector(mesh, places)[1].all()
    # by brute force, over the mesh and around it: no place lies strictly inside two triangles
    places = places + 3.0 * rng.standard_normal(places.shape)
    first, second, third = np.moveaxis(mesh.points[mesh.triangles], 1, 0)

    def side(a, b):
        edge, there = b - a, places[:, None] - a
        return edge[:, 0] * there[..., 1] - edge[:, 1] * there[..., 0]

    strictly = np.minimum(np.minimum(side(first, second), side(second, third)), side(third, first)) > 1e-9
    np.testing.assert_array_equal(strictly.sum(axis=1), projector(mesh, places)[1])


def test_edges_grow_with_the_distance_from_the_zone():
    inner = disc()
    mesh = grade_mesh(inner, 1.0, 60.0)
    edges, _ = undirected_edges(mesh)
    length = np.hypot(*(mesh.points[edges[:, 0]] - mesh.points[edges[:, 1]]).T)
    distance = cKDTree(inner).query(mesh.points)[0][edges].min(axis=1)
    # the law of the rings, and sqrt(3) for the long side where two levels meet
    assert (length <= np.sqrt(3.0) * (1.0 + 0.5 * distance) + ALGEBRA).all()
    assert length[distance > 40].min() >= 8.0
    # one level to the next: within a triangle edges differ by a factor of two at most
    corners = mesh.points[mesh.triangles]
    sides = np.hypot(*np.moveaxis(corners - np.roll(corners, 1, axis=1), 2, 0))
    assert (sides.max(axis=1) / sides.min(axis=1)).max() < 2.0 + ALGEBRA
    # rings of geometric growth cost less than a tenth of a lattice over the same area
    assert mesh.nodes - len(inner) < 0.1 * mesh.area_km2 / (np.sqrt(3) / 2)


def test_smaller_growth_makes_finer_rings():
    coarse, fine = (grade_mesh(disc(), 1.0, 30.0, growth=growth) for growth in (1.5, 1.2))
    assert fine.nodes > 1.3 * coarse.nodes


def test_order_and_position_of_the_points_change_nothing(rng):
    inner = scattered_zone(3)
    mesh = grade_mesh(inner, 1.0, 10.0)
    shuffled = grade_mesh(rng.permutation(np.concatenate([inner, inner[:5]])), 1.0, 10.0)
    np.testing.assert_array_equal(shuffled.points, mesh.points)
    np.testing.assert_array_equal(shuffled.triangles, mesh.triangles)
    moved = grade_mesh(inner + np.array([300.0, -70.0]), 1.0, 10.0)
    np.testing.assert_allclose(moved.points, mesh.points + np.array([300.0, -70.0]), atol=ALGEBRA)
    np.testing.assert_array_equal(moved.triangles, mesh.triangles)
    metres = grade_mesh(inner * 1000.0, 1000.0, 10_000.0)
    np.testing.assert_allclose(
        metres.points, mesh.points * 1000.0, rtol=ALGEBRA, atol=1e-7
    )  # a zero in metres
    np.testing.assert_array_equal(metres.triangles, mesh.triangles)


def test_hull_needles_go_unless_a_node_or_the_connection_would():
    # a flat triangle 0 1 2 under two others; the lid 3 2 4 decides whether node 2 is on the outer edge
    points = np.array([[0, 0], [4, 0], [2, 0.3], [0, 2], [4, 2]])
    open_top = np.array([[0, 1, 2], [0, 2, 3], [1, 4, 2]])
    assert len(_peel_hull(points, open_top)) == 3
    lidded = np.vstack([open_top, [[2, 4, 3]]])
    np.testing.assert_array_equal(_peel_hull(points, lidded), lidded[1:])
    # two flat triangles 0 1 3 and 1 2 3 side by side: dropping both would leave node 1 without a triangle
    points = np.array([[0, 0], [4, -0.1], [8, 0], [4, 0.5], [4, 6]])
    kept = _peel_hull(points, np.array([[0, 1, 3], [1, 2, 3], [0, 3, 4], [3, 2, 4]]))
    assert len(kept) == 3
    assert np.unique(kept).tolist() == [0, 1, 2, 3, 4]


def test_parts_far_apart_are_joined_by_few_nodes():
    west = equilateral_lattice((0, 0, 10, 10), 1.0)
    inner = np.concatenate([west, west + np.array([900.0, 0.0])])
    mesh = grade_mesh(inner, 1.0, 5.0)
    assert projector(mesh, [[450.0, 5.0]])[1].all()
    assert mesh.nodes < 6 * len(inner)


def test_one_point_is_a_zone():
    mesh = grade_mesh([[4.0, 7.0]], 2.0, 20.0)
    assert projector(mesh, [[4.0, 7.0], [24.0, 7.0], [4.0, -13.0]])[1].all()
    assert mesh.edge_km == 2.0
    assert mesh.margin_km == 20.0


@pytest.mark.parametrize(
    ("inner", "edge", "message"),
    [
        ([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]], 1.0, "off the equilateral lattice of edge 1 km"),
        ([[0.0, 0.0], [1.0, 0.0]], 0.9, "off the equilateral lattice"),
        (np.zeros((0, 2)), 1.0, r"shape \(0, 2\)"),
        ([[0.0, np.nan]], 1.0, "inner must be finite"),
        ([[0.0, 0.0]], 0.0, "edge must be a positive number of km; found 0"),
        ([[0.0, 0.0]], -1.0, "edge must be a positive number of km; found -1"),
    ],
)
def test_grading_refuses_what_is_no_lattice(inner, edge, message):
    with pytest.raises(ValueError, match=message):
        grade_mesh(inner, edge, 5.0)


@pytest.mark.parametrize("growth", [1.0, 1.6, np.nan])
def test_growth_is_limited(growth):
    with pytest.raises(InputError, match=r"must be 1\.1 to 1\.5; found"):
        grade_mesh([[0.0, 0.0]], 1.0, 5.0, growth=growth)


def test_negative_margin_is_refused():
    with pytest.raises(InputError, match=r"margin must be zero or a positive number of km; found -2"):
        grade_mesh([[0.0, 0.0]], 1.0, -2.0)


# --- node cap --------------------------------------------------------------------------------------


@pytest.mark.parametrize("edge", [1.0, 2.0, 4.0])
@pytest.mark.parametrize("margin", [0.0, 30.0, 100.0])
def test_estimate_is_near_the_nodes_of_a_square_zone(edge, margin):
    side = 80.0
    lattice = equilateral_lattice((-13.3, -11.1, side + 20.0, side + 20.0), edge)
    inner = lattice[((lattice >= -edge) & (lattice <= side + edge)).all(axis=1)]
    found = grade_mesh(inner, edge, margin).nodes
    assert lattice_nodes_needed(side**2, edge, margin) == pytest.approx(found, rel=0.10)  # an estimate


def test_cap_fails_before_any_work_and_names_an_edge_that_fits():
    side, margin, cap = 400.0, 80.0, 5000
    with pytest.raises(InputError, match=r"edge of 0\.0001 km needs about .* at most 5,000") as refused:
        check_node_cap(side**2, 1e-4, margin, cap)  # trillions of nodes: only arithmetic can answer
    edge = float(re.search(r"smallest edge that fits is about ([\d.]+) km", str(refused.value)).group(1))
    assert check_node_cap(side**2, edge, margin, cap) <= cap
    inner = equilateral_lattice((-edge, -edge, side + edge, side + edge), edge)
    assert 0.8 * cap < grade_mesh(inner, edge, margin, max_nodes=cap).nodes <= cap
    with pytest.raises(InputError, match="at most"):
        check_node_cap(side**2, 0.9 * edge, margin, cap)


def test_estimate_counts_a_longer_outline():
    assert lattice_nodes_needed(100.0, 1.0, 10.0, zone_perimeter_km=80.0) > lattice_nodes_needed(
        100.0, 1.0, 10.0
    )


def test_grading_stops_at_the_cap():
    inner = equilateral_lattice((0, 0, 20, 20), 1.0)
    with pytest.raises(InputError, match=f"edge of 1 km needs {len(inner)} or more nodes; at most 300 are"):
        grade_mesh(inner, 1.0, 30.0, max_nodes=300)
    with pytest.raises(InputError, match=rf"needs (?!{len(inner)} )\d+ or more nodes; at most {len(inner)} "):
        grade_mesh(inner, 1.0, 30.0, max_nodes=len(inner))


def test_cap_that_no_edge_meets_says_so():
    with pytest.raises(InputError, match="No edge fits that cap"):
        check_node_cap(100.0, 1.0, 10.0, 3)


# --- the Mesh itself -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("points", "triangles", "message"),
    [
        (SQUARE, [[0, 1, 4]], r"outside 0\.\.3"),
        (SQUARE, [[0, 1, 2]], r"1 nodes belong to no triangle, first: \[3\]"),
        ([[0, 0], [1, 1], [2, 2]], [[0, 1, 2]], "1 triangles have no area"),
        (SQUARE, [[0, 1, 2], [0, 2, 3], [0, 1, 3]], "more than two triangles"),
        (SQUARE, np.zeros((0, 3)), "t >= 1"),
        ([[0, 0, 0]], [[0, 0, 0]], r"shape \(1, 3\)"),
        ([[0, 0], [1, 0], [np.nan, 1]], [[0, 1, 2]], "must be finite"),
    ],
)
def test_mesh_refuses_what_is_no_triangulation(points, triangles, message):
    if message == "more than two triangles":
        points = np.vstack([points, [[0.5, -1.0], [0.5, 2.0]]])
        triangles = [[0, 1, 2], [0, 2, 3], [0, 1, 4], [0, 1, 5]]
    with pytest.raises(ValueError, match=message):
        Mesh(points, triangles)


def test_mesh_is_read_only_and_turned_anticlockwise():
    points = SQUARE.copy()
    mesh = Mesh(points, [[0, 2, 1], [0, 2, 3]])
    assert mesh.triangles.tolist() == [[0, 1, 2], [0, 2, 3]]
    assert mesh.area_km2 == pytest.approx(1.0, rel=ALGEBRA)
    assert mesh.edge_km == 1.0
    points[0] = 9.0
    assert mesh.points[0].tolist() == [0.0, 0.0]
    with pytest.raises(ValueError, match="read-only"):
        mesh.points[0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        mesh.triangles[0] = 1
    assert repr(mesh) == "Mesh(4 nodes, 2 triangles, edge 1 km, margin 0 km)"


def test_smallest_angles_of_known_triangles():
    mesh = Mesh(
        [[0, 0], [1, 0], [0.5, np.sqrt(3) / 2], [1.5, np.sqrt(3) / 2], [2.5, 0]], [[0, 1, 2], [1, 4, 3]]
    )
    sides = [1.0, 1.5, np.sqrt(1.75)]
    smallest = np.degrees(
        np.arccos((sides[1] ** 2 + sides[2] ** 2 - sides[0] ** 2) / (2 * sides[1] * sides[2]))
    )
    np.testing.assert_allclose(mesh.smallest_angles_deg, [60.0, smallest], rtol=ALGEBRA)
