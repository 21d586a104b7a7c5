"""From a study file to what a fit starts from: inputs read and checked, the model, the rows it can use."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd

from prevmap.errors import InputError
from prevmap.inputs.attributes import attribute
from prevmap.inputs.covariates import ColumnCovariate, DistanceCovariate, FactorCovariate, RasterCovariate
from prevmap.inputs.design import Design, design
from prevmap.inputs.findings import Finding
from prevmap.inputs.grid import Grid
from prevmap.inputs.placement import assign_units, assign_unplaced, exchange_hint, site_findings
from prevmap.inputs.population import Population, read_population
from prevmap.inputs.region import Region, hull_region, read_region
from prevmap.inputs.survey import Survey, SurveyNotes, read_survey
from prevmap.model import meshing
from prevmap.model.prior import default_reach_km, resolve_priors
from prevmap.model.rows import row_accuracy
from prevmap.model.spec import Above, Below, DiagnosticAccuracy, MeshSpec, PrevalenceModel, Priors
from prevmap.study.checks import TailPrior
from prevmap.study.progress import Stages
from prevmap.study.schema import Study
from prevmap.study.settings import CovariateSettings

Covariate = RasterCovariate | DistanceCovariate | ColumnCovariate | FactorCovariate


@dataclass(frozen=True, slots=True)
class StudyInputs:
    """What a study reads, checked: survey, region, population, covariates, grid."""

    survey: Survey
    region: Region
    population: Population | None
    covariates: tuple[Covariate, ...]
    grid: Grid

    @property
    def grid_findings(self) -> list[pd.DataFrame]:
        """Findings of the population and the grid, which a fit does not know of."""
        return [*([] if self.population is None else [self.population.findings]), self.grid.findings]


@contextlib.contextmanager
def naming(study: Study, section: str) -> Iterator[None]:
    """Put the study file and the section before the message of an InputError."""
    try:
        yield
    except InputError as error:
        raise InputError(f"{study.path.name}: {section} {error}", error.findings) from error


def read_inputs(study: Study, stages: Stages) -> StudyInputs:
    """Read and check everything a study names, in the order in which data flows.

    Raises
    ------
    InputError
        An input is wrong; the message starts with the study file and the section.
    """
    with stages.stage("survey", "Reading the survey"), naming(study, "[survey]"):
        survey = _read_survey(study)
    area = "[survey]" if study.region is None else "[region]"  # without a region, the hull of the sites
    with stages.stage("region", "Reading the region"), naming(study, area):
        region = _read_region(study, survey)
    population = None
    with stages.stage("grid", "Laying the grid"):
        if study.population is not None:
            with naming(study, "[population]"):
                population = _read_population(study, region)
        grid = _lay_grid(study, survey, region, population)
    with naming(study, "[[covariate]]"):
        covariates = tuple(_covariate(settings) for settings in study.covariates)
    return StudyInputs(survey, region, population, covariates, grid)


def _lay_grid(study: Study, survey: Survey, region: Region, population: Population | None) -> Grid:
    cell_km, cells = study.grid.cell_km, study.grid.cells
    try:
        return region.grid(cell_km, cells=cells, population=population)
    except InputError as error:
        with naming(study, "[grid]"):
            region.grid(cell_km, cells=cells)
        with naming(study, "[population]"):  # without people there is nothing wrong
            # A population that misses the region is told first, though the region may be at fault.
            hint = exchange_hint(survey.frame, region, 0.0)
            if not hint:
                raise
            raise InputError(f"{error} No site lies in the region either.{hint}", error.findings) from error


def _read_survey(study: Study) -> Survey:
    settings = study.survey
    about = SurveyNotes(
        indicator=settings.indicator,
        ages=settings.ages,
        test=settings.test,
        sampling=settings.sampling,
        date=settings.date,
    )
    return read_survey(
        settings.file,
        examined=settings.examined,
        positive=settings.positive,
        lon=settings.lon,
        lat=settings.lat,
        x=settings.x,
        y=settings.y,
        crs=settings.crs,
        site=settings.site,
        unit=settings.unit,
        weight=settings.weight,
        about=about,
        encoding=settings.encoding,
        sheet=settings.sheet,
        decimal=settings.decimal,
    )


def _read_region(study: Study, survey: Survey) -> Region:
    settings = study.region
    if settings is None:
        return hull_region(survey.frame.geometry)
    return read_region(
        settings.file,
        name=settings.name,
        code=settings.code,
        parent=settings.parent,
        exclude=settings.exclude,
        crs=settings.crs,
    )


def _read_population(study: Study, region: Region) -> Population | None:
    settings = study.population
    if settings is None:
        return None
    total = settings.unit_total
    if isinstance(total, str):
        found = attribute(region.units, total)
        if found is None:
            known = ", ".join(str(name) for name in region.units.columns if name != "geometry")
            raise InputError(
                f'unit_total: found "{total}", no column of {region.source}; accepted: one of {known}'
            )
        total = dict(zip(region.units["unit"], found, strict=True))
    return read_population(
        settings.raster, kind=settings.kind, ages=settings.ages, year=settings.year, unit_total=total
    )


def _covariate(settings: CovariateSettings) -> Covariate:
    name, transform, scale = settings.name, settings.transform, settings.scale
    if settings.raster is not None:
        return RasterCovariate(
            settings.raster, name=name, transform=transform, scale=scale, band=settings.band
        )
    if settings.distance_to is not None:
        return DistanceCovariate(settings.distance_to, name=name, transform=transform, scale=scale)
    if settings.column is not None:
        at = None if settings.at is None else float(settings.at)
        return ColumnCovariate(settings.column, at=at, name=name, transform=transform, scale=scale)
    level = None if settings.at is None else str(settings.at)
    return FactorCovariate(str(settings.factor), at=level, name=name)


def build_model(study: Study, covariates: tuple[Covariate, ...]) -> PrevalenceModel:
    """Return the model of a study; what the study leaves out keeps the model's own default."""
    with naming(study, "[model]"):
        spec = MeshSpec(edge_km=study.model.mesh_edge_km, margin_km=study.model.margin_km)
        if study.model.max_nodes is not None:
            spec = replace(spec, max_nodes=study.model.max_nodes)
    with naming(study, "[prior]"):
        priors = _priors(study)
    with naming(study, "[tests]"):
        tests = {
            name: DiagnosticAccuracy(sensitivity=accuracy.sensitivity, specificity=accuracy.specificity)
            for name, accuracy in study.tests.items()
        }
    return PrevalenceModel(list(covariates), mesh=spec, priors=priors, tests=tests or None, nu=study.model.nu)


