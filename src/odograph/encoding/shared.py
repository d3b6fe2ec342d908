"""What the units of a session share beyond its design, worked out on first use and kept with the design."""

from __future__ import annotations

import numpy as np

from odograph.encoding.design import SessionDesign
from odograph.encoding.layout import Workspace, make_layout
from odograph.encoding.shifts import ShiftPlan, plan_shifts, transform_covariate


def workspace(design: SessionDesign, model: tuple[str, ...]) -> Workspace:
    """The buffers of a model; one process uses them for one unit after another."""
    if ("space", model) not in design.kept:
        if design.history is not None:
            design.kept.clear()  # rows that serve one unit only: those of one model at a time are in memory
        design.kept["space", model] = Workspace(make_layout(design.table(model)))
    return design.kept["space", model]


def shift_plan(design: SessionDesign) -> ShiftPlan:
    """The session's admissible shifts."""
    if "shifts" not in design.of_covariates:
        settings = design.settings
        design.of_covariates["shifts"] = plan_shifts(
            design.n_bins,
            design.bin_s,
            step_s=settings.test_step_s,
            minimum_s=settings.test_minimum_shift_s,
            draws=settings.test_draws,
            seed=settings.seed,
        )
    return design.of_covariates["shifts"]


def covariate_spectrum(design: SessionDesign, name: str) -> np.ndarray | None:
    """The transform of a term's covariate for the test of all shifts, see `transform_covariate`."""
    if ("spectrum", name) not in design.of_covariates:
        (term,) = (term for term in design.terms if term.name == name)
        design.of_covariates["spectrum", name] = transform_covariate(term, shift_plan(design))
    return design.of_covariates["spectrum", name]
