"""Where each setting that a product read is written, and what stands there now."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from odograph.errors import OdographError

if TYPE_CHECKING:
    from odograph.settings.all import Settings
    from odograph.settings.sessions import SessionRow


def with_places(rows: list[dict[str, Any]], folder: Path) -> list[dict[str, Any]]:
    """Add to each setting its line in the user's files, its default, and its value there now.

    Parameters
    ----------
    rows : list of dict
        `setting`, `value` and `sessions` (None: the study's), as a trace gives them.
    folder : Path
        The study's folder, with config/config.yaml in it.

    Returns
    -------
    list of dict
        The same with `line` (FILE:LINE of the configuration, or of the sessions table where a session has a
        value of its own; None where neither can be read), `default` and `now`: the first value that now holds
        for one of the sessions and is another; else `value`, also where what holds now cannot be told.
    """
    from odograph.settings.all import Settings
    from odograph.settings.load import settings_table

    defaults = {row["path"]: row["default"] for row in settings_table(Settings())}
    lines, table, study, own = _written(folder)
    placed = []
    for row in rows:
        name, sessions = row["setting"], row["sessions"] or [None]
        places, values = [], []
        for session in sessions:
            if session is not None and own is None:
                continue
            overrides, line, resolved = (own or {}).get(session, ((), 0, study))
            places.append(f"{table}:{line}" if name in overrides else lines.get(name))
            values.append(_value(resolved, name, row["value"]))
        now = next((value for value in values if value != row["value"]), row["value"])
        told = ", ".join(dict.fromkeys(place for place in places if place)) or None
        placed.append(row | {"line": told, "default": defaults.get(name), "now": now})
    return placed


def _written(folder: Path) -> tuple[dict[str, str], str, dict | None, dict[str, tuple] | None]:
    """The configuration's places, the table's name, the study's values, what each session sets itself.

    Of a session: the names it sets, its line, all values that hold for it (None where a cell is not allowed).
    None for all sessions when the table cannot be read.
    """
    from odograph.settings.load import key_lines, load_settings, read_sessions

    config = folder / "config" / "config.yaml"
    try:
        settings = load_settings(config)
        lines = {f"{a}.{b}": f"config/{config.name}:{line}" for (a, b), line in _pairs(key_lines(config))}
    except OdographError:
        return {}, "", None, {}
    table, study = str(settings.study.sessions_table), settings.model_dump(mode="json")
    try:
        own = {row.session: _of_session(settings, row) for row in read_sessions(folder / table)}
    except OdographError:
        own = None
    return lines, table, study, own


def _of_session(settings: Settings, row: SessionRow) -> tuple[set[str], int, dict[str, Any] | None]:
    from odograph.settings.load import resolve_session

    names = {name for name, text in row.overrides.items() if text.strip()}
    try:
        return names, row.line, resolve_session(settings, row.overrides).model_dump(mode="json")
    except OdographError:
        return names, row.line, None


def _pairs(lines: dict[tuple, int]) -> list[tuple[tuple[str, str], int]]:
    return [(path, line) for path, line in lines.items() if len(path) == 2]


def _value(settings: dict[str, Any] | None, name: str, otherwise: Any) -> Any:
    stage, _, key = name.partition(".")
    return otherwise if settings is None else settings.get(stage, {}).get(key, otherwise)
