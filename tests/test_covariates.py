import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from pyproj import Geod
from scipy.interpolate import RegularGridInterpolator

import prevmap
from prevmap.errors import InputError
from prevmap.inputs import raster as raster_room
from prevmap.inputs.covariates import transformed
from tests.test_grid import UTM
from tests.test_population import write
from tests.tolerances import ALGEBRA


def points(x, y, crs=UTM, **columns):
    return gpd.GeoDataFrame(columns, geometry=gpd.points_from_xy(x, y), crs=crs)


def layer(path, shapes, crs=UTM):
    gpd.GeoDataFrame(geometry=list(shapes), crs=crs).to_file(path)
    return path


def test_raster_values_are_bilinear_between_pixel_centres(tmp_path, rng):
    values = rng.normal(size=(30, 40))
    path = write(tmp_path / "height.tif", values, left=0.0, top=30_000.0)
    x, y = rng.uniform(500, 39_500, 400), rng.uniform(500, 29_500, 400)
    found = prevmap.RasterCovariate(path).values(points(x, y))
    centres = 29_500.0 - 1000.0 * np.arange(30), 500.0 + 1000.0 * np.arange(40)
    independent = RegularGridInterpolator((centres[0][::-1], centres[1]), values[::-1])(
        np.column_stack([y, x])
    )
    assert found == pytest.approx(independent, rel=ALGEBRA, abs=ALGEBRA)


def test_tiles_do_not_change_what_is_read(tmp_path, rng, monkeypatch):
    values = rng.normal(size=(30, 40))
    values[rng.random((30, 40)) < 0.1] = np.nan
    path = write(tmp_path / "height.tif", values, left=0.0, top=30_000.0)
    where = points(rng.uniform(-1000, 41_000, 500), rng.uniform(-1000, 31_000, 500))
    whole = prevmap.RasterCovariate(path).raw(where)
    monkeypatch.setattr(raster_room, "TILE", 3)
    assert np.array_equal(prevmap.RasterCovariate(path).raw(where), whole, equal_nan=True)
    assert 0.05 < np.isnan(whole).mean() < 0.3


def test_beside_missing_pixels_and_at_the_rim_the_own_pixel_counts(tmp_path):
    values = np.array([[1.0, 2.0, 3.0], [4.0, -9.0, 6.0], [7.0, 8.0, 9.0]], dtype=np.float32)
    path = write(tmp_path / "v.tif", values, left=0.0, top=3000.0, nodata=-9.0)
    x = [500, 900, 100, 1500, 2900, 3100, 3000, 0]
    y = [2500, 2100, 2900, 1500, 100, 1500, 1500, 3000]
    found = prevmap.RasterCovariate(path).raw(points(x, y))
    # Pixel centre beside a gap, near the gap, at the rim, in the gap, in the corner, outside, on the edges.
    assert found.tolist()[:3] == [1.0, 1.0, 1.0]
    assert np.isnan(found[3])
    assert found[4] == 9.0
    assert np.isnan(found[5])
    assert found[6:].tolist() == [6.0, 1.0]


def test_scale_offset_band_and_coordinate_system_are_taken_into_account(tmp_path):
    values = np.arange(100, dtype=np.int16).reshape(10, 10)
    path = write(tmp_path / "t.tif", values, left=30.0, top=-10.0, size=0.1, crs=4326, scale=0.1, offset=-5.0)
    place = points([30.45], [-10.55], crs=4326)
    # The centre of row 5, column 4; degrees divided by a tenth are not exact.
    expected = 0.1 * (5 * 10 + 4) - 5.0
    assert prevmap.RasterCovariate(path).raw(place) == pytest.approx(
        [expected], rel=1e-6
    )  # the centre of a pixel
    assert prevmap.RasterCovariate(path).raw(place.to_crs(32736)) == pytest.approx(
        [expected], rel=1e-6
    )  # there, back
    with pytest.raises(InputError, match="there is no band 2; the file has bands 1 to 1"):
        prevmap.RasterCovariate(path, band=2).raw(place)


