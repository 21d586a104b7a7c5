from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod

import prevmap
from prevmap.errors import InputError
from prevmap.inputs.attributes import attribute, free_names, is_own_column
from prevmap.inputs.region import hull_region
from tests.tolerances import ALGEBRA

DATA = Path(__file__).parent / "data"
COUNTIES = DATA / "nc" / "nc_counties_sids.geojson"
DISTRICTS = DATA / "natural_earth" / "admin1_malawi.geojson"
UTM = CRS.from_epsg(32636)


def square(x, y, size=10_000.0):
    return shapely.box(x, y, x + size, y + size)


def write(tmp_path, shapes, crs=UTM, file="units.gpkg", **columns):
    frame = gpd.GeoDataFrame(columns, geometry=list(shapes), crs=crs)
    frame.to_file(tmp_path / file)
    return tmp_path / file


def pair(tmp_path, **columns):
    columns = columns or {"district": ["Oru", "Tavo"]}
    return write(tmp_path, [square(400e3, 8.5e6), square(410e3, 8.5e6)], **columns)


def whats(region, severity):
    return region.findings.loc[region.findings["severity"] == severity, "what"].tolist()


def test_polygons_of_open_data_keep_their_geodesic_area():
    region = prevmap.read_region(COUNTIES, name="NAME", code="FIPS")
    raw = gpd.read_file(COUNTIES)
    # Edges are straight in degrees, as the format says: extra corners make geodesics follow them.
    edges = shapely.segmentize(raw.geometry.array, 0.01)
    geodesic = [abs(Geod(ellps="WGS84").geometry_area_perimeter(each)[0]) for each in edges]
    assert len(region.units) == 100
    assert region.crs.is_projected
    # An equal-area projection; what is left is the bend of edges up to 2 km long.
    assert region.units.area.to_numpy() == pytest.approx(np.array(geodesic), rel=1e-5)
    assert region.area_km2 == pytest.approx(sum(geodesic) / 1e6, rel=1e-5)
    assert len(region.findings) == 0


def test_attributes_pass_through_beside_unit_code_and_parent():
    region = prevmap.read_region(COUNTIES, name="NAME", code="FIPS", parent=None)
    raw = gpd.read_file(COUNTIES)
    assert region.units.columns[:3].tolist() == ["unit", "code", "parent"]
    assert region.units["unit"].tolist() == raw["NAME"].tolist()
    assert region.units["code"].tolist() == raw["FIPS"].astype(str).tolist()
    assert region.units["parent"].isna().all()
    assert region.units["BIR74"].tolist() == raw["BIR74"].tolist()


def test_a_repeated_name_in_open_data_is_an_error_with_its_features():
    with pytest.raises(InputError, match=r"'name' repeats 'Chitipa' in features 1, 5.*dissolve"):
        prevmap.read_region(DISTRICTS, name="name")
    assert len(prevmap.read_region(DISTRICTS, name="adm1_code").units) == 28


def test_points_are_projected_to_km():
    region = prevmap.read_region(COUNTIES, name="NAME")
    first = region.units.geometry.iloc[0].representative_point()
    points = gpd.GeoSeries([first], crs=region.crs)
    assert region.project(points) == pytest.approx(np.array([[first.x, first.y]]) / 1000.0, rel=ALGEBRA)
    there_and_back = region.project(gpd.GeoDataFrame(geometry=points.to_crs(4326)))
    assert there_and_back == pytest.approx(np.array([[first.x, first.y]]) / 1000.0, abs=1e-6)  # a millimetre
    with pytest.raises(InputError, match="no coordinate system"):
        region.project(gpd.GeoSeries([first]))


