"""What a run writes: tables, raster, layer, figures and report to pass on; ledger and record to keep."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import geopandas
import pandas as pd

from prevmap.inputs.survey import Survey
from prevmap.model.units import UnitEstimates
from prevmap.plan.classify import UnitDecisions
from prevmap.study.outputs import settle_geopackage, write_csv


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
        One row per unit, in the order of the region.
    """
    table = pd.DataFrame(units.frame.drop(columns="geometry", errors="ignore")).reset_index(drop=True)
    for threshold in thresholds:
        table[f"exceedance_{threshold:g}"] = units.exceedance(threshold).to_numpy()
        table[f"exceedance_{threshold:g}_error"] = units.exceedance_error(threshold).to_numpy()
    if decisions is not None:
        decided = decisions.frame.reset_index(drop=True)
        decided = decided.rename(columns={"monte_carlo_error": "decision_monte_carlo_error"})
        table = pd.concat([table, decided.drop(columns=[c for c in decided if c in table])], axis=1)
    return table


def write_unit_layer(table: pd.DataFrame, units: UnitEstimates, path: Path) -> None:
    """Write the unit table with its polygons as a GeoPackage of stable bytes."""
    layer = geopandas.GeoDataFrame(
        table, geometry=units.region.units.geometry.to_numpy(), crs=units.region.crs
    )
    for name in layer.columns.drop("geometry"):
        if layer[name].dtype == object:
            layer[name] = layer[name].map(lambda cell: None if pd.isna(cell) else str(cell))
    layer.to_file(path, layer="units", driver="GPKG", engine="pyogrio")
    settle_geopackage(path)


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


def write_tables(survey: Survey, findings: pd.DataFrame, internal: Path) -> None:
    """Write what holds exact positions: the sites as checked, and everything found."""
    write_csv(checked_sites(survey), internal / "sites_checked.csv")
    write_csv(findings, internal / "findings.csv")
