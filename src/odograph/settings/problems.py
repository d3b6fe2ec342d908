"""What is wrong with a configuration, in words that let it be mended by pasting a line."""

from __future__ import annotations

import difflib
import json
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import yaml
from pydantic import ValidationError

from odograph.errors import SettingsError
from odograph.settings.all import STAGES
from odograph.settings.fields import expected_at, facts_by_path, schema_at

Path = tuple[str | int, ...]


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong: where in the configuration, what was found, what was expected, the remedy."""

    path: Path
    found: str
    expected: str | None
    remedy: str | None


def raise_problems(problems: Sequence[Problem], *, file: str | None, lines: Mapping[Path, int]) -> None:
    """Raise one SettingsError that tells all the problems; return when there are none.

    Parameters
    ----------
    problems : sequence of Problem
    file : str or None
        The file the settings came from.
    lines : mapping of path to int
        Line of every key in that file, as far as known.

    Raises
    ------
    SettingsError
    """
    if not problems:
        return
    if len(problems) == 1:
        only = problems[0]
        raise SettingsError(
            only.found,
            file=file,
            place=_place(only.path, lines),
            expected=only.expected,
            remedy=only.remedy,
        )
    parts = []
    for number, problem in enumerate(problems, 1):
        told = SettingsError(
            problem.found,
            place=_place(problem.path, lines),
            expected=problem.expected,
            remedy=problem.remedy,
        ).message()
        parts.append(f"{number}. " + told.replace("\n", "\n   "))
    raise SettingsError(f"{len(problems)} settings cannot be used\n" + "\n".join(parts), file=file)


def problems_of_shape(config: Mapping[str, Any]) -> list[Problem]:
    """Find unknown sections and keys, each with the nearest valid one and a line to paste."""
    return list(_unknown_keys(config))


def known_part(config: Mapping[str, Any]) -> dict[str, dict[str, Any]]:
    """The sections and keys of a configuration that exist; an empty section counts as one without keys."""
    known = facts_by_path()
    return {
        section: {key: value for key, value in (content or {}).items() if f"{section}.{key}" in known}
        for section, content in config.items()
        if section in STAGES and isinstance(content, Mapping | None)
    }


def problems_of_values(error: ValidationError, config: Mapping[str, Any]) -> list[Problem]:
    """Put pydantic's complaints into words; those about one place become one problem."""
    by_path: dict[Path, list[Mapping[str, Any]]] = {}
    for complaint in error.errors(include_url=False, include_context=False):
        path = _existing_part(complaint["loc"], config)
        by_path.setdefault(path, []).append(complaint)
    return [_value_problem(path, complaints, config) for path, complaints in by_path.items()]


def problems_of_numbers(config: Mapping[str, Any], accepted: Mapping[str, Any]) -> list[Problem]:
    """Find values that would be read as something else than written (yes as 1), nan and infinity."""
    problems = []
    for path, value in _leaves(config):
        mistaken = isinstance(value, bool | int | float) and (
            isinstance(value, bool) != isinstance(_get(accepted, path), bool)
        )
        endless = isinstance(value, float) and not math.isfinite(value)
        if mistaken or endless:
            problems.append(_value_problem(path, [], config))
    return problems


def nearest(word: str, choices: Sequence[str]) -> str | None:
    """The choice that a misspelt word most likely meant, or None when nothing is near."""
    lowered = {choice.lower(): choice for choice in choices}
    close = difflib.get_close_matches(word.lower(), list(lowered), n=1, cutoff=0.6)
    if close:
        return lowered[close[0]]
    # A key without its unit ("max_gap" for "max_gap_s") or a part of it is a near miss too.
    parts = [choice for choice in choices if word and (word.lower() in choice.lower())]
    return parts[0] if len(parts) == 1 else None


def yaml_inline(value: Any) -> str:
    """A value as one line of YAML."""
    text = yaml.safe_dump(
        value, default_flow_style=True, width=math.inf, allow_unicode=True, sort_keys=False
    ).removesuffix("\n")
    return text.removesuffix("\n...")


def _unknown_keys(config: Mapping[str, Any]) -> Iterator[Problem]:
    for section, content in config.items():
        if section not in STAGES:
            yield _unknown_section(section, content)
            continue
        if content is None:
            continue
        if not isinstance(content, Mapping):
            yield Problem(
                (section,),
                f"{_show(content)} where a section belongs",
                "settings, one a line",
                f"write the settings of {section} below it, each indented by two spaces",
            )
            continue
        known = [path.split(".")[1] for path in facts_by_path() if path.startswith(f"{section}.")]
        for key, value in content.items():
            if key not in known:
                yield _unknown_key(section, str(key), value, known)


def _unknown_section(section: Any, content: Any) -> Problem:
    name = str(section)
    owner = _sections_of(name)
    expected = "one of the sections " + ", ".join(STAGES)
    if owner:
        remedy = f"it belongs to {owner[0]}; paste\n{owner[0]}:\n  {name}: {yaml_inline(content)}"
        return Problem((section,), f"the setting {name} stands outside its section", expected, remedy)
    close = nearest(name, STAGES)
    remedy = f"the nearest section is {close}; paste\n{close}:" if close else "remove it"
    return Problem((section,), f"unknown section {name}", expected, remedy)