def test_metres_and_kilometres_give_the_same_region(tmp_path):
    # The same UTM zone with axes in kilometres.
    km = CRS.from_proj4("+proj=utm +zone=36 +datum=WGS84 +units=km")
    in_m = prevmap.read_region(pair(tmp_path), name="district")
    path = write(
        tmp_path, [square(400, 8500, 10), square(410, 8500, 10)], crs=km, file="km.gpkg", name=["a", "b"]
    )
    in_km = prevmap.read_region(path)
    assert in_km.units.area.to_numpy() == pytest.approx(in_m.units.area.to_numpy(), rel=1e-8)
    assert in_km.units.total_bounds == pytest.approx(in_m.units.total_bounds, rel=1e-9)
    assert "kilometre" in whats(in_km, "note")[0]


def test_every_format_gives_the_same_units(tmp_path):
    frame = gpd.GeoDataFrame(
        {"name": ["Oru", "Tavo"]}, geometry=[square(30, 10, 1), square(31, 10, 1)], crs=4326
    )
    frame.to_parquet(tmp_path / "a.parquet")
    for file in ("a.geojson", "a.gpkg", "a.shp"):
        frame.to_file(tmp_path / file)
    areas = [
        prevmap.read_region(tmp_path / f"a.{kind}").area_km2 for kind in ("parquet", "geojson", "gpkg", "shp")
    ]
    assert areas == pytest.approx([areas[0]] * 4, rel=ALGEBRA)


@pytest.mark.parametrize(
    ("columns", "asked", "message"),
    [
        ({"district": ["Oru", "Oru"]}, {"name": "district"}, r"repeats 'Oru' in features 1, 2"),
        ({"district": ["Oru", " "]}, {"name": "district"}, r"'district' is empty in feature 2"),
        ({"district": ["Oru", None]}, {"name": "district"}, r"'district' is empty in feature 2"),
        ({"district": ["Oru", "Tavo"]}, {"name": "distrct"}, r"no column 'distrct'.*Did you mean 'district'"),
        ({"district": ["Oru", "Tavo"]}, {}, r"which column holds the units' names.*Columns: district"),
        ({"name": ["a", "b"], "pcode": ["7", "7"]}, {"code": "pcode"}, r"'pcode' repeats '7'"),
        ({"name": ["a", "b"], "pcode": ["7", None]}, {"code": "pcode"}, r"'pcode' is empty in feature 2"),
        ({"name": ["a", "b"]}, {"parent": "province"}, r"no column 'province'"),
    ],
)
def test_names_and_codes_must_be_there_and_tell_units_apart(tmp_path, columns, asked, message):
    with pytest.raises(InputError, match=message):
        prevmap.read_region(pair(tmp_path, **columns), **asked)


def test_numeric_codes_read_as_whole_numbers_and_own_columns_are_renamed(tmp_path):
    path = pair(tmp_path, name=["a", "b"], pcode=[101.0, 102.0], code=["x", "y"])
    region = prevmap.read_region(path, name="name", code="pcode")
    assert region.units["code"].tolist() == ["101", "102"]
    assert region.units["code_in_region"].tolist() == ["x", "y"]
    assert "column 'code' has the name" in whats(region, "note")[0]


def test_attributes_leave_the_names_of_our_own_columns_free(tmp_path):
    values = {"Decision": ["a", "b"], "p_class_1": [0, 1], "exceedance_0.1": [2, 3], "Population": [4, 5]}
    path = write(
        tmp_path,
        [square(400e3, 8.5e6), square(410e3, 8.5e6)],
        file="units.geojson",
        district=["Oru", "Tavo"],
        zone=["n", "s"],
        **values,
    )
    region = prevmap.read_region(path, name="district")
    for name, expected in values.items():
        assert name not in region.units.columns
        assert region.units[f"{name}_in_region"].tolist() == expected
        assert attribute(region.units, name).tolist() == expected
    assert region.units["zone"].tolist() == ["n", "s"]
    notes = region.findings[region.findings["severity"] == "note"]
    assert set(notes["field"]) == set(values)
    assert "kept as 'Decision_in_region'" in notes["action"].tolist()


