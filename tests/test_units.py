"""Units: weights, joint draws, raw data beside them, and the demonstration's known truth."""

from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
from scipy.stats import binom
from shapely.geometry import box
from test_surface import CRS, square_region, survey
from tolerances import MONTE_CARLO_ERRORS

import prevmap
from prevmap.model.direct import weighted_proportion, wilson_interval
from prevmap.model.surface import draws_per_component

DEMO = Path(__file__).parents[1] / "demo_data"


# Wilson (1927); 81/263 as tabled by Newcombe (1998, Statistics in Medicine 17:857-872, table I); the others
# computed independently.
@pytest.mark.parametrize(
    ("y", "n", "lower", "upper"),
    [
        (81, 263, 0.255288519878, 0.366209576983),
        (15, 148, 0.062386399531, 0.160487241723),
        (0, 20, 0.0, 0.161125158053),
        (1, 29, 0.006113214293, 0.171755218793),
        (3, 10, 0.107791267406, 0.603221852539),
        (10, 100, 0.055229137061, 0.174365661505),
    ],
)
def test_wilson_interval(y, n, lower, upper):
    got = wilson_interval(y, n)
    assert float(got[0]) == pytest.approx(lower, abs=1e-11)  # 12 digits printed
    assert float(got[1]) == pytest.approx(upper, abs=1e-11)


def test_wilson_interval_at_the_ends_and_without_anybody():
    lower, upper = wilson_interval([0, 20, 0], [20, 20, 0])
    assert lower[0] == 0.0
    assert upper[1] == 1.0
    assert np.isnan(lower[2])
    z2 = 1.95996398454**2
    assert upper[0] == pytest.approx(z2 / (20 + z2), rel=1e-10)  # closed form
    k = np.arange(31)
    low, high = wilson_interval(k, np.full(31, 30))
    coverage = binom.pmf(k, 30, 0.2)[(low <= 0.2) & (high >= 0.2)].sum()
    assert 0.93 < coverage < 0.97  # Brown, Cai & DasGupta (2001): close to nominal where Wald is not


def test_weighted_proportion_uses_the_effective_number_of_kish():
    # Kish (1965), weights 1, 1, 2, 4 for one person each: effective number 2.909090909091.
    share, effective = weighted_proportion(
        np.array([1.0, 0, 0, 1]), np.ones(4), np.array([1.0, 1.0, 2.0, 4.0])
    )
    assert effective == pytest.approx(2.909090909091, abs=1e-12)
    assert share == pytest.approx(5 / 8)
    assert np.isnan(weighted_proportion(np.zeros(0), np.zeros(0), np.zeros(0))[0])


def test_draws_are_split_in_proportion():
    np.testing.assert_array_equal(draws_per_component(np.array([0.5, 0.3, 0.2]), 11), [6, 3, 2])
    assert draws_per_component(np.array([0.999, 0.001]), 100).sum() == 100


@pytest.fixture(scope="module")
def fit(tmp_path_factory):
    region = square_region(tmp_path_factory.mktemp("units"), units=3)
    return prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=4.0)).fit(survey(), region=region)


def test_a_unit_of_one_cell_gets_that_cells_exceedance(fit, tmp_path):
    """Cells decide nothing by themselves, but a unit that is one cell must not contradict it."""
    shapes = [box(20e3, 20e3, 24e3, 24e3), box(0, 0, 20e3, 20e3)]
    path = tmp_path / "small.gpkg"
    gpd.GeoDataFrame({"name": ["one cell", "other"]}, geometry=shapes, crs=CRS).to_file(path)
    small = prevmap.read_region(path, name="name")
    grid = small.grid(cell_km=4)
    units = fit.units(grid, draws=8_000)
    surface = fit.predict(grid)
    own = grid.pair_cell[grid.pair_unit == 0]
    assert own.size == 1
    for threshold in (0.05, 0.1, 0.2, 0.3):
        cell = surface.exceedance(threshold)[own[0]]
        error = units.exceedance_error(threshold)["one cell"]
        assert abs(units.exceedance(threshold)["one cell"] - cell) < MONTE_CARLO_ERRORS * error


