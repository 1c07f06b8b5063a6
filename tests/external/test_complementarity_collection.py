"""The collection of published complementarity problems: statements checked on their own, then solved from 20 starts.

benchmarks/complementarity_report.py does the same from 100 starts and prints one line a problem.
"""

import importlib.util
import itertools
import sys
from pathlib import Path

import numpy as np
import pytest
import scipy.sparse as sp

import ssn

_REPORT = Path(__file__).resolve().parents[2] / "benchmarks" / "complementarity_report.py"
_spec = importlib.util.spec_from_file_location("complementarity_report", _REPORT)
report = importlib.util.module_from_spec(_spec)
sys.modules[_spec.name] = report
_spec.loader.exec_module(report)
collection = report.load_collection()
PROBLEMS = {p.name: p for p in collection.COLLECTION}
STARTS = 20


def dense(matrix):
    return matrix.toarray() if sp.issparse(matrix) else np.asarray(matrix)


def inner_point(problem):
    """A point where F is defined, off the kinks."""
    x = problem.starts(1)[0]
    return np.clip(x, problem.lower + 0.3, np.where(np.isfinite(problem.upper), problem.upper - 0.3, np.inf))


def test_the_collection_is_large_enough():
    assert len(PROBLEMS) == len(collection.COLLECTION) == 25
    assert len(collection.NONLINEAR) == 15
    assert len({p.seed for p in PROBLEMS.values()}) == len(PROBLEMS)
    for problem in PROBLEMS.values():
        assert problem.source
        assert problem.provenance in ("read", "memory")
        assert (problem.box[0] < problem.box[1]).all()


@pytest.mark.parametrize("name", PROBLEMS)
def test_derivatives_agree_with_differences(name):
    problem = PROBLEMS[name]
    x = inner_point(problem) if not problem.affine else problem.starts(1)[0]
    rng = np.random.default_rng(0)
    for direction in [*np.eye(problem.size)[:18], rng.standard_normal(problem.size)]:
        h = 1e-6
        quotient = (problem.value(x + h * direction) - problem.value(x - h * direction)) / (2 * h)
        exact = dense(problem.derivative(x)) @ direction
        assert np.abs(quotient - exact).max() <= 1e-7 * max(1.0, np.abs(exact).max())


@pytest.mark.parametrize("name", [n for n, p in PROBLEMS.items() if p.solutions])
def test_known_solutions_solve_the_statements(name):
    problem = PROBLEMS[name]
    for listed in problem.solutions:
        exact = collection.refined(problem, listed)
        assert problem.residual(exact) < 1e-12
        assert np.abs(exact - listed).max() <= problem.digits


@pytest.mark.parametrize("name", [n for n, p in PROBLEMS.items() if p.affine and p.size <= 10])
def test_enumeration_of_all_pieces_finds_the_listed_solutions(name):
    """2^n pieces: each unknown on its bound, or its F zero."""
    problem = PROBLEMS[name]
    assert (problem.lower == 0).all()
    assert np.isinf(problem.upper).all()
    matrix = dense(problem.derivative(problem.lower))
    vector = problem.value(np.zeros(problem.size))
    found = []
    for choice in itertools.product([False, True], repeat=problem.size):
        free = np.flatnonzero(choice)
        x = np.zeros(problem.size)
        if free.size:
            block = matrix[np.ix_(free, free)]
            if np.linalg.matrix_rank(block) < free.size:
                continue
            x[free] = np.linalg.solve(block, -vector[free])
        if problem.residual(x) < 1e-10 and not any(np.abs(x - y).max() < 1e-8 for y in found):
            found.append(x)
    assert len(found) == len(problem.solutions)
    assert max(problem.distance(x) for x in found) <= problem.digits


def test_the_perpetual_put_is_near_its_exact_value():
    errors = []
    for n in (99, 199):
        problem = collection.perpetual_put_problem(n)
        price = 200.0 / (n + 1) * np.arange(1, n + 1)
        errors.append(np.abs(problem.solutions[0] - collection.perpetual_put_value(price)).max())
    assert errors[0] < 0.1
    assert errors[1] < 0.5 * errors[0]


# Starts of the first 20 from which no solution is found, by problem, with the outcome: nothing else may fail.
FAILURES: dict[str, dict[str, int]] = {
    "Hock-Schittkowski 2": {"step limit": 1},  # Rosenbrock's valley: the residual must rise on the way
    "Hock-Schittkowski 100": {"step limit": 1},  # curvature vanishes at zero, several ways use up 100 steps
}


@pytest.mark.parametrize("name", PROBLEMS)
def test_seeded_starts_are_solved(name):
    problem = PROBLEMS[name]
    tally = report.measure(problem, problem.starts(STARTS), plain=False)
    assert tally.wrong_claims == 0
    assert dict(tally.failures) == FAILURES.get(name, {}), tally.failed_starts
    assert tally.share >= 0.9
    if problem.complete:
        assert tally.listed == tally.solved


@pytest.mark.parametrize("name", ["Torsion", "Membrane"])
def test_printed_optima(name):
    problem = PROBLEMS[name]
    expected = {"Torsion": collection.TORSION_OPTIMUM, "Membrane": collection.OBSTACLE_OPTIMUM}[name]
    solution = ssn.solve(report.statement(problem), problem.starts(1)[0]).require()
    assert solution.objective == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize("n", collection.CYCLIC_SIZES)
def test_cycling_p_matrices_are_solved_from_200_starts(n):
    problem = report.cyclic(collection, n)
    tally = report.measure(problem, problem.starts(200), plain=n == 3)
    assert tally.solved == 200
    if n == 3:
        assert tally.plain_failures >= 100


@pytest.mark.parametrize("form", ["mid", "fischer-burmeister"])
@pytest.mark.parametrize("name", ["Kojima-Shindo", "Gould", "Hock-Schittkowski 110", "Torsion"])
def test_both_forms_solve(name, form):
    problem = PROBLEMS[name]
    tally = report.measure(problem, problem.starts(5), plain=False, form=form)
    assert tally.solved == 5