def test_names_that_differ_by_case_only_are_told_apart(tmp_path):
    names, findings = free_names(["Zone", "zone", "ZONE", "zone_2", "sites", "sites_in_region", "Sites"])
    assert names == [
        "Zone", "zone_2_2", "ZONE_2_3", "zone_2", "sites_in_region_2", "sites_in_region", "Sites_in_region_3"
    ]  # fmt: skip
    assert len({name.casefold() for name in names}) == len(names)
    assert [finding.severity for finding in findings] == ["note"] * 4
    path = write(
        tmp_path,
        [square(400e3, 8.5e6), square(410e3, 8.5e6)],
        file="units.geojson",
        district=["Oru", "Tavo"],
        Zone=["n", "s"],
        zone=["1", "2"],
    )
    region = prevmap.read_region(path, name="district")
    region.units.to_file(tmp_path / "again.gpkg")
    again = gpd.read_file(tmp_path / "again.gpkg")
    assert (again["Zone"].tolist(), again["zone_2"].tolist()) == (["n", "s"], ["1", "2"])
    assert any("only by case" in what for what in whats(region, "note"))


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.lists(st.sampled_from(["a", "A", "a_2", "Mean", "mean", "mean_in_region", "fid", "Geom", "x"])))
def test_attribute_names_are_free_and_distinct_whatever_the_file_says(names):
    names = list(dict.fromkeys(names))
    free, findings = free_names(names)
    assert len({name.casefold() for name in free}) == len(names)
    assert not any(is_own_column(name) for name in free)
    assert len(findings) == sum(old != new for old, new in zip(names, free, strict=True))


def test_missing_empty_and_wrong_files(tmp_path):
    with pytest.raises(InputError, match=r"nowhere\.geojson: there is no such file"):
        prevmap.read_region(tmp_path / "nowhere.geojson")
    (tmp_path / "text.geojson").write_text("not a map")
    with pytest.raises(InputError, match=r"text\.geojson: cannot be read"):
        prevmap.read_region(tmp_path / "text.geojson")
    points = gpd.GeoDataFrame({"name": ["a"]}, geometry=[shapely.Point(30, 10)], crs=4326)
    points.to_file(tmp_path / "points.geojson")
    with pytest.raises(InputError, match=r"polygons are expected, found Point in feature 1"):
        prevmap.read_region(tmp_path / "points.geojson")


def test_a_file_without_coordinate_system_needs_one(tmp_path):
    frame = gpd.GeoDataFrame({"name": ["Oru"]}, geometry=[square(400e3, 8.5e6)], crs=UTM)
    frame.to_file(tmp_path / "units.shp")
    (tmp_path / "units.prj").unlink()
    with pytest.raises(InputError, match=r"names no coordinate system.*crs="):
        prevmap.read_region(tmp_path / "units.shp")
    assert prevmap.read_region(tmp_path / "units.shp", crs=32636).area_km2 == pytest.approx(
        100.0, rel=ALGEBRA
    )
    with pytest.raises(InputError, match="not a coordinate system"):
        prevmap.read_region(tmp_path / "units.shp", crs="nonsense")
    with pytest.raises(InputError, match=r"its coordinate system is 'WGS 84 / UTM zone 36N'.*crs= says"):
        prevmap.read_region(pair(tmp_path), name="district", crs=32637)


def test_metres_declared_as_degrees_are_named(tmp_path):
    path = write(tmp_path, [square(400e3, 8.5e6)], crs=4326, file="wrong.gpkg", name=["Oru"])
    with pytest.raises(InputError, match=r"wrong\.gpkg: coordinates such as x = .* impossible as degrees"):
        prevmap.read_region(path)


def test_an_invalid_polygon_is_repaired_and_said(tmp_path):
    bow = shapely.Polygon([(400e3, 8.5e6), (410e3, 8.51e6), (410e3, 8.5e6), (400e3, 8.51e6)])
    region = prevmap.read_region(write(tmp_path, [bow], name=["Oru"]))
    assert region.units.geometry.iloc[0].is_valid
    # Two triangles of base 10 km and height 5 km.
    assert region.area_km2 == pytest.approx(50.0, rel=ALGEBRA)
    row = region.findings.iloc[0]
    assert (row["row"], row["field"], row["severity"]) == (1, "geometry", "warning")
    assert "Self-intersection" in row["what"]


