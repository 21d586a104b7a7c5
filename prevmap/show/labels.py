"""Unit labels that do not collide: the name where it fits, else the code, else the unit's number."""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import shapely
from matplotlib.patheffects import withStroke
from shapely.ops import polylabel

from prevmap.show.palette import INK

NAME_PT = 6.8
LETTER_PT = 9.5


@dataclass(frozen=True, slots=True)
class UnitText:
    """What may be written on a unit: full name, short code, number in the unit table, class letter."""

    name: str
    code: str | None
    number: int
    letter: str = ""


def text_width_pt(text: str, size_pt: float) -> float:
    """Estimate the width of a text in points, generous enough for capitals and wide scripts."""
    ems = sum(1.0 if unicodedata.east_asian_width(letter) in "WF" else 0.62 for letter in text)
    return ems * size_pt


def label_units(
    ax: Any, polygons: Sequence[Any], texts: Sequence[UnitText], km_per_pt: float
) -> list[UnitText]:
    """Write the labels, largest unit first, and return the units that got only their number.

    Parameters
    ----------
    ax : Axes
        Map axes in km.
    polygons : sequence of shapely geometry (n,), km
        The units.
    texts : sequence of UnitText (n,)
        What may be written on each.
    km_per_pt : float
        Kilometres covered by one typographic point on the page.

    Returns
    -------
    list of UnitText
        Units labelled by number, in order of number: the caller prints the key.
    """
    taken: list[Any] = []
    numbered: list[UnitText] = []
    order = sorted(range(len(texts)), key=lambda i: -polygons[i].area)
    for i in order:
        polygon, text = polygons[i], texts[i]
        if polygon.is_empty:
            continue
        centre = _roomiest_point(polygon)
        lift = 0.0
        if text.letter:
            side = 1.3 * LETTER_PT * km_per_pt
            taken.append(
                shapely.box(
                    centre.x - side / 2, centre.y - side / 2, centre.x + side / 2, centre.y + side / 2
                )
            )
            _write(ax, centre.x, centre.y, text.letter, LETTER_PT, bold=True)
            lift = 0.9 * LETTER_PT * km_per_pt
        spots = _spots(polygon, centre, lift, km_per_pt)
        candidates = [text.name, *([text.code] if text.code and len(text.code) < len(text.name) else [])]
        if any(_place(ax, words, spots, polygon, taken, km_per_pt, share=0.8) for words in candidates):
            continue
        if _place(ax, str(text.number), spots, polygon, taken, km_per_pt, share=0.0):
            numbered.append(text)
    return sorted(numbered, key=lambda unit: unit.number)


def number_key(numbered: Sequence[UnitText]) -> str:
    """Print the key of the units that are labelled by number."""
    return "; ".join(f"{unit.number} {unit.name}" for unit in numbered)


def _roomiest_point(polygon: Any) -> Any:
    """Centre of the largest circle inside the polygon: where a label has most room."""
    largest = max(shapely.get_parts(polygon), key=lambda part: part.area)
    if largest.area <= 0.0:
        return largest.representative_point()
    return polylabel(largest, tolerance=0.02 * largest.area**0.5)


def _spots(polygon: Any, centre: Any, lift: float, km_per_pt: float) -> list[tuple[float, float]]:
    """Positions to try, nearest to the centre first; below the letter where there is one."""
    step = NAME_PT * km_per_pt
    x, y = centre.x, centre.y
    if lift:
        return [(x, y - lift), (x, y + lift), (x, y - lift - step), (x, y + lift + step)]
    return [(x, y), (x, y - step), (x, y + step), (x - step, y), (x + step, y)]


def _place(
    ax: Any,
    words: str,
    spots: Sequence[tuple[float, float]],
    polygon: Any,
    taken: list[Any],
    km_per_pt: float,
    *,
    share: float,
) -> bool:
    """Write words at the first spot with room, at least a share of their box inside the unit."""
    width = text_width_pt(words, NAME_PT) * km_per_pt
    height = 1.25 * NAME_PT * km_per_pt
    for x, y in spots:
        box = shapely.box(x - width / 2, y - height / 2, x + width / 2, y + height / 2)
        if any(box.intersects(other) for other in taken):
            continue
        if share and box.intersection(polygon).area < share * box.area:
            continue
        taken.append(box)
        _write(ax, x, y, words, NAME_PT)
        return True
    return False


def _write(ax: Any, x: float, y: float, words: str, size: float, *, bold: bool = False) -> None:
    ax.text(
        x,
        y,
        words,
        ha="center",
        va="center",
        fontsize=size,
        fontweight="bold" if bold else "normal",
        color=INK,
        parse_math=False,
        zorder=8,
        path_effects=[withStroke(linewidth=1.9, foreground=(1.0, 1.0, 1.0, 0.85))],
    )
