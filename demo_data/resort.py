"""A second spike sorting of a session: two units merged, one split, one changed in part."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from nwb_file import SortedUnit
from simulate_units import UnitTruth, on_sample_grid
from study_plan import FEWEST_UNITS, SessionPlan, generator

CHANGED_SHARE = 0.03


@dataclass(frozen=True)
class ResortChanges:
    """Which units a second sorting changed, by identifier."""

    merged: tuple[int, int]
    merged_into: int
    split: int
    split_into: tuple[int, int]
    changed: int

    @property
    def to_refit(self) -> tuple[int, ...]:
        """Units of the second sorting whose spikes the first sorting does not have."""
        return tuple(sorted((self.merged_into, *self.split_into, self.changed)))


def sorted_units(
    plan: SessionPlan, truths: Sequence[UnitTruth], spike_times_s: Sequence[np.ndarray]
) -> tuple[SortedUnit, ...]:
    """Units of the first sorting; in a partly observed session some are held only up to some minute."""
    units = []
    for truth, spikes in zip(truths, spike_times_s, strict=True):
        observed = _observed(plan, truth.unit)
        inside = ((spikes[:, None] >= observed[:, 0]) & (spikes[:, None] <= observed[:, 1])).any(axis=1)
        units.append(SortedUnit(truth.unit, truth.region, spikes[inside], observed))
    return tuple(units)


def _observed(plan: SessionPlan, unit: int) -> np.ndarray:
    """Observed intervals of a unit, (q, 2): the whole session, or two parts of it with a hole. [s]"""
    whole = plan.duration_s
    rng = generator(plan.session, "observed", unit)
    if not plan.partly_observed or rng.random() < 0.7:
        return np.array([[0.0, whole]])
    edges = np.round(np.array([0.0, rng.uniform(0.45, 0.55), rng.uniform(0.56, 0.62), 1.0]) * whole, 3)
    return edges.reshape(2, 2)


def resort_units(
    plan: SessionPlan, units: Sequence[SortedUnit]
) -> tuple[tuple[SortedUnit, ...], ResortChanges]:
    """Sort a session's units again.

    Raises
    ------
    ValueError
        When there are fewer than four units.
    """
    if len(units) < FEWEST_UNITS:
        raise ValueError(f"{plan.session} has {len(units)} units; a second sorting needs {FEWEST_UNITS}")
    rng = generator(plan.session, "second sorting")
    by_id = {unit.unit: unit for unit in units}
    first, second, split, changed = (
        units[index].unit for index in rng.choice(len(units), FEWEST_UNITS, replace=False)
    )
    fresh = max(by_id) + 1
    changes = ResortChanges((first, second), fresh, split, (fresh + 1, fresh + 2), changed)

    merged = np.concatenate([by_id[first].spike_times_s, by_id[second].spike_times_s])
    whole = by_id[split]
    to_first = rng.random(whole.spike_times_s.size) < 0.5
    result = [unit for unit in units if unit.unit not in (first, second, split, changed)]
    result += [
        _with(by_id[first], fresh, on_sample_grid(merged)),
        _with(whole, fresh + 1, whole.spike_times_s[to_first]),
        _with(whole, fresh + 2, whole.spike_times_s[~to_first]),
        _with(by_id[changed], changed, _some_changed(by_id[changed], rng)),
    ]
    return tuple(sorted(result, key=lambda unit: unit.unit)), changes


def _some_changed(unit: SortedUnit, rng: np.random.Generator) -> np.ndarray:
    """Spike times (k,) with a share replaced by others at random observed times. [s]"""
    spikes = unit.spike_times_s
    count = max(1, round(CHANGED_SHARE * spikes.size))
    kept = np.delete(spikes, rng.choice(spikes.size, min(count, spikes.size), replace=False))
    chosen = unit.observed_s[rng.integers(len(unit.observed_s), size=count)]
    return on_sample_grid(np.concatenate([kept, rng.uniform(chosen[:, 0], chosen[:, 1])]), refractory_s=0.0)


def _with(unit: SortedUnit, identifier: int, spike_times_s: np.ndarray) -> SortedUnit:
    return SortedUnit(identifier, unit.region, spike_times_s, unit.observed_s)
