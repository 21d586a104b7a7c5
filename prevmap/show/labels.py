"""Unit labels that do not collide: the name where it fits, else a short sign with a key."""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import shapely
from matplotlib.patheffects import withStroke
from shapely.ops import polylabel

from prevmap.show.outline import in_km
from prevmap.show.palette import INK
from prevmap.show.sheet import MapSheet

NAME_PT = 8.8
LETTER_PT = 11.0


@dataclass(frozen=True, slots=True)
class UnitText:
    """What may be written on a unit: its name, a short sign (code or number), a class letter."""

    name: str
    short: str
    letter: str = ""


def short_signs(frame: Any) -> list[str]:
    """Give each unit a short sign: its code where all have codes of up to four letters, else its number."""
    codes = list(frame["code"]) if "code" in frame else []
    short = [code for code in codes if isinstance(code, str) and 0 < len(code) <= 4]
    return short if codes and len(short) == len(codes) else [str(i + 1) for i in range(len(frame))]


def text_width_pt(text: str, size_pt: float) -> float:
    """Estimate the width of a text in points, generous enough for capitals and wide scripts."""
    ems = sum(1.0 if unicodedata.east_asian_width(letter) in "WF" else 0.62 for letter in text)
    return ems * size_pt


def label_units(
    ax: Any, polygons: Sequence[Any], texts: Sequence[UnitText], km_per_pt: float
) -> list[UnitText]:
    """Write the labels, largest unit first, and return the units that got only their short sign.

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
        Units labelled by their short sign, in the order given: the caller prints the key.
    """
    taken: list[Any] = []
    order = sorted(
        (i for i in range(len(texts)) if not polygons[i].is_empty), key=lambda i: -polygons[i].area
    )
    centres = {i: _roomiest_point(polygons[i]) for i in order}
    # Letters tell the decision, so they get their room before any name.
    for i in order:
        if texts[i].letter:
            spot = (centres[i].x, centres[i].y + 0.45 * LETTER_PT * km_per_pt)
            _place(
                ax,
                texts[i].letter,
                [spot],
                polygons[i],
                taken,
                km_per_pt,
                share=0.0,
                size=LETTER_PT,
                bold=True,
            )
    shortened = []
    for i in order:
        text, polygon = texts[i], polygons[i]
        spots = _spots(centres[i], text.letter, km_per_pt, text.name)
        if _place(ax, text.name, spots[:3], polygon, taken, km_per_pt, share=0.8):
            continue
        spots = _spots(centres[i], text.letter, km_per_pt, text.short)
        if _place(ax, text.short, spots, polygon, taken, km_per_pt, share=0.5):
            shortened.append(i)
    return [texts[i] for i in sorted(shortened)]


def write_labels(
    sheet: MapSheet, region: Any, shapes: Sequence[Any], letters: Sequence[str] = ()
) -> list[str]:
    """Label the units of a map and return the key of short labels as a note; nothing without units.

    Parameters
    ----------
    sheet : MapSheet
        The map.
    region : Region
        Its units bring names and codes; labels keep to the land that is not excluded.
    shapes : sequence of shapely geometry (n,), km
        The units as drawn.
    letters : sequence of str (n,), optional
        Class letters to write with the names.

    Returns
    -------
    list of str
        One sentence, or none where no label had to be shortened.
    """
    if not len(shapes):
        return []
    frame = region.units
    given = letters or [""] * len(shapes)
    texts = [
        UnitText(str(name), sign, letter)
        for name, sign, letter in zip(frame["unit"], short_signs(frame), given, strict=True)
    ]
    land = shapes if region.exclude is None else [g.difference(in_km(region.exclude)) for g in shapes]
    key = label_key(label_units(sheet.ax, land, texts, sheet.km_per_pt))
    return [f"Short labels: {key}."] if key else []


def label_key(shortened: Sequence[UnitText]) -> str:
    """Print the key of the units that are labelled by their short sign."""
    return "; ".join(f"{unit.short}\u00a0{unit.name}" for unit in shortened)


def _roomiest_point(polygon: Any) -> Any:
    """Centre of the largest circle inside the polygon: where a label has most room."""
    largest = max(shapely.get_parts(polygon), key=lambda part: part.area)
    if largest.area <= 0.0:
        return largest.representative_point()
    return polylabel(largest, tolerance=0.02 * largest.area**0.5)


def _spots(centre: Any, letter: str, km_per_pt: float, words: str) -> list[tuple[float, float]]:
    """Positions to try, best first: under the letter where there is one, else about the centre."""
    step = NAME_PT * km_per_pt
    x, y = centre.x, centre.y
    if letter:
        below, line = y - 0.84 * step, y + 0.45 * LETTER_PT * km_per_pt
        aside = (0.5 * LETTER_PT + 0.4 * NAME_PT + 0.31 * NAME_PT * len(words)) * km_per_pt
        above = y + 0.9 * LETTER_PT * km_per_pt + 0.84 * step
        return [
            (x, below),
            (x - step, below),
            (x + step, below),
            (x + aside, line),
            (x - aside, line),
            (x, above),
        ]
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
    size: float = NAME_PT,
    bold: bool = False,
) -> bool:
    """Write words at the first spot with room, at least a share of their box inside the unit."""
    width = text_width_pt(words, size) * km_per_pt
    height = 1.15 * size * km_per_pt
    for x, y in spots:
        box = shapely.box(x - width / 2, y - height / 2, x + width / 2, y + height / 2)
        if any(box.intersects(other) for other in taken):
            continue
        if share and box.intersection(polygon).area < share * box.area:
            continue
        taken.append(box)
        _write(ax, x, y, words, size, bold=bold)
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
