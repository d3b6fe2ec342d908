"""Are the encoding engine's statistics what they claim to be? Simulated units, seeded.

    python tests/benchmarks/calibration.py [--quick] [--json FILE]

False positives of every term's test and of the speed gains, power, coverage of bands and intervals, and the
bias of gains, each with its 95 % binomial interval (Clopper & Pearson 1934) or standard error. The foragers'
place, direction and speed are correlated, as in real animals. About half an hour on two cores.
"""

from __future__ import annotations

import multiprocessing
import sys
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from benchmark_table import Table, read_options, use_one_thread
from scipy.stats import binomtest
from simulated import Tuning, forage, rate_hz, simulate_unit

from odograph.encoding.analyse import prepare_session
from odograph.encoding.curves import term_effect
from odograph.encoding.design import SessionDesign
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.gain_test import gain_test
from odograph.encoding.shared import shift_plan, workspace
from odograph.encoding.speed_gain import fit_gains, modulation
from odograph.encoding.spikes import UnitSpikes, bin_spikes
from odograph.encoding.term_tests import term_tests
from odograph.settings.encoding import EncodingSettings

TERMS = ("position", "head_direction", "speed")
MINUTES = 20.0
SESSIONS = 20
SEED = 4100

UNTUNED = {
    "flat rate": Tuning(mean_hz=3.0),
    "slow drift": Tuning(mean_hz=3.0, drift=0.6),
    "bursting": Tuning(mean_hz=3.0, spikes_per_burst=3.0),
    "tuned to position": Tuning(mean_hz=3.0, position=2.5),
    "tuned to direction": Tuning(mean_hz=3.0, head_direction=1.2),
    "tuned to speed": Tuning(mean_hz=3.0, speed=0.4),
}
TUNED_TO = {
    "tuned to position": "position",
    "tuned to direction": "head_direction",
    "tuned to speed": "speed",
}
NOT_SHARPENING = {
    "no gain": Tuning(mean_hz=4.0, position=2.5, head_direction=1.2),
    "no gain, rate changes with speed": Tuning(mean_hz=4.0, position=2.5, head_direction=1.2, speed=0.4),
}
GAINS = (-0.4, -0.2, 0.2, 0.4, 0.6)

_SESSIONS: dict[int, tuple[dict, SessionDesign]] = {}


@dataclass(frozen=True)
class Job:
    """One unit to simulate and analyse; `seed` names its session and its place in it."""

    tuning: Tuning
    seed: int


def session(seed: int) -> tuple[dict, SessionDesign]:
    """One of SESSIONS simulated sessions, made once in each process."""
    number = seed % SESSIONS
    if number not in _SESSIONS:
        table = forage(MINUTES, SEED + number, masked=0.03)
        _SESSIONS[number] = table, prepare_session(table, EncodingSettings())
    return _SESSIONS[number]


def simulate(job: Job) -> tuple[dict, SessionDesign, UnitSpikes]:
    table, design = session(job.seed)
    return table, design, bin_spikes(design, simulate_unit(table, job.tuning, job.seed))


def term_p_values(job: Job) -> list[float]:
    """p of every term."""
    _, design, unit = simulate(job)
    models = [tuple(t for t in TERMS if t != left) for left in TERMS]
    fits = {model: fit_whole(workspace(design, model), design, unit) for model in models}
    found = term_tests(design, unit, fits)
    return [found[name][0] for name in TERMS]


def gain_results(job: Job) -> list[float]:
    """gain, standard error and p of position, then of head direction."""
    _, design, unit = simulate(job)
    space, z = workspace(design, TERMS), modulation(design.speed_cm_s)
    fit = fit_whole(space, design, unit)
    gains = fit_gains(space, unit, fit, TERMS[:2], "speed", z)
    out = []
    for name in ("position", "head_direction"):
        i = gains.terms.index(name)
        p = gain_test(space, design, unit, fit, z, shift_plan(design), name)
        out += [gains.gains[i], np.sqrt(gains.covariance[i, i]), p]
    return out


def band_coverage(job: Job) -> list[float]:
    """Share of occupied time whose true effect lies in the 95 % band, by term."""
    table, design, unit = simulate(job)
    space = workspace(design, TERMS)
    fit = fit_whole(space, design, unit)
    out = []
    for name in TERMS:
        term = space.terms[space.layout.index_of(name)]
        effect, error = term_effect(space.layout, fit, name)
        part = {"position": "position", "head_direction": "head_direction", "speed": "speed"}[name]
        alone = Tuning(mean_hz=1.0, **{part: getattr(job.tuning, part)})
        log_rate = np.log(rate_hz(table, alone, job.seed))[design.valid]
        seconds = np.bincount(term.cell, minlength=term.n_cells)
        truth = np.bincount(term.cell, weights=log_rate, minlength=term.n_cells) / np.maximum(seconds, 1)
        truth -= seconds @ truth / seconds.sum()
        inside = np.abs(effect - truth) <= 1.959964 * error
        out.append(float(seconds @ inside / seconds.sum()))
    return out


