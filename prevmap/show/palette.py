"""Colours: sequential for prevalence and uncertainty, diverging for exceedance, Okabe-Ito for classes."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from matplotlib import colormaps
from matplotlib.colors import Colormap, LinearSegmentedColormap, Normalize

BLANK = "#DEDEDE"
LINE = "#3A3A3A"
INK = "#111111"

# Okabe & Ito (2008), told apart with any form of colour blindness.
ORANGE = "#E69F00"
SKY = "#56B4E9"
YELLOW = "#F0E442"
BLUE = "#0072B2"
VERMILLION = "#D55E00"

# Light is low and dark is high in all of them, so that a grey print keeps the order.
PREVALENCE: Colormap = colormaps["viridis_r"]
UNCERTAINTY: Colormap = LinearSegmentedColormap.from_list(
    "prevmap_uncertainty", [colormaps["BuPu"](0.12 + 0.88 * i / 63) for i in range(64)]
)
# Pale yellow at one half, so that "cannot tell" is not taken for the grey of "not mapped".
EXCEEDANCE: Colormap = colormaps["RdYlBu_r"]


@dataclass(frozen=True, slots=True)
class ClassStyle:
    """How one outcome of a decision is drawn: colour, letter and pattern, so that none stands alone."""

    label: str
    colour: str
    letter: str
    pattern: str = ""


def nice_ceiling(value: float) -> float:
    """Round up to 1, 1.2, 1.5, 2, 2.5, 3, 4, 5, 6, 7, 8, 9 or 10 times a power of ten.

    Examples
    --------
    >>> nice_ceiling(0.231), nice_ceiling(0.4), nice_ceiling(0.0)
    (0.25, 0.4, 1.0)
    """
    if not math.isfinite(value) or value <= 0.0:
        return 1.0
    power = 10.0 ** math.floor(math.log10(value))
    for step in (1.0, 1.2, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 7.0, 8.0, 9.0, 10.0):
        # One part in 10^9 absorbs the rounding of the division.
        if step * power >= value * (1.0 - 1e-9):
            return float(f"{step * power:.12g}")
    return 10.0 * power


def prevalence_norm(surface_max: float, sites_max: float = 0.0) -> Normalize:
    """Scale from zero that surface and site proportions share.

    A few small sites with extreme proportions may lie above the end of the scale: it stretches to at most
    1.15 times the modelled maximum for them, and the colour bar then ends in an arrow.
    """
    top = surface_max if surface_max > 0 else sites_max
    stretched = max(top, min(sites_max, 1.15 * top))
    return Normalize(0.0, min(1.0, nice_ceiling(stretched)))


def decision_styles(outcomes: Sequence[str]) -> dict[str, ClassStyle]:
    """Give every outcome a colour, a letter and a pattern; outcomes run from high to low, undecided last."""
    undecided = ClassStyle("undecided", "#FFFFFF", "?", "lines")
    decided = list(outcomes[:-1])
    if decided == ["above", "below"]:
        return {
            "above": ClassStyle("above", VERMILLION, "A"),
            "below": ClassStyle("below", SKY, "B", "dots"),
            "undecided": undecided,
        }
    # From dark to light, high to low: the order survives a grey print, the numeral names the class.
    ramp = ["#7A3000", VERMILLION, ORANGE, YELLOW]
    numerals = ["I", "II", "III", "IV", "V", "VI", "VII", "VIII", "IX", "X"]
    styles: dict[str, ClassStyle] = {}
    for i, outcome in enumerate(decided):
        rank = len(decided) - 1 - i
        if rank == 0:
            colour = SKY
        else:
            place = 0.0 if len(decided) <= 2 else i / (len(decided) - 2) * (len(ramp) - 1)
            place = min(place, len(ramp) - 1.0)
            blend = LinearSegmentedColormap.from_list("prevmap_classes", ramp)
            colour = _hex(blend(place / (len(ramp) - 1)))
        numeral = numerals[rank] if rank < len(numerals) else str(rank + 1)
        styles[outcome] = ClassStyle(outcome, colour, numeral, "dots" if rank == 0 else "")
    styles[outcomes[-1]] = undecided
    return styles


def _hex(rgba: Sequence[float]) -> str:
    return "#" + "".join(f"{round(255 * channel):02X}" for channel in rgba[:3])
