import dataclasses

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

import prevmap
from prevmap.inputs.comparison import FEWEST_UNSEEN, unseen_zeros

NAMES = {"examined": "examined", "positive": "positive"}
PLACED = {**NAMES, "lon": "lon", "lat": "lat"}
LINE_UP = {**PLACED, "site": "site"}


def sites(n=8, **columns):
    """Make a table without a fault, around 36 east and 1 south."""
    table = {
        "site": [f"S{k}" for k in range(n)],
        "examined": [40 + k for k in range(n)],
        "positive": [k % 4 for k in range(n)],
        "lon": [36.0 + 0.05 * k for k in range(n)],
        "lat": [-1.0 - 0.04 * ((3 * k) % n) for k in range(n)],
    }
    return pd.DataFrame({**table, **columns})


def put(table, at, **cells):
    """Change cells of one row, whatever their type."""
    table = table.astype(object)
    for name, cell in cells.items():
        table.loc[at, name] = cell
    return table


def found(survey, **wanted):
    findings = survey.findings
    for name, value in wanted.items():
        findings = findings[findings[name] == value]
    return findings


def only(survey, **wanted):
    rows = found(survey, **wanted)
    assert len(rows) == 1, survey.findings.to_string()
    return rows.iloc[0]


def faultless(survey):
    return not (survey.findings["severity"] != "note").any()


# --- what a survey is


def test_a_faultless_table_is_kept_whole_in_its_order():
    table = sites(extra=list("hgfedcba"))
    before = table.copy()
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    pd.testing.assert_frame_equal(table, before)
    assert len(survey.findings) == 0
    assert survey.frame.index.name == "row"
    assert survey.frame.index.tolist() == list(range(8))
    assert survey.frame["site"].tolist() == table["site"].tolist()
    assert survey.frame["examined"].tolist() == table["examined"].tolist()
    assert survey.frame["examined"].dtype == np.int64
    assert survey.frame["extra"].tolist() == list("hgfedcba")
    assert survey.frame.crs.to_epsg() == 4326
    assert survey.frame.geometry.x.tolist() == table["lon"].tolist()
    assert (survey.rows_read, survey.n_sites, survey.source, survey.has_unit) == (8, 8, None, False)
    assert len(survey.unplaced) == 0
    assert survey.n_examined == table["examined"].sum()
    assert survey.n_positive == table["positive"].sum()


def test_one_site_with_one_person_is_a_survey():
    table = pd.DataFrame({"examined": [1], "positive": [1], "lon": [36.0], "lat": [-1.0]})
    survey = prevmap.Survey.from_frame(table, **PLACED)
    assert survey.n_sites == 1
    assert len(survey.findings) == 0


def test_a_survey_cannot_be_changed():
    survey = prevmap.Survey.from_frame(sites(), **LINE_UP)
    with pytest.raises(dataclasses.FrozenInstanceError):
        survey.rows_read = 3


def test_rows_are_named_by_the_index_of_the_frame():
    table = put(sites(), 2, examined=None)
    table.index = [f"card {k}" for k in range(8)]
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert only(survey, severity="error")["row"] == "card 2"
    assert "card 2" not in survey.frame.index


def test_repeated_index_labels_are_used_and_said():
    table = pd.concat([sites(4), sites(8).iloc[4:].set_axis(range(4), axis=0)])
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert len(survey.frame) == 8
    assert "0, 1, 2, 3" in only(survey, severity="warning", field="row")["what"]


def test_sites_without_a_column_are_told_apart_by_position_whatever_the_order_of_rows():
    table = sites(6).drop(columns="site")
    table = pd.concat([table, table.iloc[[2]].assign(examined=9)], ignore_index=True)
    survey = prevmap.Survey.from_frame(table, **PLACED)
    assert survey.n_sites == 6
    assert survey.frame.loc[2, "site"] == survey.frame.loc[6, "site"] == "site 3"
    shuffled = prevmap.Survey.from_frame(table.sample(frac=1, random_state=3), **PLACED)
    assert shuffled.frame["site"].sort_index().tolist() == survey.frame["site"].tolist()
    assert "2 rows: 2, 6" in only(survey, field="site", severity="note")["what"]


def test_a_row_without_a_site_name_is_named_by_its_position():
    survey = prevmap.Survey.from_frame(put(sites(), 3, site=" "), **LINE_UP)
    assert survey.frame.loc[3, "site"] == "unnamed site 1"
    assert only(survey, field="site")["severity"] == "warning"


def test_numbers_as_site_names_stay_names():
    table = sites().assign(site=[101.0 + k for k in range(8)])
    assert prevmap.Survey.from_frame(table, **LINE_UP).frame["site"].tolist()[:2] == ["101", "102"]


