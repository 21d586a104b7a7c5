import datetime

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from prevmap.inputs.coordinates import read_degrees, read_positions
from prevmap.inputs.reading import cell_text, is_decimal_comma, is_missing, read_count, read_number
from tests.tolerances import ALGEBRA


@pytest.mark.parametrize(
    ("cell", "expected"),
    [
        (12, 12),
        (12.0, 12),
        (np.int32(12), 12),
        ("12", 12),
        (" 12 ", 12),
        ("12\u00a0", 12),
        ("\ufeff12", 12),
        ("+12", 12),
        ("012", 12),
        ("12.0", 12),
        ("12.", 12),
        ("１２", 12),
        ("١٢", 12),
        ("−3", -3),
        ("-3", -3),
    ],
)
def test_counts_are_read_as_people_type_them(cell, expected):
    reading = read_count(cell)
    assert reading.problem is None
    assert reading.value == expected


@pytest.mark.parametrize("cell", [None, float("nan"), pd.NA, pd.NaT, "", "  ", "NA", "n/a", "-", ".", "#N/A"])
def test_empty_cells_are_missing_and_not_zero(cell):
    reading = read_count(cell)
    assert (reading.value, reading.problem) == (None, None)
    assert is_missing(cell)


@pytest.mark.parametrize(
    ("cell", "reason"),
    [
        ("1,234", "two ways"),
        ("1.234", "two ways"),
        ("1 234", "two ways"),
        ("1'234", "two ways"),
        ("1.000", "two ways"),
        ("1,234,567", "two ways"),
        ("12,5", "not a whole number"),
        ("12.5", "not a whole number"),
        (12.5, "not a whole number"),
        ("12%", "percentage"),
        ("1e3", "not written out"),
        ("twelve", "not a number"),
        ("12 (est.)", "not a number"),
        ("5²", "not a number"),
        ("12/40", "not a number"),
        ("#DIV/0!", "not a number"),
        (True, "yes/no"),
        (np.True_, "yes/no"),
        (datetime.datetime(2026, 3, 5), "date or time"),
        (datetime.time(12, 30), "date or time"),
        (float("inf"), "not finite"),
        (10**12, "larger than any count"),
        ([12], "not a number"),
    ],
)
def test_counts_that_cannot_be_read_surely_are_problems_with_the_value(cell, reason):
    reading = read_count(cell)
    assert reading.problem is not None
    assert reason in reading.problem
    assert str(cell) in reading.problem or repr(cell) in reading.problem


def test_fractions_keep_their_value_for_the_check_of_percentages():
    assert read_count("12,5").value == 12.5
    assert read_count("12.5%").value == 12.5
    assert read_count(0.25).value == 0.25


def test_a_decimal_comma_table_writes_whole_numbers_with_a_comma():
    assert read_count("12,0", ",").value == 12
    assert read_count("12,0", ".").value == 12  # no thousands end after one digit
    assert "two ways" in read_count("1,234", ",").problem
    assert read_number("1,234", ",").value == 1.234
    assert "two ways" in read_number("1.234", ",").problem
    assert "declare decimal" in read_number("1,234").problem


def test_text_of_a_cell_is_a_name():
    assert cell_text(12.0) == "12"
    assert cell_text(" Upper \u00a0 Ford\u200b") == "Upper Ford"
    assert cell_text("Na") == "Na"
    assert cell_text(datetime.datetime(2026, 3, 5)) == "2026-03-05"


@given(st.integers(min_value=-(10**9), max_value=10**9))
def test_every_whole_number_is_read_from_its_text(number):
    assert read_count(str(number)).value == number
    assert read_count(f" {number}\t").value == number


@given(st.text(alphabet="0123459,.+-%' ٣e", max_size=8))
def test_a_count_is_its_digits_and_never_a_guess(text):
    reading = read_count(text)
    if reading.problem is None and reading.value is not None:
        whole, _, rest = text.strip().lstrip("+-").replace(",", ".").partition(".")
        assert whole == "" or whole.isdecimal()
        assert set(rest) <= {"0", "٠"}
        assert abs(reading.value) == int(whole or "0")
        # Three digits after the sign could be a group of thousands.
        assert len(rest) != 3 or len(whole) > 3 or whole.startswith("0") or not whole


