import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely

import prevmap
from prevmap.errors import InputError
from prevmap.inputs.design import design
from tests.test_covariates import layer, points
from tests.test_grid import UTM, box, region_of
from tests.test_population import write
from tests.tolerances import ALGEBRA


@pytest.fixture
def sites(rng):
    n = 40
    return points(
        rng.uniform(1e3, 39e3, n),
        rng.uniform(1e3, 29e3, n),
        height=rng.uniform(100.0, 900.0, n),
        sampling=np.where(np.arange(n) % 4 == 0, "community", "school"),
    )


def ids(sites):
    return [f"site {number}" for number in range(len(sites))]


def test_without_covariates_there_is_the_intercept(sites):
    made = design([], sites, ids(sites))
    assert made.terms == ("intercept",)
    assert made.X.tolist() == [[1.0]] * len(sites)
    assert made.kept.all()
    assert len(made.findings) == 0
    X, outside, missing = made.matrix(sites.iloc[:3], grid=True)
    assert (X.tolist(), outside.any(), missing.any()) == ([[1.0]] * 3, False, False)


def test_columns_are_centred_scaled_and_rebuilt_anywhere(tmp_path, sites, rng):
    rain = write(tmp_path / "rain.tif", rng.uniform(0, 900, (30, 40)), left=0.0, top=30_000.0)
    lakes = layer(tmp_path / "lakes.gpkg", [shapely.box(5e3, 5e3, 9e3, 9e3)])
    covariates = [
        prevmap.RasterCovariate(rain, transform="sqrt"),
        prevmap.DistanceCovariate(lakes, scale=False),
        prevmap.ColumnCovariate("height", at=500.0, transform="log"),
        prevmap.FactorCovariate("sampling", at="community"),
    ]
    made = design(covariates, sites, ids(sites))
    assert made.terms == ("intercept", "rain", "km_to_lakes", "height", "sampling[community]")
    assert made.levels == {"sampling": ("school", "community")}
    assert made.at == {"height": 500.0, "sampling": "community"}
    logs = np.log(sites["height"].to_numpy())
    assert made.X[:, 3] == pytest.approx((logs - logs.mean()) / logs.std(), rel=ALGEBRA)
    assert made.X[:, 1].mean() == pytest.approx(0.0, abs=ALGEBRA)
    assert made.X[:, 1].std() == pytest.approx(1.0, rel=ALGEBRA)
    assert made.X[:, 2] == pytest.approx(covariates[1].values(sites), rel=ALGEBRA)
    assert made.X[:, 4].tolist() == (sites["sampling"] == "community").astype(float).tolist()
    assert made.lower[3] == pytest.approx(logs.min())
    assert made.upper[3] == pytest.approx(logs.max())
    again, outside, missing = made.matrix(sites)
    assert again == pytest.approx(made.X, rel=ALGEBRA)
    assert not outside.any()
    assert not missing.any()


def test_metres_degrees_and_kilometres_give_the_same_matrix(tmp_path, sites):
    lakes = layer(tmp_path / "lakes.gpkg", [shapely.box(5e3, 5e3, 9e3, 9e3)])
    made = design([prevmap.DistanceCovariate(lakes)], sites, ids(sites))
    X, _, _ = made.matrix(sites.to_crs(4326))
    assert pytest.approx(made.X, abs=1e-8) == X  # there and back through degrees


