"""What may be passed on: a fit whose sites and findings tell no exact position."""

from __future__ import annotations

import re
from dataclasses import replace
from typing import TYPE_CHECKING

import geopandas
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from prevmap.model.fit import Fit

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult

_SQUARES_ACROSS = 100  # of the study area's longer side; a square is never smaller than a cell
_GOLDEN_ANGLE = np.pi * (3.0 - np.sqrt(5.0))
_POSITION_FIELDS = ("position", "lon", "lat", "x", "y", "geometry")
_QUOTED = re.compile(r"'[^']*\d[^']*'")
_PAIR = re.compile(r"\(-?\d+(?:\.\d+)?,? -?\d+(?:\.\d+)?\)")
# A number with decimals or four figures; not a distance.
_NUMBER = re.compile(r"-?\b(?:\d+\.\d+(?:e[+-]?\d+)?|\d{4,})\b(?! km| m\b| %)")


def shared_square_m(result: StudyResult) -> float:
    """Return the edge in metres of the squares whose middles stand for exact site positions."""
    west, south, east, north = result.region.boundary.bounds
    return max(result.grid.cell_m, (east - west) / _SQUARES_ACROSS, (north - south) / _SQUARES_ACROSS)


def coarse_positions(xy_m: NDArray[np.float64], square_m: float) -> NDArray[np.float64]:
    """Move points to the middle of the square they lie in; points of one square spread round its middle.

    Parameters
    ----------
    xy_m : (n, 2) float
    square_m : float

    Returns
    -------
    (n, 2) float
        A function of each point's square and its rank among the points there, not of where in it the
        point lies.
    """
    square = np.floor(xy_m / square_m)
    _, which = np.unique(square, axis=0, return_inverse=True)
    rank = np.zeros(len(xy_m))
    seen: dict[int, int] = {}
    for place, key in enumerate(which.ravel()):
        rank[place] = seen.get(int(key), 0)
        seen[int(key)] = int(rank[place]) + 1
    reach = np.minimum(0.14 * np.sqrt(rank), 0.45) * square_m
    turn = rank * _GOLDEN_ANGLE
    offset = np.column_stack([reach * np.cos(turn), reach * np.sin(turn)])
    return (square + 0.5) * square_m + offset


def shareable_fit(result: StudyResult) -> Fit:
    """Return the fit with its sites moved off their positions and the positions in its findings withheld."""
    sites = result.fit.sites
    xy = np.column_stack([sites.geometry.x, sites.geometry.y])
    moved = coarse_positions(xy, shared_square_m(result))
    points = geopandas.points_from_xy(moved[:, 0], moved[:, 1], crs=sites.crs)
    return replace(
        result.fit, sites=sites.set_geometry(points), findings=without_positions(result.fit.findings)
    )


def without_positions(findings: pd.DataFrame) -> pd.DataFrame:
    """Replace coordinates in the texts of findings by three dots; distances in km stay."""
    findings = findings.copy()
    about_position = findings["field"].isin(_POSITION_FIELDS)
    for column in ("what", "action"):
        texts = findings[column].astype(str)
        told = about_position | texts.str.contains(_PAIR)
        findings[column] = texts.where(~told, texts.map(_withheld))
    return findings


def _withheld(text: str) -> str:
    return _NUMBER.sub("…", _QUOTED.sub("'…'", text))