@given(st.floats(min_value=-1e6, max_value=1e6))
def test_decimal_comma_and_point_read_the_same(number):
    text = f"{number:.4f}"
    assert read_number(text).value == pytest.approx(number, abs=1e-4)  # four decimals are printed
    assert read_number(text.replace(".", ","), ",").value == read_number(text).value
    assert is_decimal_comma(text.replace(".", ","))


@pytest.mark.parametrize(
    ("cell", "axis", "expected"),
    [
        ("36.82", "lon", 36.82),
        ("36,82", "lon", 36.82),
        (36.82, "lon", 36.82),
        ("36°49'12\"E", "lon", 36.82),
        ("36° 49′ 12″ E", "lon", 36.82),
        ("36º49’12”E", "lon", 36.82),
        ("E 36 49 12", "lon", 36.82),
        ("36 49 12", "lon", 36.82),
        ("36:49:12", "lon", 36.82),
        ("36d49m12s", "lon", 36.82),
        ("36°49.2'E", "lon", 36.82),
        ("36°49,2'E", "lon", 36.82),
        ("36.82° E", "lon", 36.82),
        ("36.82°", "lon", 36.82),
        ("36.82W", "lon", -36.82),
        ("1°17'30\"S", "lat", -1.2916666666666667),
        ("S1°17'30\"", "lat", -1.2916666666666667),
        ("-1°17'30\"", "lat", -1.2916666666666667),
        ("−1 17 30", "lat", -1.2916666666666667),
        ("1°17'30\"s", "lat", -1.2916666666666667),
        ("0°30'0\"S", "lat", -0.5),
        ("1°17''30\"S", "lat", None),
    ],
)
def test_degrees_are_read_in_every_usual_notation(cell, axis, expected):
    reading, _ = read_degrees(cell, axis)
    if expected is None:
        assert reading.problem is not None
    else:
        assert reading.problem is None
        assert reading.value == pytest.approx(expected, abs=ALGEBRA)


@pytest.mark.parametrize(
    ("cell", "axis", "reason"),
    [
        ("36 49", "lon", "two ways"),
        ("36°82'00\"E", "lon", "60 minutes"),
        ("36°60'00\"E", "lon", "60 minutes"),
        ("36°49'61\"E", "lon", "60 minutes or seconds"),
        ("1°17'30\"S", "lon", "latitude where a longitude is expected"),
        ("36°49'12\"E", "lat", "longitude where a latitude is expected"),
        ("36°49'12\"O", "lon", "east or west by language"),
        ("-1°17'30\"S", "lat", "hemisphere twice"),
        ("N1°17'30\"S", "lat", "hemisphere twice"),
        ("36.5°49'E", "lon", "decimals before its last part"),
        ("12.34.56", "lat", "not a number"),
        ("near the mill", "lat", "not a coordinate"),
        (datetime.time(12, 34, 56), "lat", "date or time"),
    ],
)
def test_degrees_that_can_be_read_in_two_ways_are_problems(cell, axis, reason):
    reading, _ = read_degrees(cell, axis)
    assert reading.value is None
    assert reason in reading.problem


@given(
    st.integers(min_value=0, max_value=89),
    st.integers(min_value=0, max_value=59),
    st.integers(min_value=0, max_value=5999),
    st.sampled_from("NS"),
)
def test_degrees_minutes_seconds_return_the_angle_they_write(degrees, minutes, hundredths, hemisphere):
    seconds = hundredths / 100
    angle = degrees + minutes / 60 + seconds / 3600
    reading, in_parts = read_degrees(f"{degrees}°{minutes:02d}'{seconds:05.2f}\"{hemisphere}", "lat")
    assert in_parts
    assert reading.value == pytest.approx(angle if hemisphere == "N" else -angle, abs=ALGEBRA)


def test_metres_with_a_comma_are_refused_until_one_of_them_shows_what_it_is():
    unsure = read_positions(["512,345"], ["9,812,000"], fields=("x", "y"), decimal=None, degrees=False)
    assert [remark.severity for remark in unsure.remarks] == ["error", "error"]
    shown = read_positions(
        ["512345,5", "513000,125"], ["981200,5", "981300,5"], fields=("x", "y"), decimal=None, degrees=False
    )
    assert shown.xy.tolist() == [[512345.5, 981200.5], [513000.125, 981300.5]]
    assert [remark.severity for remark in shown.remarks] == ["note"]
    declared = read_positions(["512,345"], ["981,5"], fields=("x", "y"), decimal=",", degrees=False)
    assert declared.xy.tolist() == [[512.345, 981.5]]
