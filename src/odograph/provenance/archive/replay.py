"""Running an archived analysis again: the package checked, its study laid out, its environment built."""

from __future__ import annotations

import csv
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Callable, Mapping
from pathlib import Path

from odograph.errors import InputError, OdographError
from odograph.provenance.archive.bag import bag_problems
from odograph.provenance.archive.unpack import unpack
from odograph.provenance.effort import keep_shards_of
from odograph.provenance.files import file_digest
from odograph.provenance.record_shape import stays_within

_STEPS_DONE = re.compile(r"(\d+) of (\d+) steps \(")

_COLUMNS = ("session", "file", "enclosed", "bytes", "sha256", "fetch_from")
_NOT_LAID_OUT = {
    "results",
    "ro-crate-metadata.json",
    "README.md",
    "METHODS.md",
    "recordings.tsv",
    "documentation",
}


class ReplayError(OdographError):
    """The archive is whole, but its environment cannot be built here or its workflow does not run."""


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

    Sessions get as many shards as they had.

    Recordings are linked to, not copied.

    Parameters
    ----------
    bag : Path
        From `open_archive`.
    study : Path
        The folder, which must be empty.
    data : Path or None
        Where to look for recordings that are not enclosed, at any depth: by name, else by size, and always
        by digest.

    Raises
    ------
    InputError
        Recordings are missing, or are not the ones that were analysed.
    """
    payload = bag / "data"
    rows = _recordings(payload / "recordings.tsv")
    enclosed = {row["file"] for row in rows if row["enclosed"] == "yes"}
    for path in sorted(payload.rglob("*")):
        name = path.relative_to(payload)
        if path.is_file() and name.parts[0] not in _NOT_LAID_OUT and name.as_posix() not in enclosed:
            (study / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(path, study / name)
    keep_shards_of(payload / "results", study)
    (study / "README.md").write_text("An analysis run again from its archive.\n", encoding="utf-8")
    present = [path for path in sorted(data.rglob("*")) if path.is_file()] if data else []
    missing = []
    for row in rows:
        source = payload / row["file"] if row["file"] in enclosed else _find_recording(row, present)
        if source is None:
            missing.append(row)
            continue
        place = study / row["file"]
        place.parent.mkdir(parents=True, exist_ok=True)
        place.symlink_to(source.resolve())
    if missing:
        first = missing[0]
        raise InputError(
            f"{len(missing)} of {len(rows)} recordings are not there, the first {first['file']}",
            file=str(bag),
            expected="the recordings enclosed, or in the folder named by --data",
            remedy=f"fetch it from {first['fetch_from']}"
            if first["fetch_from"]
            else f"ask whoever holds them; recordings.tsv lists them (SHA-256 of this: {first['sha256']})",
        )


def _recordings(table: Path) -> list[dict[str, str]]:
    """The recordings that an archive names; no place of theirs leads out of the study's folder.

    Raises
    ------
    InputError
        The table is gone or is not one that odograph writes.
    """
    try:
        with table.open(encoding="utf-8", newline="") as file:
            rows = list(csv.DictReader(file, delimiter="\t", quoting=csv.QUOTE_NONE))
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise _bad_table(table, f"the table cannot be read ({error})") from error
    for line, row in enumerate(rows, 2):
        lacking = [name for name in _COLUMNS if not isinstance(row.get(name), str)]
        if lacking:
            raise _bad_table(table, f"no {', '.join(lacking)}", line)
        if not stays_within(row["file"]):
            raise _bad_table(table, f"the place {row['file']!r} leads out of the study's folder", line)
        if not row["bytes"].isdecimal():
            raise _bad_table(table, f"{row['bytes']!r} bytes", line)
    return rows


def _bad_table(table: Path, found: str, line: int | None = None) -> InputError:
    return InputError(
        found,
        file=str(table),
        place=f"line {line}" if line else None,
        expected="the table of recordings as `odograph archive` writes it",
        remedy="do not replay it; ask where the archive came from",
    )


def _find_recording(row: Mapping[str, str], present: list[Path]) -> Path | None:
    """The file with a recording's digest.

    Raises
    ------
    InputError
        There is one of its name, but none of its content.
    """
    named = [path for path in present if path.name == Path(row["file"]).name]
    of_its_size = [path for path in present if path.stat().st_size == int(row["bytes"])]
    for path in dict.fromkeys([*named, *of_its_size]):
        if path in of_its_size and file_digest(path) == f"sha256:{row['sha256']}":
            return path
    if not named:
        return None
    raise InputError(
        f"it is not the recording of session {row['session']} that was analysed",
        file=str(named[0]),
        expected=f"{row['bytes']} bytes with the SHA-256 {row['sha256']}",
        remedy="fetch the version that the archive names",
    )


def build_environment(
    study: Path, folder: Path, tell: Callable[[str], None], *, borrowed: bool = False
) -> Path:
    """A virtual environment with the versions that the archive names; returns the folder of its programs.

    Parameters
    ----------
    study : Path
        From `lay_out`.
    folder : Path
        The environment to make. What its installation says goes to ``environment.log`` beside it.
    tell : callable
        Takes a line of progress.
    borrowed : bool
        Whether it may use libraries of the present environment, where they have the version that the archive
        names; then nothing needs to be fetched.

    Raises
    ------
    ReplayError
        It cannot be built.
    """
    tell(f"building the environment in {folder}" + ("" if borrowed else "; this takes some minutes"))
    programs = folder / "bin"
    log = folder.with_name("environment.log")
    pip = [str(programs / "python"), "-m", "pip", "install", "--disable-pip-version-check"]
    pip += ["--constraint", "constraints.txt"]
    commands = [
        [sys.executable, "-m", "venv", str(folder)],
        [*pip, "setuptools>=77"],
        [*pip, "--no-build-isolation", "--editable", "."],
    ]
    for command in commands:
        with log.open("a", encoding="utf-8") as file:
            done = subprocess.run(  # noqa: S603 (a list of our own words and the new environment's path)
                command, cwd=study, stdout=file, stderr=subprocess.STDOUT, check=False
            )
        if done.returncode:
            lines = [line.strip() for line in log.read_text(encoding="utf-8").splitlines()]
            told = [line for line in lines if "error" in line.lower()] or [line for line in lines if line]
            raise ReplayError(
                f"the environment cannot be built: {' '.join(told[-3:])}",
                file=str(log),
                expected="Python 3.11 or newer, and a package index that has the versions of constraints.txt",
                remedy="read that file, or use the present environment: --environment here",
            )
        if borrowed and command is commands[0]:
            lend = [path for path in sys.path if Path(path).name in ("site-packages", "dist-packages")]
            (site,) = folder.glob("lib/python*/site-packages")
            (site / "borrowed.pth").write_text("\n".join(lend) + "\n", encoding="utf-8")
    return programs


def run_workflow(
    study: Path, programs: Path, cores: int, environment: dict[str, str], tell: Callable[[str], None]
) -> None:
    """Run the archived workflow; what it prints goes to ``replay.log`` in the study's folder.

    Raises
    ------
    ReplayError
        It does not end well.
    """
    profile = ["--profile", "workflow/profiles/local", "--cores", str(cores), "--nocolor"]
    command = [str(programs / "python"), "-m", "snakemake", *profile]
    log = study / "replay.log"
    told = 0
    with (
        log.open("w", encoding="utf-8") as file,
        subprocess.Popen(  # noqa: S603 (a list of our own words, a path and a whole number)
            command, cwd=study, env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True
        ) as run,
    ):
        for line in run.stdout or ():
            file.write(line)
            if (done := _STEPS_DONE.search(line)) and 10 * int(done[1]) // int(done[2]) > told:
                told = 10 * int(done[1]) // int(done[2])
                tell(f"{done[1]} of {done[2]} steps are done")
    if run.returncode:
        raise ReplayError(
            f"the run ended with status {run.returncode}",
            file=str(log),
            expected="the workflow to run as it did",
            remedy="read the end of that file",
        )


def run_environment(study: Path, programs: Path) -> dict[str, str]:
    """Variables for the run: its environment's programs and the archive's library come before others."""
    own = {name: value for name, value in os.environ.items() if not name.startswith("SNAKEMAKE")}
    places = {"PATH": str(programs), "PYTHONPATH": str(study / "src")}
    return own | {
        name: os.pathsep.join(filter(None, (place, own.get(name)))) for name, place in places.items()
    }
