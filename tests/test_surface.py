"""Surfaces: points and cells, flags, draws and rasters."""

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from scipy.special import expit
from shapely.geometry import box
from tolerances import MONTE_CARLO_ERRORS

import prevmap

CRS = "+proj=laea +lat_0=0 +lon_0=0 +datum=WGS84 +units=m"


def square_region(tmp_path, units=2, size_km=60.0):
    step = size_km / units
    shapes = [box(1e3 * i * step, 0, 1e3 * (i + 1) * step, 1e3 * size_km) for i in range(units)]
    path = tmp_path / "units.gpkg"
    gpd.GeoDataFrame({"name": [f"unit {i}" for i in range(units)]}, geometry=shapes, crs=CRS).to_file(path)
    return prevmap.read_region(path, name="name")


def survey(seed=2, n=50, size_km=60.0, west=0.0, **columns):
    rng = np.random.default_rng(seed)
    xy = np.column_stack([rng.uniform(west, size_km, n), rng.uniform(0, size_km, n)])
    examined = rng.integers(25, 60, n)
    logit = -2.0 + np.sin(xy[:, 0] / 10.0) + 0.5 * np.cos(xy[:, 1] / 12.0) + 0.4 * rng.normal(size=n)
    frame = gpd.GeoDataFrame(
        {"examined": examined, "positive": rng.binomial(examined, expit(logit)), **columns},
        geometry=gpd.points_from_xy(*(1e3 * xy.T)),
        crs=CRS,
    )
    return prevmap.Survey.from_frame(frame, examined="examined", positive="positive")


@pytest.fixture(scope="module")
def fitted(tmp_path_factory):
    region = square_region(tmp_path_factory.mktemp("region"))
    model = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=4.0))
    return region, model.fit(survey(), region=region)


def test_points_and_cells_get_the_same_numbers(fitted):
    region, fit = fitted
    grid = region.grid(cell_km=10)
    cells = fit.predict(grid)
    points = fit.predict(grid.frame_points().to_crs(4326))
    for name in ("mean", "sd", "median", "lower95", "upper95"):
        # Positions go through degrees and back and are rounded to a millimetre.
        np.testing.assert_allclose(getattr(points, name), getattr(cells, name), rtol=1e-6)
    assert np.all((cells.lower95 < cells.median) & (cells.median < cells.upper95))
    order = np.array([3, 0, 7])
    some = fit.predict(grid.frame_points().iloc[order])
    np.testing.assert_allclose(some.exceedance(0.2), cells.exceedance(0.2)[order], rtol=1e-9)  # order given


def test_any_threshold_without_refitting(fitted):
    region, fit = fitted
    surface = fit.predict(region.grid(cell_km=10))
    exceedances = np.array([surface.exceedance(t) for t in (0.02, 0.1, 0.2, 0.5)])
    assert np.all(np.diff(exceedances, axis=0) <= 0)
    limit = surface.quantile(0.9)
    at = 4
    assert surface.exceedance(float(limit[at]))[at] == pytest.approx(0.1, abs=1e-6)  # table inverse
    np.testing.assert_allclose(surface.quantile(0.5), surface.median)


@pytest.mark.parametrize("nugget", ["average", "omit", "draw"])
def test_joint_draws_agree_with_the_mixture(fitted, nugget):
    region, fit = fitted
    surface = fit.predict(region.grid(cell_km=15), nugget=nugget)
    count = 20_000
    draws = surface.draws(count, seed=4)
    assert draws.shape == (count, len(surface))
    exact = surface.exceedance(0.15)
    error = np.sqrt(exact * (1 - exact) / count)
    assert np.all(np.abs((draws > 0.15).mean(axis=0) - exact) < (MONTE_CARLO_ERRORS + 0.5) * error + 1e-9)
    error = surface.sd / np.sqrt(count)
    assert np.all(np.abs(draws.mean(axis=0) - surface.mean) < (MONTE_CARLO_ERRORS + 0.5) * error)
    np.testing.assert_array_equal(draws, surface.draws(count, seed=4))
    assert not np.array_equal(draws, surface.draws(count, seed=5))


def test_the_nugget_setting_changes_what_is_mapped(fitted):
    region, fit = fitted
    grid = region.grid(cell_km=15)
    average, omit, draw = (fit.predict(grid, nugget=s) for s in ("average", "omit", "draw"))
    assert np.all(omit.median < average.median)  # below one half, leaving the nugget out lowers prevalence
    assert np.all(draw.sd > average.sd)  # one settlement varies more than the mean over settlements
    np.testing.assert_allclose(draw.mean, average.mean, rtol=1e-6)  # two quadratures


