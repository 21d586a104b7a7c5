"""Charts beside the maps: raw proportions, units with their intervals, odds ratios."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, MaxNLocator

from prevmap.plan.classify import UNDECIDED, UnitDecisions, checked_thresholds
from prevmap.show.canvas import house_style, new_figure, plain_text
from prevmap.show.palette import BLUE, INK, ORANGE, SKY, decision_styles
from prevmap.show.sheet import SHEET_WIDTH
from prevmap.show.wording import count, inequality, threshold_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from prevmap.model.fit import Fit
    from prevmap.model.units import UnitEstimates

_NAMED_UNITS = 80
_TALLEST = 15.0
_BIN_WIDTHS = (0.0005, 0.001, 0.002, 0.0025, 0.005, 0.01, 0.02, 0.025, 0.05)
_MARKERS = ("^", "v", "s", "D", "P", "X", "<", ">")


def chart_sites(fit: Fit, threshold: float | None = None, ax: Axes | None = None) -> Axes:
    """Draw the distribution of raw site proportions, sites without a positive apart.

    Parameters
    ----------
    fit : Fit
        Its ``sites`` are drawn, one per pooled row.
    threshold : float, optional
        Marked by a dashed line.
    ax : Axes, optional
        Axes to draw on; a new figure without one.

    Returns
    -------
    Axes
    """
    edges = checked_thresholds(threshold) if threshold is not None else ()
    with house_style():
        ax = _axes(ax, 2.6)
        proportion = np.asarray(fit.sites["proportion"], dtype=float)
        positive = np.asarray(fit.sites["positive"], dtype=float)
        top = max(0.002, float(proportion.max(initial=0.0)))
        step = next(s for s in _BIN_WIDTHS if top / s <= 24 or s == _BIN_WIDTHS[-1])
        bins = np.arange(0.0, top + step, step)
        ax.hist(proportion[positive > 0], bins=bins.tolist(), color=SKY, edgecolor="white", linewidth=0.6)
        none = int(np.count_nonzero(positive == 0))
        ax.bar(-0.75 * step, none, width=0.8 * step, color=INK, label=f"no positive ({count(none, 'site')})")
        for edge in edges:
            _threshold_line(ax, edge, vertical=True)
        ax.set_xlabel("positive of those examined at a site, raw")
        ax.set_ylabel("sites")
        ax.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{100 * v:.4g} %" if v >= 0 else ""))
        ax.yaxis.set_major_locator(MaxNLocator(integer=True))
        ax.legend(frameon=False, fontsize=9.3, loc="upper right")
        _tidy(ax, "Raw proportions of the sites")
    return ax


def chart_units(
    units: UnitEstimates | UnitDecisions, threshold: float | None = None, ax: Axes | None = None
) -> Axes:
    """Draw every unit's modelled mean and 95 % interval beside its raw estimate.

    Parameters
    ----------
    units : UnitEstimates or UnitDecisions
        With decisions, marker and colour tell the decision.
    threshold : float, optional
        Marked by a dashed line; the thresholds of decisions are marked anyway.
    ax : Axes, optional
        Axes to draw on; a new figure, as high as the number of units needs, without one.

    Returns
    -------
    Axes
        Highest mean at the top.
    """
    decisions = units if isinstance(units, UnitDecisions) else None
    estimates: Any = decisions.units if decisions is not None else units
    edges = decisions.thresholds if decisions is not None else ()
    if threshold is not None:
        edges = checked_thresholds(threshold)
    frame = estimates.frame.reset_index(drop=True)
    outcome = decisions.frame["decision"].to_numpy() if decisions is not None else None
    predicted = frame["mean"].notna().to_numpy()
    order = np.flatnonzero(predicted)[np.argsort(frame["mean"].to_numpy()[predicted], kind="stable")]
    named = len(order) <= _NAMED_UNITS
    with house_style():
        ax = _axes(ax, min(1.9 + len(order) * (0.18 if named else 0.05), _TALLEST))
        y = np.arange(len(order))
        shown = frame.iloc[order]
        direct = shown["direct_estimate"].to_numpy(dtype=float)
        ax.hlines(
            y,
            shown["direct_lower95"],
            shown["direct_upper95"],
            color=ORANGE,
            linewidth=3.2,
            alpha=0.45,
            zorder=2,
        )
        ax.scatter(direct, y, marker="|", s=42, c="#8A5A00", linewidths=1.4, zorder=3)
        ax.hlines(y, shown["lower95"], shown["upper95"], color=INK, linewidth=1.0, zorder=4)
        means = shown["mean"].to_numpy(dtype=float)
        handles = [
            Line2D(
                [], [], color=ORANGE, alpha=0.45, linewidth=3.2, label="raw estimate, 95 % Wilson interval"
            ),
            Line2D([], [], color=INK, linewidth=1.0, label="modelled 95 % interval"),
        ]
        if decisions is None or outcome is None:
            ax.scatter(means, y, s=16, c=BLUE, zorder=5)
            handles.append(_marker("o", BLUE, "modelled mean"))
        else:
            handles += _draw_outcomes(ax, means, y, outcome[order], decisions)
        for edge in edges:
            _threshold_line(ax, edge, vertical=True)
        ax.set_ylim(-0.8, len(order) - 0.2)
        ax.set_xlim(left=0.0)
        ax.set_yticks(y if named else [])
        if named:
            ax.set_yticklabels(shown["unit"].astype(str), fontsize=9.0)
        ax.set_xlabel("prevalence")
        ax.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{100 * v:.4g} %"))
        ax.grid(axis="x", color="#DDDDDD", linewidth=0.6)
        ax.set_axisbelow(True)
        if ax.figure.get_layout_engine() is not None:
            ax.figure.legend(
                handles=handles,
                loc="outside lower left",
                ncols=1,
                frameon=False,
                fontsize=9.3,
                columnspacing=1.2,
            )
        _tidy(ax, "Units: raw and modelled prevalence")
    return ax


def chart_odds_ratios(fit: Fit, ax: Axes | None = None) -> Axes:
    """Draw the odds ratio of each covariate as entered, with its 95 % interval, on a log scale.

    Parameters
    ----------
    fit : Fit
        Its coefficients without the intercept are drawn.
    ax : Axes, optional
        Axes to draw on; a new figure without one.

    Returns
    -------
    Axes
    """
    frame = fit.coefficients.drop(index="intercept", errors="ignore")
    with house_style():
        ax = _axes(ax, 1.2 + 0.28 * len(frame))
        y = np.arange(len(frame))[::-1]
        ax.hlines(y, np.exp(frame["lower95"]), np.exp(frame["upper95"]), color=INK, linewidth=1.2)
        ax.scatter(np.exp(frame["median"]), y, s=26, c=BLUE, zorder=3)
        ax.axvline(1.0, color=INK, linewidth=0.8, linestyle="dashed")
        ax.set_xscale("log")
        ax.xaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 2.5, 5, 10]))
        ax.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:.3g}"))
        ax.minorticks_off()
        ax.set_yticks(y)
        ax.set_yticklabels(frame.index.astype(str))
        ax.set_ylim(-0.7, len(frame) - 0.3)
        ax.set_xlabel("odds ratio, 95 % interval")
        _tidy(ax, "Covariates")
    return ax


def _draw_outcomes(ax: Any, means: Any, y: Any, outcomes: Any, decisions: UnitDecisions) -> list[Line2D]:
    """Draw means with one marker per outcome; undecided ones are hollow."""
    handles = []
    styles = decision_styles(decisions.outcomes)
    for i, (outcome, style) in enumerate(styles.items()):
        mine = outcomes == outcome
        marker = "o" if outcome == UNDECIDED else _MARKERS[i % len(_MARKERS)]
        ax.scatter(
            means[mine],
            y[mine],
            s=24,
            marker=marker,
            c=style.colour,
            edgecolors=INK,
            linewidths=0.7,
            zorder=5,
        )
        handles.append(_marker(marker, style.colour, f"mean: {inequality(outcome)}"))
    return handles


def _marker(marker: str, colour: str, label: str) -> Line2D:
    return Line2D(
        [],
        [],
        color="none",
        marker=marker,
        markersize=5,
        markerfacecolor=colour,
        markeredgecolor=INK,
        label=label,
    )


def _threshold_line(ax: Any, edge: float, *, vertical: bool) -> None:
    draw = ax.axvline if vertical else ax.axhline
    draw(
        edge,
        color=INK,
        linewidth=1.0,
        linestyle="dashed",
        zorder=1.5,
        label=f"threshold {threshold_text(edge)}",
    )


def _axes(ax: Any, height_in: float) -> Any:
    if ax is not None:
        return ax
    figure = new_figure(SHEET_WIDTH, height_in)
    figure.set_layout_engine("constrained")
    return figure.add_subplot()


def _tidy(ax: Any, title: str) -> None:
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    if ax.figure.get_layout_engine() is None:
        ax.set_title(title, loc="left", fontweight="bold")
    else:
        # From the left edge of the figure: beside long unit names the axes are too narrow for it.
        ax.figure.suptitle(title, x=0.015, ha="left", fontsize=11, fontweight="bold")
    plain_text(ax.figure)
