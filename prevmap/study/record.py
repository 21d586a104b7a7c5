"""The record of a run: what went in, with what settings and versions, and the numbers that came out."""

from __future__ import annotations

import importlib.metadata
import json
import math
import numbers
import platform
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

import prevmap
from prevmap.errors import InputError
from prevmap.study.outputs import sha256
from prevmap.study.schema import Study, relative_to

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult

_FORMAT = 1
_PACKAGES = (
    "exactextract",
    "geopandas",
    "jinja2",
    "matplotlib",
    "numba",
    "numpy",
    "pandas",
    "pyogrio",
    "pyproj",
    "qdldl",
    "rasterio",
    "scipy",
    "shapely",
    "statsmodels",
)


def environment() -> dict[str, Any]:
    """Return the versions and the platform that can change the last digits of a result."""
    return {
        "prevmap": prevmap.__version__,
        "python": platform.python_version(),
        "platform": platform.platform(),
        "machine": platform.machine(),
        "packages": {name: importlib.metadata.version(name) for name in _PACKAGES},
    }


def input_hashes(study: Study) -> dict[str, dict[str, str]]:
    """Return the path (relative to the study file) and SHA-256 of every input file, by its key."""
    files = {}
    for key, path in study.input_files().items():
        for part in (path, *_companions(path)):
            name = key if part == path else f"{key} ({part.suffix})"
            files[name] = {"file": relative_to(part, study.path.parent), "sha256": sha256(part)}
    return files


def _companions(path: Path) -> list[Path]:
    """Return the files a shapefile is read with."""
    if path.suffix.lower() != ".shp":
        return []
    return [
        part
        for part in sorted(path.parent.glob(f"{path.stem}.*"))
        if part.suffix in (".dbf", ".prj", ".shx", ".cpg")
    ]


def headline_numbers(result: StudyResult) -> dict[str, Any]:
    """Return every number a reader can meet, by a name that says where it stands.

    Parameters
    ----------
    result : StudyResult
        A finished run.

    Returns
    -------
    dict
        Flat: name to number, text or None (not defined).
    """
    found: dict[str, Any] = {
        "survey.rows": len(result.survey.frame),
        "survey.sites": result.fit.n_sites,
        "survey.examined": result.fit.n_examined,
        "survey.positive": result.fit.n_positive,
        "fit.log_evidence": result.fit.log_evidence,
    }
    for name, frame in (
        ("coefficients", result.fit.coefficients),
        ("hyperparameters", result.fit.hyperparameters),
    ):
        found.update(_cells(name, frame))
    surface = result.surface
    found["surface.cells"] = len(surface.mean)
    for name in ("mean", "sd", "lower95", "median", "upper95"):
        found[f"surface.{name} (average over cells)"] = _average(getattr(surface, name))
    found["surface.extrapolated (cells)"] = int(np.count_nonzero(surface.extrapolated))
    for threshold in result.thresholds:
        name = f"surface.exceedance({threshold:g}) (average over cells)"
        found[name] = _average(surface.exceedance(threshold))
    if result.unit_table is not None:
        numeric = result.unit_table.drop(columns=["code", "parent"], errors="ignore").set_index("unit")
        found.update(_cells("units", numeric))
    return {name: _plain(value) for name, value in found.items()}


def _average(values: np.ndarray) -> float:
    """Return the mean of the defined values of an (n,) array."""
    defined = values[np.isfinite(values)]
    return float(np.mean(defined)) if defined.size else math.nan


def _cells(name: str, frame: pd.DataFrame) -> Iterator[tuple[str, Any]]:
    for label, row in zip(frame.index, frame.to_dict("records"), strict=True):
        for column, value in row.items():
            yield f"{name}[{label}].{column}", value


def _plain(value: Any) -> Any:
    """Return a value JSON can hold; None for what is not defined."""
    if value is None or value is pd.NA or value is pd.NaT:
        return None
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, numbers.Integral):
        return int(value)
    if isinstance(value, numbers.Real):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(name): _plain(item) for name, item in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(item) for item in value]
    return str(value)


def make_record(
    study: Study,
    result: StudyResult,
    *,
    inputs: Mapping[str, Any],
    outputs: Mapping[str, str],
    folder: Path,
    seconds: Mapping[str, float],
    warnings: list[str],
) -> dict[str, Any]:
    """Return everything needed to reach the same numbers again, as plain values.

    Parameters
    ----------
    study : Study
    result : StudyResult
    inputs : mapping
        From :func:`input_hashes`, taken before the inputs were read.
    outputs : mapping
        SHA-256 of every file written, by its path in the output folder.
    folder : Path
        The output folder; the study file is named relative to its record.
    seconds : mapping
        Time by stage.
    warnings : list of str
        Warnings of the fit and of the log.
    """
    fit = result.fit
    resolved = {
        "working_crs": result.region.crs.to_wkt(),
        "largest_distance_distortion": result.region.distortion,
        "cell_km": result.grid.cell_m / 1000,
        "grid_shape": result.grid.shape,
        "diagnostics": {name: value for name, value in fit.diagnostics.items() if name != "seconds"},
        "priors": {name: sentence for name, sentence in fit.prior_text},
        "covariates_at": result.surface.at,
    }
    record = {
        "record": _FORMAT,
        "study": relative_to(study.path, folder / "internal"),
        "environment": environment(),
        "inputs": inputs,
        "settings": study.settings(),
        "resolved": resolved,
        "seed": study.model.seed,
        "warnings": warnings,
        "numbers": headline_numbers(result),
        "outputs": outputs,
        "seconds": seconds,
    }
    return {name: _plain(value) for name, value in record.items()}


def write_record(record: Mapping[str, Any], path: Path) -> None:
    """Write a record as JSON, one value per line."""
    content = json.dumps(record, indent=1, ensure_ascii=False, allow_nan=False)
    path.write_text(content + "\n", encoding="utf-8")


def read_record(path: Path) -> dict[str, Any]:
    """Read a record that an earlier run wrote.

    Raises
    ------
    InputError
        The file is missing, is not JSON, or is not a record of this package.
    """
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, IsADirectoryError):
        raise InputError(
            f"{path}: there is no such record; accepted: the record.json of an earlier run"
        ) from None
    except (UnicodeDecodeError, json.JSONDecodeError) as error:
        raise InputError(
            f"{path}: not a record: {error}; accepted: the record.json of an earlier run"
        ) from None
    parts = ("study", "environment", "inputs", "settings", "numbers", "outputs")
    if (
        not isinstance(record, dict)
        or record.get("record") != _FORMAT
        or any(part not in record for part in parts)
    ):
        raise InputError(f"{path}: JSON, but not a record; accepted: the record.json of an earlier run")
    return record
