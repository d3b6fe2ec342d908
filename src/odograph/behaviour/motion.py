"""How noisy the tracking is and how fast the motion changes, estimated from the tracked points themselves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.behaviour.kalman import kalman_filter, white_acceleration

_STRETCHES = 12
_STRETCH_SAMPLES = 1000
# Start and bounds of the search, in log10: position noise in m, acceleration in m/s^2.
_START = (0.002, 2.0)
_LOWEST, _HIGHEST = (1e-5, 0.02), (0.05, 100.0)
_GATE_SD = 5.0
_SPEED_PRIOR_M_S = 1.0
_POSITION_PRIOR_M = 10.0
_DIGITS = 3


@dataclass(frozen=True)
class MotionModel:
    """Noise of position (m per axis) and the acceleration (m/s^2) that is white from frame to frame.

    `step_s` is the frame interval to which `acceleration_m_s2` belongs.
    """

    position_noise_m: float
    acceleration_m_s2: float
    step_s: float

    @property
    def intensity(self) -> float:
        """Intensity of the white acceleration in continuous time, m^2/s^3."""
        return self.acceleration_m_s2**2 * self.step_s


def estimate_motion(
    time_s: np.ndarray,
    points_m: list[np.ndarray],
    step_s: float,
    longest_gap_s: float,
    *,
    position_noise_m: float | None,
    acceleration_m_s2: float | None,
) -> MotionModel:
    """Maximum likelihood of the Kalman filter's two variances, over stretches spread through the session.

    Parameters
    ----------
    time_s : ndarray (n,)
        Recording clock, s.
    points_m : list of ndarray (n, 2)
        Cleaned points, NaN where lost.
    step_s : float
        Frame interval.
    longest_gap_s : float
        The filter begins anew after longer gaps.
    position_noise_m, acceleration_m_s2 : float or None
        Fixed values; None is estimated.

    Returns
    -------
    MotionModel
        Estimates rounded to three digits, so that they do not hang on the last bit of a processor.
    """
    fixed = (position_noise_m, acceleration_m_s2)
    parts = _stretches(time_s, points_m)
    if None not in fixed or not parts:
        values = [given if given is not None else start for given, start in zip(fixed, _START, strict=True)]
        return MotionModel(values[0], values[1], step_s)

    def cost(free):
        values = _filled(fixed, free)
        return -sum(
            _log_likelihood(part, MotionModel(values[0], values[1], step_s), longest_gap_s) for part in parts
        )

    # Heavy, and of use only when something is to be estimated.
    from scipy.optimize import minimize

    free_rows = [row for row in (0, 1) if fixed[row] is None]
    start = np.log10([_START[row] for row in free_rows])
    bounds = [(np.log10(_LOWEST[row]), np.log10(_HIGHEST[row])) for row in free_rows]
    simplex = np.vstack([start, *(start + 0.3 * np.eye(len(start)))])
    found = minimize(
        cost,
        start,
        method="Nelder-Mead",
        bounds=bounds,
        options={"initial_simplex": simplex, "xatol": 2e-4, "fatol": 1e-3, "maxfev": 200},
    )
    values = _filled(fixed, found.x)
    return MotionModel(
        *(
            value if given is not None else float(f"{value:.{_DIGITS}g}")
            for value, given in zip(values, fixed, strict=True)
        ),
        step_s,
    )


def _filled(fixed, free):
    rest = iter(free)
    return [given if given is not None else 10.0 ** next(rest) for given in fixed]


def _stretches(time_s, points_m):
    """(measured, steps, starts) of stretches of each point, without the samples that were lost."""
    parts = []
    for point in points_m:
        seen = np.flatnonzero(np.isfinite(point[:, 0]))
        if len(seen) < 10:
            continue
        first = np.unique(np.linspace(0, max(len(seen) - _STRETCH_SAMPLES, 0), _STRETCHES).astype(int))
        rows = np.unique((first[:, None] + np.arange(_STRETCH_SAMPLES)).ravel())
        rows = seen[rows[rows < len(seen)]]
        steps = np.diff(time_s[rows], prepend=time_s[rows[0]])
        parts.append((point[rows], steps, np.arange(len(rows)) == 0))
    return parts


def _log_likelihood(part, model, longest_gap_s):
    measured, steps, starts = part
    return kalman_filter(
        measured,
        steps,
        white_acceleration(steps, model.intensity),
        starts,
        prior_xy=(0.0, 0.0),
        prior_variances=(_POSITION_PRIOR_M**2, _SPEED_PRIOR_M_S**2),
        noise_variance=model.position_noise_m**2,
        gate_sd=_GATE_SD,
        patience_s=longest_gap_s,
    ).log_likelihood
