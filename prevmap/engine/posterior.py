"""Hyperparameters: their mode, their integration, and the mixture that all predictions use.

The log posterior of ``theta`` = (log range, log sd, log nugget) is the Laplace log-evidence plus the log prior
density *in theta*. Its mode is found by a quasi-Newton method with the exact gradient. Integration follows
Rue, Martino & Chopin (2009, JRSS-B 71:319-392, section 3.1): an even lattice in the eigenbasis of the
curvature at the mode, grown outward while the density has not fallen off, so that slow tails get points.
"""

from __future__ import annotations

import itertools
import logging
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RBFInterpolator
from scipy.spatial import cKDTree

from prevmap.engine.laplace import Theta
from prevmap.errors import FitError

log = logging.getLogger("prevmap")

_STEP = (
    1.5  # lattice step in posterior standard deviations: trapezoid error about 2 exp(-2 pi^2/step^2) = 3e-4
)
_DROP = 4.0  # a lattice point this far below the mode (log scale) gets neighbours only where a slow tail asks
_TAIL = 0.002  # mass beyond the last point of a line, relative to that at the mode
_MOST_POINTS = 300
_NEGLIGIBLE = 12.0  # points this far below the mode only disturb an interpolant
_OFFSET = 0.25  # where a slope is turned into a value, in posterior standard deviations
_DROPPED_MASS = 3e-3
_FLATTEST = 0.05  # smallest curvature of the log posterior taken at face value
_DIFFERENCE = 0.02  # step in theta for the curvature from exact gradients
_GRADIENT = 0.02  # largest slope of the log posterior left at the mode
_REMAINING = 1e-5  # squared distance to the mode left, in posterior standard deviations
_FIRST_SCALE = 0.3  # a posterior variance of log hyperparameters that is about right
_LONGEST = 1.0  # no step changes a hyperparameter by more than a factor e
_MOST_STEPS = 60
_HALVINGS = 12


class State(Protocol):
    """What an engine returns at one ``theta``."""

    @property
    def theta(self) -> Theta: ...  # noqa: D102
    @property
    def mode(self) -> NDArray[np.float64]: ...  # noqa: D102
    @property
    def log_evidence(self) -> float: ...  # noqa: D102
    @property
    def gradient(self) -> NDArray[np.float64]: ...  # noqa: D102
    @property
    def iterations(self) -> int: ...  # noqa: D102
    @property
    def smallest_pivot(self) -> float: ...  # noqa: D102


