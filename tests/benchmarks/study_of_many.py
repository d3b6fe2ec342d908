"""A study of many sessions for the benchmark of scale: one that was run, multiplied.

What is multiplied is said where it is done: recordings are copies with another subject, products are copies
with the session's name put in, and every record is drawn up anew from the copies, so that steps, `verify` and
the run root find what they would find after a real run.
"""

from __future__ import annotations

import contextlib
import json
import os
import re
import shutil
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
SNAKEMAKE = Path(sys.executable).with_name("snakemake")
ANIMALS = 12
#: Appended to the copy of `encoding/analyse.py`: what a fit takes is known and small.
STAND_IN_FIT = """

_real_analysis = analyse_unit
_first_result = []


def analyse_unit(design, spike_times_s, observed_s, settings):
    import time

    if not _first_result:
        _first_result.append(_real_analysis(design, spike_times_s, observed_s, settings))
    time.sleep(0.01)
    return _first_result[0]
"""
#: Appended to the copy of `figures/card.py`.
STAND_IN_CARD = """


def draw_card(row, scores, curves, behaviour, corners, settings):
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(0.5, 0.5))
    FigureCanvasAgg(figure)
    figure.drawn_with = settings
    return figure
"""
#: Rules of a session, in the order in which their products need each other.
OF_A_SESSION = ("intake", "sync", "behaviour", "encoding", "cards", "session_quality")


