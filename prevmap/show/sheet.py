"""The sheet a map is drawn on: extent in km, head, colour bar, legend, notes, scale bar."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.transforms import ScaledTranslation

from prevmap.show.canvas import new_figure, plain_text
from prevmap.show.outline import Bounds
from prevmap.show.palette import INK
from prevmap.show.scale_bar import draw_scale_bar
from prevmap.show.wording import wrapped

# Sizes in inches: a phone shows one sheet 360 CSS pixels wide, so that 9.3 pt text is 11 pixels high there.
SHEET_WIDTH = 4.2
_MAP_WIDTH = 3.12
_MAP_HEIGHT = 4.0
_LEFT = 0.1
STRIP_IN = 0.42
_TITLE_PT = 11.0
_SUBTITLE_PT = 9.3
_NOTE_PT = 9.3
_LEADING = 1.32


@dataclass(frozen=True, slots=True)
class MapSheet:
    """One map's axes and the room that head and foot need.

    Attributes
    ----------
    ax : Axes
        Axes in km of the working CRS, equal aspect.
    bounds : tuple of float
        West, south, east, north of the mapped area, km.
    box_in : tuple of float
        Width and height of the axes, inches; the lowest strip holds the scale bar.
    km_per_pt : float
        Kilometres covered by one typographic point.
    own : bool
        Whether the figure belongs to the package and may be resized.
    head_in, foot_in : float
        Inches taken above and below the axes.
    """

    ax: Any
    bounds: Bounds
    box_in: tuple[float, float]
    km_per_pt: float
    own: bool
    head_in: float = 0.0
    foot_in: float = 0.0


def open_sheet(bounds: Bounds, ax: Any = None, figure: Any = None) -> MapSheet:
    """Prepare axes for an area given in km; in a new figure unless axes or a figure of ours is given."""
    west, south, east, north = _roomy(bounds)
    km_per_inch = max((east - west) / _MAP_WIDTH, (north - south) / _MAP_HEIGHT)
    own = ax is None
    if own:
        figure = new_figure(SHEET_WIDTH, 6.0) if figure is None else figure
        ax = figure.add_axes((0.02, 0.2, 0.8, 0.7))
    else:
        ax.apply_aspect()
        window = ax.get_window_extent()
        dpi = ax.figure.dpi
        wide, high = max(window.width / dpi, 0.5), max(window.height / dpi - STRIP_IN, 0.5)
        km_per_inch = max((east - west) / wide, (north - south) / high)
    strip_km = STRIP_IN * km_per_inch
    ax.set_xlim(west, east)
    ax.set_ylim(south - strip_km, north)
    ax.set_aspect("equal", adjustable="box")
    ax.set_xticks([])
    ax.set_yticks([])
    for side in ax.spines.values():
        side.set_visible(False)
    box = ((east - west) / km_per_inch, (north - south) / km_per_inch + STRIP_IN)
    unit = km_per_inch / 72.0
    draw_scale_bar(ax, west + 10 * unit, south - strip_km + 3 * unit, east - west, 4 * unit)
    return MapSheet(ax, (west, south, east, north), box, unit, own)


def close_sheet(
    sheet: MapSheet,
    *,
    title: str,
    subtitle: str,
    handles: Sequence[Any] = (),
    notes: Sequence[str] = (),
) -> MapSheet:
    """Write head, legend and notes; arrange the figure where it is ours and holds this sheet only."""
    ax = sheet.ax
    width = SHEET_WIDTH - 2 * _LEFT if sheet.own else sheet.box_in[0]
    below = wrapped(subtitle, width, _SUBTITLE_PT) if subtitle else []
    # Two lines at least, so that the heads of neighbouring sheets stand level.
    below += [" "] * (2 - len(below)) if sheet.own else []
    above = wrapped(title, width, 1.08 * _TITLE_PT)
    offset = 5.0
    if below:
        _text(ax, 1.0, offset, "\n".join(below), _SUBTITLE_PT, va="bottom", color="#333333")
        offset += _LEADING * _SUBTITLE_PT * len(below) + 3.0
    _text(ax, 1.0, offset, "\n".join(above), _TITLE_PT, va="bottom", weight="bold")
    head = offset + _LEADING * _TITLE_PT * len(above) + 4.0

    depth = 5.0
    if handles:
        longest = max(len(handle.get_label()) for handle in handles)
        columns = max(1, min(len(handles), int(width * 72.0 / (32.0 + 0.55 * _NOTE_PT * longest))))
        shift = ScaledTranslation(0.0, -depth / 72.0, ax.figure.dpi_scale_trans)
        ax.legend(
            handles=list(handles),
            loc="upper left",
            bbox_to_anchor=(0.0, 0.0),
            bbox_transform=ax.transAxes + shift,
            ncols=columns,
            frameon=False,
            borderpad=0.0,
            borderaxespad=0.0,
            labelspacing=0.45,
            columnspacing=1.2,
            handlelength=2.2,
            fontsize=_NOTE_PT,
        )
        depth += 1.62 * _NOTE_PT * -(-len(handles) // columns) + 2.0
    lines = [line for note in notes for line in wrapped(note, width, _NOTE_PT)]
    if lines:
        _text(ax, 0.0, -depth, "\n".join(lines), _NOTE_PT, va="top", color="#333333")
        depth += _LEADING * _NOTE_PT * len(lines)
    done = replace(sheet, head_in=head / 72.0, foot_in=(depth + 5.0) / 72.0)
    plain_text(ax.figure)
    return done


def arrange_sheets(figure: Any, sheets: Sequence[MapSheet], columns: int) -> None:
    """Size a figure of ours so that its sheets stand in columns with nothing cut off."""
    rows = [sheets[i : i + columns] for i in range(0, len(sheets), columns)]
    heights = [
        (_largest(row, "head_in"), max(s.box_in[1] for s in row), _largest(row, "foot_in")) for row in rows
    ]
    total = sum(sum(parts) for parts in heights)
    wide = SHEET_WIDTH * min(columns, len(sheets))
    figure.set_size_inches(wide, total)
    top = total
    for row, (head, box, foot) in zip(rows, heights, strict=True):
        for place, sheet in enumerate(row):
            left = _LEFT + place * SHEET_WIDTH
            bottom = top - head - sheet.box_in[1]
            sheet.ax.set_position(
                (left / wide, bottom / total, sheet.box_in[0] / wide, sheet.box_in[1] / total)
            )
        top -= head + box + foot


def swatch(label: str, colour: str, *, pattern: str = "", edge: str = "#555555") -> Patch:
    """Legend entry of a filled area; the pattern is ``""``, ``"lines"`` or ``"dots"``."""
    marks = {"": "", "lines": "//////", "dots": "...."}[pattern]
    return Patch(facecolor=colour, edgecolor=edge, linewidth=0.5, hatch=marks, label=label)


def line_entry(label: str, style: str, *, width: float = 1.1, colour: str = INK) -> Line2D:
    """Legend entry of a line drawn on the map."""
    return Line2D([], [], color=colour, linewidth=width, linestyle=style, label=label)


def site_entry(label: str, size: float = 5.0) -> Line2D:
    """Legend entry of a surveyed site."""
    return Line2D(
        [],
        [],
        color="none",
        marker="o",
        markersize=size,
        markerfacecolor="#BBBBBB",
        markeredgecolor=INK,
        markeredgewidth=0.6,
        label=label,
    )


def _text(ax: Any, anchor: float, offset_pt: float, words: str, size: float, **style: Any) -> None:
    ax.annotate(
        words,
        xy=(0.0, anchor),
        xycoords="axes fraction",
        xytext=(0.0, offset_pt),
        textcoords="offset points",
        ha="left",
        fontsize=size,
        linespacing=_LEADING / 1.1,
        annotation_clip=False,
        **style,
    )


def _roomy(bounds: Bounds) -> Bounds:
    """Add a small margin and keep the shape between 2.4 : 1 and 1 : 2.4."""
    west, south, east, north = bounds
    width, height = max(east - west, 1e-3), max(north - south, 1e-3)
    width, height = max(width, height / 2.4) * 1.03, max(height, width / 2.4) * 1.03
    x, y = (west + east) / 2.0, (south + north) / 2.0
    return (x - width / 2.0, y - height / 2.0, x + width / 2.0, y + height / 2.0)


def _largest(row: Sequence[MapSheet], name: str) -> float:
    return float(max(getattr(sheet, name) for sheet in row))
