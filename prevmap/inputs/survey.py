"""Survey: the sites of a survey, each with a position and counts, and the ledger of what was not used."""

from __future__ import annotations

import html
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import geopandas as gpd
import pandas as pd

from prevmap.errors import InputError
from prevmap.inputs.comparison import comparison_findings
from prevmap.inputs.findings import SEVERITIES, Finding, findings_frame, listed, row_label
from prevmap.inputs.ledger import in_row_order, judged, roles_of
from prevmap.inputs.notes import NOT_STATED, NOTE_FIELDS, SurveyNotes, note_findings, note_values, tally
from prevmap.inputs.table import Table, frame_table, read_table

__all__ = ["Survey", "SurveyNotes", "read_survey"]

SHOWN_FINDINGS = 20


@dataclass(frozen=True, slots=True, eq=False, repr=False)
class Survey:
    """A survey after its table was checked: what is used, what is not, and why.

    Made by `read_survey` or `Survey.from_frame`.

    Parameters
    ----------
    frame : GeoDataFrame
        Accepted rows in the order of the table: site (str), examined and positive (int, people), unit and
        weight where given, every other column, geometry (points in the coordinate system as given,
        EPSG:4326 for lon and lat). Its index "row" is the line of the file (the header's own line counts,
        the first line is 1), the feature number of a layer, or the label of the frame read.
    unplaced : DataFrame
        Rows without a position but with a unit and valid counts, same columns without geometry: they enter
        only the direct estimate of their unit.
    about : SurveyNotes
        What the survey measured.
    source : str or None
        Name of the file; None for a survey made from a frame.
    rows_read : int
        Rows of the table, used or not.
    note_columns : mapping of str to tuple of str
        The notes that are columns of `frame`, row by row.
    ledger : tuple of Finding
        What was found in single rows and in the table as it was read, and rows left out by the analyst.
    comparisons : tuple of Finding
        What the rows in use say about each other; renewed by `without`.
    """

    frame: gpd.GeoDataFrame
    unplaced: pd.DataFrame
    about: SurveyNotes
    source: str | None
    rows_read: int
    note_columns: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    ledger: tuple[Finding, ...] = ()
    comparisons: tuple[Finding, ...] = ()

    @classmethod
    def from_frame(
        cls,
        frame: pd.DataFrame,
        *,
        examined: str,
        positive: str,
        lon: str | None = None,
        lat: str | None = None,
        x: str | None = None,
        y: str | None = None,
        crs: Any = None,
        site: str | None = None,
        unit: str | None = None,
        weight: str | None = None,
        about: SurveyNotes | None = None,
    ) -> Survey:
        """Check a table that is in memory; the frame itself is left as it is.

        Parameters
        ----------
        frame : DataFrame or GeoDataFrame
            One row per site, or several. Findings name rows by its index.
        examined, positive, lon, lat, x, y, crs, site, unit, weight, about
            As in `read_survey`; a GeoDataFrame needs no columns of coordinates.

        Returns
        -------
        Survey

        Raises
        ------
        InputError
            As in `read_survey`.

        Examples
        --------
        >>> table = pd.DataFrame({"seen": [40, 55], "ill": [3, 0], "x": [0.5, 2.0], "y": [1.0, 1.5]})
        >>> survey = Survey.from_frame(table, examined="seen", positive="ill", lon="x", lat="y")
        >>> survey.n_sites, survey.n_positive
        (2, 3)
        """
        roles = roles_of(
            examined=examined,
            positive=positive,
            lon=lon,
            lat=lat,
            x=x,
            y=y,
            site=site,
            unit=unit,
            weight=weight,
        )
        return _survey(frame_table(frame), roles, crs, about, None)

    @property
    def findings(self) -> pd.DataFrame:
        """Everything found, as a table: row, site, field, severity, what, action."""
        return findings_frame(in_row_order((*self.ledger, *self.comparisons)))

    @property
    def has_unit(self) -> bool:
        """Whether a column of units was given."""
        return "unit" in self.frame.columns

    @property
    def n_sites(self) -> int:
        """Number of sites with a position."""
        return int(self.frame["site"].nunique())

    @property
    def n_examined(self) -> int:
        """People examined in the accepted rows."""
        return int(self.frame["examined"].sum())

    @property
    def n_positive(self) -> int:
        """People positive in the accepted rows."""
        return int(self.frame["positive"].sum())

    def row_values(self, note: str) -> pd.Series | None:
        """Return a note row by row, or None where it is one value for the whole survey.

        Parameters
        ----------
        note : {"indicator", "ages", "test", "sampling", "date"}

        Returns
        -------
        Series of str or None
            Indexed like `frame`; None in rows that do not state it.
        """
        _check_note(note)
        columns = self.note_columns.get(note)
        return None if columns is None else note_values(self.frame, columns)

    def noted(self, note: str) -> str:
        """Return a note for a report: its value, "mixed: a, b", or "not stated".

        Parameters
        ----------
        note : {"indicator", "ages", "test", "sampling", "date"}
        """
        values = self.row_values(note)
        if values is None:
            return self.about.stated(note)
        counted = list(tally(list(values)))
        return counted[0] if len(counted) == 1 else f"mixed: {listed(counted, most=8)}"

    def without(self, rows: object, reason: str) -> Survey:
        """Return the survey without some rows; the ledger keeps which and why.

        Parameters
        ----------
        rows : int, str or iterable of them
            Labels in `frame.index` or `unplaced.index`.
        reason : str
            Printed with the rows in every report.

        Returns
        -------
        Survey
            What its remaining rows say about each other is found anew.

        Raises
        ------
        InputError
            Where a label is not a row in use, the reason is empty, or no row would remain.
        """
        if not isinstance(reason, str) or not reason.strip():
            raise InputError("without: a reason is expected; it is printed in the report.")
        labels = [rows] if isinstance(rows, str | int) or not isinstance(rows, Iterable) else list(rows)
        unknown = [
            label for label in labels if label not in self.frame.index and label not in self.unplaced.index
        ]
        if unknown:
            known = listed(self.frame.index)
            raise InputError(
                f"without: {listed(map(repr, unknown))} is not a row in use; rows in use are {known} "
                "(rows with an error are left out already)."
            )
        action = f"left out by the analyst: {reason.strip()}"
        noted: list[Finding] = []
        for part in (self.frame, self.unplaced):
            for label, site, examined, positive in zip(
                part.index, part["site"], part["examined"], part["positive"], strict=True
            ):
                if label in labels:
                    what = f"{positive} of {examined} positive"
                    noted.append(Finding(row_label(label), site, None, "note", what, action))
        frame = self.frame[~self.frame.index.isin(labels)]
        unplaced = self.unplaced[~self.unplaced.index.isin(labels)]
        if not len(frame):
            raise InputError("without: no row with a position would remain.")
        changed = replace(self, frame=frame, unplaced=unplaced, ledger=(*self.ledger, *noted))
        return _compared(changed)

    def __repr__(self) -> str:
        lines = [f"Survey of {self.n_sites} sites{f' from {self.source}' if self.source else ''}"]
        lines += [f"  {name}: {value}" for name, value in self._summary()]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        escape = html.escape
        title = f"Survey of {self.n_sites} sites{f' from {self.source}' if self.source else ''}"
        left = "style='text-align:left'"
        summary = "".join(
            f"<tr><th {left}>{escape(name)}</th><td {left}>{escape(value)}</td></tr>"
            for name, value in self._summary()
        )
        findings = self.findings
        head = "".join(f"<th {left}>{escape(name)}</th>" for name in findings.columns)
        rank = {severity: place for place, severity in enumerate(SEVERITIES)}
        shown = findings.sort_values("severity", key=lambda names: names.map(rank), kind="stable")
        body = "".join(
            "<tr>" + "".join(f"<td {left}>{escape(_printed(cell))}</td>" for cell in row) + "</tr>"
            for row in shown.head(SHOWN_FINDINGS).itertuples(index=False)
        )
        more = len(findings) - SHOWN_FINDINGS
        rest = f"<p>and {more} more in <code>survey.findings</code></p>" if more > 0 else ""
        table = f"<table><tr>{head}</tr>{body}</table>{rest}" if len(findings) else ""
        return f"<div><p><b>{escape(title)}</b></p><table>{summary}</table>{table}</div>"

    def _summary(self) -> list[tuple[str, str]]:
        examined, positive = self.n_examined, self.n_positive
        used = f"{len(self.frame)} of {self.rows_read} read"
        if len(self.unplaced):
            used += f", and {len(self.unplaced)} without a position in their unit's direct estimate"
        counted = Counter(self.findings["severity"])
        found = ", ".join(
            f"{counted[name]} {name}{'' if counted[name] == 1 else 's'}"
            for name in SEVERITIES
            if counted[name]
        )
        notes = [(note, self.noted(note)) for note in NOTE_FIELDS]
        return [
            ("rows", used),
            ("examined", f"{examined:,}"),
            ("positive", f"{positive:,} ({100 * positive / examined:.1f} %)"),
            ("coordinates", self.frame.crs.name),
            *[(note, value) for note, value in notes if value != NOT_STATED],
            *[(NOT_STATED, ", ".join(note for note, value in notes if value == NOT_STATED))][: _lack(notes)],
            ("findings", found or "none"),
        ]


