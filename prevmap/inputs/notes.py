"""SurveyNotes: what the survey measured, in whom, how and when; said once, or row by row in a column."""

from __future__ import annotations

import datetime
import numbers
from collections import Counter
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, fields

import pandas as pd

from prevmap.errors import InputError
from prevmap.inputs.findings import Finding, listed
from prevmap.inputs.reading import cell_text

NOT_STATED = "not stated"
OLDEST_YEARS = 130

# Dates of one survey differ by days; past this span a season or a round of treatment may lie between.
ONE_SEASON_DAYS = 183

# Columns that say one of the notes even where nobody names them, by name in lower case.
TELLING_NAMES = {
    "indicator": ("indicator", "parasite", "species"),
    "ages": ("ages", "age", "age_group", "age group", "agegroup"),
    "test": ("test", "diagnostic", "diagnostic_test", "method"),
    "sampling": ("sampling", "sampling_method", "survey_type", "survey type"),
    "date": ("date", "survey_date", "survey date", "year", "survey_year"),
}


@dataclass(frozen=True, slots=True)
class SurveyNotes:
    """What the survey measured.

    Parameters
    ----------
    indicator : str, optional
        What "positive" means, e.g. "any infection".
    ages : (float, float) or str, optional
        Youngest and oldest age in years, e.g. ``(5, 14)``; or text; or a pair of column names.
    test : str, optional
        Diagnostic test.
    sampling : str, optional
        Where people were sampled, e.g. "school" or "community".
    date : str or datetime.date, optional
        When, e.g. "2026-03".

    Raises
    ------
    InputError
        Where a value is of another kind.

    Notes
    -----
    A value that is the name of a column of the table means that column, row by row, unless the column
    already serves as site, count, coordinate, unit or weight. What is left out prints as "not stated".
    """

    indicator: str | None = None
    ages: tuple[float, float] | tuple[str, str] | str | None = None
    test: str | None = None
    sampling: str | None = None
    date: str | datetime.date | None = None

    def __post_init__(self) -> None:
        for name in NOTE_FIELDS:
            value = getattr(self, name)
            if value is None or (isinstance(value, str) and value.strip()):
                continue
            if name == "ages":
                object.__setattr__(self, "ages", _ages(value))
            elif not (name == "date" and isinstance(value, datetime.date)):
                raise InputError(f"SurveyNotes: {name} is {value!r}; text is expected, or leave it out.")

    def columns(self, names: Collection[str]) -> dict[str, tuple[str, ...]]:
        """Return which notes are columns: by note, the columns among `names` that hold it."""
        found: dict[str, tuple[str, ...]] = {}
        for note in NOTE_FIELDS:
            value = getattr(self, note)
            parts = value if isinstance(value, tuple) else (value,)
            if all(isinstance(part, str) and part in names for part in parts):
                found[note] = tuple(parts)
        return found

    def stated(self, note: str) -> str:
        """Return the one value of a note as text, or "not stated"."""
        value = getattr(self, note)
        if isinstance(value, tuple):
            return " to ".join(cell_text(part) or "" for part in value) + " years"
        return cell_text(value) or NOT_STATED


NOTE_FIELDS = tuple(field.name for field in fields(SurveyNotes))


def note_values(frame: pd.DataFrame, columns: Sequence[str]) -> pd.Series:
    """Return a note row by row as text, None where a cell is empty; two columns read "5 to 14".

    Parameters
    ----------
    frame : DataFrame
        Rows of the survey.
    columns : sequence of str
        One column, or two for a range of ages.
    """
    texts = [[cell_text(cell) for cell in frame[column]] for column in columns]
    joined = [
        " to ".join(part or "?" for part in parts) if any(parts) else None
        for parts in zip(*texts, strict=True)
    ]
    return pd.Series(joined, index=frame.index, dtype=object)


def tally(values: Sequence[object]) -> Counter[str]:
    """Return how often each value occurs, "not stated" for the empty ones, in the order of their text."""
    counted = Counter(str(value) if value is not None else NOT_STATED for value in values)
    return Counter(dict(sorted(counted.items())))


def note_findings(
    frame: pd.DataFrame, about: SurveyNotes, note_columns: Mapping[str, tuple[str, ...]]
) -> list[Finding]:
    """Return a finding for every note that is not one value in all rows.

    The field of each finding is the note ("test"), so that whoever explains the mixture by a factor
    covariate or by the accuracy of each test can find it.
    """
    findings: list[Finding] = []
    for note in NOTE_FIELDS:
        if note in note_columns:
            values = note_values(frame, note_columns[note])
            origin = ""
            action = "used together; explain the difference by a factor covariate" + (
                " or by the accuracy of each test" if note == "test" else ""
            )
        else:
            telling = [name for name in frame.columns if str(name).strip().casefold() in TELLING_NAMES[note]]
            if not telling:
                continue
            values = note_values(frame, telling[:1])
            origin = f" in column {telling[0]!r}"
            action = (
                f"used together; name the column in SurveyNotes({note}={telling[0]!r}) so that it is reported"
            )
        counted = tally(list(values))
        if len(counted) > 1:
            findings.append(_mixed(note, counted, origin, action))
    return findings


def _mixed(note: str, counted: Counter[str], origin: str, action: str) -> Finding:
    rows = listed(f"{value} ({count} row{'' if count == 1 else 's'})" for value, count in counted.items())
    if note == "date":
        days = {value: _day(value) for value in counted}
        known = {value: day for value, day in days.items() if day is not None}
        first, last = (
            min(known, key=known.__getitem__, default=""),
            max(known, key=known.__getitem__, default=""),
        )
        if len(known) == len(days) and (known[last] - known[first]).days <= ONE_SEASON_DAYS:
            what = f"dates run from {first} to {last}{origin}"
            return Finding(None, None, note, "note", what, "used together as one survey")
    return Finding(None, None, note, "warning", f"mixed {note}{origin}: {rows}", action)


def _day(text: str) -> datetime.date | None:
    """Return the day a date begins: "2026-03-07", "2026-03" and "2026" are understood."""
    year, *rest = text.split(" ")[0].split("-")
    try:
        month, day = (int(part) for part in [*rest, "1", "1"][:2])
        return datetime.date(int(year), month, day) if len(year) == 4 else None
    except ValueError:
        return None


def _ages(value: object) -> tuple[float, float] | tuple[str, str]:
    pair = tuple(value) if isinstance(value, list | tuple) else ()
    if len(pair) == 2 and all(isinstance(part, str) for part in pair):
        return (str(pair[0]), str(pair[1]))
    good = len(pair) == 2 and all(isinstance(p, numbers.Real) and not isinstance(p, bool) for p in pair)
    if not good or not 0 <= pair[0] <= pair[1] <= OLDEST_YEARS:
        raise InputError(
            f"SurveyNotes: ages is {value!r}; youngest and oldest age in years are expected, e.g. (5, 14), "
            "or text, or a pair of column names."
        )
    return (pair[0], pair[1])
