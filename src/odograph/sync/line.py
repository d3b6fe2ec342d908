"""Straight lines through pairs of times: plain, robust, and by agreement of a few scattered anchors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

# Huber's constant: 95 % efficiency on normal residuals (Huber, Robust Statistics, 1981).
_HUBER = 1.345
_MAD_TO_SD = 1.4826
_TRIM = 5.0
_SMALLEST = 1e-9


@dataclass(frozen=True)
class Line:
    """A straight line and the standard errors of its two numbers, y = slope x + intercept."""

    slope: float
    intercept: float
    slope_se: float
    intercept_se: float
    residual_sd: float

    def at(self, x: np.ndarray) -> np.ndarray:
        """The line's value at `x`."""
        return self.slope * x + self.intercept


def least_squares_line(x: np.ndarray, y: np.ndarray, weights: np.ndarray | None = None) -> Line:
    """Weighted least squares of a straight line.

    Parameters
    ----------
    x, y : ndarray (n,)
        At least three pairs.
    weights : ndarray (n,), optional
        Non-negative weights; equal if left out.

    Returns
    -------
    Line
        The standard error of the slope is s / sqrt(sum w (x - mean)^2) with n - 2 degrees of freedom.
    """
    w = np.ones(len(x)) if weights is None else weights
    total = w.sum()
    x_mean, y_mean = (w @ x) / total, (w @ y) / total
    # Clocks may count from 1970: everything is done about the means to keep the digits.
    dx, dy = x - x_mean, y - y_mean
    sxx = w @ (dx * dx)
    slope = (w @ (dx * dy)) / sxx
    residual = dy - slope * dx
    sd = np.sqrt((w @ (residual * residual)) / max(total - 2, 1e-300)) if len(x) > 2 else np.nan
    return Line(
        slope=float(slope),
        intercept=float(y_mean - slope * x_mean),
        slope_se=float(sd / np.sqrt(sxx)),
        intercept_se=float(sd * np.sqrt(1 / total + x_mean**2 / sxx)),
        residual_sd=float(sd),
    )


def robust_line(x: np.ndarray, y: np.ndarray, rounds: int = 30) -> Line:
    """Straight line that pairs far off do not pull.

    Huber's M-estimator by reweighting (Huber, Robust Statistics, 1981), then least squares over the pairs
    within `_TRIM` robust standard deviations of it, repeated until the choice of pairs is settled. Where all
    residuals are normal, hardly any pair is left out and the standard errors are those of least squares.

    Parameters
    ----------
    x, y : ndarray (n,)
        At least three pairs, at least two different x.
    rounds : int
        Most repetitions of each part.
    """
    line = least_squares_line(x, y)
    for _ in range(rounds):
        residual, scale = _residuals(x, y, line)
        if scale == 0:
            break
        new = least_squares_line(x, y, np.minimum(1.0, _HUBER * scale / np.maximum(np.abs(residual), 1e-300)))
        settled = abs(new.slope - line.slope) <= 1e-3 * new.slope_se
        line = new
        if settled:
            break
    kept = np.zeros(len(x), bool)
    for _ in range(rounds):
        residual, scale = _residuals(x, y, line)
        near = np.abs(residual) <= max(_TRIM * scale, _SMALLEST)
        if near.sum() < 3 or (near == kept).all():
            break
        kept = near
        line = least_squares_line(x[kept], y[kept])
    return line


def _residuals(x, y, line):
    """Residuals about their median, and their robust standard deviation."""
    residual = (y - y.mean()) - line.slope * (x - x.mean())
    residual -= np.median(residual)
    return residual, _MAD_TO_SD * float(np.median(np.abs(residual)))


def agreeing_line(
    x: np.ndarray, y: np.ndarray, tolerance: float, slope_reach: float
) -> tuple[float, float, np.ndarray]:
    """The line of slope near one, through two of the points, that most points agree with.

    Parameters
    ----------
    x, y : ndarray (n,)
        Points, many of which may be far off.
    tolerance : float
        Vertical distance within which a point agrees.
    slope_reach : float
        The slope may differ from one by this much.

    Returns
    -------
    slope, intercept : float
        nan where no two points make a permitted line.
    agrees : ndarray (n,) of bool
    """
    best = (np.nan, np.nan, np.zeros(len(x), bool))
    best_key = (0, -np.inf)
    for i in range(len(x)):
        for j in range(i + 1, len(x)):
            slope = (y[j] - y[i]) / (x[j] - x[i])
            if abs(slope - 1.0) > slope_reach:
                continue
            distance = np.abs((y - y[i]) - slope * (x - x[i]))
            agrees = distance <= tolerance
            key = (int(agrees.sum()), -float(distance[agrees].sum()))
            if key > best_key:
                best_key = key
                best = (float(slope), float(y[i] - slope * x[i]), agrees)
    return best