def test_unit_means_are_weighted_means_of_cells(fit):
    grid = fit.region.grid(cell_km=5)
    units = fit.units(grid, draws=8_000)
    assert units.weighting == "area"
    surface = fit.predict(grid)
    for u in range(3):
        at = grid.pair_unit == u
        expected = np.average(surface.mean[grid.pair_cell[at]], weights=grid.pair_coverage[at])
        row = units.frame.iloc[u]
        assert abs(row["mean"] - expected) < MONTE_CARLO_ERRORS * row["monte_carlo_error"]
        # A mean over cells varies less than its cells do: the exceedance of a unit is not their average.
        assert row["sd"] < np.average(surface.sd[grid.pair_cell[at]], weights=grid.pair_coverage[at])


def test_people_are_the_weights_where_they_are_known(fit, tmp_path):
    path = tmp_path / "people.tif"
    people = np.zeros((60, 60), dtype="float32")
    people[:, 40:45] = 10.0  # all of the last unit's people live in its western strip
    people[:, :20] = 2.0
    with rasterio.open(
        path, "w", driver="GTiff", height=60, width=60, count=1, dtype="float32", crs=CRS,
        transform=rasterio.Affine(1000, 0, 0, 0, -1000, 60e3),
    ) as target:  # fmt: skip
        target.write(people, 1)
    grid = fit.region.grid(cell_km=5, population=prevmap.read_population(path, kind="counts", ages=(5, 14)))
    units = fit.units(grid, draws=4_000)
    assert units.weighting == "population"
    np.testing.assert_allclose(units.frame["population"], [2400.0, 0.0, 3000.0], rtol=1e-6)  # float32 raster
    surface = fit.predict(grid)
    strip = (grid.xy_km[:, 0] > 40) & (grid.xy_km[:, 0] < 45)
    row = units.frame.iloc[2]
    assert abs(row["mean"] - surface.mean[strip].mean()) < MONTE_CARLO_ERRORS * row["monte_carlo_error"]
    assert np.isfinite(units.frame["mean"].iloc[1])  # nobody is counted there: by area
    assert np.all(surface.blank == (grid.people == 0))
    assert units.frame["infected_mean"].isna().all()  # the survey does not state its ages


def test_a_row_that_is_not_used_counts_in_no_unit(tmp_path):
    region = square_region(tmp_path, units=2)
    data = survey()
    far = gpd.GeoDataFrame(
        {"examined": [1000], "positive": [1000], "unit": ["unit 1"]},
        geometry=gpd.points_from_xy([460e3], [30e3]),
        crs=CRS,
    )
    frame = pd.concat([data.frame[["examined", "positive", "geometry"]].assign(unit="unit 0"), far])
    frame = gpd.GeoDataFrame(frame.reset_index(drop=True), crs=CRS)
    frame.loc[frame.geometry.x > 30e3, "unit"] = "unit 1"
    both = prevmap.Survey.from_frame(frame, examined="examined", positive="positive", unit="unit")
    model = prevmap.PrevalenceModel(
        [], mesh=prevmap.MeshSpec(edge_km=6.0), priors=prevmap.Priors(range_km=30.0)
    )
    fit = model.fit(both, region=region, integrate=False)
    units = fit.units(region.grid(cell_km=10), draws=200)
    assert units.frame["examined"].sum() == data.frame["examined"].sum()
    said = fit.findings[fit.findings["row"] == len(frame) - 1]
    assert "counted" not in " ".join(said["action"])
    assert fit.n_rows == len(frame) - 1


