import geopandas as gpd
import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import CRS, Geod

import prevmap
from prevmap.errors import InputError
from prevmap.inputs.coverage import cell_shares, cut, raster_sums
from prevmap.inputs.findings import findings_frame
from prevmap.inputs.region import Region, hull_region
from tests.test_region import COUNTIES, DISTRICTS
from tests.tolerances import ALGEBRA

UTM = CRS.from_epsg(32636)
COVERED = 1e-7  # the overlay takes the share of a cell in single precision


def region_of(shapes, exclude=None, crs=UTM):
    names = [f"unit {number}" for number in range(len(shapes))]
    units = gpd.GeoDataFrame({"unit": names, "code": None, "parent": None}, geometry=list(shapes), crs=crs)
    boundary = shapely.union_all(np.array(shapes, dtype=object))
    if exclude is not None:
        boundary = boundary.difference(exclude)
    return Region(units, boundary, crs, 0.0, findings_frame([]), "made in the test", exclude)


def box(left, bottom, right, top):
    return shapely.box(1000.0 * left, 1000.0 * bottom, 1000.0 * right, 1000.0 * top)


@pytest.fixture(scope="module")
def districts():
    return prevmap.read_region(DISTRICTS, name="adm1_code")


def test_cells_of_a_rectangle_counted_by_hand():
    # 25 km by 10 km from (3, 2): cells of 5 km from 0 to 30 and 0 to 15, the outer ones partly covered.
    grid = region_of([box(3, 2, 28, 12)]).grid(cell_km=5)
    assert grid.shape == (3, 6)
    assert grid.origin_m == (0.0, 15_000.0)
    assert grid.cell.tolist() == list(range(18))
    rows, cols = np.array([2.0, 5.0, 3.0]), np.array([2.0, 5.0, 5.0, 5.0, 5.0, 3.0])
    assert grid.coverage.reshape(3, 6) == pytest.approx(np.outer(rows, cols) / 25.0, abs=COVERED)
    inside = grid.xy_km.reshape(3, 6, 2)[1, 2]
    assert inside == pytest.approx([12.5, 7.5])


def test_every_point_lies_in_its_own_cell_and_in_the_region(districts):
    grid = districts.grid(cell_km=7)
    x, y = 1000.0 * grid.xy_km.T
    assert shapely.intersects_xy(districts.boundary.buffer(1e-6), x, y).all()
    row = np.floor((grid.origin_m[1] - y) / grid.cell_m).astype(int)
    col = np.floor((x - grid.origin_m[0]) / grid.cell_m).astype(int)
    assert (row * grid.shape[1] + col).tolist() == grid.cell.tolist()
    centres = np.column_stack([(col + 0.5) * grid.cell_m, -(row + 0.5) * grid.cell_m]) + grid.origin_m
    dry = shapely.intersects_xy(districts.boundary, *centres.T)
    assert np.abs(centres - 1000.0 * grid.xy_km)[dry].max() == pytest.approx(0.0, abs=1e-6)
    assert (~dry).sum() > 50


def test_unit_areas_are_the_sum_of_their_pieces_and_the_geodesic_area():
    region = prevmap.read_region(COUNTIES, name="NAME")
    grid = region.grid(cell_km=5)
    pieces = np.bincount(grid.pair_unit, grid.pair_coverage) * grid.cell_m**2
    assert pieces == pytest.approx(region.units.area.to_numpy(), rel=COVERED)
    raw = shapely.segmentize(gpd.read_file(COUNTIES).geometry.array, 0.01)
    geodesic = [abs(Geod(ellps="WGS84").geometry_area_perimeter(each)[0]) for each in raw]
    assert pieces == pytest.approx(np.array(geodesic), rel=1e-5)  # edges of 2 km bend in the projection
    assert grid.coverage.sum() * grid.cell_m**2 == pytest.approx(region.boundary.area, rel=COVERED)


def test_coverage_equals_plain_intersections(districts):
    grid = districts.grid(cell_km=40)
    cells = [
        shapely.box(*(grid.transform @ (col, row + 1)), *(grid.transform @ (col + 1, row)))
        for row, col in zip(*np.divmod(grid.cell, grid.shape[1]), strict=True)
    ]
    plain = shapely.area(shapely.intersection(np.array(cells), districts.boundary)) / grid.cell_m**2
    assert grid.coverage == pytest.approx(plain, abs=COVERED)
    one = grid.pair_unit == 5
    unit = districts.units.geometry.iloc[5]
    share = shapely.area(shapely.intersection(np.array(cells)[grid.pair_cell[one]], unit)) / grid.cell_m**2
    assert grid.pair_coverage[one] == pytest.approx(share, abs=COVERED)


