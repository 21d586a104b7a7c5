import numpy as np
import pytest

from prevmap.inputs import sentinel
from prevmap.inputs.raster import open_raster
from prevmap.inputs.sentinel import find_sentinels
from tests.test_population import write


def found(tmp_path, values, **more):
    raster = open_raster(write(tmp_path / "v.tif", values, **more))
    return find_sentinels(raster, raster.bounds)


@pytest.mark.parametrize(
    ("kind", "mark"),
    [
        ("float32", -9999.0),
        ("float32", -9999.9),
        ("float32", -3.4028235e38),
        ("float32", 1e20),
        ("float64", 9.969209968386869e36),
        ("int16", -32768),
        ("int16", 9999),
        ("uint16", 65535),
        ("uint8", 255),
    ],
)
def test_usual_marks_far_outside_the_rest_are_found(tmp_path, rng, kind, mark):
    values = rng.integers(3, 120, (20, 30)).astype(kind)
    values[:5] = mark
    values[10, 10], values[11, 11] = 3, 119
    [each] = found(tmp_path, values)
    assert each.value == np.asarray(mark, dtype=kind)
    assert (each.share, each.lower, each.upper) == (0.25, 3.0, 119.0)


def test_several_marks_are_found_one_by_one(tmp_path, rng):
    values = rng.uniform(0.0, 40.0, (20, 30)).astype("float32")
    values[0], values[1] = 1e20, -9999.0
    assert [each.value for each in found(tmp_path, values)] == [float(np.float32(1e20)), -9999.0]


@pytest.mark.parametrize("kind", ["between", "at the end", "all", "declared", "ordinary", "byte"])
def test_values_that_belong_to_the_rest_are_no_mark(tmp_path, rng, kind):
    values = rng.uniform(0.0, 9900.0, (20, 30)).astype("float32")
    nodata = None
    if kind == "between":
        values[3] = 999.0
    elif kind == "at the end":
        values[3] = 9999.0
    elif kind == "all":
        values[:] = -9999.0
    elif kind == "declared":
        values[3], nodata = -9999.0, -9999.0
    elif kind == "byte":
        values = rng.integers(0, 256, (20, 30)).astype("uint8")
        values[3] = 255
    assert found(tmp_path, values, nodata=nodata) == []


def test_scale_and_offset_apply_to_the_range_of_the_rest(tmp_path):
    values = np.array([[10, 20], [30, -32768]], dtype="int16")
    [each] = found(tmp_path, values, scale=-0.1, offset=5.0)
    assert (each.value, each.lower, each.upper) == (-32768.0, pytest.approx(2.0), pytest.approx(4.0))


def test_a_large_window_is_looked_at_in_steps(tmp_path, rng, monkeypatch):
    values = rng.uniform(0.0, 40.0, (60, 80))
    values[:, :40] = -9999.0
    monkeypatch.setattr(sentinel, "MOST_PIXELS", 100)
    [each] = found(tmp_path, values)
    assert each.value == -9999.0
    assert each.share == pytest.approx(0.5, abs=0.1)


def test_outside_the_raster_there_is_nothing_to_look_at(tmp_path):
    raster = open_raster(write(tmp_path / "v.tif", np.ones((3, 3))))
    assert find_sentinels(raster, (1e6, 1e6, 2e6, 2e6)) == []
