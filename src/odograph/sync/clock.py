"""The map from the camera's clock to the recording's clock, found from camera frames and their pulses.

The two trains of times share the jitter of the frame intervals, and that pattern settles which frame belongs
to which pulse: windows of frames are looked for among the pulses, the line that most windows agree with is
taken, all frames are paired with pulses under it, and a robust line through the pairs is the clock. The clock
is then followed window by window, so that a jump or a bend is seen and named instead of averaged away.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np

from odograph.errors import InputError
from odograph.recording.model import finding, verdict_of
from odograph.settings.sync import SyncSettings
from odograph.sync.ambiguity import compare_shifts
from odograph.sync.faults import ClockFault, describe_fault
from odograph.sync.judge import judge_clock
from odograph.sync.line import Line, agreeing_line, robust_line
from odograph.sync.pairing import WINDOW_FRAMES, find_window, pair_frames, refined_shift
from odograph.sync.profile import clock_profile, window_starts

# Windows looked for anywhere in the pulses (frames each, how many, tries): long ones only where short ones
# disagree, because their search takes longer. Three agree by chance less than once in 10,000 sessions.
_ANCHOR_ROUNDS = ((WINDOW_FRAMES, 10, 3), (4 * WINDOW_FRAMES, 7, 1))
_LEAST_AGREEING = 3
_SMALLEST_JITTER_S = 5e-6
_SMALLEST_COUNT = 50
# Pairs farther apart than this share of the frame interval are no pairs.
_REACH_SHARE = 0.25
_FOLLOW_STEP_S = 10.0


@dataclass(frozen=True, eq=False)
class ClockFit:
    """The camera clock on the recording clock: recording = slope * camera + intercept.

    Attributes
    ----------
    slope, intercept_s : float
        The map; nan when none was found.
    drift_ppm, drift_se_ppm : float
        (slope - 1) in parts per million and its standard error (independent residuals supposed).
    offset_s : float
        Recording minus camera clock at the first frame.
    n_frames, n_pulses, n_matched : int
        Frames, pulses, pairs.
    dropped_frames, missing_pulses, spurious_pulses : int
        Pulses that fall in a gap of the frames; frames without a pulse while pulses run; pulses that fall
        between two frames in sequence.
    median_abs_residual_ms, p95_residual_ms, max_residual_ms : float
        Size of the pairs' residuals.
    largest_departure_ms : float
        Largest local departure of the clock from the line.
    ambiguity_s : float
        Width of the range of pairings that fit equally well; 0 when there is one only.
    residual_time_s, residual_ms : ndarray (n_matched,)
        Recording time and residual (pulse minus line) of every pair.
    fault : ClockFault or None
        The jump or bend that was found.
    verdict : str
        "pass", "warn" or "fail".
    findings : tuple of dict
        What a user should know, each with level, place, found, expected, remedy.
    """

    slope: float = math.nan
    intercept_s: float = math.nan
    drift_ppm: float = math.nan
    drift_se_ppm: float = math.nan
    offset_s: float = math.nan
    n_frames: int = 0
    n_pulses: int = 0
    n_matched: int = 0
    dropped_frames: int = 0
    missing_pulses: int = 0
    spurious_pulses: int = 0
    median_abs_residual_ms: float = math.nan
    p95_residual_ms: float = math.nan
    max_residual_ms: float = math.nan
    largest_departure_ms: float = math.nan
    ambiguity_s: float = 0.0
    residual_time_s: np.ndarray = field(default_factory=lambda: np.empty(0))
    residual_ms: np.ndarray = field(default_factory=lambda: np.empty(0))
    fault: ClockFault | None = None
    verdict: str = "pass"
    findings: tuple[dict[str, Any], ...] = ()


def fit_clock(frame_time_s: np.ndarray, pulse_time_s: np.ndarray, settings: SyncSettings) -> ClockFit:
    """Fit the camera clock to the recording clock.

    Pulses may begin before the frames and end after them; frames may be dropped, pulses missing or spurious.
    A clock that cannot be trusted is returned with the verdict "fail" and its reason, not raised.

    Parameters
    ----------
    frame_time_s : ndarray (n_frames,)
        Time stamps of the tracked frames on the camera's clock, s, ascending.
    pulse_time_s : ndarray (n_pulses,)
        Times of the frame pulses on the recording's clock, s, ascending.
    settings : SyncSettings
        Limits.

    Returns
    -------
    ClockFit

    Raises
    ------
    InputError
        Times are not finite, not ascending, or not one-dimensional.
    """
    frames = _checked(frame_time_s, "camera frames")
    pulses = _checked(pulse_time_s, "frame pulses")
    unusable = _unusable(frames, pulses)
    if unusable is not None:
        return _failed(frames, pulses, unusable)
    interval_s = float(np.median(np.diff(frames)))
    reach_s = _REACH_SHARE * interval_s
    first, blind = _first_line(frames, pulses, interval_s, settings)
    shifts = compare_shifts(frames, pulses, first, interval_s, reach_s, blind)
    first = replace(first, intercept=first.intercept + shifts.best * float(np.median(np.diff(pulses))))
    profile = clock_profile(frames, pulses, first, reach_s, search=not blind)
    line, pulse_of = _paired_line(frames, pulses, first, profile, reach_s)
    if line is None:
        return _failed(frames, pulses, _no_pairs(interval_s))
    departures = np.abs(profile.departure_s(line)[profile.found()])
    departure_s = float(departures.max()) if len(departures) else 0.0
    fault = None
    if departure_s > 1e-3 * settings.warn_bend_ms:
        fault = describe_fault(frames, pulses, line, profile, reach_s)
    counts = _counts(frames, pulses, line, pulse_of, interval_s)
    ambiguity_s = shifts.width_frames * interval_s
    findings = judge_clock(
        counts=counts,
        drift_ppm=1e6 * (line.slope - 1.0),
        departure_ms=1e3 * departure_s,
        fault=fault,
        ambiguity_s=ambiguity_s,
        by_ends_alone=shifts.by_ends_alone and blind,
        settings=settings,
    )
    return _fit(frames, pulses, line, pulse_of, counts, departure_s, ambiguity_s, fault, findings)


def identity_clock(n_frames: int) -> ClockFit:
    """The clock of a session without frame pulses: tracking is taken to be on the recording clock already."""
    note = finding(
        "note",
        "no frame pulses are named in the settings; tracking is taken to be on the recording clock",
        place="intake.frame_pulses_place",
    )
    return ClockFit(
        slope=1.0,
        intercept_s=0.0,
        drift_ppm=0.0,
        drift_se_ppm=0.0,
        offset_s=0.0,
        n_frames=n_frames,
        findings=(note,),
    )


def to_recording_clock(clock: ClockFit, camera_s: np.ndarray) -> np.ndarray:
    """Camera times (n,) in s, put on the recording clock."""
    return clock.slope * np.asarray(camera_s, float) + clock.intercept_s


def clock_document(session: str, fit: ClockFit) -> dict[str, Any]:
    """The fit as a JSON document: every number and finding, without the residuals; null where unknown."""
    hidden = {"residual_time_s", "residual_ms", "fault", "verdict", "findings"}
    names = [item.name for item in fields(fit) if item.name not in hidden]
    fault = None
    if fit.fault is not None:
        fault = {key: _plain(value) for key, value in vars(fit.fault).items()}
    return {
        "session": session,
        "verdict": fit.verdict,
        "findings": [dict(finding) for finding in fit.findings],
        "fault": fault,
        **{name: _plain(getattr(fit, name)) for name in names},
    }


def _plain(value):
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _checked(times, what):
    times = np.asarray(times, float)
    if times.ndim != 1:
        raise InputError(
            f"times of shape {times.shape}", place=what, expected="one time for each, shape (n,)"
        )
    if not np.isfinite(times).all():
        n_bad = int((~np.isfinite(times)).sum())
        raise InputError(
            f"{n_bad} of {len(times)} times are not finite", place=what, expected="finite seconds"
        )
    falling = np.flatnonzero(np.diff(times) < 0)
    if len(falling):
        k = int(falling[0])
        raise InputError(
            f"times go back {len(falling)} times, first from {times[k]:.6f} s to {times[k + 1]:.6f} s",
            place=what,
            expected="times in ascending order",
            remedy="repair the order in the file; a clock that was reset cannot be followed",
        )
    return times


def _unusable(frames, pulses):
    for times, what in ((frames, "camera frames"), (pulses, "frame pulses")):
        if len(times) < _SMALLEST_COUNT:
            return finding(
                "fail",
                f"only {len(times)} {what}",
                place="frame pulses",
                expected=f"at least {_SMALLEST_COUNT}",
                remedy="check the place of the pulses in the file; set intake.frame_pulses_place to null "
                "if tracking is already on the recording clock",
            )
    frame_s, pulse_s = float(np.median(np.diff(frames))), float(np.median(np.diff(pulses)))
    if not 0.8 < frame_s / max(pulse_s, 1e-12) < 1.25:
        return finding(
            "fail",
            f"frames come every {1e3 * frame_s:.3f} ms but pulses every {1e3 * pulse_s:.3f} ms",
            place="frame pulses",
            expected="one pulse for each frame",
            remedy="check that the pulses are the camera's, one edge each, and both times in seconds",
        )
    return None


def _no_pairs(interval_s):
    return finding(
        "fail",
        "the frames could not be found among the pulses",
        place="frame pulses",
        expected=f"a pulse within {1e3 * _REACH_SHARE * interval_s:.1f} ms of most frames on one line",
        remedy="check that these pulses belong to this camera and this session",
    )


def _failed(frames, pulses, finding):
    return ClockFit(n_frames=len(frames), n_pulses=len(pulses), verdict="fail", findings=(finding,))


def _first_line(frames, pulses, interval_s, settings):
    """A first line: by agreement of windows that know where they belong, else by following from the start."""
    reach_s = _REACH_SHARE * interval_s
    for length, n_windows, tries in () if _too_regular(frames, pulses) else _ANCHOR_ROUNDS:
        starts = window_starts(len(frames), n_windows, length)
        windows = [frames[start : start + length] for start in starts]
        x = np.array([window[len(window) // 2] for window in windows])
        y = x + np.array([find_window(window, pulses, pulses, reach_s, tries)[0] for window in windows])
        known = np.isfinite(y)
        slope, intercept, agrees = agreeing_line(x[known], y[known], reach_s, 1e-6 * settings.max_drift_ppm)
        if agrees.sum() >= _LEAST_AGREEING:
            return Line(slope, intercept, math.nan, math.nan, math.nan), False
    return _followed_line(frames, pulses, interval_s), True


def _too_regular(frames, pulses):
    """Whether either train lacks any pattern of jitter that could be looked for in the other."""
    steps = (np.diff(frames), np.diff(pulses))
    # Not the median departure: coarse time stamps leave most intervals equal and the pattern in the rest.
    spread = [np.abs(step - np.median(step)) for step in steps]
    return (
        min(
            float(part[part < 0.5 * np.median(step)].mean()) for part, step in zip(spread, steps, strict=True)
        )
        < _SMALLEST_JITTER_S
    )


def _followed_line(frames, pulses, interval_s):
    """First frame on first pulse, then followed in short steps: for trains without a pattern of jitter."""
    shift = float(pulses[0] - frames[0])
    x, y = [], []
    edges = np.arange(frames[0], frames[-1] + _FOLLOW_STEP_S, _FOLLOW_STEP_S)
    for part in np.split(frames, np.searchsorted(frames, edges[1:])):
        if len(part) < 8:
            continue
        shift = refined_shift(part, pulses, shift, 0.5 * interval_s)
        x.append(float(np.median(part)))
        y.append(x[-1] + shift)
    if len(x) < 3:
        return Line(1.0, shift, math.nan, math.nan, math.nan)
    return robust_line(np.array(x), np.array(y))


def _paired_line(frames, pulses, first, profile, reach_s):
    """All pairs under the line that most of the followed clock agrees with, and the robust line through them.

    Frames of a stretch where the clock is elsewhere (after a jump) are left unpaired: on the line they would
    find the pulses of other frames.
    """
    line = first
    steady = profile.found()
    for _ in range(3):
        steady = profile.found() & (np.abs(profile.departure_s(line)) <= reach_s)
        if steady.sum() < 3:
            return None, np.empty(0, np.int64)
        x = profile.camera_s[steady]
        line = robust_line(x, x + profile.shift_s[steady])
    steady = profile.found() & (np.abs(profile.departure_s(line)) <= reach_s)
    after = np.clip(np.searchsorted(profile.camera_s, frames), 1, len(steady) - 1)
    trusted = steady[after - 1] & steady[after]
    trusted |= (frames < profile.camera_s[0]) & steady[0]
    trusted |= (frames > profile.camera_s[-1]) & steady[-1]
    pulse_of = np.full(len(frames), -1, np.int64)
    pulse_of[trusted] = pair_frames(frames[trusted], pulses, line.slope, line.intercept, reach_s)
    found = pulse_of >= 0
    if found.sum() < _SMALLEST_COUNT:
        return None, pulse_of
    return robust_line(frames[found], pulses[pulse_of[found]]), pulse_of


def _counts(frames, pulses, line, pulse_of, interval_s):
    """Counts of pairs, and of frames and pulses that stay alone while both trains run."""
    found = pulse_of >= 0
    reach = _REACH_SHARE * interval_s
    wanted = line.at(frames)
    running = (wanted >= pulses[0] - reach) & (wanted <= pulses[-1] + reach)
    alone = np.ones(len(pulses), bool)
    alone[pulse_of[found]] = False
    alone &= (pulses > wanted[0] - reach) & (pulses < wanted[-1] + reach)
    # A gap of the frames has room for so many frames; pulses beyond that are stray.
    after = np.clip(np.searchsorted(wanted, pulses[alone]), 1, len(frames) - 1)
    in_gap = np.bincount(after, minlength=len(frames))[1:]
    room = np.maximum(np.round(np.diff(frames) / interval_s).astype(int) - 1, 0)
    dropped = int(np.minimum(in_gap, room).sum())
    return {
        "n_frames": len(frames),
        "n_pulses": len(pulses),
        "n_matched": int(found.sum()),
        "dropped_frames": dropped,
        "missing_pulses": int((running & ~found).sum()),
        "spurious_pulses": int(alone.sum()) - dropped,
    }


def _fit(frames, pulses, line, pulse_of, counts, departure_s, ambiguity_s, fault, findings):
    found = pulse_of >= 0
    recording_s = pulses[pulse_of[found]]
    # Differences of large clock readings: the line is evaluated about the first pair to keep the digits.
    first = int(np.flatnonzero(found)[0])
    residual = (recording_s - pulses[pulse_of[first]]) - line.slope * (frames[found] - frames[first])
    residual_ms = 1e3 * (residual + (pulses[pulse_of[first]] - line.at(frames[first])))
    size = np.abs(residual_ms)
    return ClockFit(
        slope=line.slope,
        intercept_s=line.intercept,
        drift_ppm=1e6 * (line.slope - 1.0),
        drift_se_ppm=1e6 * line.slope_se,
        offset_s=float(line.at(frames[0]) - frames[0]),
        median_abs_residual_ms=float(np.median(size)),
        p95_residual_ms=float(np.percentile(size, 95)),
        max_residual_ms=float(size.max()),
        largest_departure_ms=1e3 * departure_s,
        ambiguity_s=ambiguity_s,
        residual_time_s=recording_s,
        residual_ms=residual_ms,
        fault=fault,
        verdict=verdict_of(findings),
        findings=tuple(findings),
        **counts,
    )
