"""Smoothing selection against values of mgcv 1.8-41 (R 4.2.2) on the coal-mining disaster series.

Data: yearly numbers of coal-mining disasters 1851-1962 (Jarrett 1979, Biometrika 66:191; data set `coal` of
the R package boot). Model: 20 cubic B-splines on uniform knots with second-difference penalty, log link.
mgcv's `bam(method="fREML")` has the fixed point of the generalized Fellner-Schall update; its strengths
divide by 16 in the scale of plain second differences. `gam(method="REML")` gives the score at its own
optimum.
"""

import numpy as np
import pytest
from scipy.special import gammaln, xlogy

from odograph.encoding.bases import Coordinates, _diagonalise, open_basis
from odograph.encoding.design import RowTable
from odograph.encoding.fit import fit_model
from odograph.encoding.layout import Workspace, make_layout
from odograph.encoding.terms import Term

COUNTS = np.array(
    list(
        "45410434063340263354531441553425223421322111130010110031"
        "03220111010100021000110233112111123300014000100000100101"
    ),
    dtype=float,
)
SIZE = 20
SPACING = 6.54247058824
LOW = 1851 - 0.111


@pytest.fixture(scope="module")
def space():
    years = np.arange(1851, 1963, dtype=float)
    differences = np.diff(np.eye(SIZE), 2, axis=0)
    factor, values = _diagonalise(differences.T @ differences, np.eye(SIZE), True)
    term = Term(
        name="year",
        kind="line",
        columns=("year",),
        basis=open_basis(years, LOW, LOW + SPACING * (SIZE - 3), SIZE),
        coordinates=Coordinates((factor,), values[None, 1:]),
        cell=np.arange(112, dtype=np.int32),
        axes=(years,),
        spans=((1851.0, 1963.0),),
    )
    rows = RowTable(
        (term,), np.arange(112, dtype=np.int32)[None], np.ones(112), np.zeros(112, dtype=np.int32)
    )
    return Workspace(make_layout(rows))


def fit_coal(space, **options):
    return fit_model(space, space.project(COUNTS, COUNTS.sum()), np.ones(1), tolerance=1e-12, **options)


def deviance(space, fit):
    space.expected(fit.coefficients, np.ones(1))
    return 2 * np.sum(xlogy(COUNTS, COUNTS / space.mu) - (COUNTS - space.mu))


def test_chosen_strength_is_mgcvs_fast_reml(space):
    fit = fit_coal(space)
    assert fit.converged
    assert np.exp(fit.log_strengths[0]) == pytest.approx(16.937021, rel=1e-5)  # bam: 270.992336 / 16
    assert fit.edf == pytest.approx(5.92155432, abs=1e-5)
    assert deviance(space, fit) == pytest.approx(120.497647, abs=1e-5)


def test_fit_at_mgcvs_reml_strength(space):
    fit = fit_coal(space, fixed_log_strengths=np.log([15.825479]))
    assert fit.edf == pytest.approx(5.996486, abs=1e-5)
    assert deviance(space, fit) == pytest.approx(120.280210, abs=1e-5)


def test_restricted_likelihood_is_mgcvs_score(space):
    """V = -loglik + b'Sb/2 + log|A|/2 - log|S|_+/2 - (p - r) log(2 pi)/2 (Wood 2011, JRSS B 73:3)."""
    rho = np.log([15.825479])
    fit = fit_coal(space, fixed_log_strengths=rho)
    spectrum = space.layout.spectra[0]
    loglik = fit.log_likelihood - gammaln(COUNTS + 1).sum()
    log_a = -np.linalg.slogdet(fit.covariance)[1] - np.log(
        SIZE
    )  # the intercept's column is the sum of 20 splines
    log_s = np.log(np.exp(rho[0]) * spectrum[spectrum > 0]).sum()
    score = -loglik + np.exp(rho[0]) * (spectrum @ fit.coefficients**2) / 2 + log_a / 2 - log_s / 2
    assert score - 2 * np.log(2 * np.pi) / 2 == pytest.approx(171.326757666, abs=1e-5)


def test_fit_and_score_away_from_the_optimum(space, solve):
    """mgcv's `gam` and glum at the strength 10 of mgcv's basis; scores of two bases differ by a constant."""
    found, best = (
        solve(space.terms, np.ones(112), COUNTS, np.log([strength / 16])) for strength in (10, 253.207661573)
    )
    assert found.fit.edf == pytest.approx(10.7381990786, abs=1e-6)
    assert found.deviance == pytest.approx(111.191120806, abs=1e-6)
    assert found.score - best.score == pytest.approx(177.693466396 - 172.824623802, abs=1e-6)
    # Score of gam at its optimum in a basis whose intercept is the sum of the 20 splines.
    assert best.score - np.log(SIZE) / 2 == pytest.approx(171.326757666, abs=1e-5)


def test_gams_optimum_is_where_the_score_is_least(space, solve):
    # gam's REML, which the engine's choice approximates: log strength 5.53420994879 in mgcv's basis.
    rho = 5.53420994879 - np.log(16) + np.array([-0.01, 0.0, 0.01])
    below, least, above = (solve(space.terms, np.ones(112), COUNTS, [r]).score for r in rho)
    curvature = (below + above - 2 * least) / 0.01**2
    assert curvature > 0.1
    assert (above - below) / 0.02 == pytest.approx(0, abs=1e-4 * curvature)
