"""The study file: its sections and keys, each with its check, and the Study they make."""

from __future__ import annotations

import dataclasses
import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from prevmap.errors import InputError
from prevmap.study import checks
from prevmap.study.checks import Place
from prevmap.study.settings import (
    SECTIONS,
    AccuracySettings,
    CovariateSettings,
    DecisionSettings,
    GridSettings,
    ModelSettings,
    OutputSettings,
    PopulationSettings,
    PriorSettings,
    RegionSettings,
    ReportSettings,
    SurveySettings,
    names,
    read_section,
)

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult
    from prevmap.study.inspection import Inspection

SCHEMA = 1


@dataclass(frozen=True, slots=True)
class Study:
    """A checked study file: what goes in, how it is modelled, what is decided, where results go.

    Parameters
    ----------
    path : Path
        The study file; relative paths in it were resolved against its folder.
    survey, region, population, grid, model, prior, decision, output, report
        Settings by section; region, population and decision are None where the file has none.
    covariates : tuple of CovariateSettings
    tests : mapping of test name to AccuracySettings
    """

    path: Path
    survey: SurveySettings
    covariates: tuple[CovariateSettings, ...]
    region: RegionSettings | None
    population: PopulationSettings | None
    grid: GridSettings
    model: ModelSettings
    prior: PriorSettings
    tests: Mapping[str, AccuracySettings]
    decision: DecisionSettings | None
    output: OutputSettings
    report: ReportSettings

    def run(self, progress: bool = False, output: str | Path | None = None) -> StudyResult:
        """Run the whole chain, write the results and return every artefact.

        Parameters
        ----------
        progress : bool
            Show the stages and their times on standard error.
        output : path, optional
            Folder for the results, instead of the study file's ``[output] folder``.

        Returns
        -------
        StudyResult

        Raises
        ------
        InputError
            An input is wrong; nothing was written.
        FitError
            The model could not be fitted; nothing was written.
        """
        if output is not None and not str(output).strip():
            raise InputError(f"output: found {checks.shown(str(output))}; accepted: the path of a folder")
        from prevmap.study.chain import run_study  # reading a study file must not wait for numba

        return run_study(self, progress=progress, output=None if output is None else Path(output))

    def inspect(self, progress: bool = False) -> Inspection:
        """Check every input and say what a fit would do, without fitting or writing anything.

        Parameters
        ----------
        progress : bool
            Show the stages and their times on standard error.

        Raises
        ------
        InputError
            An input is wrong.
        """
        from prevmap.study.inspection import inspect_study  # as in run

        return inspect_study(self, progress=progress)

    def input_files(self) -> dict[str, Path]:
        """Return every input file by the key that names it, the study file itself first."""
        files: dict[str, Path] = {"study": self.path, "[survey] file": self.survey.file}
        for index, covariate in enumerate(self.covariates, start=1):
            for key in ("raster", "distance_to"):
                if (path := getattr(covariate, key)) is not None:
                    files[f"[[covariate]] {index} {key}"] = path
        if self.region is not None:
            files["[region] file"] = self.region.file
            if self.region.exclude is not None:
                files["[region] exclude"] = self.region.exclude
        if self.population is not None:
            files["[population] raster"] = self.population.raster
        return files

    def settings(self) -> dict[str, Any]:
        """Return every setting by section as plain values, paths relative to the study file."""
        plain = {
            field.name: _plain(getattr(self, field.name), self.path.parent)
            for field in dataclasses.fields(self)
            if field.name != "path"
        }
        return {"schema": SCHEMA, **plain}


def read_study(path: str | Path) -> Study:
    """Read and check a study file; the inputs it names must exist but are not read yet.

    Parameters
    ----------
    path : path
        A TOML file with at least ``schema = 1`` and a ``[survey]`` section.

    Returns
    -------
    Study

    Raises
    ------
    InputError
        The file is missing, is not TOML, or has a wrong section, key, type, value or path.
    """
    path = Path(path)
    tables = _read_toml(path)
    here = Place(path.name, path.resolve().parent, "")
    _check_top(tables, here)
    study = Study(
        path=path.resolve(),
        survey=read_section(SurveySettings, tables["survey"], here.under("[survey]")),
        covariates=_covariates(tables.get("covariate", []), here),
        region=_optional(RegionSettings, tables, here, "region"),
        population=_optional(PopulationSettings, tables, here, "population"),
        grid=read_section(GridSettings, tables.get("grid", {}), here.under("[grid]")),
        model=read_section(ModelSettings, tables.get("model", {}), here.under("[model]")),
        prior=read_section(PriorSettings, tables.get("prior", {}), here.under("[prior]")),
        tests=_accuracies(tables.get("tests", {}), here),
        decision=_optional(DecisionSettings, tables, here, "decision"),
        output=read_section(
            OutputSettings, {"folder": "results", **tables.get("output", {})}, here.under("[output]")
        ),
        report=read_section(ReportSettings, tables.get("report", {}), here.under("[report]")),
    )
    _check_together(study, here)
    return study


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        content = path.read_bytes().decode("utf-8-sig")  # some editors put a byte order mark in front
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such study file; accepted: a TOML file") from None
    except IsADirectoryError:
        raise InputError(f"{path}: found a folder; accepted: a study file in TOML") from None
    except PermissionError:
        raise InputError(f"{path}: the study file may not be read; change its permissions") from None
    except UnicodeDecodeError as error:
        raise InputError(
            f"{path}: found byte {error.object[error.start]:#04x} at position {error.start}; "
            "accepted: UTF-8 text"
        ) from None
    try:
        return tomllib.loads(content)
    except tomllib.TOMLDecodeError as error:
        hint = ""
        if "escape" in str(error) or "\\" in str(error):
            hint = "; write paths with / or in single quotes"
        raise InputError(f"{path}: not valid TOML: {error}{hint}") from None


