import numpy as np
import pytest
import shapely
from pyproj import CRS, Geod, Transformer

from prevmap.errors import InputError
from prevmap.inputs.working_crs import choose_working_crs, distance_distortion, horizontal, in_metres


def boxes(*bounds):
    return np.array([shapely.box(*bounds)], dtype=object)


def test_a_projected_system_in_metres_is_kept():
    given = CRS.from_epsg(32636)
    working = choose_working_crs(boxes(400e3, 8.5e6, 600e3, 8.6e6), given)
    assert working.crs == given
    assert working.findings == ()


def test_utm_scale_at_the_central_meridian_is_its_published_value():
    # The central scale factor of UTM is 0.9996 (Snyder 1987, USGS Professional Paper 1395, p. 57).
    assert distance_distortion(CRS.from_epsg(32636), np.array([33.0]), np.array([-12.0])) == pytest.approx(
        4e-4, abs=1e-8
    )  # a step of a kilometre


def test_azimuthal_equal_area_scale_follows_snyder():
    # Across the radius k' = 1 / cos(c / 2), along it h' = cos(c / 2) on the sphere
    # (Snyder 1987, chapter 24).
    sphere = CRS.from_proj4("+proj=laea +lat_0=0 +lon_0=0 +R=6371000 +units=m")
    ten = distance_distortion(sphere, np.array([0.0, 10.0]), np.array([0.0, 0.0]))
    assert ten == pytest.approx(1.0 / np.cos(np.radians(5.0)) - 1.0, rel=1e-5)  # factors by differences


def test_feet_become_metres_in_the_same_projection():
    feet = CRS.from_epsg(2264)  # a state plane system in US survey feet of 1200/3937 m
    metric = in_metres(feet)
    assert {axis.unit_name for axis in metric.axis_info} == {"metre"}
    x, y = Transformer.from_crs(feet, metric, always_xy=True).transform(2_000_000.0, 500_000.0)
    assert (x, y) == pytest.approx(
        (2_000_000.0 * 1200 / 3937, 500_000.0 * 1200 / 3937), abs=1e-6
    )  # a micrometre
    working = choose_working_crs(boxes(1.9e6, 4e5, 2.1e6, 6e5), feet)
    assert working.crs == metric
    assert "in metres is used" in working.findings[0].action


@pytest.mark.parametrize(
    "bounds", [(33.0, -14.0, 35.0, -9.0), (10.0, -2.0, 18.0, 2.0), (5.0, 58.0, 20.0, 62.0)]
)
def test_geographic_input_gets_a_flat_map_with_true_distances(bounds, rng):
    working = choose_working_crs(boxes(*bounds), CRS.from_epsg(4326))
    assert working.crs.is_projected
    assert working.distortion < 0.005
    # Independent of the scale factors: geodesics on the ellipsoid against flat distances, all over the box.
    lon, lat = rng.uniform(bounds[0], bounds[2], 200), rng.uniform(bounds[1], bounds[3], 200)
    turn = rng.uniform(0.0, 360.0, 200)
    there = Geod(ellps="WGS84").fwd(lon, lat, turn, np.full(200, 1000.0))
    flat = Transformer.from_crs(4326, working.crs, always_xy=True)
    ends = np.array(flat.transform(lon, lat)), np.array(flat.transform(there[0], there[1]))
    scale = np.hypot(*(ends[0] - ends[1])) / 1000.0
    assert (
        np.abs(scale - 1.0).max() <= working.distortion * 1.02 + 1e-7
    )  # sampled on a lattice, not everywhere
    assert np.abs(scale - 1.0).max() >= 0.3 * working.distortion


def test_the_shape_of_the_region_decides_the_projection():
    wide = choose_working_crs(boxes(-10.0, 45.0, 30.0, 48.0), CRS.from_epsg(4326))
    tall = choose_working_crs(boxes(33.0, -25.0, 35.0, 5.0), CRS.from_epsg(4326))
    equator = choose_working_crs(boxes(-20.0, -2.0, 20.0, 2.0), CRS.from_epsg(4326))
    assert wide.crs.name.startswith("Conic")
    assert tall.crs.name.startswith("Transverse")
    assert equator.crs.name.startswith("Cylindrical")
    assert max(wide.distortion, tall.distortion, equator.distortion) < 0.001


def test_a_continent_is_a_warning_and_a_poor_projected_system_too():
    continent = choose_working_crs(boxes(-20.0, -30.0, 50.0, 35.0), CRS.from_epsg(4326))
    assert continent.distortion > 0.02
    assert [finding.severity for finding in continent.findings] == ["warning"]
    # On the sphere the scale of the Mercator projection is 1 / cos(latitude): near 2 at 60 degrees.
    mercator = choose_working_crs(boxes(1e6, 8.3e6, 1.1e6, 8.4e6), CRS.from_epsg(3857))
    assert mercator.distortion == pytest.approx(1.0, abs=0.02)  # the box ends at 60.2 degrees
    assert mercator.crs == CRS.from_epsg(3857)
    assert "kept as given" in mercator.findings[0].action


def test_a_region_across_the_180th_meridian_stays_in_one_piece():
    halves = np.array([shapely.box(177.0, -19.0, 180.0, -16.0), shapely.box(-180.0, -19.0, -178.0, -16.0)])
    working = choose_working_crs(halves, CRS.from_epsg(4326))
    assert working.distortion < 0.001


def test_compound_systems_lose_their_heights():
    assert horizontal(CRS.from_epsg(7405)) == CRS.from_epsg(27700)


def test_impossible_degrees_and_systems_without_a_place_on_earth_are_input_errors():
    with pytest.raises(InputError, match=r"x = .*impossible as degrees.*metres"):
        choose_working_crs(boxes(400e3, 8.5e6, 600e3, 8.6e6), CRS.from_epsg(4326))
    with pytest.raises(InputError, match="neither geographic nor projected"):
        choose_working_crs(boxes(0, 0, 1, 1), CRS.from_epsg(4978))


def test_scale_on_the_ellipsoid_is_not_taken_for_that_of_a_sphere():
    # At the equator a metre north is stretched by a / M = 1 / (1 - e2) on this map, a metre east by nothing;
    # e2 = 0.00669438 (World Geodetic System 1984).
    web = distance_distortion(CRS.from_epsg(3857), np.array([10.0]), np.array([0.0]))
    assert web == pytest.approx(1.0 / (1.0 - 0.00669438) - 1.0, abs=1e-7)  # a step of a kilometre


def test_grads_from_another_meridian_of_zero_are_understood():
    paris = CRS.from_epsg(4807)
    working = choose_working_crs(boxes(0.0, 49.0, 3.0, 53.0), paris)  # in grads
    assert working.distortion < 0.001
    # The published scale factor at the centre of this zone is 0.99987742 (EPSG:27572, from memory).
    zone = CRS.from_epsg(27572)
    centre = np.array([0.0]), np.array([46.8])
    assert distance_distortion(zone, *centre) == pytest.approx(
        1.0 - 0.99987742, abs=1e-7
    )  # a step of a kilometre
