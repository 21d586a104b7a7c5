"""Numbers and the meaning of prevalence, in words: one wording for maps, charts and report."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping, Sequence
from typing import Any

NOT_STATED = "not stated"
NARROW_SPACE = "\u00a0"

NUGGET_WORDS: Mapping[str, str] = {
    "average": "mean over the settlements at a place",
    "omit": "a typical settlement at a place, without local variation",
    "draw": "one new settlement at a place",
}


def percent(share: float, decimals: int | None = None) -> str:
    """Print a share as per cent: one decimal, two significant digits below 1 %.

    Examples
    --------
    >>> percent(0.1234).replace(NARROW_SPACE, " "), percent(0.00123).replace(NARROW_SPACE, " ")
    ('12.3 %', '0.12 %')
    >>> percent(float("nan"))
    '–'
    """
    if share is None or not math.isfinite(share):
        return "–"
    value = 100.0 * share
    if decimals is not None:
        number = f"{value:.{decimals}f}"
    elif value == 0.0 or abs(value) >= 1.0:
        number = f"{value:.1f}"
    elif abs(value) < 0.001:
        return f"< 0.001{NARROW_SPACE}%" if value > 0 else f"> -0.001{NARROW_SPACE}%"
    else:
        number = significant(value, 2)
    return f"{number}{NARROW_SPACE}%"


def threshold_text(threshold: float) -> str:
    """Print a threshold as it was set: ``10 %``, ``0.5 %``."""
    return f"{100.0 * threshold:.6g}{NARROW_SPACE}%"


def inequality(label: str) -> str:
    """Print a class label with the typographic sign.

    Examples
    --------
    >>> inequality(">= 10 % and < 20 %")
    '≥ 10 % and < 20 %'
    """
    return label.replace(">=", "≥")


def probability(p: float) -> str:
    """Print a probability as per cent without ever rounding to 0 or 100 %.

    Examples
    --------
    >>> probability(0.99996).replace(NARROW_SPACE, " "), probability(0.5).replace(NARROW_SPACE, " ")
    ('> 99.9 %', '50.0 %')
    """
    if p is None or not math.isfinite(p):
        return "–"
    if p < 0.001:
        return f"<{NARROW_SPACE}0.1{NARROW_SPACE}%"
    if p > 0.999:
        return f">{NARROW_SPACE}99.9{NARROW_SPACE}%"
    return f"{100.0 * p:.1f}{NARROW_SPACE}%"


def significant(value: float, digits: int = 3) -> str:
    """Print a number with a few significant digits and without an exponent in everyday ranges."""
    if value is None or not math.isfinite(value):
        return "–"
    if value == 0.0:
        return "0"
    if 1e-4 <= abs(value) < 1e7:
        decimals = max(0, digits - 1 - math.floor(math.log10(abs(value))))
        return f"{value:,.{decimals}f}"
    return f"{value:.{digits}g}"


def count(number: float, singular: str, plural: str | None = None) -> str:
    """Print a count with its noun: ``1 site``, ``1,204 sites``."""
    if number is None or not math.isfinite(number):
        return f"– {plural or singular + 's'}"
    return f"{number:,.0f} {singular if number == 1 else plural or singular + 's'}"


def listed(words: Sequence[str]) -> str:
    """Join words as prose does: ``a``, ``a and b``, ``a, b and c``."""
    if len(words) < 2:
        return "".join(words)
    return ", ".join(words[:-1]) + " and " + words[-1]


def noted(source: Any, field: str) -> str:
    """Return what the survey noted about itself (indicator, ages, test, sampling, date), printable.

    A fit or a surface leads to its survey, which knows notes that vary by row; a bare note is printed as is.
    """
    for holder in (
        source,
        getattr(source, "survey", None),
        getattr(getattr(source, "fit", None), "survey", None),
    ):
        if holder is not None and hasattr(holder, "noted"):
            return str(holder.noted(field))
    value = getattr(getattr(source, "about", None), field, None)
    if value is None or value == "":
        return NOT_STATED
    if isinstance(value, (tuple, list)):
        return "–".join(f"{v:g}" if isinstance(v, (int, float)) else str(v) for v in value)
    return str(value)


def measured(source: Any) -> str:
    """Say in one clause what the survey measured: indicator, ages, test."""
    indicator, ages, test = (noted(source, field) for field in ("indicator", "ages", "test"))
    parts = [indicator if indicator != NOT_STATED else "indicator not stated"]
    parts.append(f"ages {ages}")
    parts.append(f"test: {test}")
    return ", ".join(parts)


def predicted_at(at: Mapping[str, Any] | None) -> str:
    """Say for which covariate values a grid was predicted, an empty string where none had to be chosen."""
    if not at:
        return ""
    return "predicted for " + listed([f"{name} = {value}" for name, value in at.items()])


def meaning(source: Any) -> str:
    """Say what prevalence means on this map: indicator, ages, test, nugget setting, `at` values."""
    nugget = str(getattr(source, "nugget", ""))
    sentences = [measured(source), NUGGET_WORDS.get(nugget, nugget)]
    sentences.append(predicted_at(getattr(source, "at", None)))
    return "; ".join(part for part in sentences if part)


def file_name(path: object) -> str:
    """Return the last part of a path: folders of one machine say nothing to a reader on another."""
    return str(path).replace("\\", "/").rsplit("/", 1)[-1]


def sentence(text: str, *, capital: bool = True) -> str:
    """End a clause with one full stop (none after another end of a sentence) and start it with a capital.

    Examples
    --------
    >>> sentence("two words"), sentence("said before.", capital=False), sentence("why?")
    ('Two words.', 'said before.', 'Why?')
    """
    text = text.rstrip()
    first = text[:1].upper() if capital else text[:1]
    return first + text[1:] + ("." if text and not text.endswith((".", "!", "?")) else "")


def wrapped(text: str, width_in: float, size_pt: float) -> list[str]:
    """Break a text into lines that fit a width; 0.55 em is the mean width of a letter of the house font."""
    letters = max(12, int(width_in * 72.0 / (0.55 * size_pt)))
    # Non-breaking spaces are kept by textwrap only when they do not count as white space.
    lines = textwrap.wrap(text.replace(NARROW_SPACE, "\ue000"), letters)
    return [line.replace("\ue000", NARROW_SPACE) for line in lines]
