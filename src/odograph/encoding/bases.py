"""Cubic B-spline bases on uniform knots, open and cyclic, and their derivative penalties.

A basis is evaluated in its sparse form: at any point exactly four splines are non-zero. Penalties are
integrals of squared first or second derivatives in units of the knot spacing, computed exactly by
Gauss-Legendre quadrature (Eilers & Marx 1996, Stat. Sci. 11:89, for splines with penalties; Wood 2017,
Generalized Additive Models, 2nd ed., section 5.3, for derivative penalties).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg

SUPPORT = 4  # cubic splines that are non-zero at one point


@dataclass(frozen=True)
class SparseBasis:
    """A basis evaluated at points: `weights[i, j]` belongs to column `columns[i, j]`.

    Attributes
    ----------
    columns : ndarray of int32, (n_points, support)
    weights : ndarray, (n_points, support)
    size : int
        Number of columns.
    """

    columns: np.ndarray
    weights: np.ndarray
    size: int

    def dense(self) -> np.ndarray:
        """The same basis as a matrix, (n_points, size)."""
        out = np.zeros((len(self.columns), self.size))
        np.add.at(out, (np.arange(len(out))[:, None], self.columns), self.weights)
        return out


def spline_weights(t: np.ndarray, derivative: int = 0) -> np.ndarray:
    """Values of the four cubic B-splines that cover a knot interval.

    Parameters
    ----------
    t : ndarray, (n,)
        Place within the interval, 0 to 1.
    derivative : {0, 1, 2}
        Order of the derivative with respect to `t`.

    Returns
    -------
    ndarray, (n, 4)
    """
    t = np.asarray(t, dtype=float)
    one = np.ones_like(t)
    if derivative == 0:
        columns = [
            (1 - t) ** 3 / 6,
            (3 * t**3 - 6 * t**2 + 4) / 6,
            (-3 * t**3 + 3 * t**2 + 3 * t + 1) / 6,
            t**3 / 6,
        ]
    elif derivative == 1:
        columns = [-((1 - t) ** 2) / 2, (3 * t**2 - 4 * t) / 2, (-3 * t**2 + 2 * t + one) / 2, t**2 / 2]
    elif derivative == 2:
        columns = [1 - t, 3 * t - 2, -3 * t + one, t]
    else:
        raise ValueError(f"derivative must be 0, 1 or 2, not {derivative}")
    return np.stack(columns, axis=1)


def open_basis(x: np.ndarray, low: float, high: float, size: int, derivative: int = 0) -> SparseBasis:
    """`size` cubic B-splines on uniform knots over [low, high]; points outside are taken to its ends.

    Derivatives are with respect to `x`.
    """
    spacing = (high - low) / (size - 3)
    u = np.clip((np.asarray(x, dtype=float) - low) / spacing, 0, size - 3)
    interval = np.minimum(u.astype(np.int64), size - 4)
    weights = spline_weights(u - interval, derivative) / spacing**derivative
    columns = (interval[:, None] + np.arange(SUPPORT)).astype(np.int32)
    return SparseBasis(columns, weights, size)


def cyclic_basis(angle: np.ndarray, size: int, period: float = 2 * np.pi) -> SparseBasis:
    """`size` cyclic cubic B-splines over one period."""
    spacing = period / size
    u = np.mod(np.asarray(angle, dtype=float), period) / spacing
    interval = np.minimum(u.astype(np.int64), size - 1)
    columns = ((interval[:, None] + np.arange(SUPPORT)) % size).astype(np.int32)
    return SparseBasis(columns, spline_weights(u - interval), size)


def tensor_basis(first: SparseBasis, second: SparseBasis) -> SparseBasis:
    """Tensor product of two bases evaluated at the same points; the second coordinate runs fastest."""
    columns = first.columns[:, :, None].astype(np.int64) * second.size + second.columns[:, None, :]
    weights = first.weights[:, :, None] * second.weights[:, None, :]
    n = len(columns)
    return SparseBasis(
        columns.reshape(n, -1).astype(np.int32), weights.reshape(n, -1), first.size * second.size
    )


def gram(size: int, derivative: int, *, cyclic: bool = False) -> np.ndarray:
    """Integrals of products of (derivatives of) splines, in units of the knot spacing, (size, size)."""
    points, quadrature = np.polynomial.legendre.leggauss(4)  # exact to degree 7; the products have 6 at most
    values = spline_weights((points + 1) / 2, derivative)
    local = (values * (quadrature / 2)[:, None]).T @ values
    out = np.zeros((size, size))
    for interval in range(size if cyclic else size - 3):
        index = np.arange(interval, interval + SUPPORT) % size
        out[np.ix_(index, index)] += local
    return out


@dataclass(frozen=True)
class Coordinates:
    """Coordinates of a term in which all its penalties are diagonal and the constant function is left out.

    A function with spline coefficients `factors applied to b` has roughness sum_k spectra[j, k] b_k^2 under
    penalty j. The intercept takes the constant's place, which makes a sum of terms identifiable.

    Attributes
    ----------
    factors : tuple of ndarray
        One matrix per axis, (axis size, axis size); the term's transform is their Kronecker product without
        its first column when `drops_constant`.
    spectra : ndarray, (n_penalties, n_coordinates)
    drops_constant : bool
    """

    factors: tuple[np.ndarray, ...]
    spectra: np.ndarray
    drops_constant: bool = True

    @property
    def size(self) -> int:
        return self.spectra.shape[1]

    def matrix(self) -> np.ndarray:
        """From coordinates to spline coefficients, (n_splines, n_coordinates)."""
        whole = self.factors[0] if len(self.factors) == 1 else np.kron(*self.factors)
        return whole[:, 1:] if self.drops_constant else whole


def _diagonalise(stiffness: np.ndarray, mass: np.ndarray, linear: bool) -> tuple[np.ndarray, np.ndarray]:
    """Generalised eigenvectors, mass-orthonormal, the null space spelled out as constant (and linear)."""
    size = len(stiffness)
    null = [np.ones(size)] + ([np.arange(size, dtype=float)] if linear else [])
    basis = []
    for vector in null:
        for earlier in basis:
            vector = vector - (earlier @ mass @ vector) * earlier
        basis.append(vector / np.sqrt(vector @ mass @ vector))
    values, vectors = linalg.eigh(stiffness, mass)
    keep = slice(len(null), size)
    vectors = vectors[:, keep]
    # An eigenvector has no sign of its own: make its largest entry positive, whatever the library returns.
    vectors = vectors * np.sign(vectors[np.argmax(np.abs(vectors), axis=0), np.arange(vectors.shape[1])])
    return np.column_stack([*basis, vectors]), np.concatenate([np.zeros(len(null)), values[keep]])


def curve_coordinates(size: int, *, cyclic: bool = False, order: int = 2) -> Coordinates:
    """Integrated squared derivative of a curve of order 1 or 2.

    The second derivative leaves straight lines unpenalised (on a circle constants), the first constants only.
    """
    stiffness = gram(size, order, cyclic=cyclic)
    factor, values = _diagonalise(stiffness, gram(size, 0, cyclic=cyclic), order == 2 and not cyclic)
    return Coordinates((factor,), values[None, 1:])


def surface_coordinates(size: int) -> Coordinates:
    """Squared second derivatives of a surface along each axis, with a strength of its own for each.

    In spline coefficients the two penalties are K x M and M x K (Kronecker products of second-derivative and
    mass matrices), which the generalised eigenvectors of (K, M) diagonalise together; the functions 1, x, y
    and xy go unpenalised.
    """
    factor, values = _diagonalise(gram(size, 2), gram(size, 0), True)
    spectra = np.stack([np.repeat(values, size), np.tile(values, size)])
    return Coordinates((factor, factor), spectra[:, 1:])


def level_coordinates(size: int) -> Coordinates:
    """Sum of squares: the ridge penalty of a category's levels."""
    return Coordinates((np.eye(size),), np.ones((1, size)), drops_constant=False)
