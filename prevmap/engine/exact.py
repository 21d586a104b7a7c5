"""Dense engine without a mesh: the reference the mesh is held against.

The linear predictor at the rows is ``eta ~ N(X mu, S)``, ``S = K + X V X'`` with the Matern covariance ``K``
and the coefficient prior ``N(mu, V)``. Laplace approximation and gradient follow Rasmussen & Williams (2006),
algorithms 3.1 and 5.1, written with ``I + K W`` so that a curvature ``W`` with blocks and without a square
root (imperfect tests) is allowed, and with the coefficients apart so that flat priors lose no digits.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, lu_factor, lu_solve
from scipy.spatial.distance import cdist

from prevmap.engine.laplace import Theta, clamp_blocks, unconverged
from prevmap.engine.likelihood import Observations, evaluate, higher_terms
from prevmap.engine.matern import correlation, correlation_range_derivative
from prevmap.errors import FitError

_DECREMENT = 1e-10
_MAX_STEPS = 100
_JITTER = 1e-10  # relative to the largest variance, for joint draws at points that (nearly) coincide
_LARGEST_JOINT = 6_000  # points whose dense joint covariance still fits in 300 MB


@dataclass(frozen=True, slots=True)
class DenseRows:
    """Places to predict at: positions (n, 2) in km and covariates (n, p)."""

    xy_km: NDArray[np.float64]
    design: NDArray[np.float64]

    def __len__(self) -> int:
        return int(self.design.shape[0])


@dataclass(frozen=True, slots=True)
class DenseState:
    """The Laplace approximation at one value of the hyperparameters.

    Attributes
    ----------
    theta : Theta
    mode : (n_rows + p,) float
        Weights ``a`` and coefficients ``beta`` with ``eta* = X beta + K a``.
    log_evidence : float
    gradient : (3,) float
    mean_shift : (n_rows + p,) float
        What to add to ``mode`` for the first-order corrected posterior mean.
    curvature : (sum of squared block sizes,) float
    iterations : int
    smallest_pivot : float
        Smallest pivot of ``I + K W``.
    """

    theta: Theta
    mode: NDArray[np.float64]
    log_evidence: float
    gradient: NDArray[np.float64]
    mean_shift: NDArray[np.float64]
    curvature: NDArray[np.float64]
    iterations: int
    smallest_pivot: float


@dataclass(frozen=True, slots=True)
class _Reduction:
    """What the data take away from the prior covariance.

    ``field`` = W (I + K W)^-1 at known coefficients, ``whole`` = W (I + S W)^-1 with them estimated;
    ``coefficients`` and ``covariance`` are the posterior covariances of coefficients and linear predictor,
    ``log_determinant`` is log|I + S W|.
    """

    lu: tuple[NDArray[np.float64], NDArray[np.int32]]
    design: NDArray[np.float64]
    field: NDArray[np.float64]
    whole: NDArray[np.float64]
    coefficients: NDArray[np.float64]
    covariance: NDArray[np.float64]
    log_determinant: float
    smallest_pivot: float

    def solve(
        self, right: NDArray[np.float64], prior: NDArray[np.float64], weighted_design: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Weights and coefficients of the linear system of a Newton step.

        (I + W K) a + W X beta = right;  V^-1 beta = prior + X' a.
        """
        alone = lu_solve(self.lu, right, trans=1)
        beta = self.coefficients @ (prior + self.design.T @ alone)
        return alone - lu_solve(self.lu, weighted_design @ beta, trans=1), beta