def test_features_without_geometry_are_named(tmp_path):
    frame = gpd.GeoDataFrame({"name": ["a", "b"]}, geometry=[square(400e3, 8.5e6), None], crs=UTM)
    frame.to_file(tmp_path / "units.gpkg")
    with pytest.raises(InputError, match="no geometry in feature 2"):
        prevmap.read_region(tmp_path / "units.gpkg")


def test_overlaps_and_gaps_are_warnings_with_their_area(tmp_path):
    shapes = [square(400e3, 8.5e6), square(409e3, 8.5e6)]
    region = prevmap.read_region(write(tmp_path, shapes, name=["Oru", "Tavo"]))
    assert "10 km² in all: Oru and Tavo" in whats(region, "warning")[0]
    assert region.area_km2 == pytest.approx(190.0, rel=ALGEBRA)
    ring = square(400e3, 8.5e6).difference(square(402e3, 8.502e6, 2000.0))
    region = prevmap.read_region(write(tmp_path, [ring], file="ring.gpkg", name=["Oru"]))
    assert "1 gap inside the region belong to no unit: 4 km²" in whats(region, "warning")[0]


def test_units_that_only_touch_are_no_finding(tmp_path):
    parts = shapely.MultiPolygon([square(420e3, 8.5e6), square(440e3, 8.5e6)])
    shapes = [square(400e3, 8.5e6), square(410e3, 8.5e6), parts]
    region = prevmap.read_region(write(tmp_path, shapes, name=["a", "b", "c"]))
    assert len(region.findings) == 0
    assert region.units.geometry.iloc[2].geom_type == "MultiPolygon"
    assert region.area_km2 == pytest.approx(400.0, rel=ALGEBRA)


def test_excluded_land_leaves_the_boundary_but_not_the_units(tmp_path):
    lakes = write(tmp_path, [square(405e3, 8.505e6, 4000.0)], file="lakes.gpkg", kind=["lake"])
    region = prevmap.read_region(pair(tmp_path), name="district", exclude=lakes)
    assert region.area_km2 == pytest.approx(200.0 - 16.0, rel=ALGEBRA)
    assert region.units.area.sum() == pytest.approx(200e6, rel=ALGEBRA)
    assert shapely.area(region.land()).tolist() == pytest.approx([84e6, 100e6], rel=ALGEBRA)
    far = write(tmp_path, [square(700e3, 8.5e6)], file="far.gpkg", kind=["lake"])
    region = prevmap.read_region(pair(tmp_path), name="district", exclude=far)
    assert region.exclude is None
    assert "no polygon of far.gpkg meets the region" in whats(region, "warning")[0]
    everything = write(tmp_path, [square(390e3, 8.49e6, 50_000.0)], file="all.gpkg", kind=["sea"])
    with pytest.raises(InputError, match=r"all\.gpkg: the excluded polygons cover the whole region"):
        prevmap.read_region(pair(tmp_path), name="district", exclude=everything)


def test_a_unit_wholly_under_water_is_a_warning(tmp_path):
    lakes = write(tmp_path, [shapely.box(399e3, 8.49e6, 410e3, 8.52e6)], file="lakes.gpkg", kind=["lake"])
    region = prevmap.read_region(pair(tmp_path), name="district", exclude=lakes)
    assert "unit 'Oru' lies wholly inside the excluded land" in whats(region, "warning")[0]


def test_excluded_land_may_come_in_degrees(tmp_path):
    lake = gpd.GeoSeries([square(405e3, 8.505e6, 4000.0)], crs=UTM).to_crs(4326)
    lakes = write(tmp_path, lake, crs=4326, file="lakes.geojson", kind=["lake"])
    region = prevmap.read_region(pair(tmp_path), name="district", exclude=lakes)
    assert region.area_km2 == pytest.approx(184.0, rel=1e-6)  # edges straight in degrees bend by millimetres


