"""The study file: every key checked, every refusal names what was found, where, and what is accepted."""

import re

import pytest

import prevmap
from prevmap.study.settings import SECTIONS, names

SURVEY = (
    '[survey]\nfile = "sites.csv"\nexamined = "examined"\npositive = "positive"\nlon = "lon"\nlat = "lat"\n'
)
START = "schema = 1\n"


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "sites.csv").write_text("examined,positive,lon,lat\n10,1,1.0,2.0\n")
    (tmp_path / "areas.geojson").write_text("{}")
    return tmp_path


def write(folder, text):
    path = folder / "study.toml"
    path.write_text(text)
    return path


def test_only_the_survey_is_required(folder):
    study = prevmap.read_study(write(folder, START + SURVEY))
    assert study.survey.file == folder / "sites.csv"
    assert study.region is None
    assert study.population is None
    assert study.decision is None
    assert study.covariates == ()
    assert study.output.folder == folder / "results"
    assert study.model.seed == 1


def test_every_section_is_read(folder):
    text = (
        START
        + SURVEY
        + """
site = "village"
ages = [5, 14]
date = 2026-03-01
[[covariate]]
name = "wet"
raster = "areas.geojson"
transform = "log1p"
scale = false
[[covariate]]
factor = "sampling"
at = "community"
[region]
file = "areas.geojson"
name = "district"
crs = 32631
[population]
raster = "areas.geojson"
kind = "density"
ages = [5, 14]
unit_total = { "A" = 10 }
[grid]
cells = 500
[model]
mesh_edge_km = 4
engine = "exact"
nu = 0.5
nugget = "draw"
[prior]
range_km = { below = 20, probability = 0.1 }
sd = 1
nugget_sd = false
intercept = [0, 2]
[tests."single smear"]
sensitivity = 0.7
specificity = 1
[decision]
thresholds = [0.02, 0.1]
certainty = { above = 0.8, below = 0.9 }
[output]
folder = "out"
[report]
title = "A title"
"""
    )
    study = prevmap.read_study(write(folder, text))
    assert study.survey.ages == (5, 14)
    assert study.survey.date == "2026-03-01"
    assert [c.name for c in study.covariates] == ["wet", None]
    assert study.covariates[0].scale is False
    assert study.covariates[1].at == "community"
    assert study.region.crs == "EPSG:32631"
    assert study.population.unit_total == {"A": 10.0}
    assert study.grid.cells == 500
    assert (study.model.nu, study.model.nugget) == (0.5, "draw")
    assert (study.prior.range_km.limit, study.prior.range_km.probability) == (20.0, 0.1)
    assert study.prior.sd == 1.0
    assert study.prior.nugget_sd is False
    assert study.prior.intercept == (0.0, 2.0)
    assert study.tests["single smear"].sensitivity == 0.7
    assert study.decision.thresholds == (0.02, 0.1)
    assert study.decision.certainty == {"above": 0.8, "below": 0.9}
    assert study.output.folder == folder / "out"
    assert set(study.input_files()) == {
        "study",
        "[survey] file",
        "[[covariate]] 1 raster",
        "[region] file",
        "[population] raster",
    }


