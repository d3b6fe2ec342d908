"""The settings as a list of facts: path, unit, default, allowed values, description."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from pydantic import BaseModel

from odograph.settings.all import SESSION_STAGES, Settings

_TYPE_WORDS = {
    "number": "a number",
    "integer": "a whole number",
    "boolean": "true or false",
    "string": "text",
    "array": "a list",
    "object": "a mapping",
    "null": "null",
}

# Patterns in words; a user should not have to read a regular expression.
_PATTERN_WORDS = {
    "^[a-z][a-z0-9_]*$": "of lower-case letters, digits and _, beginning with a letter",
}


@dataclass(frozen=True)
class SettingFacts:
    """One setting as a user meets it.

    Parameters
    ----------
    path : str
        Section and key, joined by dots (`behaviour.max_gap_s`).
    default : Any
        The default as plain JSON value.
    unit : str or None
        Unit of the value.
    description : str
        One line.
    expected : str
        The allowed values in words.
    per_session : bool
        Whether a column of the sessions table may set it for one session.
    """

    path: str
    default: Any
    unit: str | None
    description: str
    expected: str
    per_session: bool

    @property
    def key(self) -> str:
        """The last part of the path."""
        return self.path.rpartition(".")[2]


@cache
def setting_facts() -> tuple[SettingFacts, ...]:
    """The facts of all settings, in the order of the configuration."""
    schema = whole_schema()
    defaults = Settings().model_dump(mode="json")
    return tuple(_walk(schema, schema, defaults, ()))


@cache
def facts_by_path() -> dict[str, SettingFacts]:
    """The same facts by path."""
    return {facts.path: facts for facts in setting_facts()}


def _walk(
    root: Mapping[str, Any], schema: Mapping[str, Any], defaults: Mapping[str, Any], above: tuple[str, ...]
) -> Iterator[SettingFacts]:
    for name, entry in schema["properties"].items():
        parts = (*above, name)
        section = resolve_reference(root, entry)
        if "properties" in section:
            yield from _walk(root, section, defaults[name], parts)
            continue
        yield SettingFacts(
            path=".".join(parts),
            default=defaults[name],
            unit=entry.get("unit"),
            description=as_sentence(entry.get("description", "")),
            expected=expected_words(root, entry),
            per_session=parts[0] in SESSION_STAGES,
        )


@cache
def whole_schema() -> Mapping[str, Any]:
    """JSON schema of all settings as pydantic makes it."""
    return Settings.model_json_schema()


@cache
def schema_at(path: tuple[str | int, ...]) -> Mapping[str, Any] | None:
    """The JSON schema entry of a setting or of a part of one (`("encoding", "terms", 0, "kind")`)."""
    root = whole_schema()
    entry: Mapping[str, Any] = root
    for part in path:
        options = [resolve_reference(root, option) for option in entry.get("anyOf", [entry])]
        for option in options:
            if isinstance(part, int) and "items" in option:
                entry = resolve_reference(root, option["items"])
                break
            if part in option.get("properties", {}):
                # The entry's own words win over those of the model it refers to.
                inner = option["properties"][part]
                entry = {**resolve_reference(root, inner), **inner}
                break
        else:
            return None
    return entry


def expected_at(path: tuple[str | int, ...]) -> str | None:
    """The allowed values of a setting or of a part of one, in words, with the unit."""
    entry = schema_at(path)
    if entry is None:
        return None
    words = expected_words(whole_schema(), entry)
    return f"{words} (unit {entry['unit']})" if entry.get("unit") else words


def resolve_reference(root: Mapping[str, Any], entry: Mapping[str, Any]) -> Mapping[str, Any]:
    """Follow the `$ref` of a JSON schema entry, if it has one."""
    reference = entry.get("$ref")
    return root["$defs"][reference.rpartition("/")[2]] if reference else entry


def expected_words(root: Mapping[str, Any], entry: Mapping[str, Any]) -> str:
    """Say in words what values a JSON schema entry allows."""
    entry = resolve_reference(root, entry)
    if "anyOf" in entry:
        return " or ".join(expected_words(root, option) for option in entry["anyOf"])
    if "enum" in entry:
        return "one of " + ", ".join(str(choice) for choice in entry["enum"])
    if "const" in entry:
        return str(entry["const"])
    kind = entry.get("type", "")
    words = _TYPE_WORDS.get(kind, "any value")
    if kind == "array":
        words = _array_words(root, entry)
    if kind == "object" and "properties" in entry:
        words = "a mapping with the keys " + ", ".join(entry["properties"])
    if kind == "string" and entry.get("minLength"):
        words = "text that is not empty" if entry["minLength"] == 1 else words
    bounds = " and ".join(_bound_words(entry))
    return f"{words} {bounds}" if bounds else words


def _array_words(root: Mapping[str, Any], entry: Mapping[str, Any]) -> str:
    fewest, most = entry.get("minItems", 0), entry.get("maxItems")
    number = ""
    if fewest and fewest == most:
        number = f" of {fewest}"
    elif fewest and most:
        number = f" of {fewest} to {most}"
    elif fewest:
        number = f" of {fewest} or more"
    item = resolve_reference(root, entry.get("items", {}))
    words = expected_words(root, item)
    if item.get("type") in ("string", "number", "integer") and "enum" not in item:
        plain = {"string": "texts", "number": "numbers", "integer": "whole numbers"}[item["type"]]
        bounds = words.removeprefix(_TYPE_WORDS[item["type"]])
        return f"a list{number} {plain}{bounds}" if number else f"a list of {plain}{bounds}"
    return f"a list{number or ' of'} entries, each {words}"


def _bound_words(entry: Mapping[str, Any]) -> Iterator[str]:
    for key, sign in (
        ("minimum", ">="),
        ("exclusiveMinimum", ">"),
        ("maximum", "<="),
        ("exclusiveMaximum", "<"),
    ):
        if key in entry:
            yield f"{sign} {entry[key]:g}"
    if "pattern" in entry:
        yield _PATTERN_WORDS.get(entry["pattern"], f"of the form {entry['pattern']}")


def as_sentence(text: str) -> str:
    """A description with a capital letter and a full stop."""
    text = text.strip()
    return text[:1].upper() + text[1:].rstrip(".") + "." if text else text


def value_at(settings: BaseModel | Mapping[str, Any], path: str) -> Any:
    """The value of a setting as plain JSON value, given its dotted path."""
    value: Any = settings.model_dump(mode="json") if isinstance(settings, BaseModel) else settings
    for part in path.split("."):
        value = value[part]
    return value