def test_windows_give_the_rows_of_the_whole_grid(tmp_path, sites, rng):
    rain = write(tmp_path / "rain.tif", rng.uniform(0, 900, (30, 20)), left=0.0, top=30_000.0)
    lakes = layer(tmp_path / "lakes.gpkg", [shapely.box(5e3, 5e3, 9e3, 9e3)])
    covariates = [
        prevmap.RasterCovariate(rain),
        prevmap.DistanceCovariate(lakes),
        prevmap.ColumnCovariate("height", at=2000.0),
        prevmap.FactorCovariate("sampling", at="community"),
    ]
    west = sites[sites.geometry.x < 20e3]
    made = design(covariates, west, ids(west))
    grid = region_of([box(0, 0, 40, 30)]).grid(cell_km=2)
    X, outside, missing = made.matrix(grid.frame_points(), grid=True)
    parts = [made.matrix(grid.frame_points(k, k + 77), grid=True) for k in range(0, len(grid), 77)]
    assert np.array_equal(np.vstack([part[0] for part in parts]), X, equal_nan=True)
    assert np.concatenate([part[1] for part in parts]).tolist() == outside.tolist()
    # The raster ends half-way; the height asked for is above all sites.
    assert missing.tolist() == (grid.xy_km[:, 0] > 20.0).tolist()
    assert outside.tolist() == (~missing).tolist()
    assert np.isnan(X[missing, 1:]).all()
    assert (X[:, 0] == 1.0).all()
    assert (X[~missing, 4] == 1.0).all()
    assert any("at=2000 is outside" in what for what in made.findings["what"])


def test_outside_means_beyond_the_values_at_the_sites(sites):
    made = design([prevmap.ColumnCovariate("height")], sites, ids(sites))
    low, high = sites["height"].min(), sites["height"].max()
    where = points([0.0] * 4, [0.0] * 4, height=[low, high, low - 1.0, high + 1.0])
    assert made.matrix(where)[1].tolist() == [False, False, True, True]


def test_a_split_or_repeated_row_changes_nothing(sites):
    covariates = [prevmap.ColumnCovariate("height"), prevmap.FactorCovariate("sampling")]
    once = design(covariates, sites, ids(sites))
    doubled = gpd.GeoDataFrame(pd.concat([sites, sites.iloc[[3, 3, 5]]]), crs=UTM)
    twice = design(covariates, doubled, [*ids(sites), "site 3", "site 3", "site 5"])
    assert twice.centre.tolist() == once.centre.tolist()
    assert twice.scale.tolist() == once.scale.tolist()
    assert twice.X[: len(sites)].tolist() == once.X.tolist()
    order = np.random.default_rng(3).permutation(len(sites))
    shuffled = design(covariates, sites.iloc[order], [ids(sites)[k] for k in order])
    assert shuffled.X == pytest.approx(once.X[order], rel=1e-8, abs=1e-12)  # order of summation


def test_the_reference_is_the_most_frequent_level_of_sites_not_rows(sites):
    some = sites.iloc[[0, 1, 2]].assign(sampling=["a", "b", "b"])
    rows = gpd.GeoDataFrame(pd.concat([some, some.iloc[[0, 0, 0]]]), crs=UTM)
    made = design([prevmap.FactorCovariate("sampling")], rows, ["s0", "s1", "s2", "s0", "s0", "s0"])
    assert made.terms == ("intercept", "sampling[a]")
    tied = design([prevmap.FactorCovariate("sampling")], some.iloc[[1, 0]], ["s1", "s0"])
    assert tied.levels["sampling"] == ("a", "b")


def test_rows_without_a_value_are_left_out_with_their_reason(tmp_path, sites):
    values = np.add.outer(np.arange(30.0), np.arange(40.0))
    values[:, :10] = np.nan
    rain = write(tmp_path / "rain.tif", values, left=0.0, top=30_000.0)
    sites = sites.astype({"height": object})
    sites.loc[sites.index[5], "height"] = "tall"
    sites.loc[sites.index[6], "height"] = -3.0
    sites.loc[sites.index[7], "sampling"] = None
    sites.index = sites.index + 2
    covariates = [
        prevmap.RasterCovariate(rain),
        prevmap.ColumnCovariate("height", transform="log"),
        prevmap.FactorCovariate("sampling"),
    ]
    made = design(covariates, sites, ids(sites))
    west = (sites.geometry.x < 10e3).to_numpy()
    assert made.kept.sum() == (~west & ~np.isin(np.arange(40), [5, 6, 7])).sum()
    assert np.isnan(made.X[~made.kept, 1:]).all()
    assert np.isfinite(made.X[made.kept]).all()
    errors = made.findings[made.findings["severity"] == "error"]
    by_row = errors.groupby("row")["what"].agg(" | ".join)
    assert "height is 'tall', which is no number" in by_row[7]
    assert "height is -3: its log needs values above 0" in by_row[8]
    assert "sampling has no value: column 'sampling' is empty" in by_row[9]
    assert errors["field"].tolist().count("rain") == west.sum()
    assert all("no data in rain.tif" in what for what in errors.loc[errors["field"] == "rain", "what"])


