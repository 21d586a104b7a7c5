"""Matern correlation, and the sparse precision of the Matern field on a mesh."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import coo_matrix, csc_matrix, diags, triu
from scipy.special import k0, k1

from prevmap.engine.mesh import Mesh, finite_elements
from prevmap.errors import InputError

Floats = NDArray[np.float64]

SMOOTHNESS = (0.5, 1.0, 1.5, 2.5)  # the nu for which the correlation is available
_FAR = 800.0  # in kappa h: every correlation below is zero in double precision from here on
_NEAR = 1e-9  # in kappa h: the correlation for nu = 1 is 1 to double precision up to here


def correlation(distance_km: ArrayLike, range_km: float, nu: float = 1.0) -> Floats:
    """Matern correlation at distances, range sqrt(8 nu) / kappa.

    Parameters
    ----------
    distance_km : (...) float
        Distances, not negative.
    range_km : float
        The distance sqrt(8 nu) / kappa, where the correlation is about 0.14.
    nu : {0.5, 1, 1.5, 2.5}
        Smoothness.

    Returns
    -------
    (...) float
        2^(1 - nu) / Gamma(nu) (kappa h)^nu K_nu(kappa h), 1 at distance zero.

    Raises
    ------
    InputError
        If `nu` is not available or `range_km` is not positive.

    Notes
    -----
    Half-integer forms: Rasmussen & Williams (2006), Gaussian Processes for Machine Learning, eq. 4.14
    and 4.17, whose length-scale is half of this range. For nu = 1 it is kappa h K_1(kappa h),
    Lindgren, Rue & Lindstrom (2011), J. R. Stat. Soc. B 73:423-498, eq. 1.

    Examples
    --------
    >>> correlation([0.0, 60.0], 60.0).round(6).tolist()
    [1.0, 0.139667]
    """
    u = _scaled_distance(distance_km, range_km, nu)
    if nu == 1.0:
        safe = np.maximum(u, _NEAR)
        return np.where(u <= _NEAR, 1.0, safe * k1(safe))
    decay = np.exp(-u)
    if nu == 0.5:
        return decay
    if nu == 1.5:
        return (1.0 + u) * decay
    return (1.0 + u + u * u / 3.0) * decay


def correlation_range_derivative(distance_km: ArrayLike, range_km: float, nu: float = 1.0) -> Floats:
    """Differentiate `correlation` with respect to log range.

    Parameters and errors are those of `correlation`.

    Returns
    -------
    (...) float
        d r / d log(range) = -u dr/du at u = kappa h, zero at distance zero.

    Notes
    -----
    For nu = 1, d(u K_1)/du = -u K_0 (Abramowitz & Stegun 1964, 9.6.28).
    """
    u = _scaled_distance(distance_km, range_km, nu)
    if nu == 1.0:
        safe = np.maximum(u, _NEAR)
        return np.where(u <= _NEAR, 0.0, safe * safe * k0(safe))
    decay = np.exp(-u)
    if nu == 0.5:
        return u * decay
    if nu == 1.5:
        return u * u * decay
    return u * u * (1.0 + u) / 3.0 * decay


@dataclass(frozen=True, slots=True, eq=False)
class SpdeMatrices:
    """The parts of the field's precision, on one pattern that no parameter changes.

    Q(range, sd) = (kappa^2 c + 2 g + gcg / kappa^2) / (4 pi sd^2) with kappa = sqrt(8) / range. The
    pattern holds every pair of nodes that are neighbours or share a neighbour, so also every pair of
    corners of one triangle.

    Parameters
    ----------
    lumped : (m,) float, km2
        Diagonal of the lumped mass C.
    stiffness : (m, m) csc
        G; K = kappa^2 C + G.
    indptr, indices : (m + 1,), (z,) int
        Columns of the upper triangle, diagonal included, rows sorted within a column.
    c, g, gcg : (z,) float
        C, G and G C^-1 G on that pattern, zeros stored.
    """

    lumped: Floats
    stiffness: csc_matrix
    indptr: NDArray[np.int64]
    indices: NDArray[np.int64]
    c: Floats
    g: Floats
    gcg: Floats

    @property
    def pattern(self) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """The upper triangle's (indptr, indices) in compressed columns."""
        return self.indptr, self.indices

    @property
    def nodes(self) -> int:
        """Number of mesh nodes m."""
        return len(self.lumped)


