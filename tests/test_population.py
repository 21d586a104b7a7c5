import geopandas as gpd
import numpy as np
import pytest
import rasterio
import shapely
from exactextract import exact_extract
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod

import prevmap
from prevmap.errors import InputError
from prevmap.inputs import people as people_room
from prevmap.inputs import population as population_room
from prevmap.inputs.population import pixel_area_km2
from prevmap.inputs.raster import open_raster
from prevmap.inputs.region import hull_region
from tests.test_grid import UTM, box, region_of
from tests.test_region import DISTRICTS
from tests.tolerances import ALGEBRA

SINGLE = 1e-6  # the overlay takes the share of a pixel in single precision


def write(path, values, left=0.0, top=0.0, size=1000.0, crs=UTM, nodata=None, bands=1, **more):
    values = np.asarray(values)
    with rasterio.open(
        path,
        "w",
        driver="GTiff",
        height=values.shape[0],
        width=values.shape[1],
        count=bands,
        dtype=values.dtype,
        crs=crs,
        transform=more.get("transform", rasterio.Affine(size, 0.0, left, 0.0, -size, top)),
        nodata=nodata,
    ) as target:
        for band in range(1, bands + 1):
            target.write(values, band)
        if "scale" in more:
            target.scales, target.offsets = (more["scale"],), (more["offset"],)
    return path


def whats(findings, severity):
    return findings.loc[findings["severity"] == severity, "what"].tolist()


@pytest.fixture(scope="module")
def districts():
    return prevmap.read_region(DISTRICTS, name="adm1_code")


@pytest.fixture(scope="module")
def degrees(tmp_path_factory):
    """A raster of people in degrees over the districts, with empty land and no-data pixels."""
    draw = np.random.default_rng(5)
    people = draw.gamma(0.3, 50.0, (420, 180)).astype(np.float32)
    people[100:130, 60:80] = -9999.0
    people[200:220] = 0.0
    path = tmp_path_factory.mktemp("people") / "people.tif"
    return write(path, people, left=32.5, top=-9.1, size=0.02, crs=4326, nodata=-9999.0)


@pytest.mark.parametrize("cell_km", [3, 11, 60])
def test_units_get_the_people_the_raster_has_in_them(districts, degrees, cell_km):
    grid = districts.grid(cell_km=cell_km, population=prevmap.read_population(degrees))
    direct = exact_extract(str(degrees), districts.units.to_crs(4326), ["sum"], output="pandas")[
        "sum"
    ].to_numpy()
    pieces = np.bincount(grid.pair_unit, grid.pair_people)
    assert pieces == pytest.approx(direct, rel=SINGLE)
    assert grid.people.sum() == pytest.approx(direct.sum(), rel=SINGLE)
    assert np.bincount(grid.pair_cell, grid.pair_people) == pytest.approx(grid.people, rel=ALGEBRA)


