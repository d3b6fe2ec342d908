"""A small study run once by the real workflow; every case changes a copy of it and runs it again."""

import fcntl
import json
import os
import shutil
import subprocess
import sys
from dataclasses import dataclass, field
from pathlib import Path

import pytest
import yaml

ROOT = Path(__file__).parents[2]
SNAKEMAKE = Path(sys.executable).with_name("snakemake")

SETTINGS = {
    "study": {"name": "small study", "shards_per_session": 2},
    "intake": {
        "position_place": "processing/behavior/Position",
        "front_point": "led_front",
        "back_point": "led_back",
        "frame_pulses_place": "acquisition/camera_frame_pulses",
        "arena_place": "processing/behavior/arena",
    },
    "figures": {"dpi": 72},
}
# The clock of sorrel_2 jumps; broken.nwb is the first part of a file.
SESSIONS = {
    "alpha": {"nwb": "recordings/bracken_1.nwb"},
    "beta": {"nwb": "recordings/sorrel_1.nwb"},
    "jump": {"nwb": "recordings/sorrel_2.nwb"},
    "broken": {"nwb": "recordings/broken.nwb"},
}


@dataclass
class Outcome:
    """What a run of snakemake did: the jobs that ran (`rule session shard`), and what it printed."""

    jobs: set[str]
    text: str
    status: int


