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
from odograph.encoding.curves import seconds_per_cell, tuning_curves
from odograph.encoding.design import SessionDesign
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.gain_test import gain_test
from odograph.encoding.shared import shift_plan, workspace
from odograph.encoding.speed_gain import fit_gains, modulation
from odograph.encoding.spikes import UnitSpikes, bin_spikes
from odograph.encoding.term_tests import term_tests
from odograph.settings.encoding import EncodingSettings

TERMS = ("position", "head_direction", "speed")
SEED = 4100


@dataclass(frozen=True)
class Size:
    """How much is simulated: minutes and number of sessions; units of each kind by what is asked of them."""

    minutes: float
    sessions: int
    false_positives: int
    gains: int
    bands: int
    power: int


FULL = Size(minutes=20, sessions=20, false_positives=1000, gains=1000, bands=400, power=200)
QUICK = Size(minutes=8, sessions=4, false_positives=20, gains=8, bands=20, power=8)

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
BANDS = {
    "tuned to all": Tuning(mean_hz=5.0, position=1.5, head_direction=0.8, speed=0.3),
    "flat rate": Tuning(mean_hz=3.0),
}

_SESSIONS: dict[tuple[float, int], tuple[dict, SessionDesign]] = {}


@dataclass(frozen=True)
class Job:
    """One unit to simulate and analyse, and its session."""

    tuning: Tuning
    seed: int
    session: int
    minutes: float


def session(number: int, minutes: float) -> tuple[dict, SessionDesign]:
    """A simulated session, made once in each process."""
    if (minutes, number) not in _SESSIONS:
        table = forage(minutes, SEED + number, masked=0.03)
        _SESSIONS[minutes, number] = table, prepare_session(table, EncodingSettings())
    return _SESSIONS[minutes, number]


def simulate(job: Job) -> tuple[dict, SessionDesign, UnitSpikes]:
    table, design = session(job.session, job.minutes)
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
    """Share of occupied time whose true rate lies in the 95 % band of the fitted curve, by term."""
    table, design, unit = simulate(job)
    space, out = workspace(design, TERMS), []
    curves = tuning_curves(design, unit, space.layout, fit_whole(space, design, unit))
    for term in design.terms:
        alone = Tuning(mean_hz=1.0, **{term.name: getattr(job.tuning, term.name)})
        log_rate = np.log(rate_hz(table, alone, job.seed))[design.valid]
        seconds = seconds_per_cell(term, design.bin_s)
        truth = np.exp(
            np.bincount(term.cell, log_rate, term.n_cells) * design.bin_s / np.maximum(seconds, 1e-9)
        )
        truth *= job.tuning.mean_hz * seconds.sum() / (seconds @ truth)
        low, high = (curves[f"{term.name}_rate_{side}_hz"].ravel() for side in ("low", "high"))
        with np.errstate(invalid="ignore"):  # unvisited cells have no rate, and no weight
            out.append(float(seconds @ ((low <= truth) & (truth <= high)) / seconds.sum()))
    return out


