"""One way to write a value as text, so that equal values have equal digests anywhere."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import math
from collections.abc import Mapping
from collections.abc import Set as AbstractSet
from pathlib import PurePath
from typing import Any


def plain(value: Any) -> Any:
    """Turn a value into what JSON can hold.

    Mappings become dictionaries with string keys, sequences and arrays become lists, NumPy scalars
    become numbers, and numbers that are not finite become None (JSON has no NaN).

    Parameters
    ----------
    value : Any
        Numbers, text, None, mappings, sequences, dataclasses, pydantic models, NumPy scalars or arrays.

    Raises
    ------
    TypeError
        For any other type.
    """
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, str):
        return _encodable(value)
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {_encodable(str(key)): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    if isinstance(value, AbstractSet):
        return sorted(plain(item) for item in value)
    if isinstance(value, PurePath):
        return value.as_posix()
    if hasattr(value, "model_dump"):
        return plain(value.model_dump(mode="json"))
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if hasattr(value, "tolist"):
        return plain(value.tolist())
    raise TypeError(f"a value of type {type(value).__name__} cannot be written as JSON")


def _encodable(text: str) -> str:
    """Text that UTF-8 can hold; halves of surrogate pairs, which a damaged file may bring, become escapes."""
    return text if text.isascii() else text.encode("utf-8", "backslashreplace").decode()


def canonical_json(value: Any) -> str:
    """Write a value as JSON in one line: keys sorted, no spaces, shortest floats, no NaN."""
    return json.dumps(
        plain(value), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    )


def readable_json(value: Any) -> str:
    """Write a value as JSON for people: keys sorted, indented, a newline at the end."""
    return json.dumps(plain(value), sort_keys=True, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def digest_text(text: str) -> str:
    """SHA-256 of a text's UTF-8 bytes, as ``sha256:<64 hex digits>``."""
    return "sha256:" + hashlib.sha256(text.encode()).hexdigest()


def digest_value(value: Any) -> str:
    """SHA-256 of a value's canonical JSON, as ``sha256:<64 hex digits>``."""
    return digest_text(canonical_json(value))
