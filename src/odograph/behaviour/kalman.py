"""Kalman filter and Rauch-Tung-Striebel smoother of a point that moves in the plane.

Each axis has the state (position, velocity); only position is measured, with the same noise on both axes, so
one covariance serves both. The step from one time to the next is

    position += step velocity,  covariance = F covariance F' + Q,  F = [[1, step], [0, 1]],

with Q given step by step, which leaves the process model to the caller: white acceleration of intensity q in
continuous time has Q = q [[s^3/3, s^2/2], [s^2/2, s]]. Sources: Kalman, J. Basic Eng. 82:35 (1960); Rauch,
Tung & Striebel, AIAA J. 3:1445 (1965); innovation gating as in Bar-Shalom, Li & Kirubarajan, Estimation with
Applications to Tracking and Navigation (2001).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.compiled import compiled

_LOG_2PI = float(np.log(2 * np.pi))


@dataclass(frozen=True, eq=False)
class Filtered:
    """States before and after each measurement.

    Attributes
    ----------
    predicted, updated : ndarray (n, 4)
        x, y, velocity x, velocity y before and after the measurement at each time.
    predicted_cov, updated_cov : ndarray (n, 3)
        Variance of position, covariance, variance of velocity, per axis.
    accepted : ndarray (n,) of bool
        Measurements that were used.
    refused : ndarray (n,) of bool
        Measurements outside the gate.
    starts : ndarray (n,) of bool
        Entries at which the filter began anew.
    log_likelihood : float
        Of the measurements; one outside the gate counts as if it were on the gate.
    """

    predicted: np.ndarray
    updated: np.ndarray
    predicted_cov: np.ndarray
    updated_cov: np.ndarray
    accepted: np.ndarray
    refused: np.ndarray
    starts: np.ndarray
    log_likelihood: float


def white_acceleration(step_s: np.ndarray, intensity: float) -> np.ndarray:
    """Process noise (n, 3) of white acceleration of the given intensity (m^2/s^3) over steps (n,) in s."""
    return intensity * np.column_stack([step_s**3 / 3, step_s**2 / 2, step_s])


@compiled
def _filter(measured, step, process, starts, prior_xy, prior_cov, noise, gate, patience):
    n = len(step)
    predicted, updated = np.empty((n, 4)), np.empty((n, 4))
    predicted_cov, updated_cov = np.empty((n, 3)), np.empty((n, 3))
    accepted, refused = np.zeros(n, np.bool_), np.zeros(n, np.bool_)
    began = starts.copy()
    log_likelihood = 0.0
    since = 0.0
    x, y, u, v = prior_xy[0], prior_xy[1], 0.0, 0.0
    p, c, w = prior_cov[0], 0.0, prior_cov[1]
    for i in range(n):
        since += step[i]
        seen = not (np.isnan(measured[i, 0]) or np.isnan(measured[i, 1]))
        if seen and since > patience:
            began[i] = True
        if began[i]:
            since = 0.0
            x, y, u, v = prior_xy[0], prior_xy[1], 0.0, 0.0
            p, c, w = prior_cov[0], 0.0, prior_cov[1]
        else:
            s = step[i]
            x += s * u
            y += s * v
            p += 2 * s * c + s * s * w + process[i, 0]
            c += s * w + process[i, 1]
            w += process[i, 2]
        predicted[i] = x, y, u, v
        predicted_cov[i] = p, c, w
        if seen:
            total = p + noise
            dx, dy = measured[i, 0] - x, measured[i, 1] - y
            distance = (dx * dx + dy * dy) / total
            log_likelihood -= _LOG_2PI + np.log(total) + 0.5 * min(distance, gate)
            if distance <= gate:
                gain_p, gain_u = p / total, c / total
                x += gain_p * dx
                y += gain_p * dy
                u += gain_u * dx
                v += gain_u * dy
                w -= c * gain_u
                c = c * noise / total
                p = p * noise / total
                accepted[i] = True
                since = 0.0
            else:
                refused[i] = True
        updated[i] = x, y, u, v
        updated_cov[i] = p, c, w
    return predicted, updated, predicted_cov, updated_cov, accepted, refused, began, log_likelihood


def kalman_filter(
    measured: np.ndarray,
    step_s: np.ndarray,
    process: np.ndarray,
    starts: np.ndarray,
    *,
    prior_xy: tuple[float, float],
    prior_variances: tuple[float, float],
    noise_variance: float,
    gate_sd: float = np.inf,
    patience_s: float = np.inf,
) -> Filtered:
    """Filter the measurements of one point.

    Parameters
    ----------
    measured : ndarray (n, 2)
        Positions; NaN where nothing was measured (the state is still computed there).
    step_s : ndarray (n,)
        Time since the entry before, s (0 is allowed; the first is not used).
    process : ndarray (n, 3)
        Process noise of each step: variance of position, covariance, variance of velocity, per axis.
    starts : ndarray (n,) of bool
        Entries at which the filter forgets and begins with the prior.
    prior_xy : (float, float)
        Position expected before the first measurement.
    prior_variances : (float, float)
        Variance of position and of velocity before the first measurement.
    noise_variance : float
        Variance of the measurement, per axis.
    gate_sd : float
        Measurements whose innovation is longer than this many standard deviations (per axis) are refused.
    patience_s : float
        At the first measurement later than this after the last one used, the filter begins anew: by then a
        prediction says little, and one that has run astray would refuse what is true.
    """
    return Filtered(
        *_filter(
            np.ascontiguousarray(measured, float),
            np.ascontiguousarray(step_s, float),
            np.ascontiguousarray(process, float),
            np.ascontiguousarray(starts, bool),
            np.array(prior_xy, float),
            np.array(prior_variances, float),
            float(noise_variance),
            float(gate_sd) ** 2,
            float(patience_s),
        )
    )


@compiled
def _smooth(predicted, updated, predicted_cov, updated_cov, step, starts):
    n = len(step)
    state, cov = updated.copy(), updated_cov.copy()
    for i in range(n - 2, -1, -1):
        if starts[i + 1]:
            continue
        s = step[i + 1]
        p, c, w = updated_cov[i]
        pp, pc, pw = predicted_cov[i + 1]
        determinant = pp * pw - pc * pc
        # Gain G = P F' inverse(P predicted), written out for two by two.
        a, b = p + s * c, c + s * w
        g00, g01 = (a * pw - c * pc) / determinant, (c * pp - a * pc) / determinant
        g10, g11 = (b * pw - w * pc) / determinant, (w * pp - b * pc) / determinant
        for axis in range(2):
            d_position = state[i + 1, axis] - predicted[i + 1, axis]
            d_velocity = state[i + 1, 2 + axis] - predicted[i + 1, 2 + axis]
            state[i, axis] = updated[i, axis] + g00 * d_position + g01 * d_velocity
            state[i, 2 + axis] = updated[i, 2 + axis] + g10 * d_position + g11 * d_velocity
        dp, dc, dw = cov[i + 1, 0] - pp, cov[i + 1, 1] - pc, cov[i + 1, 2] - pw
        h00, h01 = g00 * dp + g01 * dc, g00 * dc + g01 * dw
        h10, h11 = g10 * dp + g11 * dc, g10 * dc + g11 * dw
        cov[i, 0] = p + h00 * g00 + h01 * g01
        cov[i, 1] = c + h00 * g10 + h01 * g11
        cov[i, 2] = w + h10 * g10 + h11 * g11
    return state, cov


def rts_smoother(filtered: Filtered, step_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Smooth what `kalman_filter` gave, with the same steps.

    Returns
    -------
    state : ndarray (n, 4)
        x, y, velocity x, velocity y given all measurements.
    cov : ndarray (n, 3)
        Variance of position, covariance, variance of velocity, per axis.
    """
    return _smooth(
        filtered.predicted,
        filtered.updated,
        filtered.predicted_cov,
        filtered.updated_cov,
        np.ascontiguousarray(step_s, float),
        filtered.starts,
    )
