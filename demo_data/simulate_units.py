"""Spike trains of units whose tuning is known."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass

import numpy as np
from simulate_journey import Journey
from simulate_tuning import Tuning, head_direction_gain, position_gain, sharpening, speed_gain
from study_plan import ARENA_SIDE_M, SAMPLE_RATE_HZ, SessionPlan, generator

REFRACTORY_S = 0.002
SPIKES_PER_BURST = 2.6


@dataclass(frozen=True)
class UnitTruth:
    """What a unit of the demo study truly encodes; one row of the truth table.

    `position_shape` and `speed_shape` are empty for a variable that the unit does not encode; `drift` and
    `burst` mark slow changes of the overall rate and spikes in bursts.
    """

    session: str
    unit: int
    kind: str
    position: bool
    head_direction: bool
    speed: bool
    position_shape: str
    speed_shape: str
    sharpens: bool
    drift: bool
    burst: bool
    region: str
    mean_rate_hz: float

    def row(self) -> dict[str, object]:
        """The truth as a table row, booleans as 0 and 1."""
        return {name: int(v) if isinstance(v, bool) else v for name, v in asdict(self).items()}


# Position shape, head direction, speed shape, extras. The first six are a fair sample, so that a session
# of a few units still has some of each.
DECK: tuple[tuple[str, bool, str, str], ...] = (
    ("single_field", False, "", ""),
    ("", True, "", ""),
    ("", False, "rising", ""),
    ("periodic", True, "", ""),
    ("", False, "", "drift"),
    ("single_field", False, "", "sharpens"),
    ("", False, "", "burst"),
    ("wall", False, "", ""),
    ("irregular", False, "", ""),
    ("", False, "falling", ""),
    ("", False, "", ""),
    ("", True, "rising", ""),
    ("periodic", False, "", ""),
    ("", False, "non_monotonic", ""),
    ("", True, "", "sharpens"),
    ("single_field", False, "rising", ""),
    ("irregular", True, "rising", ""),
    ("", False, "", "drift"),
    ("irregular", True, "", ""),
    ("", True, "", ""),
    ("", False, "", "burst"),
    ("wall", False, "falling", ""),
    ("single_field", False, "", ""),
    ("single_field", True, "", "sharpens"),
    ("periodic", False, "rising", ""),
    ("single_field", False, "", "sparse"),
    ("", True, "non_monotonic", ""),
    ("irregular", False, "", ""),
    ("", False, "", "sparse"),
    ("", False, "rising", ""),
    ("", False, "", "drift burst"),
    ("wall", True, "", ""),
    ("periodic", True, "rising", ""),
    ("", True, "falling", ""),
)


def unit_truths(plan: SessionPlan) -> tuple[UnitTruth, ...]:
    """Which units a session has: identifiers with gaps, as sorting leaves them, and kinds from the deck."""
    rng = generator(plan.session, "units")
    unit_ids = np.cumsum(rng.integers(1, 5, plan.units)) + 1
    truths = []
    for index, unit in enumerate(unit_ids.tolist()):
        position, direction, speed, extras = DECK[index % len(DECK)]
        low, high = (0.10, 0.22) if "sparse" in extras else (1.0, 8.0)
        truths.append(
            UnitTruth(
                session=plan.session,
                unit=unit,
                kind=_kind(position, direction, speed, extras),
                position=bool(position),
                head_direction=direction,
                speed=bool(speed),
                position_shape=position,
                speed_shape=speed,
                sharpens="sharpens" in extras,
                drift="drift" in extras,
                burst="burst" in extras,
                region=("medial entorhinal cortex", "presubiculum")[unit % 2],
                mean_rate_hz=round(float(low * (high / low) ** rng.random()), 3),
            )
        )
    return tuple(truths)


def _kind(position: str, direction: bool, speed: str, extras: str) -> str:
    parts = [position, "head_direction" if direction else "", f"speed_{speed}" if speed else ""]
    name = "+".join(part for part in parts if part) or "untuned"
    return "_".join([name, *extras.split()])


def simulate_spikes(truth: UnitTruth, journey: Journey) -> np.ndarray:
    """Spike times of one unit, (k,), ascending, on the sample grid of the recording. [s]

    An inhomogeneous Poisson process by thinning (Lewis & Shedler 1979, Naval Research Logistics
    Quarterly 26:403), the rate taken at the candidate times themselves; a bursting unit repeats each
    event; spikes within the refractory period of the one before are removed.
    """
    rng = generator(truth.session, "spikes", truth.unit)
    event_rate_hz = event_rate(truth, journey)
    ceiling_hz = 1.1 * event_rate_hz(journey.time_s).max()
    duration_s = float(journey.time_s[-1])
    candidates = np.sort(rng.random(rng.poisson(ceiling_hz * duration_s))) * duration_s
    events = candidates[rng.random(candidates.size) * ceiling_hz < event_rate_hz(candidates)]
    spikes = _bursts(events, SPIKES_PER_BURST, rng) if truth.burst else events
    return on_sample_grid(spikes[(spikes > 0) & (spikes < duration_s)])


def event_rate(truth: UnitTruth, journey: Journey) -> Callable[[np.ndarray], np.ndarray]:
    """The true rate of a unit's events (spikes, or bursts) as a function of time, (k,) [s] to (k,) [Hz]."""
    relative_rate = _relative_rate(truth, journey)
    overall = np.ones(journey.time_s.size)
    if truth.drift:
        overall = _slow_drift(journey, generator(truth.session, "drift", truth.unit))
    mean_on_path = np.mean(overall * relative_rate(*journey.at(journey.time_s)))
    mean_hz = truth.mean_rate_hz / (SPIKES_PER_BURST if truth.burst else 1.0)

    def rate_hz(time_s: np.ndarray) -> np.ndarray:
        slow = np.interp(time_s, journey.time_s, overall)
        return mean_hz / mean_on_path * slow * relative_rate(*journey.at(time_s))

    return rate_hz