def test_columns_with_the_names_of_roles_step_aside():
    table = sites().rename(columns={"positive": "hookworm"}).assign(positive=99, unit="north")
    survey = prevmap.Survey.from_frame(table, examined="examined", positive="hookworm", lon="lon", lat="lat")
    assert survey.frame["positive"].tolist() == sites()["positive"].tolist()
    assert survey.frame["positive_in_table"].tolist() == [99] * 8
    assert not survey.has_unit
    assert "unit_in_table" in survey.frame
    assert set(found(survey, severity="note")["field"]) == {"positive", "unit", "site"}


# --- counts


@pytest.mark.parametrize(
    ("cells", "field", "text"),
    [
        ({"examined": None}, "examined", "examined is missing where positive is 2"),
        ({"examined": "", "positive": 0}, "examined", "examined is missing where positive is 0"),
        ({"positive": None}, "positive", "positive is missing where examined is 42"),
        ({"positive": "few"}, "positive", "'few' is not a number"),
        ({"positive": 1.5}, "positive", "1.5 is not a whole number"),
        ({"positive": "1,234"}, "positive", "two ways"),
        ({"positive": 43}, "positive", "positive (43) is greater than examined (42)"),
        ({"positive": -2}, "positive", "positive is negative: -2"),
        ({"examined": -9, "positive": 0}, "examined", "examined is negative: -9"),
        ({"examined": 0, "positive": 1}, "positive", "positive (1) is greater than examined (0)"),
        ({"positive": "12%"}, "positive", "'12%' is a percentage"),
    ],
)
def test_a_row_with_impossible_counts_is_not_used_and_said(cells, field, text):
    survey = prevmap.Survey.from_frame(put(sites(), 2, **cells), **LINE_UP)
    finding = only(survey, row=2)
    assert (finding["site"], finding["field"], finding["severity"]) == ("S2", field, "error")
    assert text in finding["what"]
    assert finding["action"].startswith("row not used")
    assert survey.frame.index.tolist() == [0, 1, 3, 4, 5, 6, 7]
    assert survey.rows_read == 8


def test_leaving_out_zeros_that_lack_examined_is_called_a_bias():
    survey = prevmap.Survey.from_frame(put(sites(), 4, examined=None), **LINE_UP)
    assert "raises the prevalence" in only(survey, row=4)["action"]


@pytest.mark.parametrize("positive", [0, None])
def test_a_row_with_nobody_examined_is_not_used_and_no_error(positive):
    survey = prevmap.Survey.from_frame(put(sites(), 2, examined=0, positive=positive), **LINE_UP)
    assert only(survey, row=2)["severity"] == "warning"
    assert 2 not in survey.frame.index


def test_counts_as_text_are_read():
    table = put(put(sites(), 1, examined=" 41 ", positive="１"), 2, examined=42.0)
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert survey.frame.loc[[1, 2], "examined"].tolist() == [41, 42]
    assert survey.frame.loc[1, "positive"] == 1
    assert faultless(survey)


@pytest.mark.parametrize(
    ("positive", "kind"),
    [
        ([12.5, 33.3, 0.0, 7.1, 50.0, 0.0, 20.4, 10.0], "percentages"),
        ([0.125, 0.333, 0.0, 0.071, 0.5, 0.0, 0.2, 1.0], "fractions"),
        ([12.5, 33.3, 0.0, 7.0, 50.0, 0.0, 20.4, 10.0], "percentages"),
        (["12.5%", "33%", "0%", "7%", "50%", "0%", "20%", "10%"], "percentages"),
    ],
)
def test_a_column_of_shares_is_refused_whole_because_its_whole_numbers_are_shares_too(positive, kind):
    with pytest.raises(prevmap.InputError, match=f"looks like {kind}, not counts") as caught:
        prevmap.Survey.from_frame(sites(positive=positive), **LINE_UP)
    whole = [finding for finding in caught.value.findings if finding.row is None]
    assert "nothing converted" in whole[0].action


def test_one_fraction_among_counts_is_a_slip_of_one_row():
    survey = prevmap.Survey.from_frame(put(sites(20), 5, positive=12.5), **LINE_UP)
    assert len(survey.frame) == 19
    assert only(survey, severity="error")["row"] == 5


def test_whole_numbers_under_a_name_of_percentages_are_used_with_a_warning():
    table = sites().rename(columns={"positive": "prevalence_pct"})
    survey = prevmap.Survey.from_frame(table, **{**LINE_UP, "positive": "prevalence_pct"})
    assert "called like percentages" in only(survey, severity="warning")["what"]
    assert len(survey.frame) == 8


def test_one_hundred_examined_everywhere_is_doubted():
    survey = prevmap.Survey.from_frame(sites(examined=100), **LINE_UP)
    assert "percentage" in only(survey, severity="warning", field="examined")["what"]
    assert len(survey.frame) == 8


