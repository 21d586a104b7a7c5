"""The whole chain, by the command line, on open data: births and sudden infant deaths of 100 counties.

Cressie and Read 1985; Cressie and Chan 1989. Totals 1974-78: 667 deaths among 329,962 births.
"""

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rasterio
from scipy.stats import beta
from tolerances import MONTE_CARLO_ERRORS

import prevmap
from prevmap.cli import main

NC = Path(__file__).parent / "data" / "nc"
BIRTHS, DEATHS = 329_962, 667


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    study = tmp_path_factory.mktemp("counties") / "nc"
    shutil.copytree(NC, study)
    assert main(["run", str(study / "study.toml"), "--quiet"]) == 0
    return study / "results"


@pytest.fixture(scope="module")
def units(folder):
    return pd.read_csv(folder / "share" / "units.csv").set_index("unit")


@pytest.fixture(scope="module")
def estimates():
    """The same study in Python, by public names."""
    notes = prevmap.SurveyNotes(indicator="sudden infant death among births 1974-78")
    columns = {"examined": "births_74", "positive": "sids_74", "lon": "lon", "lat": "lat", "site": "county"}
    survey = prevmap.read_survey(NC / "nc_sids.csv", unit="county", about=notes, **columns)
    region = prevmap.read_region(NC / "nc_counties_sids.geojson", name="NAME", code="FIPS")
    model = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=15))
    return model.fit(survey, region=region, seed=1).units(region.grid(cell_km=15), seed=1)


def test_every_output_is_written(folder):
    for name in ("report.html", "units.csv", "units.gpkg", "prevalence.tif"):
        assert (folder / "share" / name).stat().st_size > 1000
    assert list((folder / "share" / "figures").glob("*.png"))
    for name in ("sites_checked.csv", "findings.csv", "record.json"):
        assert (folder / "internal" / name).is_file()
    with rasterio.open(folder / "share" / "prevalence.tif") as raster:
        mean = raster.read(1, masked=True)
        assert "mean" in raster.descriptions[0]
    assert 0.0005 < mean.min() < DEATHS / BIRTHS < mean.max() < 0.01


def test_totals_are_those_of_the_literature(folder, units):
    assert len(units) == 100
    numbers = json.loads((folder / "internal" / "record.json").read_text(encoding="utf-8"))["numbers"]
    assert numbers["survey.sites"] == 100
    assert numbers["survey.examined"] == BIRTHS
    assert numbers["survey.positive"] == DEATHS
    report = (folder / "share" / "report.html").read_text(encoding="utf-8")
    assert "sudden infant death among births 1974-78" in report


def test_the_overall_rate_is_the_crude_rate_within_its_interval(estimates):
    births = pd.read_csv(NC / "nc_sids.csv").set_index("county")["births_74"]
    weight = births[estimates.frame["unit"]].to_numpy()
    overall = estimates.draw_matrix @ weight / weight.sum()
    low, high = np.quantile(overall, [0.025, 0.975])
    assert low < DEATHS / BIRTHS < high
    # Exact binomial limits of the crude rate: the model may not claim to know the total much better or worse.
    exact_low, exact_high = beta.ppf(
        [0.025, 0.975], [DEATHS, DEATHS + 1], [BIRTHS - DEATHS + 1, BIRTHS - DEATHS]
    )
    assert 0.7 < (high - low) / (exact_high - exact_low) < 1.6


def test_anson_stands_out_and_is_drawn_towards_its_neighbours(units):
    # 15 deaths among 1570 births: the well known high county of these years (Cressie 1991).
    anson = units.loc["Anson"]
    assert (anson["examined"], anson["positive"]) == (1570, 15)
    assert anson["direct_estimate"] == pytest.approx(15 / 1570)
    assert units["direct_estimate"].idxmax() == "Anson"
    assert 1.3 * DEATHS / BIRTHS < anson["mean"] < 15 / 1570
    assert anson["decision"] == "above"
    # Its neighbours are not high: no other county of some size is drawn back as far.
    drawn_back = (units["direct_estimate"] / units["mean"])[units["examined"] >= 1000]
    assert drawn_back.idxmax() == "Anson"
    # From memory of the same literature: the north-eastern counties are the other high group.
    assert {"Northampton", "Halifax", "Hertford"} <= set(units["mean"].nlargest(6).index)


def test_estimates_are_less_spread_than_crude_rates(units):
    own = units[units["examined"] > 0]
    assert own["mean"].std() < 0.7 * own["direct_estimate"].std()
    assert own["mean"].corr(own["direct_estimate"]) > 0.5
    few = own["examined"] < 1000
    shrinkage = (own["mean"] - DEATHS / BIRTHS).abs() / (own["direct_estimate"] - DEATHS / BIRTHS).abs()
    assert shrinkage[few].median() < shrinkage[~few].median()


def test_positions_outside_their_county_are_found_and_kept(folder, units):
    findings = pd.read_csv(folder / "internal" / "findings.csv")
    for county in ("Dare", "Brunswick", "Clay"):
        named = findings[findings["site"] == county]
        assert len(named) >= 1, county
        assert "error" not in set(named["severity"]), county
    clay = findings[findings["site"] == "Clay"]
    assert clay["what"].str.contains("Cherokee").any()
    assert (findings["severity"] == "error").sum() == 0


def test_python_gives_the_numbers_of_the_study_file(units, estimates):
    frame = estimates.frame.set_index("unit").loc[units.index]
    for column in ("mean", "lower95", "upper95"):
        # The study may have drawn more often for units near the cut-off; a limit errs more than a mean does.
        error = MONTE_CARLO_ERRORS * (1 if column == "mean" else 4) * frame["monte_carlo_error"]
        assert ((frame[column] - units[column]).abs() < error).all(), column
