"""Compiled inner loops: one pass over a model's rows gives the expected counts and what Newton's step needs.

With the covariates on grids, exp(eta) of a row is a product of one factor per term, so a pass needs no
exponential per row, and X'WX is assembled from weighted histograms and small sandwiches instead of a design
matrix.
"""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def expected_counts(cells, seconds, group, use, factor, cell_start, mu):
    """Expected count of every row under the term factors; rows of groups not in `use` get 0. Returns the sum.

    cells (n_terms, n_rows) int32, seconds (n_rows,), group (n_rows,) int32, use (n_groups,) of 0/1 float,
    factor (all cells,) exp of each term's contribution, cell_start (n_terms,), mu (n_rows,) output.
    """
    n_terms, n_rows = cells.shape
    for r in range(n_rows):
        mu[r] = seconds[r] * use[group[r]] * factor[cell_start[0] + cells[0, r]]
    for t in range(1, n_terms):
        start = cell_start[t]
        for r in range(n_rows):
            mu[r] *= factor[start + cells[t, r]]
    total = 0.0
    for r in range(n_rows):
        total += mu[r]
    return total


@njit(cache=True, nogil=True)
def cell_sums(cells, mu, cell_start, out):
    """Sum of `mu` over the rows of every cell of every term; out (all cells,) is overwritten."""
    out[:] = 0.0
    n_terms, n_rows = cells.shape
    for t in range(n_terms):
        start = cell_start[t]
        for r in range(n_rows):
            out[start + cells[t, r]] += mu[r]


@njit(cache=True, nogil=True)
def _diagonal_block(h, columns, weights, offset, hessian):
    n_cells, support = columns.shape
    for c in range(n_cells):
        if h[c] == 0.0:
            continue
        for i in range(support):
            wi = h[c] * weights[c, i]
            row = offset + columns[c, i]
            hessian[row, 0] += wi
            for j in range(support):
                hessian[row, offset + columns[c, j]] += wi * weights[c, j]


@njit(cache=True, nogil=True)
def _cross_block(
    cells_a, cells_b, mu, columns_a, weights_a, columns_b, weights_b, n_b, off_a, off_b, hessian
):
    """B_a' H B_b of two terms, H the joint histogram of `mu` over their cells."""
    n_cells_a, support_a = columns_a.shape
    n_cells_b, support_b = columns_b.shape
    joint = np.zeros((n_cells_a, n_b))
    if n_cells_a * n_cells_b <= 16384:
        histogram = np.zeros((n_cells_a, n_cells_b))
        for r in range(len(mu)):
            histogram[cells_a[r], cells_b[r]] += mu[r]
        for a in range(n_cells_a):
            for b in range(n_cells_b):
                value = histogram[a, b]
                if value != 0.0:
                    for j in range(support_b):
                        joint[a, columns_b[b, j]] += value * weights_b[b, j]
    else:
        for r in range(len(mu)):
            value = mu[r]
            a, b = cells_a[r], cells_b[r]
            for j in range(support_b):
                joint[a, columns_b[b, j]] += value * weights_b[b, j]
    for a in range(n_cells_a):
        for i in range(support_a):
            weight = weights_a[a, i]
            row = off_a + columns_a[a, i]
            for k in range(n_b):
                hessian[row, off_b + k] += weight * joint[a, k]


@njit(cache=True, nogil=True)
def information(
    cells, mu, total, h, cell_start, cell_end, columns, weights, supports, offsets, sizes, hessian
):
    """X'WX of the model with intercept first, (n_columns, n_columns), symmetric; `hessian` is overwritten.

    h (all cells,) are the sums of `mu` per cell; columns/weights (all cells, largest support) hold the sparse
    bases of all terms, of which term t uses the first supports[t] entries.
    """
    hessian[:, :] = 0.0
    n_terms = cells.shape[0]
    hessian[0, 0] = total
    for t in range(n_terms):
        a, z, s = cell_start[t], cell_end[t], supports[t]
        _diagonal_block(h[a:z], columns[a:z, :s], weights[a:z, :s], offsets[t], hessian)
    for t in range(n_terms):
        a, z, s = cell_start[t], cell_end[t], supports[t]
        for u in range(t + 1, n_terms):
            b, y, q = cell_start[u], cell_end[u], supports[u]
            _cross_block(
                cells[t],
                cells[u],
                mu,
                columns[a:z, :s],
                weights[a:z, :s],
                columns[b:y, :q],
                weights[b:y, :q],
                sizes[u],
                offsets[t],
                offsets[u],
                hessian,
            )
    n = hessian.shape[0]
    for i in range(n):
        for j in range(i):
            if hessian[j, i] == 0.0:
                hessian[j, i] = hessian[i, j]
            else:
                hessian[i, j] = hessian[j, i]


@njit(cache=True, nogil=True)
def cell_values(coefficients, cell_start, cell_end, columns, weights, supports, offsets, out):
    """Each term's contribution to eta at every cell; out (all cells,)."""
    for t in range(len(cell_start)):
        for c in range(cell_start[t], cell_end[t]):
            value = 0.0
            for j in range(supports[t]):
                value += weights[c, j] * coefficients[offsets[t] + columns[c, j]]
            out[c] = value


@njit(cache=True, nogil=True)
def column_sums(h, cell_start, cell_end, columns, weights, supports, offsets, out):
    """B_t' h for every term, into the term's columns of `out` (n_columns,); the intercept's is left alone."""
    out[1:] = 0.0
    for t in range(len(cell_start)):
        for c in range(cell_start[t], cell_end[t]):
            for j in range(supports[t]):
                out[offsets[t] + columns[c, j]] += h[c] * weights[c, j]


@njit(cache=True, nogil=True)
def mirror(matrix):
    """Copy the lower triangle of a square matrix onto its upper one."""
    n = matrix.shape[0]
    for i in range(n):
        for j in range(i):
            matrix[j, i] = matrix[i, j]