def on_sample_grid(time_s: np.ndarray, refractory_s: float = REFRACTORY_S) -> np.ndarray:
    """Times (k,) sorted, on the sample grid, those within the refractory period of the last removed. [s]"""
    samples = np.unique(np.round(time_s * SAMPLE_RATE_HZ).astype(np.int64))
    shortest = round(refractory_s * SAMPLE_RATE_HZ)
    kept, last = [], -shortest
    for sample in samples.tolist():
        if sample - last >= shortest:
            kept.append(sample)
            last = sample
    return np.array(kept, dtype=np.float64) / SAMPLE_RATE_HZ


def tuning_of(truth: UnitTruth) -> Tuning:
    """The tuning functions of a unit; the same at every call."""
    rng = generator(truth.session, "tuning", truth.unit)
    return Tuning(
        position=position_gain(truth.position_shape, ARENA_SIDE_M, rng) if truth.position else None,
        head_direction=head_direction_gain(rng) if truth.head_direction else None,
        speed=speed_gain(truth.speed_shape, rng) if truth.speed else None,
        sharpen_with_speed=truth.sharpens,
    )


def _relative_rate(truth: UnitTruth, journey: Journey) -> Callable[..., np.ndarray]:
    """The unit's relative rate as a function of x, y, head direction and speed, each (k,)."""
    tuning = tuning_of(truth)

    def place_and_direction(x: np.ndarray, y: np.ndarray, angle: np.ndarray) -> np.ndarray:
        gain = np.ones(np.shape(x))
        if tuning.position:
            gain = gain * tuning.position(x, y)
        return gain * tuning.head_direction(angle) if tuning.head_direction else gain

    balance = _sharpening_balance(place_and_direction, journey) if tuning.sharpen_with_speed else None

    def relative_rate(x: np.ndarray, y: np.ndarray, angle: np.ndarray, speed: np.ndarray) -> np.ndarray:
        gain = place_and_direction(x, y, angle)
        if balance is not None:
            gain = gain ** sharpening(speed) * balance(speed)
        return gain * tuning.speed(speed) if tuning.speed else gain

    return relative_rate


def _sharpening_balance(gain_at: Callable[..., np.ndarray], journey: Journey) -> Callable[..., np.ndarray]:
    """A factor of speed that keeps the mean rate at each speed what it is without sharpening.

    Without it a unit that sharpens would also seem to slow down as the animal speeds up.
    """
    gain = gain_at(journey.x_m, journey.y_m, journey.head_direction_rad)
    power = sharpening(journey.speed_cm_s)
    edges = np.quantile(journey.speed_cm_s, np.linspace(0, 1, 13))
    group = np.clip(np.searchsorted(edges, journey.speed_cm_s, side="right") - 1, 0, 11)
    centres = np.array([journey.speed_cm_s[group == k].mean() for k in range(12)])
    plain = np.array([gain[group == k].mean() for k in range(12)])
    sharpened = np.array([(gain[group == k] ** power[group == k]).mean() for k in range(12)])
    return lambda speed: np.interp(speed, centres, plain / sharpened)


def _slow_drift(journey: Journey, rng: np.random.Generator) -> np.ndarray:
    """Overall rate factor (n,): a trend over the session and a wandering over minutes."""
    n = journey.time_s.size
    share = np.linspace(0, 1, n)
    knots = np.linspace(0, 1, max(4, int(journey.time_s[-1] // 90)))
    wander = np.interp(share, knots, rng.normal(0, 0.25, knots.size))
    return np.exp(rng.choice([-1.0, 1.0]) * rng.uniform(0.6, 1.1) * (share - 0.5) + wander)


def _bursts(events: np.ndarray, mean_spikes: float, rng: np.random.Generator) -> np.ndarray:
    """Each event (k,) as the first of a geometric number of spikes, 3 to 8 ms apart. [s]"""
    count = rng.geometric(1 / mean_spikes, events.size)
    first = np.repeat(np.cumsum(count) - count, count)
    gaps = rng.uniform(0.003, 0.008, count.sum())
    gaps[np.unique(first)] = 0.0
    elapsed = np.cumsum(gaps)
    return np.sort(np.repeat(events, count) + elapsed - elapsed[first])
