"""Fit: a model held against a survey."""

from __future__ import annotations

import html
import logging
import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import geopandas as gpd
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import ndtr
from tqdm.auto import tqdm

from prevmap.engine.exact import DenseModel
from prevmap.engine.laplace import LatentModel
from prevmap.engine.mesh import projector
from prevmap.engine.posterior import Engine, Outer, Peak, Posterior, find_peak, infer, weighted_quantile
from prevmap.errors import InputError
from prevmap.inputs.design import Design, design
from prevmap.inputs.findings import Finding, findings_frame
from prevmap.inputs.grid import Grid
from prevmap.inputs.placement import assign_units, assign_unplaced, exchange_hint, site_findings
from prevmap.inputs.region import Region, hull_region
from prevmap.inputs.survey import Survey
from prevmap.model import meshing
from prevmap.model.prior import (
    Resolved,
    coefficient_prior,
    default_reach_km,
    prior_sentences,
    resolve_priors,
)
from prevmap.model.rows import Rows, false_positive_warning, pool_rows, row_accuracy
from prevmap.model.spec import SMOOTHNESS, PrevalenceModel

if TYPE_CHECKING:
    from prevmap.model.surface import Surface
    from prevmap.model.units import UnitEstimates

log = logging.getLogger("prevmap")

HYPERPARAMETERS = ("range_km", "sd", "nugget_sd")
_EDGES_PER_LOWER_RANGE = 5.0
_MOST_EDGES_PER_RANGE = 10.0  # where the mesh puts the sd off by 2 %, against a range hardly known
_MOST_DENSE_ROWS = 3_000
_SD_BOUNDS = (1e-3, 20.0)
_NUGGET_BOUNDS = (1e-4, 20.0)


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """A fitted prevalence model.

    Attributes
    ----------
    coefficients : DataFrame
        Indexed by term; mean, sd, lower95, median, upper95 on the logit scale, covariates as scaled.
    hyperparameters : DataFrame
        Indexed by range_km, sd, nugget_sd; median, lower95, upper95, at_mode.
    log_evidence : float
        Laplace log p(y), binomial constants of the pooled rows included, integrated over free hyperparameters.
    findings : DataFrame
        Everything found wrong or doubtful in survey, region and covariates.
    warnings : tuple of str
        What makes the fit weaker without making it wrong.
    n_rows : int
        Survey rows the model was fitted to.
    sites : GeoDataFrame
        Pooled observations in the working coordinate system: site, examined, positive, proportion, unit.
    prior_text : tuple of (name, sentence)
    diagnostics : dict
        engine, nodes, edge_km, margin_km, evaluations, components, iterations, gradient_norm,
        smallest_pivot, seconds.
    """

    model: PrevalenceModel
    survey: Survey
    region: Region
    engine: Literal["mesh", "exact"]
    seed: int
    design: Design
    coefficients: pd.DataFrame
    hyperparameters: pd.DataFrame
    log_evidence: float
    findings: pd.DataFrame
    warnings: tuple[str, ...]
    sites: gpd.GeoDataFrame
    n_rows: int
    row_units: NDArray[np.int64]
    unplaced_units: NDArray[np.int64]
    prior_text: tuple[tuple[str, str], ...]
    diagnostics: dict[str, Any]
    posterior: Posterior
    core: Engine
    rows: Rows

    @property
    def n_sites(self) -> int:
        """Number of distinct sites the model was fitted to."""
        return int(self.rows.data.site_start.size - 1)

    @property
    def n_examined(self) -> int:
        """People examined at those sites."""
        return int(self.rows.data.examined.sum())

    @property
    def n_positive(self) -> int:
        """People positive at those sites."""
        return int(self.rows.data.positive.sum())

    @property
    def range_km(self) -> float:
        """Posterior median of the range."""
        return float(self.hyperparameters["median"].to_dict()["range_km"])

    def predict(
        self, places: Grid | gpd.GeoDataFrame, nugget: Literal["average", "omit", "draw"] = "average"
    ) -> Surface:
        """Predict prevalence on a grid or at points.

        Parameters
        ----------
        places : Grid or GeoDataFrame
            Points need the columns that column and factor covariates name, and a coordinate system.
        nugget : {"average", "omit", "draw"}
            What prevalence means: the mean over settlements at a place, a typical one, or one new one.

        Returns
        -------
        Surface

        Raises
        ------
        InputError
            For points off the mesh, missing columns, or an unknown setting.
        """
        from prevmap.model.surface import predict_surface

        return predict_surface(self, places, nugget=nugget)

    def units(
        self,
        grid: Grid | Surface,
        seed: int | None = None,
        draws: int = 4_000,
        nugget: Literal["average", "omit", "draw"] = "average",
    ) -> UnitEstimates:
        """Estimate every implementation unit from joint draws, beside its raw data.

        Parameters
        ----------
        grid : Grid or Surface
            Over this fit's region; a surface already predicted on the grid saves predicting it again, and its
            nugget setting is used.
        seed : int, optional
            Seed of the draws; the fit's where left out.
        draws : int
        nugget : {"average", "omit", "draw"}

        Returns
        -------
        UnitEstimates
        """
        from prevmap.model.units import estimate_units

        return estimate_units(
            self, grid, seed=self.seed if seed is None else seed, draws=draws, nugget=nugget
        )

    def __repr__(self) -> str:
        d = self.diagnostics
        where = (
            f"{d['nodes']:,} nodes, edge {d['edge_km']:.3g} km" if self.engine == "mesh" else "exact engine"
        )
        lines = [
            f"Fit: {self.n_positive:,} positive of {self.n_examined:,} examined at {self.n_sites:,} sites; {where}",
            f"  log-evidence {self.log_evidence:.3f}, {d['evaluations']} evaluations, {d['components']} components, "
            f"gradient {d['gradient_norm']:.2g}, smallest pivot {d['smallest_pivot']:.2g}",
        ]
        lines += [
            f"  {name!s}: {row['median']:.3g} ({row['lower95']:.3g} to {row['upper95']:.3g})"
            for name, row in self.hyperparameters.iterrows()
        ]
        lines += [f"  {t!s}: {r['mean']:.3g} (sd {r['sd']:.2g})" for t, r in self.coefficients.iterrows()]
        lines += [f"  warning: {w}" for w in self.warnings]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        three = "{:.3g}".format
        warnings = "".join(f"<li>{html.escape(w)}</li>" for w in self.warnings)
        return (
            f"<p>{self.n_positive:,} positive of {self.n_examined:,} examined at {self.n_sites:,} sites; "
            f"log-evidence {self.log_evidence:.3f}</p>"
            f"{self.coefficients.to_html(float_format=three)}{self.hyperparameters.to_html(float_format=three)}"
            + (f"<ul>{warnings}</ul>" if warnings else "")
        )