def test_longitudes_past_180_degrees_meet_rasters_written_either_way(tmp_path):
    values = np.arange(36, dtype=float)[None, :].repeat(18, axis=0)
    east = write(tmp_path / "east.tif", values, left=0.0, top=90.0, size=10.0, crs=4326)
    west = write(
        tmp_path / "west.tif", np.roll(values, 18, axis=1), left=-180.0, top=90.0, size=10.0, crs=4326
    )
    place = points([-175.0, -165.0], [5.0, 5.0], crs=4326)
    assert prevmap.RasterCovariate(east).raw(place).tolist() == [18.0, 19.0]
    assert prevmap.RasterCovariate(west).raw(place).tolist() == [18.0, 19.0]


def test_a_raster_elsewhere_names_both_bounds(tmp_path):
    path = write(tmp_path / "v.tif", np.ones((3, 3)), left=0.0, top=3000.0)
    with pytest.raises(
        InputError, match=r"'v': .*v\.tif does not meet.*covers x 0 to 3000.*sites x 50000 to 60000"
    ):
        prevmap.RasterCovariate(path).check_overlap(points([5e4, 6e4], [0.0, 10.0]))
    prevmap.RasterCovariate(path).check_overlap(points([5e4, 1500.0], [0.0, 10.0]))


def test_distance_to_polygons_lines_and_points(tmp_path, rng):
    shapes = [
        shapely.box(0, 0, 4000, 4000).difference(shapely.box(1000, 1000, 3000, 3000)),
        shapely.LineString(np.column_stack([np.linspace(9000, 20_000, 200), rng.uniform(0, 9000, 200)])),
        shapely.MultiPoint([(-5000, 3000), (-6000, 9000)]),
    ]
    path = layer(tmp_path / "water.gpkg", shapes)
    where = points(rng.uniform(-9000, 22_000, 300), rng.uniform(-5000, 12_000, 300))
    found = prevmap.DistanceCovariate(path).values(where)
    plain = shapely.distance(np.asarray(where.geometry.array)[:, None], np.array(shapes)).min(axis=1) / 1000.0
    assert found == pytest.approx(plain, abs=ALGEBRA)
    assert (found == 0.0).sum() > 3
    # Inside the hole of a polygon the shore is a kilometre away.
    assert prevmap.DistanceCovariate(path).values(points([2000], [2000])) == pytest.approx([1.0], rel=ALGEBRA)


def test_distance_in_degrees_is_geodesic(tmp_path):
    path = layer(tmp_path / "well.geojson", [shapely.Point(33.2, -12.4)], crs=4326)
    where = points([33.0, 33.9, 33.2], [-12.0, -12.6, -12.4], crs=4326)
    metres = Geod(ellps="WGS84").inv(where.geometry.x, where.geometry.y, [33.2] * 3, [-12.4] * 3)[2]
    geodesic = np.array(metres) / 1000.0
    found = prevmap.DistanceCovariate(path, name="km_to_well").values(where)
    assert found == pytest.approx(
        geodesic, rel=1e-4, abs=1e-6
    )  # distortion of a projection centred on the points
    assert prevmap.DistanceCovariate(path).values(where.to_crs(32736)) == pytest.approx(
        geodesic, rel=2e-3, abs=1e-6
    )


def test_a_changed_layer_is_read_again(tmp_path):
    path = layer(tmp_path / "a.geojson", [shapely.Point(33.0, -12.0)], crs=4326)
    where = points([33.0], [-12.0], crs=4326)
    assert prevmap.DistanceCovariate(path).values(where)[0] == pytest.approx(0.0, abs=1e-9)
    layer(path, [shapely.Point(33.0, -12.5), shapely.Point(34.0, -13.0)], crs=4326)
    assert prevmap.DistanceCovariate(path).values(where)[0] > 50.0


def test_columns_and_factors(rng):
    where = points(
        [0, 1, 2, 3], [0, 0, 0, 0], height=["1.5", " 2", None, "high"], place=["school", " ", None, 3.0]
    )
    assert prevmap.ColumnCovariate("height").raw(where).tolist()[:2] == [1.5, 2.0]
    assert np.isnan(prevmap.ColumnCovariate("height").raw(where)[2:]).all()
    assert prevmap.ColumnCovariate("height").texts(where) == {3: "high"}
    assert prevmap.FactorCovariate("place").values(where).tolist() == ["school", None, None, "3"]
    with pytest.raises(InputError, match=r"no column 'heigt' \(covariate 'heigt'\)\. Did you mean 'height'"):
        prevmap.ColumnCovariate("heigt").raw(where)


