"""The output folder: replaced whole or not at all, safe cells, stable bytes."""

import errno
import itertools
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import geopandas
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import box

import prevmap
from prevmap.study.outputs import check_output, neutral, settle_geopackage, sha256, write_csv
from prevmap.study.replacement import replacing

RECORD = '{"outputs": {"share/report.html": "0"}}'


def earlier_results(folder):
    for name, text in (("share/report.html", "old"), ("internal/record.json", RECORD), ("notes.txt", "mine")):
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
        assert fresh.is_relative_to(tmp_path / "results")  # a mount point takes no rename from outside
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

    with pytest.raises(prevmap.InputError, match=r"results cannot be written: .*No such file"):
        incomplete()
    assert tree(tmp_path) == before


@pytest.mark.parametrize("earlier", [True, False])
@pytest.mark.parametrize("fails", range(4))
def test_whichever_rename_fails_the_folder_is_as_it_was(tmp_path, monkeypatch, earlier, fails):
    if earlier:
        earlier_results(tmp_path / "results")
    before = tree(tmp_path)
    real, calls = Path.rename, itertools.count()

    def failing(path, target):
        if next(calls) == fails:
            raise OSError(errno.EXDEV, "Invalid cross-device link")
        return real(path, target)

    monkeypatch.setattr(Path, "rename", failing)

    def run():
        with replacing(tmp_path / "results") as fresh:
            write_parts(fresh)

    if fails >= (4 if earlier else 2):  # a first run has nothing to move away
        run()
        assert "results/share/new.html" in tree(tmp_path)
        return
    with pytest.raises(prevmap.InputError, match=r"cannot be written: .*cross-device"):
        run()
    assert tree(tmp_path) == before
    assert [path.name for path in tmp_path.iterdir()] == (["results"] if earlier else [])


def test_files_of_the_users_own_inside_the_parts_move_along(tmp_path, caplog):
    earlier_results(tmp_path)
    (tmp_path / "share" / "letters").mkdir()
    (tmp_path / "share" / "letters" / "cover.txt").write_text("mine")
    (tmp_path / "internal" / "remarks.txt").write_text("mine")
    (tmp_path / "share" / "new.html").write_text("mine, by the name of a new result")
    with replacing(tmp_path) as fresh:
        write_parts(fresh)
    assert tree(tmp_path) == {
        "share/new.html": "new",
        "share/new_kept.html": "mine, by the name of a new result",
        "share/letters/cover.txt": "mine",
        "internal/remarks.txt": "mine",
        "internal/record.json": "[]",
        "notes.txt": "mine",
    }
    assert [record.getMessage() for record in caplog.records] == [
        f"{tmp_path / 'share' / 'new.html'} was no result of an earlier run: kept as new_kept.html"
    ]


KILLED = """
import os, signal, sys
from pathlib import Path
from prevmap.study.replacement import replacing
folder, after = Path(sys.argv[1]), int(sys.argv[2])
real = Path.rename
def rename(path, target):
    global after
    if after == 0:
        os.kill(os.getpid(), signal.SIGKILL)
    after -= 1
    return real(path, target)
Path.rename = rename
with replacing(folder) as fresh:
    for part in ("share", "internal"):
        (fresh / part).mkdir()
    (fresh / "share" / "new.html").write_text("new")
    (fresh / "internal" / "record.json").write_text("[]")
"""


@pytest.mark.skipif(sys.platform == "win32", reason="kills a process by a signal")
@pytest.mark.parametrize("earlier", [True, False])
@pytest.mark.parametrize("renames", [0, 1, 3])
def test_what_a_killed_run_left_is_undone_by_the_next(tmp_path, caplog, earlier, renames):
    if earlier:
        earlier_results(tmp_path)
    before = tree(tmp_path)
    command = [sys.executable, "-c", KILLED, str(tmp_path), str(min(renames, 3 if earlier else 1))]
    assert subprocess.run(command, check=False).returncode == -signal.SIGKILL
    (left,) = tmp_path.glob(".partial-*")
    check_output(tmp_path, {})
    assert tree(tmp_path) == before
    assert [record.getMessage() for record in caplog.records] == [
        f"removed {left}, which a run that was killed had left"
    ]


def test_a_run_that_is_under_way_keeps_its_folder(tmp_path, caplog):
    with replacing(tmp_path) as fresh:
        write_parts(fresh)
        check_output(tmp_path, {})
        assert fresh.is_dir()
    assert (tmp_path / "share" / "new.html").is_file()
    assert caplog.records == []


def test_a_folder_that_cannot_be_written_to_is_refused_before_any_work(tmp_path, monkeypatch):
    def full(*_arguments, **_settings):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(prevmap.InputError, match=r"may not be written to \(No space left on device\)"):
        check_output(tmp_path / "results", {})
    assert list(tmp_path.iterdir()) == []


def test_a_first_run_makes_the_folders_above(tmp_path):
    with replacing(tmp_path / "a" / "b" / "results") as fresh:
        write_parts(fresh)
    assert (tmp_path / "a" / "b" / "results" / "share" / "new.html").is_file()


def test_a_share_folder_from_elsewhere_is_refused(tmp_path):
    (tmp_path / "share").mkdir()
    (tmp_path / "internal").mkdir()
    (tmp_path / "internal" / "record.json").write_text("{}")  # of something else
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


def test_csv_writes_whole_numbers_beside_missing_ones_as_whole(tmp_path):
    write_csv(pd.DataFrame({"row": [10, None, "S-7"], "n": [1, 2, 3]}, dtype=object), tmp_path / "table.csv")
    write_csv(pd.DataFrame({"row": pd.Series([10, None], dtype=object)}), tmp_path / "rows.csv")
    assert (tmp_path / "table.csv").read_text() == "row,n\n10,1\n,2\nS-7,3\n"
    assert (tmp_path / "rows.csv").read_text() == 'row\n10\n""\n'


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
