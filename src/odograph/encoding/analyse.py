"""All of the encoding analysis of one unit, and what its session shares.

    design = prepare_session(behaviour_columns, settings)
    result = analyse_unit(design, spike_times_s, observed_s, settings)

Results depend on nothing but these arguments: not on which units are analysed beside it, nor in what order.
"""

from __future__ import annotations

from dataclasses import astuple, dataclass

import numpy as np

from odograph.descriptors.information import information_bits_per_spike
from odograph.encoding import design as design_module
from odograph.encoding.curves import seconds_per_cell, tuning_curves
from odograph.encoding.design import SessionDesign, model_name
from odograph.encoding.evaluate import Score, evaluate, fold_spikes
from odograph.encoding.gain_meaning import describe_gains
from odograph.encoding.gain_test import gain_test
from odograph.encoding.goodness import judge
from odograph.encoding.history import fitted_filter, with_history
from odograph.encoding.layout import Workspace
from odograph.encoding.select import best_score, select_model
from odograph.encoding.shapes import curve_shape
from odograph.encoding.shared import shift_plan, workspace
from odograph.encoding.slow_fast import NOT_AVAILABLE, compare_halves, running_halves
from odograph.encoding.speed_gain import fit_gains, modulation
from odograph.encoding.spikes import UnitSpikes, bin_spikes
from odograph.encoding.term_tests import term_tests
from odograph.encoding.terms import Term
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings

GAIN_P = 0.05  # a term whose test has a larger p gets no gain
# Columns of the speed-gain model for each plane and circle, in the order of the fields of `Gain`.
GAIN_COLUMNS = (
    "speed_gain",
    "speed_gain_se",
    "speed_gain_p",
    "fitted_slow_bits_per_spike",
    "fitted_fast_bits_per_spike",
    "fitted_slow_bits_per_s",
    "fitted_fast_bits_per_s",
)

prepare_session = design_module.prepare_session


@dataclass(frozen=True)
class UnitResult:
    """What the analysis says of one unit.

    Attributes
    ----------
    row : dict
        One row of the table of units (without session and unit).
    scores : list of dict
        One row per candidate model.
    curves : dict of ndarray
        Tuning curves and the bins of the spikes.
    """

    row: dict
    scores: list[dict]
    curves: dict[str, np.ndarray]


def analyse_unit(
    design: SessionDesign,
    spike_times_s: np.ndarray,
    observed_s: np.ndarray | None,
    settings: EncodingSettings,
) -> UnitResult:
    """Fit every candidate model to a unit, select, test and describe.

    Parameters
    ----------
    design : SessionDesign
        From `prepare_session` with the same settings.
    spike_times_s : ndarray, (n_spikes,)
        Recording clock, s.
    observed_s : ndarray, (n_intervals, 2), or None
        When the unit was observed; None or empty: all the time.
    settings : EncodingSettings

    Returns
    -------
    UnitResult
        A unit that cannot be fitted comes back with `status` and `status_reason`, and without curves.
    """
    spike_times_s = np.asarray(spike_times_s, dtype=float)
    observed = _observed_bins(design, observed_s)
    try:
        design = _observed_design(design, observed)
    except InputError as problem:  # too little of the session is left to hold anything out
        unit = bin_spikes(design, spike_times_s)
        reason = f"where the unit was observed, {problem.found}; expected {problem.expected}"
        row = _empty_row(design, unit) | {"status": "failed", "status_reason": reason}
        return UnitResult(row, [], {"spike_bins": unit.all_bins.astype(np.int32)})
    unit = bin_spikes(design, spike_times_s)
    row = _empty_row(design, unit)
    curves = {"spike_bins": unit.all_bins.astype(np.int32)}
    if unit.n_spikes < settings.minimum_spikes:
        reason = f"{unit.n_spikes} spikes in valid time, fewer than encoding.minimum_spikes"
        return UnitResult(row | {"status": "too_few_spikes", "status_reason": reason}, [], curves)
    if settings.history_s > 0:
        design = with_history(design, spike_times_s, observed)
    try:
        scores = _all_scores(design, unit)
    except FloatingPointError as problem:
        return UnitResult(row | {"status": "failed", "status_reason": str(problem)}, [], curves)
    rows = [_score_row(score, design) for score in scores]
    stuck = [model_name(score.model) for score in scores if not score.converged]
    if stuck:
        reason = f"no convergence: {', '.join(stuck)}"
        return UnitResult(row | {"status": "failed", "status_reason": reason}, rows, curves)
    row |= _selection(design, scores)
    if settings.tests:
        for name, (p, shifts) in term_tests(design, unit, {x.model: x.fit for x in scores}).items():
            row |= {f"{name}_p": p, f"{name}_shifts": shifts}
    full = _by_model(scores)[tuple(term.name for term in design.terms)]
    selected = next(score for score in scores if model_name(score.model) == row["selected_model"])
    found, drawn = _goodness(design, unit, selected)
    row, curves = row | found, curves | drawn
    space = workspace(design, full.model)
    curves |= tuning_curves(design, unit, space.layout, full.fit)
    if design.history is not None:
        fitted = fitted_filter(design, space.layout, full.fit)
        curves |= {f"history_{name}": values for name, values in vars(fitted).items()}
    row |= _information(design, unit, curves)
    row |= _shape(design, space, full, row)
    row |= _gains(design, unit, space, full, row)
    return UnitResult(row | {"status": "fitted", "status_reason": ""}, rows, curves)


