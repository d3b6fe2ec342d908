"""A session's covariates, discretised once and collapsed for every model.

All units of a session share their covariates. Each term's covariate is put on a fine grid of cells, and time
bins that fall in the same cells of a model's terms (and in the same held-out block group) are one row whose
exposure is their number times the bin width (Lang et al. 2014, Stat. Comput. 24:223; Wood, Li, Shaddick &
Augustin 2017, JASA 112:1199). A row table is built once per model and serves every unit and every fold.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import combinations

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
    """

    name: str
    kind: str
    columns: tuple[str, ...]
    basis: SparseBasis
    coordinates: Coordinates
    cell: np.ndarray
    axes: tuple[np.ndarray, ...]
    spans: tuple[tuple[float, float], ...]

    @property
    def n_cells(self) -> int:
        return len(self.basis.columns)


@dataclass(frozen=True)
class RowTable:
    """The collapsed rows of one model; terms in the order of falling cell number.

    Attributes
    ----------
    terms : tuple of Term
    cells : ndarray of int32, (n_terms, n_rows)
        Sorted by the first term's cell.
    seconds : ndarray, (n_rows,)
    group : ndarray of int32, (n_rows,)
        Held-out block group, see `Folds`.
    """

    terms: tuple[Term, ...]
    cells: np.ndarray
    seconds: np.ndarray
    group: np.ndarray