class Engine(Protocol):
    """The mesh engine and the dense engine, as the outer problem sees them."""

    def laplace(self, theta: Theta, start: NDArray[np.float64] | None = None) -> Any:
        """State at ``theta``, Newton's method started at ``start``."""

    def locate(self, xy_km: NDArray[np.float64], design: NDArray[np.float64]) -> Any:
        """Rows to predict at."""

    def on_mesh(self, xy_km: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Which positions can be predicted."""

    def moments(self, state: Any, rows: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean and variance of the linear predictor."""

    def coefficients(self, state: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean and covariance of the coefficients."""

    def draws(
        self, state: Any, windows: Iterable[Any], rng: np.random.Generator, count: int
    ) -> Iterator[NDArray[np.float64]]:
        """Joint draws of the linear predictor, window by window."""


LogPrior = Callable[[float], tuple[float, float]]


@dataclass(frozen=True, slots=True)
class Outer:
    """The outer problem: which hyperparameters are free, their priors, and where the others stand.

    Attributes
    ----------
    start : (3,) float
        theta to start from; entries that are not free are fixed there (minus infinity: no nugget).
    free : (3,) bool
    priors : three functions or None
        log density in theta and its derivative, for each free entry.
    lower, upper : (3,) float
        Bounds that keep the search where the numbers make sense.
    """

    start: NDArray[np.float64]
    free: NDArray[np.bool_]
    priors: tuple[LogPrior | None, LogPrior | None, LogPrior | None]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]

    def theta(self, free_values: NDArray[np.float64]) -> Theta:
        """Whole theta with the free entries replaced."""
        full = self.start.copy()
        full[self.free] = free_values
        return Theta(*(float(v) for v in full))

    def log_prior(self, free_values: NDArray[np.float64]) -> tuple[float, NDArray[np.float64]]:
        """Log prior density in theta of the free entries, and its gradient."""
        value, gradient = 0.0, np.zeros(free_values.size)
        for at, j in enumerate(np.flatnonzero(self.free)):
            prior = self.priors[j]
            if prior is not None:
                v, g = prior(float(free_values[at]))
                value += v
                gradient[at] = g
        return value, gradient


@dataclass(frozen=True, slots=True)
class Posterior:
    """Hyperparameters integrated: a weighted set of Laplace approximations.

    Attributes
    ----------
    states : tuple of State
        One per integration point, the mode first.
    weights : (n_points,) float, sums to 1
    log_evidence : float
        Laplace log p(y), integrated over the free hyperparameters with their prior.
    mode : State
    marginals : {index in theta: (values, weights)}
        Fine discrete marginal of each free entry of theta.
    evaluations, iterations : int
        Evaluations of the log-evidence, and Newton steps in all of them.
    gradient_norm : float
        Norm of the gradient of the log posterior at the mode.
    warnings : tuple of str
    """

    states: tuple[Any, ...]
    weights: NDArray[np.float64]
    log_evidence: float
    mode: Any
    marginals: dict[int, tuple[NDArray[np.float64], NDArray[np.float64]]]
    evaluations: int
    iterations: int
    gradient_norm: float
    warnings: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Peak:
    """The mode of the hyperparameters and the curvature there.

    Attributes
    ----------
    values : (d,) float
        Free entries of theta.
    log_posterior : float
        Log-evidence plus log prior density.
    state : State
    basis : (d, d) float
        Columns are the principal directions of the curvature, one posterior standard deviation long.
    gradient_norm : float
        What is left of the gradient, in posterior standard deviations.
    evaluations, iterations : int
    warnings : tuple of str
    """

    values: NDArray[np.float64]
    log_posterior: float
    state: Any
    basis: NDArray[np.float64]
    gradient_norm: float
    evaluations: int
    iterations: int
    warnings: tuple[str, ...]

    @property
    def log_volume(self) -> float:
        """Log of the volume of theta per unit volume in posterior standard deviations."""
        return float(np.linalg.slogdet(self.basis)[1]) if self.values.size else 0.0


def find_peak(
    engine: Engine,
    outer: Outer,
    *,
    start: NDArray[np.float64] | None = None,
    tick: Callable[[str], None] | None = None,
) -> Peak:
    """Find the mode of the hyperparameters and the curvature there.

    Parameters
    ----------
    engine : Engine
    outer : Outer
    start : (n_latent,) float, optional
        Latent vector to start the first Newton iteration from.
    tick : callable, optional
        Called with the name of the stage after every evaluation; may raise to interrupt.

    Raises
    ------
    FitError
        Where the inner problem fails at the starting point or no mode is found.
    """
    search = _Search(engine, outer, start, tick)
    if not np.any(outer.free):
        value, _, state = search.evaluate(np.zeros(0), "mode")
        return Peak(np.zeros(0), value, state, np.zeros((0, 0)), 0.0, search.count, search.iterations, ())
    mode = search.find_mode()
    value, gradient, best = search.evaluate(mode, "curvature")
    eigenvalues, vectors = np.linalg.eigh(search.curvature(mode))
    if np.any(eigenvalues < _FLATTEST):
        # A flat direction: its scale is capped so that the lattice stays where the priors mean something.
        search.warnings.append(
            "the posterior of the hyperparameters is nearly flat in one direction: the data say little about it"
        )
        eigenvalues = np.maximum(eigenvalues, _FLATTEST)
    basis = vectors / np.sqrt(eigenvalues)
    norm = float(np.sqrt(gradient @ (basis @ basis.T) @ gradient))
    return Peak(mode, value, best, basis, norm, search.count, search.iterations, tuple(search.warnings))


def infer(
    engine: Engine,
    outer: Outer,
    peak: Peak,
    *,
    integrate: bool = True,
    tick: Callable[[str], None] | None = None,
) -> Posterior:
    """Integrate over the hyperparameters, or keep their mode alone with a Gaussian around it.

    Parameters
    ----------
    engine : Engine
    outer : Outer
    peak : Peak
        From `find_peak`.
    integrate : bool
    tick : callable, optional
        Called with the name of the stage after every evaluation; may raise to interrupt.
    """
    index = np.flatnonzero(outer.free)
    if not index.size:
        return Posterior(
            (peak.state,),
            np.ones(1),
            peak.log_posterior,
            peak.state,
            {},
            peak.evaluations,
            peak.iterations,
            0.0,
            (),
        )
    if not integrate:
        evidence = peak.log_posterior + 0.5 * index.size * np.log(2.0 * np.pi) + peak.log_volume
        z = np.linspace(-4.0, 4.0, 401)
        sd = np.sqrt(np.diag(peak.basis @ peak.basis.T))
        density = np.exp(-0.5 * z**2) / np.sum(np.exp(-0.5 * z**2))
        marginals = {int(j): (peak.values[at] + sd[at] * z, density) for at, j in enumerate(index)}
        return Posterior(
            (peak.state,), np.ones(1), evidence, peak.state, marginals,
            peak.evaluations, peak.iterations, peak.gradient_norm, peak.warnings,
        )  # fmt: skip
    search = _Search(engine, outer, peak.state.mode, tick)
    points, values, slopes, states = search.lattice(peak)
    warnings = list(peak.warnings)
    if len(states) >= _MOST_POINTS:
        warnings.append(
            f"integration over the hyperparameters stopped at {_MOST_POINTS} points with tails still open"
        )
    top = float(np.max(values))
    mass = np.exp(values - top)
    evidence = top + np.log(np.sum(mass)) + index.size * np.log(_STEP) + peak.log_volume
    kept = _carrying(mass)
    return Posterior(
        tuple(states[k] for k in kept), mass[kept] / np.sum(mass[kept]), evidence, peak.state,
        _marginals(points, values, slopes, peak, index),
        peak.evaluations + search.count, peak.iterations + search.iterations, peak.gradient_norm, tuple(warnings),
    )  # fmt: skip


def _neighbour(at: tuple[int, ...], axis: int, side: int) -> tuple[int, ...]:
    return tuple(c + side * (i == axis) for i, c in enumerate(at))


def _worth_extending(height: float, inner: float | None, here: float) -> bool:
    """Whether the lattice goes on beyond a point: it is high, or the density falls off slowly there.

    With the fall ``f`` from the point's inner neighbour, a tail that goes on falling like that holds
    ``exp(height) e^-f / (1 - e^-f)`` of the mass at the mode.
    """
    if height >= -_DROP:
        return True
    if inner is None or inner <= here:
        return False
    fall = inner - here
    return float(np.exp(height - fall) / -np.expm1(-fall)) > _TAIL


def _carrying(mass: NDArray[np.float64]) -> NDArray[np.int64]:
    """Points that carry all but a few thousandths of the mass, in their order; the others only cost time."""
    order = np.argsort(-mass, kind="stable")
    enough = int(np.searchsorted(np.cumsum(mass[order]), (1.0 - _DROPPED_MASS) * np.sum(mass))) + 1
    return np.sort(order[:enough])


class _Search:
    """Evaluations of the log posterior with warm starts, counted."""

    def __init__(
        self,
        engine: Engine,
        outer: Outer,
        start: NDArray[np.float64] | None,
        tick: Callable[[str], None] | None,
    ) -> None:
        self.engine, self.outer, self.tick = engine, outer, tick
        self.latest = start
        self.count = 0
        self.iterations = 0
        self.warnings: list[str] = []

    def evaluate(
        self, free_values: NDArray[np.float64], stage: str, start: NDArray[np.float64] | None = None
    ) -> tuple[float, NDArray[np.float64], Any]:
        """Log posterior, its gradient in the free entries, and the state."""
        state = self.engine.laplace(self.outer.theta(free_values), self.latest if start is None else start)
        self.count += 1
        self.iterations += int(state.iterations)
        if start is None:
            self.latest = state.mode
        if self.tick is not None:
            self.tick(stage)
        prior, slope = self.outer.log_prior(free_values)
        return state.log_evidence + prior, state.gradient[self.outer.free] + slope, state

    def find_mode(self) -> NDArray[np.float64]:
        """Free entries at the mode of the log posterior, by BFGS with bounded steps."""
        outer = self.outer
        lower, upper = outer.lower[outer.free], outer.upper[outer.free]
        x = np.clip(outer.start[outer.free], lower, upper)
        value, gradient, _ = self.evaluate(x, "mode")
        inverse = _FIRST_SCALE * np.eye(x.size)
        for _ in range(_MOST_STEPS):
            # A coordinate held by its bound does not keep the search going.
            held = ((x <= lower) & (gradient < 0)) | ((x >= upper) & (gradient > 0))
            ascent = np.where(held, 0.0, inverse @ np.where(held, 0.0, gradient))
            remaining = float(gradient[~held] @ ascent[~held])
            if remaining < _REMAINING and float(np.max(np.abs(gradient[~held]), initial=0.0)) < _GRADIENT:
                return self._checked(x, lower, upper)
            ascent *= min(1.0, _LONGEST / float(np.max(np.abs(ascent))))
            length = 1.0
            for _half in range(_HALVINGS):
                trial = np.clip(x + length * ascent, lower, upper)
                try:
                    trial_value, trial_gradient, _ = self.evaluate(trial, "mode")
                except FitError as error:
                    # An extreme trial value may be out of reach numerically; a shorter step is not.
                    log.debug("a trial value of the hyperparameters failed: %s", error)
                else:
                    if trial_value >= value + 1e-4 * float(gradient @ (trial - x)) - 1e-9 * abs(value):
                        break
                length *= 0.5
            else:
                raise FitError(
                    f"the search for the mode of the hyperparameters stopped after {self.count} evaluations with "
                    f"gradient {float(np.max(np.abs(gradient))):.3g}. Give tighter priors"
                )
            step, change = trial - x, gradient - trial_gradient
            if float(step @ change) > 1e-10:
                rho = 1.0 / float(step @ change)
                left = np.eye(x.size) - rho * np.outer(step, change)
                inverse = left @ inverse @ left.T + rho * np.outer(step, step)
            x, value, gradient = trial, trial_value, trial_gradient
        raise FitError(
            f"no mode of the hyperparameters was found in {_MOST_STEPS} steps; the gradient is still "
            f"{float(np.max(np.abs(gradient))):.3g}. Give tighter priors"
        )

    def _checked(
        self, x: NDArray[np.float64], lower: NDArray[np.float64], upper: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        names = np.array(["range_km", "sd", "nugget_sd"])[self.outer.free]
        for name, v, lo, hi in zip(names, x, lower, upper, strict=True):
            if v <= lo or v >= hi:
                self.warnings.append(
                    f"{name} came to rest at the end of what was searched ({np.exp(v):.3g}): check its prior"
                )
        return x

    def curvature(self, mode: NDArray[np.float64]) -> NDArray[np.float64]:
        """Minus the Hessian of the log posterior, by central differences of its exact gradient."""
        d = mode.size
        out = np.empty((d, d))
        at_mode = self.latest
        for j in range(d):
            step = np.zeros(d)
            step[j] = _DIFFERENCE
            up = self.evaluate(mode + step, "curvature", at_mode)[1]
            down = self.evaluate(mode - step, "curvature", at_mode)[1]
            out[j] = -(up - down) / (2.0 * _DIFFERENCE)
        return 0.5 * (out + out.T)

    def lattice(
        self, peak: Peak
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], list[Any]]:
        """Points z on the lattice grown from the mode outward: log posterior, its slope in z, states."""
        d = peak.values.size
        lower, upper = self.outer.lower[self.outer.free], self.outer.upper[self.outer.free]
        origin = (0,) * d
        values = {origin: peak.log_posterior}
        slopes = {origin: np.zeros(d)}
        states = {origin: peak.state}
        queue = [origin]
        while queue and len(states) < _MOST_POINTS:
            parent = queue.pop(0)
            for j, side in itertools.product(range(d), (-1, 1)):
                child = _neighbour(parent, j, side)
                if child in values or len(states) >= _MOST_POINTS:
                    continue
                inner = values.get(_neighbour(parent, j, -side))
                if not _worth_extending(values[parent] - peak.log_posterior, inner, values[parent]):
                    continue
                at = peak.values + peak.basis @ (_STEP * np.array(child))
                if not np.all((at > lower) & (at < upper)):
                    continue
                values[child], gradient, states[child] = self.evaluate(at, "integration", states[parent].mode)
                slopes[child] = peak.basis.T @ gradient
                queue.append(child)
        keys = list(values)
        return (
            _STEP * np.array(keys, dtype=float).reshape(len(keys), d),
            np.array([values[k] for k in keys]),
            np.array([slopes[k] for k in keys]),
            [states[k] for k in keys],
        )


def _marginals(
    points: NDArray[np.float64],
    values: NDArray[np.float64],
    slopes: NDArray[np.float64],
    peak: Peak,
    index: NDArray[np.int64],
) -> dict[int, tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """Discrete marginals of theta on a fine lattice, through an interpolant of the log density.

    The slopes enter as two more values close to each point on every axis. A cubic radial interpolant with a
    quadratic part reproduces a Gaussian exactly and bends with skewness.
    """
    d = points.shape[1]
    high = values > values.max() - _NEGLIGIBLE
    z, v, g = points[high], values[high] - values.max(), slopes[high]
    known, heights = [z], [v]
    for j, side in itertools.product(range(d), (-1.0, 1.0)):
        shift = side * _OFFSET
        known.append(z + shift * np.eye(d)[j])
        heights.append(v + shift * g[:, j] - 0.5 * shift**2)  # unit curvature, the scale of z
    fine_step = 0.05 if d == 1 else 0.25
    axes = [np.arange(z[:, j].min() - _STEP, z[:, j].max() + _STEP + 1e-9, fine_step) for j in range(d)]
    fine = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, d)
    distance, nearest = cKDTree(z).query(fine, p=np.inf)
    inside = distance <= _STEP + 1e-9
    fine, distance, nearest = fine[inside], distance[inside], nearest[inside]
    density = RBFInterpolator(np.concatenate(known), np.concatenate(heights), kernel="cubic", degree=2)(fine)
    # Beyond the outermost points the density goes on, but may only fall.
    beyond = distance > _STEP / 2 + 1e-9
    density[beyond] = np.minimum(density[beyond], v[nearest[beyond]])
    weight = np.exp(np.minimum(density, 1.0))
    weight /= weight.sum()
    theta = peak.values + fine @ peak.basis.T
    return {int(j): (theta[:, at], weight) for at, j in enumerate(index)}


def weighted_quantile(values: NDArray[np.float64], weights: NDArray[np.float64], probability: float) -> float:
    """Quantile of a fine discrete distribution, each atom spread over its place in the order."""
    order = np.argsort(values, kind="stable")
    cumulative = np.cumsum(weights[order]) - 0.5 * weights[order]
    return float(np.interp(probability, cumulative, values[order]))
