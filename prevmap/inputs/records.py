"""Records: the lines of a text file, or the rows of a sheet, below their header."""

from __future__ import annotations

import csv
import io
import itertools
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from prevmap.errors import InputError
from prevmap.inputs.findings import Finding, listed
from prevmap.inputs.reading import cell_text, is_missing, trimmed

# A title and a few remarks may stand above the header; a header is not looked for farther down than this.
HEADER_SEARCH = 30
SEPARATORS = ",;\t|"

Record = tuple[int, list[Any]]  # the line a record starts on, its cells


@dataclass(frozen=True, slots=True)
class Body:
    """The rows below a header.

    Parameters
    ----------
    names : list of str
        Column names, no two the same.
    rows : list of int
        (n,) line of the file on which each row starts.
    cells : list of list
        (n, columns) cells, None where a row is short.
    findings : list of Finding
        Text above the header, and rows that have more cells than columns.
    """

    names: list[str]
    rows: list[int]
    cells: list[list[Any]]
    findings: list[Finding]


def below_header(records: list[Record], label: str, wanted: Sequence[str]) -> Body:
    """Return the rows below the header, which is the first record that has the most wanted columns."""
    if not records:
        raise InputError(f"{label}: the file holds no rows.")
    place, _ = header_place(records, wanted)
    header_line, header = records[place]
    findings = [
        Finding(
            line,
            None,
            None,
            "note",
            f"text above the header: {' '.join(str(cell) for cell in cells if not is_missing(cell))!r}",
            f"left out; the header was found on line {header_line}",
        )
        for line, cells in records[:place]
    ]
    names = [_column_name(cell) for cell in header]
    body = records[place + 1 :]
    used = [at for at, name in enumerate(names) if name or any(_filled(cells, at) for _, cells in body)]
    names = [name or f"unnamed column {at + 1}" for at, name in enumerate(names)]
    refuse_repeats([names[at] for at in used], label)
    rows: list[int] = []
    cells_by_row: list[list[Any]] = []
    for line, cells in body:
        if any(not is_missing(cell) for cell in cells[len(names) :]):
            over = listed(cells[len(names) :])
            what = f"has {len(cells)} cells, the header has {len(names)}: {over!r} is left over"
            action = "row not used: quote cells that hold the separator"
            findings.append(Finding(line, None, None, "error", what, action))
            continue
        rows.append(line)
        cells_by_row.append([cells[at] if at < len(cells) else None for at in used])
    if not body:
        raise InputError(f"{label}: the file has a header (line {header_line}) and no rows below it.")
    return Body([names[at] for at in used], rows, cells_by_row, findings)


def text_records(file: Path, wanted: Sequence[str], encoding: str | None) -> list[Record]:
    """Return the records of a text file.

    The separator is the one under which the most wanted columns appear in one line, then the one that
    gives the most cells; a first line "sep=;" settles it.
    """
    text = _decoded(file, encoding)
    lines, declared = _without_preface(list(io.StringIO(text, newline="")), wanted)
    ranked: list[tuple[int, int, str]] = []
    failed: InputError | None = None
    for separator in [declared] if declared else SEPARATORS:
        try:
            sample = list(itertools.islice(_records(file, lines, separator), HEADER_SEARCH))
        except InputError as error:
            failed = failed or error
            continue
        if sample:
            _, found = header_place(sample, wanted)
            ranked.append((found, max(len(cells) for _, cells in sample), separator))
    if not ranked:
        raise failed or InputError(f"{file}: the file holds no rows.")
    # max() keeps the first of equals, so a one-column file counts as comma-separated.
    separator = max(ranked, key=lambda entry: entry[:2])[2]
    return list(_records(file, lines, separator))


def header_place(records: Sequence[Record], wanted: Sequence[str]) -> tuple[int, int]:
    """Return the place of the header among the records and how many wanted columns it has."""
    best, most = 0, 0
    for place, (_, cells) in enumerate(records[:HEADER_SEARCH]):
        names = {_column_name(cell) for cell in cells}
        found = sum(name in names for name in dict.fromkeys(wanted))
        if found > most:
            best, most = place, found
    return best, most


def refuse_repeats(names: Sequence[str], label: str) -> None:
    """Raise an InputError where two columns have one name."""
    repeated = [name for name in dict.fromkeys(names) if names.count(name) > 1]
    if repeated:
        twice = listed(map(repr, repeated))
        raise InputError(f"{label}: column names must differ, found more than once: {twice}. Rename them.")


def _decoded(file: Path, encoding: str | None) -> str:
    data = file.read_bytes()
    try:
        if encoding is not None and encoding.lower().replace("_", "-") not in ("utf-8", "utf8"):
            text = data.decode(encoding)
        else:
            text = data.decode("utf-8-sig")
    except LookupError as error:
        raise InputError(
            f"{file}: {encoding!r} is not a known encoding; known are e.g. 'utf-8', 'cp1252', 'utf-16'."
        ) from error
    except UnicodeError as error:
        place = ""
        if isinstance(error, UnicodeDecodeError):
            line = data.count(b"\n", 0, error.start) + 1
            place = f" (byte 0x{data[error.start]:02x} on line {line})"
        if encoding is not None:
            raise InputError(
                f"{file}: the text is not in the declared encoding {encoding!r}{place}."
            ) from error
        guess = "utf-16" if data[:2] in (b"\xff\xfe", b"\xfe\xff") else "cp1252"
        raise InputError(
            f"{file}: the text is not in UTF-8{place}, and no encoding is declared. Declare it, e.g. "
            f"encoding={guess!r}, or save the file as UTF-8."
        ) from error
    if "\0" in text:
        raise InputError(f"{file}: the text holds zero bytes: is it in another encoding, or not text at all?")
    return text


def _without_preface(lines: list[str], wanted: Sequence[str]) -> tuple[list[str], str | None]:
    """Blank the comment lines above the header, so that later lines keep their number."""
    declared = None
    for place, line in enumerate(lines):
        text = trimmed(line)
        hint = re.fullmatch(r'"?sep=(.)"?\s*', line, flags=re.IGNORECASE)
        if hint and declared is None:
            declared = hint.group(1)
        elif text and not text.startswith("#"):
            break
        elif text and wanted and all(name in text for name in wanted):
            break  # a header whose first column is called, say, "#id"
        lines[place] = "\n"
    return lines, declared


def _records(file: Path, lines: list[str], separator: str) -> Iterator[Record]:
    reader = csv.reader(lines, delimiter=separator, strict=True, skipinitialspace=True)
    start = 1
    try:
        for cells in reader:
            texts = [trimmed(cell) for cell in cells]
            if any(texts):
                yield start, texts
            start = reader.line_num + 1
    except csv.Error as error:
        reason = "a quotation mark is not closed" if "end of data" in str(error) else str(error)
        raise InputError(f"{file}: the row that starts on line {start} cannot be read: {reason}.") from error


def _column_name(cell: object) -> str:
    return " ".join(trimmed(cell).split()) if isinstance(cell, str) else cell_text(cell) or ""


def _filled(cells: list[Any], at: int) -> bool:
    return at < len(cells) and not is_missing(cells[at])
