"""Choosing a place: the one the settings name, else the only candidate, else a list to choose from."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from odograph.recording.opening import OpenRecording

UNREAD = "none"


def choose_one(
    opened: OpenRecording, what: str, key: str, wanted: str | None, candidates: Mapping[str, Any]
) -> str:
    """The place of a thing that has to be there; as `choose` with `required`."""
    place = choose(opened, what, key, wanted, candidates, required=True)
    if place is None:
        raise ValueError(f"no place was chosen for {what}")
    return place


def describe(thing: Any) -> str:
    """Kind, shape, unit and sampling of an object of the file, in a few words."""
    words = [type(thing).__name__]
    data = getattr(thing, "data", None)
    shape = getattr(data, "shape", None)
    if shape is not None:
        words.append("x".join(str(length) for length in shape))
    if getattr(thing, "unit", None):
        words.append(str(thing.unit))
    if getattr(thing, "rate", None):
        words.append(f"{thing.rate:g} Hz")
    if hasattr(thing, "colnames"):
        words.append(f"{len(thing.id)} rows: {', '.join(thing.colnames)}")
    return ", ".join(words)


def list_candidates(candidates: Mapping[str, Any]) -> str:
    """Candidates as one line."""
    return "; ".join(f"{place} ({describe(thing)})" for place, thing in candidates.items())


def choose(
    opened: OpenRecording,
    what: str,
    key: str,
    wanted: str | None,
    candidates: Mapping[str, Any],
    *,
    required: bool,
) -> str | None:
    """Settle which object of the file is meant.

    Parameters
    ----------
    opened : OpenRecording
        The file.
    what : str
        The signal in words.
    key : str
        The setting that names it.
    wanted : str or None
        The place the settings name; `none` asks for nothing.
    candidates : Mapping[str, object]
        The places it may be at.
    required : bool
        Whether it is an error when there is none.

    Returns
    -------
    str or None
        The place; None when there is nothing to read.

    Raises
    ------
    InputError
        Nothing at the named place, no candidate where one is required, or several and no choice.
    """
    if wanted == UNREAD and not required:
        return None
    if wanted is not None:
        place = opened.resolve(wanted)
        if place is None:
            raise _nothing_there(opened, what, key, wanted, candidates)
        return place
    if len(candidates) == 1:
        return next(iter(candidates))
    if candidates:
        raise opened.refuse(
            f"{len(candidates)} places may hold {what}: {list_candidates(candidates)}",
            expected="one, or a choice among them",
            remedy=f"set intake.{key}, for instance `{key}: {next(iter(candidates))}`",
        )
    if required:
        raise opened.refuse(
            f"no {what} in the file",
            expected=f"{what} that the settings or the file's own types make known",
            remedy=f"add it to the file, or set intake.{key} if it is kept under another type",
        )
    return None


def _nothing_there(
    opened: OpenRecording, what: str, key: str, wanted: str, candidates: Mapping[str, Any]
) -> Exception:
    lost = [place for place in opened.lost_places if wanted.strip("/").startswith(place)]
    if lost:
        return opened.refuse(
            f"the link {lost[0]} leads nowhere, so {what} is missing",
            place=wanted,
            expected=what,
            remedy="put the linked file back where the link names it",
        )
    alike = [place for place in opened.places if place.rpartition("/")[2] == wanted.rpartition("/")[2]]
    if len(alike) > 1:
        hint = f"several objects end so: {', '.join(alike)}"
    else:
        hint = f"candidates: {list_candidates(candidates)}" if candidates else "the file has no candidate"
    return opened.refuse(
        f"there is nothing at this place; {hint}",
        place=wanted,
        expected=what,
        remedy=f"correct intake.{key}; `odograph look FILE` lists what the file holds",
    )
