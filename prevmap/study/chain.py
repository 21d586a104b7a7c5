"""The chain of a study: read and check, fit, predict, decide, write."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pandas as pd

from prevmap.inputs.findings import findings_frame
from prevmap.inputs.grid import Grid
from prevmap.inputs.population import Population
from prevmap.inputs.region import Region
from prevmap.inputs.survey import Survey
from prevmap.model.fit import Fit
from prevmap.model.spec import PrevalenceModel
from prevmap.model.surface import Surface
from prevmap.model.units import UnitEstimates
from prevmap.plan.classify import UnitDecisions, classify_units
from prevmap.study.outputs import check_output
from prevmap.study.preparation import StudyInputs, build_model, naming, prepare, read_inputs
from prevmap.study.progress import Stages, kept_warnings
from prevmap.study.record import input_hashes
from prevmap.study.replacement import replacing
from prevmap.study.schema import Study
from prevmap.study.writing import unit_table, write_results


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
            prepare(study, inputs, model)
            with naming(study, "[model]"):  # nothing else can be wrong by now
                fit = model.fit(
                    inputs.survey,
                    region=inputs.region,
                    engine=study.model.engine,
                    integrate=study.model.integrate,
                    progress=stages.bars,
                    seed=study.model.seed,
                )
            fit = replace(fit, findings=joined_findings([fit.findings, *inputs.grid_findings]))
        with (
            stages.stage("surface", f"Predicting {len(inputs.grid):,} cells"),
            naming(study, "[[covariate]]"),
        ):
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
