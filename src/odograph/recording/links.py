"""Links of an NWB file whose target is gone: readers pass over them in silence, so they come first."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import h5py

from odograph.recording.held import beside, is_hollow, sources_of

#: Ways to reach the objects of a file; a reader walks every one of them.
MOST_PATHS = 1_000_000


@dataclass(frozen=True)
class MissingLink:
    """One link without a target: its place in the file, and the file and place it points at.

    `no_file` says that what it points at is there, but is a folder, a pipe or a device.
    """

    place: str
    target_file: str | None
    target_place: str
    no_file: bool = False

    def describe(self) -> str:
        """The link in one line."""
        target = f"{self.target_file}:{self.target_place}" if self.target_file else self.target_place
        return f"{self.place} -> {target}"


@dataclass(frozen=True)
class Links:
    """The links of a file.

    `missing` are those that lead nowhere, `files` the other files that those which hold lead into, `named`
    all other files that links and virtual data sets name, whether they are there or not. `paths` is the
    number of ways to reach a group of the file, at most `MOST_PATHS`. `hollow` are the places of data sets
    that declare far more than the file holds, other than a series' `data`, which are read only where they are
    used; all others may be read whole as soon as the file is opened.
    """

    missing: tuple[MissingLink, ...]
    files: tuple[Path, ...]
    named: tuple[Path, ...] = ()
    paths: int = 0
    hollow: tuple[str, ...] = ()


def follow_links(path: Path) -> Links:
    """Follow all soft and external links of an HDF5 file, and those in the files it links to.

    Only names and links are looked at, no data. Where a link leads to what is there but no file (a pipe, a
    device), none is followed, since others may lead through it: then that link alone is told as missing.

    Parameters
    ----------
    path : Path
        The HDF5 file.

    Returns
    -------
    Links
        Missing links sorted by place, other files sorted by path.
    """
    waiting = _link_to_no_file(path, set())
    if waiting is not None:
        return Links((waiting,), ())
    walk = _Walk()
    with h5py.File(path, "r") as file:
        address = _address(file)
        walk.seen.add(address)
        walk.group(file, "", address)
        paths = walk.count_paths(address)
    walk.files.discard(path)
    walk.named.discard(path)
    missing = sorted(walk.missing, key=lambda link: link.place)
    return Links(
        tuple(missing),
        tuple(sorted(walk.files)),
        tuple(sorted(walk.named)),
        paths,
        tuple(sorted(walk.hollow)),
    )


def _link_to_no_file(path: Path, known: set[Path]) -> MissingLink | None:
    """The first link to what is no file, here or in the files that are linked to; no link is followed."""
    known.add(path)
    with h5py.File(path, "r") as file:
        groups, seen = [("", file["/"])], {_address(file)}
        while groups:
            above, group = groups.pop()
            for name in group:
                place = f"{above}/{name}" if above else name
                link = group.get(name, getlink=True)
                if isinstance(link, h5py.ExternalLink):
                    found = _through(file, place, link, known)
                    if found is not None:
                        return found
                elif isinstance(link, h5py.HardLink):
                    held = _resolve(group, name)
                    if isinstance(held, h5py.Group) and _address(held) not in seen:
                        seen.add(_address(held))
                        groups.append((place, held))
    return None


def _through(file: h5py.File, place: str, link: h5py.ExternalLink, known: set[Path]) -> MissingLink | None:
    if not _may_be_opened(file, link.filename):
        return MissingLink(place, link.filename, link.path, no_file=True)
    for other in _places_of(file, link.filename):
        if other.is_file() and other not in known:
            try:
                found = _link_to_no_file(other, known)
            except (OSError, RuntimeError, KeyError):  # no HDF5: the link will be found to lead nowhere
                continue
            if found is not None:
                return replace(found, place=f"{place}/{found.place}")
    return None


_Address = tuple[int, int]


@dataclass
class _Walk:
    """One walk through a file and those it links to; `below` are the groups that each group holds."""

    missing: list[MissingLink] = field(default_factory=list)
    files: set[Path] = field(default_factory=set)
    named: set[Path] = field(default_factory=set)
    seen: set[_Address] = field(default_factory=set)
    below: dict[_Address, list[_Address]] = field(default_factory=dict)
    hollow: list[str] = field(default_factory=list)

    def group(self, group: h5py.Group, above: str, address: _Address) -> None:
        """Walk through a group and what it holds."""
        below = self.below.setdefault(address, [])
        for name in group:
            place = f"{above}/{name}" if above else name
            link = group.get(name, getlink=True)
            if isinstance(link, h5py.ExternalLink):
                self.named.add(beside(group.file, link.filename))
            target = _resolve(group, name)
            if target is None:
                target_file = link.filename if isinstance(link, h5py.ExternalLink) else None
                self.missing.append(MissingLink(place, target_file, getattr(link, "path", name)))
                continue
            if isinstance(link, h5py.ExternalLink):
                self.files.add(Path(target.file.filename))
            if isinstance(target, h5py.Dataset):
                self._data(target, place)
            if isinstance(target, h5py.Group):
                inner = _address(target)
                if isinstance(link, h5py.HardLink):
                    below.append(inner)
                if inner not in self.seen:
                    self.seen.add(inner)
                    self.group(target, place, inner)

    def _data(self, dataset: h5py.Dataset, place: str) -> None:
        if not place.endswith("/data") and is_hollow(dataset):
            self.hollow.append(place)
        for other in sources_of(dataset):
            self.named.add(other)
            if other.is_file():
                self.files.add(other)

    def count_paths(self, top: _Address) -> int:
        """Ways to reach a group from the top, at most `MOST_PATHS`; a circle has endless ones."""
        counts: dict[_Address, int] = {}
        open_above: set[_Address] = set()

        def count(address: _Address) -> int:
            if address in open_above:
                return MOST_PATHS
            if address not in counts:
                open_above.add(address)
                total = 1 + sum(count(inner) for inner in self.below.get(address, ()))
                open_above.discard(address)
                counts[address] = min(total, MOST_PATHS)
            return counts[address]

        return count(top)


def _resolve(group: h5py.Group, name: str) -> h5py.HLObject | None:
    try:
        return group[name]
    except (KeyError, OSError, RuntimeError):
        return None


def _may_be_opened(file: h5py.File, name: str) -> bool:
    try:
        return all(place.is_file() or not place.exists() for place in _places_of(file, name))
    except OSError:
        return False


def _places_of(file: h5py.File, name: str) -> tuple[Path, ...]:
    """Where HDF5 looks for another file: beside the one that names it, and where the process runs."""
    return beside(file, name), Path(name), beside(file, Path(name).name)


def _address(thing: h5py.HLObject) -> _Address:
    info = h5py.h5o.get_info(thing.id)
    return info.fileno, info.addr
