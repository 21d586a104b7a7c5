"""What the package promises before any study runs: light imports, public names, one version, whole wheel."""

import importlib.metadata
import json
import re
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import pytest

import prevmap
from prevmap.study.settings import SECTIONS, names

ROOT = Path(__file__).parents[1]
HEAVY = {"pandas", "geopandas", "numba", "matplotlib", "rasterio", "scipy", "statsmodels", "numpy"}


def modules_after(code):
    script = f"{code}\nimport json, sys\nprint(json.dumps(sorted(sys.modules)))"
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True, cwd=ROOT
    )
    return set(json.loads(done.stdout.splitlines()[-1]))


@pytest.mark.parametrize(
    "code",
    [
        "import prevmap",
        "import prevmap.cli",
        "import prevmap; prevmap.InputError",
        "import prevmap; prevmap.read_study; prevmap.Study",
    ],
)
def test_heavy_packages_load_only_when_needed(code):
    assert modules_after(code) & HEAVY == set()


def test_the_study_file_is_read_without_the_model():
    assert "prevmap.model.fit" not in modules_after("from prevmap.study import read_study")
    assert "prevmap.model.fit" in modules_after("from prevmap.study import StudyResult")


@pytest.mark.parametrize("name", prevmap.__all__)
def test_every_public_name_resolves(name):
    assert getattr(prevmap, name) is not None
    assert name in dir(prevmap)


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="no attribute 'read_surveys'"):
        prevmap.read_surveys  # noqa: B018 - the access is the test


def test_one_version():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert prevmap.__version__ == project["version"]


def shell_blocks(name):
    return re.findall(r"^```sh\n(.*?)^```$", (ROOT / name).read_text(), flags=re.MULTILINE | re.DOTALL)


def test_readme_has_two_shell_blocks_that_make_their_own_environment():
    demo, test = shell_blocks("README.md")
    for block in (demo, test):
        environment = block.splitlines()[0].removeprefix("python3 -m venv ")
        assert all(line.startswith(f"{environment}/bin/") for line in block.splitlines()[1:])
    assert demo.splitlines()[-1].endswith("/prevmap demo prevmap_demo")
    assert '".[test]"' in test
    assert "-m pytest" in test.splitlines()[-1]


def test_readme_lists_every_key_of_a_study_file():
    (text,) = re.findall(r"^```toml\n(.*?)^```$", (ROOT / "README.md").read_text(), re.MULTILINE | re.DOTALL)
    tables = tomllib.loads(text)
    assert list(tables) == ["schema", *SECTIONS]
    for section, kind in SECTIONS.items():
        shown = tables[section]
        if section == "covariate":
            shown = {key: value for table in shown for key, value in table.items()}
        if section == "tests":
            (shown,) = shown.values()
        left_to_a_comment = {"survey": {"x", "y", "crs"}, "grid": {"cells"}}.get(section, set())
        assert set(shown) == set(names(kind)) - left_to_a_comment
        assert all(re.search(rf"\b{key}\b", text) for key in left_to_a_comment)


def test_readme_shows_a_study_file_that_can_be_read(tmp_path):
    (text,) = re.findall(r"^```toml\n(.*?)^```$", (ROOT / "README.md").read_text(), re.MULTILINE | re.DOTALL)
    for name in re.findall(r"\"([\w]+\.(?:csv|tif|geojson))\"", text):
        (tmp_path / name).touch()
    (tmp_path / "study.toml").write_text(text)
    study = prevmap.read_study(tmp_path / "study.toml")
    assert len(study.covariates) == 4
    assert study.decision.certainty == 0.90


def test_links_of_the_guides_lead_somewhere():
    for name in ("README.md", "DEVELOPERS.md"):
        for target in re.findall(r"\]\(([^)]+)\)", (ROOT / name).read_text()):
            assert (ROOT / target).exists(), f"{name}: {target}"


def test_what_developers_are_told_to_run_is_run_before_a_change_lands():
    run = (ROOT / ".ci" / "run").read_text()
    checks = [line.removeprefix(".venv/bin/") for line in shell_blocks("DEVELOPERS.md")[0].splitlines()[4:]]
    assert [check.split()[0] for check in checks] == ["ruff", "ruff", "mypy", "lint-imports"]
    for check in checks:
        command, _, rest = check.partition(" ")
        assert re.search(
            rf'"\$bin/{command}"{" " + re.escape(rest) if rest else ""}$|{command}"$', run, re.MULTILINE
        )


def test_modules_named_for_developers_exist():
    named = set(
        re.findall(r"`((?:prevmap|tests|demo_data)/[\w/.]+\.py)`", (ROOT / "DEVELOPERS.md").read_text())
    )
    assert len(named) > 20
    assert [name for name in sorted(named) if not (ROOT / name).exists()] == []


def test_every_module_stands_in_the_flow_table():
    table = (ROOT / "DEVELOPERS.md").read_text()
    modules = [path.relative_to(ROOT).as_posix() for path in (ROOT / "prevmap").rglob("*.py")]
    missing = [name for name in modules if not name.endswith("__init__.py") and f"`{name}`" not in table]
    assert missing == []


def test_the_wheel_carries_the_demonstration_data(tmp_path):
    hatchling = pytest.importorskip("hatchling.builders.wheel", reason="the build backend is not installed")
    path = next(iter(hatchling.WheelBuilder(str(ROOT)).build(directory=str(tmp_path), versions=["standard"])))
    with zipfile.ZipFile(path) as wheel:
        names = set(wheel.namelist())
    data = {p.relative_to(ROOT).as_posix() for p in (ROOT / "demo_data").rglob("*") if p.is_file()}
    assert {f"prevmap/{name}" for name in data if "__pycache__" not in name} <= names
    assert "prevmap/demo_data/study.toml" in names
    assert {"prevmap/cli.py", "prevmap/study/settings.py"} <= names
    assert not [name for name in names if name.startswith(("tests/", "notebooks/")) or "__pycache__" in name]
    scripts = [name for name in names if name.endswith("entry_points.txt")]
    with zipfile.ZipFile(path) as wheel:
        assert "prevmap = prevmap.cli:main" in wheel.read(scripts[0]).decode()


def test_the_licence_travels_with_an_installed_package():
    try:
        metadata = importlib.metadata.metadata("prevmap")
    except importlib.metadata.PackageNotFoundError:
        pytest.skip("run from the tree, not installed")
    assert metadata["License-Expression"] == "BSD-3-Clause"
