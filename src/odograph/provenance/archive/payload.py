"""What goes into an archive: the results with their records, the settings, the workflow and the library.

The payload has the layout of a study's folder, so that `verify` and `snakemake` work in it as they do there.
Only what the run root and its records name is taken from the results; the store of fits and the plan stay
behind, as both are made again.
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import odograph
from odograph.errors import InputError
from odograph.provenance.files import read_json
from odograph.provenance.root import ROOT, read_root

CODE_FILES = ("Snakefile", "pyproject.toml", "constraints.txt", "environment.yml", "LICENSE", "CITATION.cff")
CODE_FOLDERS = ("workflow", "src/odograph")
DOCUMENTS = ("README.md", "DEVELOPERS.md")
_NOT_CODE = {"__pycache__", ".ipynb_checkpoints"}
_COMPILED = (".pyc", ".nbi", ".nbc")


@dataclass(frozen=True)
class Recording:
    """A recording that the results came from.

    Parameters
    ----------
    session, file, digest : str
        `file` is its path in the study's folder, or its name when it lies elsewhere.
    size : int
        Bytes.
    identifier : str or None
        The identifier inside the NWB file.
    source : Path or None
        Where it lies, when it goes into the archive.
    """

    session: str
    file: str
    digest: str
    size: int
    identifier: str | None
    source: Path | None


def collect(folder: Path, *, with_recordings: bool) -> tuple[dict[str, Path], list[Recording]]:
    """Files of the payload, by their path in it, and the recordings, those taken along with their source.

    Parameters
    ----------
    folder : Path
        The study's folder.
    with_recordings : bool
        Whether recordings that lie in the study's folder are taken along.

    Raises
    ------
    InputError
        There are no finished results, the workflow is not beside the library, or a recording that should be
        taken along lies outside the study's folder.
    RecordError
        The run root was changed.
    """
    root = read_root(folder)
    files = {ROOT.as_posix(): folder / ROOT}
    for row in root["records"]:
        files[row["file"]] = folder / row["file"]
        for product in read_json(folder / row["file"])["products"]:
            files[product["path"]] = folder / product["path"]
    files |= {row["file"]: folder / row["file"] for row in root["user_files"]}
    files |= _code(folder)
    recordings = [_recording(folder, row, with_recordings) for row in root["recordings"]]
    files |= {one.file: one.source for one in recordings if one.source is not None}
    missing = sorted(path for path, source in files.items() if not source.is_file())
    if missing:
        raise InputError(
            f"{len(missing)} files are gone, among them {missing[0]}",
            file=str(folder),
            expected="a finished study",
            remedy="run snakemake again, then `odograph verify`",
        )
    return dict(sorted(files.items())), recordings


def _code(folder: Path) -> dict[str, Path]:
    """The workflow and the library, from where they are run: the study's folder, or a checkout beside it."""
    home = Path(odograph.__file__).parents[2]
    base = next((place for place in (folder, home) if (place / "workflow" / "rules").is_dir()), None)
    if base is None or not (home / "src" / "odograph").is_dir():
        raise InputError(
            "the workflow does not lie beside the installed package",
            file=str(home),
            expected="a checkout of odograph, installed with pip's option --editable",
            remedy="archive with the environment that `make env` builds",
        )
    files = {name: base / name for name in CODE_FILES if (base / name).is_file()}
    files |= {f"documentation/{name}": base / name for name in DOCUMENTS if (base / name).is_file()}
    for part in CODE_FOLDERS:
        top = (home if part.startswith("src") else base) / part
        for at, folders, names in os.walk(top):
            folders[:] = sorted(name for name in folders if name not in _NOT_CODE)
            for name in names:
                if not name.endswith(_COMPILED) and not name.startswith("."):
                    path = Path(at) / name
                    files[f"{part}/{path.relative_to(top).as_posix()}"] = path
    return files


def _recording(folder: Path, row: dict[str, Any], with_recordings: bool) -> Recording:
    path = Path(row["file"])
    source = folder / path if with_recordings else None
    if source is not None and (path.is_absolute() or ".." in path.parts or not source.is_file()):
        raise InputError(
            f"the recording {row['file']} does not lie in the study's folder",
            file=str(folder),
            expected="recordings below the study's folder, to take them along under the same paths",
            remedy="archive without --with-recordings: the archive then names them by digest",
        )
    inventory = folder / "results" / "sessions" / row["session"] / "intake" / "inventory.json"
    about = read_json(inventory).get("file") or {} if inventory.is_file() else {}
    return Recording(
        row["session"], row["file"], row["digest"], row["bytes"], about.get("identifier"), source
    )