def test_pieces_of_units_leave_excluded_land_out():
    region = region_of([box(0, 0, 10, 10), box(10, 0, 20, 10)], exclude=box(8, 0, 12, 10))
    grid = region.grid(cell_km=2)
    assert grid.coverage.sum() * 4.0 == pytest.approx(160.0, rel=ALGEBRA)
    assert np.bincount(grid.pair_unit, grid.pair_coverage) * 4.0 == pytest.approx([80.0, 80.0], rel=ALGEBRA)
    assert len(grid) == 40
    assert np.bincount(grid.pair_cell, grid.pair_coverage) == pytest.approx(grid.coverage, rel=ALGEBRA)


def test_a_unit_under_water_has_no_pieces():
    region = region_of([box(0, 0, 10, 10), box(10, 0, 20, 10)], exclude=box(10, -1, 21, 11))
    grid = region.grid(cell_km=2)
    assert set(grid.pair_unit.tolist()) == {0}


@given(
    st.lists(st.tuples(*[st.floats(-40, 40)] * 2), min_size=4, max_size=9),
    st.floats(0.7, 30.0),
)
@settings(max_examples=30, deadline=None)
def test_area_is_additive_for_any_outline_and_cell(corners, cell_km):
    hull = shapely.convex_hull(shapely.multipoints(1000.0 * np.array(corners)))
    if hull.geom_type != "Polygon" or hull.area < 1e6:
        return
    left, _, right, _ = hull.bounds
    half = shapely.box(left, -1e5, 0.5 * (left + right), 1e5)
    region = region_of([hull.intersection(half), hull.difference(half)])
    grid = region.grid(cell_km=cell_km)
    pieces = np.bincount(grid.pair_unit, grid.pair_coverage, minlength=2) * grid.cell_m**2
    slack = COVERED * grid.cell_m**2 * len(grid)
    assert pieces == pytest.approx(region.units.area.to_numpy(), abs=slack)
    assert np.bincount(grid.pair_cell, grid.pair_coverage, minlength=len(grid)) == pytest.approx(
        grid.coverage, abs=COVERED
    )
    assert ((grid.coverage > 0.0) & (grid.coverage <= 1.0)).all()


@pytest.mark.parametrize("wanted", [30, 400, 5000, 20_000])
def test_cells_picks_an_edge_with_about_as_many_cells(districts, wanted):
    assert len(districts.grid(cells=wanted)) == pytest.approx(wanted, rel=0.05)  # "about"


def test_the_default_is_about_five_thousand_cells(districts):
    assert len(districts.grid()) == pytest.approx(5000, rel=0.05)  # "about"


def test_one_cell_is_enough():
    region = region_of([box(3, 3, 4, 4)])
    assert len(region.grid(cell_km=100)) == 1
    assert region.grid(cell_km=100).coverage == pytest.approx([1e-4], rel=1e-6)  # of the cell


def test_cells_are_aligned_whatever_the_region():
    grids = [region_of([box(left, 1, left + 17, 9)]).grid(cell_km=2.5) for left in (-31.7, 4.0, 58.3)]
    for grid in grids:
        assert np.mod(np.array(grid.origin_m), 2500.0).tolist() == [0.0, 0.0]


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ({"cell_km": 5, "cells": 10}, "give one of them"),
        ({"cell_km": 0}, "cell_km=0: a positive number"),
        ({"cell_km": float("nan")}, "cell_km=nan"),
        ({"cells": 0}, "cells=0"),
        ({"cells": True}, "cells=True"),
    ],
)
def test_impossible_sizes_are_input_errors(districts, asked, message):
    with pytest.raises(InputError, match=message):
        districts.grid(**asked)


def test_too_many_cells_are_refused_with_an_edge_that_fits(districts):
    with pytest.raises(
        InputError, match=r"at most 20,000,000 fit\. An edge of cell_km=([0-9.]+) fits"
    ) as caught:
        districts.grid(cell_km=0.01)
    edge = float(str(caught.value).split("cell_km=")[1].split(" ")[0])
    left, bottom, right, top = districts.boundary.bounds
    rectangle = ((right - left) / (1000 * edge) + 1) * ((top - bottom) / (1000 * edge) + 1)
    assert 15e6 < rectangle <= 20e6


def test_values_become_a_raster_with_north_first():
    grid = region_of([box(0, 0, 10, 20)]).grid(cell_km=5)
    raster = grid.to_raster(grid.xy_km[:, 1])
    assert raster.shape == grid.shape
    assert raster[:, 0].tolist() == [17.5, 12.5, 7.5, 2.5]
    assert grid.transform @ (0.5, 0.5) == pytest.approx(tuple(1000.0 * grid.xy_km[0]))
    hole = region_of([box(0, 0, 10, 20).difference(box(0, 5, 5, 10))]).grid(cell_km=5)
    assert np.isnan(hole.to_raster(hole.coverage)).sum() == 1
    assert hole.to_raster(hole.coverage, fill=-1.0)[2, 0] == -1.0
    with pytest.raises(InputError, match="one value per cell"):
        grid.to_raster(np.zeros(3))


