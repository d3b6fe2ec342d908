"""Making an archive: payload, metadata, bag, and one zip file if that is wanted."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from typing import Any

from odograph.errors import InputError
from odograph.provenance.archive.bag import total_size, write_bag, zip_bag
from odograph.provenance.archive.crate import crate_text
from odograph.provenance.archive.payload import Recording, collect
from odograph.provenance.archive.private import (
    archived_record,
    archived_root,
    archived_sessions,
    files_that_name,
)
from odograph.provenance.canonical import digest_text, readable_json
from odograph.provenance.layout import RESULTS
from odograph.provenance.records import read_record
from odograph.provenance.root import ROOT, digests_of, read_root

METADATA = "ro-crate-metadata.json"
_README = """\
# {name}

This package holds the results of one analysis of neural recordings, and all that is needed to see where each
number came from and to make it again. It was written by odograph {version}, a program for Linux and macOS.

    {root}

is its run root: one identifier over all records of the analysis. If the paper prints it, compare.

## What is where

- `results/report.html`: start here. A page that any browser opens without a network.
- `results/population/`, `results/figures/`: tables (text and Parquet) and figures.
- `results/sessions/`: what was found in each recording, and a picture of each unit.
- `results/**/record.json`: beside every result, in plain text, what it was made from, with which settings and
  which code. Digests are SHA-256. The name of the computer that ran each job was left out here.
- `config/`: the settings, each with its meaning.
- `Snakefile`, `workflow/`, `src/`: the program itself. `constraints.txt` names the exact version of every
  library.
- `recordings.tsv`: the recordings, with size, digest and identifier. {enclosed}
- `METHODS.md`: the methods in words, and a statement for the data availability section.
- `ro-crate-metadata.json`: the same for programs (RO-Crate 1.1, Workflow Run Crate 0.5).

## Is it whole?

The folder above this one is a BagIt bag (RFC 8493). In it, with nothing but the usual tools:

    sha256sum -c manifest-sha256.txt

With the program: `odograph verify data` checks that every result is what its record says, too.

## Making it again

With the program installed (`documentation/README.md` tells how; Python 3.11 or newer):

    odograph replay PACKAGE --data FOLDER-OF-RECORDINGS

builds the environment that `constraints.txt` names, runs the analysis anew and compares every table and
figure. Without it, in this folder: install `src` with the libraries of `constraints.txt`, put the recordings
where `config/sessions.tsv` says, and run `snakemake --profile workflow/profiles/local`.

