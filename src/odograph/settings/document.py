"""Write what is generated from the settings: the commented configuration, the schemas, the README's table.

`python -m odograph.settings.document` brings all of them up to date in the current folder and keeps the
values that config/config.yaml sets; with `--check` it writes nothing and ends with status 1 when one of them
is out of date.
"""

from __future__ import annotations

import argparse
import json
import sys
import textwrap
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from odograph.settings.all import SESSION_STAGES, STAGES, Settings
from odograph.settings.fields import (
    SettingFacts,
    as_sentence,
    expected_words,
    schema_at,
    setting_facts,
    value_at,
    whole_schema,
)
from odograph.settings.load import load_settings
from odograph.settings.problems import yaml_inline
from odograph.settings.sessions import SESSION_PATTERN

CONFIG_FILE = "config/config.yaml"
SETTINGS_SCHEMA_FILE = "workflow/schemas/settings.schema.json"
SESSIONS_SCHEMA_FILE = "workflow/schemas/sessions.schema.json"
README_FILE = "README.md"
TABLE_BEGIN = "<!-- settings that matter: made by python -m odograph.settings.document -->"
TABLE_END = "<!-- end of the settings -->"

# The settings that most studies look at first; all others are explained in the configuration itself.
MATTERS = (
    "study.sessions_table",
    "study.on_bad_session",
    "study.shard_minutes",
    "intake.position_place",
    "intake.front_point",
    "intake.back_point",
    "intake.length_unit",
    "intake.frame_pulses_place",
    "intake.arena_place",
    "intake.unit_filter",
    "sync.max_bend_ms",
    "behaviour.bin_s",
    "behaviour.max_speed_m_s",
    "behaviour.max_gap_s",
    "behaviour.min_speed_cm_s",
    "behaviour.min_valid_share",
    "encoding.terms",
    "encoding.minimum_spikes",
    "encoding.tests",
    "population.false_discovery_rate",
    "figures.formats",
)

_DIALECT = "https://json-schema.org/draft/2020-12/schema"
_COMMENT_WIDTH = 100
_HEADER = """\
# The settings of the study.
#
# Every setting is here with its meaning, the values it may have and its default; a line that is removed
# falls back to its default. A setting of the sections {stages} may also be given
# for one session alone: add a column with its full name, such as behaviour.max_gap_s, to the sessions table.
"""


def config_text(settings: Settings) -> str:
    """The commented configuration with the values of `settings`."""
    values = settings.model_dump(mode="json")
    blocks = [_wrapped_header()]
    section = None
    for facts in setting_facts():
        name, key = facts.path.split(".", 1)
        if name != section:
            section = name
            title = as_sentence(Settings.model_fields[name].description or "")
            blocks.append(f"\n# ---- {title}\n{name}:")
        comment = "\n".join(_comment_lines(facts))
        blocks.append(f"\n{comment}\n{_value_lines(key, value_at(values, facts.path))}")
    return "\n".join(blocks) + "\n"


def settings_schema() -> dict[str, Any]:
    """JSON schema of the configuration: unit, default and description of every key; no other key allowed."""
    schema = _tidy(whole_schema())
    for name in STAGES:
        # An absent section takes its defaults; validators fill them in only where the section itself has one.
        schema["properties"][name]["default"] = {}
    return {"$schema": _DIALECT, "title": "odograph settings", **schema}


def sessions_schema() -> dict[str, Any]:
    """JSON schema of one row of the sessions table."""
    properties: dict[str, Any] = {
        "session": {
            "description": "Name of the session and of its folder in the results.",
            "type": "string",
            "pattern": SESSION_PATTERN,
        },
        "nwb": {
            "description": "Path of its NWB file, relative to the folder the workflow is run in; or its "
            "address, s3://BUCKET/KEY or https://HOST/PATH, without credentials.",
            "type": "string",
            "minLength": 1,
        },
        "animal": {
            "description": "Animal; blank takes the subject named in the file.",
            "type": ["string", "null"],
        },
        "group": {
            "description": "Group the animal belongs to, if groups are compared.",
            "type": ["string", "null"],
        },
    }
    for facts in setting_facts():
        if facts.per_session:
            properties[facts.path] = {
                "description": f"This session's own value ({facts.expected}); blank keeps the study's. "
                f"{facts.description}",
            }
    return {
        "$schema": _DIALECT,
        "title": "one row of the odograph sessions table",
        "type": "object",
        "properties": properties,
        "required": ["session", "nwb"],
        "additionalProperties": False,
    }


def readme_table() -> str:
    """The README's table of the settings that matter most, as Markdown."""
    rows = ["| setting | default | unit | what it does |", "|---|---|---|---|"]
    for facts in setting_facts():
        if facts.path in MATTERS:
            cells = (
                f"`{facts.path}`",
                _default_cell(facts.default),
                facts.unit or "",
                _cell(facts.description),
            )
            rows.append(f"| {' | '.join(cells)} |")
    return "\n".join(rows)