def _observed_bins(design: SessionDesign, observed_s: np.ndarray | None) -> np.ndarray | None:
    """Which analysis bins lie within what was observed, (n_all_bins,) of bool; None: all of them."""
    if observed_s is None or not len(observed_s):
        return None
    keep = np.zeros(len(design.valid), dtype=bool)
    for start, stop in np.asarray(observed_s, dtype=float):
        keep |= (design.edges_s[:-1] >= start - 1e-9) & (design.edges_s[1:] <= stop + 1e-9)
    return keep


def _observed_design(design: SessionDesign, keep: np.ndarray | None) -> SessionDesign:
    """The session's design, or one restricted to the bins in which the unit was observed."""
    if keep is None or not np.any(design.valid & ~keep):
        return design
    key = ("observed", np.packbits(keep).tobytes())
    if key not in design.kept:
        design.kept[key] = design_module.restrict(design, keep)
    return design.kept[key]


def _all_scores(design: SessionDesign, unit: UnitSpikes) -> list[Score]:
    tables = fold_spikes(design, unit)
    return [evaluate(workspace(design, model), model, design, unit, tables) for model in design.models()]


def _by_model(scores: list[Score]) -> dict[tuple[str, ...], Score]:
    return {score.model: score for score in scores}


def _empty_row(design: SessionDesign, unit: UnitSpikes) -> dict:
    row = {
        "n_spikes": unit.n_spikes,
        "valid_s": design.n_bins * design.bin_s,
        "mean_rate_hz": unit.n_spikes / (design.n_bins * design.bin_s),
        "status": "",
        "status_reason": "",
        "selected_model": "",
        "best_model": "",
        "selected_bits_per_spike": np.nan,
        "selected_deviance_explained": np.nan,
        "rescaling_ks": np.nan,
        "rescaling_ks_p": np.nan,
        "rescaling_intervals": 0,
        "residual_correlation_peak": np.nan,
        "residual_correlation_peak_lag_s": np.nan,
        "speed_shape": "",
        "speed_shape_probability": np.nan,
        "speed_slope_one_sign_probability": np.nan,
        "slow_fast_cut_cm_s": np.nan,
        "speed_gain_status": "not_fitted",
    }
    for term in design.terms:
        row[f"encodes_{term.name}"] = False
        row[f"{term.name}_p"] = np.nan
        row[f"{term.name}_shifts"] = 0
        row[f"{term.name}_information_bits_per_spike"] = np.nan
        if term.kind in ("plane", "circle"):
            row[f"{term.name}_information_slow_bits_per_spike"] = np.nan
            row[f"{term.name}_information_fast_bits_per_spike"] = np.nan
            row |= {f"{term.name}_{column}": np.nan for column in GAIN_COLUMNS}
    return row


def _score_row(score: Score, design: SessionDesign) -> dict:
    return {
        "model": model_name(score.model),
        "n_terms": len(score.model),
        "bits_per_spike": score.bits_per_spike,
        "bits_per_spike_se": score.bits_per_spike_se,
        "deviance_explained": score.deviance_explained,
        "effective_degrees_of_freedom": score.fit.edf,
        "converged": score.converged,
        "folds": design.folds.n_folds,
    }


def _selection(design: SessionDesign, scores: list[Score]) -> dict:
    selected = select_model(scores)
    out = {
        "selected_model": model_name(selected.model),
        "best_model": model_name(best_score(scores).model),
        "selected_bits_per_spike": selected.bits_per_spike,
        "selected_deviance_explained": selected.deviance_explained,
    }
    return out | {f"encodes_{term.name}": term.name in selected.model for term in design.terms}


