"""How fast is the encoding engine, and how does it grow?

    python tests/benchmarks/encoding_speed.py [--quick] [--json FILE]

Simulated sessions at 50 Hz, units of five kinds from untuned to tuned to everything. Times are medians, and
CPU seconds of one core unless a line says otherwise, so that other work on the machine counts little. Other
libraries (glum and scikit-learn, R's mgcv) are measured where they are installed, on the same time bins in
the same run. About three minutes. mgcv comes with Debian's r-cran-mgcv.
"""

from __future__ import annotations

import multiprocessing
import resource
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from statistics import median

import numpy as np
from benchmark_table import Table, installed, r_versions, read_options, use_one_thread
from general_libraries import glum_fit, mgcv_fit, model_terms, penalty, sklearn_fit, sparse_design
from simulated import forage, mixed_units

from odograph.encoding.analyse import analyse_unit, prepare_session
from odograph.encoding.design import SessionDesign, model_name
from odograph.encoding.evaluate import Score, evaluate, fit_whole, fold_spikes
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.select import select_model
from odograph.encoding.shared import covariate_spectrum, shift_plan, workspace
from odograph.encoding.shifts import null_model, shift_test, step_cells
from odograph.encoding.spikes import UnitSpikes, bin_spikes
from odograph.settings.encoding import EncodingSettings, TermSettings

SEED = 1800
SETTINGS = EncodingSettings()
STUDY_UNITS = 500
PROCESSES = 2
LINEAR = 1.25  # growth counts as linear while the time of a bin or unit rises by less than this factor


@dataclass(frozen=True)
class Size:
    """How much is measured: minutes of a session, units, folds that other libraries fit, and so on."""

    minutes: float
    units: int
    folds: int
    repeats: int
    sample: int
    lengths: tuple[float, ...]


FULL = Size(minutes=30, units=5, folds=3, repeats=3, sample=20, lengths=(30, 60, 120, 240))
QUICK = Size(minutes=8, units=1, folds=1, repeats=1, sample=2, lengths=(8, 12))


@dataclass(frozen=True)
class Session:
    """A simulated session, discretised, and the spike times of its units."""

    design: SessionDesign
    spikes: list[np.ndarray]

    def unit(self, i: int) -> UnitSpikes:
        return bin_spikes(self.design, self.spikes[i])


def make_session(minutes: float, n_units: int) -> Session:
    table = forage(minutes, SEED)
    return Session(prepare_session(table, SETTINGS), mixed_units(table, n_units, SEED))


