"""What stays at home: host names and places of this machine are left out of what an archive copies.

Records are archived as they are but for the host of their run, which is dropped. The sessions table names
every recording by its place in the archive. Neither has a part in a record's identifier or in the run root,
so both stay what they were; the archived root lists the digests of the archived files.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from odograph.provenance.canonical import digest_value, readable_json


def archived_record(record: Mapping[str, Any]) -> dict[str, Any]:
    """A record as archives hold it: without the host of its run."""
    run = {key: value for key, value in record["run"].items() if key != "host"}
    return dict(record) | {"run": run}


def archived_root(
    root: Mapping[str, Any], digests: Mapping[str, str], places: Mapping[tuple[str, str], str]
) -> str:
    """The run root's file as archives hold it; the root itself stays the same.

    Parameters
    ----------
    root : dict
        The document of the study's run root.
    digests : mapping of str to str
        Digests of the archived records and of the user's files, by path.
    places : mapping of (str, str) to str
        Where the archive puts each recording, by its session and the file that the root names.
    """
    document = {key: value for key, value in root.items() if key != "own_digest"}
    for part in ("records", "user_files"):
        document[part] = [row | {"digest": digests.get(row["file"], row["digest"])} for row in root[part]]
    document["recordings"] = [
        row | {"file": places[row["session"], row["file"]]} for row in root["recordings"]
    ]
    return readable_json(document | {"own_digest": digest_value(document)})


def archived_sessions(text: str, places: Mapping[str, str]) -> str:
    """The sessions table with the place of every recording in the archive.

    Parameters
    ----------
    text : str
        The table.
    places : mapping of str to str
        The place by session; the text comes back as it is when it says these places already.
    """
    lines = list(csv.reader(io.StringIO(text.removeprefix("\ufeff")), delimiter="\t"))
    columns: list[str] | None = None
    changed = False
    for cells in lines:
        if not any(cell.strip() for cell in cells) or cells[0].lstrip().startswith("#"):
            continue
        if columns is None:
            columns = [cell.strip() for cell in cells]
            continue
        at = columns.index("nwb")
        place = places.get(cells[columns.index("session")].strip(), cells[at].strip())
        changed = changed or place != cells[at].strip()
        cells[at] = place
    if not changed:
        return text
    written = io.StringIO()
    csv.writer(written, delimiter="\t", lineterminator="\n").writerows(lines)
    return written.getvalue()


def files_that_name(texts: Mapping[str, str], folders: Iterable[Path]) -> list[tuple[str, str]]:
    """Texts that hold the path of a folder of this machine: pairs of the text's name and the path."""
    words = sorted({str(folder) for folder in folders if len(folder.parts) > 1})
    return [
        (name, word)
        for name, text in sorted(texts.items())
        for word in words
        if re.search(rf"(?<![\w.-]){re.escape(word)}(?![\w.-])", text)
    ]
