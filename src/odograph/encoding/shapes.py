"""The shape of a curve along a line, with the probability that it is right.

Curves are drawn from the fitted posterior. A draw rises when what it climbs is not undone: its largest fall
is less than a quarter of its largest climb, over the well-sampled range (5th to 95th percentile of the
covariate); it falls when the reverse holds; else it is non-monotonic. The share of draws is the probability.

Beside it stands the stricter probability that the slope keeps its sign at every point of that range. A curve
that levels off has a slope near 0 there, of either sign, which is why it does not decide the shape.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

REVERSAL = 0.25
LEAST_PROBABILITY = 0.8
DRAWS = 1000
SHAPES = ("rising", "falling", "non_monotonic")


@dataclass(frozen=True)
class Shape:
    """`name` is one of SHAPES or `undecided`; `probability` belongs to the likeliest of SHAPES.

    `one_sign` is the probability that the slope keeps its sign throughout.
    """

    name: str
    probability: float
    one_sign: float


def largest_climb(curves: np.ndarray) -> np.ndarray:
    """Largest rise from any point to a later one, for each curve; (n_draws, n_points) -> (n_draws,)."""
    return np.max(curves - np.minimum.accumulate(curves, axis=1), axis=1)


def classify(curves: np.ndarray) -> np.ndarray:
    """Index into SHAPES of each curve; (n_draws, n_points) -> (n_draws,)."""
    climb, fall = largest_climb(curves), largest_climb(-curves)
    return np.where(fall < REVERSAL * climb, 0, np.where(climb < REVERSAL * fall, 1, 2))


def curve_shape(mean: np.ndarray, covariance: np.ndarray, seed: int) -> Shape:
    """Shape of a curve from the posterior of its values.

    Parameters
    ----------
    mean : ndarray, (n_points,)
        Log rate along the well-sampled range, ascending in the covariate.
    covariance : ndarray, (n_points, n_points)
    seed : int
    """
    values, vectors = np.linalg.eigh(covariance)
    root = vectors * np.sqrt(np.maximum(values, 0))
    # Eigenvectors have no sign of their own; fix it so that draws do not depend on the library's choice.
    root *= np.where(root[np.argmax(np.abs(root), axis=0), np.arange(root.shape[1])] < 0, -1.0, 1.0)
    draws = mean + np.random.default_rng(seed).standard_normal((DRAWS, len(mean))) @ root.T
    share = np.bincount(classify(draws), minlength=3) / DRAWS
    likeliest = int(np.argmax(share))
    probability = float(share[likeliest])
    slopes = np.diff(draws, axis=1)
    one_sign = float(np.mean(np.all(slopes >= 0, axis=1) | np.all(slopes <= 0, axis=1)))
    return Shape(
        SHAPES[likeliest] if probability >= LEAST_PROBABILITY else "undecided", probability, one_sign
    )
