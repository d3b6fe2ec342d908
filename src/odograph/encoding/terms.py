"""Terms: covariates on grids, with the bases and penalties of their contribution to the log rate.

| kind     | covariate                | basis                           | left unpenalised        |
|----------|--------------------------|---------------------------------|-------------------------|
| plane    | two coordinates          | tensor product of cubic splines | 1, x, y, xy             |
| line     | one coordinate           | cubic B-splines                 | straight lines, or none |
| circle   | an angle of period 2 pi  | cyclic cubic B-splines          | the constant            |
| category | levels of a state        | one column a level              | nothing (ridge)         |
| history  | a unit's recent spikes   | sums of raised cosines          | nothing (ridge)         |

Lines may be penalised by their second derivative, which leaves straight lines free, or by their first, which
shrinks to a constant. The history is not configured as a term, see `odograph.encoding.history`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from odograph.encoding.bases import (
    Coordinates,
    SparseBasis,
    curve_coordinates,
    cyclic_basis,
    level_coordinates,
    open_basis,
    surface_coordinates,
    tensor_basis,
)
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings, TermSettings

DRIFT = "drift"
HISTORY = "history"


@dataclass(frozen=True)
class Term:
    """One term on its grid.

    Attributes
    ----------
    basis : SparseBasis
        Evaluated at the cells' centres, (n_cells, support).
    cell : ndarray of int32, (n_bins,)
        The cell of every valid bin.
    axes : tuple of ndarray
        Cell centres along each axis, in the covariate's unit; a plane's cells run over y first, then x.
    spans : tuple of (low, high)
        Range of each axis.
    margins : tuple of SparseBasis
        A plane's bases along x and along y, each at its axis' cell centres; empty for other kinds.
    """

    name: str
    kind: str
    columns: tuple[str, ...]
    basis: SparseBasis
    coordinates: Coordinates
    cell: np.ndarray
    axes: tuple[np.ndarray, ...]
    spans: tuple[tuple[float, float], ...]
    margins: tuple[SparseBasis, ...] = ()

    @property
    def n_cells(self) -> int:
        return len(self.basis.columns)

    @cached_property
    def functions(self) -> np.ndarray:
        """The functions of the term's coordinates at the cells, (n_cells, n_coordinates)."""
        return self.basis.dense() @ self.coordinates.matrix()

    @cached_property
    def mean_functions(self) -> np.ndarray:
        """Means of `functions` over occupancy, (n_coordinates,)."""
        occupancy = np.bincount(self.cell, minlength=self.n_cells)
        return (occupancy / occupancy.sum()) @ self.functions

    @property
    def centred_functions(self) -> np.ndarray:
        """`functions` less their means over occupancy, (n_cells, n_coordinates)."""
        return self.functions - self.mean_functions


def _span(values: np.ndarray, term: TermSettings) -> tuple[float, float]:
    """The configured range, else the data's, without the outermost fractions of a percent of the time."""
    if term.kind == "plane":
        low, high = np.quantile(values, [0.001, 0.999])
    else:
        low, high = np.quantile(values, [0.0025, 0.995])
    low = float(low) if term.low is None else term.low
    high = float(high) if term.high is None else term.high
    if not high > low:
        raise _constant(term, low)
    return low, high


def _constant(term: TermSettings, value: float) -> InputError:
    return InputError(
        f"the covariate of the term '{term.name}' is constant ({value:g})",
        place=", ".join(term.columns),
        expected="a covariate that varies",
        remedy="leave the term out, or check the column",
    )


def _axis(values: np.ndarray, low: float, high: float, cells: int) -> tuple[np.ndarray, np.ndarray]:
    width = (high - low) / cells
    index = np.clip(((values - low) / width).astype(np.int64), 0, cells - 1)
    return index, low + width * (np.arange(cells) + 0.5)


def make_term(term: TermSettings, values: list[np.ndarray]) -> Term:
    """Put a term's covariate on its grid.

    Parameters
    ----------
    term : TermSettings
    values : list of ndarray, each (n_bins,)
        The covariate's columns in valid bins.

    Raises
    ------
    InputError
        The covariate is constant.
    """
    make = {"plane": _plane, "line": _line, "circle": _circle, "category": _category}[term.kind]
    basis, coordinates, cell, axes, spans, *margins = make(term, values)
    return Term(
        term.name,
        term.kind,
        tuple(term.columns),
        basis,
        coordinates,
        cell.astype(np.int32),
        axes,
        spans,
        tuple(margins),
    )


def _plane(term, values):
    spans = tuple(_span(v, term) for v in values)
    (ix, x), (iy, y) = (_axis(v, *span, term.cells) for v, span in zip(values, spans, strict=True))
    gx, gy = np.meshgrid(x, y)  # (y, x): maps come out as images
    basis = tensor_basis(
        open_basis(gx.ravel(), *spans[0], term.basis_size), open_basis(gy.ravel(), *spans[1], term.basis_size)
    )
    margins = [open_basis(axis, *span, term.basis_size) for axis, span in zip((x, y), spans, strict=True)]
    return basis, surface_coordinates(term.basis_size), iy * term.cells + ix, (x, y), spans, *margins


def _line(term, values):
    span = _span(values[0], term)
    cell, centres = _axis(values[0], *span, term.cells)
    return (
        open_basis(centres, *span, term.basis_size),
        curve_coordinates(term.basis_size, order=term.penalty_order),
        cell,
        (centres,),
        (span,),
    )


def _circle(term, values):
    period = 2 * np.pi
    cell, centres = _axis(np.mod(values[0], period), 0.0, period, term.cells)
    if not np.ptp(cell):
        raise _constant(term, float(values[0][0]))
    coordinates = curve_coordinates(term.basis_size, cyclic=True)
    return cyclic_basis(centres, term.basis_size), coordinates, cell, (centres,), ((0.0, period),)


def _category(term, values):
    levels, cell = np.unique(values[0], return_inverse=True)
    if len(levels) < 2:
        raise InputError(
            f"the covariate of the term '{term.name}' has a single level",
            place=term.columns[0],
            expected="at least two levels",
            remedy="leave the term out, or check the column",
        )
    n = len(levels)
    basis = SparseBasis(np.arange(n, dtype=np.int32)[:, None], np.ones((n, 1)), n)
    return (
        basis,
        level_coordinates(n),
        cell,
        (levels.astype(float),),
        ((float(levels[0]), float(levels[-1])),),
    )


def make_drift(time_s: np.ndarray, settings: EncodingSettings) -> Term:
    """The slow drift of the rate, a curve over time; time_s (n_bins,) are the centres of valid bins."""
    low, high = float(time_s[0]), float(time_s[-1])
    size = max(4, int(np.ceil((high - low) / settings.drift_knot_s)) + 3)
    cells = settings.folds * settings.blocks_per_fold
    while (high - low) / cells > settings.drift_knot_s / 4:
        cells *= 2
    cell, centres = _axis(time_s, low, high, cells)
    basis = open_basis(centres, low, high, size)
    return Term(
        DRIFT,
        "line",
        ("time_s",),
        basis,
        curve_coordinates(size),
        cell.astype(np.int32),
        (centres,),
        ((low, high),),
    )
