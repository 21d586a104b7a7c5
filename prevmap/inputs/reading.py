"""Reading: one cell as people type it; what cannot be read surely is said, never guessed."""

from __future__ import annotations

import datetime
import math
import numbers
import re
import unicodedata
from dataclasses import dataclass

import pandas as pd

# Cells that mean "no value" in tables from the field; compared as typed, since "Na" may be a village.
MISSING = frozenset(
    {"", "-", "--", ".", "NA", "N/A", "n/a", "NaN", "nan", "NULL", "null", "None", "#N/A", "<NA>"}
)

# No survey examines this many people at one site; larger numbers are identifiers or slips of the keyboard.
LARGEST_COUNT = 10**9

_SIGNS = {ord(typed): plain for typed, plain in zip("，．－−‒–＋％／：", ",.---" + "-+%/:", strict=True)}
_INVISIBLE = dict.fromkeys(map(ord, "\u200b\u200c\u200d\u2060\ufeff\u200e\u200f"))
_WHOLE = re.compile(r"[+-]?\d+(\.0*)?")
_DECIMAL = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")
_GROUPED = re.compile(r"[+-]?\d{1,3}([,.' ’\u00a0\u202f])\d{3}(\1\d{3})*")
_DECIMAL_COMMA = re.compile(r"[+-]?\d*,\d+")


@dataclass(frozen=True, slots=True)
class Reading:
    """What one cell says.

    Parameters
    ----------
    value : float or None
        The number; None where the cell is empty or cannot be read.
    problem : str or None
        Why it cannot be used as it stands, with the value; None for an empty cell and for a good one.
    """

    value: float | None = None
    problem: str | None = None


def is_missing(value: object) -> bool:
    """Return whether a cell holds nothing: None, NaN, NaT, blanks or one of the usual marks.

    Examples
    --------
    >>> [is_missing(cell) for cell in (None, float("nan"), "  ", "N/A", 0, "Na")]
    [True, True, True, True, False, False]
    """
    if isinstance(value, str):
        return trimmed(value) in MISSING
    if value is None or value is pd.NA or value is pd.NaT:
        return True
    return isinstance(value, numbers.Real) and math.isnan(value)


def trimmed(text: str) -> str:
    """Return the text without white space around it and without characters that cannot be seen."""
    return text.strip() if text.isascii() else text.translate(_INVISIBLE).strip()


def plain(text: str) -> str:
    """Return a typed number in ASCII: digits of any script and full-width signs become 0-9 , . + - %.

    Superscripts are left alone, because they mark footnotes.

    Examples
    --------
    >>> plain(" １２ "), plain("−3"), plain("5²")
    ('12', '-3', '5²')
    """
    ascii_signs = trimmed(text).translate(_SIGNS)
    if ascii_signs.isascii():
        return ascii_signs
    return "".join(str(unicodedata.decimal(letter, letter)) for letter in ascii_signs)


def cell_text(value: object) -> str | None:
    """Return a cell as text, None where it is missing; 12.0 in a numeric column is the name "12".

    Examples
    --------
    >>> cell_text(12.0), cell_text("  Upper Ford "), cell_text("")
    ('12', 'Upper Ford', None)
    """
    if is_missing(value):
        return None
    if isinstance(value, str):
        return " ".join(trimmed(value).split())
    if isinstance(value, numbers.Real) and math.isfinite(value):
        number = float(value)
        return str(int(number)) if number.is_integer() and abs(number) < 2**53 else str(value)
    if isinstance(value, datetime.datetime):
        return value.isoformat(sep=" ") if value.time() != datetime.time() else value.date().isoformat()
    return str(value)


def quoted(value: object) -> str:
    """Return a cell in quotation marks for a message, without the backslashes of a program.

    Examples
    --------
    >>> print(quoted("12 "), quoted(12.5), quoted("1°17'S"))
    '12 ' 12.5 “1°17'S”
    """
    if not isinstance(value, str):
        return repr(value)
    return f"“{value}”" if "'" in value else f"'{value}'"


