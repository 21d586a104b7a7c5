"""The command line: commands, exit codes, and that nobody's mistake ends in a traceback."""

import signal
import subprocess
import sys

import pytest

import prevmap
from prevmap.cli import main
from prevmap.study.schema import Study


@pytest.fixture
def study_file(tmp_path):
    (tmp_path / "sites.csv").write_text("examined,positive,lon,lat\n10,1,1.0,2.0\n")
    text = 'schema = 1\n[survey]\nfile = "sites.csv"\nexamined = "examined"\npositive = "positive"\n'
    (tmp_path / "study.toml").write_text(text + 'lon = "lon"\nlat = "lat"\n')
    return tmp_path / "study.toml"


def raising(error):
    def run(*_arguments, **_settings):
        raise error

    return run


def test_version(capsys):
    with pytest.raises(SystemExit) as done:
        main(["--version"])
    assert done.value.code == 0
    assert capsys.readouterr().out == f"prevmap {prevmap.__version__}\n"


@pytest.mark.parametrize(
    "arguments", [[], ["fly"], ["run"], ["run", "a.toml", "--colour"], ["verify", "r", "--tolerance", "x"]]
)
def test_a_wrong_command_is_wrong_input(arguments, capsys):
    with pytest.raises(SystemExit) as done:
        main(arguments)
    assert done.value.code == 2
    assert "usage: prevmap" in capsys.readouterr().err


@pytest.mark.parametrize("command", ["run", "inspect", "verify"])
def test_a_missing_file_is_wrong_input(command, tmp_path, capsys):
    assert main([command, str(tmp_path / "nowhere")]) == 2
    printed = capsys.readouterr()
    assert "nowhere: there is no such" in printed.err
    assert printed.out == ""
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("error", "code", "message"),
    [
        (
            prevmap.InputError("sites.csv row 3: what was found"),
            2,
            "prevmap: sites.csv row 3: what was found",
        ),
        (
            prevmap.FitError("no mode; try a prior"),
            3,
            "prevmap: the model could not be fitted: no mode; try a prior",
        ),
        (OSError(28, "No space left on device"), 2, "prevmap: [Errno 28] No space left on device"),
        (KeyboardInterrupt(), 130, "prevmap: interrupted"),
    ],
)
def test_exit_codes(study_file, monkeypatch, capsys, error, code, message):
    monkeypatch.setattr(Study, "run", raising(error))
    assert main(["run", str(study_file)]) == code
    assert capsys.readouterr().err.startswith(message)


def test_a_fault_of_the_program_keeps_its_traceback(study_file, monkeypatch):
    monkeypatch.setattr(Study, "run", raising(ZeroDivisionError()))
    with pytest.raises(ZeroDivisionError):
        main(["run", str(study_file)])


def test_a_stopped_process_is_an_interruption(study_file, monkeypatch):
    monkeypatch.setattr(Study, "run", lambda *_a, **_s: signal.raise_signal(signal.SIGTERM))
    before = signal.getsignal(signal.SIGTERM)
    assert main(["run", str(study_file)]) == 130
    assert signal.getsignal(signal.SIGTERM) is before


def test_python_dash_m(study_file):
    study_file.write_text("schema = 1\n[surveys]\n")
    done = subprocess.run(
        [sys.executable, "-m", "prevmap", "run", str(study_file)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert done.stderr == 'prevmap: study.toml: unknown section "surveys"; did you mean "survey"?\n'


@pytest.mark.parametrize("arguments", [["run", "study.toml", "--output", " "], ["demo", ""]])
def test_an_empty_folder_name_is_refused(arguments, capsys):
    with pytest.raises(SystemExit) as done:
        main(arguments)
    assert done.value.code == 2
    assert '"; accepted: the path of a folder' in capsys.readouterr().err


def test_an_empty_output_is_refused_from_python(study_file):
    with pytest.raises(prevmap.InputError, match='output: found ""; accepted: the path of a folder'):
        prevmap.read_study(study_file).run(output="")


def test_an_interruption_while_modules_load_is_told_in_words():
    script = """
import sys
class Interrupting:
    def find_spec(self, name, path=None, target=None):
        if name == "argparse":
            raise KeyboardInterrupt
from prevmap.cli import main
sys.meta_path.insert(0, Interrupting())
sys.exit(main(["--version"]))
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == 130
    assert done.stderr == "prevmap: interrupted; earlier results are as they were\n"


def test_a_reader_that_goes_away_changes_no_exit_code():
    script = """
import os, sys
from pathlib import Path
from prevmap import cli
from prevmap.study.progress import Stages
read, write = os.pipe()
os.close(read)
os.dup2(write, 1)
os.dup2(write, 2)
with Stages(1, True).stage("survey", "Reading the survey"):
    cli._print_results(Path("results"))
sys.exit(1)
"""
    assert subprocess.run([sys.executable, "-c", script], check=False).returncode == 1


def test_output_and_quiet_reach_the_run(study_file, monkeypatch, tmp_path):
    seen = {}

    class Done:
        folder = tmp_path

    def run(self, progress, output):
        seen.update(progress=progress, output=output)
        return Done

    monkeypatch.setattr(Study, "run", run)
    assert main(["run", str(study_file), "--output", "elsewhere", "--quiet"]) == 0
    assert seen["progress"] is False
    assert str(seen["output"]) == "elsewhere"
    assert main(["run", str(study_file)]) == 0
    assert seen == {"progress": True, "output": None}


def test_demo_refuses_a_folder_of_other_things(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("mine")
    assert main(["demo", str(tmp_path)]) == 2
    assert "the folder is not empty" in capsys.readouterr().err
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


def test_demo_copies_what_a_study_needs_and_no_truth(tmp_path, monkeypatch, capsys):
    class Done:
        folder = tmp_path / "demo" / "results"

    monkeypatch.setattr(Study, "run", lambda *_a, **_s: Done)
    assert main(["demo", str(tmp_path / "demo")]) == 0
    assert f"Report:  {Done.folder / 'share' / 'report.html'}" in capsys.readouterr().out
    copied = {path.relative_to(tmp_path / "demo").as_posix() for path in (tmp_path / "demo").rglob("*")}
    assert {"study.toml", "sites.csv", "districts.geojson", "README.md"} <= copied
    assert not [name for name in copied if "truth" in name or name.endswith(".py")]
    # Once more into the same folder: allowed while its files are the demo's.
    (tmp_path / "demo" / "notes.txt").write_text("mine")
    assert main(["demo", str(tmp_path / "demo")]) == 0
    (tmp_path / "demo" / "study.toml").write_text("schema = 1 # mine")
    assert main(["demo", str(tmp_path / "demo")]) == 2
    assert "its study.toml is not the demo's" in capsys.readouterr().err
    assert (tmp_path / "demo" / "study.toml").read_text() == "schema = 1 # mine"


def test_demo_refuses_a_file(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("mine")
    assert main(["demo", str(tmp_path / "mine.txt")]) == 2
    assert "found a file; accepted: a new or empty folder" in capsys.readouterr().err
