"""Exchanges of the two tracked points, found by the most probable course of a two-state chain."""

from __future__ import annotations

import numpy as np

from odograph.compiled import compiled

_NOISE_M = 0.002
_TYPICAL_SPEED_M_S = 0.5
_HIGHEST_COST = 20.0
# Log-odds per sample against being exchanged: small, as one exchange may last for seconds.
_EXCHANGED_COST = 0.01
# Animals mostly face where they go; per sample this weighs little, as neighbours in time tell the same.
_FACING_WEIGHT = 0.05
_FACING_SPEED_M_S = 0.08
_FACING_STEPS = 5


@compiled
def _most_probable(time_s, front, back, facing):
    n = len(time_s)
    came_from = np.zeros((n, 2), np.int8)
    cost = np.array([0.0, _EXCHANGED_COST])
    for i in range(n):
        if i > 0:
            elapsed = time_s[i] - time_s[i - 1]
            variance = 2 * _NOISE_M**2 + (_TYPICAL_SPEED_M_S * elapsed) ** 2
            stay, cross = 0.0, 0.0
            for axis in range(2):
                stay += (front[i, axis] - front[i - 1, axis]) ** 2 + (back[i, axis] - back[i - 1, axis]) ** 2
                cross += (front[i, axis] - back[i - 1, axis]) ** 2 + (back[i, axis] - front[i - 1, axis]) ** 2
            stay = min(0.5 * stay / variance, _HIGHEST_COST)
            cross = min(0.5 * cross / variance, _HIGHEST_COST)
            new = np.empty(2)
            for state in range(2):
                same, other = cost[state] + stay, cost[1 - state] + cross
                came_from[i, state] = state if same <= other else 1 - state
                new[state] = min(same, other)
            cost = new
        cost[0] -= _FACING_WEIGHT * facing[i]
        cost[1] += _FACING_WEIGHT * facing[i] + _EXCHANGED_COST
    states = np.zeros(n, np.bool_)
    state = 0 if cost[0] <= cost[1] else 1
    for i in range(n - 1, -1, -1):
        states[i] = state == 1
        state = came_from[i, state]
    return states


def exchanged_samples(time_s: np.ndarray, front_m: np.ndarray, back_m: np.ndarray) -> np.ndarray:
    """Samples in which the two points are exchanged.

    The most probable course of a chain of two states (Viterbi, IEEE Trans. Inf. Theory 13:260, 1967): a step
    costs the squared way both points would have gone, a state costs a little for being exchanged and for
    facing away from the movement. Samples with one point missing, or with the points not at their usual
    distance, take the state of the sample before. If more than half of all samples came out exchanged, the
    points are taken as the file names them and only the rest is exchanged.

    Parameters
    ----------
    time_s : ndarray (n,)
        s, ascending.
    front_m, back_m : ndarray (n, 2)
        Tracked points, NaN where lost.

    Returns
    -------
    ndarray (n,) of bool
    """
    exchanged = np.zeros(len(time_s), bool)
    apart = np.hypot(*(front_m - back_m).T)
    both = np.isfinite(apart)
    if both.sum() < 2:
        return exchanged
    usual = float(np.median(apart[both]))
    rows = np.flatnonzero(both & (apart > 0.4 * usual) & (apart < 1.8 * usual))
    if len(rows) < 2:
        return exchanged
    facing = _facing(time_s[rows], front_m[rows], back_m[rows])
    states = _most_probable(time_s[rows], front_m[rows], back_m[rows], facing)
    if states.mean() > 0.5:
        states = ~states
    before = np.clip(np.searchsorted(rows, np.arange(len(time_s)), side="right") - 1, 0, None)
    exchanged = states[before]
    return exchanged & (np.isfinite(front_m).all(axis=1) | np.isfinite(back_m).all(axis=1))


def facing_cosine(time_s: np.ndarray, front_m: np.ndarray, back_m: np.ndarray) -> float:
    """Mean cosine between the direction of the head and of the movement while moving; nan if never moving."""
    rows = np.flatnonzero(np.isfinite(front_m).all(axis=1) & np.isfinite(back_m).all(axis=1))
    if len(rows) < 2 * _FACING_STEPS + 1:
        return float("nan")
    facing = _facing(time_s[rows], front_m[rows], back_m[rows])
    return float(facing[facing != 0].mean()) if (facing != 0).any() else float("nan")


def _facing(time_s, front, back):
    """Cosine between head and movement at each sample; 0 where the animal hardly moves."""
    middle, head = 0.5 * (front + back), front - back
    ahead = np.minimum(np.arange(len(time_s)) + _FACING_STEPS, len(time_s) - 1)
    behind = np.maximum(np.arange(len(time_s)) - _FACING_STEPS, 0)
    way, elapsed = middle[ahead] - middle[behind], time_s[ahead] - time_s[behind]
    length = np.hypot(*way.T)
    moving = (length > _FACING_SPEED_M_S * elapsed) & (elapsed < 1.0)
    product = (way * head).sum(axis=1)
    scale = np.maximum(length * np.hypot(*head.T), 1e-12)
    return np.where(moving, product / scale, 0.0)
