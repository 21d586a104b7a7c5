"""Table: the rows of a file or a frame as they stand, each with the line it came from."""

from __future__ import annotations

import datetime
import re
import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import geopandas as gpd
import numpy as np
import openpyxl
import pandas as pd
import pyogrio

from prevmap.errors import InputError
from prevmap.inputs.findings import Finding, listed, row_label
from prevmap.inputs.layer import nearest
from prevmap.inputs.reading import cell_text, is_missing, plain, read_number
from prevmap.inputs.records import Body, Record, below_header, header_place, refuse_repeats, text_records

TEXT_ENDINGS = (".csv", ".tsv", ".tab", ".txt")
LAYER_ENDINGS = (".geojson", ".json", ".gpkg", ".shp")
PARQUET_ENDINGS = (".parquet", ".geoparquet")
ACCEPTED = "CSV, TSV, XLSX, GeoJSON, GeoPackage (.gpkg), Shapefile (.shp) and GeoParquet (.parquet)"


@dataclass(frozen=True, slots=True)
class Table:
    """Rows as they stand in a file or a frame, before any of them is judged.

    Parameters
    ----------
    cells : DataFrame
        Cells by column, indexed 0..n-1; text of a text file is trimmed, not converted.
    rows : tuple of int or str
        (n,) line of the file (of the first line of a row with line breaks inside), feature number of a
        layer from 1, or label of the frame.
    geometry : GeoSeries or None
        (n,) shapes of a layer; None for a plain table.
    source : str or None
        Name of the file; None for a frame.
    label : str
        The path, or "the frame": how messages name the input.
    typed : bool
        Whether cells are text that may hold numbers (text files and workbooks).
    findings : tuple of Finding
        What was noticed while reading, and rows that cannot be split into columns.
    """

    cells: pd.DataFrame
    rows: tuple[int | str, ...]
    geometry: gpd.GeoSeries | None
    source: str | None
    label: str
    typed: bool
    findings: tuple[Finding, ...] = ()

    def missing_column(self, name: str, role: str) -> InputError:
        """Return the error for a column that is not there, with the nearest names."""
        names = [str(column) for column in self.cells.columns]
        near = nearest(name, names)
        hint = f" Did you mean {near}?" if near else ""
        return InputError(
            f"{self.label}: there is no column {name!r} (given as {role}=).{hint} "
            f"The columns are: {listed(map(repr, names), most=40) or 'none'}."
        )


def read_table(
    path: str | Path, wanted: Sequence[str] = (), *, encoding: str | None = None, sheet: str | None = None
) -> Table:
    """Read a table of sites.

    Parameters
    ----------
    path : str or Path
        CSV, TSV, XLSX, GeoJSON, GeoPackage, Shapefile or GeoParquet.
    wanted : sequence of str
        Columns that will be asked for: they tell the separator, the header line below a title, and the
        sheet or layer.
    encoding : str, optional
        Encoding of a text file or Shapefile; UTF-8 where it is not given.
    sheet : str, optional
        Sheet of a workbook or layer of a GeoPackage; needed where several hold the wanted columns.

    Returns
    -------
    Table

    Raises
    ------
    InputError
        Where the file is missing, empty, unreadable, of another kind, in another encoding, or has a
        column name twice.
    """
    file = Path(path)
    ending = file.suffix.lower()
    if not file.exists():
        raise InputError(f"{file}: there is no such file.")
    if ending not in (*TEXT_ENDINGS, *LAYER_ENDINGS, *PARQUET_ENDINGS, ".xlsx", ".xlsm"):
        hint = " Save it as .xlsx or CSV first." if ending in (".xls", ".xlsb", ".ods", ".numbers") else ""
        raise InputError(
            f"{file}: files ending in {ending or 'nothing'!r} are not read.{hint} Accepted: {ACCEPTED}."
        )
    try:
        if not file.is_file():
            raise InputError(f"{file}: this is a folder, a file is expected.")
        if file.stat().st_size == 0:
            raise InputError(f"{file}: the file is empty.")
        if ending in TEXT_ENDINGS:
            body = below_header(text_records(file, wanted, encoding), str(file), wanted)
            return _body_table(body, file, str(file))
        if ending in (".xlsx", ".xlsm"):
            return _workbook_table(file, wanted, sheet)
        if ending in PARQUET_ENDINGS:
            return _frame_table(_read_parquet(file), (), file)
        return _frame_table(*_read_layer(file, wanted, sheet, encoding), file)
    except OSError as error:
        raise InputError(f"{file}: cannot be read ({error}).") from error


