"""Figures without global state, and their bytes without dates."""

from __future__ import annotations

import io
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.text import Text

# Everything that a user's own matplotlib settings could change in a figure of the report.
_STYLE: dict[str, Any] = {
    "axes.edgecolor": "#333333",
    "axes.facecolor": "white",
    "axes.grid": False,
    "axes.labelcolor": "#222222",
    "axes.labelsize": 9.3,
    "axes.linewidth": 0.7,
    "axes.titlesize": 11,
    "figure.facecolor": "white",
    "font.family": ["DejaVu Sans"],
    "font.size": 9.3,
    "hatch.linewidth": 0.7,
    "lines.linewidth": 1.2,
    "path.simplify": True,
    "savefig.bbox": None,
    "savefig.facecolor": "white",
    "svg.fonttype": "path",
    "svg.hashsalt": "prevmap",
    "text.color": "#111111",
    "text.usetex": False,
    "xtick.color": "#222222",
    "xtick.labelsize": 9.3,
    "ytick.color": "#222222",
    "ytick.labelsize": 9.3,
}

_NO_DATE: dict[str, dict[str, Any]] = {
    "png": {"Software": None},
    "svg": {"Date": None},
    "pdf": {"CreationDate": None, "ModDate": None},
}


class Sheet(Figure):
    """A figure that shows itself in a notebook, whether or not pyplot was imported."""

    def _repr_png_(self) -> bytes:
        return figure_bytes(self, "png")


@contextmanager
def house_style() -> Iterator[None]:
    """Draw with the package's own settings, whatever the user's matplotlib settings are."""
    with mpl.rc_context(_STYLE):
        yield


def new_figure(width_in: float, height_in: float) -> Sheet:
    """Make an empty figure of a size in inches, unknown to pyplot."""
    figure = Sheet(figsize=(width_in, height_in), facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def plain_text(figure: Figure) -> None:
    """Take every text of the figure literally: a dollar sign in a name is not mathematics."""
    for text in figure.findobj(Text):
        text.set_parse_math(False)


def figure_bytes(figure: Figure, kind: str = "png", *, dpi: float = 180) -> bytes:
    """Render a figure to bytes that depend on its content only.

    Parameters
    ----------
    figure : Figure
        Any matplotlib figure.
    kind : str
        ``"png"``, ``"svg"`` or ``"pdf"``.
    dpi : float
        Dots per inch of a PNG.

    Returns
    -------
    bytes
    """
    out = io.BytesIO()
    with house_style(), warnings.catch_warnings():
        # A name in a script that the font lacks is drawn as boxes; the tables carry it in full.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        figure.savefig(out, format=kind, dpi=dpi, metadata=_NO_DATE[kind])
    return out.getvalue()


def save_figure(figure: Figure, path: str | Path, *, dpi: float = 180) -> Path:
    """Write a figure as PNG, SVG or PDF, by the suffix of the path; same figure, same bytes."""
    target = Path(path)
    target.write_bytes(figure_bytes(figure, target.suffix.lstrip(".").lower(), dpi=dpi))
    return target