def cpu_seconds(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


def select(design: SessionDesign, spike_times_s: np.ndarray) -> tuple[Score, list[Score]]:
    """The complete selection of one unit: every model, every fold, smoothing chosen in each."""
    unit = bin_spikes(design, spike_times_s)
    tables = fold_spikes(design, unit)
    scores = [evaluate(workspace(design, model), model, design, unit, tables) for model in design.models()]
    return select_model(scores), scores


def measure_selection(table: Table, session: Session, size: Size) -> None:
    """Line 1: the selection, alone and against fits at fixed penalties with general-purpose libraries."""
    design = session.design
    select(design, session.spikes[0])  # what the session's units share, and compilation
    seconds = [
        median(cpu_seconds(lambda s=s: select(design, s)) for _ in range(size.repeats))
        for s in session.spikes
    ]
    ours = median(seconds)
    fits = (len(design.models()) - 1) * design.folds.n_folds
    table.add(
        f"selection of one unit: constant + {len(design.models()) - 1} models x {design.folds.n_folds} folds",
        "0.3 s",
        f"{ours:.2f} s ({min(seconds):.2f} to {max(seconds):.2f})",
        ours <= 0.3,
        ours,
    )
    what = f"{fits} fits at fixed penalties against that selection"
    if not installed("glum") and not installed("scikit-learn"):
        table.skip(what, "200 times", "neither glum nor scikit-learn is installed")
        return
    measure_libraries(table, what, design, session.unit(-1), ours, size)


def measure_libraries(
    table: Table, what: str, design: SessionDesign, unit: UnitSpikes, ours: float, size: Size
) -> None:
    """Time fits of every model on training rows; the rest of the folds is taken to cost the same."""
    total, by_library, timed, gap = 0.0, {}, 0, 0.0
    for model in design.models()[1:]:
        terms, space = model_terms(design, model), workspace(design, model)
        fit = fit_whole(space, design, unit)
        S = penalty(terms, strengths_by_term(space, fit))
        times: dict[str, list[float]] = {}
        for fold in range(size.folds):
            keep = design.folds.training(fold)[design.folds.group]
            X, counts = sparse_design(terms, keep), unit.counts[keep]
            if installed("glum"):
                seconds, _ = glum_fit(X, counts, S, design.bin_s)
                times.setdefault("glum", []).append(seconds)
            if installed("scikit-learn"):
                for solver in ("lbfgs", "newton-cholesky"):
                    times.setdefault(f"scikit-learn {solver}", []).append(sklearn_fit(X, counts, solver))
        timed += size.folds
        if installed("glum") and len(model) == len(design.terms):
            X = sparse_design(terms, np.ones(design.n_bins, dtype=bool))
            _, rate = glum_fit(X, unit.counts, S, design.bin_s)
            gap = np.quantile(np.abs(rate / fitted_rate(space, fit, design) - 1), 0.99)
        for library, seconds in times.items():
            by_library[library] = by_library.get(library, 0.0) + design.folds.n_folds * median(seconds)
        total += design.folds.n_folds * min(median(seconds) for seconds in times.values())
    told = ", ".join(f"{library} {seconds:.1f} s" for library, seconds in sorted(by_library.items()))
    n_fits = (len(design.models()) - 1) * design.folds.n_folds
    table.add(
        what, "200 times", f"{total / ours:.0f} times ({total:.1f} s)", total >= 200 * ours, total / ours
    )
    table.note(
        f"{n_fits} fixed-penalty fits: {timed} of {n_fits} timed with each library ({size.folds} folds "
        f"of each model), the others taken to cost the same; of each model those of the library that is "
        f"fastest for it; building design matrices not counted. All with one library: {told}."
    )
    if installed("glum"):
        table.note(
            f"glum at the engine's penalty: 99 % of rates are within {100 * gap:.2g} % of the engine's."
        )


def strengths_by_term(space: Workspace, fit: Fit) -> dict[str, np.ndarray]:
    strengths = np.exp(fit.log_strengths)
    return {term.name: strengths[space.layout.owner == t] for t, term in enumerate(space.terms)}


def fitted_rate(space: Workspace, fit: Fit, design: SessionDesign) -> np.ndarray:
    """Fitted rate in every bin, Hz, (n_bins,)."""
    space.expected(fit.coefficients, np.ones(design.folds.n_groups))
    eta = fit.coefficients[0] + sum(
        space.eta[start + term.cell] for start, term in zip(space.layout.cell_start, space.terms, strict=True)
    )
    return np.exp(eta)


def measure_full_model(table: Table, session: Session, size: Size) -> None:
    """Line 2: one smoothing-selected fit of the largest model against mgcv's bam."""
    design, unit = session.design, session.unit(-1)
    full = design.models()[-1]
    space = workspace(design, full)
    fit = fit_whole(space, design, unit)
    ours = median(cpu_seconds(lambda: fit_whole(space, design, unit)) for _ in range(5 * size.repeats))
    what = f"one smoothing-selected fit of {model_name(full)}"
    table.add(f"{what}, {space.layout.n_coordinates} coefficients", "-", f"{1000 * ours:.0f} ms", None, ours)
    asked = "25 times faster than bam", "within 1 %"
    if r_versions() is None:
        for text in asked:
            table.skip(
                f"{what}: time" if text == asked[0] else f"{what}: fitted rates", text, "no R with mgcv"
            )
        return
    seconds, rate = mgcv_fit(design, unit.counts, size.repeats)
    ratio = median(seconds) / ours
    table.add(
        f"{what}: time", asked[0], f"{ratio:.0f} times (bam {median(seconds):.2f} s)", ratio >= 25, ratio
    )
    plane = next(term for term in design.terms if term.kind == "plane")
    occupied = (np.bincount(plane.cell, minlength=plane.n_cells) * design.bin_s >= 0.5)[plane.cell]
    difference = np.abs(rate / fitted_rate(space, fit, design) - 1)
    worst = difference[occupied].max()
    table.add(f"{what}: fitted rates", asked[1], f"within {100 * worst:.2g} %", worst <= 0.01, worst)
    table.note(
        f"bam(discrete=TRUE, method='fREML', nthreads=1), the same bases and penalties, reading data not "
        f"counted. Rates are compared in bins whose place was occupied for 0.5 s or longer "
        f"({100 * occupied.mean():.0f} % of them; in all bins: within {100 * difference.max():.2g} %)."
    )


def with_states(minutes: float, n_units: int) -> Session:
    """A session that has a category as well: four states in bouts of 5 s."""
    table = forage(minutes, SEED)
    rng, bout = np.random.default_rng(SEED), (table["time_s"] // 5).astype(int)
    table["state"] = rng.integers(0, 4, bout[-1] + 1)[bout].astype(float)
    state = TermSettings(name="state", kind="category", columns=["state"])
    settings = EncodingSettings(terms=[*SETTINGS.terms, state])
    return Session(prepare_session(table, settings), mixed_units(table, n_units, SEED))


def measure_tests(table: Table, session: Session, size: Size) -> None:
    """Line 3: the shift test of one term of each kind, the fit of its null model included."""
    states = with_states(size.minutes, size.units)
    for term in states.design.terms:
        owner = states if term.kind == "category" else session
        what = f"shift test of one term, its null fit included: {term.kind}"
        try:
            shifts, seconds = _time_test(owner, term.name, size.repeats)
        except np.linalg.LinAlgError as problem:
            table.add(what, "0.2 s", "failed", False)
            table.note(f"{what}: {problem}")
            continue
        table.add(f"{what}, {shifts} shifts", "0.2 s", f"{seconds:.2f} s", seconds <= 0.2, seconds)


def _time_test(session: Session, name: str, repeats: int) -> tuple[int, float]:
    design, units = session.design, [session.unit(i) for i in range(len(session.spikes))]
    shifts = one_test(design, units[0], name)  # what the session's units share
    seconds = [
        cpu_seconds(lambda u=unit: one_test(design, u, name)) for unit in units for _ in range(repeats)
    ]
    return shifts, median(seconds)


def one_test(design: SessionDesign, unit: UnitSpikes, name: str) -> int:
    """Test one term given all others; returns the number of shifts."""
    (term,) = (term for term in design.terms if term.name == name)
    space = workspace(design, tuple(other.name for other in design.terms if other.name != name))
    plan = shift_plan(design)
    null = null_model(space, fit_whole(space, design, unit), design, unit, plan)
    cells = step_cells(space, plan)
    return shift_test(term, null, plan, covariate_spectrum(design, name), cells)[1]


def measure_study(table: Table, size: Size) -> None:
    """Line 4: all of the analysis of 500 units of one session, two processes at once; wall time."""
    context = multiprocessing.get_context("spawn")
    barrier, answers = context.Barrier(PROCESSES), context.Queue()
    workers = [
        context.Process(target=_analyse_share, args=(barrier, answers, size, share))
        for share in range(PROCESSES)
    ]
    told = _run(workers, answers)
    share = STUDY_UNITS / PROCESSES
    wall = max(shared + share * each for shared, each, _ in told)
    cpu = max(share * each for _, _, each in told)
    table.add(
        f"{STUDY_UNITS} units of one {size.minutes:g}-minute session, all included, {PROCESSES} processes",
        "300 s",
        f"{wall:.0f} s of wall time",
        wall <= 300,
        wall,
    )
    table.note(
        f"{STUDY_UNITS} units: {size.sample} units of five kinds timed, shared by {PROCESSES} processes that "
        f"ran at once, and scaled up ({cpu:.0f} s of CPU time for each process)."
    )


def _analyse_share(barrier, answers, size: Size, share: int) -> None:
    start = time.perf_counter()
    session = make_session(size.minutes, size.sample)
    mine = session.spikes[share::PROCESSES]
    for spikes in session.spikes[: min(5, size.sample)]:
        analyse_unit(session.design, spikes, None, SETTINGS)
    shared = time.perf_counter() - start
    barrier.wait()
    wall, cpu = time.perf_counter(), time.process_time()
    for spikes in mine:
        analyse_unit(session.design, spikes, None, SETTINGS)
    answers.put((shared, (time.perf_counter() - wall) / len(mine), (time.process_time() - cpu) / len(mine)))


def _run(workers: list, answers) -> list:
    """Start processes and gather one answer of each."""
    for worker in workers:
        worker.start()
    told = [answers.get(timeout=3600) for _ in workers]
    for worker in workers:
        worker.join()
    return told


def measure_growth(table: Table, session: Session, size: Size) -> None:
    """Line 5: time against the session's length and the number of units; a shard's memory."""
    chosen, per_bin = sorted({0, len(session.spikes) - 1}), {"selection": [], "all of the analysis": []}
    for minutes in size.lengths:
        long = make_session(minutes, size.units)
        works = {
            "selection": lambda s, d=long.design: select(d, s),
            "all of the analysis": lambda s, d=long.design: analyse_unit(d, s, None, SETTINGS),
        }
        for name, work in works.items():
            work(long.spikes[0])  # what the session's units share
            each = [cpu_seconds(lambda w=work, s=long.spikes[i]: w(s)) for i in chosen]
            per_bin[name].append(sum(each) / len(each) / long.design.n_bins)
    lengths = ", ".join(f"{minutes:g}" for minutes in size.lengths)
    for name, seconds in per_bin.items():
        ratios = [one / seconds[0] for one in seconds]
        measured = " : ".join(f"{ratio:.2f}" for ratio in ratios)
        table.add(
            f"{name}: time per bin, sessions of {lengths} min",
            "linear",
            measured,
            max(ratios) <= LINEAR,
            max(ratios),
        )
    few = cpu_seconds(lambda: [analyse_unit(session.design, s, None, SETTINGS) for s in session.spikes])
    many = cpu_seconds(lambda: [analyse_unit(session.design, s, None, SETTINGS) for s in 4 * session.spikes])
    n, ratio = len(session.spikes), many / few / 4
    what = f"all of the analysis: time per unit, {n} and {4 * n} units"
    table.add(what, "linear", f"1.00 : {ratio:.2f}", ratio <= LINEAR, ratio)
    table.note(
        f"Linear: no figure above {LINEAR:g}. Rows with equal cells merge, which favours long sessions."
    )
    peak = _peak_of_shard(size)
    what = f"peak memory of a shard ({size.units} units) of a session of {size.lengths[-1]:g} min"
    table.add(what, "500 MB", f"{peak:.0f} MB", peak <= 500, peak)


def _peak_of_shard(size: Size) -> float:
    """Most memory, MB, of a process that reads a session from a file, as a job does, and analyses units."""
    table = forage(size.lengths[-1], SEED)
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "session.npz"
        spikes = {f"unit_{i}": times for i, times in enumerate(mixed_units(table, size.units, SEED))}
        np.savez(file, **table, **spikes)
        context = multiprocessing.get_context("spawn")
        answers = context.Queue()
        (peak,) = _run([context.Process(target=_shard_peak, args=(answers, file))], answers)
    return peak


def _shard_peak(answers, file: Path) -> None:
    import pandas  # noqa: F401  what a job reads its inputs with is in its memory too
    import pynwb  # noqa: F401

    with np.load(file) as read:
        arrays = {name: read[name] for name in read.files}
    units = [arrays.pop(name) for name in sorted(arrays) if name.startswith("unit_")]
    design = prepare_session(arrays, SETTINGS)
    for spikes in units:
        analyse_unit(design, spikes, None, SETTINGS)
    answers.put(peak_megabytes())


def peak_megabytes() -> float:
    """Most memory this process ever held, MB."""
    status = Path("/proc/self/status")
    if status.exists():  # On Linux getrusage also counts what the parent held when it started this process.
        for line in status.read_text(encoding="ascii").splitlines():
            if line.startswith("VmHWM:"):
                return int(line.split()[1]) / 1024
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / 2**20 if sys.platform == "darwin" else peak / 1024


def main() -> int:
    options = read_options(__doc__)
    use_one_thread()
    size = QUICK if options.quick else FULL
    table = Table("The encoding engine: speed and growth", quick=options.quick, seed=SEED)
    session = make_session(size.minutes, size.units)
    table.note(f"A session of {size.minutes:g} min has {session.design.n_bins} bins.")
    measure_selection(table, session, size)
    measure_full_model(table, session, size)
    measure_tests(table, session, size)
    measure_study(table, size)
    measure_growth(table, session, size)
    return table.finish(options.json)


if __name__ == "__main__":
    sys.exit(main())
