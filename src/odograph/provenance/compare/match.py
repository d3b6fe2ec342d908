"""Which units of one spike sorting are which of another, by coincident spikes.

Two units are related when the spikes that they share, pair by pair within a tolerance, are at least half of
those of the smaller train. Units that are related, at any distance, are one group: one to one, merged, split,
or rearranged. The order of units does not matter.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

TOLERANCE_S = 0.0005
LEAST_SHARE = 0.5
KINDS = ("same", "changed", "merged", "split", "rearranged", "lost", "new")


@dataclass(frozen=True)
class Relation:
    """Units of a first sorting and those of a second that they became.

    Parameters
    ----------
    kind : str
        One of KINDS: "same" has the same spikes, "changed" is one to one with others.
    before, after : tuple of int
        Units, ascending.
    shared : int
        Coincident spikes within the group.
    """

    kind: str
    before: tuple[int, ...]
    after: tuple[int, ...]
    shared: int


def coincidences(a: np.ndarray, b: np.ndarray, tolerance_s: float = TOLERANCE_S) -> int:
    """Most pairs of a spike of each train, no spike in two pairs, no further apart than the tolerance.

    Parameters
    ----------
    a, b : ndarray, (n,) and (m,)
        Spike times, s, ascending. Pairing each spike with the first that is free and near enough is optimal,
        as all windows are of one width.
    """
    i = j = pairs = 0
    while i < len(a) and j < len(b):
        apart = a[i] - b[j]
        if abs(apart) <= tolerance_s:
            pairs, i, j = pairs + 1, i + 1, j + 1
        elif apart < 0:
            i += 1
        else:
            j += 1
    return pairs


def match_units(
    before: Mapping[int, np.ndarray], after: Mapping[int, np.ndarray], tolerance_s: float = TOLERANCE_S
) -> list[Relation]:
    """Relate the units of two sortings of one recording.

    Parameters
    ----------
    before, after : mapping of int to ndarray
        Spike times of each unit, s, ascending.
    tolerance_s : float
        How far apart two detections of one spike may be.

    Returns
    -------
    list of Relation
        Every unit is in exactly one; sorted by kind, then by units.
    """
    shared = {}
    for (one, other), most in _candidates(before, after, tolerance_s).items():
        smaller = min(len(before[one]), len(after[other]))
        if most >= LEAST_SHARE * smaller:
            found = coincidences(before[one], after[other], tolerance_s)
            if found >= LEAST_SHARE * smaller:
                shared[one, other] = found
    relations = []
    for ones, others in _groups(sorted(before), sorted(after), shared):
        count = sum(shared.get((one, other), 0) for one in ones for other in others)
        kind = _kind(ones, others)
        if kind == "changed" and np.array_equal(before[ones[0]], after[others[0]]):
            kind = "same"
        relations.append(Relation(kind, ones, others, count))
    return sorted(relations, key=lambda one: (KINDS.index(one.kind), one.before, one.after))


def _candidates(
    before: Mapping[int, np.ndarray], after: Mapping[int, np.ndarray], tolerance_s: float
) -> dict[tuple[int, int], int]:
    """For each pair of units with any spikes that near, at most how many they can share."""
    names = sorted(after)
    times = np.concatenate([after[name] for name in names]) if names else np.empty(0)
    owner = np.repeat(np.arange(len(names)), [len(after[name]) for name in names])
    order = np.argsort(times, kind="stable")
    times, owner = times[order], owner[order]
    found = {}
    for one in sorted(before):
        spikes = before[one]
        low = np.searchsorted(times, spikes - tolerance_s * (1 + 1e-9), side="left")
        high = np.searchsorted(times, spikes + tolerance_s * (1 + 1e-9), side="right")
        reach = high - low
        places = np.repeat(low, reach) + np.arange(reach.sum()) - np.repeat(np.cumsum(reach) - reach, reach)
        pairs = np.unique(np.repeat(np.arange(len(spikes)), reach) * max(len(names), 1) + owner[places])
        counts = np.bincount(pairs % max(len(names), 1), minlength=len(names))
        found |= {(one, names[k]): int(counts[k]) for k in np.flatnonzero(counts)}
    return found


def _groups(
    before: list[int], after: list[int], shared: Mapping[tuple[int, int], int]
) -> list[tuple[tuple[int, ...], tuple[int, ...]]]:
    """Connected groups of units, and those that stand alone."""
    waiting = {("before", unit) for unit in before} | {("after", unit) for unit in after}
    edges: dict[tuple[str, int], set[tuple[str, int]]] = {node: set() for node in waiting}
    for one, other in shared:
        edges["before", one].add(("after", other))
        edges["after", other].add(("before", one))
    groups = []
    while waiting:
        group, reached = set(), {min(waiting)}
        while reached:
            node = reached.pop()
            group.add(node)
            reached |= edges[node] - group
        waiting -= group
        sides = (tuple(sorted(unit for side, unit in group if side == name)) for name in ("before", "after"))
        groups.append(tuple(sides))
    return groups


def _kind(before: tuple[int, ...], after: tuple[int, ...]) -> str:
    if not after:
        return "lost"
    if not before:
        return "new"
    if len(before) == len(after) == 1:
        return "changed"
    if len(after) == 1:
        return "merged"
    return "split" if len(before) == 1 else "rearranged"