def _priors(study: Study) -> Priors:
    prior = study.prior
    given: dict[str, Any] = {
        name: _prior(value)
        for name, value in (("range_km", prior.range_km), ("sd", prior.sd), ("nugget_sd", prior.nugget_sd))
        if value is not None
    }
    if prior.intercept is not None:
        given["intercept"] = prior.intercept
    if prior.coefficient_sd is not None:
        given["coefficient_sd"] = prior.coefficient_sd
    return Priors(**given)


def _prior(value: TailPrior | float | bool) -> Any:
    if isinstance(value, TailPrior):
        kind = Below if value.side == "below" else Above
        return kind(value.limit, probability=value.probability)
    return None if value is False else float(value)


@dataclass(frozen=True, slots=True, eq=False)
class Preparation:
    """What a fit of a study starts from.

    Parameters
    ----------
    frame : GeoDataFrame
        Survey rows that a fit uses: in or near the study area, with every covariate.
    designed : Design
        Of the rows in or near the study area.
    findings : tuple of Finding
        What placing the rows found.
    range_km : float
        Range the mesh is laid for: the prior's median, or the fixed value.
    margin_km : float
        Margin of the mesh.
    """

    frame: gpd.GeoDataFrame
    designed: Design
    findings: tuple[Finding, ...]
    range_km: float
    margin_km: float


def prepare(study: Study, inputs: StudyInputs, model: PrevalenceModel) -> Preparation:
    """Check everything a fit needs of survey, priors, covariates and tests, and name the section at fault.

    Raises
    ------
    InputError
        The message starts with the study file and the section.
    """
    survey, region = inputs.survey, inputs.region
    with naming(study, "[survey]"):
        if not len(survey.frame):
            raise InputError("no row has a position: no model can be fitted")
    with naming(study, "[prior]"):
        of_range = resolve_priors(model.priors, meshing.diagonal_km(region.boundary))[0]
    reach_km = model.mesh.margin_km or default_reach_km(of_range)
    near, findings = site_findings(survey.frame, region, reach_km)
    with naming(study, "[survey]"):
        if not near.any():
            hint = exchange_hint(survey.frame, region, reach_km)
            raise InputError(f"no site lies in or near the study area: check the coordinates of both.{hint}")
    findings = [*findings, *assign_units(survey, region, near)[1], *assign_unplaced(survey, region)[1]]
    frame = survey.frame[near]
    with naming(study, "[[covariate]]"):
        designed = design(model.covariates, frame, frame["site"])
        if not designed.kept.any():
            raise InputError(
                "no site has a value for every covariate: check that the rasters cover the survey"
            )
    frame = frame[designed.kept]
    with naming(study, "[tests]"):
        row_accuracy(survey, np.isin(survey.frame.index, frame.index), model.tests)
    margin_km = model.mesh.margin_km or meshing.default_margin_km(region.boundary, reach_km)
    return Preparation(frame, designed, tuple(findings), of_range.middle, margin_km)