def frame_table(frame: pd.DataFrame) -> Table:
    """Take a frame that is already in memory; rows are named by its index, geometry is its active one."""
    if not isinstance(frame, pd.DataFrame):
        raise InputError(f"a DataFrame or GeoDataFrame is expected, not {type(frame).__name__}.")
    table = _frame_table(frame, (), None)
    labels = [row_label(label) for label in frame.index]
    repeated = [row_label(label) for label in frame.index[frame.index.duplicated()].unique()]
    findings: list[Finding] = []
    if repeated:
        what = f"the index of the frame has labels more than once: {listed(repeated)}"
        action = "all rows used; call reset_index(drop=True) first, so that findings name one row"
        findings.append(Finding(None, None, "row", "warning", what, action))
    return Table(table.cells, tuple(labels), table.geometry, None, table.label, False, tuple(findings))


def converted(cells: pd.Series, decimal: str) -> pd.Series:
    """Return a column of a text file or workbook with numbers as numbers, where every cell is one.

    Codes with leading zeros stay text, and a column that mixes numbers and words becomes text, so that
    every column has one type.

    Examples
    --------
    >>> converted(pd.Series(["12", "", "3.5"], dtype=object), ".").tolist()
    [12.0, nan, 3.5]
    >>> converted(pd.Series(["007", "012"], dtype=object), ".").tolist()
    ['007', '012']
    """
    missing = np.array([is_missing(cell) for cell in cells], dtype=bool)
    present = [cell for cell, empty in zip(cells, missing, strict=True) if not empty]
    if not present:
        return pd.Series([None] * len(cells), index=cells.index, dtype=object)
    coded = any(isinstance(cell, str) and re.match(r"[+-]?0\d", plain(cell)) for cell in present)
    numbers = [read_number(cell, decimal).value for cell in present]
    if not coded and None not in numbers:
        values = np.full(len(cells), np.nan)
        values[~missing] = np.array(numbers, dtype=float)
        whole = bool(
            not missing.any() and np.all(np.abs(values) < 2**53) and np.all(values == np.round(values))
        )
        return pd.Series(values.astype(np.int64) if whole else values, index=cells.index)
    if all(isinstance(cell, datetime.datetime) for cell in present):
        return pd.Series(
            [None if empty else cell for cell, empty in zip(cells, missing, strict=True)], cells.index
        )
    return pd.Series([cell_text(cell) for cell in cells], index=cells.index, dtype=object)


def _body_table(body: Body, file: Path, label: str, note: tuple[Finding, ...] = ()) -> Table:
    frame = pd.DataFrame(body.cells, columns=body.names, dtype=object)
    return Table(frame, tuple(body.rows), None, file.name, label, True, (*note, *body.findings))


def _workbook_table(file: Path, wanted: Sequence[str], sheet: str | None) -> Table:
    with warnings.catch_warnings():
        # openpyxl warns of drawings, validations and styles that it leaves aside; none of them is data.
        warnings.simplefilter("ignore", UserWarning)
        try:
            book = openpyxl.load_workbook(file, read_only=True, data_only=True)
        except (BadZipFile, KeyError, ValueError, TypeError, EOFError) as error:
            raise InputError(f"{file}: this is not a readable .xlsx workbook ({error}).") from error
        try:
            records = {page.title: _page_records(page) for page in book.worksheets}
        except (BadZipFile, KeyError, ValueError, TypeError, SyntaxError) as error:
            raise InputError(f"{file}: a sheet of this workbook cannot be read ({error}).") from error
        finally:
            book.close()
    filled = {title: page for title, page in records.items() if page}
    if sheet is not None and sheet not in records:
        raise InputError(f"{file}: there is no sheet {sheet!r}; the sheets are {listed(map(repr, records))}.")
    chosen = sheet or _only_match(
        file, list(filled), lambda title: header_place(filled[title], wanted)[1], wanted, "sheet"
    )
    label = f"{file}, sheet {chosen!r}" if len(records) > 1 else str(file)
    note = _choice_note(sheet, chosen, list(filled), "sheet")
    return _body_table(below_header(records[chosen], label, wanted), file, label, note)


