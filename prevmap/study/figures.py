"""The figures of a run as files."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from prevmap.model.fit import Fit
from prevmap.show.canvas import save_figure
from prevmap.show.report import ReportFigure, report_figures
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
    certainty = {} if study.decision is None else {"certainty": study.decision.certainty}
    surface = replace(result.surface, fit=fit)
    figures = report_figures(fit, surface, result.units, result.decisions, result.thresholds, **certainty)
    for name in ("sites", "prevalence"):
        note = f" Sites are moved to the middle of squares of {square_m / 1000:.2g} km."
        figures[name] = replace(figures[name], caption=figures[name].caption + note)
    for name, figure in figures.items():
        (folder / f"{name}.png").write_bytes(figure.png)
        if result.region.has_units:  # as a vector, a hull's outline would give the outermost sites away
            save_figure(figure.figure, folder / f"{name}.svg")
    return figures
