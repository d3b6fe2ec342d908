"""Compiled inner loops: one pass over a model's rows gives the expected counts and what Newton's step needs.

With the covariates on grids, exp(eta) of a row is a product of one factor per term, so a pass needs no
exponential per row, and X'WX is assembled from weighted histograms and small sandwiches, not a design matrix.
"""

from __future__ import annotations

import numpy as np

from odograph.compiled import compiled


@compiled
def expected_counts(cells, seconds, group, use, factor, cell_start, mu):
    """Expected count of every row under the term factors; rows of groups not in `use` get 0. Returns the sum.

    cells (n_terms, n_rows) int32, seconds (n_rows,), group (n_rows,) int32, use (n_groups,) of 0/1 float,
    factor (all cells,) exp of each term's contribution, cell_start (n_terms,), mu (n_rows,) output.
    """
    n_terms, n_rows = cells.shape
    for r in range(n_rows):
        mu[r] = seconds[r] * use[np.uint64(group[r])] * factor[np.uint64(cell_start[0] + cells[0, r])]
    for t in range(1, n_terms):
        start = cell_start[t]
        for r in range(n_rows):
            mu[r] *= factor[np.uint64(start + cells[t, r])]
    total = 0.0
    for r in range(n_rows):
        total += mu[r]
    return total


@compiled
def group_sums(group, mu, out):
    """Sum of `mu` over the rows of every group; out (n_groups,) is overwritten."""
    out[:] = 0.0
    for r in range(len(mu)):
        out[np.uint64(group[r])] += mu[r]


@compiled
def cell_sums(cells, mu, cell_start, out):
    """Sum of `mu` over the rows of every cell of every term; out (all cells,) is overwritten."""
    out[:] = 0.0
    n_terms, n_rows = cells.shape
    for t in range(n_terms):
        start = cell_start[t]
        for r in range(n_rows):
            out[np.uint64(start + cells[t, r])] += mu[r]


@compiled
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


@compiled
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


@compiled
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
    fill_symmetric(hessian)


@compiled
def scaled_counts(cells, seconds, gains, z, effects, cell_start, constant, mu):
    """Expected count of every row when rows scale the terms' effects; fills mu (n_rows,), returns its sum.

    A row scales term t by 1 + gains[t] z[r]; gains (n_terms,), z (n_rows,), effects (all cells,), constant
    the log rate without any term.
    """
    mu[:] = constant
    for t in range(len(cell_start)):
        for r in range(len(mu)):
            mu[r] += (1 + gains[t] * z[r]) * effects[np.uint64(cell_start[t] + cells[t, r])]
    total = 0.0
    for r in range(len(mu)):
        mu[r] = seconds[r] * np.exp(min(mu[r], 50.0))
        total += mu[r]
    return total


@compiled
def scaled_sums(cells, value, gains, z, cell_start, out):
    """Sums of value (n_rows,) times each term's scale over its cells; out (all cells,) is overwritten."""
    out[:] = 0.0
    for t in range(len(cell_start)):
        for r in range(len(value)):
            out[np.uint64(cell_start[t] + cells[t, r])] += value[r] * (1 + gains[t] * z[r])


@compiled
def scaled_information(
    cells, mu, gains, z, cell_start, cell_end, columns, weights, supports, offsets, sizes, hessian
):
    """X'WX when rows scale each term's basis as in `scaled_counts`; `hessian` is overwritten."""
    hessian[:, :] = 0.0
    hessian[0, 0] = mu.sum()
    n_terms, n_rows = cells.shape
    product = np.empty(n_rows)
    for t in range(n_terms):
        a, e, s = cell_start[t], cell_end[t], supports[t]
        once, twice = np.zeros(e - a), np.zeros(e - a)
        for r in range(n_rows):
            scale = 1 + gains[t] * z[r]
            once[cells[t, r]] += mu[r] * scale
            twice[cells[t, r]] += mu[r] * scale**2
        _diagonal_block(twice, columns[a:e, :s], weights[a:e, :s], offsets[t], hessian)
        for c in range(e - a):
            for j in range(s):
                hessian[offsets[t] + columns[a + c, j], 0] += (once[c] - twice[c]) * weights[a + c, j]
        for u in range(t + 1, n_terms):
            b, y, q = cell_start[u], cell_end[u], supports[u]
            for r in range(n_rows):
                product[r] = mu[r] * (1 + gains[t] * z[r]) * (1 + gains[u] * z[r])
            _cross_block(
                cells[t],
                cells[u],
                product,
                columns[a:e, :s],
                weights[a:e, :s],
                columns[b:y, :q],
                weights[b:y, :q],
                sizes[u],
                offsets[t],
                offsets[u],
                hessian,
            )
    fill_symmetric(hessian)


