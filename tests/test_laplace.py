"""The Laplace core: worked values, dense twins, finite differences, and the mesh against the dense engine."""

import numpy as np
import pytest
from scipy.special import expit
from tolerances import ALGEBRA, GRADIENT

from prevmap.engine import likelihood as lk
from prevmap.engine.exact import DenseModel
from prevmap.engine.laplace import LatentModel, Theta
from prevmap.engine.matern import correlation, precision
from prevmap.engine.mesh import equilateral_lattice, grade_mesh, projector
from prevmap.errors import FitError

NO_NUGGET = -np.inf
TIGHT = (
    1e-5  # sd of an intercept that is as good as fixed; its variance of 1e-10 moves log Z by less than 1e-9
)


def one_site(y, n, sd, intercept, se=1.0, sp=1.0):
    data = lk.observations(np.array([float(n)]), np.array([float(y)]), None, se, sp)
    model = DenseModel(data, np.zeros((1, 2)), np.ones((1, 1)), np.array([intercept]), np.array([TIGHT]))
    return model, model.laplace(Theta(0.0, np.log(sd), NO_NUGGET))


# Rasmussen & Williams (2006), eq. 3.32, evaluated independently with 30-digit arithmetic; binomial coefficients in.
@pytest.mark.parametrize(
    ("y", "n", "sd", "intercept", "log_z", "mode", "latent_sd"),
    [
        (3, 10, 1.0, 0.0, -2.163735990712, -0.582825971698, 0.550551808973),
        (0, 20, 1.0, 0.0, -5.046877237383, -2.128034518466, 0.587057488187),
        (0, 20, 1.0, -2.0, -1.798714770010, -2.973110669436, 0.720607088743),
        (30, 100, 1.0, 0.0, -4.339729911989, -0.809061076146, 0.211680731772),
    ],
)
def test_one_site_worked_values(y, n, sd, intercept, log_z, mode, latent_sd):
    model, state = one_site(y, n, sd, intercept)
    assert state.log_evidence == pytest.approx(log_z, abs=1e-8)  # the intercept's sd of 1e-5
    weight, coefficient = state.mode
    assert coefficient + sd**2 * weight == pytest.approx(mode, abs=1e-8)
    _, variance = model.moments(state, model.locate(np.zeros((1, 2)), np.ones((1, 1))))
    assert np.sqrt(variance[0]) == pytest.approx(latent_sd, abs=1e-8)


def test_one_site_gradient_in_log_sd():
    # 3/10, sd 1, intercept 0: d log Z_Laplace / d log sd, computed independently.
    assert one_site(3, 10, 1.0, 0.0)[1].gradient[1] == pytest.approx(-0.322312301188, abs=1e-8)


def test_one_site_with_an_imperfect_test():
    # 3/10 and 1/20 with Se 0.8, Sp 0.95; computed independently with 30-digit arithmetic.
    _, state = one_site(3, 10, 1.0, 0.0, 0.8, 0.95)
    assert state.log_evidence == pytest.approx(-1.899410554312, abs=1e-8)
    assert state.mode.sum() == pytest.approx(-0.401372857723, abs=1e-8)  # sd 1: weight plus intercept
    assert state.curvature[0] == pytest.approx(1.409813651976, abs=1e-8)
    assert one_site(1, 20, 1.0, -2.0, 0.8, 0.95)[1].log_evidence == pytest.approx(-1.796118675758, abs=1e-8)