@pytest.mark.parametrize(
    ("transform", "raw", "expected"),
    [
        ("log", [np.e, 1.0, 0.0, -1.0], [1.0, 0.0, np.nan, np.nan]),
        ("log1p", [np.e - 1.0, 0.0, -1.0], [1.0, 0.0, np.nan]),
        ("sqrt", [4.0, 0.0, -1.0], [2.0, 0.0, np.nan]),
        ("square", [-3.0, np.nan], [9.0, np.nan]),
        (None, [-3.0, np.nan], [-3.0, np.nan]),
    ],
)
def test_transforms_have_no_value_outside_what_they_accept(transform, raw, expected):
    assert transformed(np.array(raw), transform) == pytest.approx(
        np.array(expected), abs=ALGEBRA, nan_ok=True
    )


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: prevmap.RasterCovariate("v.tif", transform="exp"), "transform='exp'; accepted: 'log'"),
        (lambda: prevmap.ColumnCovariate("a", scale="yes"), "scale='yes'"),
        (lambda: prevmap.ColumnCovariate("a", at="high"), "at='high'; a number"),
        (lambda: prevmap.ColumnCovariate("a", at=0.0, transform="log"), "at=0.0 has no log; values above 0"),
        (lambda: prevmap.FactorCovariate("a", name=" "), "cannot be called ' '"),
        (lambda: prevmap.ColumnCovariate("intercept"), "cannot be called 'intercept'"),
    ],
)
def test_settings_are_checked(make, message):
    with pytest.raises(InputError, match=message):
        make()


def test_labels_default_to_the_file_or_column():
    assert prevmap.RasterCovariate("maps/height.tif").label == "height"
    assert prevmap.DistanceCovariate("maps/lakes.geojson").label == "km_to_lakes"
    assert prevmap.ColumnCovariate("altitude_m").label == "altitude_m"
    assert prevmap.FactorCovariate("sampling", name="where").label == "where"


def test_missing_files_and_wrong_geometries_are_input_errors(tmp_path):
    where = points([0.0], [0.0])
    with pytest.raises(InputError, match="no such file"):
        prevmap.RasterCovariate(tmp_path / "none.tif").values(where)
    with pytest.raises(InputError, match="no such file"):
        prevmap.DistanceCovariate(tmp_path / "none.geojson").values(where)
    path = write(tmp_path / "v.tif", np.ones((3, 3)))
    with pytest.raises(InputError, match="Points are expected; row 0 holds POLYGON"):
        prevmap.RasterCovariate(path).values(gpd.GeoDataFrame(geometry=[shapely.box(0, 0, 1, 1)], crs=UTM))
    with pytest.raises(InputError, match="no coordinate system"):
        prevmap.RasterCovariate(path).values(points([0.0], [0.0], crs=None))


def test_one_raster_value_equals_what_is_stored(tmp_path, rng):
    values = rng.normal(size=(20, 20)).astype(np.float32)
    path = write(tmp_path / "v.tif", values, left=0.0, top=20_000.0)
    x, y = 500.0 + 1000.0 * rng.integers(0, 20, 30), 500.0 + 1000.0 * rng.integers(0, 20, 30)
    with rasterio.open(path) as source:
        stored = [each[0] for each in source.sample(np.column_stack([x, y]))]
    assert prevmap.RasterCovariate(path).raw(points(x, y)) == pytest.approx(
        np.array(stored), rel=1e-6
    )  # float32


def test_empty_frames_give_empty_arrays(tmp_path):
    path = write(tmp_path / "v.tif", np.ones((3, 3)))
    lakes = layer(tmp_path / "a.gpkg", [shapely.Point(0, 0)])
    none = points(pd.Series([], dtype=float), pd.Series([], dtype=float), place=[])
    assert len(prevmap.RasterCovariate(path).values(none)) == 0
    assert len(prevmap.DistanceCovariate(lakes).values(none)) == 0
    assert len(prevmap.FactorCovariate("place").values(none)) == 0
