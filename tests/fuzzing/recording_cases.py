"""New cases of damaged recordings, drawn by chance."""

from __future__ import annotations

import random
from typing import Any

import h5py
from base_recordings import SETTINGS, base
from damage import ATTRIBUTES, BYTES, HOSTILE_NAMES, INDEXES, STRUCTURE, VALUES, Case, Damage

TYPES = (
    "NWBFile", "Units", "DynamicTable", "TimeSeries", "SpatialSeries", "Position", "CompassDirection",
    "VectorIndex", "VectorData", "ElementIdentifiers", "EventsTable", "IntervalSeries", "AnnotationSeries",
    "ProcessingModule", "Subject", "ElectricalSeries", "Device", "ImageSeries", "nothing of this name",
)  # fmt: skip
SIGNATURES = (
    b"OHDR",
    b"TREE",
    b"HEAP",
    b"SNOD",
    b"GCOL",
    b"FRHP",
    b"FHDB",
    b"BTHD",
    b"BTLF",
    b"OCHK",
    b"FADB",
)


def _places(name: str) -> dict[str, Any]:
    """Groups, data sets, indexes and attributes of a base recording."""
    if name not in _PLACES:
        import io

        found: dict[str, Any] = {"groups": [], "data": [], "indexes": [], "attributes": []}

        def visit(place: str, thing: Any) -> None:
            if place.startswith("specifications/"):
                return
            found["groups" if isinstance(thing, h5py.Group) else "data"].append(place)
            if place.endswith("_index"):
                found["indexes"].append(place)
            found["attributes"] += [(place, key) for key in thing.attrs]

        with h5py.File(io.BytesIO(base(name))) as file:
            file.visititems(visit)
            found["attributes"] += [("/", key) for key in file.attrs]
        found["marks"] = _marks(base(name))
        _PLACES[name] = found
    return _PLACES[name]


_PLACES: dict[str, dict[str, Any]] = {}


def _marks(content: bytes) -> list[int]:
    """Where the blocks of the file's own bookkeeping begin."""
    found = []
    for signature in SIGNATURES:
        at = content.find(signature)
        while at >= 0:
            found.append(at)
            at = content.find(signature, at + 1)
    return sorted(found)


def new_case(rng: random.Random) -> Case:
    """A case by chance."""
    name = rng.choices(list(SETTINGS), [6, 3, 2, 0.7])[0]
    places = _places(name)
    kind = rng.random()
    damages: list[Damage] = []
    if kind < 0.62:
        damages += [_structural(rng, places) for _ in range(rng.choice([1, 1, 1, 2, 3]))]
    if kind > 0.55:
        damages += [_of_bytes(rng, places, len(base(name))) for _ in range(rng.choice([1, 1, 2, 4, 8, 30]))]
    return {
        "base": name,
        "settings": rng.randrange(len(SETTINGS[name])),
        "damages": damages,
        "more": rng.choices(["", "look", "signals", "units"], [5, 2, 1, 1])[0],
    }


def _structural(rng: random.Random, places: dict[str, Any]) -> Damage:
    data, group = rng.choice(places["data"]), rng.choice(places["groups"])
    anywhere = rng.choice([data, data, group])
    kind = rng.choices(
        list(STRUCTURE),
        [10, 5, 3, 4, 8, 3, 2, 2, 2, 1.5, 1.5, 0.3, 1, 1, 0.4, 0.4, 0.4, 1],
    )[0]
    if kind == "replace":
        return [kind, data, rng.choice(list(VALUES))]
    if kind == "index":
        return [kind, rng.choice(places["indexes"]), rng.choice(list(INDEXES))]
    if kind == "declare":
        shape = rng.choice([[10**12], [2**40, 2], [10**9, 2], [200, 2**33], [3 * 10**8], [2**31 + 5]])
        return [kind, data, shape, rng.choice(["f8", "i2", "u1", "text"]), rng.choice([1, 64, 2**16])]
    if kind == "attribute":
        place, name = rng.choice(places["attributes"])
        values = [*ATTRIBUTES, "gone", "gone", "reference to what was deleted"]
        return [kind, place, name, rng.choice(values)]
    if kind == "type":
        return [kind, anywhere, rng.choice(TYPES)]
    if kind == "rename":
        return [kind, anywhere, rng.randrange(len(HOSTILE_NAMES))]
    if kind == "soft link":
        target = rng.choice(["/nowhere", anywhere, "/", f"/{data}", group, "../x", "", "."])
        return [kind, anywhere, target]
    if kind == "hard link":
        return [kind, rng.choice([data, group, f"{group}/extra"]), rng.choice([group, "/", data])]
    if kind == "external link":
        other = rng.choice(["nowhere.nwb", "recording.nwb", "/dev/zero", "/dev/null", ".", "", "x" * 3000])
        return [kind, anywhere, other, rng.choice(["/", f"/{data}", "/units"])]
    if kind in ("stored outside", "virtual"):
        return [kind, data, rng.choice(["nowhere.bin", "/dev/zero", "recording.nwb", "."])]
    if kind == "deep":
        return [kind, group, rng.choice([100, 900, 3000])]
    if kind == "many":
        return [kind, group, 400]
    if kind == "diamonds":
        return [kind, group, rng.choice([4, 10, 40])]
    if kind == "columns":
        tables = [place for place in places["groups"] if place in ("units", "events/camera")] or ["units"]
        names = ["spike_times", "quality", "id", "../x", "spike_times_index", "label", "timestamp", "x" * 300]
        return [kind, rng.choice(tables), rng.choices(names, k=rng.randrange(5))]
    return [kind, anywhere]


def _of_bytes(rng: random.Random, places: dict[str, Any], size: int) -> Damage:
    near = rng.choice(places["marks"]) + rng.randrange(256) if rng.random() < 0.6 else rng.randrange(size)
    values = rng.choice(
        [[0] * 8, [255] * 8, [255, 255], [rng.randrange(256) for _ in range(rng.choice([1, 4, 16]))], [128]]
    )
    kind = rng.choices(list(BYTES), [6, 6, 3, 0.6, 0.6, 0.6])[0]
    if kind == "flip":
        return [kind, near, rng.randrange(8)]
    if kind in ("set", "insert"):
        return [kind, near, values]
    if kind == "copy":
        source = rng.choice(places["marks"]) if rng.random() < 0.5 else rng.randrange(size)
        return [kind, source, near, rng.choice([8, 64, 512, 4096])]
    if kind == "remove":
        return [kind, near, rng.choice([1, 8, 512])]
    return ["cut", rng.randrange(size)]
