"""The shift test against dense arithmetic and direct loops over all shifts, on small sessions."""

import numpy as np
import pytest
from scipy.optimize import brentq

from odograph.encoding.design import prepare_session
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.shared import workspace
from odograph.encoding.shifts import (
    SMOOTHNESS,
    UNDERSMOOTHING,
    VARIANCE_SHIFTS,
    null_model,
    plan_shifts,
    score_variance,
    shift_test,
    step_cells,
    transform_covariate,
)
from odograph.encoding.spikes import bin_spikes
from odograph.settings.encoding import EncodingSettings, TermSettings

BIN_S = 0.1
N = 1500
TERMS = [
    TermSettings(name="place", kind="plane", columns=["x", "y"], basis_size=4, cells=8),
    TermSettings(name="state", kind="category", columns=["state"]),
    TermSettings(name="turn", kind="circle", columns=["angle"], basis_size=5, cells=12),
]


def walk(rng, n, memory):
    """A stationary series with standard deviation 1 that forgets over about `memory` bins."""
    noise, out = rng.normal(size=n), np.zeros(n)
    for i in range(1, n):
        out[i] = out[i - 1] * (1 - 1 / memory) + noise[i] * np.sqrt(2 / memory)
    return out


@pytest.fixture(scope="module")
def session():
    """A small session of three covariates that are related, and a unit that follows state and place."""
    rng = np.random.default_rng(12)
    x, y = walk(rng, N, 40), walk(rng, N, 40)
    state = np.floor(2 + 0.8 * (x + walk(rng, N, 60))).clip(0, 4)
    table = {
        "time_s": (np.arange(N) + 0.5) * BIN_S,
        "x": x,
        "y": y,
        "state": state,
        "angle": np.cumsum(0.3 * rng.normal(size=N)) + 0.3 * y,
        "valid": np.ones(N, dtype=bool),
    }
    design = prepare_session(table, EncodingSettings(terms=TERMS, drift=False, folds=3))
    counts = rng.poisson(0.5 * np.exp(0.1 * y + 0.3 * (state == 1)))
    return design, bin_spikes(design, np.repeat(table["time_s"], counts))


def plan_of(design, bins=5, draws=10**6):
    return plan_shifts(design.n_bins, BIN_S, step_s=bins * BIN_S, minimum_s=5.0, draws=draws, seed=1)


def prepared(session, name, plan):
    """The tested term and the model of all other terms."""
    design, unit = session
    others = tuple(t.name for t in design.terms if t.name != name)
    space = workspace(design, others)
    fit = fit_whole(space, design, unit)
    (term,) = (t for t in design.terms if t.name == name)
    return term, null_model(space, fit, design, unit, plan), fit


def null_matrix(null, take):
    """X of the null model, each term's cells given by `take`, (n, n_coordinates)."""
    blocks = [t.functions[take(t)] for t in null.space.terms]
    return np.hstack([np.ones((len(blocks[0]), 1)), *blocks])


@pytest.mark.parametrize("bins", [1, 5])
def test_residual_undoes_the_pull_of_the_penalty(session, bins):
    """e - W X a with a = A^-1 X'e and A = X'WX + c S_lam, bin by bin in dense arithmetic, then summed."""
    design, unit = session
    plan = plan_of(design, bins)
    _, null, fit = prepared(session, "state", plan)
    X = null_matrix(null, lambda t: t.cell)
    mu = BIN_S * np.exp(X @ fit.coefficients)
    ridge = UNDERSMOOTHING * np.exp(fit.log_strengths) @ null.space.layout.spectra
    a = np.linalg.solve((X * mu[:, None]).T @ X + np.diag(ridge), X.T @ (unit.counts - mu))
    residual = (unit.counts - mu * (1 + X @ a)).reshape(-1, bins).sum(axis=1)
    np.testing.assert_allclose(null.residual, residual - residual.mean(), atol=1e-7)
    np.testing.assert_allclose(null.expected, mu.reshape(-1, bins).sum(axis=1), rtol=1e-9)


@pytest.mark.parametrize("name", ["place", "state", "turn"])
def test_variance_is_that_of_a_dense_regression(session, name):
    """V = B'WB - B'WX A^-1 X'WB for a plane, a category and a circle, turned and not."""
    plan = plan_of(session[0])
    term, null, _ = prepared(session, name, plan)
    cells = step_cells(null.space, plan)
    X, W = null_matrix(null, plan.cells), null.expected[:, None]
    for shift in (0, 37, plan.n_steps - 1):
        B = np.roll(term.functions[plan.cells(term)], -shift, axis=0)
        expected = B.T @ (W * B) - (B.T @ (W * X)) @ null.inverse @ (X.T @ (W * B))
        found = score_variance(term, null, plan, cells, shift)
        np.testing.assert_allclose(found, expected, atol=1e-9 * np.abs(expected).max())


def floored(V):
    values, vectors = np.linalg.eigh((V + V.T) / 2)
    return vectors @ np.diag(np.maximum(values, 1e-3 * values.mean())) @ vectors.T