def test_points_come_in_windows(districts):
    grid = districts.grid(cells=500)
    whole = grid.frame_points()
    assert districts.project(whole) == pytest.approx(grid.xy_km, rel=ALGEBRA)
    part = grid.frame_points(100, 103)
    assert part.index.tolist() == [100, 101, 102]
    assert part.geometry.tolist() == whole.geometry.iloc[100:103].tolist()


def test_a_hull_has_cells_and_no_pieces():
    region = hull_region(gpd.GeoSeries.from_xy([400e3, 420e3], [8.5e6, 8.5e6], crs=UTM))
    grid = region.grid(cell_km=2)
    assert grid.coverage.sum() * 4.0 == pytest.approx(region.area_km2, rel=COVERED)
    assert len(grid.pair_cell) == len(grid.pair_unit) == len(grid.pair_coverage) == 0
    assert grid.people is None
    assert "no population" in repr(grid)


def test_cutting_by_halves_equals_cutting_one_by_one(districts, rng):
    x, y = rng.uniform(-60e3, 60e3, 300), rng.uniform(-300e3, 300e3, 300)
    boxes = shapely.box(x, y, x + 9000.0, y + 9000.0)
    plain = shapely.area(shapely.intersection(districts.boundary, boxes))
    assert shapely.area(cut(districts.boundary, boxes)) == pytest.approx(plain, abs=1e-3)  # of 81 km²


def test_sums_over_pixels_by_hand():
    values = np.array([[1.0, 2.0], [3.0, np.nan]])
    shapes = np.array(
        [shapely.box(0.5, 0.5, 1.5, 1.5), shapely.Polygon(), shapely.box(5, 5, 6, 6)], dtype=object
    )
    sums, pixels = raster_sums(shapes, values, (0.0, 0.0, 2.0, 2.0))
    assert sums == pytest.approx([0.25 * 6.0, 0.0, 0.0], rel=ALGEBRA)
    assert pixels == pytest.approx([0.75, 0.0, 0.0], rel=ALGEBRA)


def test_no_land_no_cells():
    cell, share = cell_shares(shapely.Polygon(), (3, 3), (0.0, 0.0, 3.0, 3.0))
    assert len(cell) == len(share) == 0


def test_corners_a_hair_off_a_cell_edge_do_not_lead_the_overlay_astray():
    # Corners 1e-39 beside a grid line, and a hole thinner than rounding, both found by searching at random.
    near = shapely.Polygon([(1e-9, -0.3), (-1e-39, 1e-186), (1.8, 0.6)])
    cell, share = cell_shares(near, (2, 2), (-2.0, -2.0, 2.0, 2.0))
    assert cell.tolist() == [1, 3]
    assert share.sum() * 4.0 == pytest.approx(near.area, abs=COVERED)
    thin = shapely.Polygon([(7.3, 3.4), (4.6, 2.1), (4.6 + 1e-10, 2.1)])
    holed = shapely.box(0.5, 0.5, 9.5, 9.5).difference(thin)
    assert cell_shares(holed, (10, 10), (0.0, 0.0, 10.0, 10.0))[1].sum() == pytest.approx(81.0, rel=COVERED)
    sums, pixels = raster_sums(np.array([holed, thin]), np.full((10, 10), 7.0), (0.0, 0.0, 10.0, 10.0))
    assert sums == pytest.approx([7.0 * 81.0, 0.0], abs=1e-4)  # shares in single precision
    assert pixels == pytest.approx([81.0, 0.0], abs=1e-5)  # shares in single precision


@given(st.integers(0, 2**32 - 1))
@settings(max_examples=60, deadline=None)
def test_thin_shapes_on_grid_lines_are_covered_as_plain_intersections_say(seed):
    draw = np.random.default_rng(seed)
    corners = draw.integers(1, 9, (3, 2)) + draw.choice([0.0, 1e-39, 1e-17, 1e-9, 1e-6, 0.5], (3, 2))
    line = np.linspace(corners[0], corners[1], 4)
    shape = shapely.Polygon(
        np.vstack([line, line[::-1] + draw.normal(size=2) * 10.0 ** -draw.integers(1, 12)])
    )
    bounds = (0.0, 0.0, 10.0, 10.0)
    for each in (shapely.Polygon(corners), shape):
        if not each.is_valid:
            continue
        for piece in (each.intersection(shapely.box(*bounds)), shapely.box(*bounds).difference(each)):
            cell, share = cell_shares(piece, (10, 10), bounds)
            row, col = np.divmod(cell, 10)
            plain = shapely.area(shapely.intersection(piece, shapely.box(col, 9 - row, col + 1, 10 - row)))
            assert share == pytest.approx(plain, abs=COVERED)
            assert share.sum() == pytest.approx(piece.area, abs=COVERED * (1 + len(share)))
