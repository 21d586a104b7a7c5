import geopandas as gpd
import pandas as pd
import pytest
import shapely
from pyproj import CRS

import prevmap
from prevmap.inputs.placement import exchange_hint
from prevmap.inputs.region import assign_units, assign_unplaced, hull_region, site_findings

UTM = CRS.from_epsg(32636)


@pytest.fixture
def region(tmp_path):
    shapes = [shapely.box(400e3, 8.5e6, 410e3, 8.51e6), shapely.box(410e3, 8.5e6, 420e3, 8.51e6)]
    frame = gpd.GeoDataFrame({"name": ["Oru", "Tavo"], "pcode": ["A1", "B2"]}, geometry=shapes, crs=UTM)
    frame.to_file(tmp_path / "units.gpkg")
    lake = gpd.GeoDataFrame(geometry=[shapely.box(405e3, 8.505e6, 408e3, 8.508e6)], crs=UTM)
    lake.to_file(tmp_path / "lakes.gpkg")
    return prevmap.read_region(tmp_path / "units.gpkg", code="pcode", exclude=tmp_path / "lakes.gpkg")


def survey(x, y, **columns):
    frame = pd.DataFrame({"examined": 40, "positive": 4, "x": x, "y": y, **columns})
    names = {each: each for each in ("site", "unit") if each in columns}
    return prevmap.Survey.from_frame(
        frame, examined="examined", positive="positive", x="x", y="y", crs=UTM, **names
    )


def test_sites_are_kept_inside_and_within_the_margin(region):
    found = survey(
        [405e3, 406e3, 423e3, 460e3], [8.502e6, 8.506e6, 8.505e6, 8.505e6], site=["a", "b", "c", "d"]
    )
    keep, findings = site_findings(found.frame, region, 5.0)
    assert keep.tolist() == [True, True, True, False]
    assert [(each.site, each.severity) for each in findings] == [("b", "note"), ("c", "note"), ("d", "error")]
    assert "excluded land" in findings[0].what
    assert "lies 3 km outside" in findings[1].what
    assert "lies 40 km outside the study area (more than 5 km)" in findings[2].what
    _, [far] = site_findings(survey([1_440e3], [8.505e6]).frame, region, 1000.4)
    assert far.what == "lies 1,020 km outside the study area (more than 1,000 km)"
    assert findings[2].row == found.frame.index[3]


def test_units_by_position(region):
    found = survey([405e3, 406e3, 415e3, 423e3], [8.502e6, 8.506e6, 8.505e6, 8.505e6])
    unit, findings = assign_units(found, region)
    assert unit.tolist() == [0, 0, 1, -1]
    assert findings == []


def test_a_declared_unit_is_held_against_the_position(region):
    found = survey(
        [405e3, 405e3, 405e3, 421e3, 421e3, 405e3],
        [8.502e6, 8.503e6, 8.504e6, 8.505e6, 8.506e6, 8.501e6],
        site=list("abcdef"),
        unit=["oru", "Tavo", "Tavvo", "Tavo", "Oru", "A1"],
    )
    unit, findings = assign_units(found, region)
    assert unit.tolist() == [0, 0, 0, 1, -1, 0]
    by_site = {each.site: each for each in findings}
    assert sorted(by_site) == ["b", "c", "d", "e"]
    assert "declares unit 'Tavo' but lies in 'Oru'" in by_site["b"].what
    assert "did you mean 'Tavo'?" in by_site["c"].what
    assert (by_site["d"].severity, by_site["d"].action) == ("note", "counted in 'Tavo'")
    assert by_site["e"].action.startswith("counted in no unit")


def test_the_first_of_overlapping_units_is_taken(tmp_path):
    shapes = [shapely.box(400e3, 8.5e6, 412e3, 8.51e6), shapely.box(408e3, 8.5e6, 420e3, 8.51e6)]
    gpd.GeoDataFrame({"name": ["Oru", "Tavo"]}, geometry=shapes, crs=UTM).to_file(tmp_path / "units.gpkg")
    overlapping = prevmap.read_region(tmp_path / "units.gpkg")
    assert assign_units(survey([410e3, 419e3], [8.505e6, 8.505e6]), overlapping)[0].tolist() == [0, 1]


