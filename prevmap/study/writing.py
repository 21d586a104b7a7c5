"""What a run writes: tables, raster, layer, figures and report to pass on; ledger and record to keep."""

from __future__ import annotations

import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import geopandas
import pandas as pd
from pyogrio.errors import DataSourceError

from prevmap.inputs.survey import Survey
from prevmap.model.fit import Fit
from prevmap.model.units import UnitEstimates
from prevmap.plan.classify import UnitDecisions
from prevmap.show.report import ReportContent, ReportFigure, render_report
from prevmap.study.figures import write_figures
from prevmap.study.outputs import settle_geopackage, sha256, write_csv
from prevmap.study.progress import Stages
from prevmap.study.record import environment, make_record, write_record
from prevmap.study.schema import Study
from prevmap.study.sharing import shareable_fit, shared_square_m

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult

_IN_BOTH = ("unit", "code", "parent", "sites", "basis")  # columns of the estimates and of the decisions


def unit_table(
    units: UnitEstimates, decisions: UnitDecisions | None, thresholds: Sequence[float]
) -> pd.DataFrame:
    """Join the estimates of every unit with its exceedance and its decision.

    Parameters
    ----------
    units : UnitEstimates
    decisions : UnitDecisions or None
    thresholds : sequence of float
        Each adds ``exceedance_<threshold>`` and its Monte-Carlo error.

    Returns
    -------
    DataFrame
        One row per unit, in the order of the region. An attribute of the region that has the name of a
        column added here is renamed to ``<name>_in_region``.
    """
    table = pd.DataFrame(units.frame.drop(columns="geometry", errors="ignore")).reset_index(drop=True)
    added: dict[str, Any] = {}
    for threshold in thresholds:
        for column in (units.exceedance(threshold), units.exceedance_error(threshold)):
            added[str(column.name)] = column.to_numpy()
    if decisions is not None:
        decided = decisions.frame.drop(columns=list(_IN_BOTH))
        decided = decided.rename(columns={"monte_carlo_error": "decision_monte_carlo_error"})
        added |= {name: decided[name].to_numpy() for name in decided.columns}
    reserved = {name.casefold() for name in added}  # a GeoPackage does not tell the cases apart
    for name in [name for name in table.columns if str(name).casefold() in reserved]:
        free = f"{name}_in_region"
        while free in table.columns:
            free += "_in_region"
        table = table.rename(columns={name: free})
    return table.assign(**added)


def write_unit_layer(table: pd.DataFrame, units: UnitEstimates, path: Path) -> None:
    """Write the unit table with its polygons as a GeoPackage of stable bytes."""
    layer = geopandas.GeoDataFrame(
        table, geometry=units.region.units.geometry.to_numpy(), crs=units.region.crs
    )
    for name in layer.columns.drop("geometry"):
        if layer[name].dtype == object:
            layer[name] = layer[name].map(lambda cell: None if pd.isna(cell) else str(cell))
    try:
        layer.to_file(path, layer="units", driver="GPKG", engine="pyogrio")
        settle_geopackage(path)
    except (DataSourceError, sqlite3.Error) as error:  # a full disk, which these do not name as such
        raise OSError(f"{path.name}: {error}") from error


def checked_sites(survey: Survey) -> pd.DataFrame:
    """Return the accepted rows of the survey with their exact positions, the unplaced ones last.

    Returns
    -------
    DataFrame
        row, placed, longitude, latitude (degrees, WGS 84), then the columns of the survey.
    """
    frame = survey.frame
    degrees = frame.geometry.to_crs("EPSG:4326")
    own = {name: _free_name(name, frame.columns) for name in ("row", "placed", "longitude", "latitude")}
    placed = pd.DataFrame(frame.drop(columns="geometry"))
    placed.insert(0, own["placed"], True)
    placed.insert(1, own["longitude"], degrees.x.to_numpy())
    placed.insert(2, own["latitude"], degrees.y.to_numpy())
    parts = [placed]
    if len(survey.unplaced):
        unplaced = pd.DataFrame(survey.unplaced)
        unplaced.insert(0, own["placed"], False)
        parts.append(unplaced)
    return pd.concat(parts).rename_axis(index=own["row"]).reset_index()


def _free_name(name: str, taken: pd.Index) -> str:
    """Return the name, with underscores added while the survey has a column of that name."""
    while name in taken:
        name += "_"
    return name


def write_results(
    study: Study,
    result: StudyResult,
    fresh: Path,
    *,
    inputs: Mapping[str, Any],
    stages: Stages,
    logged: list[str],
) -> dict[str, Any]:
    """Write everything into an empty folder and return the record.

    Parameters
    ----------
    study : Study
    result : StudyResult
        Complete but for its record.
    fresh : Path
        Where to write; becomes ``result.folder``.
    inputs : mapping
        From ``input_hashes``, taken before the inputs were read.
    stages : Stages
    logged : list of str
        Warnings from the log.
    """
    share, internal = fresh / "share", fresh / "internal"
    for folder in (share / "figures", internal):
        folder.mkdir(parents=True)
    fit = shareable_fit(result)
    with stages.stage("figures", "Drawing the figures"):
        figures = write_figures(study, result, fit, shared_square_m(result), share / "figures")
    with stages.stage("files", "Writing the results"):
        known = {"inputs": inputs, "environment": environment(), "seed": study.model.seed}
        report = _report(study, result, fit, figures, known)
        (share / "report.html").write_text(report, encoding="utf-8", newline="\n")
        result.surface.to_geotiff(share / "prevalence.tif", thresholds=result.thresholds)
        if result.units is not None and result.unit_table is not None:
            write_csv(result.unit_table, share / "units.csv")
            write_unit_layer(result.unit_table, result.units, share / "units.gpkg")
        write_csv(checked_sites(result.survey), internal / "sites_checked.csv")
        write_csv(result.fit.findings, internal / "findings.csv")
    written = sorted(path for path in fresh.rglob("*") if path.is_file())
    record = make_record(
        study,
        result,
        inputs=inputs,
        outputs={path.relative_to(fresh).as_posix(): sha256(path) for path in written},
        folder=result.folder,
        seconds=stages.seconds,
        warnings=list(dict.fromkeys([*result.fit.warnings, *logged])),
    )
    write_record(record, internal / "record.json")
    return record


def _report(
    study: Study, result: StudyResult, fit: Fit, figures: Mapping[str, ReportFigure], known: Mapping[str, Any]
) -> str:
    statements = {name: text for name, text in asdict(study.report).items() if text is not None}
    title = statements.pop("title", None) or result.survey.about.indicator or study.path.stem
    return render_report(
        ReportContent(
            title=str(title),
            survey=result.survey,
            region=result.region,
            fit=fit,
            surface=replace(result.surface, fit=fit),
            units=result.units,
            decisions=result.decisions,
            thresholds=result.thresholds,
            figures=figures,
            record={**known, "study": study.path.name, "command": f"prevmap run {study.path.name}"},
            statements=statements,
            **({} if study.decision is None else {"certainty": study.decision.certainty}),
        )
    )