def test_exchanged_columns_of_counts_are_proposed():
    table = sites().assign(examined=sites()["positive"], positive=sites()["examined"])
    table.loc[0, ["examined", "positive"]] = [50, 5]
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert survey.frame.index.tolist() == [0]
    assert "exchanged?" in only(survey, severity="warning", field="positive")["what"]


def test_a_row_of_totals_is_not_a_site():
    table = pd.concat([sites(), pd.DataFrame({"examined": [348], "positive": [12]})], ignore_index=True)
    survey = prevmap.Survey.from_frame(table.assign(unit="north"), **LINE_UP, unit="unit")
    assert "row of totals (348 examined)" in only(survey, row=8)["what"]
    assert len(survey.unplaced) == 0


def test_positives_only_reporting_is_doubted_by_the_zeros_that_should_be_there():
    some = sites(40, examined=20, positive=[1, 1, 2, 1] * 10)
    warning = only(prevmap.Survey.from_frame(some, **LINE_UP), severity="warning")
    # Overall 1.25 of 20: a site has none with probability 0.9375^20 = 0.2751, 11.0 of 40 sites;
    # none of 40 with (1 - 0.2751)^40 = 2.6e-6.
    assert "11.0 would be expected" in warning["what"]
    assert "2.6e-06" in warning["what"]
    with_zero = some.assign(positive=[0, *some["positive"][1:]])
    assert faultless(prevmap.Survey.from_frame(with_zero, **LINE_UP))
    high = sites(40, examined=20, positive=[9, 10, 11, 8] * 10)
    assert faultless(prevmap.Survey.from_frame(high, **LINE_UP))


def overdispersed(rng, n):
    """Positives of n schools whose prevalence varies widely, 40 examined in each."""
    return rng.binomial(40, rng.beta(0.8, 5.2, n))


def test_positives_only_reporting_is_doubted_where_prevalence_varies_between_sites(rng):
    positive = overdispersed(rng, 200)
    some = positive[positive > 0]
    warning = only(
        prevmap.Survey.from_frame(sites(len(some), examined=40, positive=some), **LINE_UP),
        severity="warning",
        field="positive",
    )
    once, twice = (some == 1).sum(), (some == 2).sum()
    # One common prevalence would not explain it: it expects hardly a zero in these schools.
    assert len(some) * (1 - some.mean() / 40) ** 40 < 1.0
    assert f"with {once} sites with one positive and {twice} with two" in warning["what"]
    expected = once * (once - 1) / (2 * (twice + 1))
    assert f"about {expected:.0f} or more would be expected" in warning["what"]
    assert expected < 2 * (positive == 0).sum()
    assert faultless(prevmap.Survey.from_frame(sites(200, examined=40, positive=positive), **LINE_UP))


def test_surveys_of_high_prevalence_without_a_zero_are_seldom_doubted(rng):
    doubted = 0
    for _ in range(200):
        positive = rng.binomial(30, rng.beta(4.0, 6.0, 60))
        if (positive > 0).all():
            doubted += unseen_zeros(positive) >= FEWEST_UNSEEN
    assert doubted <= 4
    varied = sites(12, examined=30, positive=[1, 2, 5, 9, 12, 14, 1, 20, 3, 8, 2, 11])
    assert faultless(prevmap.Survey.from_frame(varied, **LINE_UP))


def test_zeros_are_counted_by_site_and_not_by_row():
    table = sites(40, examined=20, positive=[1, 0] * 20, site=[f"S{k // 2}" for k in range(40)])
    table["lon"] = table["lon"].where(table.index % 2 == 0, table["lon"].shift())
    table["lat"] = table["lat"].where(table.index % 2 == 0, table["lat"].shift())
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert "none of the 20 sites" in only(survey, severity="warning")["what"]


# --- positions


def test_a_row_without_coordinates_is_an_error_without_a_unit_and_unplaced_with_one():
    table = put(put(sites(unit="north"), 1, lon=None, lat=None), 2, lon="", lat="", unit=None)
    survey = prevmap.Survey.from_frame(table, **LINE_UP, unit="unit")
    assert survey.unplaced.index.tolist() == [1]
    assert survey.unplaced.loc[1, ["site", "examined", "positive", "unit"]].tolist() == ["S1", 41, 1, "north"]
    assert "geometry" not in survey.unplaced.columns
    assert only(survey, row=1)["severity"] == "note"
    assert only(survey, row=2)["severity"] == "error"
    assert survey.has_unit
    assert survey.frame["unit"].tolist() == ["north"] * 6


