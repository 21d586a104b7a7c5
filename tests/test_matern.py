"""Matern correlation and the field's precision: closed forms, exact small cases, rates of convergence."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.sparse.linalg import splu
from scipy.special import gamma, kv
from tolerances import ALGEBRA, GRADIENT, PRINTED

from prevmap.engine.matern import (
    correlation,
    correlation_range_derivative,
    precision,
    precision_range_derivative,
    precision_upper,
    spde_matrices,
)
from prevmap.engine.mesh import Mesh, equilateral_lattice, grade_mesh
from prevmap.errors import InputError

SMOOTHNESS = (0.5, 1.0, 1.5, 2.5)
UNIT_SQUARE = Mesh([[0, 0], [1, 0], [1, 1], [0, 1]], [[0, 1, 2], [0, 2, 3]])
# kappa = tau = 1 in the plane: range sqrt(8) and variance 1 / (4 pi), Lindgren, Rue & Lindstrom 2011, eq. 2-3
UNIT = (math.sqrt(8.0), 1.0 / math.sqrt(4.0 * math.pi))


def square_lattice(intervals, spacing, west=0.0, south=0.0):
    """Square lattice of intervals x intervals cells, each cut by one diagonal."""
    side = np.arange(intervals + 1)
    x, y = np.meshgrid(west + spacing * side, south + spacing * side)
    low = (side[:-1, None] * (intervals + 1) + side[:-1]).ravel()
    right, up = low + 1, low + intervals + 1
    triangles = np.concatenate([np.column_stack([low, right, up + 1]), np.column_stack([low, up + 1, up])])
    return Mesh(np.column_stack([x.ravel(), y.ravel()]), triangles)


def node_at(mesh, place):
    distance = np.hypot(*(mesh.points - place).T)
    assert distance.min() < 1e-9  # rounding of the lattice
    return int(distance.argmin())


def covariance_with(mesh, node, range_km=1.0, sd=1.0):
    """Covariance of the field at a node with the field at every node, by one solve."""
    unit = np.zeros(mesh.nodes)
    unit[node] = 1.0
    return splu(precision(spde_matrices(mesh), range_km, sd)).solve(unit)


# --- correlation -----------------------------------------------------------------------------------

# computed independently with 30-digit arithmetic; h in ranges sqrt(8 nu) / kappa
PRINTED_CORRELATIONS = {
    0.1: (0.818730753078, 0.923792580112, 0.952211361477, 0.967986119964),
    0.25: (0.606530659713, 0.731914476462, 0.784887653958, 0.828649142418),
    0.5: (0.367879441171, 0.444342523632, 0.483357724596, 0.523994108832),
    1.0: (0.135335283237, 0.139667474015, 0.139731350192, 0.138660219139),
    2.0: (0.018315638889, 0.011070734099, 0.007767733942, 0.004777084547),
}


@pytest.mark.parametrize("share", PRINTED_CORRELATIONS)
def test_correlation_at_printed_distances(share):
    found = [float(correlation(share * 60.0, 60.0, nu)) for nu in SMOOTHNESS]
    np.testing.assert_allclose(found, PRINTED_CORRELATIONS[share], atol=PRINTED)


def test_distance_where_the_correlation_falls_to_a_twentieth():
    # computed independently with 30-digit arithmetic, in ranges
    expected = (1.49786613678, 1.41369112059, 1.36943572835, 1.32345022733)
    found = [
        brentq(lambda h, nu=nu: float(correlation(h, 1.0, nu)) - 0.05, 0.5, 3, xtol=1e-13)
        for nu in SMOOTHNESS
    ]
    np.testing.assert_allclose(found, expected, atol=6e-12)  # printed to 11 decimals


def test_length_scale_is_half_the_range():
    # Rasmussen & Williams 2006, eq. 4.17 (nu = 3/2 and 5/2) and the exponential, in their length-scale
    length = 25.0
    h = np.linspace(0.0, 200.0, 41)
    three, five = math.sqrt(3) * h / length, math.sqrt(5) * h / length
    forms = {
        0.5: np.exp(-h / length),
        1.5: (1 + three) * np.exp(-three),
        2.5: (1 + five + 5 * h**2 / (3 * length**2)) * np.exp(-five),
    }
    for nu, expected in forms.items():
        np.testing.assert_allclose(correlation(h, 2 * length, nu), expected, rtol=ALGEBRA)


@pytest.mark.parametrize("nu", SMOOTHNESS)
def test_correlation_is_the_bessel_form(nu):
    # Rasmussen & Williams 2006, eq. 4.14; Lindgren, Rue & Lindstrom 2011, eq. 1
    u = np.geomspace(1e-3, 100, 60)
    expected = 2 ** (1 - nu) / gamma(nu) * u**nu * kv(nu, u)
    np.testing.assert_allclose(correlation(u, math.sqrt(8 * nu), nu), expected, rtol=ALGEBRA)


@pytest.mark.parametrize("nu", SMOOTHNESS)
def test_extreme_distances_give_limits_and_no_warning(nu):
    h = [0.0, 5e-324, 1e-300, 1e-12, 1e3, 1e8, 1e300, np.inf]
    np.testing.assert_allclose(
        correlation(h, 1.0, nu), [1, 1, 1, 1, 0, 0, 0, 0], atol=1e-11
    )  # slope at nu = 0.5
    np.testing.assert_allclose(correlation_range_derivative(h, 1.0, nu), np.zeros(8), atol=1e-11)  # the same
    assert correlation(1.0, 1e-300, nu) == 0.0
    assert correlation(1.0, 1e300, nu) == 1.0
    assert np.isnan(correlation(np.nan, 1.0, nu))


@pytest.mark.parametrize("nu", SMOOTHNESS)
def test_range_derivative_is_the_central_difference(nu):
    h, step = np.geomspace(1e-3, 300, 80), 1e-5
    difference = correlation(h, 40.0 * math.exp(step), nu) - correlation(h, 40.0 * math.exp(-step), nu)
    found = correlation_range_derivative(h, 40.0, nu)
    assert found.max() > 0.2
    np.testing.assert_allclose(found, difference / (2 * step), atol=1e-10, rtol=GRADIENT)  # rounding / step


@given(
    nu=st.sampled_from(SMOOTHNESS),
    range_km=st.floats(1e-3, 1e5),
    shares=st.lists(st.floats(0.0, 30.0), min_size=2, max_size=20),
)
def test_correlation_falls_with_distance_and_grows_with_range(nu, range_km, shares):
    h = np.sort(shares) * range_km
    found = correlation(h, range_km, nu)
    assert found.min() >= 0
    assert found.max() <= 1
    assert (np.diff(found) <= 1e-15).all()  # equal distances may round apart
    assert (correlation_range_derivative(h, range_km, nu) >= 0).all()
    np.testing.assert_allclose(correlation(1000 * h, 1000 * range_km, nu), found, rtol=1e-9)  # km or m


@given(nu=st.sampled_from(SMOOTHNESS), seed=st.integers(0, 10**6))
def test_correlation_matrix_is_positive_definite(nu, seed):
    places = np.random.default_rng(seed).random((15, 2))
    distance = np.hypot(*(places[:, None] - places[None]).transpose(2, 0, 1))
    assert np.linalg.eigvalsh(correlation(distance, 0.7, nu) + 1e-9 * np.eye(15)).min() > 0


@pytest.mark.parametrize("function", [correlation, correlation_range_derivative])
def test_correlation_refuses_what_it_cannot_mean(function):
    with pytest.raises(InputError, match=r"nu = 2\.0 is not available; accepted are 0\.5, 1, 1\.5 and 2\.5"):
        function(1.0, 1.0, 2.0)
    for wrong in (0.0, -3.0, math.nan, math.inf):
        with pytest.raises(InputError, match="range must be a positive number of km; found"):
            function(1.0, wrong, 1.0)
    with pytest.raises(ValueError, match=r"must not be negative; the smallest is -2 km"):
        function([1.0, -2.0], 1.0, 1.0)


# --- precision: exact small cases and identities ---------------------------------------------------


def test_precision_of_the_unit_square():
    # computed independently in exact arithmetic: kappa = tau = 1, Q = K C^-1 K
    found = precision(spde_matrices(UNIT_SQUARE), *UNIT).toarray()
    expected = [
        [25 / 3, -11 / 2, 3, -11 / 2],
        [-11 / 2, 29 / 3, -11 / 2, 3 / 2],
        [3, -11 / 2, 25 / 3, -11 / 2],
        [-11 / 2, 3 / 2, -11 / 2, 29 / 3],
    ]
    np.testing.assert_allclose(found, expected, atol=ALGEBRA)
    assert np.linalg.det(found) == pytest.approx(19600 / 81, rel=ALGEBRA)
    covariance = np.linalg.inv(found)
    np.testing.assert_allclose(np.diag(covariance), [879 / 800, 2649 / 2450] * 2, rtol=ALGEBRA)
    assert covariance[0, 1] == pytest.approx(99 / 100, rel=ALGEBRA)
    assert covariance[0, 2] == pytest.approx(729 / 800, rel=ALGEBRA)
    assert covariance[1, 3] == pytest.approx(2349 / 2450, rel=ALGEBRA)


def test_mass_is_lumped_and_not_consistent():
    # computed independently with 30-digit arithmetic: the consistent mass gives another covariance
    spde = spde_matrices(UNIT_SQUARE)
    consistent = np.array([[4, 1, 2, 1], [1, 2, 1, 0], [2, 1, 4, 1], [1, 0, 1, 2]]) / 24
    np.testing.assert_allclose(consistent.sum(axis=1), spde.lumped, rtol=ALGEBRA)
    k = consistent + spde.stiffness.toarray()
    other = np.diag(np.linalg.inv(k @ np.linalg.solve(consistent, k)))
    np.testing.assert_allclose(
        other, [1.03696387896, 1.04134664010] * 2, atol=6e-12
    )  # printed to 11 decimals
    lumped = np.diag(np.linalg.inv(precision(spde, *UNIT).toarray()))
    assert abs(lumped - other).min() > 0.03


@pytest.mark.parametrize(
    ("range_km", "sd", "kappa", "tau"),
    [
        # computed independently with 30-digit arithmetic from Lindgren, Rue & Lindstrom 2011, eq. 2-3
        (2.0, 1.0, 1.414213562373, 0.199471140201),
        (1.0, 1.0, 2.828427124746, 0.099735570100),
        (50.0, 1.0, 0.0565685424949, 4.986778505018),
        (100.0, 0.8, 0.0282842712475, 12.46694626254),
    ],
)
def test_range_and_sd_become_kappa_and_tau(range_km, sd, kappa, tau):
    mesh = grade_mesh(equilateral_lattice((0, 0, 6, 6), 1.0), 1.0, 8.0)
    spde = spde_matrices(mesh)
    found = precision(spde, range_km, sd)
    k = np.diag(kappa**2 * spde.lumped) + spde.stiffness.toarray()
    expected = tau**2 * k @ np.diag(1 / spde.lumped) @ k
    np.testing.assert_allclose(
        found.toarray(), expected, atol=1e-11 * abs(expected).max()
    )  # 12 printed digits
    ones = np.ones(mesh.nodes)
    np.testing.assert_allclose(found @ ones, tau**2 * kappa**4 * spde.lumped, atol=1e-9)  # cancellation of G
    assert ones @ found @ ones == pytest.approx(tau**2 * kappa**4 * mesh.area_km2, rel=1e-6)  # the same


def test_pattern_is_the_same_for_all_parameters_and_keeps_zeros():
    mesh = square_lattice(6, 1.0)
    spde = spde_matrices(mesh)
    indptr, indices = spde.pattern
    columns = np.repeat(np.arange(mesh.nodes), np.diff(indptr))
    assert (indices <= columns).all()
    assert (np.diff(columns * mesh.nodes + indices) > 0).all()
    pattern = set(zip(indices.tolist(), columns.tolist(), strict=True))
    # every node with itself, its neighbours and their neighbours, whatever the values there
    neighbours = [set() for _ in range(mesh.nodes)]
    for corners in mesh.triangles.tolist():
        for corner in corners:
            neighbours[corner] |= set(corners)
    expected = {
        (min(i, k), max(i, k)) for i in range(mesh.nodes) for j in neighbours[i] for k in neighbours[j]
    }
    assert pattern == expected
    assert (spde.gcg == 0).any()
    first, second = precision(spde, 0.1, 3.0), precision(spde, 1e4, 0.01)
    np.testing.assert_array_equal(first.indices, second.indices)
    np.testing.assert_array_equal(first.indptr, second.indptr)
    assert first.nnz == 2 * len(indices) - mesh.nodes
    assert abs(first - first.T).max() == 0


def test_parts_are_read_only():
    spde = spde_matrices(UNIT_SQUARE)
    for array in (spde.lumped, spde.c, spde.g, spde.gcg, spde.indptr, spde.indices):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


def test_precision_derivatives_are_central_differences():
    spde = spde_matrices(grade_mesh(equilateral_lattice((0, 0, 6, 6), 1.0), 1.0, 8.0))
    step = 1e-5
    for range_km in (0.5, 5.0, 60.0):
        up, down = (precision_upper(spde, range_km * math.exp(s), 0.7) for s in (step, -step))
        expected = (up - down) / (2 * step)
        found = precision_range_derivative(spde, range_km, 0.7)
        np.testing.assert_allclose(
            found, expected, rtol=GRADIENT, atol=1e-8 * abs(expected).max()
        )  # rounding
        up, down = (precision_upper(spde, range_km, 0.7 * math.exp(s)) for s in (step, -step))
        np.testing.assert_allclose(
            (up - down) / (2 * step), -2 * precision_upper(spde, range_km, 0.7), rtol=GRADIENT
        )


@pytest.mark.parametrize(
    ("range_km", "sd"), [(0.0, 1.0), (1.0, 0.0), (-1.0, 1.0), (math.nan, 1.0), (1.0, math.inf)]
)
def test_precision_refuses_impossible_parameters(range_km, sd):
    spde = spde_matrices(UNIT_SQUARE)
    for function in (precision, precision_upper, precision_range_derivative):
        with pytest.raises(InputError, match="Range and sd must be positive numbers; found range"):
            function(spde, range_km, sd)


# --- precision: lattices of known variance ---------------------------------------------------------


def test_interior_stencil_of_a_square_lattice():
    # Lindgren, Rue & Lindstrom 2011, section 2.2.1: with a = kappa^2 h^2 + 4, Q h^2 / tau^2 has the centre
    # a^2 + 4, neighbours -2 a, diagonals 2 and distance two 1
    h, range_km = 0.3, 1.1
    mesh = square_lattice(8, h)
    kappa2 = 8.0 / range_km**2
    tau2 = 1.0 / (4 * math.pi * kappa2)
    row = precision(spde_matrices(mesh), range_km, 1.0)[node_at(mesh, [4 * h, 4 * h])].toarray().reshape(9, 9)
    a = kappa2 * h**2 + 4
    expected = np.zeros((9, 9))
    expected[4, 4] = a**2 + 4
    expected[[3, 5, 4, 4], [4, 4, 3, 5]] = -2 * a
    expected[[3, 3, 5, 5], [3, 5, 3, 5]] = 2
    expected[[2, 6, 4, 4], [4, 4, 2, 6]] = 1
    np.testing.assert_allclose(row * h**2 / tau2, expected, atol=ALGEBRA * a**2)


@pytest.mark.parametrize(
    ("kappa_h", "ratio", "intervals"),
    [
        # computed independently with 30-digit arithmetic: the infinite lattice against the continuum
        (1.0, 1.134533282818, 30),
        (0.5, 1.082356353841, 50),
        (0.25, 1.032460500521, 90),
        (0.125, 1.010931210748, 150),
    ],
)
def test_variance_on_a_square_lattice(kappa_h, ratio, intervals):
    mesh = square_lattice(intervals, kappa_h)
    middle = node_at(mesh, [kappa_h * (intervals // 2)] * 2)
    found = covariance_with(mesh, middle, range_km=math.sqrt(8.0), sd=1.0)[middle]
    # the nearest edge is kappa h intervals / 2 away and adds its image there
    image = 4 * float(correlation(kappa_h * intervals, math.sqrt(8.0), 1.0))
    assert image < 1e-6
    assert found == pytest.approx(ratio, abs=2 * image + PRINTED)


def test_free_edge_folds_the_mirrored_field_onto_itself():
    # Method of images on the mesh itself: cov on a half = cov on the whole + cov with the mirrored place
    half = square_lattice(8, 0.25)
    points = np.concatenate([half.points, half.points * [-1, 1]])
    triangles = np.concatenate([half.triangles, half.triangles + half.nodes])
    kept, back = np.unique(points + 0.0, axis=0, return_inverse=True)
    whole = Mesh(kept, back.ravel()[triangles])
    on_half, on_whole = (
        np.linalg.inv(precision(spde_matrices(mesh), 1.0, 1.0).toarray()) for mesh in (half, whole)
    )
    east = [node_at(whole, place) for place in half.points]
    west = [node_at(whole, place * [-1, 1]) for place in half.points]
    folded = on_whole[np.ix_(east, east)] + on_whole[np.ix_(east, west)]
    np.testing.assert_allclose(on_half, folded, rtol=1e-9)  # two dense inverses


def test_variance_doubles_at_an_edge_and_quadruples_at_a_corner():
    # Method of images, 1 + r(2 t) at distance t from a straight edge; r computed with 30-digit arithmetic
    intervals, h = 96, 1.0 / 16
    mesh = square_lattice(intervals, h)
    factor = splu(precision(spde_matrices(mesh), 1.0, 1.0))

    def variance(x, y):
        unit = np.zeros(mesh.nodes)
        node = node_at(mesh, [x, y])
        unit[node] = 1.0
        return factor.solve(unit)[node]

    middle = intervals * h / 2
    inner = variance(middle, middle)
    # both parts of the sum hold on the lattice: the edge itself without error, inside up to that of r(2 t)
    assert variance(0.0, middle) / inner == pytest.approx(2.0, rel=1e-4)  # exact but for the far edges
    for distance, expected in [(0.25, 0.444342523632), (0.5, 0.139667474015), (1.0, 0.011070734099)]:
        assert variance(distance, middle) - inner == pytest.approx(
            expected, abs=0.002
        )  # lattice of a sixteenth
    # the corner node of this mesh has a third of h^2 for its mass and not a quarter
    assert variance(0.0, 0.0) / inner == pytest.approx(4.0, rel=0.04)


# --- precision: the triangulations in use ----------------------------------------------------------


def test_covariance_converges_with_the_square_of_the_edge():
    edges, errors, nodal = [1 / 5, 1 / 10, 1 / 20], [], []
    places = None
    for edge in edges:
        lattice = equilateral_lattice((-2.6, -2.6, 2.6, 2.6), edge)
        mesh = grade_mesh(lattice, edge, 0.0)
        if places is None:  # nodes of the coarsest lattice are nodes of the finer ones
            centre = mesh.points[np.hypot(*mesh.points.T).argmin()]
            distance = np.hypot(*(mesh.points - centre).T)
            places = mesh.points[(distance > 0.3) & (distance < 1.05)]
        found = covariance_with(mesh, node_at(mesh, centre))
        nodes = [node_at(mesh, place) for place in places]
        exact = correlation(np.hypot(*(places - centre).T), 1.0, 1.0)
        errors.append(abs(found[nodes] - exact).max())
        nodal.append(found[node_at(mesh, centre)] - 1.0)
    slopes = np.diff(np.log(errors)) / np.diff(np.log(edges))
    # theory says 2 for linear elements; 0.15 is what the second finest pair still lacks of the limit
    np.testing.assert_allclose(slopes, 2.0, atol=0.15)
    # at its own node the error is of order h^2 log h: slower, from above, under 2.5 % at a sixteenth
    nodal_slopes = np.diff(np.log(nodal)) / np.diff(np.log(edges))
    assert ((nodal_slopes > 1.2) & (nodal_slopes < 2.0)).all()


def test_variance_in_the_zone_needs_a_margin_of_one_range():
    # 1 + r(2 t) at the zone's edge: 2 without a margin, 1.011 with one range; mesh error as on the lattice
    edge, inner = 1 / 12, equilateral_lattice((0, 0, 2, 2), 1 / 12)
    largest = []
    for margin in (0.0, 0.25, 1.0):
        mesh = grade_mesh(inner, edge, margin)
        covariance = np.linalg.inv(precision(spde_matrices(mesh), 1.0, 1.0).toarray())
        in_zone = [node_at(mesh, place) for place in inner]
        largest.append(np.diag(covariance)[in_zone].max())
        if margin == 1.0:
            distance = np.hypot(*(inner[:, None] - inner[None]).transpose(2, 0, 1))
            apart = distance > 0.3
            error = covariance[np.ix_(in_zone, in_zone)] - correlation(distance, 1.0, 1.0)
            # rings of growing edge and the free edge together stay within 2 % of the variance
            assert abs(error[apart]).max() < 0.02
            assert abs(error[~apart]).max() < 0.06
    assert largest[0] > 2.0
    assert 1.2 < largest[1] < largest[0]
    assert largest[2] < 1.06
