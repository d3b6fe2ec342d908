"""Does tuning differ between slow and fast running? A comparison that needs no model.

Running time is cut at its median speed. Both halves are brought to the same time in every cell of the
variable (spikes kept with the probability that their time is), then to the same number of spikes; information
per spike of the two is then biased alike, and the first-order bias is taken off besides. Repeated, averaged.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.descriptors.information import information_bias_bits, information_bits_per_spike

LEAST_SPIKES = 30


@dataclass(frozen=True)
class SlowFast:
    """Information of matched halves, bits per spike, and what stands behind it; NaN when too little does."""

    slow_bits_per_spike: float
    fast_bits_per_spike: float
    matched_seconds: float
    matched_spikes: float


NOT_AVAILABLE = SlowFast(float("nan"), float("nan"), 0.0, 0.0)


def running_halves(speed_cm_s: np.ndarray, above_cm_s: float) -> tuple[np.ndarray, np.ndarray, float]:
    """Masks of the slow and the fast half of running time, each (n_bins,), and the speed that parts them."""
    running = speed_cm_s > above_cm_s
    if not running.any():
        return running, running, float("nan")
    cut = float(np.median(speed_cm_s[running]))
    return running & (speed_cm_s <= cut), running & (speed_cm_s > cut), cut


def compare_halves(
    cell: np.ndarray,
    counts: np.ndarray,
    slow: np.ndarray,
    fast: np.ndarray,
    bin_s: float,
    *,
    repeats: int,
    seed: int,
) -> SlowFast:
    """Compare the information of two parts of the time, matched for occupancy and spike number.

    Parameters
    ----------
    cell : ndarray of int, (n_bins,)
        Cell of the variable in every bin.
    counts : ndarray, (n_bins,)
        Spikes in every bin.
    slow, fast : ndarray of bool, (n_bins,)
    bin_s : float
    repeats : int
    seed : int
    """
    n_cells = int(cell.max()) + 1
    time = [np.bincount(cell[part], minlength=n_cells) * bin_s for part in (slow, fast)]
    spikes = [
        np.bincount(cell[part], weights=counts[part], minlength=n_cells).astype(np.int64)
        for part in (slow, fast)
    ]
    common = np.minimum(*time)
    used = common > 0
    if used.sum() < 2:
        return NOT_AVAILABLE
    keep = [np.divide(common, t, out=np.zeros_like(common), where=t > 0) for t in time]
    rng = np.random.default_rng(seed)
    bits, sizes = [], []
    for _ in range(repeats):
        drawn = [rng.binomial(k, p)[used] for k, p in zip(spikes, keep, strict=True)]
        size = int(min(d.sum() for d in drawn))
        if size < LEAST_SPIKES:
            return NOT_AVAILABLE
        drawn = [rng.multivariate_hypergeometric(d, size, method="marginals") for d in drawn]
        bias = information_bias_bits(int(used.sum()), size)
        bits.append([information_bits_per_spike(common[used], d / common[used]) - bias for d in drawn])
        sizes.append(size)
    slow_bits, fast_bits = np.mean(bits, axis=0)
    return SlowFast(float(slow_bits), float(fast_bits), float(common.sum()), float(np.mean(sizes)))
