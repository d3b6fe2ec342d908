"""What a study of many sessions costs beside its computation: time, memory, files.

    python tests/benchmarks/scale.py [--quick] [--json FILE]

Ten sessions of 200 units go through the real workflow with the local profile. Two things are stand-ins, in a
copy of the package: a unit's analysis (the first of each job is real, the others take its result after a
sleep) and its card (an empty picture). Larger studies are the ten multiplied: copies of their products under
other names, with records of their own, real recordings (copies with another subject) and the engine's own
metadata (`snakemake --touch`); the population of the largest that is summarised is computed from them for
real. About an hour on two cores.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections import Counter
from pathlib import Path
from statistics import median

from benchmark_table import Table, read_options, use_one_thread
from study_of_many import Many, job_seconds

ROOT = Path(__file__).parents[2]
SHARD_SECONDS = 300
FOLDER_LIMIT, FILES_PER_UNIT = 5000, 5
FULL = {"units": 200, "first": 10, "sizes": (100, 300, 1000), "summarised": 300}
QUICK = {"units": 5, "first": 1, "sizes": (2,), "summarised": 2}
ASKED_S = {100: 5.0, 300: 15.0}


def main() -> int:
    """Measure everything and print the table."""
    options = read_options(__doc__)
    use_one_thread()
    size = QUICK if options.quick else FULL
    table = Table("Scale: what many sessions cost beside their computation", quick=options.quick)
    table.note(
        "fits and cards are stand-ins; planning, graph, jobs, tables, records, population and report are real"
    )
    with tempfile.TemporaryDirectory(prefix="scale-") as place:
        many = Many(Path(place), size["units"])
        first = size["first"]
        many.begin(first)
        seconds = many.run()
        table.add(f"first run, stand-in fits, sessions: {first}", "-", f"{seconds:.0f} s", None, seconds)
        if first > 1:
            overhead_per_job(table, many)
        files(table, many, first)
        times = {first: nothing_to_do(table, many, first)}
        for number in size["sizes"]:
            added = number - len(many.sessions)
            planning, marking = many.grow(number)
            table.add(
                f"planning {added} new sessions (reading them)", "-", f"{planning:.0f} s", None, planning
            )
            table.note(f"{number} sessions: the engine's metadata took {marking:.0f} s to make")
            if number > size["summarised"]:
                many.mark_as_made()
            elif number == size["summarised"]:
                summarise(table, many, number)
                one_unit_changed(table, many, number)
            else:
                many.run()
            times[number] = nothing_to_do(table, many, number)
        growth(table, times)
    return table.finish(options.json)


def nothing_to_do(table: Table, many: Many, number: int) -> float:
    """Time and memory of a run that finds everything up to date."""
    spent = []
    for _ in range(1 if table.quick else 3):
        seconds, megabytes, text = many.snakemake()
        assert "Nothing to be done" in text, text[-2000:]
        spent.append(seconds)
    seconds = median(spent)
    asked = ASKED_S.get(number)
    table.add(
        f"nothing to do, sessions: {number}",
        f"{asked:.0f} s or less" if asked else "-",
        f"{seconds:.1f} s, {megabytes:.0f} MB",
        seconds <= asked if asked else None,
        seconds,
    )
    return seconds


def growth(table: Table, times: dict[int, float]) -> None:
    """Is the cost of a further session the same, however many there are?"""
    sizes = sorted(times)[1:]
    per_session = {
        size: (times[size] - times[before]) / (size - before)
        for before, size in zip(sorted(times), sizes, strict=False)
    }
    told = ", ".join(f"{1e3 * cost:.0f} ms up to {size}" for size, cost in per_session.items())
    costs = list(per_session.values())
    holds = costs[-1] <= 1.25 * max(costs[:-1]) if len(costs) > 1 else None
    table.add("nothing to do: each further session", "no more than the one before", told, holds, costs[-1])


def one_unit_changed(table: Table, many: Many, number: int) -> None:
    """A new sorting in which one unit of one session differs."""
    many.change_one_unit()
    before = time.time()
    seconds, megabytes, _ = many.snakemake()
    jobs = job_seconds(many.folder, since=before)
    fitted = [unit for unit in many.fitted() if unit["made"] == "fitted"]
    overhead = seconds - sum(jobs.values())
    table.add(
        f"one unit of {number} sessions changed",
        "overhead under 30 s",
        f"{overhead:.1f} s of {seconds:.0f} s; {len(jobs)} jobs, {len(fitted)} unit fitted",
        overhead < 30 and len(fitted) == 1,
        overhead,
    )
    slowest = ", ".join(
        f"{name} {spent:.0f} s" for name, spent in sorted(jobs.items(), key=lambda x: -x[1])[:4]
    )
    table.note(
        f"one unit changed: time inside the jobs {sum(jobs.values()):.0f} s ({slowest}); {megabytes:.0f} MB"
    )


def overhead_per_job(table: Table, many: Many) -> None:
    """What a job costs in which no unit is fitted: one against several; the engine's start drops out."""
    several = min(5, len(many.sessions))
    spent = {}
    for number in (1, several):
        targets = [many.remove_fits(session) for session in many.sessions[:number]]
        spent[number] = many.snakemake(*targets, "--cores", "1")[0]
    cost = (spent[several] - spent[1]) / (several - 1)
    table.add(
        f"a job that fits nothing ({many.units} units restored), imports included",
        f"under 10 % of a shard of {SHARD_SECONDS} s",
        f"{cost:.1f} s, {100 * cost / SHARD_SECONDS:.1f} %",
        cost < 0.1 * SHARD_SECONDS,
        cost,
    )
    many.run()


