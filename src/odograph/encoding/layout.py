"""A model laid out in flat arrays, and the passes over its rows in the coordinates of its penalties."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.encoding import kernels
from odograph.encoding.bases import SUPPORT, Coordinates
from odograph.encoding.design import RowTable
from odograph.encoding.terms import HISTORY, Term


@dataclass(frozen=True)
class Layout:
    """Where each term's cells, splines and coordinates lie; the intercept is spline 0 and coordinate 0.

    Attributes
    ----------
    cell_start, cell_end : ndarray, (n_terms,)
        Each term's cells in arrays over all cells.
    spline_start, spline_count, support : ndarray, (n_terms,)
    columns, weights : ndarray, (all cells, largest support)
        The sparse bases, columns counted within the term.
    slices : tuple of slice
        Each term's coordinates in the coefficient vector.
    spectra : ndarray, (n_penalties, n_coordinates)
        All penalties as diagonals over the whole coefficient vector.
    owner : ndarray, (n_penalties,)
        The term of each penalty.
    """

    table: RowTable
    cell_start: np.ndarray
    cell_end: np.ndarray
    spline_start: np.ndarray
    spline_count: np.ndarray
    support: np.ndarray
    columns: np.ndarray
    weights: np.ndarray
    slices: tuple[slice, ...]
    spectra: np.ndarray
    owner: np.ndarray

    @property
    def n_coordinates(self) -> int:
        return self.spectra.shape[1]

    @property
    def n_splines(self) -> int:
        return int(1 + self.spline_count.sum())

    def index_of(self, name: str) -> int:
        """Place of a term in the table by its name."""
        return [term.name for term in self.table.terms].index(name)


def make_layout(table: RowTable) -> Layout:
    """Lay a model's terms out in flat arrays for the compiled passes."""
    terms = table.terms
    n_cells = np.array([term.n_cells for term in terms], dtype=np.int64)
    counts = np.array([term.basis.size for term in terms], dtype=np.int64)
    support = np.array([term.basis.columns.shape[1] for term in terms], dtype=np.int64)
    end = np.cumsum(n_cells)
    start = end - n_cells
    columns = np.zeros((n_cells.sum(), support.max(initial=1)), dtype=np.int32)
    weights = np.zeros(columns.shape)
    slices, first = [], 1
    for t, term in enumerate(terms):
        columns[start[t] : end[t], : support[t]] = term.basis.columns
        weights[start[t] : end[t], : support[t]] = term.basis.weights
        slices.append(slice(first, first + term.coordinates.size))
        first += term.coordinates.size
    owner = [t for t, term in enumerate(terms) for _ in term.coordinates.spectra]
    spectra = np.zeros((len(owner), first))
    for row, spectrum in enumerate(s for term in terms for s in term.coordinates.spectra):
        spectra[row, slices[owner[row]]] = spectrum
    return Layout(
        table,
        start,
        end,
        1 + np.cumsum(counts) - counts,
        counts,
        support,
        columns,
        weights,
        tuple(slices),
        spectra,
        np.array(owner, dtype=np.int64),
    )


def to_coordinates(coordinates: Coordinates, array: np.ndarray) -> np.ndarray:
    """Apply a term's transposed transform to the first axis: (n_splines, ...) -> (n_coordinates, ...)."""
    tail = array.shape[1:]
    if len(coordinates.factors) == 1:
        out = coordinates.factors[0].T @ array.reshape(len(array), -1)
    else:
        first, second = coordinates.factors
        out = first.T @ array.reshape(len(first), -1)
        out = second.T @ out.reshape(len(first), len(second), -1)
    out = out.reshape(-1, *tail)
    return out[1:] if coordinates.drops_constant else out


def from_coordinates(coordinates: Coordinates, values: np.ndarray) -> np.ndarray:
    """Spline coefficients of a term, (n_splines,), from its coordinates."""
    if coordinates.drops_constant:
        values = np.concatenate([[0.0], values])
    if len(coordinates.factors) == 1:
        return coordinates.factors[0] @ values
    first, second = coordinates.factors
    return (first @ values.reshape(len(first), len(second)) @ second.T).ravel()