def with_table(readme: str) -> str:
    """The README with its table of settings made anew between the two markers.

    Raises
    ------
    ValueError
        A marker is missing.
    """
    before, begin, rest = readme.partition(TABLE_BEGIN)
    _, end, after = rest.partition(TABLE_END)
    if not begin or not end:
        raise ValueError(f"{README_FILE} lacks one of the markers {TABLE_BEGIN!r} and {TABLE_END!r}")
    return f"{before}{begin}\n\n{readme_table()}\n\n{end}{after}"


def generated_files(folder: Path) -> dict[str, str]:
    """The text that every generated file should have, by its path in the repository."""
    config = folder / CONFIG_FILE
    settings = load_settings(config) if config.exists() else Settings()
    files = {
        CONFIG_FILE: config_text(settings),
        SETTINGS_SCHEMA_FILE: _json_text(settings_schema()),
        SESSIONS_SCHEMA_FILE: _json_text(sessions_schema()),
    }
    readme = folder / README_FILE
    if readme.exists():
        files[README_FILE] = with_table(readme.read_text(encoding="utf-8"))
    return files


def main(arguments: list[str] | None = None) -> int:
    """Write or check the generated files in the current folder."""
    parser = argparse.ArgumentParser(prog="python -m odograph.settings.document", description=__doc__)
    parser.add_argument(
        "--check", action="store_true", help="write nothing; status 1 when a file is out of date"
    )
    options = parser.parse_args(arguments)
    folder = Path.cwd()
    status = 0
    for name, text in generated_files(folder).items():
        path = folder / name
        current = path.exists() and path.read_text(encoding="utf-8") == text
        if options.check and not current:
            print(f"{name} is out of date; run python -m odograph.settings.document", file=sys.stderr)
            status = 1
        elif not current:
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text, encoding="utf-8")
            print(f"wrote {name}")
    return status


def _wrapped_header() -> str:
    return _HEADER.format(stages=", ".join(SESSION_STAGES)).rstrip("\n")


def _comment_lines(facts: SettingFacts) -> Iterator[str]:
    yield from _wrap(facts.description)
    unit = f"; unit {facts.unit}" if facts.unit else ""
    inner = _inner_entries(facts)
    if inner:
        yield from _wrap("A list; the keys of each entry:")
        for name, entry in inner.items():
            words = expected_words(whole_schema(), entry)
            inner_unit = f"; unit {entry['unit']}" if entry.get("unit") else ""
            yield from _wrap(
                f"{name}: {entry.get('description', '').rstrip('.')} ({words}{inner_unit})", indent="  "
            )
        return
    yield from _wrap(f"({facts.expected}{unit}; default {yaml_inline(facts.default)})")


def _inner_entries(facts: SettingFacts) -> Mapping[str, Any]:
    """The keys of the entries of a setting that is a list of mappings."""
    entry = schema_at((*facts.path.split("."), 0)) or {}
    return entry.get("properties", {})


def _wrap(text: str, indent: str = "") -> list[str]:
    return textwrap.wrap(
        text,
        width=_COMMENT_WIDTH,
        initial_indent=f"  # {indent}",
        subsequent_indent=f"  # {indent}" + ("  " if indent else ""),
        break_long_words=False,
        break_on_hyphens=False,
    )


def _value_lines(key: str, value: Any) -> str:
    if isinstance(value, list) and value and all(isinstance(entry, Mapping) for entry in value):
        entries = [f"    - {yaml_inline(entry)}" for entry in value]
        return "\n".join([f"  {key}:", *entries])
    return f"  {key}: {yaml_inline(value)}"


def _tidy(entry: Any) -> Any:
    """Drop what says nothing (generated titles, absent units) and make descriptions sentences."""
    if isinstance(entry, Mapping):
        tidied = {}
        for key, value in entry.items():
            if key == "title" and isinstance(value, str):
                continue
            if key == "unit" and value is None:
                continue
            is_text = key == "description" and isinstance(value, str)
            tidied[key] = as_sentence(" ".join(value.split())) if is_text else _tidy(value)
        return tidied
    return [_tidy(value) for value in entry] if isinstance(entry, list) else entry


def _json_text(value: Any) -> str:
    return json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _default_cell(default: Any) -> str:
    if isinstance(default, list) and all(isinstance(entry, Mapping) and "name" in entry for entry in default):
        return ", ".join(entry["name"] for entry in default) or "none"
    return _cell(f"`{yaml_inline(default)}`")


def _cell(text: str) -> str:
    return text.replace("|", "\\|")


if __name__ == "__main__":
    sys.exit(main())
