"""Held-out evaluation: what a model predicts of time that played no part in fitting it.

Every fold is fitted anew, smoothing strengths included, on its training groups; the fit to all data lends a
place to start the iteration. At given strengths the fit has one maximum, wherever it starts. The restricted
likelihood of the strengths may have two, or be as good as flat where a term has no effect, and then the start
decides at which of them a fold ends: held-out spikes reach a fold in this way only. Scores are gains over the
constant rate of the same training part.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import xlogy

from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit, fit_model
from odograph.encoding.layout import Workspace
from odograph.encoding.spikes import UnitSpikes
from odograph.encoding.terms import Term


@dataclass(frozen=True)
class Score:
    """Held-out scores of one model for one unit.

    Attributes
    ----------
    model : tuple of str
    fold_gain : ndarray, (n_folds,)
        Held-out log-likelihood minus that of the constant rate, nats.
    n_spikes : int
        Held-out spikes, all folds together.
    bits_per_spike, bits_per_spike_se : float
        Pooled gain, and its standard error from the spread of the folds.
    deviance_explained : float
        1 - D(model) / D(constant rate) on held-out bins.
    converged : bool
        Every fold's fit converged.
    fit : Fit
        The fit to all data.
    fold_coefficients : ndarray, (n_folds, n_coordinates)
        What was fitted without each fold.
    """

    model: tuple[str, ...]
    fold_gain: np.ndarray
    n_spikes: int
    bits_per_spike: float
    bits_per_spike_se: float
    deviance_explained: float
    converged: bool
    fit: Fit
    fold_coefficients: np.ndarray


@dataclass(frozen=True)
class FoldSpikes:
    """What a unit's spikes give to every fold of every model.

    Attributes
    ----------
    training, held_out : dict of ndarray, each (n_folds, n_coordinates)
        X'y of each term, by its name, over the spikes trained on and over those held out.
    n_training, n_held_out : ndarray, (n_folds,)
    training_s, held_out_s : ndarray, (n_folds,)
    saturated : float
        Log-likelihood of the model with a rate of its own for every bin.
    """

    training: dict[str, np.ndarray]
    held_out: dict[str, np.ndarray]
    n_training: np.ndarray
    n_held_out: np.ndarray
    training_s: np.ndarray
    held_out_s: np.ndarray
    saturated: float


def fold_spikes(design: SessionDesign, unit: UnitSpikes) -> FoldSpikes:
    """Tabulate a unit's spikes for every fold of its session."""
    folds = design.folds
    terms = [*design.terms, *design.nuisance]
    group = folds.group[unit.bins]
    seconds = np.bincount(folds.group, minlength=folds.n_groups) * design.bin_s
    use = np.array([folds.training(fold) for fold in range(folds.n_folds)])
    test = np.array([folds.held_out(fold) for fold in range(folds.n_folds)])

    def sums(term: Term, which: np.ndarray) -> np.ndarray:
        return np.array([unit.per_cell(term, spikes) for spikes in which[:, group]]) @ term.functions

    return FoldSpikes(
        {term.name: sums(term, use) for term in terms},
        {term.name: sums(term, test) for term in terms},
        use[:, group].sum(axis=1),
        test[:, group].sum(axis=1),
        use @ seconds,
        test @ seconds,
        float(np.sum(xlogy(unit.counts, unit.counts / design.bin_s) - unit.counts)),
    )


def fit_whole(space: Workspace, design: SessionDesign, unit: UnitSpikes) -> Fit:
    """Fit a model to all valid time."""
    cells = [unit.per_cell(term) for term in space.terms]
    spikes = space.project(np.concatenate(cells) if cells else np.empty(0), float(unit.n_spikes))
    return fit_model(space, spikes, np.ones(design.folds.n_groups))


def evaluate(space: Workspace, model: tuple[str, ...], design, unit: UnitSpikes, tables: FoldSpikes) -> Score:
    """Fit a model to all time and to every training part, and score it on what each left out.

    Raises
    ------
    FloatingPointError
        A fit has no finite solution.
    """
    whole = fit_whole(space, design, unit)
    folds, names = design.folds, [term.name for term in space.terms]
    gain, converged, coefficients = np.zeros(folds.n_folds), whole.converged, []
    for fold in range(folds.n_folds):
        spikes = np.concatenate([[tables.n_training[fold]], *(tables.training[n][fold] for n in names)])
        fit = fit_model(space, spikes, folds.training(fold).astype(float), whole)
        converged = converged and fit.converged
        coefficients.append(fit.coefficients)
        seen = np.concatenate([[tables.n_held_out[fold]], *(tables.held_out[n][fold] for n in names)])
        expected = fit.expected_spikes @ folds.held_out(fold)
        gain[fold] = seen @ fit.coefficients - expected - _constant_rate(tables, fold)
    return _score(model, gain, tables, whole, converged, np.array(coefficients))


def _constant_rate(tables: FoldSpikes, fold: int) -> float:
    """Held-out log-likelihood of the training part's mean rate, nats."""
    rate = tables.n_training[fold] / tables.training_s[fold]
    return float(xlogy(tables.n_held_out[fold], rate) - rate * tables.held_out_s[fold])


def _score(model, gain, tables, whole, converged, fold_coefficients) -> Score:
    n = int(tables.n_held_out.sum())
    to_bits = 1 / (max(n, 1) * np.log(2))
    constant = sum(_constant_rate(tables, fold) for fold in range(len(gain)))
    return Score(
        model=model,
        fold_gain=gain,
        n_spikes=n,
        bits_per_spike=float(gain.sum() * to_bits),
        bits_per_spike_se=float(np.sqrt(len(gain)) * gain.std(ddof=1) * to_bits),
        deviance_explained=float(gain.sum() / (tables.saturated - constant)),
        converged=converged,
        fit=whole,
        fold_coefficients=fold_coefficients,
    )
