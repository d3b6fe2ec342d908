"""Held-out folds: interleaved contiguous blocks of time, with a guard gap in training beside each."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings

ROUNDING_S = 1e-6


@dataclass(frozen=True)
class Folds:
    """Interleaved contiguous blocks with guard gaps.

    A bin's group says which fold holds it out and, near a block's border, which neighbouring fold's training
    leaves it out as well: group = fold + n_folds * (0, or 1 + the neighbour's fold), (n_bins,) of int32.
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


def make_folds(time_s: np.ndarray, settings: EncodingSettings) -> Folds:
    """Cut valid time into equal blocks and deal them out in turn.

    Parameters
    ----------
    time_s : ndarray, (n_bins,)
        Centres of the valid bins, ascending.
    settings : EncodingSettings
        Uses `folds`, `blocks_per_fold`, `guard_s` and `history_s`.

    Raises
    ------
    InputError
        Blocks are shorter than guards that cover the reach of the spike history.
    """
    n_blocks = settings.folds * settings.blocks_per_fold
    # Blocks hold equal amounts of valid time, so that no fold is empty however the mask lies.
    block = (np.arange(len(time_s)) * n_blocks) // max(len(time_s), 1)
    fold = block % settings.folds
    first = np.searchsorted(block, np.arange(n_blocks))
    last = np.searchsorted(block, np.arange(n_blocks), side="right") - 1
    guard = np.zeros(len(time_s), dtype=np.int64)
    half = (time_s[last] - time_s[first]) / 2
    if settings.history_s > 0 and half.min() <= settings.history_s + ROUNDING_S:
        raise InputError(
            f"the shortest held-out block lasts {2 * half.min():.3g} s, and its spikes reach what trains",
            place="encoding.history_s",
            expected=f"blocks of more than {2 * settings.history_s:g} s, twice the spike history",
            remedy="set encoding.blocks_per_fold or encoding.history_s lower",
        )
    # A bin just at the history's reach belongs to the guard, whatever rounding says of its time.
    guard_s = (
        max(settings.guard_s, settings.history_s + ROUNDING_S) if settings.history_s else settings.guard_s
    )
    for b in range(n_blocks):
        inside = slice(first[b], last[b] + 1)
        t, reach = time_s[inside], min(guard_s, half[b])
        if b > 0:
            guard[inside][t - time_s[last[b - 1]] <= reach] = 1 + (b - 1) % settings.folds
        if b + 1 < n_blocks:
            guard[inside][time_s[first[b + 1]] - t <= reach] = 1 + (b + 1) % settings.folds
    return Folds(settings.folds, (fold + settings.folds * guard).astype(np.int32))
