"""Opening an NWB file for reading: what pynwb makes of it, by place, and data that are there."""

from __future__ import annotations

import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from odograph.errors import InputError, OdographError
from odograph.recording.file_facts import check_is_hdf5, first_line, links_of, read_file_facts
from odograph.recording.held import FEW_BYTES, LARGEST_RATIO, byte_count, extent_of, memory
from odograph.recording.links import Links
from odograph.recording.model import FileFacts, Finding, finding
from odograph.settings.intake import IntakeSettings

_TIME_ZONE = re.compile(r"(Z|[+-]\d{2}:?\d{2})$")


@dataclass
class OpenRecording:
    """An NWB file held open for reading.

    `places` maps the place of every object in the file (`processing/behavior/Position/led`) to the object
    that pynwb made of it, `aliases` each link to the place it stands for. `findings` gathers what is worth a
    warning.
    """

    path: Path
    nwbfile: Any
    facts: FileFacts
    places: dict[str, Any]
    aliases: dict[str, str]
    lost_places: tuple[str, ...] = ()
    findings: list[Finding] = field(default_factory=list)

    def refuse(
        self, found: str, *, place: str | None = None, expected: str | None = None, remedy: str | None = None
    ) -> InputError:
        """The error that refuses this file; to be raised by the caller."""
        return InputError(found, file=str(self.path), place=place, expected=expected, remedy=remedy)

    def note(self, level: str, found: str, **facts: str | None) -> None:
        """Add a finding (`warn` or `note`)."""
        self.findings.append(finding(level, found, **facts))

    def array(self, data: Any, place: str, part: slice | None = None) -> np.ndarray:
        """Read a data set, whole or in part; a damaged one is refused."""
        self.check_held(data, place, part)
        try:
            if part is None:
                part = slice(None) if np.ndim(data) else ()
            return np.asarray(data[part])
        except Exception as error:
            # Of damaged data h5py raises whatever HDF5 stumbled over, down to KeyError and TypeError.
            raise self._damaged(place, error) from error

    def _damaged(self, place: str, error: Exception) -> InputError:
        return self.refuse(
            f"the data cannot be read ({first_line(error)})",
            place=place,
            expected="data that are whole",
            remedy="copy the file anew from its source; this copy is damaged",
        )

    def check_held(self, data: Any, place: str, part: slice | None = None) -> None:
        """Refuse data that are only declared, or lie outside the file, before memory is taken for them.

        Raises
        ------
        InputError
            A shape beyond the bytes that the file holds for it or beyond this machine's memory; data kept
            in a file of raw bytes, or in a virtual data set whose source is gone.
        """
        try:
            needed, held, outside = extent_of(data, part)
        except Exception as error:
            raise self._damaged(place, error) from error
        if outside:
            raise self.refuse(
                f"the data lie outside the file, in {outside}",
                place=place,
                expected="data in the file itself, or a link to another NWB file; changes elsewhere would go "
                "unnoticed",
                remedy="write a copy of the file that holds its data (h5repack does that)",
            )
        if held is not None and needed > max(FEW_BYTES, LARGEST_RATIO * held):
            raise self.refuse(
                f"{byte_count(needed)} are declared, {byte_count(held)} are there",
                place=place,
                expected="about as many data as the shape says",
                remedy="copy the file anew from its source, or write the data set in the shape of its data",
            )
        if needed > memory():
            raise self.refuse(
                f"the data take {byte_count(needed)}",
                place=place,
                expected=f"no more than this machine's memory of {byte_count(memory())}",
                remedy="check the place in the settings of intake, or read the file on a larger machine",
            )

    def numbers(self, data: Any, place: str, part: slice | None = None) -> np.ndarray:
        """Read a data set of numbers as float64; one of another type is refused."""
        stored = self.array(data, place, part)
        if stored.dtype.kind not in "fiub":
            raise self.refuse(
                f"data of type {stored.dtype}",
                place=place,
                expected="numbers",
                remedy="check the place in the settings of intake, or write the data anew as numbers",
            )
        return stored.astype(np.float64)

    def resolve(self, place: str) -> str | None:
        """Turn a place given by the user into a place of the file; None when nothing is there."""
        wanted = place.strip("/")
        if wanted in self.places:
            return wanted
        for link in sorted(self.aliases, key=len, reverse=True):
            linked = self.aliases[link] + wanted.removeprefix(link)
            if (wanted == link or wanted.startswith(f"{link}/")) and linked in self.places:
                return linked
        ends = [known for known in self.places if known.endswith(f"/{wanted}")]
        return ends[0] if len(ends) == 1 else None


