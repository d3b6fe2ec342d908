"""One unit's spikes on a session's grid."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.encoding.design import SessionDesign
from odograph.encoding.terms import Term


@dataclass(frozen=True)
class UnitSpikes:
    """The spikes of one unit that fall in valid bins.

    Attributes
    ----------
    bins : ndarray of int64, (n_spikes,)
        Index among the valid bins, ascending.
    all_bins : ndarray of int64, (n_spikes,)
        Index among all analysis bins.
    within : ndarray, (n_spikes,)
        Place in the bin, 0 to 1.
    counts : ndarray, (n_bins,)
        Spikes per valid bin.
    """

    bins: np.ndarray
    all_bins: np.ndarray
    within: np.ndarray
    counts: np.ndarray

    @property
    def n_spikes(self) -> int:
        return len(self.bins)

    def per_cell(self, term: Term, spike_mask: np.ndarray | None = None) -> np.ndarray:
        """Spikes in each cell of a term, (n_cells,); `spike_mask` (n_spikes,) picks some of them."""
        bins = self.bins if spike_mask is None else self.bins[spike_mask]
        return np.bincount(term.cell[bins], minlength=term.n_cells).astype(float)


def bin_spikes(design: SessionDesign, spike_times_s: np.ndarray) -> UnitSpikes:
    """Count spikes in the session's valid analysis bins.

    Parameters
    ----------
    design : SessionDesign
    spike_times_s : ndarray, (n,)
        Recording clock.
    """
    times = np.sort(spike_times_s)
    index = np.searchsorted(design.edges_s, times, side="right") - 1
    inside = (index >= 0) & (index < len(design.valid))
    inside[inside] = design.valid[index[inside]]
    index = index[inside]
    within = np.clip((times[inside] - design.edges_s[index]) / design.bin_s, 0.0, 1.0)
    rank = np.cumsum(design.valid) - 1
    bins = rank[index]
    return UnitSpikes(bins, index, within, np.bincount(bins, minlength=design.n_bins).astype(float))
