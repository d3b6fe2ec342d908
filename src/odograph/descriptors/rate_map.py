"""Rates per bin of a plane, a line or a circle: spikes over seconds, smoothed by one Gaussian kernel.

Spikes and seconds are smoothed alike and then divided (the estimator of Nadaraya 1964, Theory of Probability
and its Applications 9:141, with time as the design), so a constant rate stays constant up to the walls and
beside unvisited bins. A bin that was never visited has no rate: NaN, not zero.
"""

from __future__ import annotations

import numpy as np
from scipy.ndimage import gaussian_filter

# Beyond six standard deviations the kernel is below 2e-8 of its peak.
_KERNEL_REACH_SIGMA = 6.0


def occupancy_map(
    x_m: np.ndarray,
    y_m: np.ndarray,
    weights: np.ndarray | float,
    x_edges_m: np.ndarray,
    y_edges_m: np.ndarray,
) -> np.ndarray:
    """Sum of weights per bin of the plane.

    Parameters
    ----------
    x_m, y_m : (n,) array
        Positions in metres; samples that are NaN or outside the edges count nowhere.
    weights : (n,) array or float
        Weight of each sample: the bin length in seconds gives seconds, spike counts give spikes.
    x_edges_m : (nx + 1,) array
        Rising bin edges; the last bin includes its upper edge.
    y_edges_m : (ny + 1,) array
        The same for y.

    Returns
    -------
    (ny, nx) array
        Rows are y from below, columns are x from the left.

    Raises
    ------
    ValueError
        Unequal lengths, or edges that do not rise.
    """
    x_m, y_m = np.asarray(x_m, float), np.asarray(y_m, float)
    if x_m.shape != y_m.shape:
        raise ValueError(f"x_m and y_m differ in shape: {x_m.shape}, {y_m.shape}")
    columns, nx = _bin_index(x_m, x_edges_m)
    rows, ny = _bin_index(y_m, y_edges_m)
    inside = (columns >= 0) & (rows >= 0)
    flat = _summed(rows * nx + columns, inside, weights, ny * nx)
    return flat.reshape(ny, nx)


def occupancy_line(values: np.ndarray, weights: np.ndarray | float, edges: np.ndarray) -> np.ndarray:
    """Sum of weights per bin of a line.

    Parameters
    ----------
    values : (n,) array
        The coordinate; NaN and values outside the edges count nowhere.
    weights : (n,) array or float
        Weight of each sample.
    edges : (k + 1,) array
        Rising bin edges in the unit of `values`; the last bin includes its upper edge.

    Returns
    -------
    (k,) array

    Raises
    ------
    ValueError
        Unequal lengths, or edges that do not rise.
    """
    index, n_bins = _bin_index(np.asarray(values, float), edges)
    return _summed(index, index >= 0, weights, n_bins)


def occupancy_circle(angle_rad: np.ndarray, weights: np.ndarray | float, n_bins: int) -> np.ndarray:
    """Sum of weights per bin of the circle; bin i spans [i, i + 1) * 2 pi / n_bins.

    Parameters
    ----------
    angle_rad : (n,) array
        Angles of any winding, in radians; NaN counts nowhere.
    weights : (n,) array or float
        Weight of each sample.
    n_bins : int
        Number of equal bins.

    Returns
    -------
    (n_bins,) array

    Raises
    ------
    ValueError
        Unequal lengths.
    """
    turns = np.mod(np.asarray(angle_rad, float) / (2 * np.pi), 1.0)
    known = np.isfinite(turns)
    # A tiny negative angle is rounded up to one whole turn, hence the second modulo.
    index = np.where(known, np.floor(np.where(known, turns, 0.0) * n_bins), -1).astype(np.int64) % n_bins
    return _summed(index, known, weights, n_bins)


def smoothed_rate(
    spikes: np.ndarray, seconds: np.ndarray, sigma_bins: float, *, min_seconds: float = 0.0
) -> np.ndarray:
    """Occupancy-normalised rate map.

    Parameters
    ----------
    spikes, seconds : (ny, nx) array
        Spikes and time per bin.
    sigma_bins : float
        Standard deviation of the Gaussian kernel in bins; 0 does not smooth.
    min_seconds : float
        Bins visited for this time or less, before smoothing, are unvisited.

    Returns
    -------
    (ny, nx) array
        Rate in Hz; NaN where unvisited.

    Raises
    ------
    ValueError
        Shapes that differ, negative or non-finite time, a negative kernel.
    """
    return _rate(spikes, seconds, sigma_bins, min_seconds, "constant")


def line_rate(
    spikes: np.ndarray, seconds: np.ndarray, sigma_bins: float, *, min_seconds: float = 0.0
) -> np.ndarray:
    """Occupancy-normalised rate along a line: `smoothed_rate` for (k,) arrays."""
    return _rate(spikes, seconds, sigma_bins, min_seconds, "constant")


def circular_rate(
    spikes: np.ndarray, seconds: np.ndarray, sigma_bins: float, *, min_seconds: float = 0.0
) -> np.ndarray:
    """Occupancy-normalised rate round a circle: `smoothed_rate` for (k,) arrays whose ends meet."""
    return _rate(spikes, seconds, sigma_bins, min_seconds, "wrap")


def _rate(
    spikes: np.ndarray, seconds: np.ndarray, sigma_bins: float, min_seconds: float, edge_mode: str
) -> np.ndarray:
    spikes, seconds = np.asarray(spikes, float), np.asarray(seconds, float)
    if spikes.shape != seconds.shape:
        raise ValueError(f"spikes and seconds differ in shape: {spikes.shape}, {seconds.shape}")
    if not np.all(np.isfinite(seconds)) or np.any(seconds < 0):
        raise ValueError("seconds must be finite and not negative")
    if not sigma_bins >= 0:
        raise ValueError(f"sigma_bins must not be negative: {sigma_bins}")
    visited = seconds > min_seconds
    # What lies in bins that count as unvisited must not leak into their neighbours.
    spikes, seconds = np.where(visited, spikes, 0.0), np.where(visited, seconds, 0.0)
    if sigma_bins > 0:
        spikes, seconds = (
            gaussian_filter(values, sigma_bins, mode=edge_mode, truncate=_KERNEL_REACH_SIGMA)
            for values in (spikes, seconds)
        )
    return np.divide(spikes, seconds, out=np.full(seconds.shape, np.nan), where=visited)


def _bin_index(values: np.ndarray, edges: np.ndarray) -> tuple[np.ndarray, int]:
    """Bin of each value, -1 where it has none, and the number of bins."""
    edges = np.asarray(edges, float)
    if edges.ndim != 1 or len(edges) < 2 or not np.all(np.diff(edges) > 0):
        raise ValueError("bin edges must be at least two rising numbers")
    n_bins = len(edges) - 1
    index = np.searchsorted(edges, values, side="right") - 1
    index[values == edges[-1]] = n_bins - 1
    index[~(values <= edges[-1])] = -1
    return index, n_bins


def _summed(index: np.ndarray, counted: np.ndarray, weights: np.ndarray | float, n_bins: int) -> np.ndarray:
    weights = np.asarray(weights, float)
    if weights.ndim and weights.shape != index.shape:
        raise ValueError(f"weights and samples differ in shape: {weights.shape}, {index.shape}")
    chosen = np.broadcast_to(weights, index.shape)[counted]
    return np.bincount(index[counted], weights=chosen, minlength=n_bins).astype(float)
