"""The tables of the report as printed cells: findings, coefficients, hyperparameters, units."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import pandas as pd

from prevmap.plan.classify import ABOVE, BELOW, UNDECIDED
from prevmap.show.basis import unit_basis
from prevmap.show.labels import short_signs
from prevmap.show.palette import decision_styles
from prevmap.show.wording import NARROW_SPACE, inequality, percent, probability, significant, threshold_text

if TYPE_CHECKING:
    from prevmap.plan.classify import UnitDecisions
    from prevmap.show.report.content import ReportContent

_SEVERITIES = (
    ("error", "Not used", "these rows or values did not enter the estimates"),
    ("warning", "Doubtful", "worth a look; the last column tells what was done"),
    ("note", "Notes", "nothing to do, good to know"),
)
_MOST_ROWS = 200
_POSITION = re.compile(r"\((-?\d+\.\d{2,}), (-?\d+\.\d{2,})\)")


@dataclass(frozen=True, slots=True)
class Table:
    """Printed cells with their headings.

    Attributes
    ----------
    heads : tuple of str
        Column headings.
    rows : tuple of tuple of str
        Cells in the order of the headings; the first cell names the row.
    numeric : frozenset of int
        Columns that are set flush right.
    marks : tuple of str
        One class per row (the decision), for the colour of its edge; empty where there is none.
    """

    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    numeric: frozenset[int] = frozenset()
    marks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class FindingGroup:
    """Findings of one severity; ``more`` are left to the file of findings."""

    title: str
    meaning: str
    table: Table
    total: int
    more: int


def rounded_positions(text: str) -> str:
    """Round pairs of coordinates to one decimal: the report is passed on, exact site positions are not.

    Examples
    --------
    >>> rounded_positions("(-32.04213, 5.92444) is far from the other sites")
    '(-32.0, 5.9) is far from the other sites'
    """
    return _POSITION.sub(lambda pair: f"({float(pair[1]):.1f}, {float(pair[2]):.1f})", text)


def finding_groups(findings: pd.DataFrame) -> list[FindingGroup]:
    """Group findings by severity, worst first."""
    groups = []
    for severity, title, meaning in _SEVERITIES:
        mine = findings[findings["severity"] == severity]
        if mine.empty:
            continue
        rows = tuple(
            (
                _cell(f.row),
                _cell(f.site),
                _cell(f.field),
                rounded_positions(_cell(f.what)),
                rounded_positions(_cell(f.action)),
            )
            for f in mine.head(_MOST_ROWS).itertuples()
        )
        table = Table(("row", "site", "field", "what was found", "what was done"), rows)
        groups.append(FindingGroup(title, meaning, table, len(mine), max(0, len(mine) - _MOST_ROWS)))
    return groups


def coefficient_table(coefficients: pd.DataFrame) -> Table:
    """Print coefficients on the logit scale and as odds ratios (the intercept as prevalence)."""
    rows = []
    for term, row in coefficients.iterrows():
        low, middle, high = (float(row[c]) for c in ("lower95", "median", "upper95"))
        if term == "intercept":
            other = (
                f"prevalence {percent(_expit(middle))} ({percent(_expit(low))} to {percent(_expit(high))})"
            )
        else:
            odds = [significant(math.exp(v)) for v in (middle, low, high)]
            other = f"{odds[0]} ({odds[1]} to {odds[2]})"
        rows.append(
            (
                str(term),
                _signed(middle),
                f"{_signed(low)} to {_signed(high)}",
                significant(row["sd"], 2),
                other,
            )
        )
    heads = ("term", "median (logit)", "95 % interval (logit)", "sd", "odds ratio (95 % interval)")
    return Table(heads, tuple(rows), frozenset({1, 2, 3, 4}))


_HYPERPARAMETERS: Mapping[str, str] = {
    "range_km": "range, km",
    "sd": "sd of the surface",
    "nugget_sd": "sd of the nugget",
}


def hyperparameter_table(hyperparameters: pd.DataFrame) -> Table:
    """Print median, limits and mode of range, sd and nugget."""
    rows = tuple(
        (
            _HYPERPARAMETERS.get(str(name), str(name)),
            significant(float(row["median"])),
            f"{significant(float(row['lower95']))} to {significant(float(row['upper95']))}",
            significant(float(row["at_mode"])),
        )
        for name, row in hyperparameters.iterrows()
    )
    return Table(("hyperparameter", "median", "95 % interval", "at the mode"), rows, frozenset({1, 2, 3}))


def unit_table(content: ReportContent) -> Table | None:
    """Print one row per unit, undecided ones first, then the rest from high to low."""
    if content.units is None:
        return None
    frame = content.units.frame.reset_index(drop=True)
    decisions = content.decisions
    outcome = (
        decisions.frame["decision"].astype(str).to_list() if decisions is not None else [""] * len(frame)
    )
    order = _unit_order(frame, outcome)
    basis = unit_basis(frame)
    parents = "parent" in frame and frame["parent"].notna().any()
    people = "population" in frame and frame["population"].notna().any()
    infected = "infected_mean" in frame and frame["infected_mean"].notna().any()
    above = {
        t: content.units.exceedance(t).loc[frame["unit"].to_list()].to_list() for t in content.thresholds
    }

    # What a reader looks for first stands beside the name: on a phone the rest has to be scrolled to.
    heads = ["unit", *(["decision"] if decisions is not None else [])]
    heads += [f"P(above {threshold_text(t)})" for t in content.thresholds]
    heads += [f"modelled mean (95{NARROW_SPACE}%)", "label", *(["part of"] if parents else [])]
    heads += ["sites", "examined", "positive", f"raw (95{NARROW_SPACE}%)", "basis"]
    heads += [*(["people"] if people else []), *([f"infected (95{NARROW_SPACE}%)"] if infected else [])]
    left = {"unit", "label", "part of", "decision", "basis"}
    signs = short_signs(content.region.units)
    rows = []
    for i in order:
        unit = frame.iloc[i]
        cells = [_cell(unit["unit"]), *([_decision(decisions, i)] if decisions is not None else [])]
        cells += [probability(float(above[t][i])) for t in content.thresholds]
        cells.append(_interval(unit, "mean", "lower95", "upper95"))
        cells += [signs[i], *([_cell(unit["parent"])] if parents else [])]
        cells += [_whole(unit["sites"]), _whole(unit["examined"]), _whole(unit["positive"])]
        cells.append(_interval(unit, "direct_estimate", "direct_lower95", "direct_upper95"))
        cells.append(basis.of(i, _cell(unit["basis"])))
        cells += [_whole(unit["population"])] if people else []
        if infected:
            low, high = _whole(unit["infected_lower95"]), _whole(unit["infected_upper95"])
            cells.append(
                f"{_whole(unit['infected_mean'])} ({low}{NARROW_SPACE}to{NARROW_SPACE}{high})"
                if low != "–"
                else "–"
            )
        rows.append(tuple(cells))
    numeric = frozenset(i for i, head in enumerate(heads) if head not in left)
    marks: tuple[str, ...] = ()
    if decisions is not None:
        place = {name: k for k, name in enumerate(decision_styles(decisions.outcomes))}
        marks = tuple(
            outcome[i] if outcome[i] in (ABOVE, BELOW, UNDECIDED) else f"class{place[outcome[i]]}"
            for i in order
        )
    return Table(tuple(heads), tuple(rows), numeric, marks)


def _decision(decisions: UnitDecisions, i: int) -> str:
    """Print the decision of one unit; undecided between classes, with the thresholds that are decided."""
    row = decisions.frame.iloc[i]
    outcome = str(row["decision"])
    edges = decisions.thresholds
    # A unit that may not be decided at all, whatever its probability, is not decided in part either.
    if outcome != UNDECIDED or len(edges) == 1 or "short of" not in row["reason"]:
        return inequality(outcome)
    p = [float(row[f"p_class_{k}"]) for k in range(len(edges) + 1)]
    levels = decisions.certainty
    # The highest threshold that prevalence is surely above, and the lowest that it is surely below.
    lower = [k for k in range(len(edges)) if sum(p[k + 1 :]) >= levels[ABOVE]]
    upper = [k for k in range(len(edges)) if sum(p[: k + 1]) >= levels[BELOW]]
    if lower and upper and sum(p[lower[-1] + 1 : upper[0] + 1]) < max(levels.values()):
        # Each is sure alone but not both at once: only the surer one is said.
        if sum(p[lower[-1] + 1 :]) >= sum(p[: upper[0] + 1]):
            upper = []
        else:
            lower = []
    said = [f"at least {threshold_text(edges[lower[-1]])}"] if lower else []
    said += [f"below {threshold_text(edges[upper[0]])}"] if upper else []
    return f"{' and '.join(said)}, class undecided" if said else UNDECIDED


def input_table(inputs: Mapping[str, Any]) -> Table:
    """Print every input file with its SHA-256."""
    rows = tuple(
        (str(key), str(entry.get("file", "")), str(entry.get("sha256", "")))
        if isinstance(entry, Mapping)
        else (str(key), "", str(entry))
        for key, entry in inputs.items()
    )
    return Table(("input", "file", "SHA-256"), rows)


def _unit_order(frame: pd.DataFrame, outcome: Sequence[str]) -> list[int]:
    mean = frame["mean"].to_list()

    def rank(i: int) -> tuple[bool, float, int]:
        height = -mean[i] if math.isfinite(mean[i]) else math.inf
        return (outcome[i] not in ("", UNDECIDED), height, i)

    return sorted(range(len(frame)), key=rank)


def _interval(row: Any, centre: str, lower: str, upper: str) -> str:
    values = [float(row[name]) for name in (centre, lower, upper)]
    if not math.isfinite(values[0]):
        return "–"
    middle, low, high = (percent(v).replace("\u00a0%", "") for v in values)
    return f"{middle}{NARROW_SPACE}% ({low}{NARROW_SPACE}to{NARROW_SPACE}{high})"


def _signed(value: float) -> str:
    return f"{value:+.3f}".replace("-", "−")


def _expit(value: float) -> float:
    return 1.0 / (1.0 + math.exp(-value)) if value > -700.0 else 0.0


def _whole(value: Any) -> str:
    number = float(value)
    return f"{number:,.0f}" if math.isfinite(number) else "–"


def _cell(value: Any) -> str:
    if value is None or value is pd.NA or (isinstance(value, float) and math.isnan(value)):
        return "–"
    if isinstance(value, float) and value.is_integer():
        return f"{value:.0f}"
    return str(value)
