"""The likelihood against quadrature, finite differences and published facts."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import expit, gammaln
from scipy.stats import binom
from tolerances import ALGEBRA, GRADIENT

from prevmap.engine import likelihood as lk
from prevmap.errors import FitError

QUADRATURE = 1e-9  # three times the rule's stated error, exp(-pi^2 / 0.45)


def brute_force(eta, n, y, nugget_sd, se=1.0, sp=1.0):
    """Log likelihood of one site by a fine trapezoid rule."""
    z = np.linspace(-14 * nugget_sd, 14 * nugget_sd, 200_001)
    total = -0.5 * (z / nugget_sd) ** 2 - np.log(nugget_sd) - 0.5 * np.log(2 * np.pi)
    for e, nn, yy in zip(np.atleast_1d(eta), np.atleast_1d(n), np.atleast_1d(y), strict=True):
        p = se * expit(e + z) + (1 - sp) * expit(-(e + z))
        total = total + binom.logpmf(yy, nn, p)
    top = total.max()
    return top + np.log(np.sum(np.exp(total - top)) * (z[1] - z[0]))


@pytest.mark.parametrize(
    ("n", "y", "eta", "nugget_sd"),
    [
        (1, 0, -2.0, 3.0),
        (1, 1, -6.0, 1.0),
        (1, 1, -3.0, 8.0),  # a wide nugget against one person
        (20, 0, -1.0, 0.5),
        (50, 0, 0.5, 4.0),  # one side of the integrand much wider than the other
        (50, 17, 0.5, 2.0),
        (400, 3, 1.0, 1.0),  # far from the prior's scale, where fixed nodes fail
        (5000, 4000, -8.0, 4.0),
    ],
)
def test_nugget_integral_equals_a_fine_rule(n, y, eta, nugget_sd):
    data = lk.observations(np.array([n]), np.array([y]))
    value = lk.evaluate(data, np.array([eta]), nugget_sd).value
    assert value == pytest.approx(brute_force(eta, n, y, nugget_sd), abs=QUADRATURE)


def test_imperfect_test_and_two_rows_that_share_a_nugget_equal_a_fine_rule():
    data = lk.observations(np.array([20.0, 35]), np.array([3.0, 12]), np.array([0, 0]), 0.8, 0.95)
    eta = np.array([-1.2, -0.3])
    expected = brute_force(eta, [20, 35], [3, 12], 0.7, 0.8, 0.95)
    assert lk.evaluate(data, eta, 0.7).value == pytest.approx(expected, abs=QUADRATURE)


def test_without_nugget_it_is_the_binomial_of_scipy():
    n, y, eta = np.array([10.0, 20, 7]), np.array([3.0, 20, 0]), np.array([-0.3, 2.0, -5.0])
    value = lk.evaluate(lk.observations(n, y), eta, 0.0).value
    assert value == pytest.approx(binom.logpmf(y, n, expit(eta)).sum(), rel=ALGEBRA)


@pytest.mark.parametrize(
    ("eta", "score", "observed"),
    [
        (-4.0, 0.526930192367, -0.375971907127),
        (-2.0, 1.054129112115, 0.213048348727),
        (0.0, -0.959079283888, 1.328238957097),
    ],
)
def test_observed_information_of_an_imperfect_test_can_be_negative(eta, score, observed):
    # 3 of 10 with Se 0.8, Sp 0.95; computed independently with 30-digit arithmetic.
    terms = lk.evaluate(
        lk.observations(np.array([10.0]), np.array([3.0]), None, 0.8, 0.95), np.array([eta]), 0.0
    )
    assert terms.gradient[0] == pytest.approx(score, abs=1e-11)  # 12 digits printed
    assert terms.curvature[0] == pytest.approx(observed, abs=1e-11)


@pytest.mark.parametrize(("se", "sp"), [(1.0, 1.0), (0.8, 0.95)])
@pytest.mark.parametrize("nugget_sd", [0.0, 0.05, 0.9])
def test_derivatives_equal_central_differences(rng, se, sp, nugget_sd):
    n = np.array([20.0, 30, 10, 5, 60])
    y = np.array([3.0, 4, 9, 0, 11])
    data = lk.observations(n, y, np.array([0, 0, 0, 1, 2]), se, sp)
    eta = rng.normal(-1.0, 1.0, 5)
    root = rng.normal(size=(3, 3))
    covariance = np.concatenate([(root @ root.T).ravel(), [1.3], [0.4]])
    terms = lk.evaluate(data, eta, nugget_sd)
    higher = lk.higher_terms(data, eta, nugget_sd, covariance)
    blocks = [(0, 0), (0, 1), (0, 2), (1, 0), (1, 1), (1, 2), (2, 0), (2, 1), (2, 2), (3, 3), (4, 4)]
    h = 1e-5
    for i in range(5):
        step = np.zeros(5)
        step[i] = h
        up, down = lk.evaluate(data, eta + step, nugget_sd), lk.evaluate(data, eta - step, nugget_sd)
        assert terms.gradient[i] == pytest.approx((up.value - down.value) / (2 * h), rel=GRADIENT, abs=1e-6)
        second = -(up.gradient - down.gradient) / (2 * h)
        for at, (j, k) in enumerate(blocks):
            if j == i:
                assert terms.curvature[at] == pytest.approx(second[k], rel=GRADIENT, abs=1e-6)
        third = -((up.curvature - down.curvature) @ covariance) / (2 * h)
        assert higher.third[i] == pytest.approx(third, rel=GRADIENT, abs=1e-6)
    if nugget_sd > 0:
        up, down = (
            lk.evaluate(data, eta, nugget_sd * np.exp(h)),
            lk.evaluate(data, eta, nugget_sd * np.exp(-h)),
        )
        assert higher.nugget_value == pytest.approx((up.value - down.value) / (2 * h), rel=GRADIENT, abs=1e-6)
        difference = (up.gradient - down.gradient) / (2 * h)
        assert higher.nugget_gradient == pytest.approx(difference, rel=GRADIENT, abs=1e-6)
        difference = -((up.curvature - down.curvature) @ covariance) / (2 * h)
        assert higher.nugget_hessian == pytest.approx(difference, rel=GRADIENT, abs=1e-6)


@given(
    n=st.integers(2, 200),
    share=st.floats(0, 1),
    split=st.floats(0, 1),
    eta=st.floats(-5, 3),
    s=st.floats(0.05, 2),
)
def test_splitting_a_row_changes_only_the_binomial_constant(n, share, split, eta, s):
    y = round(share * n)
    first = max(1, min(n - 1, round(split * n)))
    y1 = min(y, first)
    if y - y1 > n - first:
        y1 = y - (n - first)
    whole = lk.observations(np.array([n]), np.array([y]))
    parts = lk.observations(np.array([first, n - first]), np.array([y1, y - y1]), np.array([0, 0]))
    a = lk.evaluate(whole, np.array([eta]), s).value - whole.log_constant
    b = lk.evaluate(parts, np.array([eta, eta]), s).value - parts.log_constant
    assert a == pytest.approx(
        b, rel=1e-9, abs=1e-9
    )  # two quadratures with the same nodes, summed in another order


def test_log_constant_is_the_sum_of_binomial_coefficients():
    data = lk.observations(np.array([10.0, 4.0]), np.array([3.0, 4.0]))
    assert data.log_constant == pytest.approx(np.log(120.0), rel=ALGEBRA)
    assert gammaln(11) - gammaln(4) - gammaln(8) == pytest.approx(np.log(120.0), rel=ALGEBRA)


@pytest.mark.parametrize(
    ("n", "y", "site", "se", "sp", "message"),
    [
        ([5.0], [6.0], None, 1.0, 1.0, "0 <= positive <= examined"),
        ([0.0], [0.0], None, 1.0, 1.0, "examined > 0"),
        ([5.0, 5.0], [1.0, 1.0], [1, 0], 1.0, 1.0, "ordered by site"),
        ([5.0], [1.0], None, 0.5, 0.5, "no information"),
    ],
)
def test_impossible_rows_are_refused(n, y, site, se, sp, message):
    with pytest.raises(ValueError, match=message):
        lk.observations(np.array(n), np.array(y), None if site is None else np.array(site), se, sp)


def test_a_predictor_that_is_not_finite_is_an_error_not_a_number():
    data = lk.observations(np.array([5.0]), np.array([1.0]))
    with pytest.raises(FitError, match="could not be evaluated"):
        lk.evaluate(data, np.array([np.nan]), 0.5)
