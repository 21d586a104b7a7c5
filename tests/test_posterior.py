"""The outer problem on log posteriors whose mode, integral and quantiles are known."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import gamma, norm

from prevmap.engine.laplace import Theta
from prevmap.engine.posterior import Outer, find_peak, infer, weighted_quantile
from prevmap.errors import FitError


@dataclass
class State:
    theta: Theta
    mode: np.ndarray
    log_evidence: float
    gradient: np.ndarray
    iterations: int = 1
    smallest_pivot: float = 1.0


class Shape:
    """Stands in for an engine: a log posterior given as a function of theta and its gradient."""

    def __init__(self, function, fails=lambda v: False):
        self.function, self.fails, self.count = function, fails, 0

    def laplace(self, theta, start=None):
        self.count += 1
        v = np.array([theta.log_range, theta.log_sd, theta.log_nugget])
        if self.fails(v):
            raise FitError("out of reach")
        value, gradient = self.function(v)
        return State(theta, np.zeros(1), value, gradient)


def outer(start, free=(True, True, True), width=30.0, priors=(None, None, None)):
    start = np.asarray(start, dtype=float)
    return Outer(start, np.array(free), priors, start - width, start + width)


def gaussian(mean, precision, top=-100.0):
    def function(v):
        d = v - mean
        return top - 0.5 * float(d @ precision @ d), -precision @ d

    return function


def test_a_gaussian_is_integrated_exactly():
    mean = np.array([3.0, 0.4, -1.0])
    root = np.array([[1.5, 0.0, 0.0], [0.8, 2.0, 0.0], [-0.5, 0.3, 3.0]])
    precision = root @ root.T
    engine, problem = Shape(gaussian(mean, precision)), outer(mean + np.array([1.5, -1.0, 0.8]))
    peak = find_peak(engine, problem)
    assert peak.evaluations == engine.count
    np.testing.assert_allclose(
        peak.values, mean, atol=0.02
    )  # stops within 0.003 posterior standard deviations
    exact = -100.0 + 1.5 * np.log(2 * np.pi) - 0.5 * np.linalg.slogdet(precision)[1]
    posterior = infer(engine, problem, peak)
    # Trapezoid error 3e-4, and what lies beyond the lattice: below 1 % of the mass.
    assert posterior.log_evidence == pytest.approx(exact, abs=0.015)
    assert infer(engine, problem, peak, integrate=False).log_evidence == pytest.approx(exact, abs=1e-4)
    covariance = np.linalg.inv(precision)
    for j in range(3):
        for q in (0.025, 0.5, 0.975):
            wanted = norm.ppf(q, mean[j], np.sqrt(covariance[j, j]))
            got = weighted_quantile(*posterior.marginals[j], q)
            assert got == pytest.approx(
                wanted, abs=0.06 * np.sqrt(covariance[j, j])
            )  # lattice ends at 3.4 sd
    assert posterior.weights.sum() == pytest.approx(1.0)
    assert not posterior.warnings
    moments = np.array([[s.theta.log_range, s.theta.log_sd, s.theta.log_nugget] for s in posterior.states])
    np.testing.assert_allclose(posterior.weights @ moments, mean, atol=0.02)
    spread = (moments - mean).T @ (posterior.weights[:, None] * (moments - mean))
    np.testing.assert_allclose(
        spread, covariance, atol=0.06 * covariance.max()
    )  # points of small weight dropped


@pytest.mark.parametrize("shape", [0.7, 2.0, 20.0])
def test_a_skewed_density_with_a_long_left_tail(shape):
    """log of a gamma variable: density exp(a v - e^v), falling off only like e^{a v} on the left."""

    def function(v):
        return shape * v[2] - np.exp(v[2]), np.array([0.0, 0.0, shape - np.exp(v[2])])

    engine = Shape(function)
    problem = outer([0.0, 0.0, 1.5], (False, False, True))
    posterior = infer(engine, problem, find_peak(engine, problem))
    exact = np.log(quad(lambda v: np.exp(shape * v - np.exp(v)), -60, 6)[0])
    assert posterior.log_evidence == pytest.approx(exact, abs=0.02)  # tails end at 1 % of the mass
    for q in (0.1, 0.5, 0.975):
        wanted = np.log(gamma.ppf(q, shape))
        sd = np.sqrt(np.pi**2 / 6) / np.sqrt(shape)
        assert weighted_quantile(*posterior.marginals[2], q) == pytest.approx(
            wanted, abs=0.2 * sd
        )  # the last 1 % of a tail is not followed
    below = sum(1 for s in posterior.states if s.theta.log_nugget < np.log(shape) - 0.1)
    above = sum(1 for s in posterior.states if s.theta.log_nugget > np.log(shape) + 0.1)
    assert below > above or shape > 10  # the slow side gets more points


def test_the_prior_enters_with_its_gradient():
    precision = np.diag([4.0, 1.0, 1.0])

    def prior(v):
        return norm.logpdf(v, 2.0, 0.5), -(v - 2.0) / 0.25

    engine = Shape(gaussian(np.zeros(3), precision, 0.0))
    problem = outer([0.5, 0.0, 0.0], (True, False, False), priors=(prior, None, None))
    peak = find_peak(engine, problem)
    assert peak.values[0] == pytest.approx(1.0, abs=0.01)  # two equal precisions: half way
    exact = np.log(quad(lambda v: np.exp(-2 * v * v) * norm.pdf(v, 2.0, 0.5), -10, 10)[0])
    assert infer(engine, problem, peak).log_evidence == pytest.approx(exact, abs=0.01)


def test_nothing_free_needs_one_evaluation():
    engine = Shape(gaussian(np.zeros(3), np.eye(3), -7.0))
    problem = outer([0.0, 0.0, 0.0], (False, False, False))
    posterior = infer(engine, problem, find_peak(engine, problem))
    assert posterior.log_evidence == -7.0
    assert engine.count == posterior.evaluations == 1
    assert posterior.marginals == {}


def test_trial_values_out_of_reach_shorten_the_step():
    engine = Shape(gaussian(np.zeros(3), np.eye(3)), fails=lambda v: v[0] < -0.5)
    peak = find_peak(engine, outer([3.0, 0.0, 0.0]))
    np.testing.assert_allclose(peak.values, 0.0, atol=0.02)


def test_a_flat_direction_is_named():
    engine = Shape(gaussian(np.zeros(3), np.diag([1.0, 1.0, 1e-4])))
    peak = find_peak(engine, outer([0.1, 0.1, 0.0]))
    assert any("nearly flat" in w for w in peak.warnings)


def test_a_mode_at_the_end_of_the_search_is_named():
    def function(v):
        return float(v[0]), np.array([1.0, 0.0, 0.0])

    problem = Outer(
        np.zeros(3), np.array([True, False, False]), (None, None, None), np.full(3, -2.0), np.full(3, 2.0)
    )
    peak = find_peak(Shape(function), problem)
    assert peak.values[0] == 2.0
    assert any("range_km came to rest at the end" in w for w in peak.warnings)


def test_a_bound_that_holds_one_coordinate_does_not_stop_the_others():
    precision = np.array([[1.0, 0.9, 0.0], [0.9, 1.0, 0.3], [0.0, 0.3, 2.0]])
    mean = np.array([4.0, -1.0, 0.5])
    problem = Outer(
        np.array([0.0, 2.0, -1.0]),
        np.ones(3, dtype=bool),
        (None, None, None),
        np.full(3, -20.0),
        np.array([1.0, 20.0, 20.0]),
    )
    peak = find_peak(Shape(gaussian(mean, precision)), problem)
    given = mean[1:] - np.linalg.solve(precision[1:, 1:], precision[1:, 0] * (1.0 - mean[0]))
    assert peak.values[0] == 1.0
    np.testing.assert_allclose(peak.values[1:], given, atol=0.03)


def test_no_mode_is_an_error():
    def function(v):
        return float(v[0]), np.array([-1.0, 0.0, 0.0])  # a gradient that points downhill

    with pytest.raises(FitError, match="the search for the mode of the hyperparameters stopped"):
        find_peak(Shape(function), outer([0.0, 0.0, 0.0], (True, False, False)))
