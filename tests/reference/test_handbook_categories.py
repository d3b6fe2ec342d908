"""Handbook regressions on factors as terms of kind category, their ridge as good as none.

Sources: A. J. Dobson, An Introduction to Generalized Linear Models (1990), p. 93, as printed in the help page
of R's glm; P. McCullagh & J. A. Nelder, Generalized Linear Models, 2nd ed. (1989), section 6.3.2, printed
figures from memory; standard errors by statsmodels on the same rows.
"""

import numpy as np
import pytest
import statsmodels.api as sm

from odograph.encoding.terms import make_term
from odograph.settings.encoding import TermSettings

NO_PENALTY = -16.0  # log strength


def factor(name, levels):
    return make_term(
        TermSettings(name=name, kind="category", columns=[name]), [np.asarray(levels, dtype=float)]
    )


def dummies(*factors):
    """Design matrix with the first level of each factor left out, (n, 1 + levels)."""
    columns = [np.ones(len(factors[0]))]
    for levels in factors:
        columns += [(levels == level).astype(float) for level in np.unique(levels)[1:]]
    return np.column_stack(columns)


def contrasts(found):
    """Intercept at the first levels, then each level less its factor's first, by the factor's name."""
    b, out = found.fit.coefficients, {"intercept": found.fit.coefficients[0]}
    for term, block in zip(found.space.terms, found.space.layout.slices, strict=True):
        out[term.name] = b[block][1:] - b[block][0]
        out["intercept"] += b[block][0]
    return out


def test_two_factors(solve):
    # Dobson 1990, p. 93.
    counts = np.array([18, 17, 15, 20, 10, 20, 25, 13, 12], dtype=float)
    outcome, treatment = np.tile([1, 2, 3], 3), np.repeat([1, 2, 3], 3)
    terms = [factor("outcome", outcome), factor("treatment", treatment)]
    found = solve(terms, np.ones(9), counts, [NO_PENALTY] * 2)
    b = contrasts(found)
    assert b["intercept"] == pytest.approx(3.044522, abs=1e-6)
    np.testing.assert_allclose(b["outcome"], [-0.454255, -0.292987], atol=1e-6)
    np.testing.assert_allclose(b["treatment"], [0, 0], atol=1e-6)
    assert found.deviance == pytest.approx(5.12914, abs=1e-5)
    assert found.fit.edf == pytest.approx(5, abs=1e-5)
    assert found.link_error[0] == pytest.approx(0.170899, abs=1e-6)


SERVICE_MONTHS = np.array([
    127, 63, 1095, 1095, 1512, 3353, 0, 2244, 44882, 17176, 28609, 20370, 7064, 13099, 0, 7117,
    1179, 552, 781, 676, 783, 1948, 0, 274, 251, 105, 288, 192, 349, 1208, 0, 2051,
    45, 0, 789, 437, 1157, 2161, 0, 542,
], dtype=float)  # fmt: skip
INCIDENTS = np.array([
    0, 0, 3, 4, 6, 18, 0, 11, 39, 29, 58, 53, 12, 44, 0, 18, 1, 1, 0, 1,
    6, 2, 0, 1, 0, 0, 0, 0, 2, 11, 0, 4, 0, 0, 7, 7, 5, 12, 0, 1,
], dtype=float)  # fmt: skip


def test_damage_to_ships(solve):
    # McCullagh & Nelder 1989, table 6.3: five types, four years of construction, two periods of operation.
    kind, built = np.repeat(np.arange(5), 8), np.tile([60, 60, 65, 65, 70, 70, 75, 75], 5)
    period, seen = np.tile([60, 75], 20), SERVICE_MONTHS > 0
    factors = [levels[seen] for levels in (kind, built, period)]
    counts, months = INCIDENTS[seen], SERVICE_MONTHS[seen]
    terms = [factor(name, levels) for name, levels in zip(("kind", "built", "period"), factors, strict=True)]
    found = solve(terms, months, counts, [NO_PENALTY] * 3)
    b = contrasts(found)
    assert b["intercept"] == pytest.approx(-6.40590156, abs=1e-5)
    np.testing.assert_allclose(b["kind"], [-0.54334430, -0.68740165, -0.07596142, 0.32557946], atol=1e-5)
    np.testing.assert_allclose(b["built"], [0.69714043, 0.81842658, 0.45342664], atol=1e-5)
    np.testing.assert_allclose(b["period"], [0.38446696], atol=1e-5)
    printed = [-6.41, -0.54, -0.69, -0.08, 0.33, 0.70, 0.82, 0.45, 0.38]
    np.testing.assert_allclose(np.hstack(list_in_order(b)), printed, atol=0.006)
    assert found.deviance == pytest.approx(38.69505, abs=1e-5)  # printed: 38.70 on 25 degrees of freedom
    assert found.fit.edf == pytest.approx(34 - 25, abs=1e-4)
    dispersion = np.sum((counts - found.expected) ** 2 / found.expected) / 25
    assert dispersion == pytest.approx(1.691010, abs=5e-6)  # printed: 1.69
    theirs = sm.GLM(counts, dummies(*factors), family=sm.families.Poisson(), offset=np.log(months)).fit(
        tol=1e-13
    )
    np.testing.assert_allclose(found.expected, theirs.fittedvalues, rtol=1e-5)
    X = dummies(*factors)
    error = np.sqrt(np.sum((X @ theirs.cov_params()) * X, axis=1))
    np.testing.assert_allclose(found.link_error, error, rtol=1e-5)


def list_in_order(b):
    return [b[name] for name in ("intercept", "kind", "built", "period")]