def _check_top(tables: Mapping[str, Any], here: Place) -> None:
    for name, value in tables.items():
        if name == "schema":
            continue
        if name not in SECTIONS:
            if isinstance(value, Mapping | list):
                raise InputError(f'{here} unknown section "{name}"; {checks.nearest(name, SECTIONS)}')
            owners = [f"[{section}]" for section, kind in SECTIONS.items() if name in names(kind)]
            hint = f"it belongs under {' or '.join(owners)}" if owners else checks.nearest(name, ["schema"])
            raise InputError(f'{here} unknown key "{name}" outside any section; {hint}')
        if name == "covariate":
            if not isinstance(value, list) or not all(isinstance(item, Mapping) for item in value):
                raise InputError(
                    f"{here} covariate: accepted: sections headed [[covariate]], two brackets each side"
                )
        elif not isinstance(value, Mapping):
            raise InputError(
                f"{here} {name}: found {checks.shown(value)}; accepted: a section headed [{name}]"
            )
    if "schema" not in tables:
        raise InputError(f"{here} there is no schema; accepted: schema = {SCHEMA} in the first line")
    if tables["schema"] != SCHEMA or isinstance(tables["schema"], bool):
        here.at("schema").refuse(tables["schema"], f"{SCHEMA}, the one this version reads")
    if "survey" not in tables:
        raise InputError(
            f"{here} there is no [survey] section; accepted: [survey] with file, examined, positive"
        )


def _optional(kind: type, tables: Mapping[str, Any], here: Place, name: str) -> Any:
    return read_section(kind, tables[name], here.under(f"[{name}]")) if name in tables else None


def _covariates(tables: list[Mapping[str, Any]], here: Place) -> tuple[CovariateSettings, ...]:
    found = []
    for index, table in enumerate(tables, start=1):
        named = f' "{table["name"]}"' if isinstance(table.get("name"), str) else ""
        label = f"[[covariate]] {index}{named}"
        covariate = read_section(CovariateSettings, table, here.under(label))
        place = here.under(label)
        sources = [key for key in ("raster", "distance_to", "column", "factor") if key in table]
        if len(sources) != 1:
            given = " and ".join(sources) if sources else "none of them"
            raise InputError(f"{place} accepted: one of raster, distance_to, column, factor; found {given}")
        misplaced = {
            "raster": ["at"],
            "distance_to": ["at", "band"],
            "column": ["band"],
            "factor": ["scale", "transform", "band"],
        }
        for key in misplaced[sources[0]]:
            if key in table:
                raise InputError(
                    f'{place} the key "{key}" does not apply to a covariate given by {sources[0]}'
                )
        if sources[0] in ("column", "factor") and covariate.at is None:
            raise InputError(
                f'{place} the key "at" is missing; accepted: the number or level of '
                f'"{table[sources[0]]}" that the maps are made for'
            )
        if sources[0] == "column" and isinstance(covariate.at, str):
            place.at("at").refuse(
                covariate.at, f'a number; for the levels of a text column use factor = "{table["column"]}"'
            )
        found.append(covariate)
    return tuple(found)


def _accuracies(tables: Mapping[str, Any], here: Place) -> dict[str, AccuracySettings]:
    for name, table in tables.items():
        if not isinstance(table, Mapping):
            raise InputError(
                f"{here} [tests] {name}: found {checks.shown(table)}; accepted: a section "
                '[tests."name of the test"] with sensitivity and specificity'
            )
    return {
        name: read_section(AccuracySettings, table, here.under(f'[tests."{name}"]'))
        for name, table in tables.items()
    }


def _check_together(study: Study, here: Place) -> None:
    """Refuse keys that are right one by one and wrong together."""
    survey = study.survey
    place = here.under("[survey]")
    if (survey.lon is None) != (survey.lat is None):
        raise InputError(f"{place} lon and lat belong together; found only {'lon' if survey.lon else 'lat'}")
    if (survey.x is None) != (survey.y is None):
        raise InputError(f"{place} x and y belong together; found only {'x' if survey.x else 'y'}")
    if survey.lon is not None and survey.x is not None:
        raise InputError(f"{place} found lon and lat as well as x and y; accepted: one of the two pairs")
    if survey.x is not None and survey.crs is None:
        raise InputError(f'{place} x and y need crs, such as crs = "EPSG:32631"')
    if study.grid.cell_km is not None and study.grid.cells is not None:
        raise InputError(f"{here.file}: [grid] found cell_km and cells; accepted: one of the two")
    if study.model.nu != 1.0 and study.model.engine != "exact":
        raise InputError(
            f'{here.file}: [model] nu: found {study.model.nu:g} with engine = "{study.model.engine}"; '
            'accepted: nu = 1 with engine = "mesh", or engine = "exact"'
        )
    if study.region is None and study.population is not None and study.population.unit_total is not None:
        raise InputError(f"{here.file}: [population] unit_total needs the units of a [region] section")


def _plain(value: Any, folder: Path) -> Any:
    """Return settings as values that JSON can hold."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name), folder) for field in dataclasses.fields(value)}
    if isinstance(value, Path):
        return relative_to(value, folder)
    if isinstance(value, Mapping):
        return {str(name): _plain(item, folder) for name, item in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(item, folder) for item in value]
    return value


def relative_to(path: Path, folder: Path) -> str:
    """Return a path relative to a folder, with forward slashes; absolute where they share no root."""
    try:
        return Path(os.path.relpath(path, folder)).as_posix()
    except ValueError:
        return path.as_posix()