def test_an_undeclared_mark_of_missing_data_is_a_warning(tmp_path, sites, rng):
    values = rng.uniform(100.0, 900.0, (30, 40)).astype(np.float32)
    gaps = rng.random((30, 40)) < 0.3
    marked = np.where(gaps, np.float32(-9999.0), values)
    rain = write(tmp_path / "rain.tif", marked, left=0.0, top=30_000.0)
    made = design([prevmap.RasterCovariate(rain)], sites, ids(sites))
    [warning] = made.findings.loc[made.findings["severity"] == "warning"].to_dict("records")
    assert warning["field"] == "rain"
    assert f"rain.tif holds -9999 in {100 * gaps.mean():.2g} % of the pixels" in warning["what"]
    assert made.kept.all()  # used as a value: nothing is dropped without a word
    touched = int((prevmap.RasterCovariate(rain).raw(sites) < values[~gaps].min()).sum())
    assert touched > 10
    assert f"are read at {touched} of 40 rows" in warning["what"]
    declared = write(tmp_path / "declared.tif", marked, left=0.0, top=30_000.0, nodata=-9999.0)
    findings = design([prevmap.RasterCovariate(declared)], sites, ids(sites)).findings
    assert not (findings["severity"] == "warning").any()


def test_a_band_that_nobody_chose_is_noted(tmp_path, sites, rng):
    path = write(tmp_path / "rain.tif", rng.uniform(0, 900, (30, 40)), left=0.0, top=30_000.0, bands=2)
    [note] = design([prevmap.RasterCovariate(path)], sites, ids(sites)).findings.to_dict("records")
    assert (note["severity"], note["what"]) == ("note", "rain.tif has 2 bands")
    assert len(design([prevmap.RasterCovariate(path, band=1)], sites, ids(sites)).findings) == 0
    assert len(design([prevmap.RasterCovariate(path, band=2)], sites, ids(sites)).findings) == 0


def test_nothing_to_learn_from_is_an_input_error(tmp_path, sites):
    constant = sites.assign(height=5.0)
    with pytest.raises(InputError, match=r"'height' is constant: 5 at every site used \(40 of them\)"):
        design([prevmap.ColumnCovariate("height")], constant, ids(sites))
    with pytest.raises(InputError, match=r"'sampling' has a single level at the sites, 'school'"):
        design([prevmap.FactorCovariate("sampling")], sites.assign(sampling="school"), ids(sites))
    with pytest.raises(InputError, match=r"No survey row has a value.*height \(0 of 40\)"):
        design([prevmap.ColumnCovariate("height")], sites.assign(height=None), ids(sites))
    with pytest.raises(
        InputError, match=r"no site has a value that log accepts \(above 0\); found for example 0"
    ):
        design([prevmap.ColumnCovariate("height", transform="log")], sites.assign(height=0.0), ids(sites))
    with pytest.raises(InputError, match=r"'sampling' holds text such as 'community'.*FactorCovariate"):
        design([prevmap.ColumnCovariate("sampling")], sites, ids(sites))
    far = write(tmp_path / "far.tif", np.ones((3, 3)), left=900e3, top=0.0)
    with pytest.raises(InputError, match="does not meet the sites"):
        design([prevmap.RasterCovariate(far)], sites, ids(sites))


