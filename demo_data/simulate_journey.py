"""A foraging journey through a square arena: smooth, with runs and pauses, the head leading the body."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

STEP_S = 0.02
WALL_MARGIN_M = 0.03
TOP_SPEED_M_S = 0.60


@dataclass(frozen=True)
class Journey:
    """Where the animal truly was, on the recording clock.

    Attributes
    ----------
    time_s : (n,) array
        Times, `STEP_S` apart. [s]
    x_m, y_m : (n,) arrays
        Centre of the head. [m]
    head_direction_rad : (n,) array
        Direction of the head, continuous (not wrapped), counter-clockwise from +x. [rad]
    speed_cm_s : (n,) array
        Speed of the centre of the head. [cm/s]
    """

    time_s: np.ndarray
    x_m: np.ndarray
    y_m: np.ndarray
    head_direction_rad: np.ndarray
    speed_cm_s: np.ndarray

    def at(self, time_s: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Position x, y [m], head direction [rad] and speed [cm/s] at other times, each (k,)."""
        columns = (self.x_m, self.y_m, self.head_direction_rad, self.speed_cm_s)
        return tuple(np.interp(time_s, self.time_s, column) for column in columns)


def simulate_journey(duration_s: float, side_m: float, rng: np.random.Generator) -> Journey:
    """Walk from goal to goal, running and pausing, with a wavering heading and a scanning head.

    The state is rounded at every step, so that the last bit of a sine, which differs between C libraries,
    cannot grow into another journey.
    """
    n = round(duration_s / STEP_S) + 1
    path = _walk(n, side_m, rng)
    x, y, heading = (_smooth(path[:, column], 0.08) for column in range(3))
    scanning = _smooth(path[:, 3], 0.06)
    velocity = np.hypot(np.gradient(x, STEP_S), np.gradient(y, STEP_S))
    return Journey(
        time_s=np.arange(n) * STEP_S,
        x_m=np.round(x, 6),
        y_m=np.round(y, 6),
        head_direction_rad=np.round(heading + scanning, 6),
        speed_cm_s=np.round(100.0 * velocity, 4),
    )


def _walk(n: int, side_m: float, rng: np.random.Generator) -> np.ndarray:
    """Rows of x, y, heading and head-to-body angle, (n, 4)."""
    noise = rng.standard_normal((n, 3))
    draws = iter(rng.random((n, 4)).tolist())
    low, high = WALL_MARGIN_M, side_m - WALL_MARGIN_M
    x = y = side_m / 2
    heading, turning, speed, scan = 0.0, 0.0, 0.1, 0.0
    goal, goal_steps = (x, y), 0
    target, bout_steps, running = 0.15, 0, False
    rows = []
    for turn_noise, speed_noise, scan_noise in noise.tolist():
        if goal_steps == 0 or math.hypot(goal[0] - x, goal[1] - y) < 0.07:
            goal, goal_steps = _next_goal(next(draws), low, high), 400
        if bout_steps == 0:
            running = not running
            target, bout_steps = _next_bout(next(draws), running)
        goal_steps, bout_steps = goal_steps - 1, bout_steps - 1

        bearing = math.atan2(goal[1] - y, goal[0] - x)
        miss = math.remainder(bearing - heading, math.tau)
        turning += (1.6 * miss - turning) * STEP_S / 0.25 + 4.0 * math.sqrt(STEP_S) * turn_noise
        speed += (target - speed) * STEP_S / 0.35 + 0.055 * math.sqrt(STEP_S) * speed_noise
        speed = min(max(speed, 0.0), TOP_SPEED_M_S)
        heading += turning * (0.35 + 0.65 * min(speed / 0.12, 1.0)) * STEP_S
        spread = 0.35 if speed > 0.05 else 0.8
        scan += -scan * STEP_S / 0.6 + spread * math.sqrt(2 * STEP_S / 0.6) * scan_noise

        x = round(min(max(x + speed * math.cos(heading) * STEP_S, low), high), 7)
        y = round(min(max(y + speed * math.sin(heading) * STEP_S, low), high), 7)
        heading, turning = round(heading, 7), round(turning, 7)
        speed, scan = round(speed, 7), round(scan, 7)
        rows.append((x, y, heading, scan))
    return np.array(rows)


def _next_goal(draw: list[float], low: float, high: float) -> tuple[float, float]:
    """A point of the arena, drawn towards the walls so that paths between points cover all of it."""
    across = (0.5 - 0.5 * math.cos(math.pi * u) for u in draw[:2])
    return tuple(round(low + (high - low) * share, 6) for share in across)


def _next_bout(draw: list[float], running: bool) -> tuple[float, int]:
    """Target speed [m/s] and length [steps] of the next run or pause."""
    if running:
        speed = min(0.20 * (draw[0] / (1 - draw[0] * 0.999)) ** 0.38, 0.55)
        return round(speed, 6), int((1.0 + 6.0 * draw[1]) / STEP_S)
    return round(0.02 * draw[0], 6), int((0.4 + 2.0 * draw[1] ** 2) / STEP_S)


def _smooth(values: np.ndarray, sigma_s: float) -> np.ndarray:
    """Gaussian smoothing along the series (n,), the ends held."""
    half = math.ceil(4 * sigma_s / STEP_S)
    offsets = np.arange(-half, half + 1) * STEP_S
    weights = np.exp(-0.5 * (offsets / sigma_s) ** 2)
    return np.convolve(np.pad(values, half, mode="edge"), weights / weights.sum(), mode="valid")
