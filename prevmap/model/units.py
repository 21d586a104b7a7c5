"""UnitEstimates: population-weighted prevalence of implementation units, beside their raw data."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.sparse import csr_matrix

from prevmap.errors import InputError
from prevmap.inputs.grid import Grid
from prevmap.inputs.people import POORLY_KNOWN
from prevmap.model.direct import weighted_proportion, wilson_interval
from prevmap.model.surface import Surface, check_threshold, joint_prevalence, predict_surface

if TYPE_CHECKING:
    from prevmap.model.fit import Fit

OWN, NEIGHBOURS, COVARIATES = "own sites", "neighbours", "covariates only"


@dataclass(frozen=True, slots=True, eq=False)
class UnitEstimates:
    """Joint posterior draws of unit prevalence and their summaries.

    Attributes
    ----------
    frame : DataFrame
        One row per unit in the order of the region: unit, code, parent, sites, examined, positive,
        direct_estimate, direct_lower95, direct_upper95, mean, sd, lower95, median, upper95, population,
        infected_mean, infected_lower95, infected_upper95, nearest_site_km (mean over the unit's weight of the
        distance to the nearest site), share_extrapolated, basis, monte_carlo_error (standard error of
        ``mean`` from the number of draws), share_without_prediction (of the unit's weight, in cells where a
        covariate is missing), weighting ("population", or "area" where nobody is counted), then the region's
        other attributes.
    draw_matrix : (draws, n_units) float
        NaN for a unit without any prediction.
    weighting : {"population", "area"}
    """

    frame: pd.DataFrame
    draw_matrix: NDArray[np.float64]
    surface: Surface
    seed: int
    weighting: str

    @property
    def draws(self) -> int:
        """Number of joint draws."""
        return int(self.draw_matrix.shape[0])

    @property
    def fit(self) -> Fit:
        """The fit behind the estimates."""
        return self.surface.fit

    @property
    def grid(self) -> Grid:
        """The grid the units are made of."""
        assert self.surface.grid is not None  # noqa: S101 - units are only ever made from a grid
        return self.surface.grid

    @property
    def region(self) -> Any:
        """The region with the units."""
        return self.grid.region

    @property
    def nugget(self) -> str:
        """What prevalence means."""
        return self.surface.nugget

    def exceedance(self, threshold: float) -> pd.Series:
        """P(unit prevalence > threshold) by unit: the share of joint draws above it."""
        check_threshold(threshold)
        above = np.where(np.isnan(self.draw_matrix), np.nan, self.draw_matrix > threshold)
        return pd.Series(above.mean(axis=0), index=self.frame["unit"], name=f"exceedance_{threshold:g}")

    def exceedance_error(self, threshold: float) -> pd.Series:
        """Monte-Carlo standard error of `exceedance` by unit.

        Of the estimate (k + 1/2)/(n + 1) for k of n draws, so that 0 of n does not print as free of error.
        """
        p = (self.exceedance(threshold) * self.draws + 0.5) / (self.draws + 1.0)
        return np.sqrt(p * (1.0 - p) / self.draws).rename(f"exceedance_{threshold:g}_error")

    def with_draws(self, draws: int) -> UnitEstimates:
        """Estimate again from another number of joint draws."""
        return _summarise(
            replace(self, draw_matrix=_draw_units(self.surface, draws, self.seed, _weights(self.grid)[0]))
        )

    def __repr__(self) -> str:
        return (
            f"UnitEstimates: {len(self.frame)} units, {self.draws:,} joint draws, {self.weighting}-weighted, "
            f"nugget {self.nugget!r}"
        )

    def _repr_html_(self) -> str:
        return self.frame.to_html(index=False, float_format="{:.3g}".format)


def estimate_units(fit: Fit, places: Grid | Surface, *, seed: int, draws: int, nugget: str) -> UnitEstimates:
    """Estimate units; see `Fit.units`.

    Raises
    ------
    InputError
        Where the region has no units, or fewer than 100 draws are asked for.
    """
    grid = places.grid if isinstance(places, Surface) else places
    if grid is None:
        raise InputError("units need a grid: predict on region.grid(...), not at points")
    if not grid.region.has_units:
        raise InputError("the study area has no units: read a region with named units to estimate them")
    if draws < 100:
        raise InputError(f"draws = {draws!r}: expected at least 100")
    surface = places if isinstance(places, Surface) else predict_surface(fit, places, nugget=nugget)
    weights, weighting = _weights(grid)
    matrix = _draw_units(surface, draws, seed, weights)
    start = UnitEstimates(_raw_frame(fit, grid, surface, weights), matrix, surface, int(seed), weighting)
    return _summarise(start)


def _weights(grid: Grid) -> tuple[csr_matrix, str]:
    """Weights (n_units, n_cells): people where known, else covered area; by area where nobody is counted."""
    weighting = "area" if grid.pair_people is None else "population"
    people = np.zeros(grid.pair_unit.size) if grid.pair_people is None else grid.pair_people
    value = np.where(_by_people(grid)[grid.pair_unit], people, grid.pair_coverage)
    shape = (len(grid.region.units), len(grid))
    return csr_matrix((value, (grid.pair_unit, grid.pair_cell)), shape=shape), weighting


def _known(grid: Grid) -> NDArray[np.bool_]:
    """Which units (n_units,) have a population: the raster has a value on some of their land."""
    if grid.pair_people is None or grid.people_known is None:
        return np.zeros(len(grid.region.units), dtype=bool)
    return grid.people_known >= POORLY_KNOWN


def _by_people(grid: Grid) -> NDArray[np.bool_]:
    """Which units (n_units,) are weighted by people: theirs are known, and there are some."""
    if grid.pair_people is None:
        return np.zeros(len(grid.region.units), dtype=bool)
    total = np.bincount(grid.pair_unit, weights=grid.pair_people, minlength=len(grid.region.units))
    return _known(grid) & (total > 0)


def _draw_units(surface: Surface, draws: int, seed: int, weights: csr_matrix) -> NDArray[np.float64]:
    present = weights @ (~surface.missing).astype(float)
    out = np.zeros((draws, weights.shape[0]))
    columns = weights.tocsc()
    for at, start, part in joint_prevalence(
        surface.fit, surface.xy_km, surface.design, surface.missing, surface.nugget, draws, seed
    ):
        out[start : start + part.shape[1]] += (columns[:, at] @ part).T
    with np.errstate(invalid="ignore", divide="ignore"):
        out /= present
    out[:, present <= 0] = np.nan
    return np.clip(out, 0.0, 1.0)


def _raw_frame(fit: Fit, grid: Grid, surface: Surface, weights: csr_matrix) -> pd.DataFrame:
    units = grid.region.units
    survey = fit.survey
    placed = survey.frame
    count = len(units)
    site = np.concatenate([placed["site"].astype(str), survey.unplaced["site"].astype(str)])
    unit = np.concatenate([fit.row_units, fit.unplaced_units])
    n = np.concatenate([placed["examined"], survey.unplaced["examined"]]).astype(float)
    y = np.concatenate([placed["positive"], survey.unplaced["positive"]]).astype(float)
    if "weight" in placed:
        w = np.concatenate([placed["weight"], survey.unplaced["weight"]]).astype(float)
    else:
        w = np.ones(n.size)
    rows = []
    for u in range(count):
        at = unit == u
        proportion, effective = weighted_proportion(y[at], n[at], w[at])
        lower, upper = wilson_interval(proportion * effective, effective)
        rows.append(
            [len(set(site[at])), int(n[at].sum()), int(y[at].sum()), proportion, float(lower), float(upper)]
        )
    names = ["sites", "examined", "positive", "direct_estimate", "direct_lower95", "direct_upper95"]
    frame = pd.DataFrame(units[["unit", "code", "parent"]].reset_index(drop=True))
    frame[names] = pd.DataFrame(rows, columns=names)
    for name in ("mean", "sd", "lower95", "median", "upper95"):
        frame[name] = np.nan
    people = grid.pair_people
    counted = np.nan if people is None else np.bincount(grid.pair_unit, weights=people, minlength=count)
    frame["population"] = np.where(_known(grid), counted, np.nan)
    for name in ("infected_mean", "infected_lower95", "infected_upper95"):
        frame[name] = np.nan
    ones = np.ones(len(grid))
    total = weights @ ones
    with np.errstate(invalid="ignore", divide="ignore"):
        frame["nearest_site_km"] = (weights @ surface.nearest_site_km) / total
        frame["share_extrapolated"] = (weights @ surface.extrapolated.astype(float)) / total
    fitted = set(fit.sites["unit"].dropna())
    nearest = np.full(count, np.inf)
    np.minimum.at(nearest, grid.pair_unit, surface.nearest_site_km[grid.pair_cell])
    frame["basis"] = [
        OWN if name in fitted else NEIGHBOURS if nearest[u] <= fit.range_km else COVARIATES
        for u, name in enumerate(frame["unit"])
    ]
    frame["monte_carlo_error"] = np.nan
    frame["share_without_prediction"] = (weights @ surface.missing.astype(float)) / total
    frame["weighting"] = np.where(_by_people(grid), "population", "area")
    for name in units.columns:
        if name not in frame.columns and name != units.geometry.name:
            frame[name] = units[name].to_numpy()
    return frame


def _summarise(units: UnitEstimates) -> UnitEstimates:
    """Fill the columns that come from the joint draws."""
    frame, draws = units.frame.copy(), units.draw_matrix
    frame["mean"] = draws.mean(axis=0)
    frame["sd"] = draws.std(axis=0, ddof=1)
    for name, q in (("lower95", 0.025), ("median", 0.5), ("upper95", 0.975)):
        frame[name] = np.quantile(draws, q, axis=0)
    frame["monte_carlo_error"] = frame["sd"] / np.sqrt(units.draws)
    if ages_match(units.fit, units.grid):
        for name in ("mean", "lower95", "upper95"):
            frame[f"infected_{name}"] = frame[name] * frame["population"]
    return replace(units, frame=frame)


def ages_match(fit: Fit, grid: Grid) -> bool:
    """Whether the population counts the people the survey is about: both state the same ages."""
    surveyed = fit.survey.about.ages
    counted = grid.population.ages if grid.population is not None else None
    if surveyed is None or counted is None or isinstance(surveyed, str):
        return False
    return tuple(surveyed) == tuple(counted)