def run(pool, work: Callable, tunings: Iterable[Tuning], n: int, size: Size) -> list[np.ndarray]:
    """Analyse `n` units of every tuning; results, (n, k), by tuning. Units of a session stay together."""
    tunings = list(tunings)
    jobs = [
        Job(tuning, 100_000 * k + size.sessions * u + s, s, size.minutes)
        for s in range(size.sessions)
        for k, tuning in enumerate(tunings)
        for u in range(n // size.sessions)
    ]
    found = np.array(pool.map(work, jobs, chunksize=max(1, len(jobs) // (2 * size.sessions))))
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


def false_positives(table: Table, pool, size: Size) -> None:
    n = size.false_positives
    for kind, p in zip(UNTUNED, run(pool, term_p_values, UNTUNED.values(), n, size), strict=True):
        for i, term in enumerate(TERMS):
            if TUNED_TO.get(kind) != term:
                what = f"false positives at 5 %: {term}, unit {kind}"
                rate_line(table, what, p[:, i] <= 0.05, 0.035, 0.065)
    found = run(pool, gain_results, NOT_SHARPENING.values(), n, size)
    for kind, gains in zip(NOT_SHARPENING, found, strict=True):
        for i, term in enumerate(TERMS[:2]):
            what = f"false positives at 5 %: {term} gain, {kind}"
            rate_line(table, what, gains[:, 3 * i + 2] <= 0.05, 0.035, 0.065)
            what = f"coverage of the 95 % interval: {term} gain, {kind}"
            rate_line(table, what, covered(gains[:, 3 * i : 3 * i + 2], 0.0), 0.93, 0.97)


def covered(gains: np.ndarray, truth: float) -> np.ndarray:
    """Whether intervals of gains and their standard errors, (n, 2), hold the truth, (n,) of bool."""
    return np.abs(gains[:, 0] - truth) <= 1.959964 * gains[:, 1]


def gain_bias(table: Table, pool, size: Size) -> None:
    tunings = [
        Tuning(mean_hz=4.0, position=2.5, head_direction=1.2, position_gain=g, direction_gain=g)
        for g in GAINS
    ]
    for g, found in zip(GAINS, run(pool, gain_results, tunings, size.gains, size), strict=True):
        for i, term in enumerate(TERMS[:2]):
            mean, error = found[:, 3 * i].mean(), found[:, 3 * i].std(ddof=1) / np.sqrt(len(found))
            told = f"{mean:.3f} (standard error {error:.3f}, n {len(found)})"
            holds = abs(mean - g) <= 0.03 + (3 * error if table.quick else 0)
            table.add(f"mean {term} gain where it is {g:+.1f}", "within 0.03", told, holds, mean)
            what = f"coverage of its 95 % interval: {term} gain {g:+.1f}"
            rate_line(table, what, covered(found[:, 3 * i : 3 * i + 2], g), 0.93, 0.97)


def coverage(table: Table, pool, size: Size) -> None:
    for kind, found in zip(BANDS, run(pool, band_coverage, BANDS.values(), size.bands, size), strict=True):
        for i, term in enumerate(TERMS):
            mean, error = found[:, i].mean(), found[:, i].std(ddof=1) / np.sqrt(len(found))
            told = f"{mean:.1%} (standard error {error:.1%}, n {len(found)})"
            slack = 3 * error if table.quick else 0
            holds = 0.93 - slack <= mean <= 0.97 + slack
            what = f"coverage of the 95 % band across {term}, unit {kind}"
            table.add(what, "93 % to 97 %", told, holds, mean)


def power(table: Table, pool, size: Size) -> None:
    """Power of the tests by depth of tuning and number of spikes; nothing is asked of it."""
    depths = {"head_direction": (0.2, 0.4, 0.8), "position": (0.5, 1.0, 2.0)}
    spikes = (100, 300, 1000, 3000)
    for term, some in depths.items():
        for depth in some:
            tunings = [Tuning(mean_hz=n / (60 * size.minutes), **{term: depth}) for n in spikes]
            found = run(pool, term_p_values, tunings, size.power, size)
            for n, p in zip(spikes, found, strict=True):
                hits, total = int(np.sum(p[:, TERMS.index(term)] <= 0.05)), len(p)
                what = f"power at 5 %: {term} of depth {depth}, {n} spikes"
                table.add(what, "-", f"{hits / total:.0%} ({hits} of {total})", None, hits / total)


def main() -> int:
    options = read_options(__doc__)
    use_one_thread()
    size = QUICK if options.quick else FULL
    table = Table("Encoding: calibration", quick=options.quick, seed=SEED)
    table.note(f"{size.sessions} sessions of {size.minutes:g} min at 50 Hz, 3 % of the time masked.")
    if options.quick:
        table.note(
            "Quick: a share holds when its interval meets the range, a mean within three errors of it."
        )
    with multiprocessing.get_context("spawn").Pool(2) as pool:
        for part in (false_positives, gain_bias, coverage, power):
            part(table, pool, size)
    return table.finish(options.json)


if __name__ == "__main__":
    sys.exit(main())
