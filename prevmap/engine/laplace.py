"""Laplace approximation of the mesh model at fixed hyperparameters, with its exact gradient.

Latent vector ``x`` = (mesh weights, coefficients), prior precision ``P = blockdiag(Q(range, sd), Lambda)``,
linear predictor ``eta = B x``. With ``x*`` the mode and ``W`` minus the Hessian of log L at ``B x*``,

    log p(y | theta) ~ log L(B x*) - 1/2 (x* - mu)' P (x* - mu) + 1/2 log|P| - 1/2 log|H|,  H = P + B' W B

(Tierney & Kadane 1986, JASA 81:82-86; Rasmussen & Williams 2006, eq. 3.32). Its gradient follows
Rasmussen & Williams 2006, algorithm 5.1, written for a sparse precision: every trace needs only entries of
``H^-1`` on the pattern of ``H``, and the implicit term costs one extra solve.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csc_matrix, csr_matrix, hstack

from prevmap.engine.likelihood import Observations, Terms, evaluate, higher_terms
from prevmap.engine.matern import SpdeMatrices, precision_range_derivative, precision_upper, spde_matrices
from prevmap.engine.mesh import Mesh, locate
from prevmap.engine.project import MeshRows, row_moments, row_values
from prevmap.engine.sparse import Factor, Factorizer
from prevmap.errors import FitError

_DECREMENT = 1e-10  # one more full Newton step follows, which squares the remaining error
_MAX_STEPS = 100


@dataclass(frozen=True, slots=True)
class Theta:
    """Hyperparameters on the log scale.

    Attributes
    ----------
    log_range, log_sd : float
        Logs of the range in km and of the standard deviation of the field on the logit scale.
    log_nugget : float
        Log of the nugget's standard deviation; minus infinity leaves the nugget out.
    """

    log_range: float
    log_sd: float
    log_nugget: float

    @property
    def range_km(self) -> float:
        """Distance sqrt(8 nu)/kappa in km."""
        return float(np.exp(self.log_range))

    @property
    def sd(self) -> float:
        """Standard deviation of the field, logit scale."""
        return float(np.exp(self.log_sd))

    @property
    def nugget_sd(self) -> float:
        """Standard deviation of the nugget, logit scale; 0 without one."""
        return float(np.exp(self.log_nugget))


def clamp_blocks(curvature: NDArray[np.float64], data: Observations) -> NDArray[np.float64]:
    """Curvature blocks with negative eigenvalues set to zero, for a Newton step that always ascends."""
    if data.perfect:
        return curvature
    out = curvature.copy()
    block = data.block_start
    size = np.diff(data.site_start)
    single = size == 1
    at = block[:-1][single]
    out[at] = np.maximum(out[at], 0.0)
    for s in np.flatnonzero(~single):
        k = size[s]
        values, vectors = np.linalg.eigh(out[block[s] : block[s + 1]].reshape(k, k))
        out[block[s] : block[s + 1]] = ((vectors * np.maximum(values, 0.0)) @ vectors.T).ravel()
    return out


def unconverged(theta: Theta, trace: list[float]) -> FitError:
    """Error for a Newton iteration that did not converge, with its last decrements."""
    shown = ", ".join(f"{d:.3g}" for d in trace[-6:])
    return FitError(
        f"Newton's method did not converge in {len(trace)} steps at range {theta.range_km:.4g} km, sd "
        f"{theta.sd:.4g}, nugget sd {theta.nugget_sd:.4g}; last decrements {shown}. Look for sites with "
        "impossible counts, or give tighter priors"
    )


def _key(rows: NDArray[np.int64], columns: NDArray[np.int64], order: int) -> NDArray[np.int64]:
    return columns.astype(np.int64) * order + rows


@dataclass(frozen=True, slots=True)
class State:
    """The Laplace approximation at one value of the hyperparameters.

    Attributes
    ----------
    theta : Theta
    mode : (n_latent,) float
    log_evidence : float
        Log p(y | theta), binomial coefficients included.
    gradient : (3,) float
        Derivatives in log range, log sd and log nugget (0 without a nugget).
    mean_shift : (n_latent,) float
        First-order difference between posterior mean and mode, 1/2 H^-1 B' (third derivatives : covariance).
    inverse : (nnz,) float
        Entries of ``H^-1`` on the upper triangle of the pattern.
    curvature : (sum of squared block sizes,) float
    iterations : int
        Newton steps used.
    smallest_pivot : float
    """

    theta: Theta
    mode: NDArray[np.float64]
    log_evidence: float
    gradient: NDArray[np.float64]
    mean_shift: NDArray[np.float64]
    inverse: NDArray[np.float64]
    curvature: NDArray[np.float64]
    iterations: int
    smallest_pivot: float


class LatentModel:
    """Everything about a survey on a mesh that does not change with the hyperparameters.

    Parameters
    ----------
    data : Observations
    mesh : Mesh
        With ``m`` nodes.
    projector : (n_rows, m) csr_matrix
        Weights of the mesh nodes in each row; a row may reach several triangles.
    design : (n_rows, p) float
        Covariates, intercept first.
    coefficient_mean, coefficient_sd : (p,) float
        Gaussian prior of the coefficients.
    """

    def __init__(
        self,
        data: Observations,
        mesh: Mesh,
        projector: csr_matrix,
        design: NDArray[np.float64],
        coefficient_mean: NDArray[np.float64],
        coefficient_sd: NDArray[np.float64],
    ) -> None:
        self.data = data
        self.mesh = mesh
        self.spde: SpdeMatrices = spde_matrices(mesh)
        self.nodes = int(projector.shape[1])
        self.terms = int(design.shape[1])
        self.order = self.nodes + self.terms
        self.prior_mean = np.concatenate([np.zeros(self.nodes), coefficient_mean])
        self.coefficient_precision = 1.0 / np.asarray(coefficient_sd, dtype=float) ** 2
        self.B = csr_matrix(hstack([projector, csr_matrix(design)], format="csr"))
        self._lay_out_pattern()
        self._k_upper, self._k_mass, self._k_diagonal = self._operator_pattern()
        # The two patterns are analysed once, on values that are sure to be positive definite.
        self._factorize_operator = Factorizer(self._operator(1.0))
        self._factorize = Factorizer(self._upper(self.precision(Theta(0.0, 0.0, -np.inf))))

    def _lay_out_pattern(self) -> None:
        """Pattern of H and the maps from curvature blocks and precision entries into it."""
        m, p, order = self.nodes, self.terms, self.order
        indptr, indices = self.spde.pattern
        q_column = np.repeat(np.arange(m), np.diff(indptr))
        q_key = _key(indices, q_column, order)
        border_row = np.concatenate([np.arange(m + q + 1) for q in range(p)])
        border_column = np.repeat(np.arange(m, m + p), np.arange(m + 1, m + p + 1))
        first, second, left, right, value = self._row_pairs()
        inner_key = _key(np.minimum(left, right), np.maximum(left, right), order)
        keys = np.unique(np.concatenate([q_key, _key(border_row, border_column, order), inner_key]))
        columns, self.indices = (keys // order).astype(np.int32), (keys % order).astype(np.int32)
        self.indptr = np.concatenate([[0], np.cumsum(np.bincount(columns, minlength=order))]).astype(np.int32)
        self._q_at = np.searchsorted(keys, q_key)
        self._diagonal_at = self.indptr[1:] - 1
        at = np.searchsorted(keys, inner_key)
        blocks = self._block_index(first, second)
        shape = (keys.size, self.data.block_start[-1])
        upper = left <= right
        self._assemble = csr_matrix((value[upper], (at[upper], blocks[upper])), shape=shape)
        self._gather = csr_matrix((value, (blocks, at)), shape=shape[::-1])
        off_diagonal = self.indices != columns
        self._twice = np.where(off_diagonal, 2.0, 1.0)

    def _row_pairs(self) -> tuple[NDArray[np.int64], ...]:
        """Rows (first, second) of one site with latent entries (left, right) and products of their weights."""
        start, B = self.data.site_start, self.B
        size = np.diff(start)
        first = np.concatenate(
            [np.repeat(np.arange(a, a + k), k) for a, k in zip(start[:-1], size, strict=True)]
        )
        second = np.concatenate(
            [np.tile(np.arange(a, a + k), k) for a, k in zip(start[:-1], size, strict=True)]
        )
        count = np.diff(B.indptr)
        n_left, n_right = count[first], count[second]
        pair = np.repeat(np.arange(first.size), n_left * n_right)
        offset = np.arange(pair.size) - np.repeat(
            np.cumsum(n_left * n_right) - n_left * n_right, n_left * n_right
        )
        at_left = B.indptr[first[pair]] + offset // n_right[pair]
        at_right = B.indptr[second[pair]] + offset % n_right[pair]
        value = B.data[at_left] * B.data[at_right]
        return first[pair], second[pair], B.indices[at_left], B.indices[at_right], value

    def _block_index(self, first: NDArray[np.int64], second: NDArray[np.int64]) -> NDArray[np.int64]:
        start, block = self.data.site_start, self.data.block_start
        size = np.diff(start)
        site = np.repeat(np.arange(size.size), size)
        s = site[first]
        return block[s] + (first - start[s]) * size[s] + (second - start[s])

    def _operator_pattern(self) -> tuple[csc_matrix, NDArray, NDArray]:
        """Upper triangle of G, C on its pattern, and where the diagonal sits."""
        stiff = csc_matrix(self.spde.stiffness)
        rows, columns = stiff.indices, np.repeat(np.arange(self.nodes), np.diff(stiff.indptr))
        upper = rows <= columns
        order = np.lexsort((rows[upper], columns[upper]))
        rows, columns, values = rows[upper][order], columns[upper][order], stiff.data[upper][order]
        indptr = np.concatenate([[0], np.cumsum(np.bincount(columns, minlength=self.nodes))]).astype(np.int32)
        pattern = csc_matrix((values, rows.astype(np.int32), indptr), shape=stiff.shape)
        diagonal = np.flatnonzero(rows == columns)
        mass = np.zeros(values.size)
        mass[diagonal] = self.spde.lumped
        return pattern, mass, diagonal

    def _operator(self, kappa2: float) -> csc_matrix:
        """Upper triangle of K = kappa^2 C + G."""
        data = kappa2 * self._k_mass + self._k_upper.data
        return csc_matrix((data, self._k_upper.indices, self._k_upper.indptr), shape=self._k_upper.shape)

    def _upper(self, data: NDArray[np.float64]) -> csc_matrix:
        return csc_matrix((data, self.indices, self.indptr), shape=(self.order, self.order))

    def precision(self, theta: Theta) -> NDArray[np.float64]:
        """Upper triangle of the prior precision P, on the pattern of H."""
        out = np.zeros(self.indices.size)
        out[self._q_at] = precision_upper(self.spde, theta.range_km, theta.sd)
        out[self._diagonal_at[self.nodes :]] = self.coefficient_precision
        return out

    def multiply(self, upper: NDArray[np.float64], x: NDArray[np.float64]) -> NDArray[np.float64]:
        """Product of a symmetric matrix, given on the pattern, with a vector."""
        a = self._upper(upper)
        return a @ x + a.T @ x - upper[self._diagonal_at] * x

    def factor(self, theta: Theta, curvature: NDArray[np.float64]) -> Factor:
        """Factorise H = P + B' W B."""
        return self._factorize(self._upper(self.precision(theta) + self._assemble @ curvature))

    def _log_prior_determinant(self, theta: Theta) -> tuple[float, float]:
        """log|P| and its derivative in log range."""
        kappa2 = 8.0 / theta.range_km**2
        k = self._factorize_operator(self._operator(kappa2))
        inverse_diagonal = k.inverse_on_pattern()[self._k_diagonal]
        log_tau2 = -np.log(4.0 * np.pi * kappa2 * theta.sd**2)
        value = self.nodes * log_tau2 + 2.0 * k.log_determinant - float(np.sum(np.log(self.spde.lumped)))
        value += float(np.sum(np.log(self.coefficient_precision)))
        slope = 2.0 * self.nodes - 4.0 * kappa2 * float(np.sum(inverse_diagonal * self.spde.lumped))
        return value, slope

    def mode(
        self, theta: Theta, start: NDArray[np.float64] | None = None
    ) -> tuple[NDArray[np.float64], int, NDArray[np.float64]]:
        """Posterior mode of the latent vector by Newton's method with step halving.

        Returns
        -------
        mode : (n_latent,) float
        steps : int
        eta : (n_rows,) float

        Raises
        ------
        FitError
            Where Newton's method does not converge; the message holds the trace.
        """
        prior = self.precision(theta)
        x = self.prior_mean.copy() if start is None else start.copy()

        def objective(v: NDArray[np.float64]) -> tuple[float, Terms]:
            d = v - self.prior_mean
            terms = evaluate(self.data, self.B @ v, theta.nugget_sd)
            return terms.value - 0.5 * float(d @ self.multiply(prior, d)), terms

        trace: list[float] = []
        value, terms = objective(x)
        for step_number in range(1, _MAX_STEPS + 1):
            gradient = self.B.T @ terms.gradient - self.multiply(prior, x - self.prior_mean)
            weights = clamp_blocks(terms.curvature, self.data)
            step = self._factorize(self._upper(prior + self._assemble @ weights)).solve(gradient)
            decrement = float(gradient @ step)
            trace.append(decrement)
            if not np.isfinite(decrement) or decrement < -1e-6:
                break
            if decrement < _DECREMENT:
                x = x + step
                return x, step_number, self.B @ x
            length = 1.0
            for _ in range(30):
                trial, trial_terms = objective(x + length * step)
                if trial >= value + 1e-4 * length * decrement - 1e-11 * abs(value):
                    break
                length *= 0.5
            x = x + length * step
            value, terms = trial, trial_terms
        raise unconverged(theta, trace)

    def laplace(self, theta: Theta, start: NDArray[np.float64] | None = None) -> State:
        """Mode, log-evidence and exact gradient at ``theta``.

        Parameters
        ----------
        theta : Theta
        start : (n_latent,) float, optional
            Where Newton's method starts; the prior mean where it is left out.

        Raises
        ------
        FitError
            Where Newton's method fails or the Hessian at the mode is not positive definite.
        """
        x, steps, eta = self.mode(theta, start)
        terms = evaluate(self.data, eta, theta.nugget_sd)
        factor = self.factor(theta, terms.curvature)
        inverse = factor.inverse_on_pattern()
        d = x - self.prior_mean
        log_prior, log_prior_slope = self._log_prior_determinant(theta)
        prior_d = self.multiply(self.precision(theta), d)
        log_evidence = terms.value - 0.5 * float(d @ prior_d) + 0.5 * log_prior - 0.5 * factor.log_determinant

        covariance = self._gather @ inverse
        higher = higher_terms(self.data, eta, theta.nugget_sd, covariance)
        shift = 0.5 * factor.solve(self.B.T @ higher.third)

        d_range = np.zeros(self.indices.size)
        d_range[self._q_at] = precision_range_derivative(self.spde, theta.range_km, theta.sd)
        d_sd = self.precision(theta)
        d_sd[self._diagonal_at[self.nodes :]] -= self.coefficient_precision
        d_sd *= -2.0
        gradient = np.zeros(3)
        for at, dP, slope in ((0, d_range, log_prior_slope), (1, d_sd, -2.0 * self.nodes)):
            dP_d = self.multiply(dP, d)
            trace = float(np.sum(self._twice * inverse * dP))
            gradient[at] = -0.5 * float(d @ dP_d) + 0.5 * slope - 0.5 * trace - float(shift @ dP_d)
        if np.isfinite(theta.log_nugget):
            gradient[2] = (
                higher.nugget_value
                + 0.5 * higher.nugget_hessian
                + float(shift @ (self.B.T @ higher.nugget_gradient))
            )
        return State(
            theta, x, log_evidence, gradient, shift, inverse, terms.curvature, steps, factor.smallest_pivot
        )

    def locate(self, xy_km: NDArray[np.float64], design: NDArray[np.float64]) -> MeshRows:
        """Places to predict at: positions (n, 2) in km inside the mesh, covariates (n, p)."""
        triangle, weights = locate(self.mesh, xy_km)
        return MeshRows(self.mesh.triangles[triangle], weights, np.ascontiguousarray(design, dtype=float))

    def on_mesh(self, xy_km: NDArray[np.float64]) -> NDArray[np.bool_]:
        """(n,) bool: which positions the mesh covers."""
        return locate(self.mesh, xy_km)[0] >= 0

    def moments(self, state: State, rows: MeshRows) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean and variance of the linear predictor (n,) at each row."""
        return row_moments(rows, state.mode + state.mean_shift, state.inverse, self.indptr, self.indices)

    def coefficients(self, state: State) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Mean (p,) and covariance (p, p) of the coefficients."""
        corner = self._upper(state.inverse)[self.nodes :, self.nodes :].toarray()
        covariance = corner + corner.T - np.diag(np.diag(corner))
        return (state.mode + state.mean_shift)[self.nodes :], covariance

    def draws(
        self, state: State, windows: Iterable[MeshRows], rng: np.random.Generator, count: int
    ) -> Iterator[NDArray[np.float64]]:
        """Joint draws of the linear predictor, one array (n_window, count) per window of rows."""
        normal = rng.standard_normal((self.order, count))
        latent = self.factor(state.theta, state.curvature).sample(normal)
        latent += (state.mode + state.mean_shift)[:, None]
        for rows in windows:
            yield row_values(rows, latent)
