"""A scale bar in km."""

from __future__ import annotations

from typing import Any

from matplotlib.patches import Rectangle

from prevmap.show.palette import INK


def bar_length_km(width_km: float) -> float:
    """Choose a round length (1, 2 or 5 times a power of ten) of at most 0.3 of the map's width.

    Examples
    --------
    >>> bar_length_km(190.0), bar_length_km(7.0), bar_length_km(1.0)
    (50.0, 2.0, 0.2)
    """
    target = 0.3 * width_km
    power = 1e-6
    length = power
    while power <= target:
        for step in (1.0, 2.0, 5.0):
            if step * power <= target:
                length = step * power
        power *= 10.0
    return float(f"{length:.6g}")


def draw_scale_bar(ax: Any, left_km: float, bottom_km: float, width_km: float, height_km: float) -> float:
    """Draw the bar with its lower left corner at a position in km; return its length in km."""
    length = bar_length_km(width_km)
    half = length / 2.0
    ax.add_patch(
        Rectangle((left_km, bottom_km), half, height_km, facecolor=INK, edgecolor=INK, linewidth=0.6)
    )
    ax.add_patch(
        Rectangle(
            (left_km + half, bottom_km), half, height_km, facecolor="white", edgecolor=INK, linewidth=0.6
        )
    )
    above = bottom_km + 1.5 * height_km
    ticks = [(0.0, "0"), (length, f"{length:g} km")]
    # The bar is four points high; its middle is labelled where the numbers stand clear of each other.
    if half > 7.0 * height_km:
        ticks.insert(1, (half, f"{half:g}"))
    for offset, text in ticks:
        ax.text(left_km + offset, above, text, ha="center", va="bottom", fontsize=9.0)
    return length