def test_where_the_population_is_not_known_it_is_not_nought(fit, tmp_path):
    path = tmp_path / "people.tif"
    people = np.full((60, 60), 2.0, dtype="float32")
    people[:, :20] = -1  # no value on the first unit
    people[:, 20:35] = -1  # nor on three quarters of the second
    with rasterio.open(
        path, "w", driver="GTiff", height=60, width=60, count=1, dtype="float32", crs=CRS, nodata=-1,
        transform=rasterio.Affine(1000, 0, 0, 0, -1000, 60e3),
    ) as target:  # fmt: skip
        target.write(people, 1)
    grid = fit.region.grid(cell_km=5, population=prevmap.read_population(path, kind="counts"))
    np.testing.assert_allclose(grid.people_known, [0.0, 0.25, 1.0], atol=1e-6)  # float32 shares
    frame = fit.units(grid, draws=200).frame
    assert np.isnan(frame["population"].iloc[0])
    assert frame["weighting"].tolist() == ["area", "population", "population"]
    assert frame["population"].iloc[1] == pytest.approx(600.0, rel=1e-6)
    said = grid.findings["what"].str.cat(sep=" ")
    assert "(almost) no value in 'unit 0'" in said
    assert "'unit 1' (25 %)" in said


def test_a_unit_mostly_without_covariates_is_not_decided(tmp_path):
    region = square_region(tmp_path, units=2)
    path = tmp_path / "height.tif"
    heights = np.tile(np.linspace(0, 100, 60), (60, 1)).astype("float32")
    heights[:, :12] = -9999
    with rasterio.open(
        path, "w", driver="GTiff", height=60, width=60, count=1, dtype="float32", crs=CRS, nodata=-9999,
        transform=rasterio.Affine(1000, 0, 0, 0, -1000, 60e3),
    ) as target:  # fmt: skip
        target.write(heights, 1)
    model = prevmap.PrevalenceModel(
        [prevmap.RasterCovariate(path, name="height")], mesh=prevmap.MeshSpec(edge_km=6.0)
    )
    fit = model.fit(survey(west=15.0), region=region, integrate=False)
    units = fit.units(region.grid(cell_km=2), draws=400)
    assert units.frame["share_without_prediction"].iloc[0] == pytest.approx(0.4, abs=0.05)  # whole cells
    decided = prevmap.classify_units(units, [0.001]).frame
    assert decided["p_class_1"].min() > 0.95
    assert decided["decision"].tolist() == ["undecided", "above"]
    assert "a covariate is missing on" in decided["reason"].iloc[0]


def test_worked_population_weighting():
    """Two logit-normal cells, means -2.5 and -1.5, sd 0.6, weights 0.9 and 0.1, against 10 %; computed
    independently for correlations 0 and 0.5. Done on the draws as a unit does it."""
    rng = np.random.default_rng(8)
    count = 200_000
    for correlation, expected in ((0.0, 0.391639114875), (0.5, 0.395100933003)):
        z = rng.standard_normal((count, 2))
        z[:, 1] = correlation * z[:, 0] + np.sqrt(1 - correlation**2) * z[:, 1]
        cells = 1 / (1 + np.exp(-(np.array([-2.5, -1.5]) + 0.6 * z)))
        matrix = (cells @ np.array([0.9, 0.1]))[:, None]
        units = prevmap.UnitEstimates(pd.DataFrame({"unit": ["both"]}), matrix, None, 1, "population")
        error = units.exceedance_error(0.1)["both"]
        assert abs(units.exceedance(0.1)["both"] - expected) < MONTE_CARLO_ERRORS * error


def test_more_draws_and_the_same_seed(fit):
    grid = fit.region.grid(cell_km=10)
    few = fit.units(grid, draws=500, seed=3)
    more = few.with_draws(2_000)
    np.testing.assert_array_equal(more.draw_matrix, fit.units(grid, draws=2_000, seed=3).draw_matrix)
    assert more.frame["monte_carlo_error"].mean() < few.frame["monte_carlo_error"].mean()
    assert few.exceedance_error(0.99).min() > 0  # 0 of 500 is not free of error
    with pytest.raises(prevmap.InputError, match="at least 100"):
        fit.units(grid, draws=10)


def test_summaries_are_those_of_the_draws(fit):
    units = fit.units(fit.region.grid(cell_km=10), draws=900)
    for name, q in (("lower95", 2.5), ("median", 50), ("upper95", 97.5)):
        np.testing.assert_allclose(units.frame[name], np.percentile(units.draw_matrix, q, axis=0))
    np.testing.assert_allclose(units.frame["sd"], units.draw_matrix.std(axis=0, ddof=1))
    k = (units.draw_matrix > 0.15).sum(axis=0)
    p = (k + 0.5) / 901
    np.testing.assert_allclose(units.exceedance(0.15), k / 900)
    np.testing.assert_allclose(units.exceedance_error(0.15), np.sqrt(p * (1 - p) / 900))


