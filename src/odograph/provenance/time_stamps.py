"""Time stamps that lie in the future, of products made where the clock goes ahead of the one here.

The engine takes a product that is older than its inputs for out of date and one that is newer for current,
and refuses a job whose fresh products are older than what it read. So all products must be older than those
that a run will make: what lies in the future is set to now, in its order.
"""

from __future__ import annotations

import contextlib
import os
import sys
from collections.abc import Iterator
from pathlib import Path

from odograph.provenance.layout import RESULTS, STORE

# Cards are many, and no rule reads them: their index stands for them.
_CARD = "unit-"


def set_back_stamps(now_ns: int, results: Path = RESULTS) -> int:
    """Set the products whose time stamps lie in the future to now, keeping their order.

    Parameters
    ----------
    now_ns : int
        The time on the file system of the results, in ns.
    results : Path
        The folder of the results; the store of fits is left alone.

    Returns
    -------
    int
        How many there were.
    """
    ahead = sorted((stamp, path) for path, stamp in _stamps(results) if stamp > now_ns)
    order = {stamp: place for place, stamp in enumerate(sorted({stamp for stamp, _ in ahead}))}
    for stamp, path in ahead:
        # Nanoseconds apart, so that what this run makes is later than all of them.
        later = now_ns + order[stamp]
        with contextlib.suppress(FileNotFoundError):
            os.utime(path, ns=(later, later))
    if ahead:
        seconds = (ahead[-1][0] - now_ns) / 1e9
        print(
            f"odograph: the time stamps of {len(ahead)} products lie in the future, by up to {seconds:,.0f} "
            "s (clocks that differ?); they are set to now, in their order",
            file=sys.stderr,
        )
    return len(ahead)


def _stamps(folder: Path) -> Iterator[tuple[str, int]]:
    """Every product's path and time stamp, in ns; the store and cards are left out."""
    waiting, apart = [str(folder)], str(folder / STORE.name)
    while waiting:
        with contextlib.suppress(FileNotFoundError), os.scandir(waiting.pop()) as entries:
            for entry in entries:
                if entry.name.startswith((_CARD, ".")) or entry.path == apart:
                    continue
                if entry.is_dir():
                    waiting.append(entry.path)
                else:
                    with contextlib.suppress(FileNotFoundError):
                        yield entry.path, entry.stat().st_mtime_ns