def _joint_places(n_cells: list[int]) -> tuple[np.ndarray, int]:
    """Where each pair of terms but the first begins in an array of their joint histograms, and its length."""
    start, size = np.zeros((len(n_cells), len(n_cells)), dtype=np.int64), 0
    for t in range(1, len(n_cells)):
        for u in range(t + 1, len(n_cells)):
            start[t, u] = size
            size += n_cells[t] * n_cells[u]
    return start, size


def pad_bases(layout: Layout, n_terms: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The bases of terms 1 to `n_terms` - 1 as four adjacent columns a cell; cyclic ones repeat their start.

    Returns
    -------
    start : ndarray of int64, (all cells,)
        First of the four padded columns.
    weights : ndarray, (all cells, 4)
    column : ndarray of int64, (n_padded,)
        The column that each padded one stands for, counted from the first column after the plane's.
    """
    start = np.zeros(len(layout.columns), dtype=np.uint64)
    weights = np.zeros((len(layout.columns), 4))
    column: list[int] = []
    base = 0
    for t in range(1, n_terms):
        cells, size = slice(layout.cell_start[t], layout.cell_end[t]), int(layout.spline_count[t])
        start[cells] = len(column) + layout.columns[cells, 0]
        weights[cells, : layout.support[t]] = layout.weights[cells, : layout.support[t]]
        column += [base + i % size for i in range(size + 3)]
        base += size
    return start, weights, np.array(column, dtype=np.int64)


class Workspace:
    """The buffers of one model, reused over units and folds; not to be shared between threads."""

    def __init__(self, layout: Layout) -> None:
        self.layout = layout
        self.terms: tuple[Term, ...] = layout.table.terms
        n_cells, n = len(layout.columns), layout.n_splines
        self.mu = np.empty(len(layout.table.seconds))
        self.eta = np.zeros(n_cells)
        self._sums = np.empty(n_cells)
        self._splines = np.zeros(n)
        self._information = np.empty((n, n))
        self.flat = (
            layout.cell_start,
            layout.cell_end,
            layout.columns,
            layout.weights,
            layout.support,
            layout.spline_start,
        )
        # A history fills all its columns and has nearly as many cells as bins: it is last, with its own pass.
        self._dense_last = bool(self.terms) and self.terms[-1].kind == HISTORY
        if self._dense_last:
            values = self.terms[-1].basis.dense()
            self._dense = np.pad(values, [(0, 0), (0, -values.shape[1] % 4)])[layout.table.cells[-1]]
        self._few = len(self.terms) - self._dense_last
        few = self.terms[: self._few]
        # The plane's way asks that all other terms have few splines at a point; a second plane has not.
        self._plane_first = bool(
            few and few[0].kind == "plane" and np.all(layout.support[1 : len(few)] <= SUPPORT)
        )
        if self._plane_first:
            first = layout.table.cells[0]
            self._row_start = np.searchsorted(first, np.arange(few[0].n_cells + 1))
            self._joint_start, size = _joint_places([term.n_cells for term in few])
            self._joint = np.empty(size)
            self._padded = pad_bases(layout, len(few))

    def expected(self, coefficients: np.ndarray, use: np.ndarray) -> float:
        """Fill `mu` (expected count per row) and `eta` (per cell); returns the expected number of spikes.

        Parameters
        ----------
        coefficients : ndarray, (n_coordinates,)
        use : ndarray, (n_groups,)
            1.0 for groups that count, 0.0 for others.
        """
        lay, table = self.layout, self.layout.table
        if not self.terms:
            np.multiply(table.seconds, use[table.group], out=self.mu)
            self.mu *= np.exp(coefficients[0])
            return float(self.mu.sum())
        factor = np.exp(self.effects(coefficients))
        factor[: lay.cell_end[0]] *= np.exp(coefficients[0])
        return kernels.expected_counts(
            table.cells, table.seconds, table.group, use, factor, lay.cell_start, self.mu
        )

    def effects(self, coefficients: np.ndarray) -> np.ndarray:
        """Fill `eta`, every term's part of the log rate at its cells, laid end to end, and return it."""
        lay = self.layout
        for t, term in enumerate(self.terms):
            first = lay.spline_start[t]
            self._splines[first : first + lay.spline_count[t]] = from_coordinates(
                term.coordinates, coefficients[lay.slices[t]]
            )
        if self.terms:
            kernels.cell_values(self._splines, *self.flat, self.eta)
        return self.eta

    def expected_by_group(self, coefficients: np.ndarray, n_groups: int) -> np.ndarray:
        """Expected spikes in every group, (n_groups,); fills `mu` and `eta` for all rows."""
        self.expected(coefficients, np.ones(n_groups))
        out = np.empty(n_groups)
        kernels.group_sums(self.layout.table.group, self.mu, out)
        return out

    def derivatives(self, total: float) -> tuple[np.ndarray, np.ndarray]:
        """X'mu, (n_coordinates,), and X'WX, (n_coordinates, n_coordinates), at the last `expected` call."""
        lay = self.layout
        if not self.terms:
            return np.array([total]), np.array([[total]])
        few = self._few
        cells, start, end = lay.table.cells[:few], lay.cell_start[:few], lay.cell_end[:few]
        if self._plane_first:
            self._plane_information(cells, start, end)
        else:
            kernels.cell_sums(cells, self.mu, start, self._sums)
            kernels.information(
                cells,
                self.mu,
                total,
                self._sums,
                start,
                end,
                *self.flat[2:],
                lay.spline_count,
                self._information,
            )
        if self._dense_last:
            kernels.dense_blocks(
                lay.table.cells, self.mu, self._dense, *self.flat, lay.spline_count, self._information
            )
        information = self.reduce(self._information)
        return information[:, 0].copy(), information  # the intercept's column is X'W1

    def reduce(self, information: np.ndarray) -> np.ndarray:
        """X'WX in coordinates, (n_coordinates, n_coordinates), from splines, (n_splines, n_splines)."""
        return self.reduce_rows(np.ascontiguousarray(self.reduce_rows(information).T))

    def _plane_information(self, cells: np.ndarray, start: np.ndarray, end: np.ndarray) -> None:
        """Blocks among the terms whose cells begin and end as given, the first of them a plane."""
        lay = self.layout
        x, y = self.terms[0].margins
        kernels.plane_information(
            cells,
            self.mu,
            self._row_start,
            x.columns,
            x.weights,
            y.columns,
            y.weights,
            x.size,
            y.size,
            *self._padded,
            start,
            end,
            lay.spline_start,
            lay.spline_count,
            self._information,
        )
        kernels.joint_histograms(cells, self.mu, start, end, self._joint_start, self._joint, self._sums)
        kernels.small_blocks(
            self._joint,
            self._joint_start,
            self._sums,
            start,
            end,
            *self.flat[2:],
            lay.spline_count,
            self._information,
        )

    def reduce_rows(self, array: np.ndarray) -> np.ndarray:
        """Rows of splines, (n_splines, k), as rows of coordinates, (n_coordinates, k)."""
        out = np.empty((self.layout.n_coordinates, array.shape[1]))
        self._reduce(array, out)
        return out

    def _reduce(self, array: np.ndarray, out: np.ndarray) -> None:
        out[0] = array[0]
        for t, term in enumerate(self.terms):
            first = self.layout.spline_start[t]
            rows = array[first : first + self.layout.spline_count[t]]
            out[self.layout.slices[t]] = to_coordinates(term.coordinates, rows)

    def project(self, cell_totals: np.ndarray, total: float) -> np.ndarray:
        """X'v, (n_coordinates,), of a quantity given by its sums over each term's cells, laid end to end."""
        lay, out = self.layout, np.empty(self.layout.n_coordinates)
        out[0] = total
        if self.terms:
            splines = np.empty(lay.n_splines)
            kernels.column_sums(cell_totals, *self.flat, splines)
            for t, term in enumerate(self.terms):
                first = lay.spline_start[t]
                out[lay.slices[t]] = to_coordinates(
                    term.coordinates, splines[first : first + lay.spline_count[t]]
                )
        return out
