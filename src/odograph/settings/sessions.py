"""Read and check the sessions table."""

from __future__ import annotations

import csv
import io
import re
from dataclasses import dataclass, field
from pathlib import Path

from odograph.errors import InputError, printable
from odograph.settings.addresses import (
    address_fault,
    is_address,
    looks_like_address,
    same_address,
    without_secrets,
)
from odograph.settings.fields import setting_facts
from odograph.settings.problems import nearest

REQUIRED_COLUMNS = ("session", "nwb")
OPTIONAL_COLUMNS = ("animal", "group")
#: A name is also that of a folder and a word of a command: it holds no slash and begins with no dash.
SESSION_PATTERN = r"^[A-Za-z0-9_][A-Za-z0-9_-]*$"


@dataclass(frozen=True)
class SessionRow:
    """One session of the study.

    Parameters
    ----------
    session : str
        Its name; the name of its folder in the results.
    nwb : str
        Path of its NWB file, as written in the table (relative to the folder the workflow is run in), or its
        address (s3://, https:// or http://), which holds no credentials.
    animal, group : str or None
        None where the table does not say: the animal is then the subject named in the file.
    overrides : dict of str to str
        The session's own settings by dotted path, as text; blank cells are left out.
    line : int
        Line of the table.
    """

    session: str
    nwb: str
    animal: str | None = None
    group: str | None = None
    overrides: dict[str, str] = field(default_factory=dict)
    line: int = 0


def read_sessions(path: str | Path) -> list[SessionRow]:
    """Read the sessions table.

    Whether the NWB files exist is not looked at: a missing file is a failed session, not a failed table.

    Parameters
    ----------
    path : str or Path
        A tab-separated table with a header. Blank lines and lines that begin with `#` do not count.

    Returns
    -------
    list of SessionRow
        Sorted by session, so that the order of the table does not matter.

    Raises
    ------
    InputError
        The table is missing, empty or not tab-separated; a column is unknown, missing or there twice; a row
        has too many or too few cells; a session or a file is there twice; a name has characters that cannot
        stand in a folder's name; an address cannot be fetched from, or has credentials in it.
    """
    path = Path(path)
    lines = _lines(path)
    header_line, header = lines[0]
    columns = [name.strip() for name in header]
    _check_columns(columns, header_line, path)
    rows = [_row(columns, cells, line, path) for line, cells in lines[1:]]
    if not rows:
        raise InputError(
            "the table has no sessions",
            file=str(path),
            expected="one line for every session below the header",
            remedy="add a line: the session's name, a tab, the path of its NWB file",
        )
    _check_unique(rows, path)
    return sorted(rows, key=lambda row: row.session)


def session_setting_columns() -> tuple[str, ...]:
    """The settings that may be columns of the table."""
    return tuple(facts.path for facts in setting_facts() if facts.per_session)


def _lines(path: Path) -> list[tuple[int, list[str]]]:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise InputError(
            "there is no such file",
            file=str(path),
            expected="the table of the sessions",
            remedy="make it, or set study.sessions_table in the configuration to its place",
        ) from None
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"the file cannot be read ({error})",
            file=str(path),
            expected="a tab-separated text file in UTF-8",
            remedy="save it again as tab-separated text in UTF-8",
        ) from error
    reader = csv.reader(io.StringIO(text), delimiter="\t")
    try:
        lines = [
            (reader.line_num, cells)
            for cells in reader
            if any(cell.strip() for cell in cells) and not cells[0].lstrip().startswith("#")
        ]
    except csv.Error as error:
        raise InputError(
            f"the table cannot be divided into cells ({error})",
            file=str(path),
            place=f"line {reader.line_num}",
            expected="a tab between two columns, one line for every session",
            remedy='look for a quotation mark (") that is not closed',
        ) from error
    if not lines:
        raise InputError(
            "the table is empty",
            file=str(path),
            expected="a header with the columns session and nwb, then one line for every session",
            remedy="write the header: session, a tab, nwb",
        )
    return lines