@dataclass(frozen=True)
class Folds:
    """Interleaved contiguous blocks with guard gaps.

    A bin's group says which fold holds it out and, near a block's border, which neighbouring fold's training
    leaves it out as well: group = fold + n_folds * (0, or 1 + the neighbour's fold).
    """

    n_folds: int
    group: np.ndarray

    @property
    def n_groups(self) -> int:
        return self.n_folds * (self.n_folds + 1)

    def training(self, fold: int) -> np.ndarray:
        """Which groups train when `fold` is held out, (n_groups,) of bool."""
        groups = np.arange(self.n_groups)
        return (groups % self.n_folds != fold) & (groups // self.n_folds != fold + 1)

    def held_out(self, fold: int) -> np.ndarray:
        """Which groups are scored when `fold` is held out, (n_groups,) of bool."""
        return np.arange(self.n_groups) % self.n_folds == fold


@dataclass(frozen=True)
class SessionDesign:
    """Everything about a session that its units share.

    Attributes
    ----------
    bin_s : float
    edges_s : ndarray, (n_all_bins + 1,)
        Edges of all analysis bins on the recording clock.
    valid : ndarray of bool, (n_all_bins,)
    terms : tuple of Term
        The variables that may be encoded, as configured.
    drift : Term or None
    folds : Folds
    speed_cm_s : ndarray, (n_bins,)
        Running speed in valid bins; empty when the table has none.
    columns : dict of ndarray, each (n_all_bins,)
        The behaviour columns that terms use.
    kept : dict
        What is worked out once and used for every unit (row tables, workspaces, restricted designs).
    """

    bin_s: float
    edges_s: np.ndarray
    valid: np.ndarray
    terms: tuple[Term, ...]
    drift: Term | None
    folds: Folds
    speed_cm_s: np.ndarray
    columns: dict[str, np.ndarray]
    settings: EncodingSettings
    kept: dict = field(default_factory=dict, repr=False, compare=False)

    @property
    def n_bins(self) -> int:
        return int(self.valid.sum())

    def models(self) -> list[tuple[str, ...]]:
        """Every subset of the terms, the constant model first, then by size and configured order."""
        names = [term.name for term in self.terms]
        return [subset for size in range(len(names) + 1) for subset in combinations(names, size)]

    def table(self, model: tuple[str, ...]) -> RowTable:
        """The row table of a model, built on first use."""
        if ("table", model) not in self.kept:
            chosen = [term for term in self.terms if term.name in model]
            table = collapse(chosen + ([self.drift] if self.drift else []), self.folds, self.bin_s)
            self.kept["table", model] = table
        return self.kept["table", model]


def model_name(model: tuple[str, ...]) -> str:
    """`position+speed`, or `constant` for the model without terms."""
    return "+".join(model) if model else "constant"


def collapse(terms: list[Term], folds: Folds, bin_s: float) -> RowTable:
    """Merge bins with equal cells and equal group into rows."""
    ordered = sorted(terms, key=lambda term: (-term.n_cells, term.name))
    key = np.zeros(len(folds.group), dtype=np.int64)
    for term in ordered:
        key = key * term.n_cells + term.cell
    key = key * folds.n_groups + folds.group
    unique, counts = np.unique(key, return_counts=True)
    rest, group = np.divmod(unique, folds.n_groups)
    cells = np.empty((len(ordered), len(unique)), dtype=np.int32)
    for i in range(len(ordered) - 1, -1, -1):
        rest, cells[i] = np.divmod(rest, ordered[i].n_cells)
    return RowTable(tuple(ordered), cells, counts * bin_s, group.astype(np.int32))


def make_folds(time_s: np.ndarray, settings: EncodingSettings) -> Folds:
    """Cut valid time into equal blocks and deal them out in turn.

    Parameters
    ----------
    time_s : ndarray, (n_bins,)
        Centres of the valid bins, ascending.
    settings : EncodingSettings
        Uses `folds`, `blocks_per_fold` and `guard_s`.
    """
    n_blocks = settings.folds * settings.blocks_per_fold
    # Blocks hold equal amounts of valid time, so that no fold is empty however the mask lies.
    block = (np.arange(len(time_s)) * n_blocks) // max(len(time_s), 1)
    fold = block % settings.folds
    first = np.searchsorted(block, np.arange(n_blocks))
    last = np.searchsorted(block, np.arange(n_blocks), side="right") - 1
    guard = np.zeros(len(time_s), dtype=np.int64)
    half = (time_s[last] - time_s[first]) / 2
    for b in range(n_blocks):
        inside = slice(first[b], last[b] + 1)
        t, reach = time_s[inside], min(settings.guard_s, half[b])
        if b > 0:
            guard[inside][t - time_s[last[b - 1]] <= reach] = 1 + (b - 1) % settings.folds
        if b + 1 < n_blocks:
            guard[inside][time_s[first[b + 1]] - t <= reach] = 1 + (b + 1) % settings.folds
    return Folds(settings.folds, fold + settings.folds * guard)


def prepare_session(behaviour: dict[str, np.ndarray], settings: EncodingSettings) -> SessionDesign:
    """Discretise a session's behaviour table.

    Parameters
    ----------
    behaviour : dict of ndarray, each (n_all_bins,)
        The behaviour table: `time_s` (bin centres, equally spaced, s), `valid` (bool) and one column for each
        coordinate that a term names.
    settings : EncodingSettings

    Raises
    ------
    InputError
        A term names a column that the table does not have, or a covariate is constant.
    """
    time_s = np.asarray(behaviour["time_s"], dtype=float)
    valid = np.asarray(behaviour["valid"], dtype=bool).copy()
    for term in settings.terms:
        for column in term.columns:
            if column not in behaviour:
                raise InputError(
                    f"the term '{term.name}' uses '{column}', which is not a column of the behaviour table",
                    place="encoding.terms",
                    expected=f"one of {', '.join(sorted(set(behaviour) - {'valid', 'reason', 'time_s'}))}",
                    remedy="correct the term's columns, or name the covariate under intake.covariates",
                )
            valid &= np.isfinite(np.asarray(behaviour[column], dtype=float))
    bin_s = round(float(np.median(np.diff(time_s))), 9)
    return _discretise(behaviour, time_s, valid, bin_s, settings)


def restrict(design: SessionDesign, keep: np.ndarray) -> SessionDesign:
    """The same session with fewer valid bins, for a unit observed part of the time; keep (n_all_bins,)."""
    time_s = (design.edges_s[:-1] + design.edges_s[1:]) / 2
    return _discretise(design.columns, time_s, design.valid & keep, design.bin_s, design.settings)


def _discretise(behaviour, time_s, valid, bin_s, settings) -> SessionDesign:
    if valid.sum() < 100 * settings.folds:
        raise InputError(
            f"{int(valid.sum())} valid bins",
            place="behaviour table",
            expected=f"at least {100 * settings.folds}, to hold out {settings.folds} folds",
            remedy="look at the audit of the behaviour stage: too much was dropped",
        )
    columns = {name: np.asarray(behaviour[name]) for term in settings.terms for name in term.columns}
    terms = tuple(_term(term, [columns[name][valid] for name in term.columns]) for term in settings.terms)
    speed = np.asarray(behaviour.get("speed_cm_s", np.empty(0)), dtype=float)
    if len(speed):
        columns["speed_cm_s"] = speed
    edges = np.append(time_s - bin_s / 2, time_s[-1] + bin_s / 2)
    return SessionDesign(
        bin_s=bin_s,
        edges_s=edges,
        valid=valid,
        terms=terms,
        drift=_drift(time_s[valid], settings) if settings.drift else None,
        folds=make_folds(time_s[valid], settings),
        speed_cm_s=speed[valid] if len(speed) else speed,
        columns=columns,
        settings=settings,
    )


def _span(values: np.ndarray, term: TermSettings) -> tuple[float, float]:
    """The configured range, else the data's, without the outermost fractions of a percent of the time."""
    if term.kind == "plane":
        low, high = np.quantile(values, [0.001, 0.999])
    else:
        low, high = np.quantile(values, [0.0025, 0.995])
    low = float(low) if term.low is None else term.low
    high = float(high) if term.high is None else term.high
    if not high > low:
        raise InputError(
            f"the covariate of the term '{term.name}' is constant ({low:g})",
            place=", ".join(term.columns),
            expected="a covariate that varies",
            remedy="leave the term out, or check the column",
        )
    return low, high


def _axis(values: np.ndarray, low: float, high: float, cells: int) -> tuple[np.ndarray, np.ndarray]:
    width = (high - low) / cells
    index = np.clip(((values - low) / width).astype(np.int64), 0, cells - 1)
    return index, low + width * (np.arange(cells) + 0.5)


def _term(term: TermSettings, values: list[np.ndarray]) -> Term:
    make = {"plane": _plane, "line": _line, "circle": _circle, "category": _category}[term.kind]
    basis, coordinates, cell, axes, spans = make(term, values)
    return Term(
        term.name, term.kind, tuple(term.columns), basis, coordinates, cell.astype(np.int32), axes, spans
    )


def _plane(term, values):
    spans = tuple(_span(v, term) for v in values)
    (ix, x), (iy, y) = (_axis(v, *span, term.cells) for v, span in zip(values, spans, strict=True))
    gx, gy = np.meshgrid(x, y)  # (y, x): maps come out as images
    basis = tensor_basis(
        open_basis(gx.ravel(), *spans[0], term.basis_size), open_basis(gy.ravel(), *spans[1], term.basis_size)
    )
    return basis, surface_coordinates(term.basis_size), iy * term.cells + ix, (x, y), spans


def _line(term, values):
    span = _span(values[0], term)
    cell, centres = _axis(values[0], *span, term.cells)
    return (
        open_basis(centres, *span, term.basis_size),
        curve_coordinates(term.basis_size),
        cell,
        (centres,),
        (span,),
    )


def _circle(term, values):
    period = 2 * np.pi
    cell, centres = _axis(np.mod(values[0], period), 0.0, period, term.cells)
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


def _drift(time_s: np.ndarray, settings: EncodingSettings) -> Term:
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