def test_pieces_equal_plain_intersections_with_pixels(tmp_path, rng):
    values = rng.gamma(0.5, 20.0, (12, 15))
    population = prevmap.read_population(write(tmp_path / "p.tif", values, left=0.0, top=12_000.0))
    shape = shapely.Polygon([(1300, 900), (13_700, 2100), (11_100, 11_400), (3900, 10_050)])
    grid = region_of([shape]).grid(cell_km=2.3, population=population)
    col, row = np.meshgrid(np.arange(15), np.arange(12))
    pixels = shapely.box(col * 1e3, (11 - row) * 1e3, (col + 1) * 1e3, (12 - row) * 1e3)
    left = grid.origin_m[0] + (grid.cell % grid.shape[1]) * grid.cell_m
    top = grid.origin_m[1] - (grid.cell // grid.shape[1]) * grid.cell_m
    cells = shapely.box(left, top - grid.cell_m, left + grid.cell_m, top)
    plain = [
        float(
            (values * shapely.area(shapely.intersection(shapely.intersection(each, shape), pixels))).sum()
            / 1e6
        )
        for each in cells
    ]
    assert grid.people == pytest.approx(np.array(plain), abs=SINGLE * values.max())


@given(
    st.integers(0, 2**32 - 1),
    st.floats(0.4, 9.0),
    st.floats(0.1, 1.5),
)
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_nobody_is_lost_or_made_whatever_the_cells_and_pixels(tmp_path, seed, cell_km, pixel_km):
    draw = np.random.default_rng(seed)
    values = draw.gamma(0.5, 20.0, (40, 40))
    size = 1000.0 * pixel_km
    path = write(tmp_path / "p.tif", values, left=-draw.random() * size, top=draw.random() * size, size=size)
    corners = 1000.0 * pixel_km * np.column_stack([draw.uniform(5, 35, 7), draw.uniform(-35, -5, 7)])
    hull = shapely.convex_hull(shapely.multipoints(corners))
    line = 0.5 * (hull.bounds[0] + hull.bounds[2])
    west = shapely.box(hull.bounds[0], hull.bounds[1], line, hull.bounds[3])
    region = region_of([hull.intersection(west), hull.difference(west)])
    grid = region.grid(cell_km=cell_km, population=prevmap.read_population(path))
    direct = exact_extract(str(path), region.units, ["sum"], output="pandas")["sum"].to_numpy()
    assert np.bincount(grid.pair_unit, grid.pair_people, minlength=2) == pytest.approx(
        direct, rel=10 * SINGLE
    )
    assert (grid.pair_people >= 0.0).all()


def test_small_blocks_give_the_same_people(districts, degrees, monkeypatch):
    population = prevmap.read_population(degrees)
    whole = districts.grid(cell_km=20, population=population)
    monkeypatch.setattr(people_room, "CELLS_AT_ONCE", 7)
    monkeypatch.setattr(people_room, "PIXELS_AT_ONCE", 50)
    monkeypatch.setattr(population_room, "PIXELS_AT_ONCE", 50)
    parts = districts.grid(cell_km=20, population=population)
    assert parts.pair_people == pytest.approx(whole.pair_people, rel=SINGLE, abs=SINGLE)


def test_density_times_pixel_area_is_counts(tmp_path, districts, degrees):
    raster = open_raster(degrees)
    with rasterio.open(degrees) as source:
        counts = source.read(1).astype(np.float64)
    area = pixel_area_km2(raster, 0, 0, raster.rows, raster.cols)
    density = np.where(counts < 0.0, -9999.0, counts / area)
    path = write(tmp_path / "d.tif", density, left=32.5, top=-9.1, size=0.02, crs=4326, nodata=-9999.0)
    by_density = districts.grid(cell_km=15, population=prevmap.read_population(path, kind="density"))
    by_counts = districts.grid(cell_km=15, population=prevmap.read_population(degrees))
    assert by_density.people == pytest.approx(by_counts.people, rel=SINGLE, abs=SINGLE)


def test_pixels_in_degrees_have_their_geodesic_area(tmp_path):
    raster = open_raster(write(tmp_path / "p.tif", np.ones((3, 2)), left=10.0, top=62.0, size=1.0, crs=4326))
    area = pixel_area_km2(raster, 0, 0, 3, 2)
    assert area.shape == (3, 1)
    for row in range(3):
        edge = shapely.segmentize(shapely.box(10.0, 61.0 - row, 11.0, 62.0 - row), 0.001)
        geodesic = abs(Geod(ellps="WGS84").geometry_area_perimeter(edge)[0]) / 1e6
        assert area[row, 0] == pytest.approx(geodesic, rel=1e-8)  # edges of a hundredth of a minute


def test_all_pixels_of_the_globe_make_its_surface(tmp_path):
    raster = open_raster(
        write(tmp_path / "p.tif", np.ones((18, 36)), left=-180.0, top=90.0, size=10.0, crs=4326)
    )
    # 510,065,621.7 km2: the surface of the ellipsoid of the World Geodetic System 1984 (from memory), which the
    # authalic radius of 6371.0072 km gives as well.
    assert 36.0 * pixel_area_km2(raster, 0, 0, 18, 36).sum() == pytest.approx(510_065_621.7, rel=1e-9)
    sphere = CRS.from_proj4("+proj=longlat +R=6371")
    ball = open_raster(
        write(tmp_path / "b.tif", np.ones((18, 36)), left=-180.0, top=90.0, size=10.0, crs=sphere)
    )
    assert 36.0 * pixel_area_km2(ball, 0, 0, 18, 36).sum() == pytest.approx(4 * np.pi * 6.371**2, rel=ALGEBRA)


def test_density_on_a_stretched_map_counts_true_square_kilometres(tmp_path):
    # Web Mercator near 60 degrees stretches areas about fourfold.
    raster = open_raster(
        write(tmp_path / "p.tif", np.ones((40, 40)), left=1e6, top=8.4e6, size=1000.0, crs=3857)
    )
    area = pixel_area_km2(raster, 0, 0, 40, 40)
    corners = gpd.GeoSeries([shapely.box(1e6, 8.36e6, 1.04e6, 8.4e6)], crs=3857)
    outline = shapely.segmentize(corners.to_crs(4326).iloc[0], 0.001)
    geodesic = abs(Geod(ellps="WGS84").geometry_area_perimeter(outline)[0]) / 1e6
    assert area.sum() == pytest.approx(geodesic, rel=1e-4)  # the scale is interpolated over the block
    assert area.sum() < 0.3 * 1600.0


def test_rows_from_south_to_north_and_stored_scales_are_read_right(tmp_path, rng):
    values = rng.integers(0, 100, (10, 10)).astype(np.int16)
    up = rasterio.Affine(1000.0, 0.0, 0.0, 0.0, 1000.0, 0.0)
    paths = [
        write(tmp_path / "north.tif", values, top=10_000.0),
        write(tmp_path / "south.tif", values[::-1], transform=up),
    ]
    region = region_of([box(1.2, 3.4, 8.1, 9.7)])
    north, south = (region.grid(cell_km=2, population=prevmap.read_population(path)) for path in paths)
    assert south.people == pytest.approx(north.people, rel=ALGEBRA)
    scaled = write(tmp_path / "scaled.tif", values, top=10_000.0, scale=0.5, offset=0.25)
    halved = region.grid(cell_km=2, population=prevmap.read_population(scaled))
    assert halved.people.sum() == pytest.approx(0.5 * north.people.sum() + 0.25 * region.area_km2, rel=SINGLE)


def test_people_on_excluded_land_are_reported_and_in_no_unit(tmp_path):
    path = write(tmp_path / "p.tif", np.full((10, 20), 3.0), top=10_000.0)
    region = region_of([box(0, 0, 10, 10), box(10, 0, 20, 10)], exclude=box(8, 0, 13, 10))
    grid = region.grid(cell_km=2, population=prevmap.read_population(path))
    assert np.bincount(grid.pair_unit, grid.pair_people) == pytest.approx([240.0, 210.0], rel=SINGLE)
    assert grid.people_unassigned == pytest.approx(150.0, rel=SINGLE)
    assert "150 people of the raster live on excluded land" in whats(grid.findings, "note")


def test_land_of_two_units_counts_in_both_and_once_in_its_cell(tmp_path):
    path = write(tmp_path / "p.tif", np.full((10, 20), 3.0), top=10_000.0)
    region = region_of([box(0, 0, 12, 10), box(8, 0, 20, 10)])
    grid = region.grid(cell_km=2, population=prevmap.read_population(path))
    assert np.bincount(grid.pair_unit, grid.pair_people) == pytest.approx([360.0, 360.0], rel=SINGLE)
    assert grid.people.sum() == pytest.approx(600.0, rel=SINGLE)


def test_official_totals_rescale_within_units(tmp_path):
    values = np.full((10, 30), 3.0)
    values[:, 20:] = 0.0
    path = write(tmp_path / "p.tif", values, top=10_000.0)
    region = region_of([box(0, 0, 10, 10), box(10, 0, 20, 10), box(20, 0, 30, 10)])
    totals = {"unit 0": 450, "unit 2": 70.0}
    population = prevmap.read_population(path, ages=(5, 14), unit_total=totals)
    grid = region.grid(cell_km=4, population=population)
    assert np.bincount(grid.pair_unit, grid.pair_people) == pytest.approx([450.0, 300.0, 0.0], rel=SINGLE)
    assert grid.people.sum() == pytest.approx(750.0, rel=SINGLE)
    assert grid.people_unassigned == 70.0
    assert "its people are multiplied by 1.5" in grid.findings["action"].tolist()
    assert any(
        "nobody in the raster, 70 people officially" in what for what in whats(grid.findings, "warning")
    )
    assert any("no official total for 1 units: unit 1" in what for what in whats(grid.findings, "note"))
    unknown = prevmap.read_population(path, unit_total={"unit 7": 1})
    with pytest.raises(InputError, match=r"no unit 'unit 7' in the region \(did you mean 'unit"):
        region.grid(cell_km=4, population=unknown)


def test_a_hull_counts_people_by_cell(tmp_path):
    path = write(tmp_path / "p.tif", np.full((40, 40), 2.0), top=40_000.0)
    region = hull_region(gpd.GeoSeries.from_xy([15e3, 25e3], [20e3, 20e3], crs=UTM))
    grid = region.grid(cell_km=3, population=prevmap.read_population(path))
    assert grid.people.sum() == pytest.approx(2.0 * region.area_km2, rel=SINGLE)
    assert len(grid.pair_people) == 0


def test_land_without_a_value_is_counted_and_said(tmp_path):
    values = np.full((10, 10), 2.0)
    values[:2] = np.nan
    path = write(tmp_path / "p.tif", values, top=10_000.0)
    grid = region_of([box(0, 0, 10, 10)]).grid(cell_km=5, population=prevmap.read_population(path))
    assert grid.people.sum() == pytest.approx(160.0, rel=SINGLE)
    assert "p.tif has no value on 20 % of the region's land" in whats(grid.findings, "warning")
    beside = region_of([box(5, 0, 15, 10)]).grid(cell_km=5, population=prevmap.read_population(path))
    assert "p.tif has no value on 60 % of the region's land" in whats(beside.findings, "warning")


def test_an_empty_raster_is_a_warning(tmp_path):
    path = write(tmp_path / "p.tif", np.zeros((10, 10)), top=10_000.0)
    grid = region_of([box(0, 0, 10, 10)]).grid(cell_km=5, population=prevmap.read_population(path))
    assert grid.people.tolist() == [0.0] * 4
    assert "p.tif shows no people in the region" in whats(grid.findings, "warning")


def test_impossible_numbers_of_people_are_named(tmp_path):
    values = np.full((10, 10), 2.0)
    values[3, 4] = -9999.0
    path = write(tmp_path / "p.tif", values, top=10_000.0)
    region = region_of([box(0, 0, 10, 10)])
    with pytest.raises(InputError, match=r"1 pixels near the region.*-9999 at x 4000, y 7000.*nodata"):
        region.grid(cell_km=5, population=prevmap.read_population(path))
    declared = write(tmp_path / "d.tif", values, top=10_000.0, nodata=-9999.0)
    assert region.grid(cell_km=5, population=prevmap.read_population(declared)).people.sum() == pytest.approx(
        198.0
    )


def test_a_raster_elsewhere_names_both_bounds(tmp_path):
    path = write(tmp_path / "p.tif", np.ones((10, 10)), left=500e3, top=10_000.0)
    with pytest.raises(InputError, match=r"covers x 500000 to 510000.*region x 0 to 10000"):
        region_of([box(0, 0, 10, 10)]).grid(cell_km=5, population=prevmap.read_population(path))


def test_a_region_beside_the_180th_meridian(tmp_path):
    halves = [shapely.box(178.0, -18.0, 180.0, -16.0), shapely.box(-180.0, -18.0, -179.0, -16.0)]
    gpd.GeoDataFrame({"name": ["Oru", "Tavo"]}, geometry=halves, crs=4326).to_file(tmp_path / "units.geojson")
    region = prevmap.read_region(tmp_path / "units.geojson")
    # Columns of one degree from 177 to 182 degrees east.
    path = write(tmp_path / "p.tif", np.full((4, 5), 8.0), left=177.0, top=-15.0, size=1.0, crs=4326)
    grid = region.grid(cell_km=20, population=prevmap.read_population(path))
    assert np.bincount(grid.pair_unit, grid.pair_people) == pytest.approx(
        [32.0, 16.0], rel=1e-5
    )  # bent edges


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ({"kind": "people"}, "kind='people'"),
        ({"ages": (14, 5)}, r"ages=\(14, 5\)"),
        ({"ages": (5.5, 14)}, "whole years"),
        ({"ages": 5}, "ages=5"),
        ({"year": 26}, "year=26"),
        ({"unit_total": {"a": -1}}, "-1 people for unit 'a'"),
        ({"unit_total": {"a": "many"}}, "'many' people"),
    ],
)
def test_arguments_are_checked(tmp_path, asked, message):
    path = write(tmp_path / "p.tif", np.ones((2, 2)))
    with pytest.raises(InputError, match=message):
        prevmap.read_population(path, **asked)


