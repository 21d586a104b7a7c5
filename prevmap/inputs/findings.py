"""Finding: one thing wrong or doubtful in an input, where it is and what was done about it."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Sequence
from dataclasses import dataclass
from typing import Literal, NamedTuple

import pandas as pd

Severity = Literal["error", "warning", "note"]

SEVERITIES: tuple[Severity, ...] = ("error", "warning", "note")
COLUMNS = ("row", "site", "field", "severity", "what", "action")


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing wrong or doubtful in an input.

    Parameters
    ----------
    row : int or str or None
        Line of the file (its header is line 1), feature number of a layer, or label of the frame's index;
        None where the finding is about the whole input.
    site : str or None
        Site the row belongs to, as far as it is known.
    field : str or None
        What the finding is about: an argument of the reading function ("examined", "lat"), a note
        ("test"), or a column.
    severity : {"error", "warning", "note"}
        "error": not used; "warning": used, and the result may be weaker; "note": used, for information.
    what : str
        What was found, with the value.
    action : str
        What was done about it.
    """

    row: int | str | None
    site: str | None
    field: str | None
    severity: Severity
    what: str
    action: str

    def __post_init__(self) -> None:
        if self.severity not in SEVERITIES:
            raise ValueError(f"severity is {self.severity!r}; one of {', '.join(SEVERITIES)} is accepted")

    def __str__(self) -> str:
        place = [f"row {self.row}" if self.row is not None else "", f"site {self.site}" if self.site else ""]
        where = ", ".join(part for part in [*place, self.field or ""] if part)
        return f"{where}: {self.what}" if where else self.what


class Remark(NamedTuple):
    """A finding before its row has a label: `at` is the place of the row in the table, None for all of it."""

    at: int | None
    field: str
    severity: Severity
    what: str
    action: str


def findings_frame(findings: Sequence[Finding]) -> pd.DataFrame:
    """Return findings as a table.

    Parameters
    ----------
    findings : sequence of Finding
        May be empty: the table then has its columns and no rows.

    Returns
    -------
    DataFrame
        One row per finding, columns row, site, field, severity, what, action; missing entries are None.

    Examples
    --------
    >>> findings_frame([Finding(4, None, "examined", "error", "is negative: -3", "row not used")]).shape
    (1, 6)
    """
    cells = [[getattr(finding, column) for column in COLUMNS] for finding in findings]
    return pd.DataFrame(cells, columns=list(COLUMNS), dtype=object)


def row_label(label: Hashable) -> int | str:
    """Return an index label as a finding prints it: a whole number stays one, all else becomes text.

    Examples
    --------
    >>> row_label(7), row_label("S-7"), row_label(("north", 7))
    (7, 'S-7', "('north', 7)")
    """
    if isinstance(label, str):
        return label
    try:
        whole = int(label)  # type: ignore[call-overload]
    except (TypeError, ValueError, OverflowError):
        return str(label)
    return whole if whole == label and not isinstance(label, bool) else str(label)


def listed(items: Iterable[object], most: int = 5) -> str:
    """Return a short list for a message: the first few items and how many more there are.

    Examples
    --------
    >>> listed([2, 5]), listed(range(1, 10), most=3)
    ('2, 5', '1, 2, 3 and 6 more')
    """
    texts = [str(item) for item in items]
    shown = ", ".join(texts[:most])
    return shown if len(texts) <= most else f"{shown} and {len(texts) - most} more"


def number_text(value: float) -> str:
    """Return a distance or an area for a message: three figures, whole and with thousands from 100.

    Examples
    --------
    >>> number_text(2.114), number_text(99.97), number_text(1021.4)
    ('2.11', '100', '1,021')
    """
    return f"{value:,.0f}" if abs(value) >= 100.0 else f"{value:.3g}"
