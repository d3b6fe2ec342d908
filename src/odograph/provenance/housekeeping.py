"""What the store of fits holds, and which of it the current results need."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from odograph.provenance.renaming import leftovers
from odograph.provenance.store import FitStore

_KEY_DIGITS = 64


@dataclass(frozen=True)
class StoreSurvey:
    """The store's content.

    Parameters
    ----------
    fits, bytes : int
        How many fits there are, and their size.
    unneeded : tuple of Path
        Fits that no current result came from, sorted.
    unneeded_bytes : int
        Their size.
    """

    fits: int
    bytes: int
    unneeded: tuple[Path, ...]
    unneeded_bytes: int


def survey_store(results: str | Path, *others: str | Path) -> StoreSurvey:
    """Count the fits of a study's store, and find those that no unit's row names.

    Parameters
    ----------
    results : str or Path
        The folder of the results. A fit is needed when a shard's table of units has its key.
    others : str or Path
        The results of other studies that share the store.
    """
    results = Path(results)
    sizes = {path: path.stat().st_size for path in fit_files(results / "store")}
    needed = _needed_keys(results).union(*(_needed_keys(Path(other)) for other in others))
    unneeded = tuple(sorted(path for path in sizes if path.stem not in needed))
    return StoreSurvey(len(sizes), sum(sizes.values()), unneeded, sum(sizes[path] for path in unneeded))


def fit_files(store: Path) -> list[Path]:
    """The files of all fits in a store, sorted."""
    return sorted(path for path in store.glob("??/*.npz") if len(path.stem) == _KEY_DIGITS)


def damaged_fits(store: str | Path) -> list[Path]:
    """Fits that are not what they were when they were written; nothing is removed."""
    kept = FitStore(store)
    return [path for path in fit_files(Path(store)) if not kept.is_whole(path.stem)]


def left_by_killed(store: str | Path) -> list[Path]:
    """Temporary files in a store whose writers are gone."""
    folders = [folder for folder in Path(store).glob("??") if folder.is_dir()]
    return [path for folder in sorted(folders) for path in leftovers(folder)]


def drop(paths: Iterable[Path]) -> None:
    """Remove fits; one that another process removed before is no error."""
    for path in paths:
        path.unlink(missing_ok=True)


def _needed_keys(results: Path) -> set[str]:
    from odograph.provenance.files import read_table

    keys: set[str] = set()
    for path in sorted(results.glob("sessions/*/encoding/shard-*/units.parquet")):
        table = read_table(path)
        if "fit_key" in table:
            keys |= {key for key in table["fit_key"] if isinstance(key, str)}
    return keys
