"""Population: a raster of people, summed over polygons without interpolation."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from scipy.interpolate import RegularGridInterpolator

from prevmap.errors import InputError
from prevmap.inputs.coverage import areal, raster_sums
from prevmap.inputs.findings import Finding, findings_frame
from prevmap.inputs.raster import Raster, open_raster

Floats = NDArray[np.float64]

PIXELS_AT_ONCE = 4_000_000  # 32 MB of float64; larger blocks are halved first
LATTICE = 9  # points along each side of a block where the areal scale is taken


@dataclass(frozen=True, slots=True, eq=False)
class Population:
    """People per pixel or per square kilometre, from a raster.

    Attributes
    ----------
    path : Path
    kind : {"counts", "density"}
        People per pixel, or people per square kilometre.
    ages : (int, int) or None
        Lowest and highest age in years counted, both included.
    year : int or None
        Year the numbers refer to.
    unit_total : dict of str to float, or None
        Official number of people by unit.
    findings : DataFrame
    raster : Raster
    """

    path: Path
    kind: Literal["counts", "density"]
    ages: tuple[int, int] | None
    year: int | None
    unit_total: dict[str, float] | None
    findings: pd.DataFrame
    raster: Raster = field(repr=False)

    def people_in(self, shapes: NDArray[Any]) -> tuple[Floats, Floats]:
        """Return the people inside each polygon, pixels counted by their covered share.

        Parameters
        ----------
        shapes : (k,) array of polygons
            In the raster's coordinates.

        Returns
        -------
        people : (k,) float
        pixels : (k,) float
            Number of pixels with a value, by covered share.

        Raises
        ------
        InputError
            If a pixel under a polygon is negative or not finite.
        """
        people, pixels = np.zeros(len(shapes)), np.zeros(len(shapes))
        with self.raster.opened() as source:
            self._add(people, pixels, np.arange(len(shapes)), np.asarray(shapes, dtype=object), source)
        return people, pixels

    def _add(self, people: Floats, pixels: Floats, which: Any, shapes: NDArray[Any], source: Any) -> None:
        filled = ~shapely.is_empty(shapes)
        which, shapes = which[filled], shapes[filled]
        if not len(which):
            return
        limits = shapely.bounds(shapes)
        low, high = limits[:, :2].min(axis=0), limits[:, 2:].max(axis=0)
        row, col, rows, cols = self.raster.block((low[0], low[1], high[0], high[1]))
        if rows * cols == 0:
            return
        if rows * cols > PIXELS_AT_ONCE and rows + cols > 2:
            across = (
                cols * self.raster.width >= rows * self.raster.height if min(rows, cols) > 1 else cols > 1
            )
            for half in _halves(limits, shapes, low, high, 0 if across else 1):
                self._add(people, pixels, which[half[0]], half[1], source)
            return
        values = self._counts(row, col, rows, cols, source)
        sums, touched = raster_sums(shapes, values, self.raster.edges(row, col, rows, cols))
        people[which] += sums
        pixels[which] += touched

    def _counts(self, row: int, col: int, rows: int, cols: int, source: Any) -> Floats:
        values = self.raster.read(row, col, rows, cols, source)
        wrong = (values < 0.0) | np.isinf(values)
        if wrong.any():
            place, many = tuple(np.argwhere(wrong)[0]), int(wrong.sum())
            left, _, _, top = self.raster.edges(row + int(place[0]), col + int(place[1]), 1, 1)
            raise InputError(
                f"{self.path}: {many} pixels near the region hold no possible number of people, "
                f"for example {values[place]:g} at x {left:.6g}, y {top:.6g}. Expected: 0 or more; if this value "
                "means 'no data', declare it as the raster's nodata value."
            )
        if self.kind == "density":
            values *= pixel_area_km2(self.raster, row, col, rows, cols)
        return values


def read_population(
    path: str | Path,
    *,
    kind: Literal["counts", "density"] = "counts",
    ages: tuple[int, int] | None = None,
    year: int | None = None,
    unit_total: Mapping[str, float] | None = None,
) -> Population:
    """Read a population raster.

    Parameters
    ----------
    path : str or Path
        GeoTIFF with one band.
    kind : {"counts", "density"}
        People per pixel, or people per square kilometre.
    ages : (int, int), optional
        Lowest and highest age counted. Numbers of infected people are given only where these are the
        survey's ages.
    year : int, optional
        Year the numbers refer to.
    unit_total : mapping of unit name to people, optional
        Official totals: people are rescaled within each unit named.

    Returns
    -------
    Population

    Raises
    ------
    InputError
        If the raster or an argument cannot be used.
    """
    if kind not in ("counts", "density"):
        raise InputError(f"kind={kind!r}: 'counts' (people per pixel) or 'density' (per km²) is expected.")
    raster = open_raster(path)
    findings = []
    if raster.bands > 1:
        what = f"{raster.path.name} has {raster.bands} bands"
        findings.append(Finding(None, None, "population", "warning", what, "only the first band is used"))
    if ages is None:
        action = "numbers of infected people are not computed: they need the survey's own ages"
        findings.append(
            Finding(None, None, "population", "note", "ages of the population not stated", action)
        )
    if year is not None and (isinstance(year, bool) or not 1800 <= year <= 2200):
        raise InputError(f"year={year!r}: a calendar year such as 2026 is expected.")
    totals = None if unit_total is None else _checked_totals(unit_total)
    return Population(raster.path, kind, _checked_ages(ages), year, totals, findings_frame(findings), raster)


def pixel_area_km2(raster: Raster, row: int, col: int, rows: int, cols: int) -> Floats:
    """Return the area of pixels on the ellipsoid, in km², as an array that broadcasts over (rows, cols).

    Notes
    -----
    Geographic rasters: the area between two parallels and two meridians (Snyder 1987, eq. 3-12, the
    authalic q). Projected rasters: the flat area divided by the areal scale, taken from geodesic squares on a
    lattice over the block and interpolated.
    """
    left, bottom, right, top = raster.edges(row, col, rows, cols)
    crs = raster.crs
    if crs.is_geographic:
        edges = np.clip(top - raster.height * np.arange(rows + 1), -90.0, 90.0)
        degree = float(crs.axis_info[0].unit_conversion_factor)
        zone = _zone_area_km2(edges * degree, crs)
        return ((zone[:-1] - zone[1:]) * raster.width * degree)[:, None]
    metre = float(crs.axis_info[0].unit_conversion_factor)
    flat = raster.width * raster.height * metre**2 / 1e6
    x, y = np.linspace(left, right, LATTICE), np.linspace(bottom, top, LATTICE)
    across, up = (each.ravel() for each in np.meshgrid(x, y))
    scale = _areal_scale(across, up, 0.5 * max(raster.width, raster.height, 1000.0 / metre), crs)
    if not np.isfinite(scale).all():
        raise InputError(f"{raster.path}: parts of the raster lie where {crs.name!r} has no area.")
    centres_x = left + raster.width * (np.arange(cols) + 0.5)
    centres_y = top - raster.height * (np.arange(rows) + 0.5)
    smooth = RegularGridInterpolator((y, x), scale.reshape(LATTICE, LATTICE), method="linear")
    mesh = np.meshgrid(centres_y, centres_x, indexing="ij")
    return flat / np.asarray(smooth((mesh[0], mesh[1])), dtype=float)


def _areal_scale(x: Floats, y: Floats, half: float, crs: CRS) -> Floats:
    """Return flat over geodesic area of squares with centres (k,) `x`, `y` and sides of twice `half`."""
    metre = float(crs.axis_info[0].unit_conversion_factor)
    geod = crs.get_geod()
    if geod is None:
        raise InputError(f"{crs.name!r} has no ellipsoid, so that areas cannot be computed.")
    corners_x = x[:, None] + half * np.array([-1.0, 1.0, 1.0, -1.0])
    corners_y = y[:, None] + half * np.array([-1.0, -1.0, 1.0, 1.0])
    lon, lat = Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(corners_x, corners_y)
    areas = [abs(geod.polygon_area_perimeter(*each)[0]) for each in zip(lon, lat, strict=True)]
    with np.errstate(divide="ignore"):
        return (2.0 * half * metre) ** 2 / np.asarray(areas, dtype=float)


def _zone_area_km2(latitude: Floats, crs: CRS) -> Floats:
    """Return the area, per radian of longitude, between the equator and latitudes in radians."""
    ellipsoid = crs.ellipsoid
    if ellipsoid is None:
        raise InputError(f"{crs.name!r} has no ellipsoid, so that areas cannot be computed.")
    major = ellipsoid.semi_major_metre / 1000.0
    flattening = 0.0 if not ellipsoid.inverse_flattening else 1.0 / ellipsoid.inverse_flattening
    squared = flattening * (2.0 - flattening)
    sine = np.sin(latitude)
    if squared == 0.0:
        return major**2 * sine
    e = np.sqrt(squared)
    q = (1.0 - squared) * (sine / (1.0 - squared * sine**2) + np.arctanh(e * sine) / e)
    return 0.5 * major**2 * q


def _halves(
    limits: Floats, shapes: NDArray[Any], low: Floats, high: Floats, axis: int
) -> list[tuple[Any, Any]]:
    """Return two lists of (places, shapes), whole shapes where several, parts of it where there is one."""
    if len(shapes) > 1:
        order = np.argsort(limits[:, axis] + limits[:, axis + 2], kind="stable")
        middle = len(order) // 2
        return [(order[:middle], shapes[order[:middle]]), (order[middle:], shapes[order[middle:]])]
    middle = 0.5 * (low[axis] + high[axis])
    first, second = high.copy(), low.copy()
    first[axis] = second[axis] = middle
    boxes = (shapely.box(*low, *first), shapely.box(*second, *high))
    parts = [areal(shapely.intersection(shapes[0], box)) for box in boxes]
    return [(np.zeros(1, dtype=np.int64), np.asarray([part], dtype=object)) for part in parts]


def _checked_ages(ages: tuple[int, int] | None) -> tuple[int, int] | None:
    if ages is None:
        return None
    try:
        low, high = (int(age) for age in ages)
        right = [float(age) for age in ages] == [low, high] and 0 <= low <= high
    except (TypeError, ValueError):
        right = False
    if not right:
        raise InputError(
            f"ages={ages!r}: the lowest and highest age in whole years are expected, e.g. (5, 14)."
        )
    return low, high


def _checked_totals(unit_total: Mapping[str, float]) -> dict[str, float]:
    totals = {}
    for unit, people in unit_total.items():
        try:
            number = float(people)
        except (TypeError, ValueError):
            number = np.nan
        if not (np.isfinite(number) and number >= 0.0):
            raise InputError(
                f"unit_total: {people!r} people for unit {unit!r}; a number of 0 or more is expected."
            )
        totals[str(unit).strip()] = number
    return totals
