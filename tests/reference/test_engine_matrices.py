"""The engine's fast passes against mgcv 1.8-41 (R 4.2.2) given the same design matrix and penalties.

A plane (its rows are summed by a way of its own), a direction, a line and a category at once, made from
data/arena_counts.csv; the line is time, which the data know nothing of. mgcv's numbers are in
data/mgcv_engine_values.json. To make them anew: `python test_engine_matrices.py FOLDER` writes the matrices,
`Rscript mgcv_values.R FOLDER` has mgcv fit them (`gam` with `paraPen`, `bam` for the chosen strengths).
"""

import json
import sys
from pathlib import Path

import numpy as np
import pytest

from odograph.encoding.terms import make_term
from odograph.settings.encoding import TermSettings

DATA = Path(__file__).parent / "data"
ARENA = np.genfromtxt(DATA / "arena_counts.csv", delimiter=",", names=True)
# Of the plane along x and y, the direction, the line, the category: moderate, and far from each other.
LOG_STRENGTHS = np.array([[0.0, 0.5, 1.0, 2.0, 3.0], [-4.0, 6.0, 5.0, -3.0, 0.0]])


def make_terms():
    settings = [
        TermSettings(name="arena", kind="plane", columns=["x", "y"], basis_size=7, cells=20),
        TermSettings(name="direction", kind="circle", columns=["hd"], basis_size=9, cells=40),
        TermSettings(name="time", kind="line", columns=["t"], basis_size=8, cells=30, penalty_order=1),
        TermSettings(name="state", kind="category", columns=["s"]),
    ]
    t = np.arange(600.0)
    values = {"x": ARENA["x"], "y": ARENA["y"], "hd": ARENA["hd"], "t": t, "s": t * 7 % 4}
    return [make_term(one, [values[name] for name in one.columns]) for one in settings]


@pytest.fixture(scope="module")
def values():
    return json.loads((DATA / "mgcv_engine_values.json").read_text(encoding="utf-8"))


def compare(found, expected, tolerance):
    assert found.fit.converged
    assert found.fit.edf == pytest.approx(expected["edf"][0], abs=tolerance)
    assert found.deviance == pytest.approx(expected["deviance"][0], abs=10 * tolerance)
    np.testing.assert_allclose(found.expected[::10], expected["fitted"], rtol=tolerance)
    np.testing.assert_allclose(found.link_error[::10], expected["link_error"], rtol=tolerance)


@pytest.mark.parametrize("case", [0, 1])
def test_score_edf_and_fitted_values_at_fixed_strengths(solve, values, case):
    found = solve(make_terms(), ARENA["occ"], ARENA["count"], LOG_STRENGTHS[case])
    compare(found, values[f"fixed_{case + 1}"], 1e-6)
    assert found.score == pytest.approx(values[f"fixed_{case + 1}"]["score"][0], abs=1e-6)


def test_chosen_strengths(solve, values):
    found = solve(make_terms(), ARENA["occ"], ARENA["count"])
    expected = values["fast"]
    # Strengths that want to be infinite stop at different heights.
    finite = np.array(expected["strengths"]) < 1e6
    np.testing.assert_allclose(
        found.fit.log_strengths[finite], np.log(np.array(expected["strengths"])[finite]), atol=1e-3
    )
    compare(found, expected, 1e-3)


def write_matrices(folder):
    """What mgcv is given, in the engine's coordinates: rows, design, penalties' diagonals, log strengths."""
    terms = make_terms()
    blocks = [np.ones((len(ARENA), 1)), *(term.functions[term.cell] for term in terms)]
    design = np.hstack(blocks)
    spectra, first = [], 1
    for term in terms:
        for one in term.coordinates.spectra:
            spectra.append(np.zeros(design.shape[1]))
            spectra[-1][first : first + len(one)] = one
        first += term.coordinates.size
    rows = np.column_stack([ARENA["count"], ARENA["occ"]])
    np.savetxt(folder / "rows.csv", rows, delimiter=",", header="count,seconds", comments="")
    ends = np.cumsum([1, *(term.coordinates.size for term in terms)])
    arrays = {"design": design, "spectra": spectra, "log_strengths": LOG_STRENGTHS, "ends": ends}
    for name, array in arrays.items():
        np.savetxt(folder / f"{name}.csv", np.array(array), delimiter=",", fmt="%.17g")


if __name__ == "__main__":
    write_matrices(Path(sys.argv[1]))