def test_only_the_first_of_several_layers_is_read_and_said(tmp_path):
    frame = gpd.GeoDataFrame({"name": ["Oru"]}, geometry=[square(400e3, 8.5e6)], crs=UTM)
    frame.to_file(tmp_path / "two.gpkg", layer="units")
    frame.to_file(tmp_path / "two.gpkg", layer="other")
    assert "only 'units' was read" in prevmap.read_region(tmp_path / "two.gpkg").findings["action"].iloc[0]


def test_the_hull_works_from_one_site_up():
    one = hull_region(gpd.GeoSeries.from_xy([33.5], [-12.0], crs=4326))
    assert one.buffer_km == 10.0
    assert not one.has_units
    assert one.units.columns.tolist() == ["unit", "code", "parent", "geometry"]
    # A circle of 10 km drawn with 64 corners.
    assert one.area_km2 == pytest.approx(0.5 * 64 * 100.0 * np.sin(2 * np.pi / 64), rel=1e-6)
    assert "buffer of 10 km" in one.findings["what"].iloc[0]
    two = hull_region(gpd.GeoSeries.from_xy([400e3, 420e3], [8.5e6, 8.5e6], crs=UTM))
    assert two.buffer_km == pytest.approx(20.0)
    assert two.crs == UTM
    given = hull_region(gpd.GeoSeries.from_xy([400e3, 420e3], [8.5e6, 8.5e6], crs=UTM), buffer_km=3)
    assert given.boundary.bounds == pytest.approx((397e3, 8.497e6, 423e3, 8.503e6))


def test_the_hull_reaches_round_every_site_and_ignores_repeated_positions(rng):
    x, y = rng.uniform(400e3, 500e3, 40), rng.uniform(8.5e6, 8.6e6, 40)
    once = hull_region(gpd.GeoSeries.from_xy(x, y, crs=UTM))
    twice = hull_region(gpd.GeoSeries.from_xy(np.r_[x, x], np.r_[y, y], crs=UTM))
    assert once.buffer_km == twice.buffer_km
    points = shapely.points(x, y)
    assert shapely.contains(once.boundary, points).all()
    # Round corners are drawn with corners some 6 degrees apart: a cut of a seventh of a percent.
    assert shapely.distance(once.boundary.exterior, points).min() >= 998.0 * once.buffer_km


@pytest.mark.parametrize("buffer_km", [0, -1, float("nan")])
def test_a_buffer_must_be_positive(buffer_km):
    with pytest.raises(InputError, match=r"buffer_km=.*positive"):
        hull_region(gpd.GeoSeries.from_xy([33.5], [-12.0], crs=4326), buffer_km=buffer_km)


def test_a_hull_needs_positions_and_a_coordinate_system():
    with pytest.raises(InputError, match="no coordinate system"):
        hull_region(gpd.GeoSeries.from_xy([33.5], [-12.0]))
    with pytest.raises(InputError, match="no site position"):
        hull_region(gpd.GeoSeries([shapely.Point()], crs=4326))


def test_a_region_prints_itself_with_escaped_findings(tmp_path):
    path = pair(tmp_path, district=["<b>Oru</b>", "Tavo"], code=["<i>", "x"])
    region = prevmap.read_region(path, name="district")
    assert "2 units, 200 km²" in repr(region)
    assert "Distances off by at most" in region._repr_html_()
    assert "<i>" not in region._repr_html_()
    assert isinstance(region.findings, pd.DataFrame)


def test_the_buffer_does_not_shrink_to_the_spacing_of_close_pairs():
    # Nearest distances 1, 1 and 48.4 km; the extent's diagonal is 50 km.
    region = hull_region(gpd.GeoSeries.from_xy([400e3, 401e3, 440e3], [8.5e6, 8.5e6, 8.53e6], crs=UTM))
    assert region.buffer_km == pytest.approx(2.5, rel=ALGEBRA)