REFUSED = {
    "not TOML": ("schema = 1\n[survey\n", r"not valid TOML: .*line 2"),
    "backslash": (
        START + '[survey]\nfile = "C:\\data\\s.csv"',
        r"line 3.*write paths with / or in single quotes",
    ),
    "no schema": (SURVEY, r"there is no schema; accepted: schema = 1"),
    "schema of the future": ("schema = 2\n" + SURVEY, r"schema: found 2; accepted: 1"),
    "schema true": ("schema = true\n" + SURVEY, r"schema: found true; accepted: 1"),
    "no survey": (START, r"there is no \[survey\] section"),
    "unknown section": (
        START + SURVEY + "[desicion]\n",
        r'unknown section "desicion"; did you mean "decision"\?',
    ),
    "unknown key": (START + SURVEY + 'sitte = "a"', r'\[survey\] unknown key "sitte"; did you mean "site"\?'),
    "key in no section": ("seed = 1\n" + START + SURVEY, r'unknown key "seed".*it belongs under \[model\]'),
    "key nowhere near": (START + SURVEY + 'zzz = "a"', r'unknown key "zzz"; known: file, examined, positive'),
    "section as value": ("schema = 1\nsurvey = 3", r"survey: found 3; accepted: a section headed \[survey\]"),
    "single bracket": (START + SURVEY + "[covariate]\n", r"accepted: sections headed \[\[covariate\]\]"),
    "missing key": (START + '[survey]\nfile = "sites.csv"', r'\[survey\] the key "examined" is missing'),
    "missing file": (
        START + SURVEY.replace("sites", "sit"),
        r'\[survey\] file: found "sit.csv".*mean "sites.csv"',
    ),
    "folder for a file": (START + SURVEY.replace("sites.csv", "."), r"\[survey\] file: .* is a folder"),
    "number for a name": (START + SURVEY.replace('"lon"', "3"), r"\[survey\] lon: found 3; accepted: a text"),
    "lon alone": (START + SURVEY.replace('lat = "lat"', ""), r"lon and lat belong together; found only lon"),
    "two positions": (
        START + SURVEY + 'x="x"\ny="y"\ncrs="EPSG:32631"',
        r"found lon and lat as well as x and y",
    ),
    "x without crs": (
        START + SURVEY.replace("lon =", "x =").replace("lat =", "y ="),
        r"x and y need crs",
    ),
    "unknown crs": (
        START + SURVEY + 'crs = "EPSG:999999"',
        r'crs: found "EPSG:999999"; accepted: a coordinate',
    ),
    "ages backwards": (
        START + SURVEY + "ages = [14, 5]",
        r"ages: found \[14, 5\]; accepted: \[youngest, oldest\]",
    ),
    "covariate of two sources": (
        START + SURVEY + '[[covariate]]\nname = "wet"\ncolumn = "a"\nfactor = "b"\nat = 1',
        r'\[\[covariate\]\] 1 "wet" accepted: one of raster.*found column and factor',
    ),
    "covariate of no source": (START + SURVEY + '[[covariate]]\nname = "wet"', r"found none of them"),
    "band of a column": (
        START + SURVEY + '[[covariate]]\ncolumn = "a"\nat = 1\nband = 2',
        r'"band" does not apply to a covariate given by column',
    ),
    "band zero": (START + SURVEY + '[[covariate]]\nraster = "areas.geojson"\nband = 0', r"band: found 0"),
    "column without at": (START + SURVEY + '[[covariate]]\ncolumn = "a"', r'1 the key "at" is missing'),
    "at for a raster": (
        START + SURVEY + '[[covariate]]\nraster = "areas.geojson"\nat = 3',
        r'"at" does not apply to a covariate given by raster',
    ),
    "cell of nothing": (
        START + SURVEY + "[grid]\ncell_km = 0",
        r"cell_km: found 0; accepted: a number above 0",
    ),
    "cell not a number": (START + SURVEY + "[grid]\ncell_km = nan", r"cell_km: found nan"),
    "cell both ways": (START + SURVEY + "[grid]\ncell_km = 1\ncells = 9", r"found cell_km and cells"),
    "true is no number": (START + SURVEY + "[grid]\ncell_km = true", r"cell_km: found true"),
    "engine": (
        START + SURVEY + '[model]\nengine = "fast"',
        r'engine: found "fast"; accepted: one of "mesh", "exact"',
    ),
    "seed": (START + SURVEY + "[model]\nseed = 1.5", r"seed: found 1.5; accepted: a whole number from 0"),
    "nu of the mesh": (START + SURVEY + "[model]\nnu = 2.5", r'nu: found 2.5 with engine = "mesh"'),
    "nu": (START + SURVEY + "[model]\nnu = 2", r"nu: found 2; accepted: one of 0.5, 1.0, 1.5, 2.5"),
    "range above": (
        START + SURVEY + "[prior]\nrange_km = { above = 3, probability = 0.1 }",
        r"range_km.above: found 3; accepted: \{ below",
    ),
    "probability": (
        START + SURVEY + "[prior]\nsd = { above = 3, probability = 5 }",
        r"sd.probability: found 5; accepted: a number above 0 and below 1",
    ),
    "sd left out": (START + SURVEY + "[prior]\nsd = false", r"sd: found false; accepted: \{ above"),
    "intercept": (START + SURVEY + "[prior]\nintercept = 1", r"intercept: found 1; accepted: \[mean, sd\]"),
    "sensitivity": (
        START + SURVEY + '[tests."a test"]\nsensitivity = 70\nspecificity = 1',
        r'\[tests."a test"\] sensitivity: found 70; accepted: a number above 0 and up to 1',
    ),
    "test without a name": (
        START + SURVEY + "[tests]\nsensitivity = 0.7",
        r"\[tests\] sensitivity: found 0.7",
    ),
    "per cent": (
        START + SURVEY + "[decision]\nthresholds = [10]",
        r"\[decision\] thresholds: found 10; .*If 10 per cent is meant, write 0\.1\.",
    ),
    "one threshold": (
        START + SURVEY + "[decision]\nthresholds = 0.1",
        r"thresholds: found 0.1; accepted: a list",
    ),
    "order": (
        START + SURVEY + "[decision]\nthresholds = [0.2, 0.1]",
        r"0.2 is followed by 0.1; thresholds must",
    ),
    "certainty": (
        START + SURVEY + "[decision]\nthresholds = [0.1]\ncertainty = 0.4",
        r"certainty: found 0.4; a certainty is a probability above 0.5",
    ),
    "certainty of one side": (
        START + SURVEY + "[decision]\nthresholds = [0.1]\ncertainty = { above = 0.9 }",
        r"\[decision\] certainty: found the keys above; a table needs exactly",
    ),
    "certainty below": (
        START + SURVEY + "[decision]\nthresholds = [0.1]\ncertainty = { above = 0.9, below = 90 }",
        r"\[decision\] certainty.below: found 90",
    ),
    "totals without units": (
        START + SURVEY + '[population]\nraster = "areas.geojson"\nunit_total = "people"',
        r"unit_total needs the units of a \[region\]",
    ),
    "output is a file": (START + SURVEY + '[output]\nfolder = "sites.csv"', r"folder: .*sites.csv is a file"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_what_is_wrong_is_named(folder, case):
    text, message = REFUSED[case]
    with pytest.raises(prevmap.InputError, match=re.compile(message, re.DOTALL)) as caught:
        prevmap.read_study(write(folder, text))
    assert "study.toml" in str(caught.value)
    assert sorted(path.name for path in folder.iterdir()) == ["areas.geojson", "sites.csv", "study.toml"]


@pytest.mark.parametrize("section", SECTIONS)
def test_a_slip_in_any_key_is_told_its_nearest_key(folder, section):
    key = names(SECTIONS[section])[-1]
    heading = {"covariate": "[[covariate]]", "tests": "[tests.x]"}.get(section, f"[{section}]")
    text = START + SURVEY + (f"{heading}\n" if section != "survey" else "") + f"{key}s_ = 1\n"
    with pytest.raises(prevmap.InputError, match=f'unknown key "{key}s_"; did you mean "{key}"'):
        prevmap.read_study(write(folder, text))


def test_bytes_that_are_no_text_are_named(folder):
    path = folder / "study.toml"
    path.write_bytes(b"schema = 1 # \xe9")
    with pytest.raises(prevmap.InputError, match="found byte 0xe9 at position 13; accepted: UTF-8"):
        prevmap.read_study(path)


def test_a_byte_order_mark_is_read_over(folder):
    path = folder / "study.toml"
    path.write_bytes(b"\xef\xbb\xbf" + (START + SURVEY).replace("\n", "\r\n").encode())
    assert prevmap.read_study(path).survey.lon == "lon"


def test_missing_study_file(tmp_path):
    with pytest.raises(prevmap.InputError, match=r"nowhere.toml: there is no such study file"):
        prevmap.read_study(tmp_path / "nowhere.toml")
