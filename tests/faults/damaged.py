"""Files damaged on the disk: bytes flipped, cut short, emptied. Found, told, made again."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from laboratory import Happening, Laboratory, Study, judged

PLAN, SESSION = "plan/sessions/alpha", "sessions/alpha"
#: What is damaged, and what makes the next run read it: a product below it that is gone.
FILES = {
    "shard table": (f"{SESSION}/encoding/shard-0/units.parquet", "population/summary.json"),
    "curves of a shard": (f"{SESSION}/encoding/shard-0/curves.npz", f"{SESSION}/cards/shard-0.json"),
    "document": (f"{SESSION}/sync/clock.json", f"{SESSION}/behaviour/audit.json"),
    "record": (f"{SESSION}/behaviour/record.json", f"{SESSION}/session_quality.record.json"),
    "fit in the store": ("store/??/*.npz", f"{SESSION}/encoding/shard-0/units.parquet"),
    "figure": ("figures/composition.png", None),
    "card": (f"{SESSION}/cards/unit-*.png", None),
    "run root": ("root.json", None),
    "plan file": (f"{PLAN}/shard-0.json", f"{SESSION}/encoding/shard-0/units.parquet"),
    "plan of intake": (f"{PLAN}/intake.json", f"{SESSION}/intake/inventory.json"),
    "cache of the plan": ("plan/cache.json", None),
    "known recordings": ("plan/recordings.json", "root.json"),
}
QUICK = ("shard table", "record", "fit in the store", "card", "plan file", "cache of the plan")
#: What `odograph verify` does not look at; the run that reads it finds it.
NO_RESULT = ("store/", "plan/")


def flipped(data: bytes) -> bytes:
    """One bit in the middle of every kilobyte, at least one."""
    changed = bytearray(data)
    for place in range(min(512, len(data) // 2), len(data), 1024):
        changed[place] ^= 0x10
    return bytes(changed)


def cut(data: bytes) -> bytes:
    """The first half."""
    return data[: len(data) // 2]


def emptied(data: bytes) -> bytes:
    """Nothing."""
    return data[:0]


DAMAGES: dict[str, Callable[[bytes], bytes]] = {"flipped": flipped, "cut short": cut, "emptied": emptied}


def damaged(lab: Laboratory) -> Iterator[Happening]:
    """Damage one file after the other in one study, let the next run read it, and run until it ends well."""
    kinds = QUICK if lab.quick else tuple(FILES)
    study = lab.copy("damaged")
    study.again()
    for number, name in enumerate(kinds):
        # Every kind of file meets every kind of damage over three passes.
        how = list(DAMAGES)[(number + lab.seed) % len(DAMAGES)]
        yield _case(lab, study, name, how)


def _case(lab: Laboratory, study: Study, name: str, how: str) -> Happening:
    pattern, below = FILES[name]
    target = sorted(study.results.glob(pattern))[0]
    stat = target.stat()
    target.write_bytes(DAMAGES[how](target.read_bytes()))
    told = str(target.relative_to(study.folder))
    found = []
    if not pattern.startswith(NO_RESULT):
        verified = study.odograph("verify")
        if verified.status == 0 or told not in verified.text:
            return Happening(f"damaged: {name}", f"{how}", "NOT FOUND by verify", None, False)
        found.append("verify")
    else:
        import os

        os.utime(target, ns=(stat.st_mtime_ns, stat.st_mtime_ns))
    if below is not None:
        (study.results / below).unlink()
    else:
        # Nothing reads it: what verify says is followed.
        study.odograph("verify", "--remove")
    first = study.run()
    number, outcome = (1, first) if first.status == 0 else study.again()
    number += first.status != 0
    if told in first.text:
        found.append("the reading step")
    happened = f"found by {' and '.join(found) or 'planning'}; right after run {number}"
    return judged(lab, study, f"damaged: {name}", how, happened, outcome.status == 0)
