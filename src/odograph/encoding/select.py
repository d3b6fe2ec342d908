"""Which variables a unit encodes, by held-out prediction: the simplest model within one standard error.

Breiman, Friedman, Olshen & Stone 1984, Classification and Regression Trees, section 3.4.3, with the standard
error of the paired differences between folds, so that what all models find hard does not count against one.
"""

from __future__ import annotations

import numpy as np

from odograph.encoding.evaluate import Score


def best_score(scores: list[Score]) -> Score:
    """The model with the highest held-out likelihood; of equals the one with fewer terms, then by name."""
    return min(scores, key=lambda s: (-s.bits_per_spike, len(s.model), s.model))


def paired_shortfall(best: Score, other: Score) -> tuple[float, float]:
    """How far `other` lies below `best`, in bits per spike, and the standard error of that difference."""
    difference = best.fold_gain - other.fold_gain
    scale = 1 / (max(best.n_spikes, 1) * np.log(2))
    return float(difference.sum() * scale), float(np.sqrt(len(difference)) * difference.std(ddof=1) * scale)


def select_model(scores: list[Score]) -> Score:
    """The simplest model within one standard error of the best; of equal size the better one.

    Parameters
    ----------
    scores : list of Score
        All candidate models of one unit, evaluated on the same folds.
    """
    best = best_score(scores)
    within = []
    for score in scores:
        shortfall, error = paired_shortfall(best, score)
        if score is best or shortfall <= error:
            within.append(score)
    return min(within, key=lambda s: (len(s.model), -s.bits_per_spike, s.model))
