"""What a speed gain means in plain units: information of the fitted tuning at slow and at fast running."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.descriptors.information import information_bits_per_spike
from odograph.encoding.design import SessionDesign
from odograph.encoding.layout import Workspace
from odograph.encoding.speed_gain import GainFit
from odograph.encoding.terms import Term

SLOW_AND_FAST = (0.2, 0.8)  # quantiles of running speed


@dataclass(frozen=True)
class Gain:
    """The speed gain of one term.

    Attributes
    ----------
    gain, standard_error : float
        Per standard deviation of z.
    p : float
        Two-sided, by circular shifts; NaN when there is none.
    slow_bits_per_spike, fast_bits_per_spike : float
        Information of the fitted tuning at the 20th and the 80th percentile of running speed.
    slow_bits_per_s, fast_bits_per_s : float
        The same times the fitted mean rate at that speed.
    """

    gain: float
    standard_error: float
    p: float
    slow_bits_per_spike: float
    fast_bits_per_spike: float
    slow_bits_per_s: float
    fast_bits_per_s: float


def describe_gains(
    space: Workspace,
    design: SessionDesign,
    fitted: GainFit,
    speed_name: str,
    z: np.ndarray,
    running_above_cm_s: float,
    p_values: dict[str, float],
) -> dict[str, Gain]:
    """Gains in plain units: information at the 20th and 80th percentile of running speed."""
    running = design.speed_cm_s > running_above_cm_s
    speeds = np.quantile(design.speed_cm_s[running] if running.any() else design.speed_cm_s, [0.2, 0.8])
    order = np.argsort(design.speed_cm_s, kind="stable")
    z_at = np.interp(speeds, design.speed_cm_s[order], z[order])
    speed_rate = _speed_rate(space, fitted, speed_name, speeds)
    out = {}
    for name, gain, variance in zip(fitted.terms, fitted.gains, np.diag(fitted.covariance), strict=True):
        t = space.layout.index_of(name)
        term = space.terms[t]
        effect = term.functions @ fitted.coefficients[space.layout.slices[t]]
        seconds = np.bincount(term.cell, minlength=term.n_cells) * design.bin_s
        rates = [np.exp((1 + gain * at) * effect) for at in z_at]
        bits = [information_bits_per_spike(seconds, rate) for rate in rates]
        level = [float(seconds @ r / seconds.sum()) * s for r, s in zip(rates, speed_rate, strict=True)]
        out[name] = Gain(
            float(gain),
            float(np.sqrt(max(variance, 0.0))),
            p_values.get(name, float("nan")),
            bits[0],
            bits[1],
            bits[0] * level[0],
            bits[1] * level[1],
        )
    return out


def _speed_rate(space: Workspace, fitted: GainFit, speed_name: str, speeds: np.ndarray) -> np.ndarray:
    """Rate at each speed with every other term at its occupancy mean, hertz."""
    t = space.layout.index_of(speed_name)
    term: Term = space.terms[t]
    effect = term.functions @ fitted.coefficients[space.layout.slices[t]]
    others = 0.0
    for u, other in enumerate(space.terms):
        if other.kind in ("plane", "circle") or u == t:
            continue
        values = other.functions @ fitted.coefficients[space.layout.slices[u]]
        others += float(np.mean(values[other.cell]))
    return np.exp(fitted.coefficients[0] + others + np.interp(speeds, term.axes[0], effect))
