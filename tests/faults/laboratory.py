"""Where faults are made: studies in folders of their own, what ran in them, are the bytes right."""

from __future__ import annotations

import contextlib
import hashlib
import importlib.util
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType

import yaml

TESTS = Path(__file__).parents[1]
ROOT = TESTS.parent
SNAKEMAKE = Path(sys.executable).with_name("snakemake")
MARK = "ODOGRAPH_FAULT"
#: A run that takes longer than this hangs.
LIMIT_S = 600


#: How far a short study goes: everything but pictures, report and run root.
SHORT = ("results/population/units.parquet",)


def _has_aim(arguments: tuple[str, ...]) -> bool:
    return bool({"--until", "--unlock"} & set(arguments))


def load(path: Path) -> ModuleType:
    """A module of the tests, by its file."""
    spec = importlib.util.spec_from_file_location(path.stem, path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


SMALL = load(TESTS / "workflow" / "conftest.py")


@dataclass(frozen=True)
class Happening:
    """One line of the table.

    Parameters
    ----------
    what : str
        Where or when the fault was made.
    done, happened : str
        The fault, and what came of it.
    same : bool or None
        Whether the study ended in the bytes of an undisturbed run; None where it was not run on.
    holds : bool or None
        Whether all that was asked came true; None where it could not be made here.
    """

    what: str
    done: str
    happened: str
    same: bool | None
    holds: bool | None


@dataclass(frozen=True)
class Outcome:
    """What a run of the engine ended with, and all that it printed."""

    status: int
    text: str

    def says(self, *words: str) -> bool:
        """Whether all of these words were printed."""
        return all(word in self.text for word in words)


@dataclass
class Study:
    """A folder that the workflow is run in."""

    folder: Path
    settings: dict
    sessions: dict
    environment: dict[str, str] = field(default_factory=dict)
    targets: tuple[str, ...] = ()
    runs: int = 0
    asked: bool = False

    @property
    def results(self) -> Path:
        return self.folder / "results"

    def write_tables(self) -> None:
        """Write the user's two files."""
        (self.folder / "config").mkdir(exist_ok=True)
        (self.folder / "config" / "config.yaml").write_text(yaml.safe_dump(self.settings))
        rows = [f"{session}\t{nwb}\n" for session, nwb in self.sessions.items()]
        (self.folder / "config" / "sessions.tsv").write_text("session\tnwb\n" + "".join(rows))

    def start(self, *arguments: str, cores: int = 2) -> subprocess.Popen[str]:
        """Start the engine in a process group of its own; what it prints goes to a file."""
        self.write_tables()
        self.runs += 1
        printed = self.folder / f"printed.{self.runs}"
        profile = ROOT / "workflow" / "profiles" / "local"
        command = [
            str(SNAKEMAKE), "--snakefile", str(ROOT / "Snakefile"), "--profile", str(profile),
            "--cores", str(cores), "--nocolor", *arguments, *(() if _has_aim(arguments) else self.targets),
        ]  # fmt: skip
        with printed.open("w") as file:
            run = subprocess.Popen(
                command, cwd=self.folder, stdout=file, stderr=subprocess.STDOUT, text=True,
                env=self._environment(), start_new_session=True,
            )  # fmt: skip
        run.printed = printed
        return run

    def end(self, run: subprocess.Popen[str]) -> Outcome:
        """Wait for a run."""
        try:
            run.wait(LIMIT_S)
        except subprocess.TimeoutExpired:
            kill_all(self)
            run.wait()
        return Outcome(run.returncode, run.printed.read_text(errors="replace"))

    def run(self, *arguments: str, cores: int = 2) -> Outcome:
        """Run the engine to its end."""
        return self.end(self.start(*arguments, cores=cores))

    def unlock(self) -> Outcome | None:
        """Take away what a killed run left locked, as its message says; None when nothing is."""
        locks = self.folder / ".snakemake" / "locks"
        return self.run("--unlock") if locks.is_dir() and any(locks.iterdir()) else None

    def again(self, tries: int = 3) -> tuple[int, Outcome]:
        """Run again until it ends well: how often that took, and the last outcome."""
        number, outcome = 0, None
        while number < tries and (outcome is None or outcome.status != 0):
            self.unlock()
            outcome = self.run()
            number += 1
        return number, outcome

    def odograph(self, *arguments: str) -> Outcome:
        """Run the `odograph` command."""
        done = subprocess.run(
            [sys.executable, "-m", "odograph.command.main", *arguments],
            cwd=self.folder, env=self._environment(), capture_output=True, text=True, check=False,
        )  # fmt: skip
        return Outcome(done.returncode, done.stdout + done.stderr)

    def forget(self) -> None:
        """Begin from nothing: no results, no logs, nothing that the engine knows."""
        for name in ("results", "logs", ".snakemake"):
            shutil.rmtree(self.folder / name, ignore_errors=True)

    def _environment(self) -> dict[str, str]:
        kept = {name: value for name, value in os.environ.items() if not name.startswith("SNAKEMAKE")}
        own = self.environment | {MARK: str(self.folder)}
        paths = [*filter(None, [own.pop("PYTHONPATH", "")]), str(ROOT / "src")]
        threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
        return kept | threads | own | {"PYTHONPATH": os.pathsep.join(paths)}


# What is in a study's results


def content(study: Study) -> dict[str, str]:
    """Digests of all products by name, the run root, and every temporary file that was left behind.

    Records, the plan and the root's file tell when and where as well; what they say of the results is in the
    run root. The store is compared by `kept`, since it may hold fits of before.
    """
    found = {}
    apart = {study.results / "plan", study.results / "store"}
    for file in study.results.rglob("*"):
        told = file.name.endswith("record.json") or file.name == "root.json"
        if file.is_file() and not told and not apart & set(file.parents):
            found[str(file.relative_to(study.results))] = hashlib.sha256(file.read_bytes()).hexdigest()
    with contextlib.suppress(OSError, ValueError, KeyError):
        found["run root"] = json.loads((study.results / "root.json").read_text())["root"]
    left = [*(study.results / "plan").rglob(".*.tmp*"), *(study.results / "store").resolve().rglob(".*.tmp*")]
    return found | {f"left behind: {path.name}": "" for path in left}


def kept(study: Study) -> dict[str, str]:
    """Digests of the fits in the store."""
    store = (study.results / "store").resolve()
    return {file.name: hashlib.sha256(file.read_bytes()).hexdigest() for file in store.glob("??/*.npz")}


@dataclass(frozen=True)
class Undisturbed:
    """A study that ran through: its folder, what it made, and how long that took."""

    study: Study
    products: dict[str, str]
    fits: dict[str, str]
    seconds: float

    def differences(self, study: Study) -> list[str]:
        """The products and fits of a study that are not the ones of this run."""
        found, fits = content(study), kept(study)
        names = [name for name in self.products | found if self.products.get(name) != found.get(name)]
        return sorted(names) + sorted(name for name, digest in self.fits.items() if fits.get(name) != digest)


class Laboratory:
    """Recordings, undisturbed runs and copies of them, in one folder.

    Parameters
    ----------
    folder : Path
        Scratch space.
    quick : bool
        Fewer units, in one shard instead of two.
    seed : int
        Of whatever is drawn.
    """

    def __init__(self, folder: Path, quick: bool, seed: int) -> None:
        self.folder, self.quick, self.seed = folder, quick, seed
        self._undisturbed: dict[tuple[str, bool], Undisturbed] = {}
        self._count = 0
        made = folder / "recordings"
        units = "4" if quick else "5"
        make = [
            sys.executable,
            str(ROOT / "demo_data" / "make_recordings.py"),
            "--minutes",
            "3",
            "--units",
            units,
        ]
        make += ["--out", str(made)]
        environment = os.environ | {"PYTHONPATH": str(ROOT / "src")}
        for more in (["--sessions", "bracken_1"], ["--resort", "bracken_1"]):
            subprocess.run([*make, *more], check=True, stdout=subprocess.DEVNULL, env=environment)
        # The first run may have to compile, which takes longer than all the rest.
        self.undisturbed(short=True)

    def fresh(self, name: str, short: bool = False, **settings: dict) -> Study:
        """A study with recordings and without results; a short one ends with the tables of the population."""
        self._count += 1
        study = Study(self.folder / f"{self._count}-{name}", self._settings(settings), self._sessions())
        study.targets = SHORT if short or self.quick else ()
        study.folder.mkdir()
        shutil.copytree(self.folder / "recordings", study.folder / "recordings")
        return study

    def copy(self, name: str, short: bool = False) -> Study:
        """A copy of a finished study."""
        self._count += 1
        source = self.undisturbed("first", short).study
        study = Study(self.folder / f"{self._count}-{name}", source.settings, dict(source.sessions))
        study.targets = source.targets
        shutil.copytree(source.folder, study.folder, symlinks=True)
        return study

    def undisturbed(self, what: str = "first", short: bool = False) -> Undisturbed:
        """The study as it is when nothing happens: `first`, `resorted`, or with `SETTINGS`."""
        key = (what, short or self.quick)
        if key not in self._undisturbed:
            study = self.fresh(f"undisturbed-{what}", short, **SETTINGS.get(what, {}))
            if what == "resorted":
                self.resort(study)
            begun = time.monotonic()
            outcome = study.run()
            seconds = time.monotonic() - begun
            if outcome.status != 0:
                raise RuntimeError(f"the undisturbed run failed:\n{outcome.text}")
            self._undisturbed[key] = Undisturbed(study, content(study), kept(study), seconds)
        return self._undisturbed[key]

    def resort(self, study: Study, in_place: bool = False) -> None:
        """Replace the first session's recording by the same one sorted again."""
        target, new = (
            study.folder / "recordings" / f"{name}.nwb" for name in ("bracken_1", "bracken_1_resorted")
        )
        if in_place:
            shutil.copyfile(new, target)
        else:
            beside = target.with_suffix(".new")
            shutil.copyfile(new, beside)
            beside.replace(target)

    def _settings(self, more: dict[str, dict]) -> dict:
        settings = json.loads(json.dumps(SMALL.SETTINGS))
        settings["study"]["shards_per_session"] = 1 if self.quick else 2
        return settings | more

    def _sessions(self) -> dict[str, str]:
        return {"alpha": "recordings/bracken_1.nwb"}


#: Other settings: one that the behaviour table and every product below it depend on, and one that changes
#: what sync says, and so every record below, but no number.
SETTINGS = {"other": {"behaviour": {"bin_s": 0.04}}, "warned": {"sync": {"warn_drift_ppm": 0.001}}}


def judged(
    lab: Laboratory, study: Study, what: str, done: str, happened: str, holds: bool, of: str = "first"
) -> Happening:
    """The line of a study that has come to its end: are its bytes those of the undisturbed run?"""
    differences = lab.undisturbed(of, bool(study.targets)).differences(study)
    if differences:
        happened += f"; not the same: {', '.join(differences[:3])} and {max(len(differences) - 3, 0)} more"
    return Happening(what, done, happened, not differences, holds and not differences)


# Processes


def processes_of(study: Study, *words: str) -> list[int]:
    """The living processes that a study's runs have started, by a part of their command line."""
    mark, found = f"{MARK}={study.folder}".encode(), []
    for entry in Path("/proc").iterdir():
        if not entry.name.isdecimal():
            continue
        with contextlib.suppress(OSError):
            if mark in (entry / "environ").read_bytes().split(b"\0"):
                line = (entry / "cmdline").read_bytes().replace(b"\0", b" ").decode(errors="replace")
                if all(word in line for word in words) and (entry / "stat").read_text().split()[2] != "Z":
                    found.append(int(entry.name))
    return found


def workers_of(study: Study, step: str | None = None) -> list[int]:
    """The living steps of a study's runs, or those of one kind."""
    word = "-m odograph.steps." if step is None else f"-m odograph.steps.{step} "
    return [number for number in processes_of(study, word) if not _is_shell(number)]


def _is_shell(number: int) -> bool:
    with contextlib.suppress(OSError):
        return "sh" in Path(f"/proc/{number}/comm").read_text()
    return True


def kill_all(study: Study) -> None:
    """End whatever a study's runs have started."""
    for number in processes_of(study):
        with contextlib.suppress(ProcessLookupError):
            os.kill(number, signal.SIGKILL)


def until(condition: Callable[[], bool], run: subprocess.Popen[str], every_s: float = 0.005) -> bool:
    """Wait for a condition; False when the run ended before."""
    while run.poll() is None:
        if condition():
            return True
        time.sleep(every_s)
    return False


@contextlib.contextmanager
def held_still(numbers: list[int]) -> Iterator[None]:
    """Hold processes still."""
    for number in numbers:
        os.kill(number, signal.SIGSTOP)
    try:
        yield
    finally:
        for number in numbers:
            with contextlib.suppress(ProcessLookupError):
                os.kill(number, signal.SIGCONT)


def reading(study: Study, word: str, file: str) -> list[int]:
    """The processes with a word in their command line that have a file open."""
    found = []
    for number in processes_of(study, word):
        with contextlib.suppress(OSError):
            if any(str(entry.readlink()).endswith(file) for entry in Path(f"/proc/{number}/fd").iterdir()):
                found.append(number)
    return found
