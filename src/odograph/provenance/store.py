"""The store of fits: one file for every unit fitted, under a key made of all that decides the fit."""

from __future__ import annotations

import hashlib
import json
import logging
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from odograph.errors import InputError
from odograph.provenance.canonical import canonical_json
from odograph.provenance.files import read_arrays, read_json, write_arrays, write_json

if TYPE_CHECKING:
    import numpy as np

logger = logging.getLogger(__name__)


@dataclass(frozen=True)
class FitSource:
    """All that decides the fit of one unit.

    Parameters
    ----------
    spikes, behaviour, settings, code : str
        Digests of the unit's spike train, of the behaviour table, of the settings read and of the code.
    """

    spikes: str
    behaviour: str
    settings: str
    code: str

    @property
    def key(self) -> str:
        """The key of the fit: 64 hex digits."""
        parts = [self.spikes, self.behaviour, self.settings, self.code]
        return hashlib.sha256(canonical_json(parts).encode()).hexdigest()

    def difference(self, before: Mapping[str, str] | None) -> str:
        """Say in words what changed since the last time; empty when nothing did."""
        if before is None:
            return "new unit"
        changed = [
            name
            for name in ("spikes", "behaviour", "settings", "code")
            if before.get(name) != getattr(self, name)
        ]
        return " and ".join(changed) + " changed" if changed else ""


@dataclass(frozen=True)
class StoredFit:
    """The result of one unit: a row, the rows of its models' scores, and named curves."""

    row: dict[str, Any]
    scores: list[dict[str, Any]]
    curves: dict[str, np.ndarray]


class FitStore:
    """Fits of units on disk, written by rename and checked when read.

    Parameters
    ----------
    folder : str or Path
        Where the store lies; made on first use.
    """

    def __init__(self, folder: str | Path) -> None:
        self.folder = Path(folder)

    def path(self, key: str) -> Path:
        """The file of a key."""
        return self.folder / key[:2] / f"{key}.npz"

    def load(self, key: str) -> StoredFit | None:
        """Read a fit; None when it is not there.

        A damaged entry is dropped, with a warning, and counts as not there.
        """
        path = self.path(key)
        if not path.exists():
            return None
        try:
            return self._read(key)
        except (InputError, KeyError, ValueError) as error:
            logger.warning("a damaged fit in the store is dropped and made again: %s", error)
            path.unlink(missing_ok=True)
            return None

    def is_whole(self, key: str) -> bool:
        """Whether a fit can be read and is what was written."""
        try:
            self._read(key)
        except (InputError, KeyError, ValueError):
            return False
        return True

    def _read(self, key: str) -> StoredFit:
        path = self.path(key)
        arrays = read_arrays(path)
        if bytes(arrays.pop("key")).decode() != key or bytes(arrays.pop("digest")).hex() != _digest(arrays):
            raise InputError("its content does not match its key", file=str(path))
        facts = json.loads(bytes(arrays.pop("facts")))
        return StoredFit(facts["row"], facts["scores"], arrays)

    def save(self, key: str, fit: StoredFit) -> StoredFit:
        """Write a fit and give it back as it will be read, so that fresh and restored fits are the same."""
        import numpy as np

        facts = json.dumps({"row": fit.row, "scores": fit.scores}, default=_scalar, sort_keys=False)
        arrays = {name: np.asarray(values) for name, values in fit.curves.items()}
        arrays["facts"] = _bytes_array(facts.encode())
        marks = {
            "key": _bytes_array(key.encode()),
            "digest": _bytes_array(bytes.fromhex(_digest(arrays))),
        }
        write_arrays(self.path(key), arrays | marks)
        plain_facts = json.loads(facts)
        del arrays["facts"]
        return StoredFit(plain_facts["row"], plain_facts["scores"], arrays)


class FitHistory:
    """What each unit of a session was last fitted from, so that a refit can say why.

    The history lies with the plan: the engine removes the products of a job before it runs again, and studies
    may share a store.

    Parameters
    ----------
    folder : str or Path
        The session's folder of histories.
    shard, shards : int
        The shard at work, and into how many shards the session is divided.
    """

    def __init__(self, folder: str | Path, shard: int, shards: int) -> None:
        self.folder = Path(folder)
        self.file = self.folder / f"shards-{shards}" / f"shard-{shard}.json"

    def load(self, units: Iterable[int]) -> dict[int, dict[str, str]]:
        """The last source of each of these units that was ever fitted."""
        found: dict[int, dict[str, str]] = {}
        wanted = {str(unit) for unit in units}
        newest_first = sorted(self.folder.glob("shards-*/*.json"), key=lambda path: -path.stat().st_mtime_ns)
        for file in (self.file, *newest_first):
            if not wanted:
                break
            try:
                known = read_json(file)
            except InputError:
                continue
            for unit in sorted(wanted & set(known)):
                found[int(unit)] = known[unit]
                wanted.discard(unit)
        return found

    def save(self, sources: Mapping[int, FitSource]) -> None:
        """Note what the units of this shard are fitted from now."""
        write_json(self.file, {unit: vars(source) for unit, source in sources.items()})


def _digest(arrays: Mapping[str, np.ndarray]) -> str:
    state = hashlib.sha256()
    for name in sorted(arrays):
        values = arrays[name]
        state.update(f"{name} {values.dtype.str} {values.shape}\n".encode())
        state.update(values.tobytes())
    return state.hexdigest()


def _bytes_array(data: bytes) -> np.ndarray:
    import numpy as np

    return np.frombuffer(data, dtype=np.uint8)


def _scalar(value: Any) -> Any:
    if hasattr(value, "item"):
        return value.item()
    raise TypeError(f"a value of type {type(value).__name__} cannot be kept in the store")