def statistic_by_hand(term, null, plan):
    """The statistic at the true alignment and at every shift: dense matrices, one shift after another.

    Of each smoothness, U'(V + s R)^-1 U with s such that tr (V + s R)^-1 V is that many degrees of freedom;
    U at the true alignment is first taken to the scale of the others.
    """
    X, W = null_matrix(null, plan.cells), null.expected[:, None]
    basis, R = term.functions[plan.cells(term)], np.diag(term.coordinates.spectra.sum(axis=0))

    def variance(shift):
        B = np.roll(basis, -shift, axis=0)
        return B.T @ (W * B) - (B.T @ (W * X)) @ null.inverse @ (X.T @ (W * B))

    drawn = plan.drawn[np.linspace(0, len(plan.drawn) - 1, VARIANCE_SHIFTS).astype(int)]
    V = floored(np.mean([variance(s) for s in drawn], axis=0))
    truth = floored(variance(0)) + 1e-3 * V
    rescale = np.linalg.cholesky(V) @ np.linalg.inv(np.linalg.cholesky(truth))
    scores = [null.residual @ np.roll(basis, -int(s), axis=0) for s in plan.shifts]
    U = np.array([rescale @ (null.residual @ basis), *scores])
    free, sums = np.count_nonzero(np.diag(R) == 0), []
    for share in SMOOTHNESS:
        # What no penalty reaches is a degree of freedom whatever s is.
        wanted = share * len(V)
        wanted = wanted if wanted > free + 0.1 else free + 0.1 * (len(V) - free)

        def excess(log_s, wanted=wanted):
            return np.trace(np.linalg.solve(V + np.exp(log_s) * R, V)) - wanted

        s = np.exp(brentq(excess, -40, 40, xtol=1e-12))
        sums.append(np.sum(U * np.linalg.solve(V + s * R, U.T).T, axis=1))
    sums = np.array(sums)
    return np.max((sums - sums.mean(axis=1, keepdims=True)) / sums.std(axis=1, keepdims=True), axis=0)


@pytest.mark.parametrize("name", ["place", "state", "turn"])
def test_p_is_the_rank_among_all_shifts(session, name):
    """(1 + exceedances) / (1 + shifts), the statistic by a direct loop over shifts; by FFT and one by one."""
    plan = plan_of(session[0])
    term, null, _ = prepared(session, name, plan)
    statistic = statistic_by_hand(term, null, plan)
    expected = (1 + np.sum(statistic[1:] >= statistic[0])) / (1 + len(plan.shifts))
    cells = step_cells(null.space, plan)
    spectrum = transform_covariate(term, plan)
    assert spectrum.shape == (term.coordinates.size, plan.n_steps // 2 + 1)
    for way in (spectrum, None):
        p, n = shift_test(term, null, plan, way, cells)
        assert n == len(plan.shifts) == plan.n_steps - 19
        assert p == pytest.approx(expected, abs=1e-12)
    assert 2 / (1 + n) < p < 0.5  # a rank in between is what is tested


def test_a_drawn_share_of_the_shifts_gives_the_rank_among_those(session):
    plan = plan_of(session[0], draws=60)
    term, null, _ = prepared(session, "turn", plan)
    cells = step_cells(null.space, plan)
    p, n = shift_test(term, null, plan, None, cells)
    assert n == 60 and set(plan.drawn) < set(plan.shifts)
    assert p * 61 == pytest.approx(round(p * 61))
    again = shift_test(term, null, plan, transform_covariate(term, plan), cells)[0]
    assert p == pytest.approx(again, abs=4 * np.sqrt(again * (1 - again) / 60))


def test_strong_tuning_has_the_least_p_there_is(session):
    """No shift does as well as the true alignment: p is 1 / (1 + shifts)."""
    design, _ = session
    plan, rng = plan_of(design), np.random.default_rng(2)
    (term,) = (t for t in design.terms if t.name == "state")
    counts = rng.poisson(np.where(term.cell == 1, 2.0, 0.1))
    unit = bin_spikes(design, np.repeat((np.arange(N) + 0.5) * BIN_S, counts))
    term, null, _ = prepared((design, unit), "state", plan)
    p, n = shift_test(term, null, plan, transform_covariate(term, plan), step_cells(null.space, plan))
    assert p == pytest.approx(1 / (1 + n))


def test_alignments_that_repeat_count_as_ties():
    """A covariate of period 20 steps among 300 is itself when turned by a multiple of 20: p counts that."""
    rng = np.random.default_rng(3)
    state = (np.arange(N) % 100 < 15).astype(float)
    table = {"time_s": (np.arange(N) + 0.5) * BIN_S, "state": state, "valid": np.ones(N, dtype=bool)}
    design = prepare_session(table, EncodingSettings(terms=TERMS[1:2], drift=False, folds=3))
    unit = bin_spikes(design, np.repeat(table["time_s"], rng.poisson(0.2 + state)))
    plan = plan_of(design)
    term, null, _ = prepared((design, unit), "state", plan)
    same = np.count_nonzero(plan.shifts % 20 == 0)
    assert same == 14
    for way in (transform_covariate(term, plan), None):
        p, n = shift_test(term, null, plan, way, step_cells(null.space, plan))
        assert p == pytest.approx((1 + same) / (1 + n))
