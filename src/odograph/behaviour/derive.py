"""Position, head direction and speed on the analysis bins, from tracked points.

Order of the work: samples that cannot be true are taken out and exchanged points put right; each point is
smoothed by a Kalman filter that refuses samples outside its gate and a Rauch-Tung-Striebel smoother, whose
two variances are estimated from the session itself; the bins are times of the smoother, so that nothing is
interpolated twice; bins farther from believed samples than the settings allow are masked, with the reason.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from odograph.behaviour.audit import audit_rows
from odograph.behaviour.bins import (
    PointOnBins,
    angles_on_bins,
    bin_centres,
    direction_sd,
    long_gaps,
    point_on_bins,
    values_on_bins,
    wrapped,
)
from odograph.behaviour.cleaning import REASON_TYPE, SAMPLE_REASONS, CleanedPoints, clean_points
from odograph.behaviour.judge import judge_behaviour
from odograph.behaviour.motion import MotionModel, estimate_motion
from odograph.errors import InputError
from odograph.recording.model import Arena, Covariate, Direction, Intervals, Track, verdict_of
from odograph.settings.behaviour import BehaviourSettings

# Intervals that only touch a bin do not overlap it; rounding must not decide that.
_TOUCHING_S = 1e-6


@dataclass(frozen=True, eq=False)
class Behaviour:
    """The animal's behaviour on the analysis bins.

    Attributes
    ----------
    time_s : ndarray (n_bins,)
        Bin centres, recording clock, s.
    x_m, y_m : ndarray (n_bins,)
        Position, m; NaN where it is not known.
    head_direction_rad : ndarray (n_bins,)
        [0, 2 pi), counter-clockwise from +x; NaN where it is not known.
    speed_cm_s : ndarray (n_bins,)
        Speed of the position, cm/s.
    position_sd_m, direction_sd_rad : ndarray (n_bins,)
        Standard deviations of position (per axis) and direction; NaN where there is no estimate.
    valid : ndarray (n_bins,) of bool
        Bins that the later stages use.
    reason : ndarray (n_bins,) of str
        Why a bin is not valid: lost, low_confidence, outside_arena, jump, gap (no frames), unobserved,
        invalid_time or immobile; "" where it is valid.
    covariates : dict of str to ndarray (n_bins,)
        Further signals on the bins, NaN where unknown.
    bin_s : float
        Width of the bins, s.
    n_frames : int
        Tracked frames.
    exchanged_frames, exchanges : int
        Frames in which the points were exchanged, and how many times that began.
    motion : MotionModel
        Noise and acceleration used for smoothing.
    audit_rows : tuple of dict
        Runs of samples dropped or put right: start_s, stop_s, samples, reason, action.
    verdict : str
        "pass", "warn" or "fail".
    findings : tuple of dict
        level, place, found, expected, remedy.
    """

    time_s: np.ndarray
    x_m: np.ndarray
    y_m: np.ndarray
    head_direction_rad: np.ndarray
    speed_cm_s: np.ndarray
    position_sd_m: np.ndarray
    direction_sd_rad: np.ndarray
    valid: np.ndarray
    reason: np.ndarray
    covariates: dict[str, np.ndarray]
    bin_s: float
    n_frames: int
    exchanged_frames: int
    exchanges: int
    motion: MotionModel
    audit_rows: tuple[dict[str, Any], ...]
    verdict: str
    findings: tuple[dict[str, Any], ...]


def derive_behaviour(
    tracks: tuple[Track, ...],
    direction: Direction | None,
    covariates: tuple[Covariate, ...],
    clock: tuple[float, float],
    span_s: tuple[float, float] | None,
    invalid: Intervals | None,
    arena: Arena | None,
    settings: BehaviourSettings,
) -> Behaviour:
    """Derive the behaviour of one session.

    Parameters
    ----------
    tracks : tuple of Track
        One point, or front and back point, camera clock.
    direction : Direction or None
        A head direction series, camera clock.
    covariates : tuple of Covariate
        Further signals, each on its own clock.
    clock : (float, float)
        Slope and intercept (s) of recording time on camera time.
    span_s : (float, float) or None
        Recording time to cover, s; the span of the tracking if left out, never more than that.
    invalid : Intervals or None
        Recording times to mask.
    arena : Arena or None
        Outline of the arena.
    settings : BehaviourSettings
        All settings of the stage.

    Raises
    ------
    InputError
        The tracks cannot be used at all; less bad sessions come back with the verdict "fail".
    """
    cleaned = clean_points(tracks, clock, arena, settings)
    centre_s = _centres(cleaned.time_s, span_s, settings)
    interval_s = float(np.median(np.diff(cleaned.time_s)))
    motion = estimate_motion(
        cleaned.time_s,
        list(cleaned.points_m),
        interval_s,
        settings.max_gap_s,
        position_noise_m=settings.position_noise_m,
        acceleration_m_s2=settings.acceleration_m_s2,
    )
    points = [
        point_on_bins(cleaned.time_s, point, centre_s, motion, settings.max_gap_s, settings.gate_sd)
        for point in cleaned.points_m
    ]
    cleaned = _without_refused(cleaned, points)
    state, position_variance = _position(points, settings)
    angle, angle_sd, series = _head_direction(points, direction, clock, centre_s, settings)
    reason, gaps = _track_reasons(cleaned, centre_s, settings)
    unknown = reason != ""
    if series is not None and np.isfinite(series).any() and not np.isfinite(angle_sd).any():
        reason[~unknown & ~np.isfinite(angle)] = "lost"
    speed = 100.0 * np.hypot(state[:, 2], state[:, 3])
    _mask(reason, centre_s, speed, invalid, settings)
    columns = {
        "x_m": state[:, 0],
        "y_m": state[:, 1],
        "head_direction_rad": angle,
        "speed_cm_s": speed,
        "position_sd_m": np.sqrt(position_variance),
        "direction_sd_rad": angle_sd,
    }
    columns = {name: np.where(unknown, np.nan, column) for name, column in columns.items()}
    findings = judge_behaviour(tracks, cleaned, columns, reason, direction, series, arena, settings)
    return Behaviour(
        time_s=centre_s,
        **columns,
        valid=reason == "",
        reason=reason,
        covariates=_covariates(covariates, clock, centre_s, settings),
        bin_s=settings.bin_s,
        n_frames=len(cleaned.time_s),
        exchanged_frames=int(cleaned.exchanged.sum()),
        exchanges=int((np.diff(cleaned.exchanged.astype(int), prepend=0) == 1).sum()),
        motion=motion,
        audit_rows=audit_rows(cleaned, gaps, interval_s, centre_s, reason, settings.bin_s),
        verdict=verdict_of(findings),
        findings=tuple(findings),
    )


def _centres(time_s, span_s, settings):
    start, stop = (time_s[0], time_s[-1]) if span_s is None else span_s
    centre_s = bin_centres(max(start, time_s[0]), min(stop, time_s[-1]), settings.bin_s)
    if not len(centre_s):
        raise InputError(
            f"tracking from {time_s[0]:.3f} to {time_s[-1]:.3f} s holds no whole bin of {settings.bin_s:g} s",
            place="tracking",
            expected="tracking that overlaps the recording",
            remedy="check the clocks of tracking and recording",
        )
    return centre_s


def _without_refused(cleaned: CleanedPoints, points: list[PointOnBins]) -> CleanedPoints:
    """The cleaned points after the filter's gate, which is the last to say that a sample jumped."""
    kept, reasons = [], []
    for point, reason, smoothed in zip(cleaned.points_m, cleaned.reasons, points, strict=True):
        kept.append(np.where(smoothed.refused[:, None], np.nan, point))
        reasons.append(np.where(smoothed.refused, "jump", reason))
    return replace(cleaned, points_m=tuple(kept), reasons=tuple(reasons))


