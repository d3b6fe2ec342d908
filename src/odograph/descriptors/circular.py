"""Direction statistics of angles and of direction tuning curves.

Definitions as in Mardia & Jupp, Directional Statistics, 2000, and Zar, Biostatistical Analysis, 5th ed. 2010.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import brentq
from scipy.special import ive

# Above this length two terms of the expansion for large concentration do better than a rounded root.
_NEARLY_ONE = 1 - 1e-6


def mean_vector(angle_rad: np.ndarray, weights: np.ndarray | None = None) -> tuple[float, float]:
    """Mean direction and resultant length.

    Parameters
    ----------
    angle_rad : (n,) array
        Angles in radians; NaN angles, and angles whose weight is NaN, are left out.
    weights : (n,) array, optional
        Weights, not negative. With bin centres as angles and rates as weights this gives the preferred
        direction and resultant length of a tuning curve, whatever time was spent in each direction.

    Returns
    -------
    direction_rad : float
        In [0, 2 pi); NaN when there is no weight, or no direction (length below 1e-12).
    length : float
        In 0..1; NaN when there is no weight.

    Raises
    ------
    ValueError
        Shapes that differ, or a negative weight.
    """
    angle_rad = np.asarray(angle_rad, float)
    weights = np.ones(angle_rad.shape) if weights is None else np.asarray(weights, float)
    if weights.shape != angle_rad.shape:
        raise ValueError(f"angles and weights differ in shape: {angle_rad.shape}, {weights.shape}")
    if np.any(weights < 0):
        raise ValueError("weights must not be negative")
    known = np.isfinite(angle_rad) & np.isfinite(weights)
    total = weights[known].sum()
    if not total > 0:
        return float("nan"), float("nan")
    vector = np.sum(weights[known] * np.exp(1j * angle_rad[known])) / total
    length = min(float(np.abs(vector)), 1.0)
    direction = float(np.angle(vector) % (2 * np.pi)) if length > 1e-12 else float("nan")
    # The modulo of a tiny negative angle rounds to a whole turn.
    return (0.0 if direction == 2 * np.pi else direction), length


def resultant_length(angle_rad: np.ndarray, weights: np.ndarray | None = None) -> float:
    """Resultant length alone; see `mean_vector`."""
    return mean_vector(angle_rad, weights)[1]


def circular_sd_rad(length: float) -> float:
    """Circular standard deviation in radians, sqrt(-2 ln length): infinite for length 0."""
    return float("inf") if length == 0 else float(np.sqrt(-2 * np.log(length)))


def rayleigh_p(length: float, n: int) -> float:
    """p of the Rayleigh test against uniform directions, for a resultant length of n independent angles.

    The approximation exp(sqrt(1 + 4n + 4(n^2 - R^2)) - (1 + 2n)), R = n * length (Zar 2010, equation 27.4).
    Spikes of one neuron are not independent draws of direction, so it is no test of tuning: those use shifted
    data.
    """
    resultant = n * length
    return float(min(np.exp(np.sqrt(1 + 4 * n + 4 * (n**2 - resultant**2)) - (1 + 2 * n)), 1.0))


def concentration(length: float) -> float:
    """Concentration kappa of the von Mises distribution of a given resultant length.

    The maximum-likelihood value: the root of I1(kappa) / I0(kappa) = length, 0 for 0 and infinite for 1.

    Raises
    ------
    ValueError
        A length outside 0..1.
    """
    if not 0 <= length <= 1:
        raise ValueError(f"a resultant length lies in 0..1: {length}")
    if length == 1:
        return float("inf")
    if length < 1e-8:
        return 2 * length
    if length > _NEARLY_ONE:
        # I1/I0 = 1 - 1/(2k) - 1/(8k^2) - ... solved for k.
        return 1 / (2 * (1 - length)) + 0.25
    return float(brentq(lambda k: ive(1, k) / ive(0, k) - length, 1e-9, 1e6, xtol=1e-13, rtol=1e-13))
