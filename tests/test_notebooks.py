"""Every notebook runs from a clean kernel and reaches its headline number."""

import re
from pathlib import Path

import nbformat
import numpy as np
import pandas as pd
import pytest
from nbclient import NotebookClient

ROOT = Path(__file__).parents[1]
NOTEBOOKS = sorted((ROOT / "notebooks").glob("*.ipynb"))


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.stem)
def test_no_outputs_are_stored(path):
    for cell in nbformat.read(path, as_version=4).cells:
        assert cell.get("outputs", []) == []
        assert cell.get("execution_count") is None


def run(name, monkeypatch):
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    notebook = nbformat.read(ROOT / "notebooks" / name, as_version=4)
    NotebookClient(notebook, timeout=300, resources={"metadata": {"path": ROOT / "notebooks"}}).execute()
    return [cell for cell in notebook.cells if cell.cell_type == "code"]


def test_first_map_reaches_the_true_prevalence(monkeypatch):
    cells = run("first_map.ipynb", monkeypatch)
    assert any("image/png" in output.get("data", {}) for output in cells[0].outputs)
    printed = "".join(output.get("text", "") for output in cells[-1].outputs)
    estimate = float(re.search(r"([\d.]+)% of the children of the province", printed)[1]) / 100
    truth = pd.read_csv(ROOT / "demo_data" / "truth" / "districts.csv")
    expected = np.average(truth["prevalence"], weights=truth["children"])
    # About 7,000 children in 170 schools: two points are some three standard errors of the survey's mean.
    assert estimate == pytest.approx(expected, abs=0.02)


def test_the_readme_shows_the_lines_of_the_first_map():
    cells = nbformat.read(ROOT / "notebooks" / "first_map.ipynb", as_version=4).cells
    lines = next(cell.source for cell in cells if cell.cell_type == "code")
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    assert "```python\n" + lines.replace("../demo_data/", "demo_data/") + "\n```" in readme
