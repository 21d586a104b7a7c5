"""Surface: prevalence with its uncertainty at cells or points."""

from __future__ import annotations

import html
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import geopandas as gpd
import numpy as np
import rasterio
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from prevmap.engine import prevalence as link
from prevmap.errors import InputError
from prevmap.inputs.grid import Grid

if TYPE_CHECKING:
    from prevmap.model.fit import Fit

_WINDOW = 20_000  # places worked on at a time
_MOST_DRAWN = 2e8  # numbers in one array of joint draws (1.6 GB)


@dataclass(frozen=True, slots=True, eq=False)
class Surface:
    """Posterior of prevalence at ``n`` places, in the order given; NaN where a covariate is missing.

    Attributes
    ----------
    fit : Fit
    grid : Grid or None
    points : GeoDataFrame
        The places, in the working coordinate system.
    nugget : {"average", "omit", "draw"}
    mean, sd, median, lower95, upper95 : (n,) float, prevalence
    missing : (n,) bool
        No value of some covariate: nothing is predicted.
    nearest_site_km : (n,) float
    far : (n,) bool
        Farther from every site than the fitted range.
    outside : (n,) bool
        Some covariate is outside the range that was sampled.
    """

    fit: Fit
    grid: Grid | None
    points: gpd.GeoDataFrame
    nugget: str
    mean: NDArray[np.float64]
    sd: NDArray[np.float64]
    median: NDArray[np.float64]
    lower95: NDArray[np.float64]
    upper95: NDArray[np.float64]
    missing: NDArray[np.bool_]
    nearest_site_km: NDArray[np.float64]
    far: NDArray[np.bool_]
    outside: NDArray[np.bool_]
    xy_km: NDArray[np.float64]
    design: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.mean)

    @property
    def extrapolated(self) -> NDArray[np.bool_]:
        """(n,) bool: predicted from afar or outside the sampled range of a covariate."""
        return (self.far | self.outside) & ~self.missing

    @property
    def extrapolation_reason(self) -> NDArray[Any]:
        """(n,) str: "", "far", "covariates" or "far, covariates"."""
        reasons = np.array(["", "far", "covariates", "far, covariates"], dtype=object)
        return reasons[(self.far & ~self.missing) + 2 * (self.outside & ~self.missing)]

    @property
    def blank(self) -> NDArray[np.bool_]:
        """(n,) bool: not to be shown, because nothing is predicted or nobody lives there."""
        if self.grid is None or self.grid.people is None:
            return self.missing
        return self.missing | (self.grid.people <= 0)

    @property
    def at(self) -> dict[str, Any]:
        """Values at which column and factor covariates were predicted."""
        return dict(self.fit.design.at) if self.grid is not None else {}

    @property
    def region(self) -> Any:
        """The fit's region."""
        return self.fit.region

    @property
    def about(self) -> Any:
        """What the survey measured."""
        return self.fit.survey.about

    @property
    def sites(self) -> gpd.GeoDataFrame:
        """The fit's sites."""
        return self.fit.sites

    def _summary(self, of: Any) -> NDArray[np.float64]:
        out = np.full(len(self), np.nan)
        for at, mixture in _mixtures(self.fit, self.xy_km, self.design, self.missing, self.nugget):
            out[at] = of(mixture)
        return out

    def quantile(self, probability: float) -> NDArray[np.float64]:
        """(n,) quantile of prevalence at a probability strictly between 0 and 1."""
        if not 0.0 < probability < 1.0:
            raise InputError(f"probability = {probability!r}: expected a number strictly between 0 and 1")
        return self._summary(lambda mixture: link.prevalence_quantile(mixture, probability))

    def exceedance(self, threshold: float) -> NDArray[np.float64]:
        """(n,) P(prevalence > threshold), for any threshold without refitting."""
        check_threshold(threshold)
        return self._summary(lambda mixture: link.exceedance(mixture, threshold))

    def draws(self, count: int, seed: int = 1) -> NDArray[np.float64]:
        """Joint draws of prevalence.

        Parameters
        ----------
        count : int
        seed : int

        Returns
        -------
        (count, n) float

        Raises
        ------
        InputError
            Above 200 million numbers; units and totals do not need them all at once.
        """
        if count < 1:
            raise InputError(f"count = {count!r}: expected at least 1 draw")
        if count * len(self) > _MOST_DRAWN:
            raise InputError(
                f"{count:,} joint draws at {len(self):,} places are {count * len(self):,} numbers; at most "
                f"{_MOST_DRAWN:,.0f} are drawn at once. Ask for fewer, or use fit.units for unit summaries"
            )
        out = np.full((count, len(self)), np.nan)
        for at, start, part in joint_prevalence(
            self.fit, self.xy_km, self.design, self.missing, self.nugget, count, seed
        ):
            out[start : start + part.shape[1], at] = part.T
        return out

    def to_frame(self) -> gpd.GeoDataFrame:
        """Summaries as columns beside the places."""
        frame = self.points.copy()
        for name in ("mean", "sd", "median", "lower95", "upper95", "nearest_site_km"):
            frame[name] = getattr(self, name)
        frame["extrapolated"] = self.extrapolation_reason
        return frame

    def bands(self, thresholds: tuple[float, ...] = ()) -> dict[str, NDArray[np.float64]]:
        """Named summaries (n,) as they are written to a raster."""
        out = {name: getattr(self, name) for name in ("mean", "sd", "lower95", "median", "upper95")}
        out |= {f"exceedance_{t:g}": self.exceedance(t) for t in thresholds}
        out["extrapolated"] = np.where(self.missing, np.nan, self.extrapolated.astype(float))
        return out

    def to_geotiff(self, path: str | Path, thresholds: tuple[float, ...] = ()) -> Path:
        """Write a tiled, compressed float32 GeoTIFF with named bands; blank cells are nodata.

        Raises
        ------
        InputError
            For a surface at points rather than on a grid.
        """
        if self.grid is None:
            raise InputError("a surface at points has no raster; predict on region.grid(...) first")
        bands = self.bands(tuple(thresholds))
        rows, columns = self.grid.shape
        path = Path(path)
        with rasterio.open(
            path, "w", driver="GTiff", height=rows, width=columns, count=len(bands), dtype="float32",
            crs=self.grid.region.crs.to_wkt(), transform=self.grid.transform, nodata=np.nan,
            compress="deflate", predictor=3, tiled=True, blockxsize=256, blockysize=256,
        ) as target:  # fmt: skip
            for number, (name, values) in enumerate(bands.items(), 1):
                shown = np.where(self.blank, np.nan, values)
                target.write(self.grid.to_raster(shown).astype("float32"), number)
                target.set_band_description(number, name)
        return path

    def __repr__(self) -> str:
        where = f"{self.grid.cell_km:g} km cells" if self.grid is not None else "points"
        return (
            f"Surface: {len(self):,} {where}, mean prevalence {np.nanmin(self.mean):.3g} to "
            f"{np.nanmax(self.mean):.3g}; {int(self.extrapolated.sum()):,} extrapolated, "
            f"{int(self.missing.sum()):,} without a prediction; nugget {self.nugget!r}"
        )

    def _repr_html_(self) -> str:
        return f"<p>{html.escape(repr(self))}</p>"


