"""A small study run whole: what is written, that it is written whole, twice the same, and gives no position away."""

import csv
import json
import logging
import re
import shutil
import signal
import subprocess
import sys
import time
from types import SimpleNamespace
from typing import get_args

import geopandas
import numpy as np
import pandas as pd
import pytest
import rasterio
from hypothesis import given, settings
from hypothesis import strategies as st
from rasterio.transform import Affine
from shapely.geometry import box

import prevmap
from prevmap.cli import main
from prevmap.inputs.covariates import TRANSFORMS
from prevmap.inputs.findings import Finding, findings_frame
from prevmap.study.outputs import check_output
from prevmap.study.settings import Transform
from prevmap.study.sharing import coarse_positions, shareable_fit, shared_square_m, without_positions
from prevmap.study.verification import verify_record
from prevmap.study.writing import unit_table

STUDY = """schema = 1
[survey]
file = "sites.csv"
examined = "examined"
positive = "positive"
lon = "lon"
lat = "lat"
site = "place"
[[covariate]]
name = "wet"
raster = "wet.tif"
[region]
file = "areas.geojson"
name = "area"
[population]
raster = "people.tif"
[grid]
cell_km = 8
[model]
mesh_edge_km = 10
margin_km = 60
integrate = false
draws = 400
[prior]
range_km = { below = 10, probability = 0.05 }
[decision]
thresholds = [0.05, 0.2]
[report]
title = "A small study"
funding = "Nobody paid for it."
"""
WEST, SOUTH, STEP = 20.0, 5.0, 0.25


def write_raster(path, values):
    profile = {"driver": "GTiff", "dtype": "float32", "count": 1, "crs": "EPSG:4326"}
    rows, columns = values.shape
    transform = Affine(0.05, 0, WEST - 0.1, 0, -0.05, SOUTH + 2 * STEP + 0.1)
    with rasterio.open(path, "w", **profile, height=rows, width=columns, transform=transform) as raster:
        raster.write(values.astype("float32"), 1)


def make_inputs(folder):
    rng = np.random.default_rng(7)
    folder.mkdir(parents=True)
    x, y = np.meshgrid(np.linspace(0, 1, 16), np.linspace(0, 1, 16))
    write_raster(folder / "wet.tif", np.sin(4 * x) + y)
    write_raster(folder / "people.tif", 40 + 30 * x * y)
    squares = [box(WEST + i * STEP, SOUTH + j * STEP, WEST + (i + 1) * STEP, SOUTH + (j + 1) * STEP)
               for i in range(2) for j in range(2)]  # fmt: skip
    names = ["=1+1", "North-east", "South-west", "-Hill"]
    areas = geopandas.GeoDataFrame({"area": names, "round": [1, 2, 3, 4]}, geometry=squares, crs="EPSG:4326")
    areas.to_file(folder / "areas.geojson", driver="GeoJSON")
    lon, lat = WEST + 2 * STEP * rng.random(24), SOUTH + 2 * STEP * rng.random(24)
    examined = rng.integers(20, 60, 24)
    positive = rng.binomial(examined, 0.05 + 0.4 * (lon - WEST))
    with (folder / "sites.csv").open("w", newline="") as stream:
        rows = csv.writer(stream)
        rows.writerow(["place", "examined", "positive", "lon", "lat"])
        for site in range(24):
            rows.writerow(
                [f"Place {site}", examined[site], positive[site], f"{lon[site]:.6f}", f"{lat[site]:.6f}"]
            )
        rows.writerow(["Swapped", 30, 3, f"{lat[0]:.6f}", f"{lon[0]:.6f}"])
        rows.writerow(["Too many", 30, 31, f"{lon[1]:.6f}", f"{lat[1]:.6f}"])
    (folder / "study.toml").write_text(STUDY)
    return folder


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    folder = make_inputs(tmp_path_factory.mktemp("run") / "study")
    assert main(["run", str(folder / "study.toml"), "--quiet"]) == 0
    return folder


@pytest.fixture
def inputs(tmp_path):
    return make_inputs(tmp_path / "study")


@pytest.fixture(scope="module")
def record(study):
    return json.loads((study / "results" / "internal" / "record.json").read_text())