def test_far_places_are_flagged_and_those_off_the_mesh_refused(tmp_path):
    region = square_region(tmp_path, size_km=60.0)
    model = prevmap.PrevalenceModel(
        [],
        mesh=prevmap.MeshSpec(edge_km=4.0, margin_km=30.0),
        priors=prevmap.Priors(range_km=12.0, sd=1.0, nugget_sd=0.3),
    )
    fit = model.fit(survey(west=30.0), region=region)
    surface = fit.predict(region.grid(cell_km=5))
    west = surface.grid.xy_km[:, 0] < 15
    assert np.all(surface.far[west])
    assert set(surface.extrapolation_reason[west]) == {"far"}
    assert not np.any(surface.extrapolated[surface.nearest_site_km < 12.0])
    away = gpd.GeoDataFrame(
        geometry=gpd.points_from_xy([30e3, 900e3], [30e3, 30e3]), crs=CRS, index=["a", "b"]
    )
    with pytest.raises(prevmap.InputError, match="1 of 2 places lie off the mesh, the first at b"):
        fit.predict(away)


def test_covariates_outside_the_sampled_range_and_missing_ones(tmp_path):
    region = square_region(tmp_path)
    path = tmp_path / "height.tif"
    heights = np.tile(np.linspace(0, 100, 60), (60, 1)).astype("float32")
    heights[:, :6] = -9999  # nothing known in the west
    with rasterio.open(
        path, "w", driver="GTiff", height=60, width=60, count=1, dtype="float32", crs=CRS, nodata=-9999,
        transform=rasterio.Affine(1000, 0, 0, 0, -1000, 60e3),
    ) as target:  # fmt: skip
        target.write(heights, 1)
    data = survey(west=15.0, size_km=45.0)
    model = prevmap.PrevalenceModel(
        [prevmap.RasterCovariate(path, name="height")], mesh=prevmap.MeshSpec(edge_km=5.0)
    )
    fit = model.fit(data, region=region)
    surface = fit.predict(region.grid(cell_km=2))
    x = surface.grid.xy_km[:, 0]
    assert np.all(surface.missing[x < 5])
    assert np.all(np.isnan(surface.mean[surface.missing]))
    assert np.all(surface.blank[surface.missing])
    assert np.all(surface.outside[x > 50])
    assert not np.any(surface.outside[(x > 20) & (x < 40)])
    assert "covariates" in set(surface.extrapolation_reason)
    units = fit.units(surface.grid, draws=200)
    assert np.all(np.isfinite(units.frame["mean"]))  # what is predicted of a unit still counts


def test_geotiff_has_named_bands_and_the_surface_in_them(fitted, tmp_path):
    region, fit = fitted
    surface = fit.predict(region.grid(cell_km=10))
    path = surface.to_geotiff(tmp_path / "out.tif", thresholds=(0.1,))
    with rasterio.open(path) as source:
        assert source.descriptions == (
            "mean", "sd", "lower95", "median", "upper95", "exceedance_0.1", "extrapolated",
        )  # fmt: skip
        assert source.dtypes[0] == "float32"
        assert source.crs == rasterio.crs.CRS.from_user_input(region.crs.to_wkt())
        for row in ([0, 5], [3, 2]):
            x, y = source.xy(*row)
            at = np.argmin(np.hypot(*(surface.grid.xy_km - np.array([x, y]) / 1e3).T))
            assert source.read(1)[tuple(row)] == pytest.approx(surface.mean[at], rel=1e-6)  # float32
    again = surface.to_geotiff(tmp_path / "again.tif", thresholds=(0.1,))
    assert path.read_bytes() == again.read_bytes()


def test_requests_that_make_no_sense_are_refused(fitted):
    region, fit = fitted
    grid = region.grid(cell_km=15)
    surface = fit.predict(grid)
    for call, message in (
        (lambda: surface.exceedance(10), "strictly between 0 and 1, such as 0.10"),
        (lambda: surface.quantile(1.0), "strictly between 0 and 1"),
        (lambda: surface.draws(0), "at least 1 draw"),
        (lambda: surface.draws(10**9), "at most 200,000,000"),
        (lambda: fit.predict(grid, nugget="none"), "expected one of average, omit, draw"),
        (lambda: fit.predict([1, 2]), "expected a grid or a GeoDataFrame"),
        (
            lambda: fit.predict(gpd.GeoDataFrame(geometry=gpd.points_from_xy([1], [1]))),
            "no coordinate system",
        ),
        (lambda: fit.predict(grid.frame_points()).to_geotiff("x.tif"), "has no raster"),
    ):
        with pytest.raises(prevmap.InputError, match=message):
            call()
