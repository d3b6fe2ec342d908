"""Is a term's speed gain different from 0? A score test at the additive fit, calibrated by circular shifts.

With e = y - mu, z the modulation by speed and f the part of the log rate that is a term's (see `speed_gain`),

    U / sqrt(V),   U = sum (e - mu X a) z f,   V = sum mu (z f)^2 - q' A^-1 q,   q = X'W z f,

with a and A as in `odograph.encoding.shifts`, and its rank among circular shifts of z against everything
else, U and V computed anew for every shift.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy import fft

from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.shifts import ShiftPlan, null_model
from odograph.encoding.spikes import UnitSpikes

COORDINATES_AT_ONCE = 4  # in cross-correlations, to bound their memory


def gain_test(
    space: Workspace,
    design: SessionDesign,
    unit: UnitSpikes,
    fit: Fit,
    z: np.ndarray,
    plan: ShiftPlan,
    name: str,
) -> float:
    """Two-sided p of a term's gain: the standardised efficient score among circular shifts of z.

    Parameters as for `fit_gains`; `name` is the scaled term. The draw of shifts in `plan` is used.
    """
    if not len(plan.drawn):
        return float("nan")
    null = null_model(space, fit, design, unit, plan)
    t = space.layout.index_of(name)
    term, block = space.terms[t], space.layout.slices[t]
    effect = (term.functions @ fit.coefficients[block])[plan.cells(term)]
    e, w = null.residual, null.expected
    zs = plan.per_step(z) / plan.bins_per_step
    shifts = np.append(0, plan.drawn)
    turned = np.conj(fft.rfft(zs)), np.conj(fft.rfft(zs**2))

    def against(signal: np.ndarray, which: int) -> np.ndarray:
        """sum_i signal_i z_(i + s)^k for the shifts, (..., n_shifts)."""
        product = np.conj(fft.rfft(signal, axis=-1)) * np.conj(turned[which])
        return fft.irfft(product, n=plan.n_steps, axis=-1)[..., shifts]

    score = against(e * effect, 0)
    variance = against(w * effect**2, 1)
    crossed = np.concatenate([against(rows * (w * effect), 0) for rows in _design_rows(space, plan)])
    variance = variance - np.sum(crossed * (null.inverse @ crossed), axis=0)
    statistic = np.abs(score) / np.sqrt(np.maximum(variance, 1e-12 * np.abs(variance).max() + 1e-300))
    return float((1 + np.sum(statistic[1:] >= statistic[0] * (1 - 1e-9))) / len(shifts))


def _design_rows(space: Workspace, plan: ShiftPlan) -> Iterator[np.ndarray]:
    """The full model's design matrix over steps, a few coordinates at a time, each (k, n_steps)."""
    yield np.ones((1, plan.n_steps))
    for term in space.terms:
        basis = term.functions.T
        for first in range(0, len(basis), COORDINATES_AT_ONCE):
            yield basis[first : first + COORDINATES_AT_ONCE][:, plan.cells(term)]