class _Progress:
    """Tells a progress bar, or whoever asked, after every evaluation."""

    def __init__(self, progress: bool | Callable[[str], None]) -> None:
        self._told = progress if callable(progress) else None
        self._bar = tqdm(desc="fitting", unit=" evaluations", leave=False) if progress is True else None

    def __call__(self, stage: str) -> None:
        if self._told is not None:
            self._told(stage)
        if self._bar is not None:
            self._bar.set_postfix_str(stage, refresh=False)
            self._bar.update()

    def close(self) -> None:
        if self._bar is not None:
            self._bar.close()


def fit_model(
    model: PrevalenceModel,
    survey: Survey,
    *,
    region: Region | None,
    engine: Literal["mesh", "exact"],
    integrate: bool,
    progress: bool | Callable[[str], None],
    seed: int,
) -> Fit:
    """Fit a model; see `PrevalenceModel.fit`."""
    began = time.perf_counter()
    if engine not in ("mesh", "exact"):
        raise InputError(f"engine = {engine!r}: expected 'mesh' or 'exact'")
    if model.nu not in SMOOTHNESS:
        raise InputError(f"nu = {model.nu!r}: expected one of {', '.join(str(v) for v in SMOOTHNESS)}")
    if engine == "mesh" and model.nu != 1.0:
        raise InputError(
            f"nu = {model.nu!r}: the mesh engine has nu = 1; use engine='exact' for another smoothness"
        )
    if len(survey.frame) == 0:
        raise InputError("the survey has no row with a position: no model can be fitted")
    if region is None:
        region = hull_region(survey.frame.geometry)
    resolved = resolve_priors(model.priors, meshing.diagonal_km(region.boundary))
    reach_km = model.mesh.margin_km or default_reach_km(resolved[0])
    inside, position_findings = site_findings(survey.frame, region, reach_km)
    if not np.any(inside):
        raise InputError(
            "no site lies in or near the study area: check the coordinates of the survey and of the region."
            + exchange_hint(survey.frame, region, reach_km),
            tuple(position_findings),
        )
    near = survey.frame[inside]
    designed = design(model.covariates, near, near["site"])
    if not np.any(designed.kept):
        raise InputError("no site has a value for every covariate: check that the rasters cover the survey")
    kept = inside.copy()
    kept[inside] = designed.kept
    frame = survey.frame[kept]
    accuracy = row_accuracy(survey, kept, model.tests)
    rows = pool_rows(frame, region.project(frame.geometry), designed.X[designed.kept], accuracy)
    row_units, unit_findings = assign_units(survey, region, inside)
    unplaced_units, unplaced_findings = assign_unplaced(survey, region)

    tick = _Progress(progress)
    try:
        core, posterior, shape, warnings = _run(
            model, region, rows, resolved, engine, integrate, reach_km, tick
        )
    finally:
        tick.close()
    mode = posterior.mode
    diagnostics = {
        "engine": engine,
        **shape,
        "evaluations": posterior.evaluations,
        "components": len(posterior.states),
        "iterations": posterior.iterations,
        "gradient_norm": float(posterior.gradient_norm),
        "smallest_pivot": float(mode.smallest_pivot),
        "seconds": time.perf_counter() - began,
    }
    found = [*position_findings, *unit_findings, *unplaced_findings]
    return Fit(
        model, survey, region, engine, int(seed), designed,
        _coefficients(core, posterior, designed.terms),
        _hyperparameters(posterior, resolved),
        float(posterior.log_evidence),
        _all_findings(survey, region, designed, found),
        (*warnings, *false_positive_warning(rows)),
        _sites(rows, row_units[kept], region),
        len(frame), row_units, unplaced_units,
        prior_sentences(model.priors, resolved, len(designed.terms)),
        diagnostics, posterior, core, rows,
    )  # fmt: skip