def test_rasters_that_cannot_be_used(tmp_path):
    with pytest.raises(InputError, match=r"none\.tif: there is no such file"):
        prevmap.read_population(tmp_path / "none.tif")
    (tmp_path / "text.tif").write_text("no raster")
    with pytest.raises(InputError, match=r"text\.tif: cannot be read as a raster"):
        prevmap.read_population(tmp_path / "text.tif")
    with pytest.raises(InputError, match="has no coordinate system"):
        prevmap.read_population(write(tmp_path / "a.tif", np.ones((2, 2)), crs=None))
    turned = rasterio.Affine(10.0, 5.0, 0.0, 5.0, -10.0, 0.0)
    with pytest.raises(InputError, match="rotated, sheared or mirrored"):
        prevmap.read_population(write(tmp_path / "b.tif", np.ones((2, 2)), transform=turned))


def test_what_is_not_stated_is_a_note(tmp_path):
    path = write(tmp_path / "p.tif", np.ones((2, 2)), bands=2)
    population = prevmap.read_population(path)
    assert "ages of the population not stated" in whats(population.findings, "note")
    assert "p.tif has 2 bands" in whats(population.findings, "warning")
    stated = prevmap.read_population(write(tmp_path / "q.tif", np.ones((2, 2))), ages=(5, 14), year=2026)
    assert len(stated.findings) == 0
    assert (stated.ages, stated.year, stated.kind) == ((5, 14), 2026, "counts")