def files(table: Table, many: Many, number: int) -> None:
    """Files by unit and by folder, counted; larger studies follow by rule, as nothing depends on others."""
    found = [
        path for path in many.folder.rglob("*") if path.is_file() and many.recordings not in path.parents
    ]
    folders = Counter(path.parent.relative_to(many.folder).as_posix() for path in found)
    for path in many.folder.rglob("*"):
        if path.is_dir():
            folders[path.parent.relative_to(many.folder).as_posix()] += 1
    ours = [path for path in found if ".snakemake" not in path.parts and "src" not in path.parts]
    per_unit = len(ours) / (number * many.units)
    table.add(
        f"files for each unit, sessions: {number}",
        f"{FILES_PER_UNIT} or fewer",
        f"{per_unit:.2f} (a fit, a card, and {len(ours) / number - 2 * many.units:.0f} for each session)",
        per_unit <= FILES_PER_UNIT,
        per_unit,
    )
    shared = {"results/sessions", "results/plan/sessions", "results/plan/history"}
    engine = folders[".snakemake/metadata"] / number
    largest = max(
        count
        for name, count in folders.items()
        if not name.startswith((".snakemake", "src", "results/store"))
    )
    for sessions in (300, 1000):
        most = max(sessions, largest, sessions * many.units / 256)
        table.add(
            f"entries of the largest folder of ours, {sessions} sessions (by rule)",
            f"{FOLDER_LIMIT} or fewer",
            f"{most:.0f}",
            most <= FOLDER_LIMIT,
            most,
        )
        table.add(
            f"entries of the engine's metadata folder, {sessions} sessions (by rule)",
            "-",
            f"{engine * sessions:.0f}",
            None,
            engine * sessions,
        )
    table.note(
        f"one entry for each session in {', '.join(sorted(shared & set(folders)))}; fits lie in 256 folders"
    )
    space = sum(path.stat().st_size for path in ours if "store" not in path.parts) / number
    store = sum(path.stat().st_size for path in ours if "store" in path.parts) / number
    table.add(
        "space for each session: products and logs; kept fits",
        "-",
        f"{space / 1e6:.1f} MB (cards are stand-ins); {store / 1e6:.1f} MB",
        None,
        space + store,
    )


def summarise(table: Table, many: Many, number: int) -> None:
    """The population, its figures and the report of many units, for real."""
    units = number * many.units
    for rule, run in many.ends().items():
        seconds, megabytes = run["seconds"], run["memory_mb"]
        table.add(
            f"{rule} of {units} units",
            "under 4 GB",
            f"{megabytes:.0f} MB, {seconds:.0f} s",
            megabytes < 4000,
            megabytes,
        )
    page = many.folder / "results" / "report.html"
    table.note(f"the report of {units} units has {page.stat().st_size / 1e6:.1f} MB")


if __name__ == "__main__":
    sys.exit(main())