def test_rows_without_position_go_by_name_or_code(region):
    found = survey(
        [405e3, None, None, None],
        [8.502e6, None, None, None],
        site=list("abcd"),
        unit=["Oru", "Tavo", "A1", "Nowhere"],
    )
    unit, findings = assign_unplaced(found, region)
    assert len(found.frame) == 1
    assert unit.tolist() == [1, 0, -1]
    # The survey itself has a note for each of them; what is said here is only what the region adds.
    assert [each.severity for each in findings] == ["note", "error"]
    assert "its unit 'A1' is 'Oru' of the region" in findings[0].what
    assert "'Nowhere' is not in the region" in findings[1].what
    assert found.findings["row"].tolist().count(findings[0].row) == 1
    assert (found.findings["site"] == "b").sum() == 1


def test_without_units_every_row_is_outside_every_unit():
    found = survey([405e3, 415e3], [8.502e6, 8.505e6])
    unit, findings = assign_units(found, hull_region(found.frame.geometry))
    assert (unit.tolist(), findings) == ([-1, -1], [])


def degrees(lon, lat):
    return gpd.GeoDataFrame(geometry=gpd.points_from_xy(lon, lat), crs=4326)


def test_sites_with_longitude_and_latitude_exchanged_are_named(region):
    inside = degrees([405e3] * 3, [8.502e6] * 3).set_crs(UTM, allow_override=True).to_crs(4326).geometry
    exchanged = degrees([*inside.y, 10.0], [*inside.x, 10.0])
    hint = exchange_hint(exchanged, region, 5.0)
    assert hint.startswith(
        " With lon and lat exchanged, 3 of 4 rows would lie in or near it: exchange lon= and"
    )
    assert "units.gpkg" in hint
    assert exchange_hint(degrees(inside.x, inside.y), region, 5.0) == ""
    assert exchange_hint(degrees([*inside.y, inside.x[0]], [*inside.x, inside.y[0]]), region, 5.0) == ""
    assert exchange_hint(degrees([10.0, 120.0, -75.0], [10.0, 5.0, 80.0]), region, 5.0) == ""
    assert exchange_hint(exchanged.iloc[:0], region, 5.0) == ""
    assert exchange_hint(exchanged.to_crs(3857), region, 5.0) == ""


def test_a_region_with_longitude_and_latitude_exchanged_is_named(tmp_path):
    area = gpd.GeoDataFrame({"name": ["Oru"]}, geometry=[shapely.box(5.0, -33.0, 7.0, -31.0)], crs=4326)
    area.to_file(tmp_path / "units.geojson")
    found = exchange_hint(
        degrees([-32.0, -32.5], [6.0, 5.5]), prevmap.read_region(tmp_path / "units.geojson"), 0.0
    )
    assert "2 of 2 rows would lie in or near it" in found
    assert "correct" in found


@pytest.mark.parametrize("engine", ["exact", "mesh"])
def test_a_fit_says_that_coordinates_are_exchanged(tmp_path, engine):
    area = gpd.GeoDataFrame({"name": ["Oru"]}, geometry=[shapely.box(5.0, -33.0, 7.0, -31.0)], crs=4326)
    area.to_file(tmp_path / "units.geojson")
    table = pd.DataFrame(
        {"examined": 40, "positive": 4, "lon": [-32.0, -32.4, -31.5], "lat": [6.0, 5.5, 6.5]}
    )
    found = prevmap.Survey.from_frame(table, examined="examined", positive="positive", lon="lon", lat="lat")
    region = prevmap.read_region(tmp_path / "units.geojson")
    with pytest.raises(prevmap.InputError, match=r"no site lies in or near .* 3 of 3 rows would lie"):
        prevmap.PrevalenceModel().fit(found, region=region, engine=engine)
