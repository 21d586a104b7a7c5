"""The figures of a run as files."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, cast

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from prevmap.model.fit import Fit
from prevmap.model.surface import Surface
from prevmap.show.canvas import save_figure
from prevmap.show.maps import map_sites, map_surface
from prevmap.show.report import ReportFigure, report_figures
from prevmap.show.unit_maps import map_units
from prevmap.study.schema import Study

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult


def write_figures(
    study: Study, result: StudyResult, fit: Fit, square_m: float, folder: Path
) -> dict[str, ReportFigure]:
    """Draw every figure of the report and write it to a folder.

    Parameters
    ----------
    study : Study
    result : StudyResult
    fit : Fit
        With the positions that may be shared.
    square_m : float
        Edge of the squares they were moved to the middle of.
    folder : Path

    Returns
    -------
    dict of str to ReportFigure
        As the report prints them.
    """
    certainty = 0.90 if study.decision is None else study.decision.certainty
    surface = replace(result.surface, fit=fit)
    figures = report_figures(
        fit, surface, result.units, result.decisions, result.thresholds, certainty=certainty
    )
    for name in ("sites", "prevalence"):
        note = f" Sites are moved to the middle of squares of {square_m / 1000:.2g} km."
        figures[name] = replace(figures[name], caption=figures[name].caption + note)
    for name, figure in figures.items():
        (folder / f"{name}.png").write_bytes(figure.png)
    if result.region.has_units:  # the outline of a hull, as a vector, would give the outermost sites away
        for name, axes in _maps(result, surface, certainty):
            save_figure(cast(Figure, axes.figure), folder / f"{name}.svg")
    return figures


def _maps(
    result: StudyResult, surface: Surface, certainty: float | Mapping[str, float]
) -> Iterator[tuple[str, Axes]]:
    """Draw every map once more, for a vector file that can be edited."""
    yield "sites", map_sites(surface.fit)
    yield "prevalence", map_surface(surface, "prevalence", sites=True)
    yield "uncertainty", map_surface(surface, "uncertainty")
    units = result.units
    if units is not None:
        yield "unit_prevalence", map_units(units, "prevalence")
        yield "unit_uncertainty", map_units(units, "uncertainty")
    for index, threshold in enumerate(result.thresholds, start=1):
        end = "" if len(result.thresholds) == 1 else f"_{index}"
        yield f"exceedance{end}", map_surface(surface, "exceedance", threshold, certainty=certainty)
        if units is not None:
            yield f"unit_exceedance{end}", map_units(units, "exceedance", threshold, certainty=certainty)
    if result.decisions is not None:
        yield "decisions", map_units(result.decisions, "decision")
