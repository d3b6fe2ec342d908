"""Running an archived analysis again: the package checked, its study laid out, its environment built."""

from __future__ import annotations

import csv
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

from odograph.errors import InputError
from odograph.provenance.archive.bag import bag_problems
from odograph.provenance.archive.unpack import unpack
from odograph.provenance.files import file_digest

_NOT_LAID_OUT = {
    "results",
    "ro-crate-metadata.json",
    "README.md",
    "METHODS.md",
    "recordings.tsv",
    "documentation",
}


def open_archive(archive: Path, work: Path) -> Path:
    """The bag's folder: unpacked into `work` when it is a zip file.

    Raises
    ------
    InputError
        It is no archive, or files are missing, added or changed.
    """
    if not archive.exists():
        raise InputError("there is no such archive", file=str(archive), expected="a folder or a zip file")
    bag = archive if archive.is_dir() else unpack(archive, work / "archive")
    problems = bag_problems(bag)
    if problems:
        raise InputError(
            f"{len(problems)} files are not what its manifests say: {'; '.join(problems[:3])}",
            file=str(archive),
            expected="the archive as it was written",
            remedy="fetch it again",
        )
    return bag


def lay_out(bag: Path, study: Path, data: Path | None) -> None:
    """Make a study's folder from an archive: settings, workflow, library and recordings, but no results.

    Parameters
    ----------
    bag : Path
        From `open_archive`.
    study : Path
        The folder to make.
    data : Path or None
        Where to look for recordings that are not enclosed, by their names, at any depth.

    Raises
    ------
    InputError
        Recordings are missing, or are not the ones that were analysed.
    """
    payload = bag / "data"
    for entry in sorted(payload.iterdir()):
        if entry.name not in _NOT_LAID_OUT:
            copy = shutil.copytree if entry.is_dir() else shutil.copy2
            copy(entry, study / entry.name)
    (study / "README.md").write_text("An analysis run again from its archive.\n", encoding="utf-8")
    with (payload / "recordings.tsv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file, delimiter="\t", quoting=csv.QUOTE_NONE))
    known = {path.name: path for path in sorted(data.rglob("*")) if path.is_file()} if data else {}
    missing = []
    for row in rows:
        place = study / row["file"]
        if place.is_file():
            continue
        source = known.get(Path(row["file"]).name)
        if source is None:
            missing.append(row)
        elif file_digest(source) != f"sha256:{row['sha256']}":
            raise InputError(
                f"it is not the recording of session {row['session']} that was analysed",
                file=str(source),
                expected=f"SHA-256 {row['sha256']}",
                remedy="fetch the version that the archive names",
            )
        else:
            place.parent.mkdir(parents=True, exist_ok=True)
            place.symlink_to(source.resolve())
    if missing:
        first = missing[0]
        raise InputError(
            f"{len(missing)} of {len(rows)} recordings are not there, the first {first['file']}",
            file=str(bag),
            expected="the recordings enclosed, or in the folder named by --data",
            remedy=f"fetch them from {first['fetch_from']}"
            if first["fetch_from"]
            else "ask whoever holds them",
        )


def build_environment(study: Path, folder: Path, tell: Callable[[str], None]) -> Path:
    """A virtual environment with the versions that the archive names; returns the folder of its programs.

    Raises
    ------
    InputError
        It cannot be built.
    """
    tell(f"building the environment in {folder}")
    programs = folder / "bin"
    pip = [str(programs / "python"), "-m", "pip", "install", "--quiet", "--disable-pip-version-check"]
    pip += ["--constraint", "constraints.txt"]
    commands = [
        [sys.executable, "-m", "venv", str(folder)],
        [*pip, "setuptools>=77"],
        [*pip, "--no-build-isolation", "--editable", "."],
    ]
    for command in commands:
        done = subprocess.run(command, cwd=study, capture_output=True, text=True, check=False)
        if done.returncode:
            lines = [line for line in done.stderr.splitlines() if line.strip()][-3:]
            raise InputError(
                f"the environment cannot be built: {' '.join(lines)}",
                file=str(folder),
                expected="Python 3.11 or newer, and a package index that has the versions of constraints.txt",
                remedy="see the lines above, or use the present environment: --environment here",
            )
    return programs


def run_workflow(study: Path, programs: Path, cores: int, environment: dict[str, str]) -> None:
    """Run the archived workflow.

    Raises
    ------
    InputError
        It does not end well.
    """
    command = [str(programs / "snakemake"), "--profile", "workflow/profiles/local", "--cores", str(cores)]
    log = study / "replay.log"
    with log.open("w", encoding="utf-8") as file:
        done = subprocess.run(
            command, cwd=study, env=environment, stdout=file, stderr=subprocess.STDOUT, check=False
        )
    if done.returncode:
        raise InputError(
            f"the run ended with status {done.returncode}",
            file=str(log),
            expected="the workflow to run as it did",
            remedy="read the end of that file",
        )
