"""How much a rate map or tuning curve says about where the animal is or looks.

Plug-in measures of Skaggs et al. 1993 (Advances in Neural Information Processing Systems 5:1030) and Skaggs
et al. 1996 (Hippocampus 6:149). Every function takes the time spent per bin and the rate per bin, of any
shape: bins without time or without a rate (NaN) are left out, the time need not sum to one, 0 log 0 is 0.
"""

from __future__ import annotations

import numpy as np
from scipy.special import xlogy


def mean_rate(seconds: np.ndarray, rate_hz: np.ndarray) -> float:
    """Mean rate over the visited time in Hz; NaN when no bin was visited.

    Parameters
    ----------
    seconds : array of any shape
        Time per bin, or any weights in proportion to it.
    rate_hz : array of the same shape
        Rate per bin, NaN where there is none.

    Raises
    ------
    ValueError
        Shapes that differ; negative or infinite time or rates.
    """
    share, rate = _visited(seconds, rate_hz)
    return float(share @ rate) if share.size else float("nan")


def information_bits_per_spike(seconds: np.ndarray, rate_hz: np.ndarray) -> float:
    """Information per spike: sum of p_i (r_i / r) log2(r_i / r), with r the mean rate.

    Arguments and errors as `mean_rate`. NaN when there is no visited bin or no spike in any.
    """
    share, rate = _visited(seconds, rate_hz)
    mean = share @ rate
    if not mean > 0:
        return float("nan")
    relative = rate / mean
    return float(share @ xlogy(relative, relative) / np.log(2))


def information_bits_per_second(seconds: np.ndarray, rate_hz: np.ndarray) -> float:
    """Bits per spike times mean rate: 0 for a silent map, NaN when no bin was visited."""
    mean = mean_rate(seconds, rate_hz)
    return information_bits_per_spike(seconds, rate_hz) * mean if mean > 0 else mean


def sparsity(seconds: np.ndarray, rate_hz: np.ndarray) -> float:
    """Sparsity r^2 / sum of p_i r_i^2: 1 for a flat map, f for firing in a fraction f of the time.

    Arguments and errors as `mean_rate`. NaN when there is no visited bin or no spike in any.
    """
    share, rate = _visited(seconds, rate_hz)
    mean = share @ rate
    return float(mean**2 / (share @ rate**2)) if mean > 0 else float("nan")


def information_bias_bits(n_bins: int, n_spikes: int) -> float:
    """First-order upward bias of unsmoothed information per spike: (n_bins - 1) / (2 n_spikes ln 2) bits.

    The plug-in information of an unsmoothed map is a likelihood-ratio statistic over 2 n ln 2, and that
    statistic of a flat cell has n_bins - 1 degrees of freedom (Panzeri & Treves 1996, Network 7:87). NaN
    without spikes.
    """
    return (n_bins - 1) / (2 * n_spikes * np.log(2)) if n_spikes > 0 else float("nan")


def _visited(seconds: np.ndarray, rate_hz: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Share of time and rate of the visited bins, flat."""
    seconds, rate_hz = np.asarray(seconds, float), np.asarray(rate_hz, float)
    if seconds.shape != rate_hz.shape:
        raise ValueError(f"seconds and rate_hz differ in shape: {seconds.shape}, {rate_hz.shape}")
    if np.any(seconds < 0) or np.any(rate_hz < 0) or np.any(np.isinf(seconds)) or np.any(np.isinf(rate_hz)):
        raise ValueError("seconds and rates must be finite and not negative")
    used = (seconds > 0) & np.isfinite(rate_hz)
    share, rate = seconds[used], rate_hz[used]
    return share / share.sum() if share.size else share, rate