def files(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def test_nothing_but_the_outputs_is_written(study):
    written = {name for name in files(study / "results") if not name.startswith("share/figures/")}
    assert written == {
        "share/report.html",
        "share/units.csv",
        "share/units.gpkg",
        "share/prevalence.tif",
        "internal/sites_checked.csv",
        "internal/findings.csv",
        "internal/record.json",
    }
    assert {p.name for p in study.iterdir()} == {
        "areas.geojson", "people.tif", "results", "sites.csv", "study.toml", "wet.tif",
    }  # fmt: skip
    figures = {p.name for p in (study / "results" / "share" / "figures").iterdir()}
    for name in ("sites", "prevalence", "exceedance_1", "exceedance_2", "unit_prevalence", "decisions"):
        assert {f"{name}.png", f"{name}.svg"} <= figures


def test_the_raster_names_its_bands(study):
    with rasterio.open(study / "results" / "share" / "prevalence.tif") as raster:
        assert raster.descriptions == (
            "mean", "sd", "lower95", "median", "upper95", "exceedance_0.05", "exceedance_0.2", "extrapolated",
        )  # fmt: skip
        mean = raster.read(1, masked=True)
        low, high = raster.read(3, masked=True), raster.read(5, masked=True)
        common, rare = raster.read(6, masked=True), raster.read(7, masked=True)
    assert mean.count() > 30
    assert ((low < mean) & (mean < high)).all()
    assert (common >= rare).all()


def test_the_unit_table_has_estimates_attributes_and_decisions(study):
    table = pd.read_csv(study / "results" / "share" / "units.csv")
    assert table["unit"].tolist() == ["'=1+1", "North-east", "South-west", "'-Hill"]
    assert table["round"].tolist() == [1, 2, 3, 4]
    classes = table[["p_class_0", "p_class_1", "p_class_2"]].to_numpy()
    np.testing.assert_allclose(classes.sum(axis=1), 1.0, rtol=1e-12)  # shares of the same draws
    # one row's classes and exceedances are the same draws counted two ways
    np.testing.assert_allclose(table["exceedance_0.05"], classes[:, 1:].sum(axis=1), rtol=1e-12)
    np.testing.assert_allclose(table["exceedance_0.2"], classes[:, 2], rtol=1e-12)
    assert set(table["decision"]) <= {"< 5 %", ">= 5 % and < 20 %", ">= 20 %", "undecided"} | set(
        table["decision"]
    )
    assert table["examined"].sum() > 600
    layer = geopandas.read_file(study / "results" / "share" / "units.gpkg")
    assert layer["unit"].tolist() == ["=1+1", "North-east", "South-west", "-Hill"]
    np.testing.assert_allclose(layer["mean"], table["mean"], rtol=1e-15)


def test_attributes_of_the_region_replace_no_column_of_the_model(again):
    names = ["decision", "Reason", "p_class_1", "exceedance_0.05", "decision_monte_carlo_error"]
    plain = again.unit_table
    given = again.units.frame.assign(**{name: "of the region" for name in names})
    given = given.assign(decision_in_region="taken")
    units = SimpleNamespace(
        frame=given, exceedance=again.units.exceedance, exceedance_error=again.units.exceedance_error
    )
    table = unit_table(units, again.decisions, again.thresholds)
    pd.testing.assert_frame_equal(table[plain.columns], plain)
    for name in names[1:]:
        assert set(table[f"{name}_in_region"]) == {"of the region"}
    assert set(table["decision_in_region"]) == {"taken"}
    assert set(table["decision_in_region_in_region"]) == {"of the region"}
    assert len({name.casefold() for name in table.columns}) == len(table.columns)


def test_what_is_kept_has_every_site_and_every_finding(study):
    sites = pd.read_csv(study / "results" / "internal" / "sites_checked.csv")
    given = pd.read_csv(study / "sites.csv")
    assert sites["row"].tolist() == list(range(2, 26))
    np.testing.assert_allclose(sites["longitude"], given["lon"][:24], rtol=1e-12)
    findings = pd.read_csv(study / "results" / "internal" / "findings.csv", dtype={"row": "Int64"})
    assert ".0," not in (study / "results" / "internal" / "findings.csv").read_text()
    assert findings.columns.tolist() == ["row", "site", "field", "severity", "what", "action"]
    assert {26, 27} <= set(findings.loc[findings["severity"] == "error", "row"])


def test_nothing_shared_gives_a_position_away(study):
    given = pd.read_csv(study / "sites.csv", dtype=str)
    positions = {text[:7] for text in [*given["lon"], *given["lat"]]}
    share = study / "results" / "share"
    for path in (share / "report.html", share / "units.csv"):
        text = re.sub(r"base64,[^\"]*", "", path.read_text())
        assert [position for position in positions if position in text] == [], path.name
    assert set(geopandas.read_file(share / "units.gpkg").geom_type) == {"Polygon"}
    assert "middle of squares of 8" in (share / "report.html").read_text()


def test_the_record_can_bring_the_numbers_back(study, record):
    table = pd.read_csv(study / "results" / "share" / "units.csv")
    assert record["numbers"]["units[North-east].mean"] == table["mean"][1]
    assert record["numbers"]["survey.sites"] == 24
    assert record["seed"] == 1
    assert record["settings"]["model"]["draws"] == 400
    assert record["environment"]["packages"]["numpy"] == np.__version__
    assert record["study"] == "../../study.toml"
    assert set(record["inputs"]) == {
        "study", "[survey] file", "[[covariate]] 1 raster", "[region] file", "[population] raster",
    }  # fmt: skip
    assert record["seconds"]["fit"] > 0
    assert set(record["outputs"]) == set(files(study / "results")) - {"internal/record.json"}


def test_verify_agrees_then_names_what_changed(study, tmp_path, capsys, no_figures):
    copy = tmp_path / "copy"
    shutil.copytree(study, copy)
    path = copy / "results" / "internal" / "record.json"
    assert main(["verify", str(path), "--quiet"]) == 0
    assert "numbers compared exactly: 0 differences." in capsys.readouterr().out
    text = (copy / "sites.csv").read_text()
    (copy / "sites.csv").write_text(text.replace("Too many,30,31", "Too many,30,30"))
    (copy / "study.toml").write_text(STUDY.replace("draws = 400", "draws = 401"))
    (copy / "results" / "share" / "units.csv").write_text("altered")
    assert main(["verify", str(path), "--quiet"]) == 1
    printed = capsys.readouterr().out
    assert "differs: input [survey] file (sites.csv): recorded" in printed
    assert "differs: settings.model.draws: recorded 400, now 401" in printed
    assert "differs: survey.sites: recorded 24, now 25" in printed
    assert "differs: units[North-east].mean: recorded" in printed
    assert "differs: file share/units.csv: recorded" in printed
    assert "differs: bytes of share/prevalence.tif: recorded" in printed
    assert files(copy / "results")["share/units.csv"] == b"altered"


@pytest.fixture
def no_figures(monkeypatch):
    """Leave the drawing out where a test is about something else."""
    monkeypatch.setattr("prevmap.study.writing.write_figures", lambda *_arguments: {})


@pytest.fixture(scope="module")
def again(study, tmp_path_factory):
    return prevmap.read_study(study / "study.toml").run(
        output=tmp_path_factory.mktemp("again") / "deep" / "out"
    )


def test_two_runs_give_the_same_bytes(study, again):
    first, second = files(study / "results"), files(again.folder)
    assert first.keys() == second.keys()
    assert [name for name in first if first[name] != second[name]] == ["internal/record.json"]


def test_maps_are_drawn_from_moved_sites(again):
    exact, moved = again.fit.sites.geometry, shareable_fit(again).sites.geometry
    square_m = shared_square_m(again)
    assert square_m == 8000.0
    away = exact.distance(moved)
    assert away.min() > 1.0
    assert away.max() < square_m
    centres = np.column_stack([moved.x, moved.y]) / square_m % 1.0
    assert (np.abs(centres - 0.5) < 1e-6).all(axis=1).sum() >= 12  # the first site of every square


def test_a_run_hands_back_every_artefact(again):
    assert again.fit.n_sites == 24
    assert again.surface.grid is again.grid
    assert again.units is again.decisions.units
    assert again.thresholds == (0.05, 0.2)
    assert again.record["numbers"]["fit.log_evidence"] == again.fit.log_evidence
    assert (
        again.fit.hyperparameters.loc["range_km", "median"]
        == again.fit.hyperparameters.loc["range_km", "at_mode"]
    )


def test_inspect_tells_everything_and_writes_nothing(inputs, capsys):
    before = files(inputs)
    assert main(["inspect", str(inputs / "study.toml")]) == 0
    printed = capsys.readouterr().out
    assert "26 rows read, 24 accepted" in printed
    assert "4 units" in printed
    assert re.search(r"Fit: 24 sites, mesh of [\d,]+ nodes, edge 10 km as stated, margin 60 km", printed)
    assert re.search(r"error +27 +Too many +positive", printed)
    assert files(inputs) == before


def test_inspect_and_run_find_the_same(study, capsys):
    assert main(["inspect", str(study / "study.toml")]) == 0
    shown = capsys.readouterr().out
    findings = pd.read_csv(study / "results" / "internal" / "findings.csv")
    counts = findings["severity"].value_counts()
    counted = ", ".join(f"{counts.get(name, 0)} {name}s" for name in ("error", "warning", "note"))
    assert f"Findings: {counted}" in shown


def test_inspect_counts_the_nodes_of_the_fit(study, record, capsys):
    main(["inspect", str(study / "study.toml")])
    nodes = re.search(r"mesh of ([\d,]+) nodes", capsys.readouterr().out)[1]
    assert int(nodes.replace(",", "")) == record["resolved"]["diagnostics"]["nodes"]


def edit(name, old, new):
    def change(folder):
        text = (folder / name).read_text()
        assert old in text
        (folder / name).write_text(text.replace(old, new))

    return change


def without_crs(name):
    def change(folder):
        with rasterio.open(folder / name) as raster:
            profile, values = raster.profile, raster.read()
        profile.pop("crs")
        with rasterio.open(folder / name, "w", **profile) as raster:
            raster.write(values)

    return change


def every_row_wrong(folder):
    table = pd.read_csv(folder / "sites.csv")
    table["positive"] = table["examined"] + 1
    table.to_csv(folder / "sites.csv", index=False)


def elsewhere(name):
    def change(folder):
        with rasterio.open(folder / name) as raster:
            profile, values = raster.profile, raster.read()
        profile["transform"] = Affine(0.05, 0, -70, 0, -0.05, -20)
        with rasterio.open(folder / name, "w", **profile) as raster:
            raster.write(values)

    return change


def twice_the_same_unit(folder):
    areas = geopandas.read_file(folder / "areas.geojson")
    areas["area"] = ["A", "A", "B", "C"]
    areas.to_file(folder / "areas.geojson", driver="GeoJSON")


WRONG = {
    "column": (
        edit("study.toml", 'positive = "positive"', 'positive = "positives"'),
        r"\[survey\].*positives",
    ),
    "rows": (every_row_wrong, r"\[survey\].*sites.csv"),
    "not a raster": (lambda folder: (folder / "wet.tif").write_text("no"), r"\[\[covariate\]\].*wet.tif"),
    "raster without crs": (without_crs("wet.tif"), r"\[\[covariate\]\].*wet.tif.*coordinate"),
    "raster elsewhere": (elsewhere("wet.tif"), r"\[\[covariate\]\].*wet"),
    "population elsewhere": (elsewhere("people.tif"), r"\[population\].*people.tif"),
    "not a layer": (lambda folder: (folder / "areas.geojson").write_text("{"), r"\[region\].*areas.geojson"),
    "unit column": (edit("study.toml", 'name = "area"', 'name = "areas"'), r'\[region\].*"?areas'),
    "one unit twice": (twice_the_same_unit, r"\[region\].*A"),
    "survey crs": (
        edit("study.toml", 'lon = "lon"\nlat = "lat"', 'x = "lon"\ny = "lat"\ncrs = "EPSG:32634"'),
        r"\[survey\].*(coordinates|study area)",
    ),
    "mesh": (edit("study.toml", "mesh_edge_km = 10", "mesh_edge_km = 0.05"), r"\[model\].*edge"),
    "test": (
        edit("study.toml", "[report]", '[tests."smear"]\nsensitivity = 0.7\nspecificity = 1.0\n[report]'),
        r"\[tests\].*test",
    ),
    "test of no use": (
        edit("study.toml", "[report]", '[tests."smear"]\nsensitivity = 0.5\nspecificity = 0.5\n[report]'),
        r"\[tests\].*not above 1",
    ),
    "grid": (edit("study.toml", "cell_km = 8", "cell_km = 0.0001"), r"\[grid\].*cell"),
    "range": (
        edit("study.toml", "range_km = { below = 10, probability = 0.05 }", "range_km = 1e9\nsd = 1e-9"),
        r"\[prior\] range_km: fixed at 1e\+09 km; accepted: from 0\.\d+ to \d+",
    ),
    "sd": (
        edit("study.toml", "[prior]", "[prior]\nsd = 1e-9"),
        r"\[prior\] sd: fixed at 1e-09; accepted: from 1e-06 to 100",
    ),
    "nugget": (
        edit("study.toml", "[prior]", "[prior]\nnugget_sd = 101"),
        r"\[prior\] nugget_sd: fixed at 101; accepted: from 1e-06 to 100",
    ),
}


@pytest.mark.parametrize("command", ["run", "inspect"])
@pytest.mark.parametrize("case", WRONG)
def test_a_wrong_input_is_named_and_nothing_is_written(inputs, case, command, capsys):
    change, message = WRONG[case]
    change(inputs)
    before = files(inputs)
    assert main([command, str(inputs / "study.toml")]) == 2
    printed = capsys.readouterr()
    told = printed.err.split("prevmap: ")[-1]
    assert told.startswith("study.toml: ["), printed.err  # file and section, whichever command it was
    assert re.search(message, told, flags=re.DOTALL), printed.err
    assert "Traceback" not in printed.err
    assert printed.out == ""
    assert files(inputs) == before
    assert {path.name for path in inputs.parent.iterdir()} == {"study"}


@pytest.mark.parametrize("stop", [KeyboardInterrupt, prevmap.FitError, prevmap.InputError])
def test_a_run_that_stops_while_writing_leaves_the_earlier_results(study, monkeypatch, no_figures, stop):
    before = files(study)

    def stopped(*_arguments):
        raise stop("stopped")

    monkeypatch.setattr("prevmap.study.writing.write_unit_layer", stopped)
    codes = {KeyboardInterrupt: 130, prevmap.FitError: 3, prevmap.InputError: 2}
    assert main(["run", str(study / "study.toml"), "--quiet"]) == codes[stop]
    assert files(study) == before


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGINT])
def test_a_killed_run_leaves_the_earlier_results(study, number):
    before = files(study / "results")
    command = [sys.executable, "-m", "prevmap", "run", str(study / "study.toml"), "--quiet"]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    while process.poll() is None and not list(study.glob("results/.partial-*/new/share/figures/*.png")):
        time.sleep(0.02)
    assert process.poll() is None, "the run ended before it could be killed"
    process.send_signal(number)
    _, errors = process.communicate()
    left = list(study.glob("results/.partial-*"))
    if number == signal.SIGINT:
        assert process.returncode == 130
        assert errors == "prevmap: interrupted; earlier results are as they were\n"
        assert left == []
    check_output(study / "results", {})  # as the next run begins
    assert files(study / "results") == before


