"""Fits of the same models with general-purpose libraries: glum, scikit-learn and R's mgcv.

All get exactly what the engine gets: the same time bins, the covariates at the centres of the same cells,
bases that span the same functions. glum has the same penalty as well; scikit-learn offers only a ridge.
"""

from __future__ import annotations

import csv
import json
import subprocess
import tempfile
import time
import warnings
from pathlib import Path

import numpy as np
from scipy import sparse
from scipy.linalg import LinAlgWarning

from odograph.encoding.bases import gram
from odograph.encoding.design import SessionDesign
from odograph.encoding.terms import Term

R_SCRIPT = Path(__file__).with_name("full_model.R")


def model_terms(design: SessionDesign, model: tuple[str, ...]) -> list[Term]:
    """The terms of a model, drift included."""
    return [*(term for term in design.terms if term.name in model), *design.nuisance]


def sparse_design(terms: list[Term], keep: np.ndarray) -> sparse.csc_matrix:
    """Basis functions of the terms in the bins of `keep`, the first of each term left out.

    With an intercept beside them they span what all of them span, since splines add up to one.
    """
    blocks = []
    for term in terms:
        n_cells, support = term.basis.columns.shape
        rows = np.repeat(np.arange(n_cells), support)
        basis = sparse.csr_matrix(
            (term.basis.weights.ravel(), (rows, term.basis.columns.ravel())), shape=(n_cells, term.basis.size)
        )
        blocks.append(basis[term.cell[keep]][:, 1:])
    return sparse.hstack(blocks, format="csc")


def penalty(terms: list[Term], strengths: dict[str, np.ndarray]) -> np.ndarray:
    """S_lam for the columns of `sparse_design`; strengths (n_penalties of the term,) by term."""
    blocks = []
    for term in terms:
        if term.kind == "plane":
            size = term.margins[0].size
            bend, mass = gram(size, 2), gram(size, 0)
            parts = [np.kron(bend, mass), np.kron(mass, bend)]
        else:
            parts = [gram(term.basis.size, 2, cyclic=term.kind == "circle")]
        blocks.append(sum(s * part for s, part in zip(strengths[term.name], parts, strict=True))[1:, 1:])
    return sparse.block_diag(blocks).toarray()


def glum_fit(X: sparse.csc_matrix, counts: np.ndarray, S: np.ndarray, bin_s: float):
    """Fit with glum at a fixed penalty; returns CPU seconds and the fitted rates in hertz, (n_bins,)."""
    from glum import GeneralizedLinearRegressor

    # glum minimises deviance / (2 n) + alpha b'P2 b / 2, and wants P2 definite beyond rounding.
    P2 = sparse.csc_matrix((S + 1e-9 * np.diag(S).mean() * np.eye(len(S))) / len(counts))
    model = GeneralizedLinearRegressor(family="poisson", alpha=1.0, l1_ratio=0.0, P2=P2)
    start = time.process_time()
    with warnings.catch_warnings():
        warnings.simplefilter(
            "ignore", LinAlgWarning
        )  # splines at places never visited: the penalty has them
        model.fit(X, counts)
    seconds = time.process_time() - start
    return seconds, model.predict(X) / bin_s


def sklearn_fit(X: sparse.csc_matrix, counts: np.ndarray, solver: str) -> float:
    """Fit with scikit-learn's PoissonRegressor, ridge penalty; returns CPU seconds.

    At its default tolerance lbfgs stops several nats short of the optimum; at 1e-6 it is about as near as the
    engine and glum come.
    """
    from sklearn.exceptions import ConvergenceWarning
    from sklearn.linear_model import PoissonRegressor

    rows = X.toarray() if solver == "newton-cholesky" else X.tocsr()
    tolerance = 1e-6 if solver == "lbfgs" else 1e-4
    model = PoissonRegressor(alpha=1.0 / len(counts), solver=solver, tol=tolerance, max_iter=1000)
    start = time.process_time()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)
        model.fit(rows, counts)
    return time.process_time() - start


def mgcv_fit(design: SessionDesign, counts: np.ndarray, repeats: int) -> tuple[list[float], np.ndarray]:
    """Fit the full model with mgcv's bam(discrete=TRUE, method="fREML"), one thread.

    Returns
    -------
    seconds : list of float
        CPU seconds of each repeat, the fit alone.
    rate_hz : ndarray, (n_bins,)
    """
    terms = model_terms(design, tuple(term.name for term in design.terms))
    columns, described = {"count": counts}, []
    for term in terms:
        names = [f"{term.name}_{axis}" for axis in "xy"] if term.kind == "plane" else [term.name]
        place = divmod(term.cell, len(term.axes[0]))[::-1] if term.kind == "plane" else (term.cell,)
        columns |= {name: axis[i] for name, axis, i in zip(names, term.axes, place, strict=True)}
        size = term.margins[0].size if term.kind == "plane" else term.basis.size
        described.append({"kind": term.kind, "names": names, "size": size, "spans": term.spans})
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        with (place / "bins.csv").open("w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(columns)
            writer.writerows(zip(*(values.tolist() for values in columns.values()), strict=True))
        _write_formula(place / "model.txt", described)
        command = ["Rscript", "--vanilla", str(R_SCRIPT), folder, str(repeats)]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        if done.returncode != 0:
            raise RuntimeError(f"Rscript ended with status {done.returncode}:\n{done.stderr}")
        seconds = json.loads((place / "seconds.json").read_text(encoding="utf-8"))
        rate = np.fromfile(place / "expected.bin") / design.bin_s
    return seconds, rate


def _write_formula(file: Path, described: list[dict]) -> None:
    """The model's formula and its knots in R's own words, one a line."""
    parts, knots = [], []
    for term in described:
        names, size = term["names"], term["size"]
        if term["kind"] == "plane":
            parts.append(f"te({', '.join(names)}, bs='unit', k={size}, m=list(c(3, 2), c(3, 2)), np=FALSE)")
        elif term["kind"] == "circle":
            parts.append(f"s({names[0]}, bs='cc', k={size + 1})")
        else:
            parts.append(f"s({names[0]}, bs='bs', k={size}, m=c(3, 2))")
        for name, (low, high) in zip(names, term["spans"], strict=True):
            spacing = (high - low) / (size if term["kind"] == "circle" else size - 3)
            first, count = (low, size + 1) if term["kind"] == "circle" else (low - 3 * spacing, size + 4)
            knots.append(f"{name} = {first!r} + {spacing!r} * (0:{count - 1})")
    file.write_text(f"count ~ {' + '.join(parts)}\nlist({', '.join(knots)})\n", encoding="utf-8")
