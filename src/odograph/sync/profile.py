"""The camera clock followed through the session: its local departures from a straight line."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.sync.line import Line
from odograph.sync.pairing import WINDOW_FRAMES, alignment_spreads, find_window, refined_shift

_SMALLEST_STEP_S = 5.0
_MOST_WINDOWS = 120
_NEAR_PULSES = 300
# A window counts as lost when its fit is this many times worse than usual.
_LOST = 3.0
_SMALLEST_SPREAD_S = 50e-6
# Another shift must fit this much better before it is preferred to the one that the line predicts.
_CLEARLY_BETTER = 0.7
# The best of 700,000 chance alignments of 64 frames comes down to about 0.55 of the usual spread: the mean of
# 64 absolute normal values has a standard deviation of 0.094 of itself, and 700,000 draws reach 4.8 of them.
_NO_ACCIDENT = 0.5


@dataclass(frozen=True)
class Profile:
    """Departure of the recording clock from a line at points along the session.

    Attributes
    ----------
    camera_s : ndarray (n_windows,)
        Camera time of each window's middle, s.
    shift_s : ndarray (n_windows,)
        Recording minus camera clock found there, s; nan where the window was not found in the pulses.
    """

    camera_s: np.ndarray
    shift_s: np.ndarray

    def found(self) -> np.ndarray:
        """Which windows were found in the pulses, (n_windows,) of bool."""
        return np.isfinite(self.shift_s)

    def departure_s(self, line: Line) -> np.ndarray:
        """Recording time found minus the line's, (n_windows,), s; nan where not found."""
        return self.shift_s - (line.at(self.camera_s) - self.camera_s)


def window_starts(n_frames: int, n_windows: int, length: int = WINDOW_FRAMES) -> np.ndarray:
    """First frames of up to `n_windows` windows of `length` frames spread evenly over the frames."""
    return np.unique(np.linspace(0, max(n_frames - length, 0), n_windows).astype(int))


def clock_profile(
    frame_s: np.ndarray, pulse_s: np.ndarray, line: Line, reach_s: float, *, search: bool
) -> Profile:
    """Find windows of frames one by one among the pulses, near the line first, then anywhere.

    Parameters
    ----------
    frame_s : ndarray (n_frames,)
        Camera clock, s, ascending.
    pulse_s : ndarray (n_pulses,)
        Recording clock, s, ascending.
    line : Line
        Recording time predicted from camera time.
    reach_s : float
        A frame farther than this from every pulse counts as unmatched.
    search : bool
        Look for better places than the line's. Without a jitter pattern all places look alike, and only the
        nearest is taken.
    """
    n_windows = int(np.clip((frame_s[-1] - frame_s[0]) / _SMALLEST_STEP_S, 8, _MOST_WINDOWS))
    windows = [frame_s[start : start + WINDOW_FRAMES] for start in window_starts(len(frame_s), n_windows)]
    middle_s = np.array([window[len(window) // 2] for window in windows])
    predicted = line.at(middle_s) - middle_s
    near = _near_the_line if search else _on_the_line
    found = np.array(
        [near(window, pulse_s, shift, reach_s) for window, shift in zip(windows, predicted, strict=True)]
    )
    finite = np.isfinite(found[:, 1])
    usual = max(float(np.median(found[finite, 1])), _SMALLEST_SPREAD_S) if finite.any() else np.inf
    for row in np.flatnonzero(~(found[:, 1] <= _LOST * usual)):
        found[row] = _no_accident(windows[row], pulse_s, pulse_s, reach_s) if search else (np.nan, np.inf)
    return Profile(middle_s, found[:, 0])


def _on_the_line(window, pulse_s, shift, reach_s):
    here = float(alignment_spreads(window, pulse_s, np.array([shift]), reach_s)[0])
    return refined_shift(window, pulse_s, shift, reach_s), here


def _near_the_line(window, pulse_s, shift, reach_s):
    here = _on_the_line(window, pulse_s, shift, reach_s)
    k = int(np.searchsorted(pulse_s, window[len(window) // 2] + shift))
    candidates = pulse_s[max(k - _NEAR_PULSES, 0) : k + _NEAR_PULSES]
    if len(candidates):
        other = _no_accident(window, pulse_s, candidates, reach_s)
        if other[1] < _CLEARLY_BETTER * here[1]:
            return other
    return here


def _no_accident(window, pulse_s, candidates, reach_s):
    """Shift and spread of the best place, if it is far better than such a search finds by chance."""
    shift, spread, usual = find_window(window, pulse_s, candidates, reach_s)
    return (shift, spread) if spread < _NO_ACCIDENT * usual else (np.nan, np.inf)
