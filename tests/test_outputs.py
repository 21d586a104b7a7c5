"""The output folder: replaced whole or not at all, safe cells, stable bytes."""

import sqlite3

import geopandas
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import box

import prevmap
from prevmap.study.outputs import check_output, neutral, replacing, settle_geopackage, sha256, write_csv


def earlier_results(folder):
    for name, text in (("share/report.html", "old"), ("internal/record.json", "{}"), ("notes.txt", "mine")):
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text(text)


def write_parts(fresh):
    (fresh / "share").mkdir()
    (fresh / "share" / "new.html").write_text("new")
    (fresh / "internal").mkdir()
    (fresh / "internal" / "record.json").write_text("[]")


def tree(folder):
    return {p.relative_to(folder).as_posix(): p.read_text() for p in folder.rglob("*") if p.is_file()}


def test_new_results_replace_old_ones_whole_and_leave_other_files(tmp_path):
    earlier_results(tmp_path / "results")
    with replacing(tmp_path / "results") as fresh:
        assert fresh.parent == tmp_path
        write_parts(fresh)
    assert tree(tmp_path) == {
        "results/share/new.html": "new",
        "results/internal/record.json": "[]",
        "results/notes.txt": "mine",
    }


@pytest.mark.parametrize("stop", [KeyboardInterrupt, RuntimeError, SystemExit])
def test_whatever_stops_a_run_leaves_the_earlier_results(tmp_path, stop):
    earlier_results(tmp_path / "results")
    before = tree(tmp_path)

    def stopped():
        with replacing(tmp_path / "results") as fresh:
            write_parts(fresh)
            raise stop

    with pytest.raises(stop):
        stopped()
    assert tree(tmp_path) == before
    assert [path.name for path in tmp_path.iterdir()] == ["results"]


def test_a_rename_that_fails_puts_the_earlier_results_back(tmp_path):
    earlier_results(tmp_path / "results")
    before = tree(tmp_path)

    def incomplete():
        with replacing(tmp_path / "results") as fresh:
            (fresh / "share").mkdir()  # but no internal

    with pytest.raises(FileNotFoundError):
        incomplete()
    assert tree(tmp_path) == before


def test_a_first_run_makes_the_folders_above(tmp_path):
    with replacing(tmp_path / "a" / "b" / "results") as fresh:
        write_parts(fresh)
    assert (tmp_path / "a" / "b" / "results" / "share" / "new.html").is_file()


def test_a_share_folder_from_elsewhere_is_refused(tmp_path):
    (tmp_path / "share").mkdir()
    with pytest.raises(prevmap.InputError, match=r'found "share" in it, but no internal/record\.json'):
        check_output(tmp_path, {})


def test_an_input_in_the_way_is_refused(tmp_path):
    earlier_results(tmp_path)
    check_output(tmp_path, {"[survey] file": tmp_path / "sites.csv"})
    with pytest.raises(prevmap.InputError, match=r"\[survey\] file: .*sites.csv lies in the output folder's"):
        check_output(tmp_path, {"[survey] file": tmp_path / "internal" / "sites.csv"})


def test_a_file_in_place_of_the_folder_is_refused(tmp_path):
    (tmp_path / "results").write_text("")
    with pytest.raises(prevmap.InputError, match="found a file; accepted: a folder"):
        check_output(tmp_path / "results", {})
    with pytest.raises(prevmap.InputError, match="may not be written to"):
        check_output(tmp_path / "results" / "deeper", {})


@settings(deadline=None)  # a busy machine is no fault
@given(st.text())
def test_no_text_cell_can_be_run_as_a_formula(text):
    cell = neutral(text)
    assert not cell.startswith(("=", "+", "-", "@", "\t", "\r"))
    assert cell in (text, "'" + text)


def test_csv_keeps_numbers_and_disarms_texts_and_headings(tmp_path):
    frame = pd.DataFrame({"=cmd": ["-1", "plain", None], "number": [-1.5, 0.1 + 0.2, float("nan")]})
    write_csv(frame, tmp_path / "table.csv")
    assert (tmp_path / "table.csv").read_bytes() == (
        b"'=cmd,number\n'-1,-1.5\nplain,0.30000000000000004\n,\n"
    )


def test_a_geopackage_keeps_no_time_of_writing(tmp_path):
    layer = geopandas.GeoDataFrame({"unit": ["A"]}, geometry=[box(0, 0, 1, 1)], crs="EPSG:32631")
    for year, name in ((2020, "one.gpkg"), (2021, "two.gpkg")):
        layer.to_file(tmp_path / name, layer="units", driver="GPKG")
        with sqlite3.connect(tmp_path / name) as connection:  # as if written at another time
            connection.execute("UPDATE gpkg_contents SET last_change = ?", (f"{year}-01-01T00:00:00.000Z",))
        connection.close()
        settle_geopackage(tmp_path / name)
    assert sha256(tmp_path / "one.gpkg") == sha256(tmp_path / "two.gpkg")
    assert geopandas.read_file(tmp_path / "two.gpkg").unit.tolist() == ["A"]
