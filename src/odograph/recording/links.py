"""Links of an NWB file whose target is gone: readers pass over them in silence, so they come first."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import h5py


@dataclass(frozen=True)
class MissingLink:
    """One link without a target: its place in the file, and the file and place it points at."""

    place: str
    target_file: str | None
    target_place: str

    def describe(self) -> str:
        """The link in one line."""
        target = f"{self.target_file}:{self.target_place}" if self.target_file else self.target_place
        return f"{self.place} -> {target}"


@dataclass(frozen=True)
class Links:
    """The links of a file: those that lead nowhere, and the other files that those which hold lead into."""

    missing: tuple[MissingLink, ...]
    files: tuple[Path, ...]


def follow_links(path: Path) -> Links:
    """Follow all soft and external links of an HDF5 file, and those in the files it links to.

    Only names and links are looked at, no data.

    Parameters
    ----------
    path : Path
        The HDF5 file.

    Returns
    -------
    Links
        Missing links sorted by place, other files sorted by path.
    """
    missing: list[MissingLink] = []
    files: set[Path] = set()
    with h5py.File(path, "r") as file:
        _walk(file, "", missing, files, {_address(file)})
    files.discard(path)
    return Links(tuple(sorted(missing, key=lambda link: link.place)), tuple(sorted(files)))


def _walk(
    group: h5py.Group,
    above: str,
    missing: list[MissingLink],
    files: set[Path],
    seen: set[tuple[int, int]],
) -> None:
    for name in group:
        place = f"{above}/{name}" if above else name
        link = group.get(name, getlink=True)
        target = _resolve(group, name)
        if target is None:
            target_file = link.filename if isinstance(link, h5py.ExternalLink) else None
            missing.append(MissingLink(place, target_file, getattr(link, "path", name)))
            continue
        if isinstance(link, h5py.ExternalLink):
            files.add(Path(target.file.filename))
        if isinstance(target, h5py.Group):
            address = _address(target)
            if address not in seen:
                seen.add(address)
                _walk(target, place, missing, files, seen)


def _resolve(group: h5py.Group, name: str) -> h5py.HLObject | None:
    try:
        return group[name]
    except (KeyError, OSError, RuntimeError):
        return None


def _address(thing: h5py.HLObject) -> tuple[int, int]:
    info = h5py.h5o.get_info(thing.id)
    return info.fileno, info.addr