def spde_matrices(mesh: Mesh) -> SpdeMatrices:
    """Assemble the parts of the precision for the Matern field with nu = 1 on a mesh.

    Parameters
    ----------
    mesh : Mesh

    Returns
    -------
    SpdeMatrices

    Notes
    -----
    Lindgren, Rue & Lindstrom (2011), J. R. Stat. Soc. B 73:423-498, section 2.3, alpha = 2:
    Q = tau^2 K C^-1 K with the mass lumped. The free edge of the mesh doubles the variance there,
    which is why the mesh reaches beyond the study area.
    """
    lumped, stiffness = finite_elements(mesh)
    neighbours = csc_matrix((np.ones(stiffness.nnz), stiffness.indices, stiffness.indptr), stiffness.shape)
    # Ones cannot cancel, so that the product's pattern is the whole one.
    whole = triu(neighbours @ neighbours, format="csc")
    whole.sort_indices()
    indptr, indices = whole.indptr.astype(np.int64), whole.indices.astype(np.int64)
    c, g, gcg = (
        _on_pattern(matrix, indptr, indices)
        for matrix in (diags(lumped), stiffness, stiffness @ diags(1.0 / lumped) @ stiffness)
    )
    for array in (lumped, indptr, indices, c, g, gcg):
        array.setflags(write=False)
    return SpdeMatrices(lumped, stiffness, indptr, indices, c, g, gcg)


def precision_upper(spde: SpdeMatrices, range_km: float, sd: float) -> Floats:
    """Precision of the field on the upper pattern, (z,) float.

    Parameters
    ----------
    spde : SpdeMatrices
    range_km : float
        sqrt(8) / kappa.
    sd : float
        Standard deviation of the field far from the edge, 1 / (sqrt(4 pi) kappa tau).

    Returns
    -------
    (z,) float
        Values for ``spde.pattern``. The derivative with respect to log sd is -2 times them.
    """
    kappa2 = _kappa_squared(range_km, sd)
    return (kappa2 * spde.c + 2.0 * spde.g + spde.gcg / kappa2) / (4.0 * math.pi * sd * sd)


def precision_range_derivative(spde: SpdeMatrices, range_km: float, sd: float) -> Floats:
    """Differentiate `precision_upper` with respect to log range, (z,) float."""
    kappa2 = _kappa_squared(range_km, sd)
    return (spde.gcg / kappa2 - kappa2 * spde.c) / (2.0 * math.pi * sd * sd)


def precision(spde: SpdeMatrices, range_km: float, sd: float) -> csc_matrix:
    """Precision of the field as a full symmetric matrix.

    Parameters
    ----------
    spde : SpdeMatrices
    range_km, sd : float
        As in `precision_upper`.

    Returns
    -------
    (m, m) csc
        Q, on the same pattern for all parameters; its inverse is the covariance of the node values.
    """
    values = precision_upper(spde, range_km, sd)
    rows, columns = spde.indices, np.repeat(np.arange(spde.nodes), np.diff(spde.indptr))
    above = rows < columns
    # Put together from triplets: adding two sparse matrices would drop the stored zeros.
    entries = np.concatenate([values, values[above]])
    places = np.concatenate([rows, columns[above]]), np.concatenate([columns, rows[above]])
    full = coo_matrix((entries, places), shape=(spde.nodes, spde.nodes)).tocsc()
    full.sort_indices()
    return full


def _scaled_distance(distance_km: ArrayLike, range_km: float, nu: float) -> Floats:
    """Return u = kappa h, cut where every correlation has vanished so that no power of it overflows."""
    if nu not in SMOOTHNESS:
        raise InputError(f"The smoothness nu = {nu} is not available; accepted are 0.5, 1, 1.5 and 2.5.")
    if not (math.isfinite(range_km) and range_km > 0):
        raise InputError(f"The range must be a positive number of km; found {range_km}.")
    distance = np.asarray(distance_km, dtype=np.float64)
    if distance.size and distance.min() < 0:
        raise ValueError(f"distances must not be negative; the smallest is {distance.min():g} km")
    # Cut before multiplying: a distance near the largest double would overflow.
    limit = _FAR / math.sqrt(8.0 * nu) * range_km
    return np.minimum(distance, limit) * (math.sqrt(8.0 * nu) / range_km)


def _kappa_squared(range_km: float, sd: float) -> float:
    if not (math.isfinite(range_km) and range_km > 0 and math.isfinite(sd) and sd > 0):
        raise InputError(f"Range and sd must be positive numbers; found range {range_km} km and sd {sd}.")
    return 8.0 / (range_km * range_km)


def _on_pattern(matrix: csc_matrix, indptr: NDArray[np.int64], indices: NDArray[np.int64]) -> Floats:
    """Upper-triangle values of a matrix spread over a pattern that contains its own."""
    part = triu(matrix, format="coo")
    nodes = len(indptr) - 1
    keys = np.repeat(np.arange(nodes), np.diff(indptr)) * nodes + indices
    place = np.searchsorted(keys, part.col.astype(np.int64) * nodes + part.row)
    values = np.zeros(len(indices))
    np.add.at(values, place, part.data)
    return values