@contextmanager
def open_recording(path: str | Path, settings: IntakeSettings) -> Iterator[OpenRecording]:
    """Open an NWB file for reading; nothing in it is changed and no data are read yet.

    Parameters
    ----------
    path : str or Path
        The file.
    settings : IntakeSettings
        `missing_links` is used here.

    Yields
    ------
    OpenRecording

    Raises
    ------
    InputError
        The file is missing, empty, truncated, not HDF5, not NWB, older than NWB 2, malformed, locked, or has
        links to nowhere.
    """
    path = Path(path)
    check_is_hdf5(path)
    links = links_of(path)
    facts = replace(read_file_facts(path), linked_files=links.files)
    _check_missing(path, links, settings)
    pynwb = _import_pynwb()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        io, nwbfile, places, aliases = _read(pynwb, path, links)
        try:
            lost = tuple(link.place for link in links.missing)
            opened = OpenRecording(path, nwbfile, facts, places, aliases, lost)
            for link in links.missing:
                opened.note(
                    "warn",
                    f"the link leads nowhere: {link.describe()}",
                    place=link.place,
                    expected="the linked file beside this one",
                    remedy="put the linked file back if its data are wanted",
                )
            _check_times_of_file(opened)
            yield opened
        except Exception as error:
            if isinstance(error, OdographError) or not _is_of_the_file(error):
                raise
            raise opened.refuse(
                f"the file is damaged: reading it ended with {_reason(error)}",
                expected="an NWB file that is whole",
                remedy="copy it anew from its source; `pynwb-validate` may tell which object is at fault",
            ) from error
        finally:
            io.close()


def _is_of_the_file(error: BaseException) -> bool:
    """Whether an exception was raised within the libraries that read the file."""
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    module = trace.tb_frame.f_globals.get("__name__", "") if trace is not None else ""
    return module.partition(".")[0] in ("h5py", "hdmf", "pynwb")


def _import_pynwb() -> Any:
    try:
        import pynwb
        import pynwb.behavior
        import pynwb.event
        import pynwb.misc
    except OSError as error:
        raise OdographError(
            f"pynwb cannot be loaded ({first_line(error)})",
            expected="a cache folder that can be written",
            remedy="set the environment variable XDG_CACHE_HOME to a folder you can write to",
        ) from error
    return pynwb


def _check_missing(path: Path, links: Links, settings: IntakeSettings) -> None:
    lost = links.missing
    if lost and settings.missing_links == "refuse":
        raise InputError(
            f"{len(lost)} link(s) lead nowhere: " + "; ".join(link.describe() for link in lost[:8]),
            file=str(path),
            place=lost[0].place,
            expected="every linked file at the place the link names",
            remedy="put the linked files back, or set intake.missing_links to warn if they are not needed",
        )


def _read(pynwb: Any, path: Path, links: Links) -> tuple[Any, Any, dict[str, Any], dict[str, str]]:
    io = None
    try:
        io = pynwb.NWBHDF5IO(path, "r", load_namespaces=True)
        nwbfile = io.read()
        return io, nwbfile, *_places(io, nwbfile)
    except Exception as error:
        # pynwb and hdmf raise many kinds for a malformed file, down to KeyError and TypeError.
        if io is not None:
            io.close()
        place = re.search(r"root/([^\s'\")]+)", str(error))
        lost = f"; {len(links.missing)} link(s) of the file lead nowhere" if links.missing else ""
        raise InputError(
            f"malformed NWB: {_reason(error)}{lost}",
            file=str(path),
            place=place.group(1) if place else None,
            expected="a file that pynwb can read",
            remedy=("put the linked files back, or " if lost else "")
            + "run `pynwb-validate` on the file and mend the object it names; every part has to be readable",
        ) from error


def _reason(error: BaseException) -> str:
    """What hdmf says went wrong, without the dump of the object that it puts before it."""
    _, cut, cause = str(error).rpartition("due to:")
    text = (cause.strip(" )\"'") if cut else first_line(error)).split("\n")[0]
    return f"{type(error).__name__}: {text[:240]}"


def _places(io: Any, nwbfile: Any) -> tuple[dict[str, Any], dict[str, str]]:
    """Place of every object of the file, and what each link among its groups stands for."""
    names: dict[int, str] = {}
    links: list[tuple[str, Any]] = []
    aliases: dict[str, str] = {}
    _name_builders(io.manager.get_builder(nwbfile), "", names, links)
    # What lies in another file has no place in this one but that of the link. Such a link may hold links
    # in turn, so the list grows while it is walked.
    for place, target in links:
        if id(target) in names:
            aliases[place] = names[id(target)]
        else:
            _name_builders(target, place, names, links)
    places = {}
    for thing in nwbfile.objects.values():
        place = names.get(id(io.manager.get_builder(thing)))
        if place:
            places.setdefault(place, thing)
    return dict(sorted(places.items())), aliases


def _name_builders(builder: Any, place: str, names: dict[int, str], links: list[tuple[str, Any]]) -> None:
    names[id(builder)] = place
    above = f"{place}/" if place else ""
    for name, group in getattr(builder, "groups", {}).items():
        _name_builders(group, f"{above}{name}", names, links)
    for name, dataset in getattr(builder, "datasets", {}).items():
        names[id(dataset)] = f"{above}{name}"
    links.extend((f"{above}{name}", link.builder) for name, link in getattr(builder, "links", {}).items())


def _check_times_of_file(opened: OpenRecording) -> None:
    start = opened.facts.session_start_time
    if start is not None and not _TIME_ZONE.search(start):
        opened.note(
            "warn",
            f"the session's start has no time zone: {start}",
            place="session_start_time",
            expected="ISO 8601 with an offset from UTC",
            remedy="nothing is computed from it; write the offset when the file is next made",
        )
    reference = opened.nwbfile.timestamps_reference_time
    if reference is not None and reference != opened.nwbfile.session_start_time:
        opened.note(
            "warn",
            f"the reference time {reference.isoformat()} differs from the session's start",
            place="timestamps_reference_time",
            expected="all times of the file on one axis",
            remedy="all times are taken as they stand; make sure that no writer subtracted the difference "
            "from some of them",
        )