def check_threshold(threshold: float) -> None:
    """Refuse a threshold that is not strictly between 0 and 1.

    Raises
    ------
    InputError
    """
    if not 0.0 < threshold < 1.0:
        raise InputError(
            f"threshold = {threshold!r}: expected a prevalence strictly between 0 and 1, such as 0.10"
        )


def check_nugget(nugget: str) -> None:
    """Refuse an unknown nugget setting.

    Raises
    ------
    InputError
    """
    if nugget not in link.NUGGET_SETTINGS:
        raise InputError(f"nugget = {nugget!r}: expected one of {', '.join(link.NUGGET_SETTINGS)}")


def predict_surface(fit: Fit, places: Grid | gpd.GeoDataFrame, *, nugget: str) -> Surface:
    """Predict; see `Fit.predict`."""
    check_nugget(nugget)
    grid = places if isinstance(places, Grid) else None
    if grid is not None:
        if grid.region.crs != fit.region.crs:
            raise InputError(
                f"the grid is in {grid.region.crs.name} but the model was fitted in {fit.region.crs.name}: "
                "fit with region= the grid's region"
            )
        points, xy = grid.frame_points(), np.round(grid.xy_km, 6)
    elif isinstance(places, gpd.GeoDataFrame):
        if places.crs is None:
            raise InputError(
                "the points have no coordinate system: set one, for example points.set_crs(4326)"
            )
        points, xy = places.to_crs(fit.region.crs), np.round(fit.region.project(places.geometry), 6)
    else:
        raise InputError(
            f"cannot predict at {type(places).__name__}: expected a grid or a GeoDataFrame of points"
        )
    if len(points) == 0:
        raise InputError("there is no place to predict at: the grid or the frame of points is empty")
    off = ~fit.core.on_mesh(xy)
    if np.any(off):
        labels = ", ".join(str(v) for v in np.asarray(points.index)[off][:5])
        raise InputError(
            f"{int(off.sum())} of {len(points)} places lie off the mesh, the first at {labels}: predict nearer to "
            "the study area, or fit with a larger margin_km"
        )
    parts = [
        fit.design.matrix(points.iloc[s : s + _WINDOW], grid=grid is not None)
        for s in range(0, len(points), _WINDOW)
    ]
    matrix = np.concatenate([p[0] for p in parts])
    outside = np.concatenate([p[1] for p in parts])
    missing = np.concatenate([p[2] for p in parts])
    summaries = np.full((5, len(points)), np.nan)
    for at, mixture in _mixtures(fit, xy, matrix, missing, nugget):
        summaries[:2, at] = link.prevalence_moments(mixture)
        for row, q in ((2, 0.5), (3, 0.025), (4, 0.975)):
            summaries[row, at] = link.prevalence_quantile(mixture, q)
    nearest = cKDTree(fit.rows.xy_km).query(xy)[0]
    far = nearest > fit.range_km
    mean, sd, median, lower, upper = summaries
    return Surface(
        fit, grid, points, nugget, mean, sd, median, lower, upper, missing, nearest, far, outside, xy, matrix
    )


