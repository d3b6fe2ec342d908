"""Which frame belongs to which pulse: kernels that compare, look for and pair two trains of times."""

from __future__ import annotations

import numpy as np

from odograph.compiled import compiled

# Frames compared at once when a stretch of the camera's frames is looked for in the pulses: enough for the
# jitter pattern to be unmistakable, few enough that the clock stays straight within the stretch.
WINDOW_FRAMES = 64
_SMALLEST_MATCHED_SHARE = 0.7
_CLEARLY_BETTER = 0.6


@compiled
def _spread(frame_s, pulse_s, shift, reach_s, times, residuals):
    n_pulses = len(pulse_s)
    k = min(np.searchsorted(pulse_s, frame_s[0] + shift), n_pulses - 1)
    k = max(k - 1, 0)
    n = 0
    for i in range(len(frame_s)):
        wanted = frame_s[i] + shift
        while k + 1 < n_pulses and abs(pulse_s[k + 1] - wanted) <= abs(pulse_s[k] - wanted):
            k += 1
        if abs(pulse_s[k] - wanted) <= reach_s:
            times[n] = frame_s[i] - frame_s[0]
            residuals[n] = pulse_s[k] - wanted
            n += 1
    if n < _SMALLEST_MATCHED_SHARE * len(frame_s) or n < 4:
        return np.inf
    mean_time, mean_residual = times[:n].mean(), residuals[:n].mean()
    sxx, sxy = 0.0, 0.0
    for i in range(n):
        sxx += (times[i] - mean_time) ** 2
        sxy += (times[i] - mean_time) * (residuals[i] - mean_residual)
    slope = sxy / sxx if sxx > 0 else 0.0
    total = 0.0
    for i in range(n):
        total += abs(residuals[i] - mean_residual - slope * (times[i] - mean_time))
    return total / n


@compiled
def alignment_spreads(
    frame_s: np.ndarray, pulse_s: np.ndarray, shift_s: np.ndarray, reach_s: float
) -> np.ndarray:
    """How badly a window of frames fits the pulses under each of several shifts.

    Parameters
    ----------
    frame_s : ndarray (n_window,)
        Times of the window's frames, camera clock, s, ascending.
    pulse_s : ndarray (n_pulses,)
        Times of all pulses, recording clock, s, ascending.
    shift_s : ndarray (n_shifts,)
        Recording minus camera clock, s.
    reach_s : float
        A frame farther than this from every pulse counts as unmatched.

    Returns
    -------
    ndarray (n_shifts,)
        Mean absolute residual about the window's own straight line, s; inf where too few frames match.
    """
    times = np.empty(len(frame_s))
    residuals = np.empty(len(frame_s))
    spreads = np.empty(len(shift_s))
    for i in range(len(shift_s)):
        spreads[i] = _spread(frame_s, pulse_s, shift_s[i], reach_s, times, residuals)
    return spreads


@compiled
def pair_frames(
    frame_s: np.ndarray, pulse_s: np.ndarray, slope: float, intercept_s: float, reach_s: float
) -> np.ndarray:
    """Pulse of every frame under a line: the nearest within reach, each pulse given to one frame only.

    Parameters
    ----------
    frame_s : ndarray (n_frames,)
        Camera clock, s, ascending.
    pulse_s : ndarray (n_pulses,)
        Recording clock, s, ascending.
    slope, intercept_s : float
        Recording time predicted as slope * frame + intercept.
    reach_s : float
        Largest distance of a pair, s.

    Returns
    -------
    ndarray (n_frames,) of int64
        Index into `pulse_s`; -1 where a frame has no pulse.
    """
    n_frames, n_pulses = len(frame_s), len(pulse_s)
    pulse_of = np.full(n_frames, -1, np.int64)
    owner = np.full(n_pulses, -1, np.int64)
    k = 0
    for i in range(n_frames):
        wanted = slope * frame_s[i] + intercept_s
        while k + 1 < n_pulses and abs(pulse_s[k + 1] - wanted) <= abs(pulse_s[k] - wanted):
            k += 1
        distance = abs(pulse_s[k] - wanted)
        if distance > reach_s:
            continue
        rival = owner[k]
        if rival >= 0:
            if abs(pulse_s[k] - (slope * frame_s[rival] + intercept_s)) <= distance:
                continue
            pulse_of[rival] = -1
        pulse_of[i] = k
        owner[k] = i
    return pulse_of


def refined_shift(window_s: np.ndarray, pulse_s: np.ndarray, shift_s: float, reach_s: float) -> float:
    """The shift again as the median over the window, so that no single frame's jitter is left in it."""
    pulse_of = pair_frames(window_s, pulse_s, 1.0, shift_s, reach_s)
    found = pulse_of >= 0
    if not found.any():
        return shift_s
    return shift_s + float(np.median(pulse_s[pulse_of[found]] - (window_s[found] + shift_s)))


def find_window(
    window_s: np.ndarray, pulse_s: np.ndarray, candidates_s: np.ndarray, reach_s: float, tries: int = 3
) -> tuple[float, float, float]:
    """The shift under which a window of frames fits the pulses best.

    Parameters
    ----------
    window_s : ndarray (n_window,)
        Camera clock, s.
    pulse_s : ndarray (n_pulses,)
        All pulses, recording clock, s.
    candidates_s : ndarray (n_candidates,)
        Pulses on which a frame of the window is tried.
    reach_s : float
        See `alignment_spreads`.
    tries : int
        Up to this many frames (1 to 3) are tried, as the pulse of any one of them may be missing.

    Returns
    -------
    shift_s, spread_s, usual_s : float
        Recording minus camera clock, the spread there, and the median spread of all candidates that fit at
        all (nan, inf, inf if none does). A spread far below the usual one marks a place that is no accident.
    """
    middle = len(window_s) // 2
    best = (np.nan, np.inf, np.inf)
    for frame in (middle, max(middle - 5, 0), min(middle + 7, len(window_s) - 1))[:tries]:
        shifts = candidates_s - window_s[frame]
        spreads = alignment_spreads(window_s, pulse_s, shifts, reach_s)
        k = int(np.argmin(spreads))
        if not np.isfinite(spreads[k]):
            continue
        usual = float(np.median(spreads[np.isfinite(spreads)]))
        if spreads[k] < best[1]:
            best = (float(shifts[k]), float(spreads[k]), usual)
        if spreads[k] < _CLEARLY_BETTER * usual:
            break
    if not np.isfinite(best[1]):
        return best
    return refined_shift(window_s, pulse_s, best[0], reach_s), best[1], best[2]
