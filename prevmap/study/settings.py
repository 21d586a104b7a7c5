"""The sections and keys of a study file: every key beside the check its value must pass."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal, get_type_hints

from prevmap.errors import InputError
from prevmap.study import checks
from prevmap.study.checks import Place, TailPrior

Transform = Literal["log", "log1p", "sqrt", "square"]


@dataclass(frozen=True, slots=True)
class SurveySettings:
    """[survey]: the table, its columns, and what was measured."""

    file: Annotated[Path, checks.existing_file]
    examined: Annotated[str, checks.text]
    positive: Annotated[str, checks.text]
    lon: Annotated[str | None, checks.text] = None
    lat: Annotated[str | None, checks.text] = None
    x: Annotated[str | None, checks.text] = None
    y: Annotated[str | None, checks.text] = None
    crs: Annotated[str | None, checks.reference_system] = None
    site: Annotated[str | None, checks.text] = None
    unit: Annotated[str | None, checks.text] = None
    weight: Annotated[str | None, checks.text] = None
    encoding: Annotated[str | None, checks.text] = None
    sheet: Annotated[str | None, checks.text] = None
    decimal: Annotated[str | None, checks.choice(".", ",")] = None
    indicator: Annotated[str | None, checks.text] = None
    ages: Annotated[tuple[int, int] | str | None, checks.ages] = None
    test: Annotated[str | None, checks.text] = None
    sampling: Annotated[str | None, checks.text] = None
    date: Annotated[str | None, checks.date] = None


@dataclass(frozen=True, slots=True)
class CovariateSettings:
    """[[covariate]]: one raster, distance, column or factor."""

    name: Annotated[str | None, checks.text] = None
    raster: Annotated[Path | None, checks.existing_file] = None
    band: Annotated[int | None, checks.whole(least=1)] = None
    distance_to: Annotated[Path | None, checks.existing_file] = None
    column: Annotated[str | None, checks.text] = None
    factor: Annotated[str | None, checks.text] = None
    transform: Annotated[Transform | None, checks.choice("log", "log1p", "sqrt", "square")] = None
    scale: Annotated[bool, checks.flag] = True
    at: Annotated[float | str | None, checks.level] = None


@dataclass(frozen=True, slots=True)
class RegionSettings:
    """[region]: the implementation units and what lies in no unit."""

    file: Annotated[Path, checks.existing_file]
    name: Annotated[str | None, checks.text] = None
    code: Annotated[str | None, checks.text] = None
    parent: Annotated[str | None, checks.text] = None
    exclude: Annotated[Path | None, checks.existing_file] = None
    crs: Annotated[str | None, checks.reference_system] = None


@dataclass(frozen=True, slots=True)
class PopulationSettings:
    """[population]: a raster of people."""

    raster: Annotated[Path, checks.existing_file]
    kind: Annotated[Literal["counts", "density"], checks.choice("counts", "density")] = "counts"
    ages: Annotated[tuple[int, int] | None, checks.age_range] = None
    year: Annotated[int | None, checks.whole(least=1)] = None
    unit_total: Annotated[str | Mapping[str, float] | None, checks.totals] = None


@dataclass(frozen=True, slots=True)
class GridSettings:
    """[grid]: the cells the surface is predicted on."""

    cell_km: Annotated[float | None, checks.number(above=0, unit="in kilometres")] = None
    cells: Annotated[int | None, checks.whole(least=1)] = None


@dataclass(frozen=True, slots=True)
class ModelSettings:
    """[model]: mesh, engine, what prevalence means, seed."""

    mesh_edge_km: Annotated[float | None, checks.number(above=0, unit="in kilometres")] = None
    margin_km: Annotated[float | None, checks.number(above=0, unit="in kilometres")] = None
    max_nodes: Annotated[int | None, checks.whole(least=10)] = None
    engine: Annotated[Literal["mesh", "exact"], checks.choice("mesh", "exact")] = "mesh"
    integrate: Annotated[bool, checks.flag] = True
    nugget: Annotated[Literal["average", "omit", "draw"], checks.choice("average", "omit", "draw")] = (
        "average"
    )
    nu: Annotated[float, checks.choice(0.5, 1.0, 1.5, 2.5)] = 1.0
    seed: Annotated[int, checks.whole(least=0)] = 1
    draws: Annotated[int, checks.whole(least=100)] = 4000


@dataclass(frozen=True, slots=True)
class PriorSettings:
    """[prior]: priors; None means the documented default."""

    range_km: Annotated[TailPrior | float | None, checks.tail_prior("below")] = None
    sd: Annotated[TailPrior | float | None, checks.tail_prior("above")] = None
    nugget_sd: Annotated[TailPrior | float | bool | None, checks.tail_prior("above", optional=True)] = None
    intercept: Annotated[tuple[float, float] | None, checks.normal_prior] = None
    coefficient_sd: Annotated[float | None, checks.number(above=0)] = None


@dataclass(frozen=True, slots=True)
class AccuracySettings:
    """[tests."name"]: how often a diagnostic test is right."""

    sensitivity: Annotated[float, checks.number(above=0, most=1)]
    specificity: Annotated[float, checks.number(above=0, most=1)]


@dataclass(frozen=True, slots=True)
class DecisionSettings:
    """[decision]: thresholds and the certainty a decision needs."""

    thresholds: Annotated[tuple[float, ...], checks.thresholds]
    certainty: Annotated[float | Mapping[str, float], checks.certainty] = 0.90
    decide_without_sites: Annotated[bool, checks.flag] = False


@dataclass(frozen=True, slots=True)
class OutputSettings:
    """[output]: where the results go."""

    folder: Annotated[Path, checks.output_folder]


@dataclass(frozen=True, slots=True)
class ReportSettings:
    """[report]: the title, and what only the programme can tell its readers."""

    title: Annotated[str | None, checks.text] = None
    authors: Annotated[str | None, checks.text] = None
    contact: Annotated[str | None, checks.text] = None
    purpose: Annotated[str | None, checks.text] = None
    funding: Annotated[str | None, checks.text] = None
    data_sources: Annotated[str | None, checks.text] = None
    data_availability: Annotated[str | None, checks.text] = None
    ethics: Annotated[str | None, checks.text] = None
    limitations: Annotated[str | None, checks.text] = None


SECTIONS: dict[str, type] = {
    "survey": SurveySettings,
    "covariate": CovariateSettings,
    "region": RegionSettings,
    "population": PopulationSettings,
    "grid": GridSettings,
    "model": ModelSettings,
    "prior": PriorSettings,
    "tests": AccuracySettings,
    "decision": DecisionSettings,
    "output": OutputSettings,
    "report": ReportSettings,
}


def names(kind: type) -> list[str]:
    """Return the keys of a section."""
    return [field.name for field in dataclasses.fields(kind)]


def read_section(kind: type, table: Mapping[str, Any], place: Place) -> Any:
    """Check every key of one section and return its settings.

    Raises
    ------
    InputError
        A key is unknown or missing, or its value is refused by its check.
    """
    for name in table:
        if name not in names(kind):
            raise InputError(f'{place} unknown key "{name}"; {checks.nearest(name, names(kind))}')
    hints = get_type_hints(kind, include_extras=True)
    values: dict[str, Any] = {}
    for field in dataclasses.fields(kind):
        if field.name in table:
            check = hints[field.name].__metadata__[0]
            values[field.name] = check(table[field.name], place.at(field.name))
        elif field.default is dataclasses.MISSING:
            raise InputError(f'{place} the key "{field.name}" is missing; it is required')
    return kind(**values)
