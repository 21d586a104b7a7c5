"""Counts: people examined and people positive, and the ways in which a column of counts is not one."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from prevmap.inputs.findings import Remark, listed
from prevmap.inputs.reading import Reading, cell_text, read_count

# Words in the name of a column that announce a share of people rather than a number of them.
SHARE_WORDS = frozenset(
    "percent percentage pct perc prevalence prev proportion prop rate ratio share fraction freq".split()
)
TOTAL_WORDS = frozenset(
    ("total", "totals", "grand total", "subtotal", "sub-total", "sum", "overall", "totale", "somme", "suma")
)


@dataclass(frozen=True, slots=True)
class Counts:
    """What the two columns of counts say.

    Parameters
    ----------
    examined, positive : (n,) int arrays
        Zero where a row cannot be used.
    usable : (n,) bool array
        Rows with 0 <= positive <= examined and examined > 0.
    remarks : list of Remark
        Why the others cannot be used, and what the columns as a whole look like.
    """

    examined: NDArray[np.int64]
    positive: NDArray[np.int64]
    usable: NDArray[np.bool_]
    remarks: list[Remark]


def read_counts(
    examined: Sequence[object], positive: Sequence[object], *, names: tuple[str, str], decimal: str
) -> Counts:
    """Read and check the two columns of counts.

    Parameters
    ----------
    examined, positive : (n,) sequences
        Cells as they stand.
    names : (str, str)
        Names of the two columns, for what they give away.
    decimal : {".", ","}
        Decimal sign of the table.

    Notes
    -----
    Nothing is repaired: an empty `positive` is not zero, a percentage is not converted, an `examined`
    below `positive` is not exchanged. Where `positive` holds shares instead of counts, no row is usable,
    because the whole numbers among them are shares too.
    """
    readings = {
        "examined": [read_count(cell, decimal) for cell in examined],
        "positive": [read_count(cell, decimal) for cell in positive],
    }
    n = len(examined)
    out = {field: np.zeros(n, dtype=np.int64) for field in readings}
    usable = np.ones(n, dtype=bool)
    remarks: list[Remark] = []
    for at in range(n):
        pair = (readings["examined"][at], readings["positive"][at])
        row = _row_remarks(at, *pair)
        remarks += row
        if row:
            usable[at] = False
        else:
            out["examined"][at], out["positive"][at] = (int(reading.value or 0) for reading in pair)
    shares = _shares(readings["positive"], positive, names[1])
    if shares is not None:
        remarks.insert(0, shares)
        usable[:] = usable & (shares.severity != "error")
        out = {field: np.where(usable, counts, 0) for field, counts in out.items()}
    remarks += _exchanged_columns(readings, names)
    remarks += _all_one_hundred(out["examined"][usable], out["positive"][usable], names[0])
    return Counts(out["examined"], out["positive"], usable, remarks)


def totals_rows(
    counts: Counts, absent: NDArray[np.bool_], names: Sequence[str | None], *, least: int = 3
) -> list[Remark]:
    """Return errors for rows without a position that add up the others or are called a total.

    Parameters
    ----------
    counts : Counts
    absent : (n,) bool array
        Rows without a position.
    names : (n,) sequence of str or None
        What the rows are called (site, unit or their first text).
    least : int, default 3
        Fewest other rows for a sum to be taken for one.
    """
    remarks: list[Remark] = []
    for at in map(int, np.flatnonzero(absent & counts.usable)):
        others = counts.usable.copy()
        others[at] = False
        sums = [int(values[others].sum()) for values in (counts.examined, counts.positive)]
        adds_up = others.sum() >= least and sums == [counts.examined[at], counts.positive[at]]
        called = (names[at] or "").casefold().rstrip(":")
        if adds_up or called in TOTAL_WORDS:
            what = f"{names[at] or 'the row'!r} looks like a row of totals ({counts.examined[at]} examined)"
            remarks.append(Remark(at, "examined", "error", what, "row not used"))
    return remarks


def _row_remarks(at: int, examined: Reading, positive: Reading) -> list[Remark]:
    remarks: list[Remark] = []
    for field, reading in (("examined", examined), ("positive", positive)):
        if reading.problem:
            remarks.append(Remark(at, field, "error", reading.problem, "row not used"))
        elif reading.value is not None and reading.value < 0:
            what = f"{field} is negative: {reading.value:.0f}"
            remarks.append(Remark(at, field, "error", what, "row not used"))
    if remarks:
        return remarks
    if examined.value is None and positive.value == 0:
        what = "examined is missing where positive is 0"
        action = (
            "row not used; leaving such rows out raises the prevalence: complete them if people were examined"
        )
        return [Remark(at, "examined", "error", what, action)]
    if examined.value is None:
        found = "" if positive.value is None else f" where positive is {positive.value:.0f}"
        remarks.append(Remark(at, "examined", "error", f"examined is missing{found}", "row not used"))
    if positive.value is None:
        found = "" if examined.value is None else f" where examined is {examined.value:.0f}"
        action = "row not used; an empty cell is not read as 0"
        # A row with nobody examined needs no number of positives; it is noted below.
        if examined.value != 0:
            remarks.append(Remark(at, "positive", "error", f"positive is missing{found}", action))
    if remarks:
        return remarks
    if examined.value == 0 and not positive.value:
        return [Remark(at, "examined", "warning", "examined is 0: nobody was examined", "row not used")]
    if (positive.value or 0) > (examined.value or 0):
        what = f"positive ({positive.value:.0f}) is greater than examined ({examined.value:.0f})"
        remarks.append(Remark(at, "positive", "error", what, "row not used"))
    return remarks


def _shares(readings: Sequence[Reading], cells: Sequence[object], name: str) -> Remark | None:
    """Say where the column of positives holds percentages or fractions."""
    values = np.array([reading.value for reading in readings if reading.value is not None], dtype=float)
    if not len(values):
        return None
    signs = sum(isinstance(cell, str) and cell.rstrip().endswith("%") for cell in cells)
    broken = values[values != np.round(values)]
    within = bool(np.all((values >= 0) & (values <= 100)))
    share = len(broken) / len(values)
    named = "%" in name or bool(SHARE_WORDS & set(re.split(r"[^a-z]+", name.casefold())))
    many = (len(broken) >= 3 and share >= 0.2) or (len(broken) >= 2 and share >= 0.5)
    # A name alone proves nothing: "prevalence" may head a column of counts in a table of case numbers.
    sure = within and (many or signs >= max(2, 0.5 * len(values)) or (named and len(broken) > 0))
    kind = "fractions" if len(broken) and np.all(values <= 1) else "percentages"
    propose = "give the counts; from exact shares positive is examined times the share, rounded"
    if sure:
        shown = listed(
            [cell_text(cell) for cell, r in zip(cells, readings, strict=True) if r.problem], most=3
        )
        what = f"column {name!r} looks like {kind}, not counts (e.g. {shown})"
        action = f"no row used and nothing converted; {propose}"
        return Remark(None, "positive", "error", what, action)
    if named:
        what = f"column {name!r} is called like {kind}, but holds whole numbers"
        return Remark(None, "positive", "warning", what, f"used as counts; if they are {kind}, {propose}")
    return None


def _exchanged_columns(readings: dict[str, list[Reading]], names: tuple[str, str]) -> list[Remark]:
    pairs = [
        (examined.value, positive.value)
        for examined, positive in zip(readings["examined"], readings["positive"], strict=True)
        if examined.value is not None
        and positive.value is not None
        and not (examined.problem or positive.problem)
    ]
    above = sum(positive > examined for examined, positive in pairs)
    if len(pairs) < 3 or above <= len(pairs) / 2:
        return []
    what = (
        f"positive is greater than examined in {above} of {len(pairs)} rows: "
        f"are {names[0]!r} and {names[1]!r} exchanged?"
    )
    return [Remark(None, "positive", "warning", what, "nothing was exchanged; check the two columns")]


def _all_one_hundred(examined: NDArray[np.int64], positive: NDArray[np.int64], name: str) -> list[Remark]:
    if len(examined) < 5 or not np.all(examined == 100) or not positive.any():
        return []
    what = f"{name!r} is 100 in all {len(examined)} rows: is positive a percentage?"
    action = "used as counts; if they are percentages, give the numbers examined and positive"
    return [Remark(None, "examined", "warning", what, action)]