def _run(
    model: PrevalenceModel,
    region: Region,
    rows: Rows,
    resolved: tuple[Resolved, Resolved, Resolved],
    engine: str,
    integrate: bool,
    reach_km: float,
    tick: Callable[[str], None],
) -> tuple[Engine, Posterior, dict[str, Any], list[str]]:
    """Build the engine, infer, and mesh once more where a default turned out too coarse or too narrow."""
    mean, sd = coefficient_prior(model.priors, rows.design.shape[1])
    diagonal = meshing.diagonal_km(region.boundary)
    spacing = meshing.site_spacing_km(rows.xy_km)
    if engine == "exact":
        if len(rows.site) > _MOST_DENSE_ROWS:
            raise InputError(
                f"the exact engine works with dense matrices and takes at most {_MOST_DENSE_ROWS:,} pooled rows; "
                f"found {len(rows.site):,}. Use engine='mesh'"
            )
        core: Engine = DenseModel(rows.data, rows.xy_km, rows.design, mean, sd, model.nu)
        shortest = spacing / 100.0 if math.isfinite(spacing) else diagonal / 1000.0
        outer = _outer(rows, resolved, shortest, 100.0 * diagonal)
        posterior = infer(core, outer, find_peak(core, outer, tick=tick), integrate=integrate, tick=tick)
        shape = {"nodes": 0, "edge_km": math.nan, "margin_km": math.nan}
        return core, posterior, shape, list(posterior.warnings)
    zone = meshing.inner_zone_km(region.boundary, rows.xy_km)
    edge = model.mesh.edge_km or meshing.default_edge_km(zone, resolved[0].middle, spacing)
    margin_km = model.mesh.margin_km or meshing.default_margin_km(region.boundary, reach_km)
    longest = meshing.RANGES_PER_MARGIN * margin_km
    peak: Peak | None = None
    remeshed = False
    while True:
        mesh = meshing.mesh_over(zone, edge, margin_km, model.mesh.max_nodes)
        weights, _ = projector(mesh, rows.xy_km)
        core = LatentModel(rows.data, mesh, weights, rows.design, mean, sd)
        outer = _outer(rows, resolved, edge / 2.0, longest, peak)
        peak = find_peak(core, outer, tick=tick)
        lower, middle = _range_limits(infer(core, outer, peak, integrate=False))
        finer = _finer_edge(model, zone, lower, middle, edge)
        if remeshed or finer == edge:
            break
        edge, remeshed = finer, True
    posterior = infer(core, outer, peak, integrate=integrate, tick=tick)
    lower, middle = _range_limits(posterior)
    warnings = list(posterior.warnings)
    if edge > lower / _EDGES_PER_LOWER_RANGE * 1.001:
        warnings.append(
            f"the mesh edge of {edge:.3g} km is above a fifth of the range's lower limit ({lower:.3g} km): "
            "short-range variation is blurred; a finer edge_km would show it"
        )
    if margin_km < middle * 0.999:
        warnings.append(
            f"the mesh margin of {margin_km:.3g} km is below the fitted range ({middle:.3g} km): uncertainty near "
            "the border is overstated and longer ranges are not tried; a larger margin_km would mend it"
        )
    for warning in warnings:
        log.info(warning)
    shape = {"nodes": mesh.nodes, "edge_km": float(edge), "margin_km": float(margin_km)}
    return core, posterior, shape, warnings