class Many:
    """A study that grows.

    Parameters
    ----------
    folder : Path
        Where to make it; empty.
    units : int
        Of every session.
    """

    def __init__(self, folder: Path, units: int) -> None:
        self.folder = folder / "study"
        self.recordings = self.folder / "recordings"
        self.units = units
        self.sessions: list[str] = []
        self._model = folder / "model"
        shutil.copytree(ROOT / "src" / "odograph", self.folder / "src" / "odograph")
        for module, text in (("encoding/analyse.py", STAND_IN_FIT), ("figures/card.py", STAND_IN_CARD)):
            with (self.folder / "src" / "odograph" / module).open("a") as file:
                file.write(text)

    # Running

    @property
    def environment(self) -> dict[str, str]:
        """The copy of the package goes before the installed one."""
        kept = {name: value for name, value in os.environ.items() if not name.startswith("SNAKEMAKE")}
        return kept | {"PYTHONPATH": str(self.folder / "src")}

    def snakemake(self, *arguments: str) -> tuple[float, float, str]:
        """Run the engine with the local profile: wall time in s, its own memory in MB, what it printed."""
        profile = ROOT / "workflow" / "profiles" / "local"
        command = [str(SNAKEMAKE), "--snakefile", str(ROOT / "Snakefile"), "--profile", str(profile)]
        if "--cores" not in arguments:
            command += ["--cores", "2"]
        log = self.folder.parent / "snakemake.log"
        start = time.perf_counter()
        with log.open("w") as file:
            process = subprocess.Popen(
                [*command, "--nocolor", *arguments],
                cwd=self.folder,
                env=self.environment,
                stdout=file,
                stderr=subprocess.STDOUT,
            )
            largest = 0.0
            while process.poll() is None:
                largest = max(largest, _megabytes(process.pid))
                time.sleep(0.02)
        seconds, text = time.perf_counter() - start, log.read_text()
        if process.returncode:
            raise RuntimeError(text[-4000:])
        return seconds, largest, text

    def run(self) -> float:
        """Run what is to be run, and give the wall time in s."""
        return self.snakemake()[0]

    def ends(self) -> dict[str, dict[str, float]]:
        """Make the products of the whole study anew: by rule what its record says of the run."""
        places = {
            "population": "population/record.json",
            "population_figures": "figures/record.json",
            "report": "report.record.json",
        }
        for place in places.values():
            (self.folder / "results" / place).unlink()
        self.snakemake()
        return {
            rule: json.loads((self.folder / "results" / place).read_text())["run"]
            for rule, place in places.items()
        }

    # The first sessions

    def begin(self, number: int) -> None:
        """Recordings and tables of the first sessions: one is simulated, the others are copies of it."""
        make = [sys.executable, str(ROOT / "demo_data" / "make_recordings.py"), "--minutes", "3"]
        make += ["--units", str(self.units), "--sessions", "bracken_1", "--out", str(self._model)]
        subprocess.run(make, check=True, stdout=subprocess.DEVNULL)
        self.recordings.mkdir()
        self._add_sessions(number)

    def _add_sessions(self, number: int) -> list[str]:
        new = [f"session_{n:05d}" for n in range(len(self.sessions), number)]
        for n, session in enumerate(new, len(self.sessions)):
            # What is copied has the model's spikes; the first sessions have their own: none shares a fit.
            later_s = 0.0 if self.sessions else 1e-6 * n
            self._write_recording(session, f"animal_{n % ANIMALS:02d}", later_s)
        self.sessions += new
        (self.folder / "config").mkdir(exist_ok=True)
        shutil.copy(ROOT / "config" / "config.yaml", self.folder / "config" / "config.yaml")
        rows = [f"{session}\trecordings/{session}.nwb" for session in self.sessions]
        (self.folder / "config" / "sessions.tsv").write_text("\n".join(["session\tnwb", *rows]) + "\n")
        return new

    def _write_recording(self, session: str, animal: str, later_s: float) -> None:
        import h5py

        path = self.recordings / f"{session}.nwb"
        shutil.copyfile(self._model / "bracken_1.nwb", path)
        with h5py.File(path, "r+") as file:
            for place, text in (("general/subject/subject_id", animal), ("identifier", session)):
                del file[place]
                file[place] = text
            file["units/spike_times"][...] = file["units/spike_times"][()] + later_s

    def change_one_unit(self) -> None:
        """One unit of the last session loses its last spike but one, as if sorted anew."""
        import h5py

        path = self.recordings / f"{self.sessions[-1]}.nwb"
        with h5py.File(path, "r+") as file:
            spikes, ends = file["units/spike_times"], file["units/spike_times_index"][()]
            last = int(ends[len(ends) // 2]) - 1
            spikes[last] = (spikes[last - 1] + spikes[last]) / 2

    def fitted(self) -> list[dict[str, Any]]:
        """What the last session's fits came from."""
        folder = self.folder / "results" / "sessions" / self.sessions[-1] / "encoding"
        records = [json.loads(file.read_text()) for file in sorted(folder.glob("shard-*/record.json"))]
        return [unit for record in records for unit in record["run"]["units"]]

    def remove_fits(self, session: str) -> str:
        """Remove the products of a session's first shard, and name one, for the engine to remake."""
        folder = Path("results/sessions") / session / "encoding" / "shard-0"
        shutil.rmtree(self.folder / folder)
        return str(folder / "units.parquet")

    # More sessions

    def grow(self, number: int) -> tuple[float, float]:
        """Make the study one of `number` sessions: seconds for planning and for metadata."""
        model = self.sessions[0]
        new = self._add_sessions(number)
        planning = self.snakemake("--dry-run", "--quiet", "all")[0]
        with contextlib.chdir(self.folder):
            for session in new:
                copy_products(model, session)
        start = time.perf_counter()
        self.snakemake("--touch", "--until", "cards", "session_quality", "intake")
        return planning, time.perf_counter() - start

    def mark_as_made(self) -> None:
        """Take what is there for the study's products: the population is that of fewer sessions."""
        self.snakemake("--touch")


def copy_products(model: str, session: str) -> None:
    """Give a session the products of another, with its own name in them and with records of its own."""
    source, target = (Path("results/sessions") / name for name in (model, session))
    for path in sorted(source.rglob("*")):
        if path.is_file() and not path.name.endswith("record.json"):
            copy = target / path.relative_to(source)
            copy.parent.mkdir(parents=True, exist_ok=True)
            copy_named(path, copy, model, session)
    for file in sorted(Path("logs").rglob("*")):
        if file.is_file() and model in file.as_posix():
            copy = Path(file.as_posix().replace(model, session))
            copy.parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(file, copy)
    places = {"cards": "cards/shard-0.record.json", "session_quality": "session_quality.record.json"}
    places |= {"encoding": "encoding/shard-0/record.json"}
    for rule in OF_A_SESSION:
        place = places.get(rule, f"{rule}/record.json")
        write_record(json.loads((source / place).read_text()), target / place, model, session)


def copy_named(path: Path, copy: Path, model: str, session: str) -> None:
    """Copy one product; where it names its session, it names the other."""
    if path.suffix == ".json":
        copy.write_text(path.read_text().replace(model, session))
    elif path.suffix == ".parquet" and path.stem in ("units", "scores"):
        from odograph.provenance.files import read_table, write_table

        write_table(copy, read_table(path).assign(session=session))
    else:
        shutil.copyfile(path, copy)


def write_record(model_record: dict[str, Any], path: Path, model: str, session: str) -> None:
    """Draw up a record like another's, of the files of this session."""
    from odograph.provenance.records import RecordDraft

    def own(text: str) -> str:
        return text.replace(model, session)

    keys = {
        name: own(value) if isinstance(value, str) else value for name, value in model_record["keys"].items()
    }
    draft = RecordDraft(
        model_record["rule"], keys=keys, settings=model_record["settings"], code=model_record["code"]
    )
    for entry in model_record["inputs"]:
        if entry["kind"] == "product":
            draft.add_product_input(own(entry["path"]))
        else:
            draft._add_input({key: own(value) if key == "file" else value for key, value in entry.items()})
    for product in model_record["products"]:
        facts = {name: value for name, value in product.items() if name not in ("path", "digest")}
        draft.add_product(own(product["path"]), **facts)
    draft.run = {key: value for key, value in model_record["run"].items() if key != "ended"}
    draft.write(path)


def job_seconds(folder: Path, since: float) -> dict[str, float]:
    """Time inside each step's process that ended since then, by rule and session, as their records say."""
    from datetime import datetime

    found = {}
    for file in (folder / "results").rglob("*record.json"):
        if file.stat().st_mtime < since:
            continue
        record = json.loads(file.read_text())
        if datetime.fromisoformat(record["run"]["started"]).timestamp() >= since - 1:
            name = " ".join([record["rule"], *map(str, record["keys"].values())])
            found[name] = record["run"]["seconds"]
    return found


def _megabytes(pid: int) -> float:
    """Memory of a process now."""
    with contextlib.suppress(OSError, IndexError):
        found = re.search(r"VmHWM:\s+(\d+) kB", Path(f"/proc/{pid}/status").read_text())
        return int(found[1]) / 1024 if found else 0.0
    return 0.0
