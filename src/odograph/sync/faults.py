"""What is wrong with a clock that does not follow a straight line, and when it went wrong."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.sync.line import Line
from odograph.sync.profile import Profile

# A step counts as a jump when it makes up at least this share of the clock's whole departure.
_JUMP_SHARE = 0.5


@dataclass(frozen=True)
class ClockFault:
    """A departure from a straight line.

    Attributes
    ----------
    kind : str
        "jump" or "bend".
    camera_s, recording_s : float
        Where it is on both clocks; for a jump, the first frame after it.
    size_s : float
        Jump: by how much the camera clock jumps ahead of the recording. Bend: the largest departure from
        the line.
    drift_before_ppm, drift_after_ppm : float
        Drift on both sides.
    """

    kind: str
    camera_s: float
    recording_s: float
    size_s: float
    drift_before_ppm: float
    drift_after_ppm: float

    def sentence(self) -> str:
        """The fault in words."""
        where = f"{self.camera_s:.1f} s of the camera clock (about {self.recording_s:.1f} s of the recording)"
        if self.kind == "jump":
            return f"the camera clock jumps by {1e3 * self.size_s:+.1f} ms against the recording at {where}"
        return (
            f"the camera clock bends: its drift is {self.drift_before_ppm:+.1f} ppm before and "
            f"{self.drift_after_ppm:+.1f} ppm after {where}, "
            f"up to {1e3 * self.size_s:.1f} ms off a straight line"
        )


def describe_fault(
    frame_s: np.ndarray, pulse_s: np.ndarray, line: Line, profile: Profile, reach_s: float
) -> ClockFault | None:
    """Tell a jump from a bend and say where it is; None when the profile has too few points.

    Parameters
    ----------
    frame_s : ndarray (n_frames,)
        Camera clock, s.
    pulse_s : ndarray (n_pulses,)
        Recording clock, s.
    line : Line
        The straight line.
    profile : Profile
        The clock followed window by window.
    reach_s : float
        Distances to pulses count up to this, s.
    """
    found = profile.found()
    x, y = profile.camera_s[found], profile.departure_s(line)[found]
    if len(x) < 4:
        return None
    steps = np.diff(y) - np.median(np.diff(y) / np.diff(x)) * np.diff(x)
    k = int(np.argmax(np.abs(steps)))
    if abs(steps[k]) >= _JUMP_SHARE * (y.max() - y.min()):
        at = _moment_of_jump(frame_s, pulse_s, line, (x[k], x[k + 1]), (y[k], y[k + 1]), reach_s)
        before, after = _side_drift(line, x[: k + 1], y[: k + 1]), _side_drift(line, x[k + 1 :], y[k + 1 :])
        return ClockFault("jump", at, float(line.at(at) + y[k + 1]), -float(steps[k]), before, after)
    hinge = _hinge(x, y)
    before, after = (
        _side_drift(line, x[x <= hinge], y[x <= hinge]),
        _side_drift(line, x[x > hinge], y[x > hinge]),
    )
    return ClockFault("bend", hinge, float(line.at(hinge)), float(np.abs(y).max()), before, after)


def _side_drift(line, x, y):
    if len(x) < 2:
        return float("nan")
    return 1e6 * (line.slope - 1.0 + float(np.polyfit(x - x.mean(), y, 1)[0]))


def _hinge(x, y):
    """The inner point at which two straight lines that meet there fit best."""
    best, at = np.inf, x[len(x) // 2]
    for k in range(1, len(x) - 1):
        design = np.column_stack([np.ones_like(x), x - x[k], np.maximum(x - x[k], 0.0)])
        residual = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
        if residual @ residual < best:
            best, at = float(residual @ residual), x[k]
    return float(at)


def _moment_of_jump(frame_s, pulse_s, line, camera_s, departure_s, reach_s):
    """Camera time of the first frame, between two windows, that fits the right shift better than the left."""
    inside = frame_s[(frame_s >= camera_s[0]) & (frame_s <= camera_s[1])]
    misfit = [_distances(pulse_s, line.at(inside) + departure, reach_s) for departure in departure_s]
    # Sum of the misfits if the frames before k follow the left shift and the others the right one.
    total = np.append(0.0, np.cumsum(misfit[0])) + np.append(np.cumsum(misfit[1][::-1])[::-1], 0.0)
    return float(inside[min(int(np.argmin(total)), len(inside) - 1)])


def _distances(pulse_s, wanted_s, reach_s):
    """Distance of each time to the nearest pulse, at most `reach_s`."""
    right = np.clip(np.searchsorted(pulse_s, wanted_s), 1, len(pulse_s) - 1)
    nearest = np.minimum(np.abs(pulse_s[right] - wanted_s), np.abs(pulse_s[right - 1] - wanted_s))
    return np.minimum(nearest, reach_s)
