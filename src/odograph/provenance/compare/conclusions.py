"""Which conclusions changed between two runs, and which change of the inputs each follows from."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import pandas as pd

from odograph.provenance.compare.differences import Difference
from odograph.provenance.compare.match import Relation

_SAID = ("status", "selected_model", "encoded", "speed_shape")
RATE_ONLY = "its q, which is judged over all units of the study"


@dataclass(frozen=True)
class Change:
    """One statement about a unit that is another now.

    Parameters
    ----------
    session : str
    before, after : int
        The unit's number in each run.
    what : str
        Such as "encodes position" or "speed_shape".
    was, now : str
        What was said of it.
    because : str
        The change of inputs that it follows from.
    """

    session: str
    before: int
    after: int
    what: str
    was: str
    now: str
    because: str


def changed_conclusions(
    old: pd.DataFrame,
    new: pd.DataFrame,
    relations: Mapping[str, Iterable[Relation]],
    differences: Iterable[Difference],
) -> list[Change]:
    """Statements that differ, of units that are one to one in both runs; sorted by session and unit.

    Parameters
    ----------
    old, new : DataFrame
        The tables of units of the two runs.
    relations : mapping of str to iterable of Relation
        By session.
    differences : iterable of Difference
        From `input_differences`.
    """
    rows = [_by_unit(table) for table in (old, new)]
    differences, found = list(differences), []
    for session in sorted(relations):
        for relation in relations[session]:
            if relation.kind not in ("same", "changed"):
                continue
            (before,), (after,) = relation.before, relation.after
            was, now = rows[0].get((session, before)), rows[1].get((session, after))
            if was is None or now is None:
                continue
            because = _because(session, relation.kind, differences)
            found += [
                Change(session, before, after, what, told, tells, because)
                for what, told, tells in _statements(was, now)
            ]
    return found


def _by_unit(table: pd.DataFrame) -> dict[tuple[str, int], dict[str, Any]]:
    return {(str(row["session"]), int(row["unit"])): row for row in table.to_dict("records")}


def _statements(was: Mapping[str, Any], now: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    found = []
    for name in _SAID:
        told, tells = _plain(was.get(name)), _plain(now.get(name))
        if told != tells:
            found.append((name, told, tells))
    for verb, end in (("encodes", ""), ("sharpens", "_sharpens"), ("blunts", "_blunts")):
        for name in sorted({*was, *now}):
            own = name.startswith("encodes_") if verb == "encodes" else name.endswith(end)
            if own and bool(was.get(name)) != bool(now.get(name)):
                variable = name.removeprefix("encodes_").removesuffix(end).replace("_", " ")
                what = f"encodes {variable}" if verb == "encodes" else f"{variable} {verb} with speed"
                found.append((what, _yes(was.get(name)), _yes(now.get(name))))
    return found


def _yes(value: Any) -> str:
    return "yes" if bool(value) else "no"


def _plain(value: Any) -> str:
    missing = value is None or (isinstance(value, float) and math.isnan(value))
    return "" if missing else str(value)


def _because(session: str, kind: str, differences: list[Difference]) -> str:
    """The changes of the inputs that bear on a unit: spikes, signals, settings, code, libraries."""
    causes = ["its spikes"] if kind == "changed" else []
    concerns = [one for one in differences if one.session in (None, session)]
    signals = [one.what for one in concerns if one.kind == "signal"]
    if signals:
        causes.append(f"signals of its session ({', '.join(signals)})")
    settings = [one.what for one in concerns if one.kind == "setting"]
    if settings:
        causes.append(f"settings ({', '.join(dict.fromkeys(settings))})")
    code = [one.what for one in concerns if one.kind == "code"]
    if code:
        causes.append(f"code ({', '.join(code)})")
    libraries = [one.what for one in concerns if one.kind == "software"]
    if libraries and not causes:
        causes.append(f"libraries ({', '.join(libraries)})")
    return "; ".join(causes) or RATE_ONLY


def composition_changes(old: pd.DataFrame, new: pd.DataFrame) -> list[dict[str, Any]]:
    """Shares of the whole population before and after, with their intervals, for every category of either."""
    found = []
    tables = [
        {(row["kind"], row["category"]): row for row in table[table["level"] == "all"].to_dict("records")}
        for table in (old, new)
    ]
    for kind, category in dict.fromkeys([*tables[0], *tables[1]]):
        sides = [table.get((kind, category)) for table in tables]
        row: dict[str, Any] = {"kind": kind, "category": category}
        for name, side in zip(("before", "after"), sides, strict=True):
            for key in ("k", "n", "share", "low", "high"):
                row[f"{name}_{key}"] = None if side is None else side[key]
        found.append(row)
    return found
