"""Fitted and observed tuning curves in hertz, with pointwise Bayesian bands.

Bands: Wood 2006, Aust. N.Z. J. Stat. 48:445, with the uncertainty of the mean level.
"""

from __future__ import annotations

import numpy as np
from scipy.special import ndtri

from odograph.descriptors.rate_map import circular_rate, line_rate, smoothed_rate
from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Layout
from odograph.encoding.spikes import UnitSpikes
from odograph.encoding.terms import Term

BAND = float(ndtri(0.975))
OBSERVED_SIGMA_CELLS = 1.5


def term_effect(layout: Layout, fit: Fit, name: str) -> tuple[np.ndarray, np.ndarray]:
    """A term's contribution to the log rate at its cells, centred over occupancy, and its standard error.

    The error includes that of the mean level, without which bands close where a curve crosses its mean and
    cover too little (Marra & Wood 2012, Scand. J. Stat. 39:53).

    Returns
    -------
    effect, standard_error : ndarray, (n_cells,)
    """
    t = layout.index_of(name)
    block, terms = layout.slices[t], layout.table.terms
    functions = terms[t].centred_functions
    level = np.concatenate([[1.0], *(term.mean_functions for term in terms)])
    of_level = fit.covariance @ level
    variance = np.sum((functions @ fit.covariance[block, block]) * functions, axis=1)
    variance += 2 * functions @ of_level[block] + level @ of_level
    return functions @ fit.coefficients[block], np.sqrt(np.maximum(variance, 0))


def seconds_per_cell(term: Term, bin_s: float) -> np.ndarray:
    """Occupancy of a term's cells, s, (n_cells,)."""
    return np.bincount(term.cell, minlength=term.n_cells) * bin_s


def tuning_curves(design: SessionDesign, unit: UnitSpikes, layout: Layout, fit: Fit) -> dict[str, np.ndarray]:
    """Curves of every term of the model: `TERM_rate_hz`, `TERM_rate_low_hz`, `TERM_rate_high_hz` and so on.

    A term's fitted curve is scaled so that its mean over the time spent in each cell is the unit's mean rate.
    Planes come as images, (ny, nx), NaN where the animal never was.
    """
    out: dict[str, np.ndarray] = {}
    for term in design.terms:
        effect, error = term_effect(layout, fit, term.name)
        seconds = seconds_per_cell(term, design.bin_s)
        scale = unit.n_spikes / float(seconds @ np.exp(effect))
        shape = (len(term.axes[1]), len(term.axes[0])) if term.kind == "plane" else (term.n_cells,)
        visited = seconds.reshape(shape) > 0
        for part, log_rate in (
            ("rate", effect),
            ("rate_low", effect - BAND * error),
            ("rate_high", effect + BAND * error),
        ):
            rate = scale * np.exp(np.minimum(log_rate, 50)).reshape(shape)
            out[f"{term.name}_{part}_hz"] = np.where(visited, rate, np.nan) if term.kind == "plane" else rate
        out |= _axes(term)
        out[f"{term.name}_observed_hz"] = observed_rate(term, unit, seconds, shape)
    return out


def _axes(term: Term) -> dict[str, np.ndarray]:
    if term.kind == "plane":
        return {f"{term.name}_x_m": term.axes[0], f"{term.name}_y_m": term.axes[1]}
    unit = {"circle": "rad"}.get(term.kind)
    if unit:
        return {f"{term.name}_rad": term.axes[0]}
    return {"speed_cm_s" if term.columns[0] == "speed_cm_s" else f"{term.name}_value": term.axes[0]}


def observed_rate(term: Term, unit: UnitSpikes, seconds: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
    """Spikes over seconds, lightly smoothed by one and a half cells; NaN where the animal never was."""
    spikes = unit.per_cell(term).reshape(shape)
    if term.kind == "category":
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(seconds > 0, spikes / seconds, np.nan)
    smooth = {"plane": smoothed_rate, "line": line_rate, "circle": circular_rate}[term.kind]
    return smooth(spikes, seconds.reshape(shape), OBSERVED_SIGMA_CELLS)