def _goodness(design: SessionDesign, unit: UnitSpikes, selected: Score) -> tuple[dict, dict]:
    """How well the selected model describes held-out time: columns of the row, and curves."""
    rescaling, residuals = judge(workspace(design, selected.model), design, unit, selected)
    peak, lag_s = residuals.peak
    row = {
        "rescaling_ks": rescaling.statistic,
        "rescaling_ks_p": rescaling.p,
        "rescaling_intervals": rescaling.n_intervals,
        "residual_correlation_peak": peak,
        "residual_correlation_peak_lag_s": lag_s,
    }
    curves = {
        "residual_lag_s": residuals.lag_s,
        "residual_autocorrelation": residuals.correlation,
        "residual_band": residuals.band,
    }
    return row, curves


def _coarse_cell(design: SessionDesign, term: Term) -> np.ndarray:
    """Cells for information: coarser than the fit's, so that a cell holds enough time."""
    n = design.settings.information_cells
    index = []
    for column, (low, high) in zip(term.columns, term.spans, strict=True):
        values = np.asarray(design.columns[column], dtype=float)[design.valid]
        values = np.mod(values, high) if term.kind == "circle" else values
        index.append(np.clip(((values - low) / (high - low) * n).astype(np.int64), 0, n - 1))
    return index[0] if len(index) == 1 else index[1] * n + index[0]


def _information(design: SessionDesign, unit: UnitSpikes, curves: dict[str, np.ndarray]) -> dict:
    settings, out = design.settings, {}
    has_speed = len(design.speed_cm_s) > 0
    if has_speed:
        slow, fast, out["slow_fast_cut_cm_s"] = running_halves(design.speed_cm_s, settings.running_above_cm_s)
    for term in design.terms:
        rate = curves[f"{term.name}_rate_hz"]
        seconds = seconds_per_cell(term, design.bin_s).reshape(rate.shape)
        out[f"{term.name}_information_bits_per_spike"] = information_bits_per_spike(seconds, rate)
        if term.kind not in ("plane", "circle"):
            continue
        halves = NOT_AVAILABLE
        if has_speed and slow.any() and fast.any():
            halves = compare_halves(
                _coarse_cell(design, term), unit.counts, slow, fast, design.bin_s,
                repeats=settings.matching_repeats, seed=settings.seed,
            )  # fmt: skip
        out[f"{term.name}_information_slow_bits_per_spike"] = halves.slow_bits_per_spike
        out[f"{term.name}_information_fast_bits_per_spike"] = halves.fast_bits_per_spike
    return out


def _speed_term(design: SessionDesign) -> Term | None:
    """The term that is a curve over running speed, if the configuration has one."""
    return next((t for t in design.terms if t.kind == "line" and t.columns[0] == "speed_cm_s"), None)


def _gains(design: SessionDesign, unit: UnitSpikes, space: Workspace, full: Score, row: dict) -> dict:
    """Speed gains of the planes and circles that the unit's selected model has."""
    speed = _speed_term(design)
    # A term that was selected by chance has no tuning whose depth could change: its gain is not determined.
    tuned = [
        t.name
        for t in design.terms
        if t.kind in ("plane", "circle") and row[f"encodes_{t.name}"] and not row[f"{t.name}_p"] > GAIN_P
    ]
    if speed is None or not tuned:
        return {}
    z = modulation(design.speed_cm_s)
    fitted = fit_gains(space, unit, full.fit, tuple(tuned), speed.name, z)
    if not fitted.converged:
        return {"speed_gain_status": "failed"}
    p = {}
    if design.settings.tests:
        p = {name: gain_test(space, design, unit, full.fit, z, shift_plan(design), name) for name in tuned}
    above = design.settings.running_above_cm_s
    described = describe_gains(space, design, fitted, speed.name, z, above, p)
    return {"speed_gain_status": "fitted"} | {
        f"{name}_{column}": value
        for name in tuned
        for column, value in zip(GAIN_COLUMNS, astuple(described[name]), strict=True)
    }


def _shape(design: SessionDesign, space: Workspace, full: Score, row: dict) -> dict:
    """Shape of the speed curve, for units whose selected model has speed."""
    term = _speed_term(design)
    if term is None:
        return {}
    if not row[f"encodes_{term.name}"]:
        return {"speed_shape": "not_tuned"}
    block = space.layout.slices[space.layout.index_of(term.name)]
    values = np.asarray(design.columns["speed_cm_s"], dtype=float)[design.valid]
    low, high = np.quantile(values, [0.05, 0.95])
    inside = (term.axes[0] >= low) & (term.axes[0] <= high)
    basis = term.centred_functions[inside]
    shape = curve_shape(
        basis @ full.fit.coefficients[block],
        basis @ full.fit.covariance[block, block] @ basis.T,
        design.settings.seed,
    )
    return {
        "speed_shape": shape.name,
        "speed_shape_probability": shape.probability,
        "speed_slope_one_sign_probability": shape.one_sign,
    }
