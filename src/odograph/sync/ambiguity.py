"""Whether the frames could belong to the pulses one or several frames earlier or later just as well."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.sync.line import Line
from odograph.sync.pairing import WINDOW_FRAMES, alignment_spreads
from odograph.sync.profile import window_starts

_WINDOWS = 100
_LEAST_SHIFTS = 3
_MOST_SHIFTS = 5000
# A shift fits worse when the logarithm of its spread is larger by this much and by this many standard errors.
_WORSE_LOG = 0.02
_WORSE_SE = 5.0
_SMALLEST_SPREAD_S = 5e-6


@dataclass(frozen=True)
class ShiftTest:
    """Which shifts by whole frames fit as well as the best.

    Attributes
    ----------
    best : int
        Frames by which the pairing must move (positive: to later pulses) to fit best.
    width_frames : int
        Distance between the first and the last shift that fit equally well.
    by_ends_alone : bool
        The jitter settles nothing: one shift is left only because the others leave frames outside the pulses.
    """

    best: int
    width_frames: int
    by_ends_alone: bool


def compare_shifts(
    frame_s: np.ndarray, pulse_s: np.ndarray, line: Line, interval_s: float, reach_s: float, blind: bool
) -> ShiftTest:
    """Compare the pairing under a line with the same pairing moved by whole frames.

    Parameters
    ----------
    frame_s : ndarray (n_frames,)
        Camera clock, s.
    pulse_s : ndarray (n_pulses,)
        Recording clock, s.
    line : Line
        The pairing's line.
    interval_s : float
        Frame interval, s.
    reach_s : float
        See `alignment_spreads`.
    blind : bool
        The line came without any jitter pattern: all shifts that keep the frames inside the pulses are tried.
    """
    pulse_interval_s = float(np.median(np.diff(pulse_s)))
    first_s, last_s = line.at(frame_s[0]), line.at(frame_s[-1])
    earliest = -int((first_s - pulse_s[0]) / pulse_interval_s + 0.5)
    latest = int((pulse_s[-1] - last_s) / pulse_interval_s + 0.5)
    windows = [frame_s[k : k + WINDOW_FRAMES] for k in window_starts(len(frame_s), _WINDOWS)]
    reach = _MOST_SHIFTS if blind else _LEAST_SHIFTS
    while True:
        shifts = np.arange(max(earliest, -reach), min(latest, reach) + 1)
        equal, best = _equal_shifts(windows, line, pulse_s, shifts, pulse_interval_s, reach_s)
        if blind or reach == _MOST_SHIFTS or len(equal) == 1:
            break
        reach = _MOST_SHIFTS
    if len(equal) > 1:
        # Nothing prefers one of them; the first keeps the first frame nearest to the first pulse.
        return ShiftTest(int(equal[0]), int(equal[-1] - equal[0]), False)
    return ShiftTest(int(best), 0, len(shifts) == 1)


def _equal_shifts(windows, line, pulse_s, shifts, pulse_interval_s, reach_s):
    """Shifts that fit as well as the best, and the best: a paired comparison, window by window."""
    if not len(shifts):
        return np.array([0]), 0
    moved = shifts * pulse_interval_s
    spreads = np.array(
        [
            alignment_spreads(window, pulse_s, line.at(window[0]) - window[0] + moved, reach_s)
            for window in windows
        ]
    )
    # A window's spread is never below what rounding of time stamps leaves; it is bounded so that logs exist.
    logs = np.log(np.clip(spreads, _SMALLEST_SPREAD_S, reach_s))
    best = int(np.argmin(logs.mean(axis=0)))
    excess = logs - logs[:, best : best + 1]
    mean, error = excess.mean(axis=0), excess.std(axis=0) / np.sqrt(len(windows))
    worse = (mean > _WORSE_LOG) & (mean > _WORSE_SE * error)
    worse[best] = False
    return shifts[~worse], int(shifts[best])
