"""Colour bars: every one labelled with what it shows and its unit."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.ticker import FixedLocator, FuncFormatter

from prevmap.show.palette import INK
from prevmap.show.sheet import STRIP_IN, MapSheet
from prevmap.show.wording import NARROW_SPACE, threshold_text

_GAP_IN = 0.1
_WIDTH_IN = 0.15


def colour_bar(
    sheet: MapSheet,
    mappable: Any,
    label: str,
    *,
    show_tick: Callable[[float], str],
    ticks: Sequence[float] | None = None,
    marks: Sequence[float] = (),
    extend: str = "neither",
) -> Any:
    """Draw a labelled colour bar beside the map, as high as the mapped area."""
    width, height = sheet.box_in
    foot = STRIP_IN / height
    cax = sheet.ax.inset_axes((1.0 + _GAP_IN / width, foot, _WIDTH_IN / width, 1.0 - foot))
    bar = sheet.ax.figure.colorbar(mappable, cax=cax, extend=extend)
    bar.set_label(label, fontsize=9.3, labelpad=3.0)
    if ticks is not None:
        cax.yaxis.set_major_locator(FixedLocator(list(ticks)))
    cax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: show_tick(value)))
    cax.tick_params(labelsize=9.3, length=2.5, pad=2.0)
    cax.minorticks_off()
    for mark in marks:
        cax.axhline(mark, color=INK, linewidth=1.4)
    return bar


def prevalence_bar(sheet: MapSheet, mappable: Any, label: str, proportions: Any = ()) -> Any:
    """Colour bar of prevalence; it ends in an arrow where proportions drawn with it lie above the scale."""
    over = bool(len(proportions)) and float(np.max(proportions)) > mappable.norm.vmax * (1.0 + 1e-9)

    def show_tick(share: float) -> str:
        return f"{100.0 * share:.4g}{NARROW_SPACE}%"

    return colour_bar(sheet, mappable, label, show_tick=show_tick, extend="max" if over else "neither")


def uncertainty_bar(sheet: MapSheet, mappable: Any) -> Any:
    """Colour bar of the width of the 95 % interval, in percentage points."""
    label = "width, percentage points"
    return colour_bar(sheet, mappable, label, show_tick=lambda width: f"{100.0 * width:.4g}")


def exceedance_bar(sheet: MapSheet, mappable: Any, threshold: float, levels: Mapping[str, float]) -> Any:
    """Colour bar of an exceedance probability with one half and the certainty cut-offs marked."""
    cuts = [1.0 - levels["below"], levels["above"]]
    # Other ticks very near a cut-off would print over its label.
    others = [t for t in (0.0, 0.5, 1.0) if min(abs(t - cut) for cut in cuts) > 0.03]
    return colour_bar(
        sheet,
        mappable,
        f"P(prevalence > {threshold_text(threshold)})",
        show_tick=lambda p: f"{100.0 * p:.4g}{NARROW_SPACE}%",
        ticks=sorted({*others, *cuts}),
        marks=cuts,
    )
