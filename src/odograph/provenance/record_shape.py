"""The form of a record and of the run root: what everyone who reads them may count on.

Both may come from elsewhere, within an archive or beside a paper. Paths of products lie within the study's
folder, and a session's name can be no path, so that no reader is led out of it.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from pathlib import PurePosixPath, PureWindowsPath
from typing import Any

_DEEPEST = 30
_NAME = re.compile(r"[A-Za-z0-9_-]+")
Check = Callable[[Any, str], str | None]


def fault_of_record(record: Any) -> str | None:
    """What is wrong with the form of a record, in words; None when nothing is."""
    return _RECORD(record, "the record") or _depth(record, "the record")


def fault_of_root(document: Any) -> str | None:
    """What is wrong with the form of a run root, in words; None when nothing is."""
    return _ROOT(document, "the run root") or _depth(document, "the run root")


def _depth(document: Any, name: str) -> str | None:
    level = [document]
    for _ in range(_DEEPEST):
        held = [one for one in level if isinstance(one, dict | list)]
        level = [inner for one in held for inner in (one.values() if isinstance(one, dict) else one)]
        if not level:
            return None
    return f"{name} holds lists within lists more than {_DEEPEST} deep"


def stays_within(path: str) -> bool:
    """Whether a path, put below a folder, stays within it on every system."""
    parts = PurePosixPath(path).parts
    outside = path.startswith("/") or ".." in parts or bool(PureWindowsPath(path).drive)
    return bool(parts) and not outside and "\0" not in path and "\\" not in path


def _is(kind: type | tuple[type, ...], words: str) -> Check:
    def check(value: Any, name: str) -> str | None:
        fits = isinstance(value, kind) and not (kind is int and isinstance(value, bool))
        return None if fits else f"{name} is {_words(value)}, not {words}"

    return check


def _or_none(inner: Check) -> Check:
    return lambda value, name: None if value is None else inner(value, name)


def _path(value: Any, name: str) -> str | None:
    """A path below the study's folder."""
    if not isinstance(value, str) or not value or "\0" in value:
        return f"{name} is {_words(value)}, not a path"
    if not stays_within(value):
        return f"{name} is {_words(value)}, which leads out of the study's folder"
    return None


def _place(value: Any, name: str) -> str | None:
    """A path to anywhere: recordings may lie apart from the study."""
    return None if isinstance(value, str) and "\0" not in value else f"{name} is {_words(value)}, not a path"


def _session(value: Any, name: str) -> str | None:
    """The name of a session, which is that of its folder."""
    fits = isinstance(value, str) and _NAME.fullmatch(value)
    return None if fits else f"{name} is {_words(value)}, not the name of a session"


def _list_of(inner: Check) -> Check:
    def check(value: Any, name: str) -> str | None:
        if not isinstance(value, list):
            return f"{name} is {_words(value)}, not a list"
        faults = (inner(item, f"{name}[{number}]") for number, item in enumerate(value))
        return next((fault for fault in faults if fault), None)

    return check


def _mapping_of(inner: Check) -> Check:
    def check(value: Any, name: str) -> str | None:
        if not isinstance(value, dict):
            return f"{name} is {_words(value)}, not a mapping"
        faults = (inner(item, f"{name}.{key}") for key, item in value.items())
        return next((fault for fault in faults if fault), None)

    return check


def _with(needed: Mapping[str, Check], optional: Mapping[str, Check] | None = None) -> Check:
    """A mapping that has at least these keys, and may have the optional ones."""

    def check(value: Any, name: str) -> str | None:
        if not isinstance(value, dict):
            return f"{name} is {_words(value)}, not a mapping"
        for key, inner in needed.items():
            if key not in value:
                return f"{name} lacks {key!r}"
            fault = inner(value[key], f"{name}.{key}")
            if fault:
                return fault
        for key, inner in (optional or {}).items():
            fault = inner(value[key], f"{name}.{key}") if key in value else None
            if fault:
                return fault
        return None

    return check


def _input(value: Any, name: str) -> str | None:
    kind = value.get("kind") if isinstance(value, dict) else None
    if not isinstance(kind, str) or kind not in _INPUTS:
        return f"{name} is {_words(value)}, not one of the known kinds of input"
    return _INPUTS[kind](value, name)


def _words(value: Any) -> str:
    if isinstance(value, dict | list):
        return "a mapping" if isinstance(value, dict) else "a list"
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _anything(value: Any, name: str) -> None:
    return None


_TEXT, _NUMBER = _is(str, "text"), _is(int, "a whole number")
_INPUTS: dict[str, Check] = {
    "product": _with({"path": _path, "digest": _TEXT, "producer": _or_none(_TEXT)}),
    "signal": _with({"signal": _TEXT, "digest": _TEXT, "file": _place, "place": _or_none(_TEXT)}),
    "unit": _with({"unit": _NUMBER, "digest": _TEXT, "file": _place}),
    "table": _with({"table": _TEXT, "digest": _TEXT}),
}
_RECORD = _with(
    {
        "record_id": _TEXT,
        "format": _NUMBER,
        "rule": _TEXT,
        "keys": _with({}, {"session": _session, "shard": _NUMBER}),
        "inputs": _list_of(_input),
        "settings": _mapping_of(_mapping_of(_anything)),
        "code": _mapping_of(_TEXT),
        "software": _mapping_of(_TEXT),
        "products": _list_of(_with({"path": _path, "digest": _TEXT}, {"unit": _NUMBER})),
        "run": _with({"started": _TEXT}, {"host": _TEXT}),  # archives leave the host out
    }
)
_ROOT = _with(
    {
        "format": _NUMBER,
        "root": _TEXT,
        "own_digest": _TEXT,
        "records": _list_of(_with({"file": _path, "record_id": _TEXT, "content": _TEXT, "digest": _TEXT})),
        "user_files": _list_of(_with({"file": _place, "digest": _TEXT})),
        "recordings": _list_of(
            _with(
                {
                    "session": _session,
                    "file": _place,
                    "linked": _is(bool, "true or false"),
                    "bytes": _NUMBER,
                    "digest": _TEXT,
                }
            )
        ),
        "code": _with({"commit": _or_none(_TEXT), "modified": _or_none(_is(bool, "true or false"))}),
    }
)
