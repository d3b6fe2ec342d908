"""The shift test of every term of a unit, each given all other terms."""

from __future__ import annotations

from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.shared import covariate_spectrum, shift_plan, workspace
from odograph.encoding.shifts import null_model, shift_test, step_cells
from odograph.encoding.spikes import UnitSpikes


def term_tests(
    design: SessionDesign, unit: UnitSpikes, fits: dict[tuple[str, ...], Fit]
) -> dict[str, tuple[float, int]]:
    """p and number of shifts of each term, given all other terms.

    Parameters
    ----------
    design : SessionDesign
    unit : UnitSpikes
    fits : dict of Fit
        The fits to all time of every model that lacks one term.
    """
    names, plan = tuple(term.name for term in design.terms), shift_plan(design)
    out = {}
    for term in design.terms:
        others = tuple(name for name in names if name != term.name)
        space = workspace(design, others)
        null = null_model(space, fits[others], design, unit, plan)
        cells = step_cells(space, plan)
        spectrum = covariate_spectrum(design, term.name)
        out[term.name] = shift_test(term, null, plan, spectrum, cells)
    return out
