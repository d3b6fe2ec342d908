"""The longest believable chain of tracked samples: jumps and reflections are what it leaves out."""

from __future__ import annotations

import numpy as np

from odograph.compiled import compiled

# Runs looked back over for the run that came before; reflections in between are far fewer.
_LOOK_BACK = 60


@compiled
def _best_chain(first, last, length, time_s, xy_m, max_speed, slack):
    n = len(first)
    score = np.empty(n)
    before = np.full(n, -1, np.int64)
    for k in range(n):
        score[k] = length[k]
        best = 0.0
        for j in range(max(0, k - _LOOK_BACK), k):
            elapsed = time_s[first[k]] - time_s[last[j]]
            dx, dy = xy_m[first[k], 0] - xy_m[last[j], 0], xy_m[first[k], 1] - xy_m[last[j], 1]
            if np.sqrt(dx * dx + dy * dy) <= max_speed * elapsed + slack and score[j] > best:
                best = score[j]
                before[k] = j
        score[k] += best
    return score, before


def believable_chain(
    time_s: np.ndarray, xy_m: np.ndarray, max_speed_m_s: float, slack_m: float
) -> np.ndarray:
    """Samples of one point that can all be true together.

    The samples are cut into runs wherever a step is faster than `max_speed_m_s`; of all sequences of runs
    that link at a permitted speed the one with most samples is kept (dynamic programming). A reflection that
    stays in place for a second is a run like another, but it does not link with what is before and after it.

    Parameters
    ----------
    time_s : ndarray (n,)
        s, ascending.
    xy_m : ndarray (n, 2)
        Positions, NaN where lost.
    max_speed_m_s : float
        Fastest believable movement.
    slack_m : float
        Distance that noise may add to any step.

    Returns
    -------
    ndarray (n,) of bool
        True where a sample is there and believed.
    """
    believed = np.zeros(len(time_s), bool)
    seen = np.flatnonzero(np.isfinite(xy_m).all(axis=1))
    if not len(seen):
        return believed
    distance = np.hypot(*np.diff(xy_m[seen], axis=0).T)
    cut = np.flatnonzero(distance > max_speed_m_s * np.diff(time_s[seen]) + slack_m)
    first, last = seen[np.append(0, cut + 1)], seen[np.append(cut, len(seen) - 1)]
    length = np.diff(np.append(np.append(0, cut + 1), len(seen))).astype(float)
    score, before = _best_chain(first, last, length, time_s, xy_m, max_speed_m_s, slack_m)
    k = int(np.argmax(score))
    while k >= 0:
        believed[first[k] : last[k] + 1] = True
        k = int(before[k])
    return believed & np.isfinite(xy_m).all(axis=1)
