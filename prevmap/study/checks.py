"""Checks of single values in a study file: each returns the value to use or says what is accepted."""

from __future__ import annotations

import contextlib
import datetime
import difflib
import math
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NoReturn

from prevmap.errors import InputError


@dataclass(frozen=True, slots=True)
class Place:
    """Where a value stands: the study file, its folder, the section as written, and the key."""

    file: str
    folder: Path
    section: str
    key: str = ""

    def at(self, key: str) -> Place:
        """Return the place of a key in the same section."""
        return Place(self.file, self.folder, self.section, key)

    def under(self, section: str) -> Place:
        """Return the place of a section."""
        return Place(self.file, self.folder, section)

    def within(self, name: str) -> Place:
        """Return the place of a name inside this key's own table."""
        return self.at(f"{self.key}.{name}")

    def __str__(self) -> str:
        return " ".join(part for part in (f"{self.file}:", self.section, self.key) if part)

    def refuse(self, value: Any, accepted: str) -> NoReturn:
        """Raise the InputError that names this place, the value found and what is accepted."""
        raise InputError(f"{self}: found {shown(value)}; accepted: {accepted}")


Check = Callable[[Any, Place], Any]


def shown(value: Any) -> str:
    """Return a value as it would be written in a study file.

    Examples
    --------
    >>> shown([True, "a"])
    '[true, "a"]'
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{name} = {shown(item)}" for name, item in value.items()) + " }"
    if isinstance(value, Sequence):
        return "[" + ", ".join(shown(item) for item in value) + "]"
    return str(value)


def nearest(name: str, known: Iterable[str]) -> str:
    """Return a sentence naming the nearest known name, or all of them where none is near."""
    known = list(known)
    close = difflib.get_close_matches(name.lower(), known, n=1, cutoff=0.6)
    if close:
        return f'did you mean "{close[0]}"?'
    return "known: " + ", ".join(known)


def text(value: Any, place: Place) -> str:
    """Accept a text that is not empty."""
    if not isinstance(value, str) or not value.strip():
        place.refuse(value, "a text in quotes, not empty")
    return value


def flag(value: Any, place: Place) -> bool:
    """Accept true or false."""
    if not isinstance(value, bool):
        place.refuse(value, "true or false")
    return value


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def number(
    *,
    above: float | None = None,
    least: float | None = None,
    below: float | None = None,
    most: float | None = None,
    unit: str = "",
) -> Check:
    """Return a check for a number within limits: above and below exclude them, least and most do not."""
    limits = {"above": above, "from": least, "below": below, "up to": most}
    stated = " and ".join(f"{word} {limit:g}" for word, limit in limits.items() if limit is not None)
    accepted = " ".join(part for part in ("a number", stated, unit) if part)

    def check(value: Any, place: Place) -> float:
        usable = (
            _is_number(value)
            and (above is None or value > above)
            and (least is None or value >= least)
            and (below is None or value < below)
            and (most is None or value <= most)
        )
        if not usable:
            place.refuse(value, accepted)
        return float(value)

    return check


def whole(*, least: int) -> Check:
    """Return a check for a whole number from `least` upwards."""

    def check(value: Any, place: Place) -> int:
        if not isinstance(value, int) or isinstance(value, bool) or value < least:
            place.refuse(value, f"a whole number from {least} upwards")
        return value

    return check


def choice(*options: str | float) -> Check:
    """Return a check for one of a few texts or numbers."""

    def check(value: Any, place: Place) -> Any:
        if isinstance(value, bool) or value not in options:
            place.refuse(value, "one of " + ", ".join(shown(option) for option in options))
        return value

    return check


def existing_file(value: Any, place: Place) -> Path:
    """Accept the path of a file that exists; relative paths start at the study file's folder."""
    written = text(value, place)
    path = (place.folder / Path(written).expanduser()).resolve()
    if path.is_dir():
        place.refuse(value, f"a file; {path} is a folder")
    if not path.exists():
        beside = [entry.name for entry in path.parent.iterdir()] if path.parent.is_dir() else []
        close = difflib.get_close_matches(path.name, beside, n=1)
        hint = f'; did you mean "{close[0]}"?' if close else ""
        place.refuse(value, f"the path of a file that exists; there is no {path}{hint}")
    return path


def output_folder(value: Any, place: Place) -> Path:
    """Accept the path of a folder that exists or can be made."""
    path = (place.folder / Path(text(value, place)).expanduser()).resolve()
    if path.exists() and not path.is_dir():
        place.refuse(value, f"a folder; {path} is a file")
    return path


