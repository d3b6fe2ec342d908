"""Spike history: what a unit's own recent spikes do to its rate.

The log rate of a bin gets the sum, over the unit's spikes of the bins before, of a filter of the time since
each. The filter is made of raised cosines that are narrow and dense soon after a spike and wide later
(Pillow, Shlens, Paninski, Sher, Litke, Chichilnisky & Simoncelli 2008, Nature 454:995),

    h_j(t) = (1 + cos(max(-pi, min(pi, a log(t + c) - phi_j)))) / 2,

with peaks phi_j half of pi apart, the first one at the first bin after a spike. A ridge penalty shrinks their
coefficients, which are log factors of the rate.

A unit's history is a term like any other: bins with equal sums share a cell. Where a unit has more different
sums than LARGEST_CELLS, near ones share a cell and its mean.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from odograph.encoding.bases import SparseBasis, level_coordinates
from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Layout
from odograph.encoding.terms import Term
from odograph.errors import InputError

HISTORY = "history"
LARGEST_CELLS = 4096
LEVELS = (4095, 511, 127, 63, 31, 23, 15, 11, 7)  # 8^4 cells are the most that the coarsest leaves
BAND = 1.959964


@dataclass(frozen=True)
class Filter:
    """What one spike does to the rate at each lag: a factor, and its 95 % band; each (n_lags,)."""

    lag_s: np.ndarray
    gain: np.ndarray
    low: np.ndarray
    high: np.ndarray


def raised_cosines(n_lags: int, n_functions: int) -> np.ndarray:
    """The functions at lags of 1 to `n_lags` bins, (n_lags, n_functions); see the module's text.

    The last peak lies where its function has come down to half at the longest lag.
    """
    at = np.log(np.arange(1, n_lags + 1) + 1.0)  # c is one bin
    a = n_functions * np.pi / 2 / (at[-1] - at[0])
    peaks = a * at[0] + np.arange(n_functions) * np.pi / 2
    return (1 + np.cos(np.clip(a * at[:, None] - peaks, -np.pi, np.pi))) / 2


def recent_spikes(counts: np.ndarray, functions: np.ndarray) -> np.ndarray:
    """Sums of the functions over the spikes of the bins before each, (n_all_bins, n_functions).

    Parameters
    ----------
    counts : ndarray, (n_all_bins,)
        Spikes of all analysis bins, masked ones too: they happened.
    functions : ndarray, (n_lags, n_functions)
    """
    out = np.zeros((len(counts), functions.shape[1]))
    for lag, weights in enumerate(functions, start=1):
        out[lag:] += counts[:-lag, None] * weights
    return out


def with_history(design: SessionDesign, spike_times_s: np.ndarray) -> SessionDesign:
    """The session's design with one more nuisance term, the unit's own history.

    Parameters
    ----------
    design : SessionDesign
    spike_times_s : ndarray, (n_spikes,)

    Raises
    ------
    InputError
        The reach holds fewer bins than there are functions.
    """
    settings = design.settings
    n_lags = round(settings.history_s / design.bin_s)
    if n_lags < settings.history_functions:
        raise InputError(
            f"a spike history of {settings.history_s:g} s holds {n_lags} bins of {design.bin_s:g} s",
            place="encoding.history_s",
            expected=f"at least {settings.history_functions} bins, as encoding.history_functions asks",
            remedy="lengthen encoding.history_s or take fewer functions",
        )
    counts, _ = np.histogram(spike_times_s, design.edges_s)
    functions = raised_cosines(n_lags, settings.history_functions)
    sums = recent_spikes(counts.astype(float), functions)[design.valid]
    cell, values = _cells(sums)
    n, k = values.shape
    basis = SparseBasis(np.tile(np.arange(k, dtype=np.int32), (n, 1)), values, k)
    lags = design.bin_s * np.arange(1, n_lags + 1)
    span = (float(lags[0]), float(lags[-1]))
    term = Term(HISTORY, HISTORY, (), basis, level_coordinates(k), cell, (lags,), (span,))
    shared = {key: value for key, value in design.kept.items() if key == "shifts" or key[0] == "spectrum"}
    return replace(design, nuisance=(*design.nuisance, term), history=functions, kept=shared)


def _cells(sums: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The cell of every bin, (n_bins,) of int32, and the mean sums of every cell, (n_cells, n_functions)."""
    top = np.maximum(sums.max(axis=0), 1e-12)
    for levels in LEVELS:
        codes = np.rint(sums / top * levels).astype(np.int64)
        key = codes @ ((levels + 1) ** np.arange(codes.shape[1]))
        unique, cell, bins = np.unique(key, return_inverse=True, return_counts=True)
        if len(unique) <= LARGEST_CELLS:
            break
    means = [np.bincount(cell, column) / bins for column in sums.T]
    return cell.astype(np.int32), np.column_stack(means)


def fitted_filter(design: SessionDesign, layout: Layout, fit: Fit) -> Filter:
    """The filter of a fit whose design came from `with_history`."""
    t = layout.index_of(HISTORY)
    block = layout.slices[t]
    effect = design.history @ fit.coefficients[block]
    variance = np.sum((design.history @ fit.covariance[block, block]) * design.history, axis=1)
    reach = BAND * np.sqrt(np.maximum(variance, 0))
    lag_s = layout.table.terms[t].axes[0]
    return Filter(lag_s, np.exp(effect), np.exp(effect - reach), np.exp(effect + reach))