@compiled
def plane_information(
    cells,
    mu,
    row_start,
    x_columns,
    x_weights,
    y_columns,
    y_weights,
    n_x,
    n_y,
    padded_start,
    padded_weights,
    padded_column,
    cell_start,
    cell_end,
    offsets,
    sizes,
    hessian,
):
    """X'WX of a model whose first term is a plane, but for the other terms' own blocks; overwritten.

    Rows are sorted by the plane's cell (y first, then x), so each cell's rows, row_start[c]:row_start[c + 1],
    are met once: what they give to the other terms' columns is gathered in a short vector, and the plane's
    tensor basis is applied one axis at a time. Arguments as for `information`; x_columns/x_weights and
    y_columns/y_weights are the plane's margins with n_x and n_y splines. The other terms' bases come padded
    (`pad_bases`): four adjacent columns from padded_start[k] on for cell k, and the column among those of the
    other terms that each padded column stands for.
    """
    hessian[:, :] = 0.0
    n_terms = cells.shape[0]
    first = offsets[0] + sizes[0]  # columns of the other terms follow those of the plane
    n_other = hessian.shape[0] - first
    beside = np.empty(n_other + 1)
    padded = np.zeros(len(padded_column))
    along = np.empty((n_x, n_other + 1))
    band = np.empty((n_x, n_x))
    for iy in range(len(y_columns)):
        along[:, :] = 0.0
        band[:, :] = 0.0
        for ix in range(len(x_columns)):
            c = iy * len(x_columns) + ix
            if row_start[c] == row_start[c + 1]:
                continue
            total = 0.0
            for r in range(row_start[c], row_start[c + 1]):
                total += mu[r]
            for t in range(1, n_terms):
                for r in range(row_start[c], row_start[c + 1]):
                    m = mu[r]
                    k = np.uint64(cell_start[t] + cells[t, r])
                    p = padded_start[k]
                    padded[p] += m * padded_weights[k, 0]
                    padded[p + np.uint64(1)] += m * padded_weights[k, 1]
                    padded[p + np.uint64(2)] += m * padded_weights[k, 2]
                    padded[p + np.uint64(3)] += m * padded_weights[k, 3]
            beside[:] = 0.0
            for p in range(len(padded)):
                beside[padded_column[p]] += padded[p]
                padded[p] = 0.0
            beside[n_other] = total
            hessian[0, 0] += total
            for i in range(4):
                a, w = x_columns[ix, i], x_weights[ix, i]
                for k in range(n_other + 1):
                    along[a, k] += w * beside[k]
                for j in range(4):
                    band[a, x_columns[ix, j]] += w * total * x_weights[ix, j]
        for i in range(4):
            b, w = y_columns[iy, i], y_weights[iy, i]
            for a in range(n_x):
                row = offsets[0] + a * n_y + b
                for k in range(n_other):
                    hessian[row, first + k] += w * along[a, k]
                hessian[row, 0] += w * along[a, n_other]
                for j in range(4):
                    v = w * y_weights[iy, j]
                    column = offsets[0] + y_columns[iy, j]
                    for d in range(max(0, a - 3), min(n_x, a + 4)):
                        hessian[row, column + d * n_y] += v * band[a, d]


@compiled
def joint_histograms(cells, mu, cell_start, cell_end, start, joint, sums):
    """Sums of `mu` over the cells of every term but the first, and jointly over those of every pair of them.

    start (n_terms, n_terms): where the pair (t, u), 0 < t < u, begins in `joint`, which has the pairs end to
    end; sums (all cells,). Both are overwritten.
    """
    joint[:] = 0.0
    sums[:] = 0.0
    n_terms, n_rows = cells.shape
    for t in range(1, n_terms):
        for u in range(t + 1, n_terms):
            base, width = start[t, u], cell_end[u] - cell_start[u]
            for r in range(n_rows):
                joint[np.uint64(base + cells[t, r] * width + cells[u, r])] += mu[r]
    if n_terms == 2:
        for r in range(n_rows):
            sums[np.uint64(cell_start[1] + cells[1, r])] += mu[r]
    for t in range(1, n_terms - 1):  # the margins of a pair are cheaper than another pass
        u = n_terms - 1
        base, width = start[t, u], cell_end[u] - cell_start[u]
        for c in range(cell_end[t] - cell_start[t]):
            for d in range(width):
                sums[cell_start[t] + c] += joint[base + c * width + d]
                if t == 1:
                    sums[cell_start[u] + d] += joint[base + c * width + d]