def test_two_correlated_sites():
    # sd 1.2, correlation 0.6, intercept -0.5, y = (3, 7) of (10, 20), third site with correlations (0.5, 0.3);
    # computed independently. Positions are chosen so that the Matern correlation is 0.6.
    from scipy.optimize import brentq

    distance = brentq(lambda h: float(correlation(np.array([h]), 1.0, 1.0)[0]) - 0.6, 1e-3, 2.0)
    data = lk.observations(np.array([10.0, 20.0]), np.array([3.0, 7.0]))
    xy = np.array([[0.0, 0.0], [distance, 0.0]])
    model = DenseModel(data, xy, np.ones((2, 1)), np.array([-0.5]), np.array([TIGHT]))
    state = model.laplace(Theta(0.0, np.log(1.2), NO_NUGGET))
    assert state.log_evidence == pytest.approx(-4.628222678439, abs=1e-8)
    covariance = 1.44 * np.array([[1.0, 0.6], [0.6, 1.0]])
    np.testing.assert_allclose(covariance @ state.mode[:2], [-0.255752274850, -0.125670834822], atol=1e-8)
    np.testing.assert_allclose(state.curvature, [2.174447274591, 4.540911426248], atol=1e-8)
    _, variance = model.moments(state, model.locate(xy, np.ones((2, 1))))
    np.testing.assert_allclose(variance, [0.314052813364, 0.181952342062], atol=1e-8)
    draws = next(model.draws(state, [model.locate(xy, np.ones((2, 1)))], np.random.default_rng(1), 200_000))
    # 4 Monte-Carlo standard errors of a covariance of these two
    assert np.cov(draws)[0, 1] == pytest.approx(0.036342367977, abs=4 * np.sqrt((0.314 * 0.182) / 200_000))


def test_three_sites_with_a_free_intercept():
    # (0,0), (1,0), (0,1); Matern nu = 1, range 2, sd 1, intercept N(0, 5^2); computed independently.
    xy = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])
    data = lk.observations(np.array([20.0, 25, 30]), np.array([2.0, 5, 1]))
    model = DenseModel(data, xy, np.ones((3, 1)), np.zeros(1), np.array([5.0]))
    state = model.laplace(Theta(np.log(2.0), 0.0, NO_NUGGET))
    assert state.log_evidence == pytest.approx(-8.176709750855, abs=1e-9)
    K = correlation(np.linalg.norm(xy[:, None] - xy[None], axis=2), 2.0, 1.0)
    eta = K @ state.mode[:3] + state.mode[3]
    np.testing.assert_allclose(eta, [-2.176903249616, -1.592049073237, -2.739496296916], atol=1e-9)
    rows = model.locate(xy, np.ones((3, 1)))
    mean, variance = model.moments(state, rows)
    np.testing.assert_allclose(variance, [0.347308699477, 0.231883637855, 0.392407349118], atol=1e-9)
    # The mode is off by up to 0.15; the first-order shift removes most of it (exact means by quadrature).
    exact = np.array([-2.307730693776, -1.684249308339, -2.889852013301])
    assert np.max(np.abs(mean - exact)) < 0.2 * np.max(np.abs(eta - exact))
    assert state.mode[3] == pytest.approx(-2.118754233805, abs=1e-9)
    _, covariance = model.coefficients(state)
    assert np.sqrt(covariance[0, 0]) == pytest.approx(0.847514648927, abs=1e-9)


def example(rng, n=90, se=1.0, sp=1.0, size=60.0):
    site = np.sort(rng.integers(0, 60, n))
    site = np.unique(site, return_inverse=True)[1]
    xy = rng.uniform(0, size, (site.max() + 1, 2))[site]
    design = np.column_stack([np.ones(n), rng.normal(size=n)])
    distance = np.linalg.norm(xy[:, None] - xy[None], axis=2)
    field = np.linalg.cholesky(correlation(distance, 30.0, 1.0) + 1e-9 * np.eye(n)) @ rng.normal(size=n)
    examined = rng.integers(20, 60, n).astype(float)
    p = expit(-1.5 + field + 0.4 * design[:, 1])
    positive = rng.binomial(examined.astype(int), se * p + (1 - sp) * (1 - p)).astype(float)
    return lk.observations(examined, positive, site, se, sp), xy, design


def mesh_model(data, xy, design, edge, size=60.0, margin=45.0):
    inner = equilateral_lattice((-edge, -edge, size + edge, size + edge), edge)
    mesh = grade_mesh(inner, edge, margin)
    weights, inside = projector(mesh, xy)
    assert inside.all()
    p = design.shape[1]
    return LatentModel(data, mesh, weights, design, np.zeros(p), np.array([3.0, 2.5])[:p])


