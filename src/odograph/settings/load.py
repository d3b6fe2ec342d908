"""Read and check the configuration and the sessions table: the two files a user edits."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import yaml
from pydantic import ValidationError

from odograph.errors import SettingsError
from odograph.settings.all import STAGES, Settings
from odograph.settings.fields import facts_by_path, setting_facts, value_at
from odograph.settings.problems import (
    known_part,
    problems_of_numbers,
    problems_of_shape,
    problems_of_values,
    raise_problems,
    yaml_inline,
)
from odograph.settings.sessions import SessionRow as SessionRow
from odograph.settings.sessions import read_sessions as read_sessions

_DEEPEST = 50
_MOST_ENTRIES = 100_000


def load_settings(config: Mapping[str, Any] | str | Path, *, file: str | Path | None = None) -> Settings:
    """Check a configuration and fill in the defaults.

    Parameters
    ----------
    config : mapping, str or Path
        A configuration that was parsed already, or the path of a YAML file.
    file : str or Path, optional
        The file that a parsed configuration came from. It is used to name the line of a fault.

    Returns
    -------
    Settings

    Raises
    ------
    SettingsError
        The file is missing or not YAML; a section or key is unknown or given twice; a value is out of range.
        The message names the line, the nearest valid key and a corrected line to paste.
    """
    lines: dict[tuple[str | int, ...], int] = {}
    if isinstance(config, str | Path):
        file = config
        config = _parse(Path(config))
    if file is not None and Path(file).is_file():
        lines = key_lines(Path(file))
    name = str(file) if file is not None else None
    problems = problems_of_shape(config)
    known = known_part(config)
    try:
        settings = Settings.model_validate(known)
        problems += problems_of_numbers(known, settings.model_dump(mode="python"))
    except ValidationError as error:
        problems += problems_of_values(error, known)
        settings = Settings()
    raise_problems(problems, file=name, lines=lines)
    return settings


def resolve_session(
    settings: Settings,
    overrides: Mapping[str, str],
    *,
    session: str | None = None,
    file: str | Path | None = None,
) -> Settings:
    """Apply one session's own settings to those of the study.

    Parameters
    ----------
    settings : Settings
        The study's settings.
    overrides : mapping of str to str
        Text of the session's cells by column (`behaviour.max_gap_s`), as `SessionRow.overrides` has them.
        The text is read as YAML (`0.5`, `null`, `[png, svg]`); a blank cell keeps the study's value.
    session, file : optional
        Named in errors.

    Returns
    -------
    Settings

    Raises
    ------
    SettingsError
        A value is not allowed.
    """
    known = facts_by_path()
    config = settings.model_dump(mode="json")
    for column in sorted(overrides):
        text = overrides[column].strip()
        if not text:
            continue
        facts = known.get(column)
        where = ", ".join(part for part in (f"session {session}" if session else "", column) if part)
        if facts is None or not facts.per_session:
            raise SettingsError(
                f"{column} cannot be set for one session",
                file=_text(file),
                place=where,
                expected="a setting of one of the sections intake, sync, behaviour, encoding",
                remedy="set it in the configuration for the whole study, or correct the column's name",
            )
        if not _try_values(config, column, _readings(text)):
            unit = f" (unit {facts.unit})" if facts.unit else ""
            raise SettingsError(
                f"the value {text}",
                file=_text(file),
                place=where,
                expected=facts.expected + unit,
                remedy=f"correct the cell, or leave it blank to keep the study's value "
                f"({yaml_inline(value_at(settings, column))})",
            )
    try:
        return Settings.model_validate(config)
    except ValidationError as error:
        words = "; ".join(one["msg"].removeprefix("Value error, ") for one in error.errors())
        raise SettingsError(
            words,
            file=_text(file),
            place=f"session {session}" if session else None,
            expected="settings of the session that agree with each other and with those of the study",
            remedy="correct the session's columns: " + ", ".join(sorted(overrides)),
        ) from error


def changed_from_default(settings: Settings) -> dict[str, dict[str, Any]]:
    """The settings that differ from their defaults.

    Returns
    -------
    dict
        By dotted path, in the order of the configuration: `value`, `default` (plain JSON values), `unit`
        and `description`.
    """
    return {
        row["path"]: {key: row[key] for key in ("value", "default", "unit", "description")}
        for row in settings_table(settings)
        if row["changed"]
    }


def settings_table(settings: Settings) -> list[dict[str, Any]]:
    """All settings as rows: `path`, `value`, `default`, `changed`, `unit`, `expected`, `description`."""
    values = settings.model_dump(mode="json")
    rows = []
    for facts in setting_facts():
        value = value_at(values, facts.path)
        rows.append(
            {
                "path": facts.path,
                "value": value,
                "default": facts.default,
                "changed": value != facts.default,
                "unit": facts.unit,
                "expected": facts.expected,
                "description": facts.description,
            }
        )
    return rows


def key_lines(path: Path) -> dict[tuple[str | int, ...], int]:
    """The line of every key in a YAML file, by the path of the key.

    Raises
    ------
    SettingsError
        The file is not YAML, or a key is given twice.
    """
    lines: dict[tuple[str | int, ...], int] = {}
    try:
        node = yaml.compose(_read_text(path), Loader=yaml.SafeLoader)
    except (yaml.YAMLError, ValueError, RecursionError) as error:
        raise _not_yaml(error, path) from error
    if node is not None:
        _collect_lines(node, (), lines, path)
    return lines


def _collect_lines(
    node: yaml.Node, above: tuple[str | int, ...], lines: dict[tuple[str | int, ...], int], path: Path
) -> None:
    # An alias may stand for what holds it, or ten aliases for ten aliases each, and so on.
    if len(above) > _DEEPEST or len(lines) > _MOST_ENTRIES:
        raise SettingsError(
            f"entries within entries more than {_DEEPEST} deep"
            if len(above) > _DEEPEST
            else f"more than {_MOST_ENTRIES:,} entries",
            file=str(path),
            place=f"line {node.start_mark.line + 1}",
            expected="sections with settings",
            remedy="write the values out in place of YAML aliases (`*name`)",
        )
    if isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            place = (*above, str(key.value))
            line = key.start_mark.line + 1
            if place in lines:
                raise SettingsError(
                    f"the key {key.value} is given twice (first in line {lines[place]})",
                    file=str(path),
                    place=f"line {line}, {'.'.join(str(part) for part in place)}",
                    expected="every key once",
                    remedy="remove one of the two lines",
                )
            lines[place] = line
            _collect_lines(value, place, lines, path)
    elif isinstance(node, yaml.SequenceNode):
        for index, value in enumerate(node.value):
            lines[(*above, index)] = value.start_mark.line + 1
            _collect_lines(value, (*above, index), lines, path)


def _parse(path: Path) -> Mapping[str, Any]:
    text = _read_text(path)
    try:
        config = yaml.safe_load(text)
    except (yaml.YAMLError, ValueError, RecursionError, OverflowError) as error:
        # Dates and numbers that cannot be are found by Python, not by the parser.
        raise _not_yaml(error, path) from error
    if config is None:
        return {}
    if not isinstance(config, Mapping):
        raise SettingsError(
            f"a {type(config).__name__} at the top of the file",
            file=str(path),
            expected="the sections " + ", ".join(STAGES),
            remedy="start from the config/config.yaml that comes with odograph",
        )
    return config


def _read_text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise SettingsError(
            "there is no such file",
            file=str(path),
            expected="a configuration in YAML",
            remedy="run in the folder that holds config/config.yaml, or name the file with --configfile",
        ) from None
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsError(
            f"the file cannot be read ({error})",
            file=str(path),
            expected="a text file in UTF-8",
            remedy="save it again as UTF-8 text",
        ) from error


def _not_yaml(error: Exception, path: Path) -> SettingsError:
    mark = getattr(error, "problem_mark", None)
    place = f"line {mark.line + 1}, column {mark.column + 1}" if mark else None
    return SettingsError(
        f"not valid YAML: {getattr(error, 'problem', None) or error}",
        file=str(path),
        place=place,
        expected="one setting a line, indented by two spaces under its section",
        remedy="look at the indentation, the colon and the quotation marks of this line and the one before",
    )


def _readings(text: str) -> list[Any]:
    """The ways a cell may be meant: as YAML, and as plain text (a name such as 007 or no)."""
    try:
        return [yaml.safe_load(text), text]
    except yaml.YAMLError:
        return [text]


def _try_values(config: dict[str, Any], column: str, readings: list[Any]) -> bool:
    """Put the first reading that the setting allows into `config`; say whether there was one."""
    *sections, key = column.split(".")
    target = config
    for section in sections:
        target = target[section]
    for value in readings:
        target[key] = value
        try:
            accepted = Settings.model_validate(config).model_dump(mode="python")
        except ValidationError as error:
            # Settings that contradict each other are told once all columns are in.
            if any(complaint["loc"][:2] == (*sections, key) for complaint in error.errors()):
                continue
            return True
        if not problems_of_numbers(config, accepted):
            return True
    return False


def _text(file: str | Path | None) -> str | None:
    return str(file) if file is not None else None