@pytest.mark.parametrize(
    ("cells", "field", "text"),
    [
        ({"lon": None}, "lon", "lon is missing, lat is -1.24"),
        ({"lat": "-"}, "lat", "lat is missing, lon is 36.1"),
        ({"lat": 95.0}, "lat", "lat is 95, outside -90 to 90"),
        ({"lon": 361.0}, "lon", "lon is 361, outside -180 to 180"),
        ({"lon": "the mill"}, "lon", "'the mill' is not a coordinate"),
        ({"lon": 0, "lat": 0}, "position", "the position is (0, 0)"),
        ({"lon": 512345.0, "lat": 9812000.0}, "lat", "projected coordinate"),
        ({"lon": -1.08, "lat": 36.1}, "position", "with lon and lat exchanged"),
        ({"lat": "36°06'E"}, "lat", "exchanged?"),
        ({"lon": -36.1}, "position", "with the sign of lon changed"),
        ({"lon": "36 6"}, "lon", "two ways"),
    ],
)
def test_impossible_or_exchanged_coordinates_are_proposed_and_not_used(cells, field, text):
    survey = prevmap.Survey.from_frame(put(sites(unit="north"), 2, **cells), **LINE_UP, unit="unit")
    finding = only(survey, row=2)
    assert (finding["field"], finding["severity"]) == (field, "error")
    assert text in finding["what"]
    assert 2 not in survey.frame.index
    assert len(survey.unplaced) == 0


def test_an_exchange_is_proposed_only_where_it_leads_to_the_other_sites():
    table = sites().assign(lon=sites()["lon"] + 60)
    wrong = prevmap.Survey.from_frame(put(table, 2, lon=-1.08, lat=96.1), **LINE_UP)
    assert "(lon 96.1, lat -1.08)" in only(wrong, row=2)["what"]
    typo = prevmap.Survey.from_frame(put(table, 2, lat=91.08), **LINE_UP)
    assert "exchanged" not in only(typo, row=2)["what"]


def test_an_outlier_that_no_slip_explains_is_used_with_a_warning():
    survey = prevmap.Survey.from_frame(put(sites(), 2, lat=12.0), **LINE_UP)
    assert "far from the other sites" in only(survey, row=2, severity="warning")["what"]
    assert 2 in survey.frame.index


def test_sites_along_a_coast_with_islands_are_no_slips():
    lon = np.concatenate([np.linspace(8.0, 12.0, 30), [3.5, 15.0]])
    lat = np.concatenate([np.linspace(7.0, 13.0, 30), [6.0, 14.0]])
    assert faultless(prevmap.Survey.from_frame(sites(32, lon=lon, lat=lat), **LINE_UP))


def test_a_whole_table_with_exchanged_columns_is_suspected():
    table = sites().assign(lon=sites()["lat"], lat=np.linspace(88.0, 96.0, 8))
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    whole = survey.findings[survey.findings["row"].isna() & (survey.findings["severity"] == "warning")]
    assert any(
        "6 of 8 positions are possible only with lon and lat exchanged" in what for what in whole["what"]
    )


def test_columns_named_for_the_other_coordinate_are_doubted():
    table = sites().rename(columns={"lon": "latitude", "lat": "longitude"})
    survey = prevmap.Survey.from_frame(table, **{**LINE_UP, "lon": "latitude", "lat": "longitude"})
    assert "exchanged" in only(survey, field="position", severity="warning")["action"]


def test_projected_coordinates_keep_their_system():
    table = sites().assign(lon=np.linspace(250e3, 260e3, 8), lat=np.linspace(9.88e6, 9.89e6, 8))
    survey = prevmap.Survey.from_frame(table, **NAMES, x="lon", y="lat", crs="EPSG:32737", site="site")
    assert survey.frame.crs.to_epsg() == 32737
    assert len(survey.findings) == 0
    mixed = prevmap.Survey.from_frame(
        put(put(table, 2, lon=36.1, lat=-1.08), 3, lon=9.88e6, lat=255e3),
        **NAMES,
        x="lon",
        y="lat",
        crs="EPSG:32737",
        site="site",
    )
    assert "look like degrees among projected coordinates" in only(mixed, row=2)["what"]
    assert "x and y exchanged" in only(mixed, row=3)["what"]
    assert len(mixed.frame) == 6


def test_kilometres_in_a_system_of_metres_are_doubted():
    table = sites().assign(lon=np.linspace(250, 260, 8), lat=np.linspace(9880, 9890, 8))
    survey = prevmap.Survey.from_frame(table, **NAMES, x="lon", y="lat", crs="EPSG:32737", site="site")
    warning = only(survey, severity="warning", field="position")
    assert "8 of 8 positions" in warning["what"]
    assert "kilometres" in warning["action"]


