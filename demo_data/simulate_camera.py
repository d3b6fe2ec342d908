"""What the camera makes of a journey: two tracked points on its own clock, with the ordinary faults."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from simulate_journey import Journey
from study_plan import ARENA_SIDE_M, FRAME_INTERVAL_S, SAMPLE_RATE_HZ, SessionPlan, generator

POINTS_APART_M = 0.045
POINT_NOISE_M = 0.0012
FRAME_JITTER_S = 0.0006
STAMP_NOISE_S = 25e-6


@dataclass(frozen=True)
class Camera:
    """Tracking and frame pulses of one session.

    Attributes
    ----------
    frame_time_s : (n,) array
        Time stamps of the tracked frames on the camera clock. [s]
    front_m, back_m : (n, 2) arrays
        The tracked points, NaN where lost. [m]
    pulse_time_s : (m,) array
        Frame pulses on the recording clock. [s]
    swapped, reflected, lost : (n,) bool arrays
        The faults put in: points exchanged, a point replaced by a reflection, a point lost.
    dropped_frames : int
        Pulses between first and last tracked frame that have no frame.
    missed_pulses, stray_pulses : int
        Frames without a pulse, and pulses that belong to no frame.
    jump_time_s : float
        When the camera clock steps, on the recording clock; NaN for a sound clock. [s]
    """

    frame_time_s: np.ndarray
    front_m: np.ndarray
    back_m: np.ndarray
    pulse_time_s: np.ndarray
    swapped: np.ndarray
    reflected: np.ndarray
    lost: np.ndarray
    dropped_frames: int
    missed_pulses: int
    stray_pulses: int
    jump_time_s: float


def simulate_camera(plan: SessionPlan, journey: Journey) -> Camera:
    """Film a journey: expose, stamp on both clocks, track, and lose what a real camera loses."""
    rng = generator(plan.session, "camera")
    exposed_s = _exposures(plan, rng)
    kept = _kept_frames(exposed_s.size, plan.dropped, rng)
    frames_s = exposed_s[kept]
    jump_s = float("nan")
    stamps_s = plan.camera_ahead_s + frames_s / (1 + plan.drift_ppm * 1e-6)
    if plan.clock_jump_s:
        jump_s = 0.55 * plan.duration_s
        stamps_s = stamps_s + plan.clock_jump_s * (frames_s >= jump_s)
    stamps_s = np.round(stamps_s + STAMP_NOISE_S * rng.standard_normal(stamps_s.size), 6)
    pulses_s, missed, stray = _pulses(exposed_s, rng)
    front, back, faults = _track(plan, journey, frames_s, rng)
    tracked = np.flatnonzero(kept)
    return Camera(
        frame_time_s=stamps_s,
        front_m=np.round(front, 4),
        back_m=np.round(back, 4),
        pulse_time_s=pulses_s,
        **faults,
        dropped_frames=int(tracked[-1] - tracked[0] + 1 - tracked.size),
        missed_pulses=missed,
        stray_pulses=stray,
        jump_time_s=jump_s,
    )


def _exposures(plan: SessionPlan, rng: np.random.Generator) -> np.ndarray:
    """True exposure times on the recording clock (f,), evenly spaced but for a jitter both clocks see."""
    first_s, last_s = rng.uniform(1.0, 4.0), plan.duration_s - rng.uniform(0.5, 2.0)
    even = np.arange(first_s, last_s, FRAME_INTERVAL_S)
    return even + rng.uniform(-FRAME_JITTER_S, FRAME_JITTER_S, even.size)


def _kept_frames(n: int, share: float, rng: np.random.Generator) -> np.ndarray:
    """Mask of the frames that were tracked (n,): not the preview before, not those dropped."""
    kept = np.ones(n, dtype=bool)
    kept[: int(rng.integers(60, 240))] = False
    kept[n - int(rng.integers(5, 60)) :] = False
    kept[_stretches(n, share / 2, 1, 2, rng)] = False
    kept[_stretches(n, share / 2, 6, 40, rng)] = False
    return kept


def _pulses(exposed_s: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, int, int]:
    """Frame pulses as recorded (m,), how many frames have none, and how many pulses belong to no frame."""
    missed = rng.choice(exposed_s.size, int(rng.integers(1, 4)), replace=False)
    stray_s = rng.uniform(exposed_s[0], exposed_s[-1], int(rng.integers(1, 3)))
    seen_s = np.delete(exposed_s, missed)
    seen_s = seen_s + STAMP_NOISE_S * rng.standard_normal(seen_s.size)
    samples = np.round(np.concatenate([seen_s, stray_s]) * SAMPLE_RATE_HZ).astype(np.int64)
    return np.unique(samples) / SAMPLE_RATE_HZ, missed.size, stray_s.size


def _track(
    plan: SessionPlan, journey: Journey, frames_s: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]:
    """The two points (n, 2) with their faults, and masks of the faults."""
    x, y, angle, _ = journey.at(frames_s)
    centre = np.column_stack([x, y])
    half = 0.5 * POINTS_APART_M * np.column_stack([np.cos(angle), np.sin(angle)])
    n = frames_s.size
    points = [centre + side * half + POINT_NOISE_M * rng.standard_normal((n, 2)) for side in (1, -1)]

    reflected = np.zeros(n, dtype=bool)
    for point in points:
        hit = _stretches(n, plan.reflected / 2, 1, 6, rng)
        point[hit] = _mirrored(point[hit])
        reflected[hit] = True

    swapped = np.zeros(n, dtype=bool)
    swapped[_stretches(n, plan.swapped, 3, 70, rng)] = True
    front, back = (np.where(swapped[:, None], points[1 - k], points[k]) for k in (0, 1))

    lost = np.zeros(n, dtype=bool)
    for point in (front, back):
        gone = np.concatenate(
            [_stretches(n, plan.lost * 0.4, 1, 8, rng), _stretches(n, plan.lost * 0.2, 10, 40, rng)]
        )
        point[gone] = np.nan
        lost[gone] = True
    gone = _stretches(n, plan.lost * 0.4, 40, 250, rng)
    front[gone] = back[gone] = np.nan
    lost[gone] = True
    return front, back, {"swapped": swapped, "reflected": reflected, "lost": lost}


def _mirrored(point: np.ndarray) -> np.ndarray:
    """Points (k, 2) reflected in the nearest wall, as a shiny wall shows them."""
    distance = np.column_stack([point, ARENA_SIDE_M - point])
    nearest = np.argmin(distance, axis=1)
    mirrored = point.copy()
    for axis in (0, 1):
        mirrored[nearest == axis, axis] *= -1
        far = nearest == axis + 2
        mirrored[far, axis] = 2 * ARENA_SIDE_M - mirrored[far, axis]
    return mirrored


def _stretches(n: int, share: float, shortest: int, longest: int, rng: np.random.Generator) -> np.ndarray:
    """Indices of random stretches that cover about a share of n samples, (k,)."""
    count = rng.poisson(share * n / (0.5 * (shortest + longest)))
    lengths = rng.integers(shortest, longest + 1, count)
    starts = rng.integers(0, n, count)
    picked = [np.arange(start, min(start + length, n)) for start, length in zip(starts, lengths, strict=True)]
    return np.unique(np.concatenate(picked)) if picked else np.zeros(0, dtype=np.int64)