def read_survey(
    path: str | Path,
    *,
    examined: str,
    positive: str,
    lon: str | None = None,
    lat: str | None = None,
    x: str | None = None,
    y: str | None = None,
    crs: Any = None,
    site: str | None = None,
    unit: str | None = None,
    weight: str | None = None,
    about: SurveyNotes | None = None,
    encoding: str | None = None,
    sheet: str | None = None,
    decimal: str | None = None,
) -> Survey:
    """Read a table of sites and check every row of it.

    Parameters
    ----------
    path : str or Path
        CSV, TSV, XLSX, GeoJSON, GeoPackage, Shapefile or GeoParquet. The separator of a text file is
        recognised; comments and a title above the header are passed over, and lines keep their number.
    examined, positive : str
        Columns with the number of people examined and positive.
    lon, lat : str, optional
        Columns with longitude and latitude: decimal degrees, or degrees and minutes (1°17'30"S).
    x, y : str, optional
        Columns with coordinates in `crs`, instead of lon and lat. A layer with geometry needs neither;
        lines and areas are placed by a point inside them.
    crs : optional
        Coordinate system of x and y, or of a layer that names none: EPSG code, WKT or pyproj.CRS.
    site : str, optional
        Column with the site; without it, rows at one identical position are one site.
    unit : str, optional
        Column with the implementation unit. A row without a position then stays in the direct estimate
        of its unit.
    weight : str, optional
        Column with survey weights (above 0), for direct estimates only.
    about : SurveyNotes, optional
        What the survey measured.
    encoding : str, optional
        Encoding of a text file that is not in UTF-8, e.g. "cp1252".
    sheet : str, optional
        Sheet of a workbook or layer of a GeoPackage.
    decimal : {".", ","}, optional
        Decimal sign in text; left out, it is judged from the coordinates.

    Returns
    -------
    Survey
        Rows with an error are not in it; `Survey.findings` says which and why.

    Raises
    ------
    InputError
        Where the file cannot be read as such a table, a column is missing, the coordinate system is
        unknown, or no row can be used (the findings come with the error).
    """
    roles = roles_of(
        examined=examined, positive=positive, lon=lon, lat=lat, x=x, y=y, site=site, unit=unit, weight=weight
    )
    wanted = [" ".join(name.split()) for name in roles.values()]
    table = read_table(path, wanted, encoding=encoding, sheet=sheet)
    return _survey(table, roles, crs, about, decimal)