@compiled
def small_blocks(
    histograms, start, sums, cell_start, cell_end, columns, weights, supports, offsets, sizes, hessian
):
    """Blocks of X'WX among all terms but the first, from their joint histograms; completes the matrix."""
    n_terms = len(cell_start)
    for t in range(1, n_terms):
        a, z, s = cell_start[t], cell_end[t], supports[t]
        _diagonal_block(sums[a:z], columns[a:z, :s], weights[a:z, :s], offsets[t], hessian)
        for u in range(t + 1, n_terms):
            b, y, q = cell_start[u], cell_end[u], supports[u]
            row = np.empty(sizes[u])
            for c in range(z - a):
                row[:] = 0.0
                for d in range(y - b):
                    value = histograms[start[t, u] + c * (y - b) + d]
                    if value != 0.0:
                        for j in range(q):
                            row[columns[b + d, j]] += value * weights[b + d, j]
                for i in range(s):
                    w, line = weights[a + c, i], offsets[t] + columns[a + c, i]
                    for k in range(sizes[u]):
                        hessian[line, offsets[u] + k] += w * row[k]
    fill_symmetric(hessian)


@compiled
def dense_blocks(cells, mu, dense, cell_start, cell_end, columns, weights, supports, offsets, sizes, hessian):
    """Blocks of X'WX of a last term all of whose columns are filled, with itself and with all others.

    dense (n_rows, k) are its columns' values in every row, with columns of 0 up to the next multiple of four,
    which lets the innermost loops be of fixed length; other arguments as for `information`.
    """
    last, k = len(cell_start) - 1, dense.shape[1]
    joint = np.zeros((cell_start[last], k))
    own, total = np.zeros((k, k)), np.zeros(k)
    for g in range(0, k, 4):
        for r in range(len(mu)):
            w0, w1 = mu[r] * dense[r, g], mu[r] * dense[r, g + 1]
            w2, w3 = mu[r] * dense[r, g + 2], mu[r] * dense[r, g + 3]
            total[g] += w0
            total[g + 1] += w1
            total[g + 2] += w2
            total[g + 3] += w3
            for j in range(g + 4):
                v = dense[r, j]
                own[j, g] += v * w0
                own[j, g + 1] += v * w1
                own[j, g + 2] += v * w2
                own[j, g + 3] += v * w3
            for t in range(last):
                a = np.uint64(cell_start[t] + cells[t, r])
                joint[a, g] += w0
                joint[a, g + 1] += w1
                joint[a, g + 2] += w2
                joint[a, g + 3] += w3
    first = offsets[last]
    for i in range(sizes[last]):
        hessian[first + i, 0] = total[i]
        for j in range(i + 1):
            hessian[first + i, first + j] = own[j, i]
    for t in range(last):
        for a in range(cell_start[t], cell_end[t]):
            for s in range(supports[t]):
                row, w = offsets[t] + columns[a, s], weights[a, s]
                for i in range(sizes[last]):
                    hessian[first + i, row] += w * joint[a, i]
    fill_symmetric(hessian)


@compiled
def fill_symmetric(hessian):
    """Complete a matrix of which each pair of mirrored entries has one filled, or both alike."""
    n = hessian.shape[0]
    for i in range(n):
        for j in range(i):
            if hessian[j, i] == 0.0:
                hessian[j, i] = hessian[i, j]
            else:
                hessian[i, j] = hessian[j, i]


@compiled
def cell_values(coefficients, cell_start, cell_end, columns, weights, supports, offsets, out):
    """Each term's contribution to eta at every cell; out (all cells,)."""
    for t in range(len(cell_start)):
        for c in range(cell_start[t], cell_end[t]):
            value = 0.0
            for j in range(supports[t]):
                value += weights[c, j] * coefficients[offsets[t] + columns[c, j]]
            out[c] = value


@compiled
def column_sums(h, cell_start, cell_end, columns, weights, supports, offsets, out):
    """B_t' h for every term, into the term's columns of `out` (n_columns,); the intercept's is left alone."""
    out[1:] = 0.0
    for t in range(len(cell_start)):
        for c in range(cell_start[t], cell_end[t]):
            for j in range(supports[t]):
                out[offsets[t] + columns[c, j]] += h[c] * weights[c, j]


@compiled
def mirror(matrix):
    """Copy the lower triangle of a square matrix onto its upper one."""
    n = matrix.shape[0]
    for i in range(n):
        for j in range(i):
            matrix[j, i] = matrix[i, j]