def test_names_and_kinds_are_checked(sites):
    same = [prevmap.ColumnCovariate("height"), prevmap.ColumnCovariate("sampling", name="height")]
    with pytest.raises(InputError, match="called 'height'"):
        design(same, sites, ids(sites))
    with pytest.raises(InputError, match="'height' is no covariate"):
        design(["height"], sites, ids(sites))


def test_levels_are_checked_where_they_are_asked_for(sites):
    with pytest.raises(
        InputError, match=r"at='comunity' is no level.*mean 'community'.*'community', 'school'"
    ):
        design([prevmap.FactorCovariate("sampling", at="comunity")], sites, ids(sites))
    made = design([prevmap.FactorCovariate("sampling")], sites, ids(sites))
    with pytest.raises(InputError, match=r"'sampling' is known at the sites only: to predict on a grid"):
        made.matrix(sites, grid=True)
    with pytest.raises(InputError, match=r"at points without a column 'sampling'"):
        made.matrix(sites.drop(columns="sampling"))
    with pytest.raises(InputError, match=r"row 1: 'market' is no level"):
        made.matrix(sites.assign(sampling=["school", "market"] + ["school"] * 38))
    X, _, missing = made.matrix(sites.iloc[:2].assign(sampling=["school", None]))
    assert missing.tolist() == [False, True]
    assert X[0].tolist() == [1.0, 0.0]


def test_points_may_lack_a_column_that_has_an_at(sites):
    made = design([prevmap.FactorCovariate("sampling", at="community")], sites, ids(sites))
    assert made.matrix(sites.drop(columns="sampling"))[0][:, 1].tolist() == [1.0] * 40
    assert made.matrix(sites)[0][:, 1].tolist() == made.X[:, 1].tolist()


def test_collinear_covariates_are_a_warning_with_their_factor(sites, rng):
    noise = rng.normal(size=40)
    sites = sites.assign(other=sites["height"] + 20.0 * noise, third=noise)
    kinds = [prevmap.ColumnCovariate(name) for name in ("height", "other")]
    made = design(kinds, sites, ids(sites))
    r = np.corrcoef(sites["height"], sites["other"])[0, 1]
    # With two covariates the variance inflation factor is 1 / (1 - r^2).
    assert (
        f"variance inflation factor {1.0 / (1.0 - r * r):.3g}, closest to other" in made.findings["what"][0]
    )
    assert made.findings["severity"].tolist() == ["warning"] * 2
    exact = sites.assign(other=2.0 * sites["height"] + 3.0)
    assert "without bound" in design(kinds, exact, ids(sites)).findings["what"][0]
    plain = design([prevmap.ColumnCovariate("height"), prevmap.ColumnCovariate("third")], sites, ids(sites))
    assert len(plain.findings) == 0


def test_nearly_constant_and_too_many_covariates_are_warnings(sites):
    nearly = sites.assign(height=[1.0] + [0.0] * 39)
    made = design([prevmap.ColumnCovariate("height")], nearly, ids(sites))
    assert "one and the same value at 39 of 40 sites" in made.findings["what"][0]
    few = sites.iloc[:3].assign(other=[1.0, 5.0, 2.0])
    kinds = [prevmap.ColumnCovariate("height"), prevmap.ColumnCovariate("other")]
    assert "3 coefficients for 3 distinct sites" in design(kinds, few, ids(few)).findings["what"][0]


def test_sites_in_degrees_get_a_flat_map_of_their_own(tmp_path, sites):
    lakes = layer(tmp_path / "lakes.gpkg", [shapely.box(5e3, 5e3, 9e3, 9e3)])
    made = design([prevmap.DistanceCovariate(lakes)], sites.to_crs(4326), ids(sites))
    assert made.crs.is_projected
    assert made.matrix(sites)[0] == pytest.approx(made.X, abs=1e-6)  # there and back through degrees