def test_a_region_without_units_has_no_unit_table():
    plain = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=6.0)).fit(survey(), integrate=False)
    with pytest.raises(prevmap.InputError, match="no units"):
        plain.units(plain.region.grid(cell_km=10))


@pytest.fixture(scope="module")
def demo():
    about = prevmap.SurveyNotes(indicator="any infection", ages=(5, 14), sampling="school")
    data = prevmap.read_survey(
        DEMO / "sites.csv", examined="examined", positive="positive", lon="lon", lat="lat",
        site="school_code", unit="district", about=about,
    )  # fmt: skip
    region = prevmap.read_region(
        DEMO / "districts.geojson",
        name="district",
        code="code",
        parent="zone",
        exclude=DEMO / "lakes.geojson",
    )
    people = prevmap.read_population(DEMO / "population.tif", kind="counts", ages=(5, 14))
    grid = region.grid(cell_km=4, population=people)
    covariates = [
        prevmap.RasterCovariate(DEMO / "elevation.tif", name="elevation"),
        prevmap.RasterCovariate(DEMO / "wetness.tif", name="wetness"),
    ]
    fit = prevmap.PrevalenceModel(covariates, mesh=prevmap.MeshSpec(edge_km=5.0)).fit(data, region=region)
    return fit, grid, fit.units(grid)


def test_the_demonstrations_truth_lies_where_it_should(demo):
    """30 districts of known prevalence: interval coverage and decisions against the truth they were made from."""
    _, _, units = demo
    truth = pd.read_csv(DEMO / "truth" / "districts.csv").set_index("district")["prevalence"]
    frame = units.frame.set_index("unit")
    truth = truth.loc[frame.index]
    covered = ((frame["lower95"] <= truth) & (truth <= frame["upper95"])).sum()
    assert covered >= 26  # of 30 at 95 %: below 26 has probability 0.003 if they were independent
    error = np.abs(frame["mean"] - truth)
    crude = np.abs(frame["direct_estimate"] - truth)
    assert error.mean() < crude.mean()  # borrowing strength helps
    decisions = prevmap.classify_units(units, [0.10], certainty=0.90).frame.set_index("unit")
    decided = decisions[decisions["decision"] != "undecided"]
    wrong = (decided["decision"] == "above") != (truth.loc[decided.index] > 0.10)
    assert len(decided) >= 8
    assert wrong.sum() <= 3  # at most 10 % of about 15 are expected to be wrong
    assert set(decisions.loc[frame["sites"] == 0, "decision"]) == {"undecided"}


def test_the_unit_table_holds_raw_data_and_attributes(demo):
    fit, grid, units = demo
    frame = units.frame
    columns = (
        "unit code parent sites examined positive direct_estimate direct_lower95 direct_upper95 mean sd lower95 "
        "median upper95 population infected_mean infected_lower95 infected_upper95 nearest_site_km "
        "share_extrapolated basis monte_carlo_error"
    ).split()
    assert list(frame.columns[: len(columns)]) == columns
    assert "past_rounds" in frame  # attributes of the region pass through
    accepted = fit.survey.frame
    assert frame["examined"].sum() <= accepted["examined"].sum() + fit.survey.unplaced["examined"].sum()
    # The school without coordinates counts in its district's raw data and nowhere else.
    lost = fit.survey.unplaced.iloc[0]
    row = frame.set_index("unit").loc[lost["unit"]]
    placed = fit.sites[fit.sites["unit"] == lost["unit"]]
    assert row["examined"] == placed["examined"].sum() + lost["examined"]
    np.testing.assert_allclose(frame["infected_mean"], frame["mean"] * frame["population"])
    np.testing.assert_allclose(
        frame["population"].sum() + grid.people_unassigned, grid.people.sum() + grid.people_unassigned
    )
    assert set(frame.loc[frame["sites"] > 0, "basis"]) == {"own sites"}
