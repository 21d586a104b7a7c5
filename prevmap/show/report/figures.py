"""The figures of the report, drawn once, each with its caption and its words for screen readers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from prevmap.show.basis import unit_basis
from prevmap.show.canvas import figure_bytes, house_style
from prevmap.show.charts import chart_odds_ratios, chart_sites, chart_units
from prevmap.show.maps import draw_surface, map_sites, map_surface, surface_notes
from prevmap.show.report.content import ReportFigure
from prevmap.show.sheet import arrange_sheets
from prevmap.show.unit_maps import map_units
from prevmap.show.wording import count, inequality, listed, percent, probability, threshold_text

if TYPE_CHECKING:
    from prevmap.model.fit import Fit
    from prevmap.model.surface import Surface
    from prevmap.model.units import UnitEstimates
    from prevmap.plan.classify import UnitDecisions


def report_figures(
    fit: Fit,
    surface: Surface,
    units: UnitEstimates | None = None,
    decisions: UnitDecisions | None = None,
    thresholds: Sequence[float] = (),
    certainty: float | Mapping[str, float] = 0.90,
) -> dict[str, ReportFigure]:
    """Draw every figure the report prints.

    Parameters
    ----------
    fit, surface, units, decisions, thresholds
        As in ``ReportContent``.
    certainty : float or mapping
        Probability marked on exceedance maps; that of the decisions where there are any.

    Returns
    -------
    dict of str to ReportFigure
        ``sites``, ``sites_chart``, ``prevalence``, ``uncertainty``, ``exceedance`` (with a number added where
        there are several thresholds), ``unit_prevalence``, ``unit_uncertainty``, ``unit_exceedance``,
        ``decisions``, ``units_chart``, ``odds_ratios``: those that apply, in this order.
    """
    if decisions is not None:
        certainty = decisions.certainty
    drawn: dict[str, ReportFigure] = {}
    only = thresholds[0] if len(thresholds) == 1 else None

    sites = fit.sites
    proportions = np.asarray(sites["proportion"], dtype=float)
    spread = f"{percent(float(proportions.min()))} to {percent(float(proportions.max()))}"
    drawn["sites"] = _figure(
        map_sites(fit, surface=surface),
        f"Map of {count(fit.n_sites, 'surveyed site')}; raw proportions positive run from {spread}.",
        "Raw proportions, before any model. A small sample can be far from its true prevalence by chance.",
    )
    drawn["sites_chart"] = _figure(
        chart_sites(fit, only),
        f"Histogram of raw site proportions, from {spread}.",
        "Raw proportions of the sites; sites where nobody was positive are counted apart, left of zero.",
    )
    drawn |= _surface_figures(surface, thresholds, certainty)
    if units is not None:
        drawn |= _unit_figures(units, decisions, thresholds, certainty)
    if len(fit.coefficients.index.drop("intercept", errors="ignore")):
        drawn["odds_ratios"] = _figure(
            chart_odds_ratios(fit),
            "Odds ratios of the covariates with 95 % intervals; the table beside it holds the same numbers.",
            "Odds ratio per unit of each covariate as entered (after transformation, centring and scaling).",
        )
    return drawn


def _surface_figures(
    surface: Any, thresholds: Sequence[float], certainty: float | Mapping[str, float]
) -> dict[str, ReportFigure]:
    hidden = np.asarray(surface.blank, dtype=bool) | np.asarray(surface.missing, dtype=bool)
    mean = np.asarray(surface.mean, dtype=float)[~hidden]
    width = (np.asarray(surface.upper95, dtype=float) - np.asarray(surface.lower95, dtype=float))[~hidden]
    hatched = " ".join(surface_notes(surface))
    drawn = {
        "prevalence": _figure(
            map_surface(surface, "prevalence", sites=True),
            f"Map of modelled prevalence from {_span(mean)}, with raw site proportions on the "
            f"same scale. {hatched}",
            "Modelled prevalence (posterior mean of each cell) with the raw site proportions on "
            "the same colours.",
        ),
        "uncertainty": _figure(
            map_surface(surface, "uncertainty"),
            f"Map of the width of the 95 % interval of prevalence, from {_span(width)}. {hatched}",
            "How far apart the limits of the 95 % interval are: dark means little is known.",
        ),
    }
    for i, threshold in enumerate(thresholds):
        name = "exceedance" if len(thresholds) == 1 else f"exceedance_{i + 1}"
        everywhere = np.asarray(surface.exceedance(threshold), dtype=float)
        p = everywhere[~hidden]
        low, high = (probability(float(v)) for v in (p.min(initial=1.0), p.max(initial=0.0)))
        drawn[name] = _figure(
            _exceedance_map(surface, threshold, certainty, everywhere),
            f"Map of the probability that prevalence is above {threshold_text(threshold)}, from "
            f"{low} to {high}. "
            f"{hatched}",
            f"Probability that prevalence is above {threshold_text(threshold)}. Pale yellow "
            "means that it cannot be told; thick lines with a white edge mark where the probability "
            "reaches the certainty asked for.",
        )
    return drawn


def _unit_figures(
    units: Any, decisions: Any, thresholds: Sequence[float], certainty: float | Mapping[str, float]
) -> dict[str, ReportFigure]:
    frame = units.frame
    hatched = " ".join(unit_basis(frame).sentences(hatched=True))
    width = (frame["upper95"] - frame["lower95"]).to_numpy(dtype=float)
    drawn = {
        "unit_prevalence": _figure(
            map_units(units, "prevalence"),
            "Map of modelled prevalence by unit, from "
            f"{_span(frame['mean'].to_numpy(dtype=float))}. {hatched}",
            "Modelled prevalence of each unit. The unit table holds the numbers.",
        ),
        "unit_uncertainty": _figure(
            map_units(units, "uncertainty"),
            f"Map of the width of the 95 % interval by unit, from {_span(width)}. {hatched}",
            "Width of the 95 % interval of each unit's prevalence.",
        ),
    }
    for i, threshold in enumerate(thresholds):
        name = "unit_exceedance" if len(thresholds) == 1 else f"unit_exceedance_{i + 1}"
        p = units.exceedance(threshold).to_numpy(dtype=float)
        low, high = (probability(float(v)) for v in (np.nanmin(p, initial=1.0), np.nanmax(p, initial=0.0)))
        drawn[name] = _figure(
            map_units(units, "exceedance", threshold, certainty=certainty),
            "Map of the probability that a unit's prevalence is above "
            f"{threshold_text(threshold)}, from {low} to "
            f"{high}. {hatched}",
            f"Probability that a unit's prevalence is above {threshold_text(threshold)}, from joint draws.",
        )
    if decisions is not None:
        numbers = listed([f"{n:,} {inequality(outcome)}" for outcome, n in decisions.counts.items()])
        drawn["decisions"] = _figure(
            map_units(decisions, "decision"),
            f"Map of unit decisions: {numbers}.",
            "Decision for each unit, by letter, colour and pattern. Undecided units are hatched on white.",
        )
    only = thresholds[0] if len(thresholds) == 1 else None
    drawn["units_chart"] = _figure(
        chart_units(decisions if decisions is not None else units, only),
        "Chart of every unit's raw estimate and modelled mean, each with its 95 % interval; the "
        "unit table holds "
        "the same numbers.",
        "Raw and modelled prevalence of each unit. Raw intervals ignore clustering between sites, so they "
        "are too narrow. The raw estimate is of the people examined at the surveyed sites, the modelled "
        "mean of the whole population of the unit.",
    )
    return drawn


def _exceedance_map(
    surface: Any, threshold: float, certainty: float | Mapping[str, float], values: NDArray[np.float64]
) -> Any:
    with house_style():
        sheet = draw_surface(surface, "exceedance", threshold, certainty=certainty, exceedance=values)
        arrange_sheets(sheet.ax.figure, [sheet], 1)
    return sheet.ax


def _span(values: Any) -> str:
    seen = values[np.isfinite(values)]
    if not len(seen):
        return "no value to no value"
    return f"{percent(float(seen.min()))} to {percent(float(seen.max()))}"


def _figure(ax: Any, alt: str, caption: str) -> ReportFigure:
    return ReportFigure(figure_bytes(ax.figure), alt.replace("\u00a0", " "), caption, ax.figure)