def read_count(value: object, decimal: str = ".") -> Reading:
    """Read a count of people.

    Parameters
    ----------
    value : object
        The cell: a number, or text such as "12 " or "１２".
    decimal : {".", ","}
        Decimal sign of the table, so that "12,0" is 12 in a decimal-comma table.

    Returns
    -------
    Reading
        ``value`` is whole where ``problem`` is None; a fraction keeps its value beside the problem. A
        negative whole number is returned as it is. "1,234" is a problem: it may be 1234 or 1.234.

    Examples
    --------
    >>> read_count("12 ").value, read_count("1,234").problem
    (12.0, "'1,234' can be read in two ways (thousands separator or decimal sign)")
    """
    if is_missing(value):
        return Reading()
    odd = _not_a_number(value)
    if odd:
        return Reading(problem=odd)
    if isinstance(value, str):
        return _typed_count(value, decimal)
    return _whole(float(value), value)  # type: ignore[arg-type]


def read_number(value: object, decimal: str = ".") -> Reading:
    """Read a number that may have decimals (a weight, a metre coordinate).

    Parameters
    ----------
    value : object
        The cell.
    decimal : {".", ","}
        Decimal sign of the table; a comma in a decimal-point table is a problem.

    Returns
    -------
    Reading

    Examples
    --------
    >>> read_number("12,5", ",").value, read_number("12,5").problem
    (12.5, "'12,5' has a comma: declare decimal=',' if it is a decimal comma")
    """
    if is_missing(value):
        return Reading()
    odd = _not_a_number(value)
    if odd:
        return Reading(problem=odd)
    if not isinstance(value, str):
        number = float(value)  # type: ignore[arg-type]
        return Reading(number) if math.isfinite(number) else Reading(problem=f"{quoted(value)} is not finite")
    text = plain(value)
    if decimal == ",":
        # A lone point is harmless only where the text holds no comma and no thousands pattern.
        if "." in text and ("," in text or _GROUPED.fullmatch(text)):
            return Reading(
                problem=f"{quoted(value)} can be read in two ways (thousands separator or decimal sign)"
            )
        text = text.replace(",", ".", 1)
    elif "," in text:
        return Reading(problem=f"{quoted(value)} has a comma: declare decimal=',' if it is a decimal comma")
    return (
        Reading(float(text))
        if _DECIMAL.fullmatch(text)
        else Reading(problem=f"{quoted(value)} is not a number")
    )


def is_decimal_comma(text: str) -> bool:
    """Return whether a comma can only be a decimal sign: "12,5" and "0,123" can, "1,234" cannot be told.

    Examples
    --------
    >>> is_decimal_comma("12,5"), is_decimal_comma("1,234"), is_decimal_comma("512345,678")
    (True, False, True)
    """
    typed = plain(text)
    if not _DECIMAL_COMMA.fullmatch(typed):
        return False
    return not _GROUPED.fullmatch(typed) or typed.lstrip("+-").startswith("0")


def _not_a_number(value: object) -> str | None:
    if isinstance(value, bool) or type(value).__name__ in ("bool", "bool_"):
        return f"{value} is a yes/no value, not a number"
    if isinstance(value, datetime.date | datetime.time | datetime.timedelta):
        return f"{value} is a date or time (a spreadsheet may have converted what was typed)"
    if isinstance(value, str):
        return None
    try:
        float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError, OverflowError):
        return f"{quoted(value)} is not a number"
    return None


def _typed_count(value: str, decimal: str) -> Reading:
    text = plain(value)
    if text.endswith("%"):
        share = read_number(text[:-1], decimal)
        return Reading(share.value, f"{quoted(value)} is a percentage, not a count")
    if decimal == "," and re.fullmatch(r"[+-]?\d+,0+", text):
        text = text.split(",")[0]
    if _WHOLE.fullmatch(text) and not re.fullmatch(r"[+-]?\d{1,3}\.000", text):
        return _whole(float(text), value)
    if _GROUPED.fullmatch(text):
        return Reading(
            problem=f"{quoted(value)} can be read in two ways (thousands separator or decimal sign)"
        )
    number = read_number(text, "," if is_decimal_comma(text) else decimal)
    if number.value is None:
        return Reading(problem=f"{quoted(value)} is not a number")
    # "1e3" is how spreadsheets show a number they have shortened: its digits may be lost.
    if "e" in text.lower():
        return Reading(problem=f"{quoted(value)} is not written out as a whole number")
    return _whole(number.value, value)


def _whole(number: float, value: object) -> Reading:
    if not math.isfinite(number):
        return Reading(problem=f"{quoted(value)} is not finite")
    if number != int(number):
        return Reading(number, f"{quoted(value)} is not a whole number")
    if abs(number) > LARGEST_COUNT:
        return Reading(problem=f"{quoted(value)} is larger than any count of people examined")
    return Reading(number)
