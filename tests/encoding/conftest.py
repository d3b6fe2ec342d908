"""A simulated forager and spike trains with known tuning, for the encoding tests."""

import numpy as np
import pytest

from odograph.encoding.analyse import prepare_session
from odograph.settings.encoding import EncodingSettings

BIN_S = 0.02


def forage(minutes: float, seed: int, side_m: float = 1.0) -> dict[str, np.ndarray]:
    """A behaviour table: a walk with varying speed and turning, reflected at the walls of a square."""
    rng = np.random.default_rng(seed)
    n = int(minutes * 60 / BIN_S)
    log_speed, turning = np.zeros(n), np.zeros(n)
    noise = rng.standard_normal((n, 2))
    for i in range(1, n):
        log_speed[i] = log_speed[i - 1] * (1 - BIN_S / 2) + 0.6 * np.sqrt(BIN_S) * noise[i, 0]
        turning[i] = turning[i - 1] * (1 - BIN_S / 0.4) + 3.0 * np.sqrt(BIN_S) * noise[i, 1]
    speed = np.minimum(0.15 * np.exp(log_speed), 0.7)
    x, y, heading = np.empty(n), np.empty(n), np.empty(n)
    px = py = side_m / 2
    h = 0.0
    for i in range(n):
        h += turning[i] * BIN_S
        if not 0.02 < px + speed[i] * np.cos(h) * BIN_S < side_m - 0.02:
            h = np.pi - h
        if not 0.02 < py + speed[i] * np.sin(h) * BIN_S < side_m - 0.02:
            h = -h
        px = np.clip(px + speed[i] * np.cos(h) * BIN_S, 0, side_m)
        py = np.clip(py + speed[i] * np.sin(h) * BIN_S, 0, side_m)
        x[i], y[i], heading[i] = px, py, h
    return {
        "time_s": (np.arange(n) + 0.5) * BIN_S,
        "x_m": x,
        "y_m": y,
        "head_direction_rad": np.mod(heading, 2 * np.pi),
        "speed_cm_s": speed * 100,
        "valid": np.ones(n, dtype=bool),
    }


def rate_hz(table: dict[str, np.ndarray], kind: str) -> np.ndarray:
    """Rate of a unit tuned to `position`, `head_direction`, `speed` (joined by +), or `flat`."""
    log_rate = np.full(len(table["x_m"]), np.log(3.0))
    if "position" in kind:
        log_rate += 2 * np.exp(-((table["x_m"] - 0.4) ** 2 + (table["y_m"] - 0.6) ** 2) / (2 * 0.12**2)) - 0.4
    if "head_direction" in kind:
        log_rate += np.cos(table["head_direction_rad"] - 1)
    if "speed" in kind:
        log_rate += 0.03 * (table["speed_cm_s"] - 15)
    return np.exp(log_rate)


def draw_spikes(table: dict[str, np.ndarray], rate: np.ndarray, seed: int) -> np.ndarray:
    """Poisson spike times, s."""
    rng = np.random.default_rng(seed)
    counts = rng.poisson(rate * BIN_S)
    times = np.repeat(table["time_s"], counts)
    return np.sort(times + (rng.random(len(times)) - 0.5) * BIN_S * 0.98)


@pytest.fixture(scope="session")
def table():
    return forage(12, seed=4)


@pytest.fixture(scope="session")
def settings():
    return EncodingSettings()


@pytest.fixture(scope="session")
def design(table, settings):
    return prepare_session(table, settings)


@pytest.fixture(scope="session")
def simulate(table):
    """simulate(kind, seed) -> spike times of a unit in the shared session."""
    return lambda kind, seed=0: draw_spikes(table, rate_hz(table, kind), seed)