For research, not for diagnosis or treatment.
"""


@dataclass(frozen=True)
class Made:
    """An archive: where it is, its root, and what it holds.

    Parameters
    ----------
    path : Path
    root : str
    files, bytes : int
    recordings : list of Recording
    naming : list of (str, str)
        Files of the user that name a folder of this machine, and that folder.
    """

    path: Path
    root: str
    files: int
    bytes: int
    recordings: list[Recording]
    naming: list[tuple[str, str]]


def make_archive(
    folder: Path,
    target: Path,
    *,
    name: str,
    parameters: Mapping[str, Any],
    statement: str,
    with_recordings: bool = False,
    recordings_at: str | None = None,
) -> Made:
    """Write an archive of a finished study.

    Parameters
    ----------
    folder : Path
        The study's folder; nothing in it is changed.
    target : Path
        A folder to make, or a file whose name ends in .zip.
    name : str
        The study's name.
    parameters : mapping
        Settings that are not the default, by dotted path.
    statement : str
        METHODS.md.
    with_recordings : bool
        Take the recordings along.
    recordings_at : str, optional
        Address of the folder where recordings can be fetched, for those not taken along.

    Raises
    ------
    InputError, RecordError
        The target is there already, or the study is not finished or was changed.
    """
    if target.exists():
        raise InputError("it is there already", file=str(target), remedy="remove it, or give another name")
    if not target.resolve().parent.is_dir():
        raise InputError(
            "there is no such folder", file=str(target.parent), remedy="make it, or give another name"
        )
    if target.resolve().is_relative_to((folder / RESULTS).resolve()):
        raise InputError(
            "an archive among the results would be a file that no record knows",
            file=str(target),
            remedy="write it beside the study's folder",
        )
    files, recordings = collect(folder, with_recordings=with_recordings, recordings_at=recordings_at)
    root = read_root(folder)
    with tempfile.TemporaryDirectory(dir=target.parent, prefix=f".{target.name}.") as name_of_scratch:
        scratch = Path(name_of_scratch)
        records = _write_private_copies(folder, root, recordings, files, scratch / "private")
        texts = {
            "README.md": _readme(name, root["root"], recordings, recordings_at),
            "METHODS.md": statement,
            "recordings.tsv": _recordings_table(recordings),
        }
        facts = {
            path: (source.stat().st_size, (digest or "").removeprefix("sha256:"))
            for (path, source), digest in zip(files.items(), digests_of(files.values()), strict=True)
        } | {
            path: (len(text.encode()), digest_text(text).removeprefix("sha256:"))
            for path, text in texts.items()
        }
        engine = metadata.version("snakemake")
        texts[METADATA] = crate_text(name, facts, records, parameters, recordings, root, engine)
        # In a zip file the folder is named after the root: its bytes do not depend on the file's name.
        name_of_bag = f"odograph-{root['root'][5:17]}" if target.suffix == ".zip" else target.name
        bag = scratch / name_of_bag
        info = {
            "Bag-Software-Agent": f"odograph {metadata.version('odograph')}",
            "Bagging-Date": max(record["run"]["ended"] for record in records)[:10],
            "External-Description": f"Results of the study {' '.join(name.split())}",
            "External-Identifier": root["root"],
        }
        write_bag(bag, files, texts, info)
        held = [path for path in bag.rglob("*") if path.is_file()]
        own = {row["file"]: files[row["file"]].read_bytes().decode() for row in root["user_files"]}
        naming = files_that_name(own | {"METHODS.md": statement}, (folder.resolve(), Path.home()))
        made = Made(target, root["root"], len(held), total_size(held), recordings, naming)
        if target.suffix == ".zip":
            zip_bag(bag, scratch / "whole.zip")
            (scratch / "whole.zip").replace(target)
        else:
            shutil.move(bag, target)
    return made


def _write_private_copies(
    folder: Path,
    root: Mapping[str, Any],
    recordings: list[Recording],
    files: dict[str, Path],
    scratch: Path,
) -> list[dict[str, Any]]:
    """Put copies in place of files that must not leave this machine as they are; returns the records."""
    from odograph.settings.load import load_settings

    records = []
    copies = {}
    for row in root["records"]:
        records.append(archived_record(read_record(folder / row["file"])))
        copies[row["file"]] = readable_json(records[-1])
    own = {one.session: one.file for one in reversed(recordings)}
    table = str(load_settings(folder / "config" / "config.yaml").study.sessions_table)
    copies[table] = archived_sessions((folder / table).read_bytes().decode(), own)
    digests = {path: digest_text(text) for path, text in copies.items()}
    places = {(one.session, one.named): one.file for one in recordings}
    copies[ROOT.as_posix()] = archived_root(root, digests, places)
    for path, text in copies.items():
        files[path] = scratch / path
        files[path].parent.mkdir(parents=True, exist_ok=True)
        files[path].write_bytes(text.encode())
    return records


def _readme(name: str, root: str, recordings: list[Recording], recordings_at: str | None) -> str:
    if recordings and all(one.enclosed for one in recordings):
        enclosed = "They are enclosed, at the places that `config/sessions.tsv` says."
    elif recordings_at:
        enclosed = f"They are not enclosed; fetch them from {recordings_at}"
    else:
        enclosed = "They are not enclosed; the digests tell whether what you get is the same."
    version = metadata.version("odograph")
    return _README.format(name=name, version=version, root=root, enclosed=enclosed)


def _recordings_table(recordings: list[Recording]) -> str:
    lines = ["session\tfile\tbytes\tsha256\tidentifier\tenclosed\tfetch_from"]
    for one in recordings:
        digest, enclosed = one.digest.removeprefix("sha256:"), "yes" if one.enclosed else "no"
        cells = (one.session, one.file, str(one.size), digest, one.identifier, enclosed, one.fetch_from)
        lines.append("\t".join((cell or "").replace("\t", " ").replace("\n", " ") for cell in cells))
    return "\n".join(lines) + "\n"
