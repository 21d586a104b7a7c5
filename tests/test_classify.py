"""Unit decisions: classes, certainty, further draws, and what population weighting does to them."""

import math
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tolerances import ALGEBRA, MONTE_CARLO_ERRORS

import prevmap
from prevmap.plan.classify import class_labels, classify_units


@dataclass(frozen=True)
class DrawnUnits:
    """Unit estimates made of the first `draws` rows of a fixed matrix (draws, units) of prevalences."""

    frame: pd.DataFrame
    matrix: np.ndarray
    draws: int

    def exceedance(self, t):
        return pd.Series((self.matrix[: self.draws] > t).mean(axis=0), index=self.frame["unit"].to_list())

    def exceedance_error(self, t):
        p = self.exceedance(t)
        return np.sqrt(p * (1 - p) / self.draws)

    def with_draws(self, draws):
        return replace(self, draws=draws)


def drawn_units(matrix, draws=None, basis=None):
    matrix = np.asarray(matrix, dtype=float)
    n = matrix.shape[1]
    frame = pd.DataFrame(
        {
            "unit": [f"unit {i}" for i in range(n)],
            "code": [f"U{i}" for i in range(n)],
            "parent": [None] * n,
            "sites": [5 if b == "own sites" else 0 for b in basis or ["own sites"] * n],
            "basis": basis or ["own sites"] * n,
            "mean": matrix.mean(axis=0),
        }
    )
    return DrawnUnits(frame, matrix, draws or len(matrix))


def share_above(*shares, draws=4000, threshold=0.1):
    """One unit per share; exactly that share of its draws is above the threshold."""
    columns = [np.where(np.arange(draws) < round(s * draws), threshold + 0.05, 0.05) for s in shares]
    return drawn_units(np.column_stack(columns))


def test_one_threshold_gives_above_below_undecided():
    decisions = classify_units(share_above(0.97, 0.5, 0.02), [0.10], certainty=0.90)
    frame = decisions.frame
    assert frame["decision"].to_list() == ["above", "undecided", "below"]
    assert frame["p_class_1"].to_list() == pytest.approx([0.97, 0.5, 0.02], abs=ALGEBRA)
    assert frame["p_class_0"].to_list() == pytest.approx([0.03, 0.5, 0.98], abs=ALGEBRA)
    assert frame["p_wrong"].iloc[[0, 2]].to_list() == pytest.approx([0.03, 0.02], abs=ALGEBRA)
    assert math.isnan(frame["p_wrong"].iloc[1])
    assert decisions.counts == {"above": 1, "below": 1, "undecided": 1}
    assert decisions.expected_wrong == pytest.approx(0.05, abs=ALGEBRA)
    assert decisions.classes == ("< 10 %", ">= 10 %")
    assert prevmap.classify_units is classify_units


def test_above_and_below_may_need_different_certainty():
    units = share_above(0.85, 0.15)
    frame = classify_units(units, [0.10], certainty={"above": 0.80, "below": 0.95}).frame
    assert frame["decision"].to_list() == ["above", "undecided"]
    frame = classify_units(units, 0.10, certainty={"above": 0.95, "below": 0.80}).frame
    assert frame["decision"].to_list() == ["undecided", "below"]