class DenseModel:
    """A survey under the dense engine; what does not change with the hyperparameters.

    Parameters
    ----------
    data : Observations
    xy_km : (n_rows, 2) float
    design : (n_rows, p) float
    coefficient_mean, coefficient_sd : (p,) float
    nu : {0.5, 1.0, 1.5, 2.5}
    """

    def __init__(
        self,
        data: Observations,
        xy_km: NDArray[np.float64],
        design: NDArray[np.float64],
        coefficient_mean: NDArray[np.float64],
        coefficient_sd: NDArray[np.float64],
        nu: float = 1.0,
    ) -> None:
        self.data = data
        self.xy_km = xy_km
        self.design = design
        self.nu = nu
        self.coefficient_mean = np.asarray(coefficient_mean, dtype=float)
        self.coefficient_variance = np.asarray(coefficient_sd, dtype=float) ** 2
        self._distance = cdist(xy_km, xy_km)

    def _blocks(self, curvature: NDArray[np.float64]) -> NDArray[np.float64]:
        """Dense block-diagonal matrix of the curvature blocks."""
        start, block = self.data.site_start, self.data.block_start
        out = np.zeros(self._distance.shape)
        for s in range(start.size - 1):
            a, b = start[s], start[s + 1]
            out[a:b, a:b] = curvature[block[s] : block[s + 1]].reshape(b - a, b - a)
        return out

    def _gather(self, covariance: NDArray[np.float64]) -> NDArray[np.float64]:
        start = self.data.site_start
        return np.concatenate([covariance[a:b, a:b].ravel() for a, b in pairwise(start)])

    def _field(self, theta: Theta) -> NDArray[np.float64]:
        return theta.sd**2 * correlation(self._distance, theta.range_km, self.nu)

    def _mode(
        self, theta: Theta, K: NDArray[np.float64], start: NDArray[np.float64] | None
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
        """Field weights a and coefficients beta at the mode, by Newton's method with step halving."""
        X, n = self.design, len(self.xy_km)
        a = np.zeros(n) if start is None else start[:n].copy()
        beta = self.coefficient_mean.copy() if start is None else start[n:].copy()
        prior = 1.0 / self.coefficient_variance

        def objective(weights: NDArray[np.float64], coefficients: NDArray[np.float64]) -> float:
            f, d = K @ weights, coefficients - self.coefficient_mean
            value = evaluate(self.data, X @ coefficients + f, theta.nugget_sd).value
            return value - 0.5 * float(weights @ f) - 0.5 * float(d @ (prior * d))

        value = objective(a, beta)
        trace: list[float] = []
        for step_number in range(1, _MAX_STEPS + 1):
            eta = X @ beta + K @ a
            terms = evaluate(self.data, eta, theta.nugget_sd)
            W = self._blocks(clamp_blocks(terms.curvature, self.data))
            reduction = self._reduction(K, W)
            da, dbeta = reduction.solve(W @ eta + terms.gradient, prior * self.coefficient_mean, W @ X)
            da, dbeta = da - a, dbeta - beta
            decrement = float(da @ (K @ (terms.gradient - a)))
            decrement += float(dbeta @ (X.T @ terms.gradient - prior * (beta - self.coefficient_mean)))
            trace.append(decrement)
            if not np.isfinite(decrement) or decrement < -1e-6:
                break
            if decrement < _DECREMENT:
                return a + da, beta + dbeta, step_number
            length = 1.0
            for _ in range(30):
                trial = objective(a + length * da, beta + length * dbeta)
                if trial >= value + 1e-4 * length * decrement - 1e-11 * abs(value):
                    break
                length *= 0.5
            a, beta = a + length * da, beta + length * dbeta
            value = trial
        raise unconverged(theta, trace)

    def laplace(self, theta: Theta, start: NDArray[np.float64] | None = None) -> DenseState:
        """Mode, log-evidence and exact gradient at ``theta``.

        Raises
        ------
        FitError
            Where Newton's method fails or the posterior is not peaked at the point it found.
        """
        K, X = self._field(theta), self.design
        a, beta, steps = self._mode(theta, K, start)
        eta = X @ beta + K @ a
        terms = evaluate(self.data, eta, theta.nugget_sd)
        W = self._blocks(terms.curvature)
        reduction = self._reduction(K, W)
        d = beta - self.coefficient_mean
        log_evidence = (
            terms.value - 0.5 * float(a @ (K @ a)) - 0.5 * float(d @ (d / self.coefficient_variance))
        )
        log_evidence -= 0.5 * reduction.log_determinant

        higher = higher_terms(self.data, eta, theta.nugget_sd, self._gather(reduction.covariance))
        shift, shift_beta = reduction.solve(0.5 * higher.third, np.zeros(beta.size), W @ X)
        d_range = theta.sd**2 * correlation_range_derivative(self._distance, theta.range_km, self.nu)
        gradient = np.zeros(3)
        for at, dK in ((0, d_range), (1, 2.0 * K)):
            trace = float(np.sum(reduction.whole * dK))
            gradient[at] = 0.5 * float(a @ dK @ a) - 0.5 * trace + float(shift @ (dK @ a))
        if np.isfinite(theta.log_nugget):
            implicit = float((K @ shift + X @ shift_beta) @ higher.nugget_gradient)
            gradient[2] = higher.nugget_value + 0.5 * higher.nugget_hessian + implicit
        return DenseState(
            theta,
            np.concatenate([a, beta]),
            log_evidence,
            gradient,
            np.concatenate([shift, shift_beta]),
            terms.curvature,
            steps,
            reduction.smallest_pivot,
        )

    def locate(self, xy_km: NDArray[np.float64], design: NDArray[np.float64]) -> DenseRows:
        """Places to predict at; every place is possible without a mesh."""
        return DenseRows(np.asarray(xy_km, dtype=float), np.asarray(design, dtype=float))

    def on_mesh(self, xy_km: NDArray[np.float64]) -> NDArray[np.bool_]:
        """(n,) bool: all true, since this engine has no mesh to leave."""
        return np.ones(len(xy_km), dtype=bool)

    def _reduction(self, K: NDArray[np.float64], W: NDArray[np.float64]) -> _Reduction:
        """Condition on the data in two steps, field then coefficients, so that flat priors lose no digits.

        Raises
        ------
        FitError
            Where the Hessian of the log posterior is not positive definite.
        """
        X, n = self.design, W.shape[0]
        lu = lu_factor(np.eye(n) + K @ W)
        pivots = np.diag(lu[0])
        field = lu_solve(lu, W.T, trans=1).T  # W (I + K W)^-1
        field = 0.5 * (field + field.T)
        information = np.diag(1.0 / self.coefficient_variance) + X.T @ field @ X
        # K W has the real eigenvalues of a symmetric matrix; only an imperfect test can make one negative.
        peaked = bool(np.all(pivots != 0))
        if not self.data.perfect:
            peaked = peaked and bool(np.min(np.linalg.eigvals(np.eye(n) + K @ W).real) > 0)
        eigenvalues = np.linalg.eigvalsh(information)
        if not peaked or eigenvalues[0] <= 0:
            raise FitError("the posterior is not peaked at the mode: its Hessian is not positive definite")
        log_determinant = float(np.sum(np.log(np.abs(pivots)))) + float(
            np.sum(np.log(self.coefficient_variance))
        )
        log_determinant += float(np.linalg.slogdet(information)[1])
        coefficients = np.linalg.inv(information)
        reach = lu_solve(lu, X)  # (I + K W)^-1 X
        covariance = lu_solve(lu, K) + reach @ coefficients @ reach.T
        whole = field - field @ X @ coefficients @ X.T @ field
        return _Reduction(
            lu, X, field, whole, coefficients, covariance, log_determinant, float(np.min(np.abs(pivots)))
        )

    def _conditioned(self, state: DenseState) -> _Reduction:
        return self._reduction(self._field(state.theta), self._blocks(state.curvature))

    def moments(self, state: DenseState, rows: DenseRows) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean and variance of the linear predictor (n,) at each row."""
        mean, near, left, reduction = self._predictive(state, rows)
        variance = state.theta.sd**2 - np.einsum("ij,ij->i", near @ reduction.field, near)
        variance += np.einsum("ij,ij->i", left @ reduction.coefficients, left)
        return mean, np.maximum(variance, 0.0)

    def _predictive(
        self, state: DenseState, rows: DenseRows
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], _Reduction]:
        """Mean, field covariance with the data, and what of each row's covariates the field does not explain."""
        reduction = self._conditioned(state)
        near = state.theta.sd**2 * correlation(cdist(rows.xy_km, self.xy_km), state.theta.range_km, self.nu)
        n = len(self.xy_km)
        latent = state.mode + state.mean_shift
        return (
            rows.design @ latent[n:] + near @ latent[:n],
            near,
            rows.design - near @ reduction.field @ self.design,
            reduction,
        )

    def coefficients(self, state: DenseState) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean (p,) and covariance (p, p) of the coefficients."""
        latent = state.mode + state.mean_shift
        return latent[len(self.xy_km) :], self._conditioned(state).coefficients

    def draws(
        self, state: DenseState, windows: Iterable[DenseRows], rng: np.random.Generator, count: int
    ) -> Iterator[NDArray[np.float64]]:
        """Joint draws of the linear predictor, one array (n_window, count) per window of rows.

        Raises
        ------
        FitError
            Above 6,000 rows: use the mesh engine for joint draws there.
        """
        parts = list(windows)
        xy = np.concatenate([r.xy_km for r in parts])
        design = np.concatenate([r.design for r in parts])
        if len(xy) > _LARGEST_JOINT:
            raise FitError(
                f"joint draws at {len(xy):,} points need a dense matrix of that order; the exact engine allows "
                f"{_LARGEST_JOINT:,}. Use engine='mesh' or a coarser grid"
            )
        rows = DenseRows(xy, design)
        mean, near, left, reduction = self._predictive(state, rows)
        covariance = state.theta.sd**2 * correlation(cdist(xy, xy), state.theta.range_km, self.nu)
        covariance += left @ reduction.coefficients @ left.T - near @ reduction.field @ near.T
        covariance = 0.5 * (covariance + covariance.T)
        covariance[np.diag_indices_from(covariance)] += _JITTER * state.theta.sd**2
        joint = mean[:, None] + cholesky(covariance, lower=True) @ rng.standard_normal((len(xy), count))
        start = 0
        for part in parts:
            yield joint[start : start + len(part)]
            start += len(part)
