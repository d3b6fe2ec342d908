"""A small finished study, and ways to damage its records, tables, settings and packages.

A case names what is damaged and read, and the damages, which are plain values: it can be kept as JSON.
"""

from __future__ import annotations

import io
import json
import os
import random
import tempfile
import zipfile
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from damage import BYTES

Damage = list[Any]
Case = dict[str, Any]

SESSION = "results/sessions/one"
RECORDS = (
    f"{SESSION}/sync/record.json",
    f"{SESSION}/encoding/shard-0/record.json",
    "results/figures/record.json",
)
#: By what is read: the files that are damaged for it.
FILES = {
    "study": (
        *RECORDS, *RECORDS, "results/root.json", "results/root.json", "results/figures/clock.svg",
        "results/figures/clock.png", f"{SESSION}/sync/clock.json", "config/config.yaml",
        "config/sessions.tsv",
    ),
    "plan": (
        "config/config.yaml", "config/sessions.tsv", "results/plan/cache.json",
        "results/plan/recordings.json",
    ),
    "tables": (f"{SESSION}/encoding/shard-0/units.parquet", f"{SESSION}/encoding/shard-0/curves.npz"),
    "package": ("package.zip",),
}  # fmt: skip
TEXTS = (
    "", "[" * 20_000, '{"a":' * 20_000, "NaN", "null", '"text"', "0", "[]", "{}", "-", "1" * 5000,
    "\ufeff{}", '{"format": 1}', "{'a': 1}", '{"record_id": "record:", "inputs": null}', "\0",
    "a: &a [*a]", "!!python/object/apply:os.system [true]", "- &a [x, x]\n" + "- *a\n" * 50,
    "a: &a {b: *a}",
    "a0: &a0 x\n" + "".join(f"a{k}: &a{k} [{', '.join([f'*a{k - 1}'] * 9)}]\n" for k in range(1, 12)),
    "study: {shards_per_session: .inf}", "study:\n\t- x", "? [a, b]\n: c", "%YAML 9.9\n---\n",
    "session\tnwb\n", "session\tnwb\n../x\ta.nwb\n", 'session\tnwb\n"\na\tb\n', "session\tnwb\na\t\0\n",
    "x" * 200_000, "intake: {unit_filter: [{column: a, keep: [" + "[" * 200 + "]" * 200 + "]}]}",
    "2026-01-01", "study: 2026-01-01", "<<: {a: b}", "encoding: {fold: 1e400}",
    "study: !!binary aGVsbG8=", "study: !!set {a, b}", "1: 2", "null: 3", "[1]: 2",
)  # fmt: skip
VALUES: tuple[Any, ...] = (
    None, True, 0, -1, 2 ** 70, 1.5, 1e308, "", "text", "../../x", "/dev/zero", "x\0y", "\ud800",
    "a" * 300, [], {}, [[]], [None], {"path": 1}, [{"path": "../x", "digest": "sha256:0"}],
    [{"kind": "product"}], [{"kind": "product", "path": 3}], [{"kind": "else"}], "<script>", "\x1b[31m",
    {"": {}}, {"one": None}, "record:" + "0" * 64, "sha256:" + "f" * 64,
)  # fmt: skip
SPECIAL = "a list within a list, a thousand deep"


@cache
def study() -> dict[str, bytes]:
    """The files of a finished study, by path; made by the library itself."""
    with tempfile.TemporaryDirectory() as name:
        before = Path.cwd()
        os.chdir(name)
        try:
            _make_study()
        finally:
            os.chdir(before)
        folder = Path(name)
        return {
            path.relative_to(folder).as_posix(): path.read_bytes()
            for path in sorted(folder.rglob("*"))
            if path.is_file()
        }