def test_several_thresholds_give_a_labelled_class_or_undecided():
    draws = 1000
    middle = np.full(draws, 0.15)
    middle[:50] = 0.3  # 5 % of the draws in the highest class
    spread = np.tile([0.05, 0.15], draws // 2)
    high = np.full(draws, 0.6)
    decisions = classify_units(drawn_units(np.column_stack([middle, spread, high])), [0.10, 0.20])
    assert decisions.frame["decision"].to_list() == [">= 10 % and < 20 %", "undecided", ">= 20 %"]
    row = decisions.frame.iloc[0]
    assert [row["p_class_0"], row["p_class_1"], row["p_class_2"]] == pytest.approx(
        [0, 0.95, 0.05], abs=ALGEBRA
    )
    assert row["p_wrong"] == pytest.approx(0.05, abs=ALGEBRA)
    assert decisions.outcomes == (">= 20 %", ">= 10 % and < 20 %", "< 10 %", "undecided")


def test_a_unit_without_its_own_sites_stays_undecided_unless_allowed():
    matrix = np.full((1000, 3), 0.4)
    units = drawn_units(matrix, basis=["own sites", "neighbours", "covariates only"])
    frame = classify_units(units, [0.10]).frame
    assert frame["decision"].to_list() == ["above", "undecided", "undecided"]
    assert frame["p_class_1"].to_list() == [1.0, 1.0, 1.0]
    assert "no surveyed site in the unit (basis: neighbours)" in frame["reason"].iloc[1]
    units.frame["sites"] = [5, 2, 0]  # sites that were surveyed but have no position
    assert "no site with a position in the unit" in classify_units(units, [0.10]).frame["reason"].iloc[1]
    allowed = classify_units(units, [0.10], decide_without_sites=True).frame
    assert allowed["decision"].to_list() == ["above"] * 3


def test_a_unit_without_prediction_is_undecided():
    units = drawn_units(np.column_stack([np.full(100, np.nan), np.full(100, 0.01)]))
    nan_aware = replace(units, frame=units.frame.assign(mean=[np.nan, 0.01]))

    @dataclass(frozen=True)
    class Partial(DrawnUnits):
        def exceedance(self, t):
            return pd.Series([np.nan, 0.0], index=self.frame["unit"].to_list())

    frame = classify_units(Partial(nan_aware.frame, nan_aware.matrix, 100), [0.1]).frame
    assert frame["decision"].to_list() == ["undecided", "below"]
    assert frame["reason"].iloc[0] == "no prediction for this unit"
    assert math.isnan(frame["p_class_0"].iloc[0])


def test_more_draws_are_made_only_while_a_unit_is_near_its_cut_off(rng):
    uniform = rng.random(64_000)
    near = np.where(uniform < 0.904, 0.2, 0.05)
    clear = np.full(64_000, 0.01)
    units = drawn_units(np.column_stack([near, clear]), draws=1000)
    decisions = classify_units(units, [0.1], certainty=0.90)
    used = decisions.units.draws
    assert used in (4000, 16_000, 64_000)
    p = decisions.frame["p_class_1"].iloc[0]
    assert used == 64_000 or abs(p - 0.90) >= 2 * decisions.frame["monte_carlo_error"].iloc[0]
    assert classify_units(drawn_units(clear[:, None], draws=1000), [0.1]).units.draws == 1000
    # A unit that may not be decided anyway asks for no further draws.
    other = drawn_units(near[:, None], draws=1000, basis=["neighbours"])
    assert classify_units(other, [0.1]).units.draws == 1000


def test_drawing_stops_at_its_limit_and_says_so():
    pattern = np.where(np.arange(64_000) % 10 == 0, 0.05, 0.2)  # exactly 0.9 above in any whole ten
    decisions = classify_units(drawn_units(pattern[:, None], draws=4000), [0.1], certainty=0.90)
    assert decisions.units.draws == 64_000
    assert (
        "within 2 Monte-Carlo errors of the cut-off after 64,000 draws" in decisions.frame["reason"].iloc[0]
    )


@pytest.mark.parametrize(
    ("thresholds", "message"),
    [
        ([], "thresholds is empty"),
        ([10], "found 10; a threshold is a share above 0 and below 1.*write 0.1"),
        ([0.0], "found 0.0; a threshold is a share"),
        ([1.0], "found 1.0"),
        ([math.nan], "found nan"),
        ([True], "found True"),
        (["0.1"], "found '0.1'"),
        ("0.1", "found '0'"),
        ([0.2, 0.1], "0.2 is followed by 0.1; thresholds must increase"),
        ([0.1, 0.1], "thresholds must increase"),
    ],
)
def test_thresholds_that_are_not_accepted_are_named(thresholds, message):
    with pytest.raises(prevmap.InputError, match=message):
        classify_units(share_above(0.5), thresholds)


@pytest.mark.parametrize(
    ("certainty", "message"),
    [
        (0.5, "certainty: found 0.5; a certainty is a probability above 0.5 and at most 1"),
        (90, "certainty: found 90"),
        (math.nan, "certainty: found nan"),
        (True, "certainty: found True"),
        ("0.9", "certainty: found '0.9'"),
        ({"above": 0.9}, "found the keys above; a table needs exactly the two keys above and below"),
        ({"above": 0.9, "below": 0.4}, "certainty.below: found 0.4"),
        ({"above": 0.9, "below": 0.9, "middle": 0.9}, "found the keys above, below, middle"),
    ],
)
def test_certainties_that_are_not_accepted_are_named(certainty, message):
    with pytest.raises(prevmap.InputError, match=message):
        classify_units(share_above(0.5), [0.1], certainty)


@given(
    st.lists(st.floats(0.01, 0.99), min_size=1, max_size=4, unique=True).map(sorted),
    st.floats(0.51, 1.0),
    st.integers(0, 2**32 - 1),
)
def test_class_probabilities_sum_to_one_and_decisions_reach_the_certainty(thresholds, certainty, seed):
    matrix = np.random.default_rng(seed).beta(2.0, 6.0, size=(200, 3))
    decisions = classify_units(drawn_units(matrix), thresholds, certainty)
    columns = [f"p_class_{k}" for k in range(len(thresholds) + 1)]
    p = decisions.frame[columns].to_numpy()
    assert np.allclose(p.sum(axis=1), 1.0, rtol=0, atol=ALGEBRA)
    assert (p >= -ALGEBRA).all()
    decided = (decisions.frame["decision"] != "undecided").to_numpy()
    assert (decided == (p >= certainty).any(axis=1)).all()
    assert np.allclose(decisions.frame["p_wrong"][decided], 1 - p[decided].max(axis=1), rtol=0, atol=ALGEBRA)


def test_labels_carry_their_inequality():
    assert class_labels([0.1, 0.5]) == ("< 10 %", ">= 10 % and < 50 %", ">= 50 %")


# Two pixels that are 0.05 or 0.25 with probability one half each, independently: all four joint outcomes.
FOUR_OUTCOMES = np.array([[0.05, 0.05], [0.05, 0.25], [0.25, 0.05], [0.25, 0.25]])


@pytest.mark.parametrize(("weights", "exact"), [((0.9, 0.1), 0.5), ((0.5, 0.5), 0.75)])
def test_a_unit_is_classified_from_joint_draws_of_its_weighted_mean(weights, exact):
    pixels = np.tile(FOUR_OUTCOMES, (250, 1))
    frame = classify_units(drawn_units((pixels @ np.array(weights))[:, None]), [0.1]).frame
    assert frame["p_class_1"].iloc[0] == exact
    # The mean of the pixels' own exceedances is one half under both weightings: it is not the unit's.
    assert np.average((pixels > 0.1).mean(axis=0), weights=weights) == 0.5


@pytest.mark.parametrize(
    ("correlation", "exact"), [(0.0, 0.391639114875), (0.5, 0.395100933003), (1.0, 0.393622161122)]
)
def test_logit_normal_pixels_weighted_by_people(correlation, exact, rng):
    # Weights 0.9 and 0.1, means -2.5 and -1.5, sd 0.6: computed independently by quadrature.
    draws = 64_000
    z = rng.standard_normal((draws, 2))
    z[:, 1] = correlation * z[:, 0] + math.sqrt(1 - correlation**2) * z[:, 1]
    pixels = 1 / (1 + np.exp(-(np.array([-2.5, -1.5]) + 0.6 * z)))
    decisions = classify_units(drawn_units((pixels @ np.array([0.9, 0.1]))[:, None]), [0.1])
    row = decisions.frame.iloc[0]
    assert abs(row["p_class_1"] - exact) < MONTE_CARLO_ERRORS * row["monte_carlo_error"]
    assert row["decision"] == "undecided"


def test_weighting_by_people_can_turn_the_decision(rng):
    # expit(-2.5) = 0.076 and expit(-1.5) = 0.182: about 0.087 with the weights, 0.129 without.
    draws = 16_000
    pixels = 1 / (1 + np.exp(-(np.array([-2.5, -1.5]) + 0.06 * rng.standard_normal((draws, 2)))))
    units = drawn_units(np.column_stack([pixels @ np.array([0.9, 0.1]), pixels.mean(axis=1)]))
    assert classify_units(units, [0.10]).frame["decision"].to_list() == ["below", "above"]