def _check_columns(columns: list[str], line: int, path: Path) -> None:
    known = (*REQUIRED_COLUMNS, *OPTIONAL_COLUMNS, *session_setting_columns())
    expected = "the columns session and nwb; also animal, group, and settings such as behaviour.max_gap_s"
    place = f"line {line}"
    if len(columns) == 1 and re.search(r"[,;]", columns[0]):
        raise InputError(
            "columns that are not separated by tabs",
            file=str(path),
            place=place,
            expected="a tab between two columns",
            remedy="save the table as tab-separated text",
        )
    for number, column in enumerate(columns, 1):
        if column in known:
            continue
        close = nearest(column, known)
        remedy = f"the nearest column is {close}; write it in its place" if close else "remove the column"
        if column.split(".")[0] in ("study", "population", "figures"):
            remedy = "set it in the configuration: it holds for the whole study"
        raise InputError(
            f"unknown column {without_secrets(column)!r}" if column else f"column {number} has no name",
            file=str(path),
            place=place,
            expected=expected,
            remedy=remedy,
        )
    for column in columns:
        if columns.count(column) > 1:
            raise InputError(
                f"the column {column} is there twice",
                file=str(path),
                place=place,
                expected="every column once",
                remedy="remove one of the two",
            )
    for column in REQUIRED_COLUMNS:
        if column not in columns:
            raise InputError(
                f"the column {column} is missing",
                file=str(path),
                place=place,
                expected=expected,
                remedy=f"add the column {column}",
            )


def _row(columns: list[str], cells: list[str], line: int, path: Path) -> SessionRow:
    cells = [cell.strip() for cell in cells]
    # Trailing tabs are what spreadsheets leave behind; they carry nothing.
    while len(cells) > len(columns) and not cells[-1]:
        cells.pop()
    if len(cells) > len(columns) or len(cells) < len(REQUIRED_COLUMNS):
        raise InputError(
            f"{len(cells)} cells",
            file=str(path),
            place=f"line {line}",
            expected=f"{len(columns)} cells, one for every column, with a tab between two",
            remedy="look for a tab that is missing or too many",
        )
    cells += [""] * (len(columns) - len(cells))
    values = dict(zip(columns, cells, strict=True))
    if not re.fullmatch(SESSION_PATTERN, values["session"]):
        raise InputError(
            f"the session name {without_secrets(values['session'])!r}"
            if values["session"]
            else "no session name",
            file=str(path),
            place=f"line {line}, column session",
            expected="letters A to Z, digits, _ and - only, and no - at the beginning",
            remedy=f"write {_safe_name(without_secrets(values['session']))}"
            if values["session"]
            else "give it a name",
        )
    if not values["nwb"]:
        raise InputError(
            f"session {values['session']} has no file",
            file=str(path),
            place=f"line {line}, column nwb",
            expected="the path of its NWB file",
            remedy="write the path, or remove the line",
        )
    for column, text in values.items():
        if printable(text) != text:
            raise InputError(
                f"characters that cannot be seen: {printable(without_secrets(text))}",
                file=str(path),
                place=f"line {line}, column {column}",
                expected="a name or a path in plain characters",
                remedy="type the cell again",
            )
    fault = address_fault(values["nwb"]) if looks_like_address(values["nwb"]) else None
    if fault is not None:
        raise InputError(
            fault[0],
            file=str(path),
            place=f"line {line}, column nwb",
            expected="a path, or an address such as s3://bucket/recording.nwb without any credentials",
            remedy=fault[1],
        )
    return SessionRow(
        session=values["session"],
        nwb=values["nwb"],
        animal=values.get("animal") or None,
        group=values.get("group") or None,
        overrides={name: text for name, text in values.items() if "." in name and text},
        line=line,
    )


def _check_unique(rows: list[SessionRow], path: Path) -> None:
    sessions: dict[str, SessionRow] = {}
    files: dict[str, SessionRow] = {}
    for row in rows:
        # Some disks do not tell upper from lower case, and the name becomes a folder.
        other = sessions.setdefault(row.session.lower(), row)
        if other is not row:
            raise InputError(
                f"the session {row.session} is there twice (first in line {other.line})",
                file=str(path),
                place=f"line {row.line}, column session",
                expected="a name of its own for every session, differing in more than upper and lower case",
                remedy="rename one of the two, or remove its line",
            )
        file = same_address(row.nwb) if is_address(row.nwb) else str(Path(row.nwb))
        other = files.setdefault(file, row)
        if other is not row:
            raise InputError(
                f"the file {row.nwb} is already that of session {other.session} (line {other.line})",
                file=str(path),
                place=f"line {row.line}, column nwb",
                expected="a file of its own for every session: its units would be counted twice",
                remedy="correct the path, or remove one of the two lines",
            )


def _safe_name(name: str) -> str:
    return re.sub(r"^-|[^A-Za-z0-9_-]+", "_", name.strip()) or "session"