def _make_study() -> None:
    from PIL import Image, PngImagePlugin

    from odograph.provenance.files import write_arrays, write_bytes, write_json, write_table, write_text
    from odograph.provenance.fingerprint import code_fingerprint
    from odograph.provenance.known import keep_known
    from odograph.provenance.records import RecordDraft
    from odograph.provenance.root import write_root
    from odograph.settings.all import Settings

    stages = Settings().model_dump(mode="json")
    write_text(
        "config/config.yaml", "study:\n  sessions_table: config/sessions.tsv\nsync:\n  max_bend_ms: 10.0\n"
    )
    write_text("config/sessions.tsv", "session\tnwb\tanimal\none\trecordings/one.nwb\theather\n")
    write_text("recordings/one.nwb", "a recording")
    write_json("results/plan/population.json", {"sessions": [{"session": "one"}]})
    write_json("results/plan/sessions/one/source.json", {"nwb": "recordings/one.nwb"})
    entry = {
        "error": None, "links": [], "shards": 1, "animal": "heather", "regions": {"3": "CA1"}, "units": 2,
        "duration_s": 60.0, "digests": {"intake": "sha256:0"}, "key": None,
    }  # fmt: skip
    keep_known("results/plan/cache.json", {"format": 2, "code": {}, "sessions": {"one": entry}, "study": {}})
    figures = {"figures": stages["figures"]}

    def draft(rule: str, settings: dict[str, Any], **keys: Any) -> RecordDraft:
        code = {rule: code_fingerprint(f"odograph.steps.{rule}")}
        return RecordDraft(rule, keys=keys, settings=settings, code=code)

    sync = draft("sync", {"sync": stages["sync"] | {"max_bend_ms": 10.0}}, session="one")
    sync.add_signal_input("tracking", "sha256:1", file="recordings/one.nwb", place="processing/behavior")
    write_json(f"{SESSION}/sync/clock.json", {"slope": 1.0})
    sync.add_product(f"{SESSION}/sync/clock.json")
    sync.write(f"{SESSION}/sync/record.json")
    fits = draft("encoding", {"encoding": stages["encoding"]}, session="one", shard=0)
    fits.add_product_input(f"{SESSION}/sync/clock.json")
    fits.add_unit_input(3, "sha256:3", file="recordings/one.nwb")
    shard = f"{SESSION}/encoding/shard-0"
    write_table(
        f"{shard}/units.parquet", {"unit": np.arange(4), "rate": np.linspace(0, 1, 4), "name": list("abcd")}
    )
    write_arrays(f"{shard}/curves.npz", {"3/speed": np.linspace(0, 1, 20), "3/map": np.ones((5, 5))})
    for name in ("units.parquet", "curves.npz"):
        fits.add_product(f"{shard}/{name}")
    fits.write(f"{shard}/record.json")
    drawn = draft("population_figures", figures)
    drawn.add_product_input(f"{shard}/units.parquet")
    mark = f"<dc:identifier>{drawn.record_id}</dc:identifier>"
    write_text(
        "results/figures/clock.svg",
        f"<svg xmlns='http://www.w3.org/2000/svg'><metadata>{mark}</metadata></svg>",
    )
    texts, picture = PngImagePlugin.PngInfo(), io.BytesIO()
    texts.add_text("odograph-record", drawn.record_id, zip=True)
    texts.add_itxt("note", "a note", zip=True)
    Image.new("RGB", (8, 8)).save(picture, "png", pnginfo=texts)
    write_bytes("results/figures/clock.png", picture.getvalue())
    for name in ("clock.svg", "clock.png"):
        drawn.add_product(f"results/figures/{name}", unit=3)
    drawn.write("results/figures/record.json")
    write_root(".")
    package = io.BytesIO()
    with zipfile.ZipFile(package, "w", zipfile.ZIP_DEFLATED) as archive:
        for place in ("results/root.json", *RECORDS):
            archive.writestr(zipfile.ZipInfo(f"bag/data/{place}"), Path(place).read_bytes())
        archive.writestr(zipfile.ZipInfo("bag/bagit.txt"), "BagIt-Version: 1.0\n")
    write_bytes("package.zip", package.getvalue())


# ---- doing damage


def write_records(case: Case, folder: Path) -> Path:
    """Write the damaged study of a case."""
    import shutil

    home = folder / "study"
    shutil.rmtree(home, ignore_errors=True)
    files: dict[str, bytes | None] = dict(study())
    folders = {file for name, file, *_ in case["damages"] if name == "folder"}
    for name, file, *facts in case["damages"]:
        content = files.get(file)
        if content is None:
            continue
        if name == "json":
            files[file] = _json(content, *facts)
        elif name == "text":
            text = TEXTS[facts[0]] if isinstance(facts[0], int) else facts[0]
            files[file] = text.encode()
        elif name == "gone":
            files[file] = None
        elif name == "member":
            files[file] = _member(content, *facts)
        elif name in BYTES and content:
            files[file] = bytes(BYTES[name](bytearray(content), *facts))
    for file, content in files.items():
        (home / file).parent.mkdir(parents=True, exist_ok=True)
        if file in folders:
            (home / file).mkdir()
        elif content is not None:
            (home / file).write_bytes(content)
    return home