def test_a_column_of_coordinate_systems_with_another_system_in_one_row():
    table = sites(crs=["EPSG:4326"] * 7 + ["EPSG:32737"])
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert "'EPSG:32737'" in only(survey, field="crs", severity="error")["what"]
    assert 7 not in survey.frame.index
    datum = prevmap.Survey.from_frame(sites(datum=["WGS84"] * 7 + ["old survey"]), **LINE_UP)
    assert "'old survey' cannot be looked up" in only(datum, field="crs", severity="warning")["action"]
    every = prevmap.Survey.from_frame(sites(epsg=4210), **LINE_UP)
    assert "states '4210' in all rows" in only(every, field="crs", severity="warning")["what"]
    assert len(every.frame) == 8
    assert faultless(prevmap.Survey.from_frame(sites(epsg=4326), **LINE_UP))


def test_degrees_and_minutes_are_converted_and_noted():
    survey = prevmap.Survey.from_frame(put(sites(), 2, lon="36°06'00\"E", lat="1°04'48\"S"), **LINE_UP)
    point = survey.frame.geometry[2]
    assert (point.x, point.y) == pytest.approx((36.1, -1.08), abs=1e-12)  # tenths and minutes in binary
    assert found(survey, row=2)["severity"].tolist() == ["note", "note"]
    assert "36°06'00\"E" in found(survey, row=2)["what"].iloc[0]
    many = sites(30).assign(lon=[f"36°{k:02d}'E" for k in range(30)])
    assert "30 cells" in only(prevmap.Survey.from_frame(many, **LINE_UP), field="lon")["what"]


# --- rows and sites


def test_identical_rows_are_kept_and_said():
    table = pd.concat([sites(), sites().iloc[[3]]], ignore_index=True)
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert len(survey.frame) == 9
    finding = only(survey, severity="warning")
    assert finding["row"] == 8
    assert "identical to row 3" in finding["what"]
    assert "kept and pooled" in finding["action"]
    assert "2 rows: 3, 8" in only(survey, severity="note")["what"]


def test_rows_that_differ_in_any_column_are_not_identical():
    table = pd.concat(
        [sites(card=range(8)), sites(card=range(8)).iloc[[3]].assign(card=99)], ignore_index=True
    )
    assert faultless(prevmap.Survey.from_frame(table, **LINE_UP))


def test_one_row_per_person_is_not_a_list_of_repeats():
    table = sites(60, examined=1, positive=[0, 1, 0] * 20, site="S", lon=36.0, lat=-1.0)
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert faultless(survey)
    assert "every row is one person" in survey.findings["what"].str.cat()


def test_one_site_at_several_positions_keeps_each():
    table = put(sites(), 4, site="S2")
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    finding = only(survey, severity="warning")
    assert (finding["row"], finding["site"], finding["field"]) == (4, "S2", "site")
    # From (36.1, -1.24) to (36.2, -1.16): 11.13 km by 8.85 km on the ellipsoid.
    assert "site has 2 positions; row 4 is 14.2 km from row 2" in finding["what"]
    assert survey.frame.geometry.x[4] == 36.2


def test_several_sites_at_one_position_are_noted():
    survey = prevmap.Survey.from_frame(put(sites(), 4, lon=36.1, lat=sites()["lat"][2]), **LINE_UP)
    assert "sites share one position: S2, S4" in only(survey, severity="note")["what"]
    assert survey.n_sites == 8


def test_many_findings_of_one_kind_become_one():
    table = pd.concat([sites(30), sites(30).assign(examined=9)], ignore_index=True)
    survey = prevmap.Survey.from_frame(table, **LINE_UP)
    assert "30 sites have several rows: S0, S1, S2, S3, S4 and 25 more" in only(survey, field="site")["what"]


def test_weights_must_be_numbers_above_zero():
    table = put(put(put(sites(w=1.5), 1, w=0), 2, w="x"), 3, w=None)
    survey = prevmap.Survey.from_frame(table, **LINE_UP, weight="w")
    assert found(survey, field="weight", severity="error")["row"].tolist() == [1, 2, 3]
    assert survey.frame["weight"].tolist() == [1.5] * 5


# --- notes


def test_notes_print_their_value_or_that_they_are_not_stated():
    about = prevmap.SurveyNotes(indicator="any infection", ages=(5, 14))
    survey = prevmap.Survey.from_frame(sites(), **LINE_UP, about=about)
    assert survey.noted("indicator") == "any infection"
    assert survey.noted("ages") == "5 to 14 years"
    assert survey.noted("test") == "not stated"
    assert survey.row_values("indicator") is None
    with pytest.raises(prevmap.InputError, match="'tests' is not a note of a survey"):
        survey.noted("tests")


