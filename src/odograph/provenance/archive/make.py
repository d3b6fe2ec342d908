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
from odograph.provenance.files import file_digest
from odograph.provenance.records import read_record
from odograph.provenance.root import digests_of, read_root

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
  which code. Digests are SHA-256.
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
    """An archive: where it is, its root, and what it holds."""

    path: Path
    root: str
    files: int
    bytes: int
    recordings: list[Recording]


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
    files, recordings = collect(folder, with_recordings=with_recordings)
    root = read_root(folder)
    records = [read_record(folder / row["file"]) for row in root["records"]]
    texts = {
        "README.md": _readme(name, root["root"], recordings, recordings_at),
        "METHODS.md": statement,
        "recordings.tsv": _recordings_table(recordings, recordings_at),
    }
    facts = {
        path: (source.stat().st_size, (digest or "").removeprefix("sha256:"))
        for (path, source), digest in zip(files.items(), digests_of(files.values()), strict=True)
    }
    with tempfile.TemporaryDirectory(dir=target.parent, prefix=f".{target.name}.") as scratch:
        facts |= {path: _facts(Path(scratch) / "text", text) for path, text in texts.items()}
        engine = metadata.version("snakemake")
        texts[METADATA] = crate_text(name, facts, records, parameters, recordings, root, engine)
        # In a zip file the folder is named after the root: its bytes do not depend on the file's name.
        name_of_bag = f"odograph-{root['root'][5:17]}" if target.suffix == ".zip" else target.name
        bag = Path(scratch) / name_of_bag
        info = {
            "Bag-Software-Agent": f"odograph {metadata.version('odograph')}",
            "Bagging-Date": max(record["run"]["ended"] for record in records)[:10],
            "External-Description": f"Results of the study {name}",
            "External-Identifier": root["root"],
        }
        write_bag(bag, files, texts, info)
        held = [path for path in bag.rglob("*") if path.is_file()]
        made = Made(target, root["root"], len(held), total_size(held), recordings)
        if target.suffix == ".zip":
            zip_bag(bag, Path(scratch) / "whole.zip")
            (Path(scratch) / "whole.zip").replace(target)
        else:
            shutil.move(bag, target)
    return made


def _facts(scratch: Path, text: str) -> tuple[int, str]:
    scratch.write_text(text, encoding="utf-8")
    return scratch.stat().st_size, file_digest(scratch).removeprefix("sha256:")


def _readme(name: str, root: str, recordings: list[Recording], recordings_at: str | None) -> str:
    if recordings and all(one.source for one in recordings):
        enclosed = "They are enclosed, at the places that `config/sessions.tsv` says."
    elif recordings_at:
        enclosed = f"They are not enclosed; fetch them from {recordings_at}"
    else:
        enclosed = "They are not enclosed; the digests tell whether what you get is the same."
    version = metadata.version("odograph")
    return _README.format(name=name, version=version, root=root, enclosed=enclosed)


def _recordings_table(recordings: list[Recording], recordings_at: str | None) -> str:
    lines = ["session\tfile\tbytes\tsha256\tidentifier\tenclosed\tfetch_from"]
    for one in recordings:
        place = (
            "" if one.source or not recordings_at else f"{recordings_at.rstrip('/')}/{Path(one.file).name}"
        )
        digest, enclosed = one.digest.removeprefix("sha256:"), "yes" if one.source else "no"
        cells = (one.session, one.file, str(one.size), digest, one.identifier or "", enclosed, place)
        lines.append("\t".join(cell.replace("\t", " ") for cell in cells))
    return "\n".join(lines) + "\n"