@dataclass
class Study:
    """A folder that the workflow is run in."""

    folder: Path
    settings: dict = field(default_factory=lambda: json.loads(json.dumps(SETTINGS)))
    sessions: dict = field(default_factory=lambda: json.loads(json.dumps(SESSIONS)))

    @property
    def results(self) -> Path:
        return self.folder / "results"

    def environment(self) -> dict[str, str]:
        environment = {name: value for name, value in os.environ.items() if not name.startswith("SNAKEMAKE")}
        if (self.folder / "src").is_dir():
            environment["PYTHONPATH"] = str(self.folder / "src")
        return environment

    def copy_code(self) -> None:
        """Give the study a copy of the package that can be edited; compiled kernels come with it."""
        shutil.copytree(ROOT / "src" / "odograph", self.folder / "src" / "odograph")

    def write_tables(self) -> None:
        (self.folder / "config").mkdir(exist_ok=True)
        (self.folder / "config" / "config.yaml").write_text(yaml.safe_dump(self.settings))
        columns = list(dict.fromkeys(["nwb", *(name for row in self.sessions.values() for name in row)]))
        lines = ["\t".join(["session", *columns])]
        for session, row in self.sessions.items():
            lines.append("\t".join([session, *(str(row.get(name, "")) for name in columns)]))
        (self.folder / "config" / "sessions.tsv").write_text("\n".join(lines) + "\n")

    def command(self, *arguments: str, cores: int = 2) -> list[str]:
        profile = ROOT / "workflow" / "profiles" / "local"
        return [
            str(SNAKEMAKE), "--snakefile", str(ROOT / "Snakefile"), "--profile", str(profile),
            "--cores", str(cores), "--nocolor", *arguments,
        ]  # fmt: skip

    def run(self, *arguments: str, cores: int = 2, status: int = 0) -> Outcome:
        """Write the user's two files, run the workflow, and see which jobs ran."""
        self.write_tables()
        before = self.logs()
        done = subprocess.run(
            self.command(*arguments, cores=cores),
            cwd=self.folder,
            env=self.environment(),
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        after = self.logs()
        assert done.returncode == status, done.stdout
        jobs = {name for name, stamp in after.items() if before.get(name) != stamp}
        # The run root follows any job that wrote a record; alone it would be a job too many.
        jobs = jobs if jobs == {"root"} else jobs - {"root"}
        return Outcome(jobs, done.stdout, done.returncode)

    def would_run(self) -> set[str]:
        """The jobs that a run would make, as the engine plans it; nothing runs."""
        self.write_tables()
        done = subprocess.run(
            self.command("--summary"),
            cwd=self.folder,
            env=self.environment(),
            capture_output=True,
            text=True,
            check=True,
        )
        lines = [line.split("\t") for line in done.stdout.splitlines() if "\t" in line]
        head, rows = lines[0], lines[1:]
        log, plan = head.index("log-file(s)"), head.index("plan")
        pending = {row[log] for row in rows if row[plan] == "update pending"}
        jobs = {self.job_of(Path(name).relative_to("logs")) for name in pending}
        return jobs if jobs == {"root"} else jobs - {"root"}

    @staticmethod
    def job_of(log: Path) -> str:
        """The name of a job by its log."""
        return " ".join(log.with_suffix("").parts).replace("shard-", "")

    def logs(self) -> dict[str, int]:
        """The time stamp of every job's log, by the job's name: a job that runs writes its log anew."""
        stamps = {}
        for log in (self.folder / "logs").rglob("*.log"):
            stamps[self.job_of(log.relative_to(self.folder / "logs"))] = log.stat().st_mtime_ns
        return stamps

    def record(self, path: str) -> dict:
        return json.loads((self.results / path).read_text())

    def refitted(self) -> dict[str, dict[int, str]]:
        """By session, the units that the last job of their shard fitted, and why."""
        found: dict[str, dict[int, str]] = {}
        for file in sorted(self.results.glob("sessions/*/encoding/shard-*/record.json")):
            record = json.loads(file.read_text())
            for unit in record["run"].get("units", ()):
                if unit["made"] == "fitted":
                    found.setdefault(record["keys"]["session"], {})[unit["unit"]] = unit["why"]
        return found

    def tables(self) -> dict[str, bytes]:
        """Every table of the run, by name."""
        files = [*self.results.glob("population/*"), *self.results.glob("sessions/*/behaviour/*.parquet")]
        return {
            str(file.relative_to(self.results)): file.read_bytes()
            for file in files
            if file.name != "record.json"
        }


def make_recordings(folder: Path) -> None:
    """Recordings of three minutes and five units, one of them sorted again, one cut short."""
    make = [sys.executable, str(ROOT / "demo_data" / "make_recordings.py"), "--minutes", "3", "--units", "5"]
    make += ["--out", str(folder)]
    names = ("bracken_1", "sorrel_1", "sorrel_2", "teasel_1")
    subprocess.run([*make, "--sessions", *names], check=True, stdout=subprocess.DEVNULL)
    subprocess.run([*make, "--resort", "bracken_1"], check=True, stdout=subprocess.DEVNULL)
    shutil.copy2(folder / "bracken_1.nwb", folder / "bracken_1_first.nwb")
    whole = (folder / "sorrel_1.nwb").read_bytes()
    (folder / "broken.nwb").write_bytes(whole[: len(whole) // 3])


@pytest.fixture(scope="session")
def finished(tmp_path_factory) -> Study:
    """The study after its first run, made once for all processes that test. Not to be changed."""
    place = tmp_path_factory.getbasetemp()
    if "PYTEST_XDIST_WORKER" in os.environ:
        place = place.parent
    folder, told = place / "finished", place / "finished.json"
    study = Study(folder)
    with (place / "finished.lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not told.exists():
            # What a first try left behind, when it failed.
            shutil.rmtree(folder, ignore_errors=True)
            folder.mkdir()
            make_recordings(folder / "recordings")
            first = study.run()
            told.write_text(json.dumps({"jobs": sorted(first.jobs), "text": first.text}))
    first = json.loads(told.read_text())
    study.first = Outcome(set(first["jobs"]), first["text"], 0)
    return study


@pytest.fixture
def study(finished, tmp_path) -> Study:
    """A copy of the finished study, to change and run again."""
    shutil.copytree(finished.folder, tmp_path / "copy")
    return Study(tmp_path / "copy")