def test_a_note_that_is_a_column_is_read_row_by_row_and_a_mixture_is_a_warning():
    table = sites(method=["smear"] * 5 + ["strip"] * 2 + [None])
    survey = prevmap.Survey.from_frame(table, **LINE_UP, about=prevmap.SurveyNotes(test="method"))
    assert survey.noted("test") == "mixed: not stated, smear, strip"
    assert survey.row_values("test").tolist() == [*table["method"][:7], None]
    finding = only(survey, field="test")
    assert finding["severity"] == "warning"
    assert "smear (5 rows), strip (2 rows)" in finding["what"]
    assert "accuracy of each test" in finding["action"]
    same = prevmap.Survey.from_frame(
        sites(method="smear"), **LINE_UP, about=prevmap.SurveyNotes(test="method")
    )
    assert same.noted("test") == "smear"
    assert len(same.findings) == 0


@pytest.mark.parametrize("note", ["indicator", "ages", "test", "sampling"])
def test_a_telling_column_is_watched_even_where_nobody_names_it(note):
    survey = prevmap.Survey.from_frame(sites(**{note: ["a"] * 4 + ["b"] * 4}), **LINE_UP)
    assert only(survey, severity="warning")["field"] == note
    assert survey.noted(note) == "not stated"


def test_a_note_equal_to_the_column_of_sites_is_a_value():
    table = sites().rename(columns={"site": "school"})
    about = prevmap.SurveyNotes(sampling="school")
    survey = prevmap.Survey.from_frame(table, **PLACED, site="school", about=about)
    assert survey.noted("sampling") == "school"
    assert survey.row_values("sampling") is None


def test_ages_may_be_two_columns():
    table = sites(young=[5] * 6 + [1] * 2, old=14)
    survey = prevmap.Survey.from_frame(table, **LINE_UP, about=prevmap.SurveyNotes(ages=("young", "old")))
    assert survey.noted("ages") == "mixed: 1 to 14, 5 to 14"
    with pytest.raises(prevmap.InputError, match=r"no column 'yong'.*Did you mean 'young'"):
        prevmap.Survey.from_frame(table, **LINE_UP, about=prevmap.SurveyNotes(ages=("yong", "old")))


@pytest.mark.parametrize(
    ("dates", "severity"),
    [(["2026-03-01"] * 7 + ["2026-04-20"], "note"), (["2019"] * 4 + ["2026-03"] * 4, "warning")],
)
def test_dates_of_one_season_are_noted_and_years_apart_are_a_warning(dates, severity):
    survey = prevmap.Survey.from_frame(sites(day=dates), **LINE_UP, about=prevmap.SurveyNotes(date="day"))
    assert only(survey, field="date")["severity"] == severity


@pytest.mark.parametrize(
    "wrong",
    [{"ages": (14, 5)}, {"ages": (5,)}, {"ages": 5}, {"ages": (-1, 5)}, {"test": 3}, {"indicator": " "}],
)
def test_notes_of_another_kind_are_refused(wrong):
    with pytest.raises(prevmap.InputError, match=f"SurveyNotes: {next(iter(wrong))} is"):
        prevmap.SurveyNotes(**wrong)


# --- leaving rows out


def test_rows_left_out_by_the_analyst_stay_in_the_ledger():
    table = sites(method=["smear"] * 7 + ["strip"], unit="north")
    table = put(table, 6, lon=None, lat=None)
    about = prevmap.SurveyNotes(test="method")
    survey = prevmap.Survey.from_frame(table, **LINE_UP, unit="unit", about=about)
    fewer = survey.without([6, 7], "team 4 used another test")
    assert len(survey.frame) == 7
    assert fewer.frame.index.tolist() == [0, 1, 2, 3, 4, 5]
    assert len(fewer.unplaced) == 0
    noted = found(fewer, action="left out by the analyst: team 4 used another test")
    assert noted["row"].tolist() == [6, 7]
    assert set(noted["severity"]) == {"note"}
    assert fewer.noted("test") == "smear"
    assert len(found(fewer, field="test")) == 0
    assert fewer.rows_read == 8


def test_leaving_out_needs_known_rows_a_reason_and_something_left():
    survey = prevmap.Survey.from_frame(sites(), **LINE_UP)
    assert len(survey.without(3, "flooded").frame) == 7
    with pytest.raises(prevmap.InputError, match="99 is not a row in use"):
        survey.without([1, 99], "flooded")
    with pytest.raises(prevmap.InputError, match="a reason is expected"):
        survey.without([1], " ")
    with pytest.raises(prevmap.InputError, match="no row with a position would remain"):
        survey.without(range(8), "flooded")