def _windows(missing: NDArray[np.bool_]) -> Iterator[NDArray[np.int64]]:
    """Places with a prediction, some at a time."""
    present = np.flatnonzero(~missing)
    for start in range(0, present.size, _WINDOW):
        yield present[start : start + _WINDOW]


def _mixtures(
    fit: Fit, xy_km: NDArray[np.float64], matrix: NDArray[np.float64], missing: NDArray[np.bool_], nugget: str
) -> Iterator[tuple[NDArray[np.int64], link.Mixture]]:
    """Yield the posterior mixture of the linear predictor, window by window."""
    states, weights = fit.posterior.states, fit.posterior.weights
    tables = link.links(np.array([s.theta.nugget_sd for s in states]), nugget)
    for at in _windows(missing):
        rows = fit.core.locate(xy_km[at], matrix[at])
        moments = [fit.core.moments(state, rows) for state in states]
        mean = np.array([m for m, _ in moments])
        variance = np.array([v for _, v in moments]) + tables.added_variance[:, None]
        yield at, link.Mixture(mean, variance, weights, tables)


def draws_per_component(weights: NDArray[np.float64], count: int) -> NDArray[np.int64]:
    """Split draws over the mixture's components in proportion, by largest remainders."""
    exact = weights * count
    whole = np.floor(exact).astype(np.int64)
    rest = np.argsort(-(exact - whole), kind="stable")[: count - int(whole.sum())]
    whole[rest] += 1
    return whole


def joint_prevalence(
    fit: Fit,
    xy_km: NDArray[np.float64],
    matrix: NDArray[np.float64],
    missing: NDArray[np.bool_],
    nugget: str,
    count: int,
    seed: int,
) -> Iterator[tuple[NDArray[np.int64], int, NDArray[np.float64]]]:
    """Joint draws of prevalence, window by window.

    Yields
    ------
    at : (k,) int
        Places of the window.
    start : int
        Number of the first draw.
    part : (k, draws of one component) float
    """
    states = fit.posterior.states
    tables = link.links(np.array([s.theta.nugget_sd for s in states]), nugget)
    share = draws_per_component(fit.posterior.weights, count)
    seeds = np.random.SeedSequence(seed).spawn(len(states))
    windows = list(_windows(missing))
    start = 0
    for k, state in enumerate(states):
        if share[k] == 0:
            continue
        field_seed, nugget_seed = seeds[k].spawn(2)
        settlement = np.random.default_rng(nugget_seed)
        rows = (fit.core.locate(xy_km[at], matrix[at]) for at in windows)
        parts = fit.core.draws(state, rows, np.random.default_rng(field_seed), int(share[k]))
        for at, eta in zip(windows, parts, strict=True):
            if nugget == "draw":
                eta = eta + np.sqrt(tables.added_variance[k]) * settlement.standard_normal(eta.shape)
            yield at, start, link.prevalence_of(tables.forward[k], np.ascontiguousarray(eta))
        start += int(share[k])
