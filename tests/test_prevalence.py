"""From the logit scale to prevalence: published moments, quadrature, and Monte Carlo."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.special import expit, logit
from scipy.stats import norm
from tolerances import MONTE_CARLO_ERRORS

from prevmap.engine import prevalence as pv

ONE = np.array([1.0])


def mixture(mean, sd, nugget_sd=(0.0,), weight=ONE, setting="average"):
    tables = pv.links(np.array(nugget_sd), setting)
    mean = np.atleast_2d(np.asarray(mean, dtype=float)).T
    variance = np.atleast_2d(np.asarray(sd, dtype=float) ** 2).T + tables.added_variance[:, None]
    return pv.Mixture(mean, variance, np.asarray(weight), tables)


@pytest.mark.parametrize(
    ("mu", "sd", "mean", "spread", "median"),
    [
        (0.0, 1.0, 0.5, 0.208276344932, 0.5),
        (-2.0, 1.0, 0.155462518530, 0.124643251906, 0.119202922022),
        (-1.0, 0.5, 0.279419184757, None, None),
        (-3.0, 1.5, 0.096610883153, None, 0.047425873178),
    ],
)
def test_logit_normal_moments(mu, sd, mean, spread, median):
    # Computed independently with 30-digit arithmetic.
    m = mixture([mu], [sd])
    got_mean, got_sd = pv.prevalence_moments(m)
    assert got_mean[0] == pytest.approx(mean, abs=1e-10)  # even rule, step 0.25: error below 1e-11
    if spread is not None:
        assert got_sd[0] == pytest.approx(spread, abs=1e-9)  # square root of a difference
    if median is not None:
        assert pv.prevalence_quantile(m, 0.5)[0] == pytest.approx(median, abs=1e-9)  # bisection to 1e-9


@pytest.mark.parametrize("nugget_sd", [0.2, 0.8, 3.0])
@pytest.mark.parametrize("eta", [-12.0, -4.0, -0.3, 2.5])
def test_average_over_settlements_equals_quadrature(nugget_sd, eta):
    exact = quad(lambda z: expit(eta + nugget_sd * z) * norm.pdf(z), -12, 12, epsrel=1e-12, epsabs=1e-16)[0]
    tables = pv.links(np.array([nugget_sd]), "average")
    assert pv.prevalence_of(tables.forward[0], np.array([[eta]]))[0, 0] == pytest.approx(
        exact, rel=1e-8
    )  # table


@given(eta=st.floats(-15, 15), nugget_sd=st.floats(0.05, 3))
def test_the_inverse_table_inverts(eta, nugget_sd):
    tables = pv.links(np.array([nugget_sd]), "average")
    forth = pv._interpolate(tables.forward[0], np.array([eta]))
    back = pv._interpolate(tables.backward[0], forth)
    assert back[0] == pytest.approx(eta, abs=1e-6)  # cubic interpolation, twice, on a step of 0.02


def test_leaving_the_nugget_out_biases_low_prevalence_downwards():
    average = pv.prevalence_moments(mixture([-3.0], [0.5], [1.0]))[0][0]
    omitted = pv.prevalence_moments(mixture([-3.0], [0.5], [1.0], setting="omit"))[0][0]
    drawn = pv.prevalence_moments(mixture([-3.0], [0.5], [1.0], setting="draw"))[0][0]
    assert 1.1 < average / omitted < 1.6  # what a nugget of 1 does at 5 %
    assert drawn == pytest.approx(average, rel=1e-9)  # the mean of a mean over settlements is that of one


def test_exceedance_and_quantiles_of_a_mixture_agree_with_draws(rng):
    mean, sd, s, w = [-2.5, -1.0, -3.0], [0.4, 0.8, 0.3], [0.1, 0.9, 0.0], [0.5, 0.3, 0.2]
    for setting in pv.NUGGET_SETTINGS:
        m = mixture(mean, sd, s, w, setting)
        k = rng.choice(3, 400_000, p=w)
        eta = np.take(mean, k) + np.take(sd, k) * rng.standard_normal(k.size)
        if setting == "draw":
            p = expit(eta + np.take(s, k) * rng.standard_normal(k.size))
        else:
            p = np.empty(k.size)
            for j in range(3):
                p[k == j] = pv.prevalence_of(m.links.forward[j], eta[k == j][:, None])[:, 0]
        for t in (0.05, 0.1, 0.3):
            exact = pv.exceedance(m, t)[0]
            error = np.sqrt(exact * (1 - exact) / k.size)
            assert abs(np.mean(p > t) - exact) < MONTE_CARLO_ERRORS * error
        for q in (0.025, 0.5, 0.9):
            at = pv.prevalence_quantile(m, q)[0]
            assert abs(np.mean(p <= at) - q) < MONTE_CARLO_ERRORS * np.sqrt(q * (1 - q) / k.size)
        got_mean, got_sd = pv.prevalence_moments(m)
        assert abs(p.mean() - got_mean[0]) < MONTE_CARLO_ERRORS * got_sd[0] / np.sqrt(k.size)
        assert got_sd[0] == pytest.approx(p.std(), rel=0.02)  # Monte-Carlo error of a standard deviation


@given(
    mu=st.floats(-6, 3),
    sd=st.floats(0.01, 2),
    s=st.floats(0, 2),
    low=st.floats(0.001, 0.5),
    step=st.floats(0.001, 0.4),
)
def test_exceedance_falls_with_the_threshold_and_agrees_with_the_quantile(mu, sd, s, low, step):
    m = mixture([mu], [sd], [s])
    a, b = pv.exceedance(m, low)[0], pv.exceedance(m, low + step)[0]
    assert 0.0 <= b <= a <= 1.0
    median = pv.prevalence_quantile(m, 0.5)[0]
    assert pv.exceedance(m, median)[0] == pytest.approx(0.5, abs=1e-5)  # table inverse, steepest at small sd


def test_worked_exceedance_of_a_gaussian_on_the_logit_scale():
    # N(-2, 0.5) on the logit scale against 10 %: Phi((-2 - logit 0.1)/sqrt 0.5), computed independently: 0.6098.
    assert pv.exceedance(mixture([-2.0], [np.sqrt(0.5)]), 0.1)[0] == pytest.approx(0.609845996927, abs=1e-11)
    assert logit(0.1) == pytest.approx(-2.197224577336)


def test_impossible_requests_are_refused():
    with pytest.raises(ValueError, match="average, omit, draw"):
        pv.links(np.array([0.1]), "ignore")
    with pytest.raises(ValueError, match="strictly between"):
        pv.prevalence_quantile(mixture([0.0], [1.0]), 1.0)
    assert pv.exceedance(mixture([0.0], [1.0]), 0.0)[0] == 1.0
    assert pv.exceedance(mixture([0.0], [1.0]), 1.0)[0] == 0.0
