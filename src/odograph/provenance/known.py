"""Files that keep what was found out, to spare finding it out again; a damaged one counts as not there.

They are JSON documents whose first key holds the digest of all the rest.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from odograph.provenance.files import write_if_changed

_HEAD = b'{"checked": "'
_TAIL = b'", '
_DIGITS = 64


def keep_known(path: str | Path, document: Mapping[str, Any]) -> None:
    """Write a document with the digest of its text, unless the file already holds it."""
    rest = json.dumps(document, sort_keys=True)[1:]
    digest = hashlib.sha256(rest.encode()).hexdigest()
    write_if_changed(path, f"{_HEAD.decode()}{digest}{_TAIL.decode()}{rest}")


def read_known(path: str | Path) -> dict[str, Any]:
    """Read what was kept; empty when the file is missing or damaged."""
    try:
        data = Path(path).read_bytes()
    except OSError:
        return {}
    rest = data[len(_HEAD) + _DIGITS + len(_TAIL) :]
    if data[: -len(rest)] != _HEAD + hashlib.sha256(rest).hexdigest().encode() + _TAIL:
        return {}
    return json.loads(b"{" + rest)