def _unknown_key(section: str, key: str, value: Any, known: Sequence[str]) -> Problem:
    path = (section, key)
    found = f"unknown setting {key}"
    elsewhere = _sections_of(key)
    close = nearest(key, known)
    if elsewhere:
        remedy = f"it belongs to {elsewhere[0]}; paste\n{elsewhere[0]}:\n  {key}: {yaml_inline(value)}"
    elif close:
        remedy = f"the nearest setting is {close}; paste\n{section}:\n  {close}: {yaml_inline(value)}"
    else:
        remedy = "remove it, or choose one of the settings above"
    return Problem(path, found, f"one of the settings of {section}: {', '.join(known)}", remedy)


def _sections_of(key: str) -> list[str]:
    return sorted({path.split(".")[0] for path in facts_by_path() if path.split(".")[1] == key})


def _value_problem(path: Path, complaints: Sequence[Mapping[str, Any]], config: Mapping[str, Any]) -> Problem:
    kinds = {complaint["type"] for complaint in complaints}
    if "extra_forbidden" in kinds:
        return _unknown_inner_key(path, config)
    words = "; ".join(
        dict.fromkeys(str(complaint["msg"]).removeprefix("Value error, ") for complaint in complaints)
    )
    missing = [str(complaint["loc"][-1]) for complaint in complaints if complaint["type"] == "missing"]
    if missing:
        names = ", ".join(missing)
        return Problem(path, f"without {names}", expected_at(path), f"add {names}")
    if kinds == {"value_error"} and len(path) == 1:
        return Problem(path, words, "settings that agree with each other", "correct one of those it names")
    if kinds == {"value_error"}:
        return Problem(path, words, expected_at(path), _remedy(path, _get(config, path)))
    value = _get(config, path)
    return Problem(path, f"the value {_show(value)}", expected_at(path) or words, _remedy(path, value))


def _unknown_inner_key(path: Path, config: Mapping[str, Any]) -> Problem:
    *above, key = path
    known = list((schema_at(tuple(above)) or {}).get("properties", {}))
    close = nearest(str(key), known)
    line = f"{close}: {yaml_inline(_get(config, path))}"
    remedy = f"the nearest is {close}; paste\n{line}" if close else "remove it"
    return Problem(path, f"unknown setting {key}", f"one of {', '.join(known)}", remedy)


def _remedy(path: Path, value: Any) -> str | None:
    """A line to paste: the nearest choice, the value as text, or the default."""
    entry = schema_at(path) or {}
    section, key = str(path[0]), str(path[-1])
    choices = [str(choice) for choice in _choices(entry)]
    if isinstance(value, str) and (choice := nearest(value, choices)):
        line, why = choice, f"the nearest value is {choice}; paste"
    elif entry.get("type") == "string" and isinstance(value, int | float):
        line, why = json.dumps(yaml_inline(value)), "put it between quotation marks"
    elif facts := facts_by_path().get(".".join(str(part) for part in path)):
        line, why = yaml_inline(facts.default), "paste the default, or a value of your own in its place"
    elif "default" in entry:
        line, why = yaml_inline(entry["default"]), "paste the default, or a value of your own in its place"
    elif len(path) > 1:
        return f"the comment above {section}.{path[1]} in config/config.yaml says what may stand here"
    else:
        return None
    if len(path) == 2:
        return f"{why}\n{section}:\n  {key}: {line}"
    return f"{why}\n- {line}" if isinstance(path[-1], int) else f"{why}\n{key}: {line}"


def _choices(entry: Mapping[str, Any]) -> list[Any]:
    options = entry.get("anyOf", [entry])
    return [choice for option in options for choice in option.get("enum", [])]


def _existing_part(place: Sequence[str | int], config: Mapping[str, Any]) -> Path:
    """The part of pydantic's place that exists in the configuration (it adds names of union members)."""
    here: Any = config
    path: list[str | int] = []
    for part in place:
        in_mapping = isinstance(here, Mapping) and part in here
        in_list = isinstance(here, list | tuple) and isinstance(part, int) and part < len(here)
        # Members of a union are no part of the configuration; the parts after them may be.
        if in_mapping or in_list:
            here = here[part]
            path.append(part)
    return tuple(path)


def _leaves(value: Any, above: Path = ()) -> Iterator[tuple[Path, Any]]:
    if isinstance(value, Mapping):
        for key, entry in value.items():
            yield from _leaves(entry, (*above, key))
    elif isinstance(value, list | tuple):
        for index, entry in enumerate(value):
            yield from _leaves(entry, (*above, index))
    else:
        yield above, value


def _get(value: Any, path: Path) -> Any:
    for part in path:
        try:
            value = value[part]
        except (KeyError, IndexError, TypeError):
            return None
    return value


def _show(value: Any) -> str:
    text = yaml_inline(value)
    return text if len(text) <= 120 else text[:117] + "..."


def _place(path: Path, lines: Mapping[Path, int]) -> str:
    dotted = ".".join(str(part) for part in path)
    known = [path[:length] for length in range(len(path), 0, -1) if path[:length] in lines]
    return f"line {lines[known[0]]}, {dotted}" if known else dotted