def test_progress_goes_to_standard_error(inputs, capsys):
    edit("study.toml", "[decision]\nthresholds = [0.05, 0.2]\n", "")(inputs)
    assert main(["run", str(inputs / "study.toml"), "--output", str(inputs / "other")]) == 0
    printed = capsys.readouterr()
    assert "[1/8] Reading the survey ..." in printed.err
    assert "[8/8] Writing the results ..." in printed.err
    assert printed.out.splitlines()[0] == f"Report:  {inputs / 'other' / 'share' / 'report.html'}"
    # Without a threshold nothing is said about being above one.
    assert not list((inputs / "other" / "share" / "figures").glob("*exceedance*"))
    table = pd.read_csv(inputs / "other" / "share" / "units.csv")
    assert not [name for name in table.columns if "exceedance" in name or "decision" in name]
    assert not (inputs / "results").exists()


def test_a_study_of_a_survey_alone(inputs):
    survey_only = (
        STUDY.split("[[covariate]]")[0]
        + "[grid]\ncells = 60\n[model]\nmesh_edge_km = 12\nintegrate = false\n"
    )
    (inputs / "study.toml").write_text(survey_only)
    result = prevmap.read_study(inputs / "study.toml").run()
    assert result.units is None
    assert result.unit_table is None
    written = set(files(inputs / "results" / "share"))
    assert {"report.html", "prevalence.tif"} <= written
    assert not [name for name in written if "unit" in name or name.endswith(".svg")]


