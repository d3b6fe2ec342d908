"""What goes into an archive: the results with their records, the settings, the workflow and the library.

The payload has the layout of a study's folder, so that `verify` and `snakemake` work in it as they do there.
Only what the run root and its records name is taken from the results; the store of fits and the plan stay
behind, as both are made again. Recordings that lie elsewhere get a place below `recordings/`.
"""

from __future__ import annotations

import os
import posixpath
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import odograph
from odograph.errors import InputError
from odograph.provenance.files import read_json
from odograph.provenance.layout import inventory
from odograph.provenance.places import local_place
from odograph.provenance.root import ROOT, read_root
from odograph.settings.addresses import is_address

CODE_FILES = (
    "Snakefile",
    "pyproject.toml",
    "constraints.txt",
    "environment.yml",
    "Makefile",
    "LICENSE",
    "CITATION.cff",
)
CODE_FOLDERS = ("workflow", "src/odograph")
DOCUMENTS = ("README.md", "DEVELOPERS.md")
RECORDINGS = "recordings"
_NOT_CODE = {"__pycache__"}
_COMPILED = (".pyc", ".nbi", ".nbc")


@dataclass(frozen=True)
class Recording:
    """A recording that the results came from, or a file that one links to.

    Parameters
    ----------
    session : str
    named : str
        The file as the run root names it.
    file : str
        Its place in the archive's payload, and in a study that is laid out from it.
    digest : str
    size : int
        Bytes.
    identifier : str or None
        The identifier inside the NWB file.
    source : Path or None
        Where it lies, when it goes into the archive.
    fetch_from : str or None
        Where it can be fetched, when that is known and it does not go into the archive.
    """

    session: str
    named: str
    file: str
    digest: str
    size: int
    identifier: str | None
    source: Path | None
    fetch_from: str | None = None

    @property
    def enclosed(self) -> bool:
        """Whether it goes into the archive."""
        return self.source is not None


def collect(
    folder: Path, *, with_recordings: bool, recordings_at: str | None = None
) -> tuple[dict[str, Path], list[Recording]]:
    """Files of the payload, by their path in it, and the recordings, those taken along with their source.

    Parameters
    ----------
    folder : Path
        The study's folder.
    with_recordings : bool
        Whether the recordings are taken along.
    recordings_at : str, optional
        Address of the folder where recordings can be fetched.

    Raises
    ------
    InputError
        There are no finished results, the workflow is not beside the library, a file of the study lies
        outside its folder, or a recording that should be taken along is not there.
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
    for path in files:
        if _leads_outside(path):
            raise InputError(
                "it lies outside the study's folder",
                file=path,
                expected="the study's own files below its folder",
                remedy="move it there (study.sessions_table says where the table is) and run snakemake again",
            )
    recordings = _recordings(folder, root, with_recordings, recordings_at)
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
            folders[:] = sorted(name for name in folders if name not in _NOT_CODE and name[0] != ".")
            for name in names:
                if not name.endswith(_COMPILED) and not name.startswith("."):
                    path = Path(at) / name
                    files[f"{part}/{path.relative_to(top).as_posix()}"] = path
    return files


def _leads_outside(path: str) -> bool:
    return posixpath.isabs(path) or posixpath.normpath(path).split("/")[0] == ".."


def _recordings(
    folder: Path, root: Mapping[str, Any], with_recordings: bool, recordings_at: str | None
) -> list[Recording]:
    """Every recording of the run root, with its place in the archive and, if wanted, its source."""
    now = _places_now(folder, root)
    taken: set[str] = set()
    beside: dict[str, str] = {}
    found = []
    for row in root["recordings"]:
        session, named = row["session"], row["file"]
        own = local_place(named if row["linked"] else now.get(session, named))
        address = None
        if is_address(named):
            source, address = folder / own, named
            place = _place_of_its_own(f"../{posixpath.basename(own)}", session, taken)
        elif not _leads_outside(named) and posixpath.dirname(named):
            source, place = folder / named, posixpath.normpath(named)
        elif row["linked"]:
            # A file that is linked to is told by its name only: it lies beside the recording.
            home = folder if "/" in named else (folder / local_place(now.get(session, ""))).parent
            source = home / named
            place = posixpath.join(beside.get(session, RECORDINGS), posixpath.basename(named))
        else:
            source, place = folder / own, _place_of_its_own(own, session, taken)
        taken.add(place.casefold())
        if not row["linked"]:
            beside[session] = posixpath.dirname(place)
        if with_recordings and not source.is_file():
            raise InputError(
                f"the recording {named} of session {session} is not there",
                file=str(source),
                expected="every recording, to take them along",
                remedy="put it there, or archive without --with-recordings: it is then named by its digest",
            )
        identifier = None if row["linked"] else _identifier(folder, session)
        if recordings_at:
            address = f"{recordings_at.rstrip('/')}/{posixpath.basename(place)}"
        where = (source, None) if with_recordings else (None, address)
        found.append(Recording(session, named, place, row["digest"], row["bytes"], identifier, *where))
    return found


def _places_now(folder: Path, root: Mapping[str, Any]) -> dict[str, str]:
    """The recordings' files by session, as the sessions table says."""
    from odograph.settings.load import load_settings, read_sessions

    table = load_settings(folder / root["user_files"][0]["file"]).study.sessions_table
    return {row.session: row.nwb for row in read_sessions(folder / table)}


def _place_of_its_own(path: str, session: str, taken: Iterable[str]) -> str:
    """Below the study's folder a recording keeps its place; from elsewhere it goes to `recordings/`."""
    if not _leads_outside(path):
        return posixpath.normpath(path)
    place = f"{RECORDINGS}/{posixpath.basename(path)}"
    return f"{RECORDINGS}/{session}/{posixpath.basename(path)}" if place.casefold() in taken else place


def _identifier(folder: Path, session: str) -> str | None:
    path = folder / inventory(session)
    return (read_json(path).get("file") or {}).get("identifier") if path.is_file() else None