# --- refusals


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"examined": "examinde"}, "the frame: there is no column 'examinde'.*Did you mean 'examined'"),
        ({"positive": "examined"}, "examined= and positive= are the same column 'examined'"),
        ({"lat": None}, "lon='lon' is given without lat="),
        ({"lon": None, "lat": None}, "name the columns of coordinates"),
        ({"x": "lon", "y": "lat"}, "same column"),
        ({"x": "site", "y": "extra"}, "as well as x= and y="),
        ({"lon": None, "lat": None, "x": "lon", "y": "lat"}, "need the coordinate system: crs="),
        (
            {"lon": None, "lat": None, "x": "lon", "y": "lat", "crs": "EPSG:99"},
            "crs='EPSG:99' is not a known",
        ),
        ({"lon": None, "lat": None, "x": "lon", "y": "lat", "crs": "EPSG:4978"}, "neither geographic nor"),
        ({"crs": "EPSG:32737"}, "lon= and lat= are degrees"),
        ({"unit": 3}, "unit=3: the name of a column is expected"),
        ({"about": "smear"}, "about= is str"),
    ],
)
def test_arguments_that_do_not_go_together_are_refused(arguments, message):
    with pytest.raises(prevmap.InputError, match=message):
        prevmap.Survey.from_frame(sites(), **{**PLACED, **arguments})


def test_a_table_without_a_usable_row_is_refused_with_its_findings():
    with pytest.raises(prevmap.InputError, match="none of the 8 rows can be used") as caught:
        prevmap.Survey.from_frame(sites(positive=99), **LINE_UP)
    assert "row 0, site S0, positive: positive (99) is greater than examined (40)" in str(caught.value)
    assert "3 more" in str(caught.value) or "4 more" in str(caught.value)
    assert len([finding for finding in caught.value.findings if finding.severity == "error"]) == 8
    with pytest.raises(prevmap.InputError, match="no row has a usable position; 8 of 8 have a unit only"):
        prevmap.Survey.from_frame(sites(lon=None, lat=None, unit="north"), **LINE_UP, unit="unit")


def test_frames_that_are_no_tables_are_refused():
    with pytest.raises(prevmap.InputError, match="there are no rows"):
        prevmap.Survey.from_frame(sites().iloc[:0], **LINE_UP)
    with pytest.raises(prevmap.InputError, match="a DataFrame or GeoDataFrame is expected, not dict"):
        prevmap.Survey.from_frame({"examined": [1]}, **LINE_UP)
    twice = pd.concat([sites(), sites()[["lon"]]], axis=1)
    with pytest.raises(prevmap.InputError, match="found more than once: 'lon'"):
        prevmap.Survey.from_frame(twice, **LINE_UP)


# --- geometry


def test_a_geodataframe_brings_its_positions():
    points = gpd.points_from_xy(sites()["lon"], sites()["lat"])
    frame = gpd.GeoDataFrame(sites().drop(columns=["lon", "lat"]), geometry=points, crs="EPSG:4326")
    frame = frame.rename_geometry("where")
    survey = prevmap.Survey.from_frame(frame, **NAMES, site="site")
    assert survey.frame.geometry.name == "geometry"
    assert survey.frame.geometry.x.tolist() == sites()["lon"].tolist()
    assert len(survey.findings) == 0
    with pytest.raises(prevmap.InputError, match="names no coordinate system"):
        prevmap.Survey.from_frame(frame.set_crs(None, allow_override=True), **NAMES)
    with pytest.raises(prevmap.InputError, match="crs= says 'WGS 84 / UTM zone 37S'"):
        prevmap.Survey.from_frame(frame, **NAMES, crs="EPSG:32737")
    named = prevmap.Survey.from_frame(frame.set_crs(None, allow_override=True), **NAMES, crs=4326)
    assert named.frame.crs.to_epsg() == 4326


def test_empty_geometries_are_missing_positions():
    points = [shapely.Point(36 + 0.1 * k, -1) for k in range(6)] + [None, shapely.Point()]
    frame = gpd.GeoDataFrame(sites(unit=["north"] * 7 + [None]), geometry=points, crs="EPSG:4326")
    survey = prevmap.Survey.from_frame(frame, **NAMES, unit="unit")
    assert survey.unplaced.index.tolist() == [6]
    assert only(survey, severity="error")["row"] == 7


def test_areas_are_placed_by_a_point_inside_them():
    boxes = [shapely.box(36 + k, -1, 36.9 + k, 0) for k in range(7)]
    horseshoe = shapely.Polygon([(50, 0), (53, 0), (53, 3), (52, 3), (52, 1), (51, 1), (51, 3), (50, 3)])
    frame = gpd.GeoDataFrame(sites(), geometry=[*boxes, horseshoe], crs="EPSG:4326")
    survey = prevmap.Survey.from_frame(frame, **NAMES, site="site")
    assert horseshoe.contains(survey.frame.geometry.iloc[7])
    assert not horseshoe.contains(horseshoe.centroid)
    assert (
        "8 rows have a shape instead of a point (Polygon)"
        in only(survey, severity="note", field="position")["what"]
    )