def test_warnings_of_the_log_are_recorded(inputs, monkeypatch, no_figures):
    edit("study.toml", "[population]", '[population]\nkind = "counts"')(inputs)
    from prevmap.study import preparation

    real = preparation.read_survey

    def warned(*arguments, **settings):
        logging.getLogger("prevmap.inputs").warning("a weak spot")
        return real(*arguments, **settings)

    monkeypatch.setattr(preparation, "read_survey", warned)
    result = prevmap.read_study(inputs / "study.toml").run()
    assert "a weak spot" in result.record["warnings"]


def test_official_totals_by_a_column_of_the_region(inputs, no_figures):
    edit("study.toml", 'raster = "people.tif"', 'raster = "people.tif"\nunit_total = "rounds"')(inputs)
    with pytest.raises(
        prevmap.InputError, match=r'\[population\] unit_total: found "rounds".*one of .*round'
    ):
        prevmap.read_study(inputs / "study.toml").inspect()
    edit("study.toml", '"rounds"', '"round"')(inputs)
    table = prevmap.read_study(inputs / "study.toml").run().unit_table
    np.testing.assert_allclose(table["population"], [1, 2, 3, 4], rtol=1e-9)  # rescaled piece by piece


def test_a_record_needs_its_study(study, tmp_path, capsys):
    shutil.copy(study / "results" / "internal" / "record.json", tmp_path / "record.json")
    assert main(["verify", str(tmp_path / "record.json")]) == 2
    assert "its study file" in capsys.readouterr().err
    (tmp_path / "record.json").write_text("{}")
    assert main(["verify", str(tmp_path / "record.json")]) == 2
    assert "JSON, but not a record" in capsys.readouterr().err
    (tmp_path / "record.json").write_text("{")
    with pytest.raises(prevmap.InputError, match="not a record: Expecting"):
        verify_record(tmp_path / "record.json")


