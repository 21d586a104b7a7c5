"""Covariates: what may explain prevalence, as values at points."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import KW_ONLY, dataclass
from pathlib import Path
from typing import Any, Literal

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer

from prevmap.errors import InputError
from prevmap.inputs.features import nearest_km
from prevmap.inputs.findings import Finding
from prevmap.inputs.layer import column, label_text
from prevmap.inputs.raster import Raster, describe_bounds, open_raster, sample
from prevmap.inputs.sentinel import find_sentinels
from prevmap.inputs.working_crs import choose_working_crs

Floats = NDArray[np.float64]
Transform = Literal["log", "log1p", "sqrt", "square"]

# Each with the values it accepts; outside them there is no value.
TRANSFORMS: dict[str, tuple[Callable[[Floats], Floats], float, bool, str]] = {
    "log": (np.log, 0.0, False, "above 0"),
    "log1p": (np.log1p, -1.0, False, "above -1"),
    "sqrt": (np.sqrt, 0.0, True, "0 or more"),
    "square": (np.square, -np.inf, True, "any number"),
}


@dataclass(frozen=True, slots=True)
class RasterCovariate:
    """A covariate read from a raster at the points.

    Bilinear between the four nearest pixel centres where all four have a value, else the value of the pixel
    the point lies in, else missing. A scale and offset stored in the file are applied.

    Parameters
    ----------
    path : str or Path
        GeoTIFF in any coordinate system.
    name : str, optional
        Name in tables; by default the file's name without its ending.
    transform : {"log", "log1p", "sqrt", "square"}, optional
        Applied to the values before centring and scaling.
    scale : bool
        Centre and scale by the accepted sites.
    band : int, optional
        Which band, from 1. Without it the first, with a note where the file has several.
    """

    path: str | Path
    name: str | None = None
    _: KW_ONLY
    transform: Transform | None = None
    scale: bool = True
    band: int | None = None

    def __post_init__(self) -> None:
        _check_settings(self.label, self.transform, self.scale)

    @property
    def label(self) -> str:
        """Name in tables."""
        return _label(self.name, Path(self.path).stem)

    @property
    def absence(self) -> str:
        """What a missing value means, for findings."""
        return f"no data in {Path(self.path).name} at this position"

    def raw(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> Floats:
        """Return (n,) raster values before `transform`, NaN where there is none."""
        raster = self._opened()
        return sample(raster, *self._own_coordinates(raster, points, _coordinates(points)))

    def values(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> Floats:
        """Return (n,) values at points after `transform`, NaN where there is none."""
        return transformed(self.raw(points), self.transform)

    def findings(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> list[Finding]:
        """Return what is doubtful in the raster: a band nobody chose, undeclared marks of missing data.

        Parameters
        ----------
        points : GeoDataFrame or GeoSeries
            The sites; the raster is looked at between and round them.
        """
        raster = self._opened()
        found: list[Finding] = []
        if self.band is None and raster.bands > 1:
            what = f"{Path(self.path).name} has {raster.bands} bands"
            action = "band 1 is used; choose another by band"
            found.append(Finding(None, None, self.label, "note", what, action))
        xy = _coordinates(points)
        x, y = self._own_coordinates(raster, points, xy[np.isfinite(xy).all(axis=1)])
        placed = np.isfinite(x) & np.isfinite(y)
        if not placed.any():
            return found
        left, bottom, right, top = x[placed].min(), y[placed].min(), x[placed].max(), y[placed].max()
        wider = max(0.1 * (right - left), raster.width), max(0.1 * (top - bottom), raster.height)
        bounds = (left - wider[0], bottom - wider[1], right + wider[0], top + wider[1])
        suspects = find_sentinels(raster, bounds)
        values = sample(raster, x[placed], y[placed]) if suspects else np.empty(0)
        for each in suspects:
            touched = int(((values < each.lower) | (values > each.upper)).sum())
            what = (
                f"{Path(self.path).name} holds {each.value:.6g} in {100.0 * each.share:.2g} % of the pixels "
                f"round the sites, its other values lie between {each.lower:.4g} and {each.upper:.4g}; values "
                f"outside those are read at {touched} of {int(placed.sum())} rows"
            )
            action = "used as a value; if it stands for missing data, declare it in the file as nodata"
            found.append(Finding(None, None, self.label, "warning", what, action))
        return found

    def _opened(self) -> Raster:
        return open_raster(self.path, band=1 if self.band is None else self.band)

    def _own_coordinates(
        self, raster: Raster, points: gpd.GeoDataFrame | gpd.GeoSeries, xy: Floats
    ) -> tuple[Floats, Floats]:
        """Return (n,) x and y in the raster's coordinates of (n, 2) coordinates of the points."""
        if not len(xy):
            return np.empty(0), np.empty(0)
        centre = (float(np.nanmedian(xy[:, 0])), float(np.nanmedian(xy[:, 1])))
        x, y = raster.from_crs(_crs(points), centre)(xy[:, 0], xy[:, 1])
        return np.asarray(x, dtype=float), np.asarray(y, dtype=float)

    def check_overlap(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> None:
        """Raise an InputError where no point lies in the raster."""
        raster = self._opened()
        xy = _coordinates(points)
        x, y = self._own_coordinates(raster, points, xy[np.isfinite(xy).all(axis=1)])
        left, bottom, right, top = raster.bounds
        if ((x >= left) & (x <= right) & (y >= bottom) & (y <= top)).any():
            return
        reach = describe_bounds((np.min(x), np.min(y), np.max(x), np.max(y)))
        raise InputError(
            f"Covariate {self.label!r}: {self.path} does not meet the sites. In {raster.crs.name}, the "
            f"raster covers {describe_bounds(raster.bounds)}, the sites {reach}."
        )


@dataclass(frozen=True, slots=True)
class DistanceCovariate:
    """Distance in km from the points to the nearest feature of a layer; 0 inside a polygon.

    Measured in the points' coordinate system where that is projected (the region's working coordinate
    system, whose distance error is reported), else in a projection centred on the points.

    Parameters
    ----------
    path : str or Path
        Points, lines or polygons: GeoJSON, GeoPackage, Shapefile or GeoParquet.
    name : str, optional
        Name in tables; by default "km_to_" and the file's name without its ending.
    transform : {"log", "log1p", "sqrt", "square"}, optional
        Applied to the distance in km before centring and scaling.
    scale : bool
        Centre and scale by the accepted sites.
    """

    path: str | Path
    name: str | None = None
    _: KW_ONLY
    transform: Transform | None = None
    scale: bool = True

    def __post_init__(self) -> None:
        _check_settings(self.label, self.transform, self.scale)

    @property
    def label(self) -> str:
        """Name in tables."""
        return _label(self.name, f"km_to_{Path(self.path).stem}")

    @property
    def absence(self) -> str:
        """What a missing value means, for findings."""
        return "the position cannot be projected"

    def raw(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> Floats:
        """Return (n,) distances in km before `transform`."""
        xy, crs = _coordinates(points), _crs(points)
        metric = metric_crs(points)
        if metric != crs and len(xy):
            x, y = Transformer.from_crs(crs, metric, always_xy=True).transform(xy[:, 0], xy[:, 1])
            xy = np.column_stack([x, y])
        return nearest_km(self.path, metric, xy)

    def values(self, points: gpd.GeoDataFrame | gpd.GeoSeries) -> Floats:
        """Return (n,) distances after `transform`, NaN where that has no value."""
        return transformed(self.raw(points), self.transform)


@dataclass(frozen=True, slots=True)
class ColumnCovariate:
    """A number measured at each site: a column of the survey and of predicted points.

    Parameters
    ----------
    column : str
        Column of the survey.
    at : float, optional
        Value to predict for on a grid, in the column's own unit.
    name : str, optional
        Name in tables; by default the column's.
    transform : {"log", "log1p", "sqrt", "square"}, optional
        Applied to the values before centring and scaling.
    scale : bool
        Centre and scale by the accepted sites.
    """

    column: str
    at: float | None = None
    _: KW_ONLY
    name: str | None = None
    transform: Transform | None = None
    scale: bool = True

    def __post_init__(self) -> None:
        _check_settings(self.label, self.transform, self.scale)
        if self.at is None:
            return
        try:
            value = float(self.at)
        except (TypeError, ValueError):
            value = np.nan
        if isinstance(self.at, bool) or not np.isfinite(value):
            raise InputError(f"Covariate {self.label!r}: at={self.at!r}; a number is expected.")
        if self.transform is not None and np.isnan(transformed(np.array([value]), self.transform)[0]):
            raise InputError(
                f"Covariate {self.label!r}: at={self.at!r} has no {self.transform}; values "
                f"{TRANSFORMS[self.transform][3]} are accepted."
            )

    @property
    def label(self) -> str:
        """Name in tables."""
        return _label(self.name, self.column)

    @property
    def absence(self) -> str:
        """What a missing value means, for findings."""
        return f"column {self.column!r} is empty"

    def raw(self, points: gpd.GeoDataFrame) -> Floats:
        """Return (n,) numbers before `transform`, NaN where the column is empty or holds text."""
        found = column(points, self.column, "the table of points", f"covariate {self.label!r}")
        return np.asarray(pd.to_numeric(found, errors="coerce"), dtype=float)

    def values(self, points: gpd.GeoDataFrame) -> Floats:
        """Return (n,) numbers after `transform`, NaN where there is none."""
        return transformed(self.raw(points), self.transform)

    def texts(self, points: gpd.GeoDataFrame) -> dict[int, str]:
        """Return the entries that are no numbers, by position in the table."""
        found = points[self.column]
        numbers = np.asarray(pd.to_numeric(found, errors="coerce"), dtype=float)
        words = [label_text(value) for value in found]
        return {int(k): words[k] for k in np.flatnonzero(~np.isfinite(numbers)) if words[k]}


@dataclass(frozen=True, slots=True)
class FactorCovariate:
    """A category noted at each site, such as where people were sampled.

    The most frequent level is the reference; every other level gets a coefficient of its own.

    Parameters
    ----------
    column : str
        Column of the survey.
    at : str, optional
        Level to predict for.
    name : str, optional
        Name in tables; by default the column's.
    """

    column: str
    at: str | None = None
    _: KW_ONLY
    name: str | None = None

    def __post_init__(self) -> None:
        _check_settings(self.label, None, True)

    @property
    def label(self) -> str:
        """Name in tables."""
        return _label(self.name, self.column)

    @property
    def absence(self) -> str:
        """What a missing value means, for findings."""
        return f"column {self.column!r} is empty"

    def raw(self, points: gpd.GeoDataFrame) -> NDArray[Any]:
        """Return (n,) levels as text, None where the column is empty."""
        found = column(points, self.column, "the table of points", f"factor {self.label!r}")
        return np.asarray([label_text(value) or None for value in found] + [None], dtype=object)[:-1]

    def values(self, points: gpd.GeoDataFrame) -> NDArray[Any]:
        """Return (n,) levels as text, None where the column is empty."""
        return self.raw(points)


Covariate = RasterCovariate | DistanceCovariate | ColumnCovariate | FactorCovariate


def transformed(raw: Floats, transform: str | None) -> Floats:
    """Return (n,) values after a transform, NaN outside what it accepts.

    Examples
    --------
    >>> transformed(np.array([0.0, 1.0]), "log1p").round(3).tolist()
    [0.0, 0.693]
    """
    if transform is None:
        return raw
    function, least, included, _ = TRANSFORMS[transform]
    accepted = raw >= least if included else raw > least
    result = np.full(len(raw), np.nan)
    result[accepted] = function(raw[accepted])
    return result


def metric_crs(points: gpd.GeoDataFrame | gpd.GeoSeries) -> CRS:
    """Return the points' coordinate system where it is projected in metres, else one centred on them."""
    crs = _crs(points)
    if crs.is_projected and all(axis.unit_name in ("metre", "meter") for axis in crs.axis_info[:2]):
        return crs
    placed = points.geometry[~points.geometry.is_empty]
    return choose_working_crs(np.asarray(placed.array, dtype=object), crs).crs


def _crs(points: gpd.GeoDataFrame | gpd.GeoSeries) -> CRS:
    if points.crs is None:
        raise InputError("The points have no coordinate system. Set one, for example EPSG:4326.")
    return CRS.from_user_input(points.crs)


def _coordinates(points: gpd.GeoDataFrame | gpd.GeoSeries) -> Floats:
    shapes = np.asarray(points.geometry.array, dtype=object)
    wrong = np.flatnonzero(shapely.get_type_id(shapes) != 0)
    if len(wrong):
        raise InputError(f"Points are expected; row {points.index[wrong[0]]} holds {shapes[wrong[0]]}.")
    return np.column_stack([shapely.get_x(shapes), shapely.get_y(shapes)])


def _label(name: str | None, default: str) -> str:
    return default if name is None else name


def _check_settings(label: str, transform: Any, scale: Any) -> None:
    if not isinstance(label, str) or not label.strip() or label == "intercept":
        raise InputError(f"A covariate cannot be called {label!r}. Give it another name=.")
    if transform is not None and transform not in TRANSFORMS:
        accepted = ", ".join(repr(each) for each in TRANSFORMS)
        raise InputError(f"Covariate {label!r}: transform={transform!r}; accepted: {accepted} or none.")
    if not isinstance(scale, bool):
        raise InputError(f"Covariate {label!r}: scale={scale!r}; true or false is expected.")
