"""Files damaged on the disk: bytes flipped, cut short, emptied. Found, told, made again."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator

from laboratory import Happening, Laboratory, Study, judged

PLAN, SESSION = "plan/sessions/alpha", "sessions/alpha"
SHARD = f"{SESSION}/encoding/shard-0"
#: What is damaged, and what is taken away so that the next run reads it: the run root asks for every record.
FILES = {
    "shard table": (f"{SHARD}/units.parquet", ()),
    "plan file": (f"{PLAN}/shard-0.json", (f"{SHARD}/record.json", "root.json", "population/units.parquet")),
    "cache of the plan": ("plan/cache.json", ()),
    "curves of a shard": (f"{SHARD}/curves.npz", ()),
    "document": (f"{SESSION}/sync/clock.json", ()),
    "record": (f"{SESSION}/behaviour/record.json", ()),
    "fit in the store": ("store/??/*.npz", (f"{SHARD}/record.json", "root.json")),
    "figure": ("figures/composition.png", ()),
    "card": (f"{SESSION}/cards/unit-*.png", ()),
    "run root": ("root.json", ()),
    "plan of intake": (f"{PLAN}/intake.json", (f"{SESSION}/intake/record.json", "root.json")),
    "known recordings": ("plan/recordings.json", ("root.json",)),
}
QUICK = ("shard table",)
#: What no other job reads: found by `odograph verify` only, whose remedy is followed.
ENDS = ("figure", "card", "run root")
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
    study = lab.copy("damaged")
    study.again()
    for number, name in enumerate(QUICK if lab.quick else FILES):
        # Every kind of file meets every kind of damage over three passes.
        how = list(DAMAGES)[(number + lab.seed) % len(DAMAGES)]
        yield _case(lab, study, name, how, follow=name in ENDS or (number + lab.seed) % 2 == 0)


def _case(lab: Laboratory, study: Study, name: str, how: str, follow: bool) -> Happening:
    pattern, away = FILES[name]
    target = sorted(study.results.glob(pattern))[0]
    stat = target.stat()
    target.write_bytes(DAMAGES[how](target.read_bytes()))
    told, found, done = str(target.relative_to(study.folder)), [], how
    result = not pattern.startswith(NO_RESULT)
    if result and not lab.quick:
        verified = study.odograph("verify")
        if verified.status == 0 or told not in verified.text or "--remove" not in verified.text:
            return Happening(f"damaged: {name}", done, "NOT FOUND by verify", None, False)
        found.append("verify")
        if follow:
            # The disk itself changed it, and no time stamp tells.
            os.utime(target, ns=(stat.st_mtime_ns, stat.st_mtime_ns))
            study.odograph("verify", "--remove")
            done += ", verify --remove"
    elif not result:
        os.utime(target, ns=(stat.st_mtime_ns, stat.st_mtime_ns))
    for path in away:
        (study.results / path).unlink(missing_ok=True)
    first = study.run()
    more, outcome = (0, first) if first.status == 0 else study.again()
    if first.status != 0 and told in first.text:
        found.append("the reading step")
    finder = " and ".join(found) or "what reads it, silently"
    happened = f"found by {finder}; right after {more + 1} run{'s' if more else ''}"
    holds = outcome.status == 0 and more <= 1
    if holds and result and not lab.quick:
        holds = study.odograph("verify").status == 0
    return judged(lab, study, f"damaged: {name}", done, happened, holds)
