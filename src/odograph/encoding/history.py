"""Spike history: what a unit's own recent spikes do to its rate.

The log rate of a bin gets the sum, over the unit's spikes of the bins before, of a filter of the time since
each. The filter is made of raised cosines that are narrow and dense soon after a spike and wide later
(Pillow, Shlens, Paninski, Sher, Litke, Chichilnisky & Simoncelli 2008, Nature 454:995),

    h_j(t) = (1 + cos(max(-pi, min(pi, a log(t + c) - phi_j)))) / 2,

with peaks phi_j half of pi apart, the first one at the first bin after a spike. Spikes of masked bins count:
they happened. Every function peaks at 1, so its coefficient is the log factor of the rate by one spike at the
peak's lag, and a ridge penalty with one strength for all shrinks them alike.

A unit's history is a term like any other: bins with equal sums, rounded to 1/1024 of one spike's peak, share
a cell. A bin's cell says what its own past was and nothing of other bins, so held-out spikes reach nothing
that trains. Units that fire much have nearly as many cells as bins.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from odograph.encoding.bases import SparseBasis, level_coordinates
from odograph.encoding.design import SessionDesign, history_bins, joint_key
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Layout
from odograph.encoding.terms import HISTORY, Term

GRID = 1024  # steps to which sums are rounded, per spike
BAND = 1.959964


@dataclass(frozen=True)
class Filter:
    """What one spike does to the rate at each lag: a factor, and its 95 % band; each (n_lags,)."""

    lag_s: np.ndarray
    gain: np.ndarray
    gain_low: np.ndarray
    gain_high: np.ndarray


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


def with_history(
    design: SessionDesign, spike_times_s: np.ndarray, observed: np.ndarray | None = None
) -> SessionDesign:
    """The session's design with one more nuisance term, the unit's own history; to be dropped with the unit.

    Parameters
    ----------
    design : SessionDesign
    spike_times_s : ndarray, (n_spikes,)
    observed : ndarray of bool, (n_all_bins,), optional
        Bins in which the unit was observed, masked ones too; spikes elsewhere count as none.

    Raises
    ------
    InputError
        The reach holds fewer bins than there are functions.
    """
    counts, _ = np.histogram(spike_times_s, design.edges_s)
    if observed is not None:
        counts = counts * observed
    functions = raised_cosines(history_bins(design.settings, design.bin_s), design.settings.history_functions)
    cell, values = _cells(recent_spikes(counts.astype(float), functions)[design.valid])
    n, k = values.shape
    basis = SparseBasis(np.tile(np.arange(k, dtype=np.int32), (n, 1)), values, k)
    lags = design.bin_s * np.arange(1, len(functions) + 1)
    span = (float(lags[0]), float(lags[-1]))
    term = Term(HISTORY, HISTORY, (), basis, level_coordinates(k), cell, (lags,), (span,))
    return replace(design, nuisance=(*design.nuisance, term), history=functions, kept={})


def _cells(sums: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The cell of every bin, (n_bins,) of int32, and the sums of every cell, (n_cells, n_functions)."""
    codes = np.rint(sums * GRID).astype(np.int64)
    key = joint_key([(int(column.max()) + 1, column) for column in codes.T])
    _, first, cell = np.unique(key, return_index=True, return_inverse=True)
    return cell.astype(np.int32), codes[first] / GRID


def fitted_filter(design: SessionDesign, layout: Layout, fit: Fit) -> Filter:
    """The filter of a fit whose design came from `with_history`."""
    t = layout.index_of(HISTORY)
    block = layout.slices[t]
    effect = design.history @ fit.coefficients[block]
    variance = np.sum((design.history @ fit.covariance[block, block]) * design.history, axis=1)
    reach = BAND * np.sqrt(np.maximum(variance, 0))
    lag_s = layout.table.terms[t].axes[0]
    return Filter(lag_s, np.exp(effect), np.exp(effect - reach), np.exp(effect + reach))
