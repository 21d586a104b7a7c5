"""Check every input of a study and say what a fit would do, without fitting."""

from __future__ import annotations

import textwrap
from dataclasses import dataclass

import numpy as np
import pandas as pd
from geopandas import GeoDataFrame

from prevmap.inputs.findings import findings_frame, number_text
from prevmap.model import meshing
from prevmap.model.spec import PrevalenceModel
from prevmap.study.chain import joined_findings
from prevmap.study.preparation import StudyInputs, build_model, naming, prepare, read_inputs
from prevmap.study.progress import Stages
from prevmap.study.schema import Study

_WIDTHS = {"severity": 8, "row": 6, "site": 16, "field": 14, "what": 52, "action": 34}


@dataclass(frozen=True, slots=True)
class Inspection:
    """What was read, what is wrong or doubtful in it, and what a fit would do.

    Parameters
    ----------
    lines : tuple of str
        What was read and what a fit would do, one sentence a line.
    findings : DataFrame
        Columns row, site, field, severity, what, action.
    """

    lines: tuple[str, ...]
    findings: pd.DataFrame

    def __str__(self) -> str:
        counts = self.findings["severity"].value_counts()
        counted = ", ".join(f"{counts.get(name, 0)} {name}s" for name in ("error", "warning", "note"))
        return "\n".join([*self.lines, "", f"Findings: {counted}", *findings_lines(self.findings)])


def findings_lines(findings: pd.DataFrame) -> list[str]:
    """Lay findings out as a table for a terminal, long texts wrapped, errors first."""
    if findings.empty:
        return []
    order = findings["severity"].map({"error": 0, "warning": 1, "note": 2})
    rows = findings.iloc[np.argsort(order.to_numpy(), kind="stable")]
    lines = ["  ".join(name.ljust(width) for name, width in _WIDTHS.items()).rstrip()]
    lines.append("  ".join("-" * width for width in _WIDTHS.values()))
    for row in rows.to_dict("records"):
        texts = {name: "" if pd.isna(row[name]) else str(row[name]) for name in _WIDTHS}
        cells = [textwrap.wrap(texts[name], width) or [""] for name, width in _WIDTHS.items()]
        for index in range(max(len(cell) for cell in cells)):
            parts = [
                (cell[index] if index < len(cell) else "").ljust(width)
                for cell, width in zip(cells, _WIDTHS.values(), strict=True)
            ]
            lines.append("  ".join(parts).rstrip())
    return lines


def inspect_study(study: Study, *, progress: bool) -> Inspection:
    """Read and check everything, at the sites and on the grid; see :meth:`Study.inspect`."""
    stages = Stages(4, progress)
    inputs = read_inputs(study, stages)
    with stages.stage("checks", "Checking sites and covariates"):
        return _inspected(study, inputs)


def _inspected(study: Study, inputs: StudyInputs) -> Inspection:
    model = build_model(study, inputs.covariates)
    survey, region, grid = inputs.survey, inputs.region, inputs.grid
    ready = prepare(study, inputs, model)
    frame, designed = ready.frame, ready.designed
    with naming(study, "[[covariate]]"):
        matrix = designed.matrix(grid.frame_points(), grid=True)
    lines = [
        f"Study file: {study.path}",
        f"Survey: {survey.rows_read:,} rows read, {len(survey.frame):,} accepted, "
        f"{len(survey.unplaced):,} without a position; a fit would use {len(frame):,} rows: "
        f"{frame['examined'].sum():,} examined, {frame['positive'].sum():,} positive",
        f"Study area: {_area(inputs)}",
        f"Grid: {len(grid):,} cells of {grid.cell_km:.4g} km"
        + ("" if grid.people is None else f"; {grid.people.sum():,.0f} people in them"),
        *_covariate_lines(designed.terms, matrix),
        _engine_line(study, inputs, model, frame, ready.range_km, ready.margin_km),
        f"Prevalence: nugget {study.model.nugget}; {study.model.draws:,} draws; seed {study.model.seed}",
        _decision_line(study, inputs),
        f"Results would go to {study.output.folder}",
    ]
    tables = [
        survey.findings,
        region.findings,
        designed.findings,
        *inputs.grid_findings,
        findings_frame(ready.findings),
    ]
    return Inspection(tuple(lines), joined_findings(tables))


def _area(inputs: StudyInputs) -> str:
    region = inputs.region
    km2 = region.boundary.area / 1e6
    extent = f"{km2:,.0f} km², working coordinate system {region.crs.name}"
    distortion = f"largest distortion of distances {100 * region.distortion:.2g} %"
    if not region.has_units:
        return f"buffered hull of the sites, {extent}, {distortion}"
    return f"{len(region.units):,} units, {extent}, {distortion}"


def _covariate_lines(terms: tuple[str, ...], matrix: tuple[np.ndarray, np.ndarray, np.ndarray]) -> list[str]:
    """Say what the covariates do on the grid; `matrix` is values, outside, missing by cell."""
    if len(terms) == 1:
        return ["Covariates: none"]
    _, outside, missing = matrix
    return [
        f"Covariates: {', '.join(terms[1:])}; on the grid {outside.sum():,} cells lie outside the sampled "
        f"range and {missing.sum():,} have no value"
    ]


def _engine_line(
    study: Study,
    inputs: StudyInputs,
    model: PrevalenceModel,
    frame: GeoDataFrame,
    range_km: float,
    margin_km: float,
) -> str:
    sites = frame["site"].nunique()
    if study.model.engine == "exact":
        return f"Fit: exact engine, {sites:,} sites, nu = {model.nu:g}"
    xy_km = inputs.region.project(frame.geometry)
    zone = meshing.inner_zone_km(inputs.region.boundary, xy_km)
    spacing = meshing.site_spacing_km(xy_km)
    edge = model.mesh.edge_km or meshing.default_edge_km(zone, range_km, spacing)
    with naming(study, "[model]"):
        nodes = meshing.mesh_over(zone, edge, margin_km, model.mesh.max_nodes).nodes
    origin = "as stated" if model.mesh.edge_km else "by default; a fit may refine it once"
    mesh = f"mesh of {nodes:,} nodes, edge {edge:.3g} km {origin}, margin {number_text(margin_km)} km"
    return f"Fit: {sites:,} sites, {mesh}"


def _decision_line(study: Study, inputs: StudyInputs) -> str:
    if study.decision is None:
        return "Decision: no threshold, so no exceedance map and no decisions"
    stated = ", ".join(f"{100 * threshold:g} %" for threshold in study.decision.thresholds)
    what = "units" if inputs.region.has_units else "cells only: there are no units"
    return f"Decision: above or below {stated} with certainty {study.decision.certainty}, {what}"