def reference_system(value: Any, place: Place) -> str:
    """Accept a coordinate reference system: an EPSG number, or a text that PROJ understands."""
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    accepted = 'a coordinate reference system such as "EPSG:32631"'
    if not isinstance(value, str | int) or isinstance(value, bool):
        place.refuse(value, accepted)
    name = f"EPSG:{value}" if isinstance(value, int) else value
    try:
        CRS.from_user_input(name)
    except CRSError:
        place.refuse(value, accepted)
    return name


def ages(value: Any, place: Place) -> tuple[int, int] | str:
    """Accept [youngest, oldest] in completed years, or the name of a column."""
    if isinstance(value, str):
        return text(value, place)
    years = [age for age in value if _is_number(age)] if isinstance(value, list) else []
    if len(years) != 2 or len(value) != 2 or not 0 <= years[0] <= years[1]:
        place.refuse(value, "[youngest, oldest] in years such as [5, 14], or the name of a column")
    return value[0], value[1]


def age_range(value: Any, place: Place) -> tuple[int, int]:
    """Accept [youngest, oldest] in completed years."""
    if isinstance(value, str):
        place.refuse(value, "[youngest, oldest] in years such as [5, 14]")
    checked = ages(value, place)
    return checked[0], checked[1]  # type: ignore[return-value]  # a text was refused above


def date(value: Any, place: Place) -> str:
    """Accept a date as a text, a date, a year, or the name of a column."""
    if isinstance(value, datetime.date):
        return value.isoformat()
    if isinstance(value, int) and not isinstance(value, bool):
        return str(value)
    if not isinstance(value, str) or not value.strip():
        place.refuse(value, 'a date such as "2026-03", or the name of a column')
    return value


def thresholds(value: Any, place: Place) -> tuple[float, ...]:
    """Accept a list of prevalences, strictly increasing, each strictly between 0 and 1."""
    from prevmap.plan.classify import checked_thresholds  # a study without a decision needs no pandas

    if not isinstance(value, list):
        place.refuse(value, "a list of prevalences, such as [0.10] for 10 %")
    with _placed(place):
        return checked_thresholds(value)


def certainty(value: Any, place: Place) -> float | dict[str, float]:
    """Accept a probability above 0.5, at most 1, or one each for above and below."""
    from prevmap.plan.classify import checked_certainty  # as for thresholds

    with _placed(place):
        levels = checked_certainty(value)
    return levels if isinstance(value, Mapping) else levels["above"]


@contextlib.contextmanager
def _placed(place: Place) -> Iterator[None]:
    """Put the file and the section before the message of a check that names the key itself."""
    try:
        yield
    except InputError as error:
        raise InputError(f"{place.at('')} {error}") from error


@dataclass(frozen=True, slots=True)
class TailPrior:
    """A prior given by one tail: P(value < limit) or P(value > limit) equals `probability`."""

    side: str
    limit: float
    probability: float


def tail_prior(side: str, *, optional: bool = False) -> Check:
    """Return a check for a tail prior, a number above 0 that fixes the value, or false where `optional`."""
    accepted = f"{{ {side} = .., probability = .. }}, or a number above 0 that fixes it"
    if optional:
        accepted += ", or false to leave it out"

    def check(value: Any, place: Place) -> TailPrior | float | bool:
        if optional and value is False:
            return False
        if isinstance(value, Mapping):
            unknown = [name for name in value if name not in (side, "probability")]
            if unknown:
                place.within(unknown[0]).refuse(value[unknown[0]], accepted)
            if side not in value:
                place.refuse(value, accepted)
            limit = number(above=0)(value[side], place.within(side))
            share = number(above=0, below=1)(value.get("probability", 0.05), place.within("probability"))
            return TailPrior(side, limit, share)
        if not _is_number(value) or value <= 0:
            place.refuse(value, accepted)
        return float(value)

    return check


def normal_prior(value: Any, place: Place) -> tuple[float, float]:
    """Accept [mean, sd] on the logit scale, sd above 0."""
    usable = isinstance(value, list) and len(value) == 2 and all(_is_number(item) for item in value)
    if not usable or value[1] <= 0:
        place.refuse(value, "[mean, sd] on the logit scale, sd above 0, such as [0.0, 3.0]")
    return float(value[0]), float(value[1])


def level(value: Any, place: Place) -> float | str:
    """Accept the value or level a column or factor is predicted at."""
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        place.refuse(value, "the number or level predicted for")
    return value


def totals(value: Any, place: Place) -> str | dict[str, float]:
    """Accept a table of people by unit, or the name of a column of the region file."""
    if isinstance(value, Mapping):
        return {name: number(least=0)(people, place.within(name)) for name, people in value.items()}
    if not isinstance(value, str) or not value.strip():
        place.refuse(value, "a column of the region file, or a table of unit = people")
    return value