@pytest.mark.parametrize(("se", "sp"), [(1.0, 1.0), (0.85, 0.97)])
@pytest.mark.parametrize("nugget", [np.log(0.4), NO_NUGGET])
@pytest.mark.parametrize("engine", ["mesh", "exact"])
def test_gradient_equals_central_differences(rng, engine, nugget, se, sp):
    data, xy, design = example(rng, se=se, sp=sp)
    if engine == "mesh":
        model = mesh_model(data, xy, design, 6.0)
    else:
        model = DenseModel(data, xy, design, np.zeros(2), np.array([3.0, 2.5]), nu=1.5)
    theta = np.array([np.log(35.0), np.log(0.8), nugget])
    state = model.laplace(Theta(*theta))
    for j in range(3 if np.isfinite(nugget) else 2):
        step = np.zeros(3)
        step[j] = 1e-4
        up = model.laplace(Theta(*(theta + step))).log_evidence
        down = model.laplace(Theta(*(theta - step))).log_evidence
        assert state.gradient[j] == pytest.approx((up - down) / 2e-4, rel=GRADIENT, abs=1e-6)


def test_sparse_algebra_equals_its_dense_twin(rng):
    data, xy, design = example(rng, n=40)
    model = mesh_model(data, xy, design, 12.0)
    theta = Theta(np.log(30.0), np.log(1.1), np.log(0.5))
    state = model.laplace(theta)
    m = model.nodes
    P = np.zeros((model.order, model.order))
    P[:m, :m] = precision(model.spde, theta.range_km, theta.sd).toarray()
    P[m:, m:] = np.diag(1.0 / np.array([3.0, 2.5]) ** 2)
    B = model.B.toarray()
    W = np.zeros((40, 40))
    start, block = data.site_start, data.block_start
    for s in range(start.size - 1):
        k = start[s + 1] - start[s]
        W[start[s] : start[s + 1], start[s] : start[s + 1]] = state.curvature[
            block[s] : block[s + 1]
        ].reshape(k, k)
    H = P + B.T @ W @ B
    terms = lk.evaluate(data, B @ state.mode, theta.nugget_sd)
    expected = terms.value - 0.5 * state.mode @ P @ state.mode
    expected += 0.5 * np.linalg.slogdet(P)[1] - 0.5 * np.linalg.slogdet(H)[1]
    assert state.log_evidence == pytest.approx(expected, rel=ALGEBRA)
    np.testing.assert_allclose(B.T @ terms.gradient - P @ state.mode, 0.0, atol=1e-7)  # a stationary point
    inverse = np.linalg.inv(H)
    rows = model.locate(rng.uniform(0, 60, (50, 2)), np.column_stack([np.ones(50), rng.normal(size=50)]))
    b = np.zeros((50, model.order))
    for a in range(3):
        b[np.arange(50), rows.nodes[:, a]] += rows.weights[:, a]
    b[:, m:] = rows.design
    mean, variance = model.moments(state, rows)
    np.testing.assert_allclose(
        variance, np.einsum("ij,jk,ik->i", b, inverse, b), rtol=1e-8
    )  # order 200 inverse
    np.testing.assert_allclose(mean, b @ (state.mode + state.mean_shift), rtol=ALGEBRA, atol=ALGEBRA)
    np.testing.assert_allclose(model.coefficients(state)[1], inverse[m:, m:], rtol=1e-8)


