"""Penalised-complexity priors: printed densities, tails by quadrature, gradients."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from tolerances import GRADIENT, PRINTED

from prevmap.engine.priors import pc_range, pc_range_median, pc_sd, pc_sd_median
from prevmap.errors import InputError

BOUND = st.floats(1e-3, 1e4)
PROBABILITY = st.floats(1e-4, 0.99)
# Fuglstad, Simpson, Lindgren & Rue 2019, theorem 2.6 with d = 2, evaluated independently with 30-digit
# arithmetic: rho0, alpha, sd0, alpha, range, sd, log density of (range, sd), of (log range, log sd)
DENSITIES = [
    (50, 0.05, 1, 0.05, 100, 0.8, -6.998391921438, -2.616365286764),
    (50, 0.5, 1, 0.01, 100, 0.8, -8.168360400392, -3.786333765718),
    (100, 0.01, 3, 0.05, 100, 0.8, -8.483446274086, -4.101419639412),
    (50, 0.05, 1, 0.05, 60, 0.5, -6.076598416358, -2.675401034696),
]


@pytest.mark.parametrize(("rho0", "alpha1", "sd0", "alpha2", "at", "sd", "natural", "logarithmic"), DENSITIES)
def test_density_is_that_of_the_logarithms(rho0, alpha1, sd0, alpha2, at, sd, natural, logarithmic):
    found = pc_range(math.log(at), rho0, alpha1)[0] + pc_sd(math.log(sd), sd0, alpha2)[0]
    assert found == pytest.approx(logarithmic, abs=PRINTED)
    assert found - math.log(at) - math.log(sd) == pytest.approx(natural, abs=PRINTED)


@pytest.mark.parametrize(
    ("rho0", "alpha1", "sd0", "alpha2", "range_median", "sd_median"),
    [
        # computed independently with 30-digit arithmetic
        (50, 0.05, 1, 0.05, 216.0964047444, 0.231378213160),
        (50, 0.5, 1, 0.01, 50.0, 0.150514997832),
        (100, 0.01, 3, 0.05, 664.3856189775, 0.694134639479),
    ],
)
def test_medians(rho0, alpha1, sd0, alpha2, range_median, sd_median):
    assert pc_range_median(rho0, alpha1) == pytest.approx(range_median, rel=PRINTED)
    assert pc_sd_median(sd0, alpha2) == pytest.approx(sd_median, rel=PRINTED)


def mass(prior, low, high):
    return quad(lambda theta: math.exp(prior(theta)[0]), low, high, epsabs=1e-12, epsrel=1e-10, limit=400)[0]


@pytest.mark.parametrize(("rho0", "alpha"), [(50.0, 0.05), (3.0, 0.5), (400.0, 0.9)])
def test_range_is_below_its_bound_with_the_stated_probability(rho0, alpha):
    def prior(theta):
        return pc_range(theta, rho0, alpha)

    bound = math.log(rho0)
    assert mass(prior, bound - 8, bound) == pytest.approx(alpha, abs=1e-9)  # quadrature
    # P(range > e^25 rho0) is about 1e-11 times the rate
    assert mass(prior, bound, bound + 25) == pytest.approx(1 - alpha, abs=1e-9)  # quadrature and that tail
    assert mass(prior, bound - 8, math.log(pc_range_median(rho0, alpha))) == pytest.approx(0.5, abs=1e-9)


@pytest.mark.parametrize(("sd0", "alpha"), [(1.0, 0.05), (0.2, 0.5), (30.0, 0.9)])
def test_sd_is_above_its_bound_with_the_stated_probability(sd0, alpha):
    def prior(theta):
        return pc_sd(theta, sd0, alpha)

    bound = math.log(sd0)
    assert mass(prior, bound, bound + 8) == pytest.approx(alpha, abs=1e-9)  # quadrature
    assert mass(prior, bound - 25, bound) == pytest.approx(1 - alpha, abs=1e-9)  # quadrature and the tail
    assert mass(prior, math.log(pc_sd_median(sd0, alpha)), bound + 8) == pytest.approx(0.5, abs=1e-9)


@given(bound=BOUND, alpha=PROBABILITY, offset=st.floats(-3, 3))
def test_gradients_are_central_differences(bound, alpha, offset):
    step = 1e-5
    for prior in (pc_range, pc_sd):
        theta = math.log(bound) + offset
        difference = (prior(theta + step, bound, alpha)[0] - prior(theta - step, bound, alpha)[0]) / (
            2 * step
        )
        # 1e-9: rounding of values of a few hundred over the step
        assert prior(theta, bound, alpha)[1] == pytest.approx(difference, rel=GRADIENT, abs=1e-8)


@given(bound=BOUND, alpha=PROBABILITY)
def test_modes_of_the_logarithms_are_the_rates(bound, alpha):
    # log range is densest at the rate of 1/range, log sd at the inverse rate of the sd
    assert pc_range(math.log(-math.log(alpha) * bound), bound, alpha)[1] == pytest.approx(0.0, abs=1e-12)
    assert pc_sd(math.log(bound / -math.log(alpha)), bound, alpha)[1] == pytest.approx(0.0, abs=1e-12)


def test_far_tails_have_density_zero_without_a_warning():
    assert pc_range(-800.0, 50.0, 0.05)[0] == -math.inf
    assert pc_sd(800.0, 1.0, 0.05)[0] == -math.inf
    assert np.isfinite(pc_range(800.0, 50.0, 0.05)).all()
    assert np.isfinite(pc_sd(-800.0, 1.0, 0.05)).all()


@pytest.mark.parametrize("function", [pc_range_median, lambda b, a: pc_range(0.0, b, a)])
@pytest.mark.parametrize("bound", [0.0, -1.0, math.nan, math.inf])
def test_impossible_range_bounds_are_refused(function, bound):
    with pytest.raises(InputError, match="The range in a prior must be a positive number; found"):
        function(bound, 0.05)


@pytest.mark.parametrize("function", [pc_sd_median, lambda b, a: pc_sd(0.0, b, a)])
@pytest.mark.parametrize("alpha", [0.0, 1.0, -0.1, 5.0, math.nan])
def test_impossible_probabilities_are_refused(function, alpha):
    with pytest.raises(InputError, match="probability in a prior must lie between 0 and 1; found"):
        function(1.0, alpha)


@pytest.mark.parametrize("bound", [0.0, -1.0, math.nan])
def test_impossible_sd_bounds_are_refused(bound):
    with pytest.raises(
        InputError, match="The standard deviation in a prior must be a positive number; found"
    ):
        pc_sd(0.0, bound, 0.05)
