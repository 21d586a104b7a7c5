"""Sparse symmetric factorisation: log-determinant, solves, selected inverse and sampling behind one name.

``A = P' (I + L) D (I + L)' P`` with a fill-reducing permutation from minimum degree. The selected inverse
follows the recursion of Takahashi, Fagan & Chin (1973) on the pattern of the factor (Erisman & Tinney 1975,
Communications of the ACM 18:177-179).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import qdldl
from numba import njit
from numpy.typing import NDArray
from scipy.sparse import csc_matrix

from prevmap.errors import FitError


@njit(cache=True)
def _solve_lower(indptr, indices, data, x):  # type: ignore[no-untyped-def]
    for j in range(x.shape[0]):
        for p in range(indptr[j], indptr[j + 1]):
            i = indices[p]
            v = data[p]
            for r in range(x.shape[1]):
                x[i, r] -= v * x[j, r]


@njit(cache=True)
def _solve_upper(indptr, indices, data, x):  # type: ignore[no-untyped-def]
    for j in range(x.shape[0] - 1, -1, -1):
        for p in range(indptr[j], indptr[j + 1]):
            i = indices[p]
            v = data[p]
            for r in range(x.shape[1]):
                x[j, r] -= v * x[i, r]


@njit(cache=True)
def _selected_inverse(indptr, indices, data, d):  # type: ignore[no-untyped-def]
    """Inverse on the pattern of the factor: strictly lower entries and the diagonal."""
    n = d.size
    z = np.empty(data.size)
    diagonal = np.empty(n)
    place = np.full(n, -1, dtype=np.int64)
    acc = np.empty(n)
    for j in range(n - 1, -1, -1):
        lo = indptr[j]
        hi = indptr[j + 1]
        for p in range(lo, hi):
            place[indices[p]] = p - lo
            acc[p - lo] = 0.0
        for p in range(lo, hi):
            k = indices[p]
            v = data[p]
            total = v * diagonal[k]
            for q in range(indptr[k], indptr[k + 1]):
                s = place[indices[q]]
                if s >= 0:
                    acc[s] += v * z[q]
                    total += data[lo + s] * z[q]
            acc[p - lo] += total
        dd = 1.0 / d[j]
        for p in range(lo, hi):
            z[p] = -acc[p - lo]
            dd -= data[p] * z[p]
            place[indices[p]] = -1
        diagonal[j] = dd
    return z, diagonal


@njit(cache=True)
def _positions(l_indptr, l_indices, rank, a_indptr, a_indices):  # type: ignore[no-untyped-def]
    """Where each upper-triangular entry of A sits in the factor; -1 - column for the diagonal."""
    out = np.empty(a_indices.size, dtype=np.int64)
    for j in range(a_indptr.size - 1):
        for p in range(a_indptr[j], a_indptr[j + 1]):
            r = rank[a_indices[p]]
            c = rank[j]
            if r == c:
                out[p] = -1 - c
                continue
            if r < c:
                r, c = c, r
            lo = l_indptr[c]
            hi = l_indptr[c + 1]
            out[p] = lo + np.searchsorted(l_indices[lo:hi], r)
    return out


@dataclass(frozen=True, slots=True)
class Factor:
    """A factorised positive definite matrix ``A`` of order ``n``.

    Attributes
    ----------
    pattern : csc_matrix
        The upper triangle that was factorised.
    indptr, indices, data : arrays
        Strictly lower unit factor in compressed columns.
    d : (n,) float
        Pivots, all positive.
    order : (n,) int
        Position ``k`` of the permuted matrix holds row ``order[k]`` of ``A``.
    positions : (nnz of pattern,) int
        Where each entry of the pattern sits in the factor.
    """

    pattern: csc_matrix
    indptr: NDArray[np.int32]
    indices: NDArray[np.int32]
    data: NDArray[np.float64]
    d: NDArray[np.float64]
    order: NDArray[np.int64]
    positions: NDArray[np.int64]

    @property
    def log_determinant(self) -> float:
        """Log determinant of ``A`` itself, no constants added."""
        return float(np.sum(np.log(self.d)))

    @property
    def smallest_pivot(self) -> float:
        """Smallest pivot, positive."""
        return float(np.min(self.d))

    def solve(self, right: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return ``A^-1 right`` for ``right`` of shape (n,) or (n, k)."""
        flat = right[:, None] if right.ndim == 1 else right
        x = np.ascontiguousarray(flat[self.order], dtype=float)
        _solve_lower(self.indptr, self.indices, self.data, x)
        x /= self.d[:, None]
        _solve_upper(self.indptr, self.indices, self.data, x)
        out = np.empty_like(x)
        out[self.order] = x
        return out[:, 0] if right.ndim == 1 else out

    def sample(self, normal: NDArray[np.float64]) -> NDArray[np.float64]:
        """Turn independent standard normals (n, k) into draws from N(0, A^-1)."""
        x = normal / np.sqrt(self.d)[:, None]
        _solve_upper(self.indptr, self.indices, self.data, x)
        out = np.empty_like(x)
        out[self.order] = x
        return out

    def inverse_on_pattern(self) -> NDArray[np.float64]:
        """Entries of ``A^-1`` on the factorised upper triangle, in the order of ``pattern.data``."""
        z, diagonal = _selected_inverse(self.indptr, self.indices, self.data, self.d)
        out = np.empty(self.positions.size)
        on_diagonal = self.positions < 0
        out[on_diagonal] = diagonal[-1 - self.positions[on_diagonal]]
        out[~on_diagonal] = z[self.positions[~on_diagonal]]
        return out


class Factorizer:
    """Factorises matrices that share one pattern: ordering and symbolic work are done once.

    Parameters
    ----------
    upper : csc_matrix
        Upper triangle with sorted indices; explicit zeros belong to the pattern.
    """

    __slots__ = ("_order", "_positions", "_solver")

    def __init__(self, upper: csc_matrix) -> None:
        self._solver = qdldl.Solver(upper, upper=True)
        self._order: NDArray[np.int64] | None = None
        self._positions: NDArray[np.int64] | None = None

    def __call__(self, upper: csc_matrix) -> Factor:
        """Factorise ``upper``.

        Raises
        ------
        FitError
            Where the matrix is not positive definite.
        """
        try:
            self._solver.update(upper, upper=True)
        except (RuntimeError, ValueError) as error:
            raise FitError(
                f"a precision matrix of order {upper.shape[0]} has a zero pivot: {error}"
            ) from error
        lower, d, order = self._solver.factors()
        d = np.asarray(d, dtype=float)
        if not np.all(d > 0):
            bad = int(np.sum(~(d > 0)))
            raise FitError(
                f"a precision matrix of order {d.size} is not positive definite: {bad} pivots are not positive, "
                f"the smallest is {np.min(d):.4g}"
            )
        if self._order is None or self._positions is None:
            self._order = np.asarray(order, dtype=np.int64)
            rank = np.empty_like(self._order)
            rank[self._order] = np.arange(rank.size)
            self._positions = _positions(lower.indptr, lower.indices, rank, upper.indptr, upper.indices)
        return Factor(upper, lower.indptr, lower.indices, lower.data, d, self._order, self._positions)