def test_mesh_converges_to_the_dense_engine(rng, capsys):
    """Same data and hyperparameters, 200 points, range 30 km: stated bars at range/8 and range/16, and the slope."""
    data, xy, design = example(rng, n=120)
    theta = Theta(np.log(30.0), 0.0, np.log(0.3))
    dense = DenseModel(data, xy, design, np.zeros(2), np.array([3.0, 2.5]))
    reference = dense.laplace(theta)
    points, covariates = rng.uniform(0, 60, (200, 2)), np.column_stack([np.ones(200), rng.normal(size=200)])
    mean0, variance0 = dense.moments(reference, dense.locate(points, covariates))
    errors = []
    for edge in (30.0 / 8.0, 30.0 / 16.0):
        model = mesh_model(data, xy, design, edge)
        mean, variance = model.moments(model.laplace(theta), model.locate(points, covariates))
        errors.append(
            (
                np.mean(np.abs(mean - mean0) / np.sqrt(variance0)),
                np.mean(np.abs(np.sqrt(variance / variance0) - 1)),
            )
        )
    (mean8, sd8), (mean16, sd16) = errors
    slope = np.log2(mean8 / mean16), np.log2(sd8 / sd16)
    with capsys.disabled():
        print(f"\nmesh against dense: range/8 {mean8:.4f} sd, {100 * sd8:.2f} %; range/16 {mean16:.4f} sd, "
              f"{100 * sd16:.2f} %; slopes {slope[0]:.2f}, {slope[1]:.2f}")  # fmt: skip
    assert mean8 <= 0.05
    assert sd8 <= 0.04
    assert mean16 <= 0.02
    assert sd16 <= 0.015
    assert slope[0] > 1.2  # second order in the interior, less near single sites
    assert slope[1] > 1.2


def test_joint_draws_have_the_moments_of_the_posterior(rng):
    data, xy, design = example(rng, n=60)
    model = mesh_model(data, xy, design, 8.0)
    state = model.laplace(Theta(np.log(30.0), 0.0, np.log(0.3)))
    points, covariates = rng.uniform(0, 60, (30, 2)), np.column_stack([np.ones(30), rng.normal(size=30)])
    whole = model.locate(points, covariates)
    halves = [model.locate(points[:13], covariates[:13]), model.locate(points[13:], covariates[13:])]
    count = 40_000
    draws = np.concatenate(list(model.draws(state, halves, np.random.default_rng(3), count)))
    mean, variance = model.moments(state, whole)
    assert np.max(np.abs(draws.mean(axis=1) - mean) / np.sqrt(variance / count)) < 4.5  # largest of 30
    assert np.max(np.abs(draws.var(axis=1) / variance - 1.0)) < 4.5 * np.sqrt(2.0 / count)
    again = next(model.draws(state, [whole], np.random.default_rng(3), count))
    np.testing.assert_array_equal(draws, again)


def test_a_site_whose_two_halves_share_a_nugget_equals_one_pooled_row(rng):
    data, xy, design = example(rng, n=30)
    first = lk.observations(data.examined, data.positive, np.arange(30))
    half = np.floor(data.examined / 2)
    positive = np.minimum(np.floor(data.positive / 2), half)
    split = lk.observations(
        np.column_stack([half, data.examined - half]).ravel(),
        np.column_stack([positive, data.positive - positive]).ravel(),
        np.repeat(np.arange(30), 2),
    )
    theta = Theta(np.log(30.0), 0.0, np.log(0.6))
    a = mesh_model(first, xy, design, 10.0).laplace(theta)
    b = mesh_model(split, np.repeat(xy, 2, axis=0), np.repeat(design, 2, axis=0), 10.0).laplace(theta)
    assert a.log_evidence - first.log_constant == pytest.approx(b.log_evidence - split.log_constant, rel=1e-8)
    np.testing.assert_allclose(a.mode, b.mode, rtol=1e-8, atol=1e-9)
    np.testing.assert_allclose(a.gradient, b.gradient, rtol=1e-7, atol=1e-7)  # as far as two modes agree


def test_newton_that_cannot_converge_is_an_error_with_its_trace(rng, monkeypatch):
    data, xy, design = example(rng, n=30)
    model = mesh_model(data, xy, design, 10.0)
    monkeypatch.setattr("prevmap.engine.laplace._MAX_STEPS", 2)
    with pytest.raises(FitError, match=r"did not converge in 2 steps at range 30 km.*last decrements"):
        model.laplace(Theta(np.log(30.0), 0.0, np.log(0.3)))