def _survey(
    table: Table, roles: Mapping[str, str], crs: Any, about: SurveyNotes | None, decimal: str | None
) -> Survey:
    if about is not None and not isinstance(about, SurveyNotes):
        raise InputError(f"about= is {type(about).__name__}; SurveyNotes(...) is expected.")
    about = about or SurveyNotes()
    ledger = judged(table, roles, crs=crs, about=about, decimal=decimal)
    survey = Survey(
        frame=ledger.frame,
        unplaced=ledger.unplaced,
        about=about,
        source=table.source,
        rows_read=ledger.rows_read,
        note_columns=ledger.note_columns,
        ledger=ledger.findings,
    )
    return _compared(survey)


def _compared(survey: Survey) -> Survey:
    found = comparison_findings(survey.frame, survey.unplaced)
    found += note_findings(survey.frame, survey.about, survey.note_columns)
    return replace(survey, comparisons=tuple(found))


def _check_note(note: str) -> None:
    if note not in NOTE_FIELDS:
        raise InputError(f"{note!r} is not a note of a survey; one of {', '.join(NOTE_FIELDS)} is expected.")


def _lack(notes: list[tuple[str, str]]) -> int:
    return int(any(value == NOT_STATED for _, value in notes))


def _printed(cell: object) -> str:
    return "" if cell is None or cell != cell else str(cell)
