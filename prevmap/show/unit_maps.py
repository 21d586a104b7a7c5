"""Maps of implementation units: estimate, uncertainty, exceedance, decision."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize

from prevmap.errors import InputError
from prevmap.plan.classify import UnitDecisions, checked_certainty, checked_thresholds
from prevmap.show.bars import exceedance_bar, prevalence_bar, uncertainty_bar
from prevmap.show.basis import unit_basis, weight_notes
from prevmap.show.canvas import house_style
from prevmap.show.ground import (
    HATCH_PT,
    blank_entry,
    draw_borders,
    draw_ground,
    hatch_area,
    read_ground,
    thin,
)
from prevmap.show.labels import write_labels
from prevmap.show.outline import dots, fill, hatch, in_km
from prevmap.show.palette import (
    BLANK,
    EXCEEDANCE,
    LINE,
    PREVALENCE,
    UNCERTAINTY,
    ClassStyle,
    decision_styles,
    nice_ceiling,
    prevalence_norm,
)
from prevmap.show.sheet import MapSheet, arrange_sheets, close_sheet, open_sheet, swatch
from prevmap.show.wording import inequality, listed, meaning, sentence, threshold_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from prevmap.model.units import UnitEstimates

_SHOWS = ("prevalence", "uncertainty", "exceedance", "decision")


def map_units(
    units: UnitEstimates | UnitDecisions,
    show: str = "prevalence",
    threshold: float | None = None,
    ax: Axes | None = None,
    *,
    certainty: float | Mapping[str, float] | None = None,
    labels: bool = True,
) -> Axes:
    """Map one value or decision per implementation unit.

    Parameters
    ----------
    units : UnitEstimates or UnitDecisions
        Decisions are needed for ``show="decision"``.
    show : str
        ``"prevalence"`` (posterior mean, weighted by population), ``"uncertainty"`` (width of the 95 %
        interval), ``"exceedance"`` (probability of being above the threshold) or ``"decision"``.
    threshold : float, optional
        A share in (0, 1), for ``"exceedance"``; decisions with one threshold bring their own.
    ax : Axes, optional
        Axes to draw on; a new figure without one (``map_units(...).figure`` shows it).
    certainty : float or mapping, optional
        Probability marked in the colour bar of an exceedance map; that of the decisions, else 0.90.
    labels : bool
        Write unit names where they fit, else codes (or numbers) with a key under the map.

    Returns
    -------
    Axes
        In km of the working CRS.

    Raises
    ------
    InputError
        If ``show`` is unknown, the threshold is missing or not a share, or decisions are missing.
    """
    with house_style():
        sheet = draw_unit_map(units, show, threshold, ax, certainty=certainty, labels=labels)
        if sheet.own:
            arrange_sheets(sheet.ax.figure, [sheet], 1)
    return sheet.ax


def needed_threshold(show: str, threshold: float | None) -> float:
    """Return the checked threshold of an exceedance map; NaN for maps that need none.

    Raises
    ------
    InputError
        If an exceedance map has no threshold, or one that is not a share.
    """
    if show != "exceedance":
        return math.nan
    if threshold is None:
        raise InputError('show="exceedance" needs threshold=, a prevalence between 0 and 1 such as 0.10.')
    return checked_thresholds(threshold)[0]


def draw_unit_map(
    source: Any,
    show: str,
    threshold: float | None,
    ax: Any = None,
    *,
    figure: Any = None,
    certainty: float | Mapping[str, float] | None = None,
    labels: bool = True,
    norm: Normalize | None = None,
) -> MapSheet:
    """Draw one map of units and return its sheet, not yet arranged in the figure."""
    decisions = source if isinstance(source, UnitDecisions) else None
    units: Any = decisions.units if decisions is not None else source
    if show not in _SHOWS:
        raise InputError(f"show: found {show!r}; a map of units can show {', '.join(_SHOWS)}.")
    if threshold is None and decisions is not None and len(decisions.thresholds) == 1:
        threshold = decisions.thresholds[0]
    edge = needed_threshold(show, threshold)
    levels = checked_certainty(
        certainty if certainty is not None else decisions.certainty if decisions is not None else 0.90
    )
    ground = read_ground(units.region, units.fit.sites)
    sheet = open_sheet(ground.bounds, ax, figure)
    draw_ground(sheet, ground)
    shapes = [thin(geometry, sheet) for geometry in ground.units]
    place = _rows_by_unit(units)

    letters = [""] * len(shapes)
    handles: list[Any] = []
    notes: list[str] = []
    if show == "decision":
        if decisions is None:
            raise InputError('show="decision" needs the result of classify_units, not bare unit estimates.')
        letters = _paint_decisions(sheet, decisions, shapes, place)
        styles = decision_styles(decisions.outcomes)
        counts = decisions.counts
        handles = [
            swatch(
                f"{style.letter}  {inequality(outcome)} ({counts[outcome]:,})",
                style.colour,
                pattern=style.pattern,
            )
            for outcome, style in styles.items()
        ]
        title, notes = _decision_words(decisions)
        blank = 0
    else:
        values, mappable, title = _values(sheet, units, show, edge, levels, norm)
        blank = _paint_values(sheet, shapes, values[place], mappable)
        notes = _mark_guessed(sheet, units, shapes, place, handles)
    draw_borders(sheet, ground)
    if ground.water:
        _draw_water(sheet, units.region)
    reasons = [*(["no estimate"] if blank else []), *(["excluded area"] if ground.water else [])]
    if reasons:
        handles.append(blank_entry(reasons))
    notes += weight_notes(units)
    if labels:
        notes += write_labels(sheet, units.region, shapes, letters)
    return close_sheet(sheet, title=title, subtitle=_subtitle(units), handles=handles, notes=notes)


def _values(
    sheet: MapSheet, units: Any, show: str, edge: float, levels: Mapping[str, float], norm: Normalize | None
) -> tuple[Any, ScalarMappable, str]:
    """Values in the order of ``units.frame``, their colours and the title; draws the colour bar."""
    frame = units.frame
    if show == "prevalence":
        values = frame["mean"].to_numpy(dtype=float)
        mappable = ScalarMappable(norm or prevalence_norm(float(np.nanmax(values, initial=0.0))), PREVALENCE)
        prevalence_bar(sheet, mappable, "prevalence (posterior mean)")
        return values, mappable, "Prevalence by unit"
    if show == "uncertainty":
        values = (frame["upper95"] - frame["lower95"]).to_numpy(dtype=float)
        top = nice_ceiling(float(np.nanmax(values, initial=0.0)))
        mappable = ScalarMappable(Normalize(0.0, top), UNCERTAINTY)
        uncertainty_bar(sheet, mappable)
        return values, mappable, "Uncertainty by unit: width of 95 % interval"
    values = units.exceedance(edge).loc[frame["unit"].to_list()].to_numpy(dtype=float)
    mappable = ScalarMappable(Normalize(0.0, 1.0), EXCEEDANCE)
    exceedance_bar(sheet, mappable, edge, levels)
    return values, mappable, f"Probability that a unit is above {threshold_text(edge)}"


def _paint_values(sheet: MapSheet, shapes: list[Any], values: Any, mappable: ScalarMappable) -> int:
    """Fill each unit with the colour of its value; return how many have none and stay grey."""
    for shape, value in zip(shapes, values, strict=True):
        if np.isfinite(value):
            fill(sheet.ax, shape, facecolor=mappable.to_rgba(value), edgecolor="none", zorder=2)
    return int(np.count_nonzero(~np.isfinite(values)))


def _paint_decisions(sheet: MapSheet, decisions: UnitDecisions, shapes: list[Any], place: Any) -> list[str]:
    """Fill each unit by its decision and return the letters to write on them."""
    styles = decision_styles(decisions.outcomes)
    outcomes = decisions.frame["decision"].to_numpy()[place]
    spacing = HATCH_PT * sheet.km_per_pt
    letters = []
    for shape, outcome in zip(shapes, outcomes, strict=True):
        style: ClassStyle = styles[str(outcome)]
        fill(sheet.ax, shape, facecolor=style.colour, edgecolor="none", zorder=2)
        if style.pattern == "lines":
            hatch(sheet.ax, shape, spacing, zorder=3, colour="#777777")
        elif style.pattern == "dots":
            dots(sheet.ax, shape, spacing, zorder=3)
        letters.append(style.letter)
    return letters


def _mark_guessed(
    sheet: MapSheet, units: Any, shapes: list[Any], place: Any, handles: list[Any]
) -> list[str]:
    """Hatch units whose estimate is borrowed from elsewhere; say which, and which have none."""
    basis = unit_basis(units.frame)
    for shape, borrowed in zip(shapes, basis.borrowed[place], strict=True):
        if borrowed:
            hatch_area(sheet, shape)
    if basis.borrowed.any():
        lack = "no surveyed site" if basis.bare.any() else "no site with a position"
        handles.append(swatch(f"{lack} in the unit", "#FFFFFF", pattern="lines"))
    return basis.sentences(hatched=True)


def _decision_words(decisions: UnitDecisions) -> tuple[str, list[str]]:
    above, below = decisions.certainty["above"], decisions.certainty["below"]
    edges = listed([threshold_text(t) for t in decisions.thresholds])
    if len(decisions.thresholds) == 1:
        title = f"Units above and below {edges}"
    else:
        title = f"Units by class, thresholds {edges}"
    sure = (
        f"at least {threshold_text(above)}"
        if above == below
        else f"at least {threshold_text(above)} for above, {threshold_text(below)} for below"
    )
    wrong = f"{decisions.expected_wrong:.1f}"
    return title, [
        f"A unit is decided where its probability is {sure}; otherwise it is undecided. "
        f"Expected number of wrong decisions: {wrong}."
    ]


def _draw_water(sheet: MapSheet, region: Any) -> None:
    """Lay excluded water over the filled units, in the grey of what is not mapped."""
    fill(
        sheet.ax, thin(in_km(region.exclude), sheet), facecolor=BLANK, edgecolor=LINE, linewidth=0.5, zorder=4
    )


def _rows_by_unit(units: Any) -> Any:
    """Position in ``units.frame`` of each row of ``region.units``."""
    row_of = {name: i for i, name in enumerate(units.frame["unit"])}
    return np.array([row_of[name] for name in units.region.units["unit"]], dtype=int)


def _subtitle(units: Any) -> str:
    weight = "population" if units.weighting == "population" else "area, since no population was given"
    return sentence(f"{meaning(units.surface)}; weighted by {weight}")
