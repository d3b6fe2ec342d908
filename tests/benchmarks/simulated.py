"""A simulated forager and units of known tuning, for the benchmarks.

The forager walks in a square, slows down and turns along the walls when it meets them, and looks about where
it goes: place, direction and speed are correlated, as in real animals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit

from odograph.encoding.speed_gain import modulation

BIN_S = 0.02
SIDE_M = 1.0


@dataclass(frozen=True)
class Tuning:
    """What drives a simulated unit; depths are in units of the log rate, 0 for not at all.

    Attributes
    ----------
    mean_hz : float
        Mean rate over valid time.
    position : float
        Height of a Gaussian field of 12 cm, somewhere in the square.
    head_direction : float
        Half the range of a cosine of the direction.
    speed : float
        Change of the log rate per standard deviation of z (`odograph.encoding.speed_gain.modulation`).
    position_gain, direction_gain : float
        Speed gains: the tuning (its mean over time taken off) is multiplied by 1 + gain z.
    drift : float
        Standard deviation of a slow change of the log rate over the session.
    spikes_per_burst : float
        Mean number of spikes an event of the Poisson process stands for; 1 is a Poisson unit.
    """

    mean_hz: float = 5.0
    position: float = 0.0
    head_direction: float = 0.0
    speed: float = 0.0
    position_gain: float = 0.0
    direction_gain: float = 0.0
    drift: float = 0.0
    spikes_per_burst: float = 1.0


def _smooth_noise(rng: np.random.Generator, n: int, seconds: float) -> np.ndarray:
    """Gaussian noise of variance 1 that forgets itself exponentially within `seconds`, (n,)."""
    from scipy.signal import lfilter  # here, so that a shard whose memory is measured goes without it

    keep = np.exp(-BIN_S / seconds)
    white = rng.standard_normal(n)
    white[1:] *= np.sqrt(1 - keep**2)
    return lfilter([1.0], [1.0, -keep], white)


@njit(cache=True)
def _walk(pace, turning, side, x, y, heading, speed):
    """Integrate a walk inside [0, side]^2; fills x, y, heading and speed, each (n,)."""
    px, py, h = side / 2, side / 2, 0.0
    margin, reach = 0.01, 0.15
    for i in range(len(pace)):
        to_wall = min(px, side - px, py, side - py)
        v = pace[i] * (0.6 + 0.4 * min(1.0, to_wall / 0.2))
        turn = turning[i]
        # Walls in reach push inwards; running against the push, it turns until along the wall.
        push_x = max(0.0, 1 - px / reach) - max(0.0, 1 - (side - px) / reach)
        push_y = max(0.0, 1 - py / reach) - max(0.0, 1 - (side - py) / reach)
        against = -(push_x * np.cos(h) + push_y * np.sin(h))
        if against > 0:
            left = np.cos(h) * push_y - np.sin(h) * push_x >= 0
            turn += (12.0 if left else -12.0) * against
        h += turn * BIN_S
        px = min(max(px + v * np.cos(h) * BIN_S, margin), side - margin)
        py = min(max(py + v * np.sin(h) * BIN_S, margin), side - margin)
        x[i], y[i], heading[i], speed[i] = px, py, h, v


def forage(minutes: float, seed: int, *, masked: float = 0.0) -> dict[str, np.ndarray]:
    """A behaviour table at 50 Hz, as the encoding stage takes it.

    Parameters
    ----------
    minutes : float
    seed : int
    masked : float
        Share of time that is not valid, in bouts of 2 s.

    Returns
    -------
    dict of ndarray, each (n_bins,)
        time_s, x_m, y_m, head_direction_rad, speed_cm_s, valid.
    """
    rng = np.random.default_rng(seed)
    n = round(minutes * 60 / BIN_S)
    pace = np.minimum(0.14 * np.exp(0.7 * _smooth_noise(rng, n, 2.0)), 0.8)
    turning = 2.5 * _smooth_noise(rng, n, 0.4)
    x, y, heading, speed = np.empty((4, n))
    _walk(pace, turning, SIDE_M, x, y, heading, speed)
    looking = heading + 0.4 * _smooth_noise(rng, n, 0.6)
    bout = np.arange(n) // round(2.0 / BIN_S)
    return {
        "time_s": (np.arange(n) + 0.5) * BIN_S,
        "x_m": x,
        "y_m": y,
        "head_direction_rad": np.mod(looking, 2 * np.pi),
        "speed_cm_s": 100 * speed,
        "valid": rng.random(bout[-1] + 1)[bout] >= masked,
    }


def rate_hz(table: dict[str, np.ndarray], tuning: Tuning, seed: int) -> np.ndarray:
    """Rate of a unit in every bin, (n_bins,); the seed places its field, direction and drift."""
    rng = np.random.default_rng([seed, 1])
    centre, preferred = rng.uniform(0.2, 0.8, 2) * SIDE_M, rng.uniform(0, 2 * np.pi)
    valid, z = table["valid"], np.zeros(len(table["valid"]))
    z[valid] = modulation(table["speed_cm_s"][valid])
    field = np.exp(-((table["x_m"] - centre[0]) ** 2 + (table["y_m"] - centre[1]) ** 2) / (2 * 0.12**2))
    position = tuning.position * (field - field[valid].mean())
    cosine = np.cos(table["head_direction_rad"] - preferred)
    direction = tuning.head_direction * (cosine - cosine[valid].mean())
    log_rate = (1 + tuning.position_gain * z) * position + (1 + tuning.direction_gain * z) * direction
    log_rate += tuning.speed * z
    if tuning.drift:
        phase = np.pi * np.arange(len(z)) / len(z)
        waves = sum(rng.standard_normal() / k * np.cos(k * phase) for k in range(1, 5))
        log_rate += tuning.drift * (waves - waves.mean()) / waves.std()
    rate = np.exp(log_rate)
    return tuning.mean_hz * rate / rate[valid].mean()


def draw_spikes(
    table: dict[str, np.ndarray], rate: np.ndarray, seed: int, *, spikes_per_burst: float = 1.0
) -> np.ndarray:
    """Spike times in s, ascending: a Poisson process, or one whose events are bursts.

    A burst has a geometric number of spikes, 3 to 8 ms apart; the mean rate stays what `rate` (n_bins,) says.
    """
    rng = np.random.default_rng([seed, 2])
    counts = rng.poisson(rate * BIN_S / spikes_per_burst)
    times = np.repeat(table["time_s"], counts) + (rng.random(counts.sum()) - 0.5) * BIN_S * 0.98
    if spikes_per_burst > 1:
        sizes = rng.geometric(1 / spikes_per_burst, len(times))
        first = np.repeat(np.cumsum(sizes) - sizes, sizes)
        gaps = np.cumsum(rng.uniform(0.003, 0.008, sizes.sum()))
        times = np.repeat(times, sizes) + gaps - gaps[first]
        times = times[times < table["time_s"][-1]]
    return np.sort(times)


def simulate_unit(table: dict[str, np.ndarray], tuning: Tuning, seed: int) -> np.ndarray:
    """Spike times of one unit, s, ascending."""
    rate = rate_hz(table, tuning, seed)
    return draw_spikes(table, rate, seed, spikes_per_burst=tuning.spikes_per_burst)


def mixed_units(table: dict[str, np.ndarray], n: int, seed: int) -> list[np.ndarray]:
    """Spike times of `n` units such as a session holds: untuned, tuned to one variable, tuned to several."""
    kinds = [
        Tuning(mean_hz=4.0, drift=0.3),
        Tuning(mean_hz=2.0, position=2.5),
        Tuning(mean_hz=6.0, head_direction=1.2, direction_gain=0.3),
        Tuning(mean_hz=12.0, speed=0.3),
        Tuning(mean_hz=5.0, position=1.5, head_direction=0.8, speed=0.2),
    ]
    return [simulate_unit(table, kinds[i % len(kinds)], seed + i) for i in range(n)]