def test_every_transform_can_be_named_in_a_study_file(inputs):
    assert set(get_args(Transform)) == set(TRANSFORMS)
    for name in TRANSFORMS:
        text = STUDY.replace('raster = "wet.tif"', f'raster = "wet.tif"\ntransform = "{name}"')
        (inputs / "study.toml").write_text(text)
        assert prevmap.read_study(inputs / "study.toml").covariates[0].transform == name


@settings(deadline=None)  # a busy machine is no fault
@given(
    st.lists(st.tuples(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6)), min_size=1, max_size=30),
    st.floats(100.0, 1e4),
    st.integers(0, 2**32 - 1),
)
def test_a_moved_site_tells_its_square_and_nothing_else(points, square_m, seed):
    xy = np.array(points)
    squares = np.floor(xy / square_m)
    elsewhere = (squares + np.random.default_rng(seed).uniform(0.001, 0.999, xy.shape)) * square_m
    same = (np.floor(elsewhere / square_m) == squares).all(axis=1)  # rounding can leave the square
    moved = coarse_positions(xy, square_m)
    if same.all():
        np.testing.assert_array_equal(coarse_positions(elsewhere, square_m), moved)
    assert (np.abs(moved - xy) <= square_m * (1 + 1e-9)).all()  # never farther than the square's edge


def test_findings_lose_their_coordinates_and_keep_their_distances():
    found = [
        Finding(
            2, "A", "position", "error", "(6.22941, -32.6371) is far from (-32.0421, 5.92444)", "row not used"
        ),
        Finding(3, "B", "lat", "error", "lat: '12 34 56.7 N x' is not an angle", "row not used"),
        Finding(
            4, "C", "position", "note", "lies 2.11 km outside the study area", "kept: it is within 49.7 km"
        ),
        Finding(
            5, "D", "positive", "error", "positive (45.5) is greater than examined (3600)", "row not used"
        ),
        Finding(6, "E", "x", "error", "x is 456123 outside the area", "row not used"),
    ]
    texts = without_positions(findings_frame(found))["what"].tolist()
    assert texts == [
        "(…, …) is far from (…, …)",
        "lat: '…' is not an angle",
        "lies 2.11 km outside the study area",
        "positive (45.5) is greater than examined (3600)",
        "x is … outside the area",
    ]