def _position(points, settings):
    """State (n_bins, 4) and variance per axis (n_bins,) of the animal's position."""
    if len(points) == 1 or settings.position_point == "front":
        return points[0].state, points[0].position_variance
    if settings.position_point == "back":
        return points[1].state, points[1].position_variance
    variance = 0.25 * (points[0].position_variance + points[1].position_variance)
    return 0.5 * (points[0].state + points[1].state), variance


def _head_direction(points, direction, clock, centre_s, settings):
    """Angle and its standard deviation on the bins, and the direction series on the bins if there is one."""
    series = None
    if direction is not None:
        time_s = clock[0] * np.asarray(direction.time_s, float) + clock[1]
        series = angles_on_bins(time_s, np.asarray(direction.angle_rad, float), centre_s, settings.max_gap_s)
    nothing = np.full(len(centre_s), np.nan)
    use_series = settings.head_direction_from == "series" or len(points) == 1
    if use_series and settings.head_direction_from != "points":
        return (nothing if series is None else series), nothing, series
    if len(points) == 1:
        return nothing, nothing, series
    ahead = points[0].state[:, :2] - points[1].state[:, :2]
    angle = np.arctan2(ahead[:, 1], ahead[:, 0]) + np.deg2rad(settings.head_direction_offset_deg)
    variance = 0.5 * (points[0].position_variance + points[1].position_variance)
    return wrapped(angle), direction_sd(np.hypot(*ahead.T), variance), series


