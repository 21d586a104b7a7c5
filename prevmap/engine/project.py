"""Places on the mesh: what a latent vector says there, and with what variance.

The predictor at a place is ``b' x`` with three mesh weights and the coefficients; its variance
``b' H^-1 b`` needs only entries of ``H^-1`` on the pattern of ``H``, so no place costs a solve.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class MeshRows:
    """Places to predict at.

    Attributes
    ----------
    nodes : (n, 3) int
        Corners of the triangle that holds each place.
    weights : (n, 3) float
        Barycentric weights, rows sum to 1.
    design : (n, p) float
        Covariates, intercept first.
    """

    nodes: NDArray[np.int64]
    weights: NDArray[np.float64]
    design: NDArray[np.float64]

    def __len__(self) -> int:
        return int(self.design.shape[0])


@njit(cache=True)
def _row_moments(nodes, weights, design, latent, inverse, indptr, indices):  # type: ignore[no-untyped-def]
    n, p = design.shape
    m = latent.size - p
    mean = np.zeros(n)
    variance = np.zeros(n)
    for i in range(n):
        for a in range(3):
            mean[i] += weights[i, a] * latent[nodes[i, a]]
            for b in range(3):
                r = nodes[i, a]
                c = nodes[i, b]
                if r > c:
                    continue
                lo = indptr[c]
                at = lo + np.searchsorted(indices[lo : indptr[c + 1]], r)
                twice = 1.0 if r == c else 2.0
                variance[i] += twice * weights[i, a] * weights[i, b] * inverse[at]
        for q in range(p):
            mean[i] += design[i, q] * latent[m + q]
            # A coefficient's column is full, so its entries are found without a search.
            lo = indptr[m + q]
            for a in range(3):
                variance[i] += 2.0 * design[i, q] * weights[i, a] * inverse[lo + nodes[i, a]]
            for t in range(q):
                variance[i] += 2.0 * design[i, q] * design[i, t] * inverse[lo + m + t]
            variance[i] += design[i, q] ** 2 * inverse[lo + m + q]
    return mean, np.maximum(variance, 0.0)


def row_moments(
    rows: MeshRows,
    latent: NDArray[np.float64],
    inverse: NDArray[np.float64],
    indptr: NDArray[np.int32],
    indices: NDArray[np.int32],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean and variance (n,) of the linear predictor.

    Parameters
    ----------
    rows : MeshRows
    latent : (n_latent,) float
        Mean of the latent vector.
    inverse, indptr, indices
        Covariance entries on the upper triangle of the pattern, in compressed columns.
    """
    return _row_moments(rows.nodes, rows.weights, rows.design, latent, inverse, indptr, indices)


def row_values(rows: MeshRows, latent: NDArray[np.float64]) -> NDArray[np.float64]:
    """Linear predictor (n, count) for latent vectors (n_latent, count)."""
    m = latent.shape[0] - rows.design.shape[1]
    out = rows.design @ latent[m:]
    for a in range(3):
        out += rows.weights[:, a, None] * latent[rows.nodes[:, a]]
    return out
