"""The chain of a study: read and check, fit, predict, decide, write."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pandas as pd

from prevmap.errors import InputError
from prevmap.inputs.attributes import attribute
from prevmap.inputs.covariates import ColumnCovariate, DistanceCovariate, FactorCovariate, RasterCovariate
from prevmap.inputs.findings import findings_frame
from prevmap.inputs.grid import Grid
from prevmap.inputs.placement import exchange_hint
from prevmap.inputs.population import Population, read_population
from prevmap.inputs.region import Region, hull_region, read_region
from prevmap.inputs.survey import Survey, SurveyNotes, read_survey
from prevmap.model.fit import Fit
from prevmap.model.spec import Above, Below, DiagnosticAccuracy, MeshSpec, PrevalenceModel, Priors
from prevmap.model.surface import Surface
from prevmap.model.units import UnitEstimates
from prevmap.plan.classify import UnitDecisions, classify_units
from prevmap.study.checks import TailPrior
from prevmap.study.outputs import check_output
from prevmap.study.progress import Stages, kept_warnings
from prevmap.study.record import input_hashes
from prevmap.study.replacement import replacing
from prevmap.study.schema import Study
from prevmap.study.settings import CovariateSettings
from prevmap.study.writing import unit_table, write_results

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


@dataclass(frozen=True, slots=True)
class StudyResult:
    """Every artefact of a run, in the order in which data flows.

    Parameters
    ----------
    survey, region, population, grid, model, fit, surface
        As from the functions of the same names; population is None where the study has none.
    units : UnitEstimates or None
        None where the study has no region.
    decisions : UnitDecisions or None
        None where the study has no region or no decision.
    thresholds : tuple of float
        The thresholds of the decision; empty where the study has none.
    unit_table : DataFrame or None
        units.csv as a frame: estimates, exceedance by threshold, decisions.
    record : dict
        record.json as plain values.
    folder : Path
        Where the results are.
    """

    survey: Survey
    region: Region
    population: Population | None
    grid: Grid
    model: PrevalenceModel
    fit: Fit
    surface: Surface
    units: UnitEstimates | None
    decisions: UnitDecisions | None
    thresholds: tuple[float, ...]
    unit_table: pd.DataFrame | None
    record: Mapping[str, Any]
    folder: Path


def joined_findings(tables: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Return all findings in one table, each once."""
    filled = [table for table in tables if len(table)]
    if not filled:
        return findings_frame([])
    return pd.concat(filled, ignore_index=True).drop_duplicates(ignore_index=True)


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
    with stages.stage("region", "Reading the region"), naming(study, "[region]"):
        region = _read_region(study, survey)
    population = None
    with stages.stage("grid", "Laying the grid"):
        if study.population is not None:
            with naming(study, "[population]"):
                population = _read_population(study, region)
        with naming(study, "[grid]"):
            try:
                grid = region.grid(study.grid.cell_km, cells=study.grid.cells, population=population)
            except InputError as error:
                # A population that misses the region is told first, though the region may be at fault.
                hint = exchange_hint(survey.frame, region, 0.0)
                if not hint:
                    raise
                text = f"{error} No site lies in the region either.{hint}"
                raise InputError(text, error.findings) from error
    covariates = tuple(_covariate(settings) for settings in study.covariates)
    return StudyInputs(survey, region, population, covariates, grid)


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
        return RasterCovariate(settings.raster, name=name, transform=transform, scale=scale)
    if settings.distance_to is not None:
        return DistanceCovariate(settings.distance_to, name=name, transform=transform, scale=scale)
    if settings.column is not None:
        at = None if settings.at is None else float(settings.at)
        return ColumnCovariate(settings.column, at=at, name=name, transform=transform, scale=scale)
    level = None if settings.at is None else str(settings.at)
    return FactorCovariate(str(settings.factor), at=level, name=name)


def build_model(study: Study, covariates: tuple[Covariate, ...]) -> PrevalenceModel:
    """Return the model of a study; what the study leaves out keeps the model's own default."""
    spec = MeshSpec(edge_km=study.model.mesh_edge_km, margin_km=study.model.margin_km)
    if study.model.max_nodes is not None:
        spec = replace(spec, max_nodes=study.model.max_nodes)
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
    tests = {
        name: DiagnosticAccuracy(sensitivity=accuracy.sensitivity, specificity=accuracy.specificity)
        for name, accuracy in study.tests.items()
    }
    return PrevalenceModel(
        list(covariates),
        mesh=spec,
        priors=Priors(**given),
        tests=tests or None,
        nu=study.model.nu,
    )


def _prior(value: TailPrior | float | bool) -> Any:
    if isinstance(value, TailPrior):
        kind = Below if value.side == "below" else Above
        return kind(value.limit, probability=value.probability)
    return None if value is False else float(value)


def run_study(study: Study, *, progress: bool, output: Path | None) -> StudyResult:
    """Run every stage and move the results into place; see :meth:`Study.run`."""
    folder = (study.output.folder if output is None else output).resolve()
    check_output(folder, study.input_files())
    stages = Stages(8 if study.region is not None else 7, progress)
    with kept_warnings() as kept:
        hashes = input_hashes(study)
        inputs = read_inputs(study, stages)
        model = build_model(study, inputs.covariates)
        with stages.stage("fit", f"Fitting the model ({study.model.engine} engine)"):
            fit = model.fit(
                inputs.survey,
                region=inputs.region,
                engine=study.model.engine,
                integrate=study.model.integrate,
                progress=stages.bars,
                seed=study.model.seed,
            )
            fit = replace(fit, findings=joined_findings([fit.findings, *inputs.grid_findings]))
        with stages.stage("surface", f"Predicting {len(inputs.grid):,} cells"):
            surface = fit.predict(inputs.grid, nugget=study.model.nugget)
        units, decisions = _decide(study, inputs, fit, surface, stages)
        thresholds = () if study.decision is None else study.decision.thresholds
        result = StudyResult(
            survey=inputs.survey,
            region=inputs.region,
            population=inputs.population,
            grid=inputs.grid,
            model=model,
            fit=fit,
            surface=surface,
            units=units,
            decisions=decisions,
            thresholds=thresholds,
            unit_table=None if units is None else unit_table(units, decisions, thresholds),
            record={},
            folder=folder,
        )
        with replacing(folder) as fresh:
            record = write_results(study, result, fresh, inputs=hashes, stages=stages, logged=kept.texts)
    return replace(result, record=record)


def _decide(
    study: Study, inputs: StudyInputs, fit: Fit, surface: Surface, stages: Stages
) -> tuple[UnitEstimates | None, UnitDecisions | None]:
    if not inputs.region.has_units:
        return None, None
    with stages.stage("units", f"Estimating {len(inputs.region.units):,} units"):
        seed, draws = study.model.seed, study.model.draws
        units = fit.units(surface, seed=seed, draws=draws)
        if study.decision is None:
            return units, None
        decisions = classify_units(
            units,
            list(study.decision.thresholds),
            study.decision.certainty,
            decide_without_sites=study.decision.decide_without_sites,
        )
    return decisions.units, decisions  # with as many draws as the decisions needed
