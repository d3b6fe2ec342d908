"""A model given as terms, fitted by the engine, with what other programs report of it."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.special import gammaln, xlogy

from odograph.encoding.design import RowTable
from odograph.encoding.fit import Fit, fit_model
from odograph.encoding.layout import Workspace, make_layout
from odograph.encoding.smoothing import Quadratic, _Solved


@dataclass(frozen=True)
class Solution:
    """A fit, and by row in the order given: expected counts and the standard error of the log rate."""

    fit: Fit
    space: Workspace
    expected: np.ndarray
    link_error: np.ndarray
    deviance: float
    score: float


def design_matrix(space: Workspace) -> np.ndarray:
    """The engine's matrix in its coordinates, rows in the order of its table, (n_rows, n_coordinates)."""
    table = space.layout.table
    blocks = [term.functions[cells] for term, cells in zip(table.terms, table.cells, strict=True)]
    return np.hstack([np.ones((len(table.seconds), 1)), *blocks])


def restricted_score(space: Workspace, fit: Fit, spikes: np.ndarray, counts: np.ndarray) -> float:
    """-loglik + b'Sb/2 + log|A|/2 - log|S|_+/2 - (p - r) log(2 pi)/2 (Wood 2011, JRSS B 73:3) from V.

    V is the same but for the likelihood, which it holds as the quadratic w'b - b'Hb/2 around the optimum.
    """
    b, spectra = fit.coefficients, space.layout.spectra
    total = space.expected(b, np.ones(1))
    gradient, information = space.derivatives(total)
    target = spikes - gradient + information @ b
    value = _Solved(Quadratic(information, target, spectra), fit.log_strengths).value
    likelihood = fit.log_likelihood + counts @ np.log(space.layout.table.seconds) - gammaln(counts + 1).sum()
    quadratic = target @ b - b @ information @ b / 2
    free = np.count_nonzero(spectra.sum(axis=0) == 0)
    return value + quadratic - likelihood - free * np.log(2 * np.pi) / 2


@pytest.fixture(scope="session")
def solve():
    """solve(terms, seconds, counts, log_strengths=None) -> Solution; terms' `cell` is that of each row."""

    def run(terms, seconds, counts, log_strengths=None):
        terms = sorted(terms, key=lambda term: (term.kind != "plane", -term.n_cells, term.name))
        order = np.argsort(terms[0].cell, kind="stable")
        cells = np.array([term.cell[order] for term in terms], dtype=np.int32)
        table = RowTable(tuple(terms), cells, seconds[order], np.zeros(len(order), dtype=np.int32))
        space = Workspace(make_layout(table))
        totals = [np.bincount(t.cell, weights=counts, minlength=t.n_cells) for t in terms]
        spikes = space.project(np.concatenate(totals), counts.sum())
        fit = fit_model(space, spikes, np.ones(1), tolerance=1e-13, fixed_log_strengths=log_strengths)
        score = restricted_score(space, fit, spikes, counts[order])
        X = design_matrix(space)
        expected, error = np.empty(len(order)), np.empty(len(order))
        expected[order] = space.mu
        error[order] = np.sqrt(np.sum((X @ fit.covariance) * X, axis=1))
        deviance = 2 * np.sum(xlogy(counts, counts / expected) - (counts - expected))
        return Solution(fit, space, expected, error, float(deviance), score)

    return run


@pytest.fixture(scope="session")
def engine_matrix():
    return design_matrix