def _page_records(page: Any) -> list[Record]:
    page.reset_dimensions()  # some programs write a wrong extent into the file
    numbered = enumerate(page.iter_rows(values_only=True), start=1)
    return [(line, list(cells)) for line, cells in numbered if any(not is_missing(cell) for cell in cells)]


def _only_match(
    file: Path, titles: list[str], found: Callable[[str], int], wanted: Sequence[str], kind: str
) -> str:
    """Return the one sheet or layer with most of the wanted columns."""
    if not titles:
        raise InputError(f"{file}: the file holds no rows.")
    counts = {title: found(title) for title in titles}
    most = max(counts.values())
    best = [title for title in titles if counts[title] == most]
    if len(best) > 1 and most:
        raise InputError(
            f"{file}: {len(best)} {kind}s hold the columns {listed(map(repr, wanted))}: "
            f"{listed(map(repr, best))}. Name one as sheet=."
        )
    return best[0]


def _choice_note(sheet: str | None, chosen: str, titles: list[str], kind: str) -> tuple[Finding, ...]:
    others = [title for title in titles if title != chosen]
    if sheet is not None or not others:
        return ()
    what = f"the file holds other {kind}s: {listed(map(repr, others))}"
    return (
        Finding(None, None, None, "note", what, f"read {kind} {chosen!r}, which has the columns asked for"),
    )


def _read_layer(
    file: Path, wanted: Sequence[str], sheet: str | None, encoding: str | None
) -> tuple[pd.DataFrame, tuple[Finding, ...]]:
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        try:
            layers = [str(name) for name, _ in pyogrio.list_layers(file)]
            fields = {
                layer: {
                    str(name) for name in pyogrio.read_info(file, layer=layer, encoding=encoding)["fields"]
                }
                for layer in layers
            }
            if sheet is not None and sheet not in layers:
                known = listed(map(repr, layers))
                raise InputError(f"{file}: there is no layer {sheet!r}; the layers are {known}.")
            chosen = sheet or _only_match(
                file, layers, lambda layer: len(fields[layer] & set(wanted)), wanted, "layer"
            )
            frame = pyogrio.read_dataframe(file, layer=chosen, encoding=encoding)
        except (UnicodeError, LookupError) as error:
            declared = repr(encoding or "UTF-8")
            raise InputError(f"{file}: the text is not in the encoding {declared} ({error}).") from error
        except RuntimeError as error:  # what the reading library raises for damaged files
            raise InputError(f"{file}: cannot be read as a layer ({error}). Accepted: {ACCEPTED}.") from error
    notes = [
        Finding(None, None, None, "note", f"reading {file.name}: {message}", "read as it is")
        for message in dict.fromkeys(str(warning.message) for warning in heard)
    ]
    return frame, (*_choice_note(sheet, chosen, layers, "layer"), *notes)


def _read_parquet(file: Path) -> pd.DataFrame:
    try:
        return gpd.read_parquet(file)
    except ValueError as error:
        # Arrow's own errors are ValueErrors too; a table without geometry is read as a plain one below.
        if "geo metadata" not in str(error).lower():
            raise InputError(f"{file}: cannot be read as GeoParquet ({error}).") from error
    return pd.read_parquet(file)


def _frame_table(frame: pd.DataFrame, findings: tuple[Finding, ...], file: Path | None) -> Table:
    label = str(file) if file else "the frame"
    geometry = None
    cells = pd.DataFrame(frame)
    if isinstance(frame, gpd.GeoDataFrame) and frame.active_geometry_name in frame.columns:
        geometry = frame.geometry.reset_index(drop=True)
        cells = cells.drop(columns=frame.active_geometry_name)
    names = [str(column) for column in cells.columns]
    refuse_repeats(names, label)
    cells = cells.reset_index(drop=True)
    cells.columns = pd.Index(names, dtype=object)
    if not len(cells):
        raise InputError(f"{label}: there are no rows.")
    return Table(
        cells, tuple(range(1, len(cells) + 1)), geometry, file.name if file else None, label, False, findings
    )