def run(pool, work: Callable, tunings: Iterable[Tuning], n: int) -> list[np.ndarray]:
    """Analyse `n` units of every tuning; results, (n, k), by tuning. Units of a session stay together."""
    tunings = list(tunings)
    jobs = [
        Job(tuning, 100_000 * k + SESSIONS * u + s)
        for s in range(SESSIONS)
        for k, tuning in enumerate(tunings)
        for u in range(n // SESSIONS)
    ]
    found = np.array(pool.map(work, jobs, chunksize=max(1, len(jobs) // (2 * SESSIONS))))
    return [found[[job.tuning is tuning for job in jobs]] for tuning in tunings]


def rate_line(table: Table, what: str, hits: np.ndarray, low: float, high: float) -> None:
    """A share with its binomial interval, held when the share lies within [low, high].

    A quick run has too few units for that; it holds when the interval reaches the range.
    """
    k, n = int(hits.sum()), len(hits)
    interval = binomtest(k, n).proportion_ci(0.95, "exact")
    share = k / n
    told = f"{share:.1%} ({k} of {n}; {interval.low:.1%} to {interval.high:.1%})"
    holds = interval.low <= high and interval.high >= low if table.quick else low <= share <= high
    table.add(what, f"{low:.1%} to {high:.1%}", told, holds, share)


def false_positives(table: Table, pool, n: int) -> None:
    for kind, p in zip(UNTUNED, run(pool, term_p_values, UNTUNED.values(), n), strict=True):
        for i, term in enumerate(TERMS):
            if TUNED_TO.get(kind) != term:
                rate_line(
                    table, f"false positives at 5 %: {term}, unit {kind}", p[:, i] <= 0.05, 0.035, 0.065
                )
    for kind, found in zip(NOT_SHARPENING, run(pool, gain_results, NOT_SHARPENING.values(), n), strict=True):
        for i, term in enumerate(("position", "head_direction")):
            what = f"false positives at 5 %: {term} gain, {kind}"
            rate_line(table, what, found[:, 3 * i + 2] <= 0.05, 0.035, 0.065)
            covered = np.abs(found[:, 3 * i]) <= 1.959964 * found[:, 3 * i + 1]
            rate_line(table, f"coverage of the 95 % interval: {term} gain, {kind}", covered, 0.93, 0.97)


def gain_bias(table: Table, pool, n: int) -> None:
    tunings = [
        Tuning(mean_hz=4.0, position=2.5, head_direction=1.2, position_gain=g, direction_gain=g)
        for g in GAINS
    ]
    for g, found in zip(GAINS, run(pool, gain_results, tunings, n), strict=True):
        for i, term in enumerate(("position", "head_direction")):
            gains = found[:, 3 * i]
            mean, error = gains.mean(), gains.std(ddof=1) / np.sqrt(len(gains))
            told = f"{mean:.3f} (standard error {error:.3f}, n {len(gains)})"
            table.add(
                f"mean {term} gain where it is {g:+.1f}", "within 0.03", told, abs(mean - g) <= 0.03, mean
            )
            covered = np.abs(gains - g) <= 1.959964 * found[:, 3 * i + 1]
            rate_line(table, f"coverage of its 95 % interval: {term} gain {g:+.1f}", covered, 0.93, 0.97)


def coverage(table: Table, pool, n: int) -> None:
    tuning = Tuning(mean_hz=5.0, position=1.5, head_direction=0.8, speed=0.3)
    (found,) = run(pool, band_coverage, [tuning], n)
    for i, term in enumerate(TERMS):
        mean, error = found[:, i].mean(), found[:, i].std(ddof=1) / np.sqrt(len(found))
        told = f"{mean:.1%} (standard error {error:.1%}, n {len(found)})"
        what = f"coverage of the 95 % band across {term}"
        table.add(what, "93 % to 97 %", told, 0.93 <= mean <= 0.97, mean)


def power(table: Table, pool, n: int) -> None:
    """Power of the direction test by depth of tuning and number of spikes; nothing is asked of it."""
    minutes = MINUTES * 60
    for depth in (0.2, 0.4, 0.8):
        tunings = [
            Tuning(mean_hz=spikes / minutes, head_direction=depth) for spikes in (100, 300, 1000, 3000)
        ]
        for tuning, p in zip(tunings, run(pool, term_p_values, tunings, n), strict=True):
            k, total = int(np.sum(p[:, 1] <= 0.05)), len(p)
            what = f"power at 5 %: direction of depth {depth}, {round(tuning.mean_hz * minutes)} spikes"
            table.add(what, "-", f"{k / total:.0%} ({k} of {total})", None, k / total)


def main() -> int:
    options = read_options(__doc__)
    use_one_thread()
    table = Table("Encoding: calibration", quick=options.quick, seed=SEED)
    table.note(f"{SESSIONS} sessions of {MINUTES:.0f} min at 50 Hz, 3 % of the time masked")
    n = SESSIONS if options.quick else 1000
    with multiprocessing.get_context("spawn").Pool(2) as pool:
        false_positives(table, pool, n)
        gain_bias(table, pool, SESSIONS if options.quick else 200)
        coverage(table, pool, SESSIONS if options.quick else 200)
        power(table, pool, SESSIONS if options.quick else 100)
    return table.finish(options.json)


if __name__ == "__main__":
    sys.exit(main())
