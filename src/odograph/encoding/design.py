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

from odograph.encoding.folds import Folds, make_folds
from odograph.encoding.terms import HISTORY, Term, make_drift, make_term
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings


@dataclass(frozen=True)
class RowTable:
    """The collapsed rows of one model; planes first, then terms of falling cell number, the history last.

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
    nuisance : tuple of Term
        Terms of every model, never tested: the slow drift, a unit's spike history.
    folds : Folds
    speed_cm_s : ndarray, (n_bins,)
        Running speed in valid bins; empty when the table has none.
    columns : dict of ndarray, each (n_all_bins,)
        The behaviour columns that terms use.
    history : ndarray, (n_lags, n_functions), or None
        Functions of the spike history, see `odograph.encoding.history`.
    kept : dict
        What is worked out once and used for every unit (row tables, workspaces, restricted designs).
    of_covariates : dict
        The same for what depends on covariates alone, which a unit's design with its history shares.
    """

    bin_s: float
    edges_s: np.ndarray
    valid: np.ndarray
    terms: tuple[Term, ...]
    nuisance: tuple[Term, ...]
    folds: Folds
    speed_cm_s: np.ndarray
    columns: dict[str, np.ndarray]
    settings: EncodingSettings
    history: np.ndarray | None = None
    kept: dict = field(default_factory=dict, repr=False, compare=False)
    of_covariates: dict = field(default_factory=dict, repr=False, compare=False)

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
            self.kept["table", model] = collapse([*chosen, *self.nuisance], self.folds, self.bin_s)
        return self.kept["table", model]


def model_name(model: tuple[str, ...]) -> str:
    """`position+speed`, or `constant` for the model without terms."""
    return "+".join(model) if model else "constant"


def collapse(terms: list[Term], folds: Folds, bin_s: float) -> RowTable:
    """Merge bins with equal cells and group into rows, in the order that `RowTable` says."""
    ordered = sorted(
        terms, key=lambda term: (term.kind != "plane", term.kind == HISTORY, -term.n_cells, term.name)
    )
    key = joint_key([*((t.n_cells, t.cell) for t in ordered), (folds.n_groups, folds.group)])
    _, first, counts = np.unique(key, return_index=True, return_counts=True)
    cells = np.array([term.cell[first] for term in ordered], dtype=np.int32).reshape(len(ordered), len(first))
    return RowTable(tuple(ordered), cells, counts * bin_s, folds.group[first])


def joint_key(parts: list[tuple[int, np.ndarray]]) -> np.ndarray:
    """One number for every combination of whole numbers, ordered by the first, then the second, and so on.

    Parameters
    ----------
    parts : list of (size, values)
        Values, (n,), from 0 to below their size.

    Returns
    -------
    ndarray of int64, (n,)
    """
    key, size = np.zeros(len(parts[0][1]), dtype=np.int64), 1
    for n, values in parts:
        if size > np.iinfo(np.int64).max // n:  # the product would not fit: count only what occurs
            key = np.unique(key, return_inverse=True)[1].astype(np.int64)
            size = len(key)
        key, size = key * n + values, size * n
    return key


def history_bins(settings: EncodingSettings, bin_s: float) -> int:
    """Bins that the spike history reaches back.

    Raises
    ------
    InputError
        There are fewer of them than functions.
    """
    n = int(np.floor(settings.history_s / bin_s + 1e-6))
    if n < settings.history_functions:
        raise InputError(
            f"a spike history of {settings.history_s:g} s holds {n} bins of {bin_s:g} s",
            place="encoding.history_s",
            expected=f"at least {settings.history_functions} bins, as encoding.history_functions asks",
            remedy="lengthen encoding.history_s or take fewer functions",
        )
    return n


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
        A term names a column that the table does not have, or a covariate is constant or has no value; the
        spike history does not fit the bins or the held-out blocks.
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
            known = np.isfinite(np.asarray(behaviour[column], dtype=float))
            if not known.any():
                raise InputError(
                    f"the term '{term.name}' uses '{column}', which has no value in this session",
                    place="encoding.terms",
                    expected="a covariate that was measured (head direction needs two points or a series)",
                    remedy="leave the term out of encoding.terms, or study such sessions on their own",
                )
            valid &= known
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
    if settings.history_s > 0:
        history_bins(settings, bin_s)
    columns = {name: np.asarray(behaviour[name]) for term in settings.terms for name in term.columns}
    terms = tuple(make_term(term, [columns[name][valid] for name in term.columns]) for term in settings.terms)
    speed = np.asarray(behaviour.get("speed_cm_s", np.empty(0)), dtype=float)
    if len(speed):
        columns["speed_cm_s"] = speed
    edges = np.append(time_s - bin_s / 2, time_s[-1] + bin_s / 2)
    return SessionDesign(
        bin_s=bin_s,
        edges_s=edges,
        valid=valid,
        terms=terms,
        nuisance=(make_drift(time_s[valid], settings),) if settings.drift else (),
        folds=make_folds(time_s[valid], settings),
        speed_cm_s=speed[valid] if len(speed) else speed,
        columns=columns,
        settings=settings,
    )