def _json(content: bytes, pointer: list[Any], kind: str, value: Any, sign: bool) -> bytes:
    """Put a value in a place of a JSON document, or take the place out; then, if asked, mend the digests."""
    try:
        document = json.loads(content)
    except (ValueError, RecursionError):
        return content
    holder, key = document, pointer[-1] if pointer else None
    try:
        for part in pointer[:-1]:
            holder = holder[part]
        if kind == "gone":
            del holder[key]
        else:
            holder[key] = _deep() if value == SPECIAL else value
    except (KeyError, IndexError, TypeError):
        return content
    if sign:
        _sign(document)
    return (json.dumps(document, sort_keys=True, indent=1, ensure_ascii=False) + "\n").encode(
        "utf-8", "surrogatepass"
    )


def _deep() -> list[Any]:
    value: list[Any] = []
    for _ in range(900):
        value = [value]
    return value


def _sign(document: Any) -> None:
    """What a forger would do: the identifier is computed again from what is there now."""
    from odograph.provenance.canonical import digest_value
    from odograph.provenance.records import identify
    from odograph.provenance.root import identify_root

    try:
        if "record_id" in document:
            document["record_id"] = identify(document)
        elif "own_digest" in document:
            document["root"] = identify_root(document["records"])
            document["own_digest"] = digest_value({k: v for k, v in document.items() if k != "own_digest"})
    except Exception:  # what cannot be signed stays as it is
        return


def _member(content: bytes, name: str, kind: str) -> bytes:
    """A member more in a zip file."""
    package = io.BytesIO(content)
    try:
        with zipfile.ZipFile(package, "a", zipfile.ZIP_DEFLATED) as archive:
            info = zipfile.ZipInfo(name)
            info.compress_type = zipfile.ZIP_DEFLATED
            info.external_attr = {"link": 0o120777, "device": 0o020666}.get(kind, 0o100644) << 16
            archive.writestr(info, b"\0" * 30_000_000 if kind == "bomb" else b"/etc/passwd")
    except Exception:  # nothing can be added to a package that is damaged already
        return content
    return package.getvalue()


# ---- new cases


def new_case(rng: random.Random) -> Case:
    """A case by chance."""
    what = rng.choices(list(FILES), [8, 1.5, 2, 2])[0]
    damages = [_damage(rng, what) for _ in range(rng.choice([1, 1, 1, 2, 3]))]
    return {"what": what, "damages": damages}


def _damage(rng: random.Random, what: str) -> Damage:
    file = rng.choice(FILES[what])
    content = study()[file]
    if file.endswith(".json") and rng.random() < 0.7:
        kind = rng.choices(["value", "gone"], [5, 1])[0]
        value = rng.choice([*VALUES, SPECIAL])
        return ["json", file, _pointer(rng, json.loads(content)), kind, value, rng.random() < 0.8]
    if file.endswith(".zip") and rng.random() < 0.4:
        name = rng.choice(
            ["../x", "/x", "bag/../../x", "a\\b", "C:/x", "bag/data/x", "bag/data/X", "x" * 300, "bag", "é/a"]
        )
        return ["member", file, name, rng.choice(["plain", "link", "device", "bomb"])]
    chance = rng.random()
    if chance < 0.04:
        return ["gone", file]
    if chance < 0.08:
        return ["folder", file]
    if chance < 0.45 and not file.endswith((".parquet", ".npz", ".zip", ".png")):
        return ["text", file, rng.randrange(len(TEXTS))]
    at = rng.randrange(len(content))
    values = rng.choice(
        [[0] * 8, [255] * 8, [rng.randrange(256) for _ in range(rng.choice([1, 4, 16]))], [34], [9], [10]]
    )
    kind = rng.choice(list(BYTES))
    facts: dict[str, list[Any]] = {
        "flip": [at, rng.randrange(8)],
        "set": [at, values],
        "insert": [at, values],
        "copy": [rng.randrange(len(content)), at, rng.choice([1, 8, 64, 512])],
        "remove": [at, rng.choice([1, 8, 100])],
        "cut": [at],
    }
    return [kind, file, *facts[kind]]


def _pointer(rng: random.Random, document: Any) -> list[Any]:
    """A place in a JSON document by chance, seldom deep within the settings."""
    pointer: list[Any] = []
    while isinstance(document, dict | list) and document and (not pointer or rng.random() < 0.75):
        keys = sorted(document) if isinstance(document, dict) else range(len(document))
        key = rng.choice(list(keys))
        pointer.append(key)
        document = document[key]
    return pointer
