"""Make the demo recordings: the sessions of the study in scenario.md as NWB files, and the truth beside them.

Run as ``python demo_data/make_recordings.py``. Files that are there and up to date are left alone.
"""

from __future__ import annotations

import argparse
import hashlib
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from simulate_camera import Camera, simulate_camera
from simulate_journey import Journey, simulate_journey
from simulate_units import UnitTruth, simulate_spikes, unit_truths
from study_plan import ARENA_SIDE_M, FEWEST_UNITS, STUDY, SessionPlan, generator, plans
from truth_table import write_truth

RECORDINGS = Path(__file__).with_name("recordings")


@dataclass(frozen=True)
class SimulatedSession:
    """A session with its truth: the journey, what the camera saw, the units and their spike times."""

    plan: SessionPlan
    journey: Journey
    camera: Camera
    truths: tuple[UnitTruth, ...]
    spike_times_s: tuple[np.ndarray, ...]


def simulate_session(plan: SessionPlan) -> SimulatedSession:
    """Simulate one session; equal plans give equal sessions."""
    journey = simulate_journey(plan.duration_s, ARENA_SIDE_M, generator(plan.session, "journey"))
    truths = unit_truths(plan)
    return SimulatedSession(
        plan=plan,
        journey=journey,
        camera=simulate_camera(plan, journey),
        truths=truths,
        spike_times_s=tuple(simulate_spikes(truth, journey) for truth in truths),
    )


def write_recording(path: Path | str, plan: SessionPlan, *, resorted: bool = False) -> None:
    """Simulate a session and write it, as first sorted or as sorted again (see `resort.py`)."""
    from nwb_file import write_nwb
    from resort import resort_units, sorted_units

    session = simulate_session(plan)
    units = sorted_units(plan, session.truths, session.spike_times_s)
    if resorted:
        units, _ = resort_units(plan, units)
    write_nwb(
        Path(path),
        plan,
        session.camera,
        units,
        notes=_notes(plan, resorted),
        sorting="second sorting" if resorted else "first sorting",
    )


def is_current(path: Path, plan: SessionPlan, *, resorted: bool = False) -> bool:
    """Whether a whole file is there that this generator made from this plan."""
    import h5py

    if not path.is_file():
        return False
    try:
        with h5py.File(path, "r") as file:
            return file["general/notes"].asstr()[()] == _notes(plan, resorted)
    except (OSError, KeyError, TypeError):
        return False


def _notes(plan: SessionPlan, resorted: bool) -> str:
    """Says in the file what it was made from, so that a later run can tell whether to make it again."""
    code = hashlib.sha256()
    for module in sorted(Path(__file__).parent.glob("*.py")):
        if module.name != "score_against_truth.py":
            code.update(module.read_bytes())
    described = hashlib.sha256(repr(plan).encode()).hexdigest()
    sorting = "second" if resorted else "first"
    return f"Simulated. Plan {described[:16]}, generator {code.hexdigest()[:16]}, {sorting} sorting."


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; 0 when all files are there, 2 when the request makes no sense."""
    options = _parser().parse_args(arguments)
    try:
        named = [options.resort] if options.resort else options.sessions
        wanted = plans(named, minutes=options.minutes, units=options.units)
        if options.resort and wanted[0].units < FEWEST_UNITS:
            raise ValueError(f"--units is {wanted[0].units}; a second sorting needs {FEWEST_UNITS} or more")
    except ValueError as error:
        print(f"make_recordings.py: {error}", file=sys.stderr)
        return 2
    for number, plan in enumerate(wanted, start=1):
        started = time.monotonic()
        path = options.out / f"{plan.session}{'_resorted' if options.resort else ''}.nwb"
        resorted = options.resort is not None
        if options.force or not is_current(path, plan, resorted=resorted):
            write_recording(path, plan, resorted=resorted)
            done = f"{path.stat().st_size / 1e6:.1f} MB in {time.monotonic() - started:.1f} s"
        else:
            done = "there already"
        size = f"{plan.minutes:g} min, {plan.units} units"
        print(f"{number} of {len(wanted)}  {path}  {size}  ({done})", flush=True)
        if not resorted:
            write_truth(options.out, plan)
    print(f"truth of every unit: {options.out / 'truth.tsv'}")
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="make_recordings.py",
        description="Make the demo recordings (NWB files) and the truth of their units.",
        epilog="example: python demo_data/make_recordings.py --sessions bracken_1 --minutes 3 --units 6",
    )
    names = ", ".join(plan.session for plan in STUDY)
    parser.add_argument("--sessions", nargs="+", metavar="SESSION", help=f"which sessions (all of {names})")
    parser.add_argument("--minutes", type=float, help="length of every session (15 to 20 by the plan)")
    parser.add_argument("--units", type=int, help="number of units in every session (24 to 34 by the plan)")
    parser.add_argument("--out", type=Path, default=RECORDINGS, help="folder to write to (%(default)s)")
    parser.add_argument(
        "--resort",
        metavar="SESSION",
        help="write only SESSION_resorted.nwb: the same session with two units merged, one split and "
        "one with 3 %% of its spikes changed",
    )
    parser.add_argument("--force", action="store_true", help="make the files again even when up to date")
    return parser


if __name__ == "__main__":
    raise SystemExit(main())