def _finer_edge(model: PrevalenceModel, zone: Any, lower: float, middle: float, edge: float) -> float:
    """Edge for a second mesh: a fifth of the range's lower limit, unless the data say little about the range."""
    wanted = max(lower / _EDGES_PER_LOWER_RANGE, middle / _MOST_EDGES_PER_RANGE)
    if model.mesh.edge_km is not None or edge <= wanted:
        return edge
    most = min(meshing.REFINED_NODES, model.mesh.max_nodes // 2)
    finer = meshing.default_edge_km(zone, meshing.EDGES_PER_RANGE * wanted, math.inf, most)
    return finer if finer < 0.9 * edge else edge


def _range_limits(posterior: Posterior) -> tuple[float, float]:
    """Lower 95 % limit and median of the range."""
    if 0 in posterior.marginals:
        values, weights = posterior.marginals[0]
        return (
            math.exp(weighted_quantile(values, weights, 0.025)),
            math.exp(weighted_quantile(values, weights, 0.5)),
        )
    return posterior.mode.theta.range_km, posterior.mode.theta.range_km


def _outer(
    rows: Rows,
    resolved: tuple[Resolved, Resolved, Resolved],
    shortest_km: float,
    longest_km: float,
    before: Peak | None = None,
) -> Outer:
    """Outer problem started at moment estimates, or at the mode found on an earlier mesh."""
    free = np.array([r.free for r in resolved])
    fixed = np.array([r.log_middle for r in resolved])
    lower = np.log([shortest_km, _SD_BOUNDS[0], _NUGGET_BOUNDS[0]])
    upper = np.log([max(longest_km, 10.0 * shortest_km), _SD_BOUNDS[1], _NUGGET_BOUNDS[1]])
    if before is not None:
        theta = before.state.theta
        start = np.array([theta.log_range, theta.log_sd, theta.log_nugget])
    else:
        n, y = rows.data.examined, rows.data.positive
        logit = np.log((y + 0.5) / (n - y + 0.5))
        noise = np.mean(1.0 / (y + 0.5) + 1.0 / (n - y + 0.5))
        spread = float(np.clip(np.var(logit) - noise, 0.1, 6.0))
        start = np.log([min(resolved[0].middle, longest_km / 4.0), 1.0, 1.0])
        start[1:] = 0.5 * np.log([0.75 * spread, 0.25 * spread])
    start = np.where(free, np.clip(start, lower + 1e-3, upper - 1e-3), fixed)
    return Outer(start, free, tuple(r.log_density for r in resolved), lower, upper)  # type: ignore[arg-type]


def _coefficients(core: Engine, posterior: Posterior, terms: tuple[str, ...]) -> pd.DataFrame:
    parts = [core.coefficients(state) for state in posterior.states]
    mean = np.array([m for m, _ in parts])
    sd = np.sqrt(np.array([np.diag(c) for _, c in parts]))
    w = posterior.weights
    average = w @ mean
    spread = np.sqrt(w @ (sd**2 + mean**2) - average**2)
    limits = [[_gaussian_mixture_quantile(mean[:, j], sd[:, j], w, q) for q in (0.025, 0.5, 0.975)]
              for j in range(len(terms))]  # fmt: skip
    lower, median, upper = np.array(limits).T
    return pd.DataFrame(
        {"mean": average, "sd": spread, "lower95": lower, "median": median, "upper95": upper},
        index=pd.Index(terms, name="term"),
    )


def _gaussian_mixture_quantile(
    mean: NDArray[np.float64], sd: NDArray[np.float64], weight: NDArray[np.float64], q: float
) -> float:
    lo, hi = float(np.min(mean - 10.0 * sd)), float(np.max(mean + 10.0 * sd))
    for _ in range(80):
        middle = 0.5 * (lo + hi)
        if float(weight @ ndtr((middle - mean) / sd)) < q:
            lo = middle
        else:
            hi = middle
    return 0.5 * (lo + hi)


def _hyperparameters(posterior: Posterior, resolved: tuple[Resolved, ...]) -> pd.DataFrame:
    theta = posterior.mode.theta
    rows = []
    for j, (prior, at_mode) in enumerate(
        zip(resolved, (theta.range_km, theta.sd, theta.nugget_sd), strict=True)
    ):
        if prior.free:
            values, weights = posterior.marginals[j]
            limits = [math.exp(weighted_quantile(values, weights, q)) for q in (0.5, 0.025, 0.975)]
        else:
            limits = [at_mode] * 3
        rows.append([*limits, at_mode])
    return pd.DataFrame(
        rows,
        columns=["median", "lower95", "upper95", "at_mode"],
        index=pd.Index(HYPERPARAMETERS, name="name"),
    )


def _sites(rows: Rows, unit: NDArray[np.int64], region: Region) -> gpd.GeoDataFrame:
    names = np.array([*region.units["unit"].tolist(), None], dtype=object)
    n, y = rows.data.examined, rows.data.positive
    frame = pd.DataFrame(
        {
            "site": rows.site,
            "examined": n.astype(int),
            "positive": y.astype(int),
            "proportion": y / n,
            "unit": names[unit[rows.first]],
        }
    )
    return gpd.GeoDataFrame(frame, geometry=gpd.points_from_xy(*(1000.0 * rows.xy_km.T)), crs=region.crs)


def _all_findings(survey: Survey, region: Region, designed: Design, found: list[Finding]) -> pd.DataFrame:
    frames = (survey.findings, region.findings, designed.findings, findings_frame(found))
    present = [frame for frame in frames if len(frame)]
    return pd.concat(present, ignore_index=True) if present else findings_frame([])
