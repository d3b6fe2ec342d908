"""Points, directions and other signals put on the analysis bins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ive

from odograph.behaviour.kalman import kalman_filter, rts_smoother, white_acceleration
from odograph.behaviour.motion import MotionModel

_SPEED_PRIOR_M_S = 1.0
_POSITION_PRIOR_M = 10.0
# A gap counts as longer than allowed beyond this factor, so that drift and rounding decide nothing.
_GAP_SLACK = 1.001
# The filter begins anew after gaps that are not interpolated; shorter ones than this are always bridged.
_ALWAYS_BRIDGED_S = 0.1


@dataclass(frozen=True, eq=False)
class PointOnBins:
    """One smoothed point on the bins.

    Attributes
    ----------
    state : ndarray (n_bins, 4)
        x, y (m), velocity x, y (m/s).
    position_variance : ndarray (n_bins,)
        Per axis, m^2.
    refused : ndarray (n_frames,) of bool
        Samples outside the gate.
    """

    state: np.ndarray
    position_variance: np.ndarray
    refused: np.ndarray


def bin_centres(start_s: float, stop_s: float, bin_s: float) -> np.ndarray:
    """Centres (n_bins,) of all whole bins within a span; bins are counted from time zero, in s."""
    first = int(np.ceil(start_s / bin_s - 1e-9))
    last = int(np.floor(stop_s / bin_s + 1e-9))
    return (np.arange(first, max(last, first)) + 0.5) * bin_s


def point_on_bins(
    time_s: np.ndarray,
    xy_m: np.ndarray,
    centre_s: np.ndarray,
    motion: MotionModel,
    longest_gap_s: float,
    gate_sd: float,
) -> PointOnBins:
    """Smooth one point; the bins are times of the smoother at which nothing was measured.

    Parameters
    ----------
    time_s : ndarray (n_frames,)
        Recording clock, s.
    xy_m : ndarray (n_frames, 2)
        Cleaned positions, NaN where lost.
    centre_s : ndarray (n_bins,)
        Bin centres, s.
    motion : MotionModel
        Noise and acceleration.
    longest_gap_s : float
        Gaps up to this are bridged; the filter begins anew after longer ones.
    gate_sd : float
        Gate of the filter.
    """
    seen = np.flatnonzero(np.isfinite(xy_m[:, 0]))
    refused = np.zeros(len(time_s), bool)
    if not len(seen):
        nothing = np.full((len(centre_s), 4), np.nan)
        return PointOnBins(nothing, nothing[:, 0], refused)
    times = np.concatenate([time_s[seen], centre_s])
    order = np.argsort(times, kind="stable")
    measured = np.concatenate([xy_m[seen], np.full((len(centre_s), 2), np.nan)])[order]
    step = np.diff(times[order], prepend=times[order[0]])
    starts = np.zeros(len(times), bool)
    # At the first entry, and at the first sample, which may come later than the first bin.
    starts[[0, int(np.argmax(order == 0))]] = True
    filtered = kalman_filter(
        measured,
        step,
        white_acceleration(step, motion.intensity),
        starts,
        prior_xy=tuple(np.median(xy_m[seen], axis=0)),
        prior_variances=(_POSITION_PRIOR_M**2, _SPEED_PRIOR_M_S**2),
        noise_variance=motion.position_noise_m**2,
        gate_sd=gate_sd,
        patience_s=max(_GAP_SLACK * longest_gap_s, _ALWAYS_BRIDGED_S),
    )
    state, cov = rts_smoother(filtered, step)
    back = np.empty(len(order), int)
    back[order] = np.arange(len(order))
    refused[seen] = filtered.refused[back[: len(seen)]]
    on_bins = back[len(seen) :]
    return PointOnBins(state[on_bins], cov[on_bins, 0], refused)


def long_gaps(
    time_s: np.ndarray, believed: np.ndarray, longest_gap_s: float
) -> tuple[np.ndarray, np.ndarray]:
    """Starts and stops (k,), s, of the gaps between believed samples that are longer than allowed.

    What lies before the first and after the last believed sample is a gap without an end.
    """
    seen = time_s[believed]
    edges = np.concatenate([[-np.inf], seen, [np.inf]])
    long = np.diff(edges) > _GAP_SLACK * longest_gap_s
    return edges[:-1][long], edges[1:][long]


def in_gaps(at_s: np.ndarray, gaps: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    """Index of the gap that each time lies in, (n,); -1 where none. The ends of a gap are not in it."""
    starts, stops = gaps
    if not len(starts):
        return np.full(len(at_s), -1)
    k = np.searchsorted(starts, at_s, side="left") - 1
    inside = (k >= 0) & (at_s < stops[np.clip(k, 0, None)])
    return np.where(inside, k, -1)


def direction_sd(distance_m: np.ndarray, noise_variance: np.ndarray) -> np.ndarray:
    """Circular standard deviation of the direction between two points, rad.

    For points a distance d apart, each with noise variance s^2 per axis, the mean resultant length is
    sqrt(pi k / 2) exp(-k) (I0(k) + I1(k)) with k = d^2 / (8 s^2) (projected normal distribution, Mardia &
    Jupp, Directional Statistics, 2000), and the circular standard deviation sqrt(-2 ln R).

    Parameters
    ----------
    distance_m : ndarray (n,)
        d, m.
    noise_variance : ndarray (n,)
        s^2, the mean over the two points, m^2.
    """
    k = distance_m**2 / (8 * noise_variance)
    length = np.sqrt(np.pi * k / 2) * (ive(0, k) + ive(1, k))
    return np.sqrt(-2 * np.log(np.clip(length, 1e-300, 1.0)))


def wrapped(angle_rad: np.ndarray) -> np.ndarray:
    """Angles in [0, 2 pi)."""
    turned = np.mod(angle_rad, 2 * np.pi)
    return np.where(turned >= 2 * np.pi, 0.0, turned)


def angles_on_bins(
    time_s: np.ndarray, angle_rad: np.ndarray, centre_s: np.ndarray, longest_gap_s: float
) -> np.ndarray:
    """Angles interpolated along the shorter arc, (n_bins,) in [0, 2 pi); NaN in gaps that are too long."""
    seen = np.isfinite(angle_rad)
    if seen.sum() < 2:
        return np.full(len(centre_s), np.nan)
    values = np.interp(centre_s, time_s[seen], np.unwrap(angle_rad[seen]))
    values[in_gaps(centre_s, long_gaps(time_s, seen, longest_gap_s)) >= 0] = np.nan
    return wrapped(values)


def values_on_bins(
    time_s: np.ndarray, values: np.ndarray, centre_s: np.ndarray, bin_s: float, longest_gap_s: float
) -> np.ndarray:
    """A signal on the bins, (n_bins,): the mean of the samples of a bin where sampling is finer than bins,
    else straight lines between samples; NaN in gaps that are too long.
    """
    seen = np.isfinite(values)
    if seen.sum() < 2:
        return np.full(len(centre_s), np.nan)
    at, value = time_s[seen], values[seen]
    interval = float(np.median(np.diff(at)))
    on_bins = np.interp(centre_s, at, value)
    if interval <= 0.5 * bin_s:
        rows = np.round((at - centre_s[0]) / bin_s).astype(int)
        inside = (rows >= 0) & (rows < len(centre_s))
        count = np.bincount(rows[inside], minlength=len(centre_s))
        total = np.bincount(rows[inside], value[inside], minlength=len(centre_s))
        on_bins = np.where(count > 0, total / np.maximum(count, 1), on_bins)
    # A slow signal has gaps of its own between any two samples; they are not losses.
    allowed = max(longest_gap_s, 2 * interval)
    on_bins[in_gaps(centre_s, long_gaps(time_s, seen, allowed)) >= 0] = np.nan
    return on_bins