def _track_reasons(cleaned, centre_s, settings):
    """Reason of every bin that is too far from believed samples, and the gaps of each point."""
    reason = np.full(len(centre_s), "", REASON_TYPE)
    gaps = []
    for why in cleaned.reasons:
        found = long_gaps(cleaned.time_s, why == "", settings.max_gap_s)
        gaps.append(found)
        first, last = np.searchsorted(centre_s, found[0], side="right"), np.searchsorted(centre_s, found[1])
        for k in np.flatnonzero(last > first):
            here = reason[first[k] : last[k]]
            here[here == ""] = _cause(cleaned.time_s, why, found[0][k], found[1][k])
    return reason, gaps


def _cause(time_s, why, start_s, stop_s):
    """What most samples in a gap are out for; "gap" if there are none, "unobserved" beyond all samples."""
    first, last = np.searchsorted(time_s, start_s, side="right"), np.searchsorted(time_s, stop_s)
    inside = why[first:last]
    if not len(inside):
        return "gap" if np.isfinite([start_s, stop_s]).all() else "unobserved"
    counts = [int((inside == name).sum()) for name in SAMPLE_REASONS]
    return SAMPLE_REASONS[int(np.argmax(counts))]


def _mask(reason, centre_s, speed, invalid, settings):
    """Mask invalid times and immobility in bins that are known; `reason` is changed in place."""
    if invalid is not None:
        half = 0.5 * settings.bin_s - _TOUCHING_S
        for start, stop in zip(invalid.start_s, invalid.stop_s, strict=True):
            inside = (centre_s + half > start) & (centre_s - half < stop)
            reason[inside & (reason == "")] = "invalid_time"
    if settings.min_speed_cm_s > 0:
        reason[(reason == "") & (speed < settings.min_speed_cm_s)] = "immobile"


def _covariates(covariates, clock, centre_s, settings):
    on_bins = {}
    for item in sorted(covariates, key=lambda covariate: covariate.name):
        time_s = np.asarray(item.time_s, float)
        if item.clock == "camera":
            time_s = clock[0] * time_s + clock[1]
        values = np.asarray(item.values, float)
        on_bins[item.name] = values_on_bins(time_s, values, centre_s, settings.bin_s, settings.max_gap_s)
    return on_bins