# --- printing


def test_a_survey_prints_what_it_holds():
    table = put(sites(), 2, positive=99)
    survey = prevmap.Survey.from_frame(table, **LINE_UP, about=prevmap.SurveyNotes(test="smear"))
    text = repr(survey)
    assert "Survey of 7 sites" in text
    assert "7 of 8 read" in text
    assert "10 (3.3 %)" in text
    assert "test: smear" in text
    assert "not stated: indicator, ages, sampling, date" in text
    assert "1 error" in text


def test_cells_of_the_table_cannot_write_markup():
    table = put(sites(), 2, site="<script>alert(1)</script>", positive="<b>9</b>")
    about = prevmap.SurveyNotes(test="<i>smear</i>")
    page = prevmap.Survey.from_frame(table, **LINE_UP, about=about)._repr_html_()
    assert "&lt;script&gt;" in page
    assert "&lt;b&gt;" in page
    assert "&lt;i&gt;smear" in page
    assert not any(tag in page for tag in ("<script", "<b>9", "<i>"))


# --- invariances

CELLS = st.one_of(
    st.integers(min_value=-3, max_value=120),
    st.sampled_from([None, "", "x", "12 ", "1,234", 2.5, float("nan"), "40%", True, "１２"]),
)
PLACES = st.one_of(
    st.floats(min_value=-200, max_value=200),
    st.sampled_from([None, "", "36°6'E", "1°6'S", "36,5", 0, 500000.0, "x", float("inf")]),
)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(CELLS, CELLS, PLACES, PLACES, st.sampled_from(["n", "s", None])), min_size=1, max_size=9
    )
)
def test_every_row_is_used_or_has_a_finding_that_says_why_not(rows):
    table = pd.DataFrame(rows, columns=["examined", "positive", "lon", "lat", "unit"], dtype=object)
    try:
        survey = prevmap.Survey.from_frame(table, **PLACED, unit="unit")
    except prevmap.InputError as caught:
        refused = caught.findings
    else:
        refused = None
    if refused is not None:
        said = {finding.row for finding in refused if finding.severity != "note"}
        noted = {finding.row for finding in refused if "unit's direct estimate" in finding.action}
        assert None in said or said | noted >= set(table.index)
        return
    used = set(survey.frame.index) | set(survey.unplaced.index)
    findings = survey.findings
    errors = set(findings.loc[findings["severity"] == "error", "row"])
    nobody = set(findings.loc[findings["what"].str.startswith("examined is 0"), "row"])
    assert used.isdisjoint(errors)
    assert used | errors | nobody == set(table.index)
    frame = survey.frame
    assert (
        (frame["positive"] >= 0) & (frame["positive"] <= frame["examined"]) & (frame["examined"] > 0)
    ).all()
    assert np.isfinite(frame.geometry.x).all()
    assert (frame.geometry.y.abs() <= 90).all()
    assert survey.rows_read == len(rows)


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(12)), st.data())
def test_the_order_of_rows_changes_no_row(order, data):
    faults = data.draw(
        st.lists(st.tuples(st.integers(0, 11), st.sampled_from(["lon", "positive"])), max_size=4)
    )
    table = sites(12).astype(object)
    for at, name in faults:
        table.loc[at, name] = {"lon": -36.3, "positive": 99}[name]
    first = prevmap.Survey.from_frame(table, **LINE_UP)
    second = prevmap.Survey.from_frame(table.iloc[list(order)], **LINE_UP)
    pd.testing.assert_frame_equal(first.frame, second.frame.sort_index())
    single = first.findings.dropna(subset=["row"])
    again = second.findings.dropna(subset=["row"])
    assert sorted(map(tuple, single.to_numpy())) == sorted(map(tuple, again.to_numpy()))


def test_the_origin_of_a_projected_system_is_a_place_where_sites_lie_round_it():
    crs = "+proj=laea +lat_0=5 +lon_0=20 +datum=WGS84 +units=m"
    table = {"examined": [10, 20, 30], "positive": [1, 2, 3]}

    def read(x, y):
        frame = gpd.GeoDataFrame(table, geometry=gpd.points_from_xy(x, y), crs=crs)
        return prevmap.Survey.from_frame(frame, examined="examined", positive="positive")

    near = read([0.0, 4e3, -5e3], [0.0, 3e3, 2e3])
    assert len(near.frame) == 3
    assert near.findings["severity"].tolist() == ["warning"]
    far = read([0.0, 504e3, 505e3], [0.0, 403e3, 402e3])
    assert len(far.frame) == 2
    assert "not taken" in far.findings["what"].iloc[0]
