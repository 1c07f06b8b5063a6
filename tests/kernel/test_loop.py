"""The Newton loop: records, every way to end, stopping and interrupting, determinism."""

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import ssn
from ssn import Outcome
from tests.kernel.examples import Contact, Scalar, control, cyclic

ROOT = Path(__file__).resolve().parents[2]


def residual(equation, x):
    return float(np.abs(equation.residual(x)).max())


@pytest.mark.parametrize("kind", ["sparse", "lil", "dense", "operator"])
def test_users_equation_with_every_kind_of_derivative(kind):
    equation = Contact(kind)
    solution = ssn.solve(equation, start=np.zeros(40)).require()
    assert residual(equation, solution.x) < 1e-8
    np.testing.assert_allclose(solution.x, ssn.solve(Contact(), start=np.zeros(40)).x, atol=1e-8)
    over = solution.x > equation.ceiling
    assert 0 < over.sum() < 40
    np.testing.assert_array_equal(solution.pieces["contact"], over)
    assert solution.choices["equation"]


def test_records():
    seen = []
    solution = ssn.solve(Contact(), start=np.zeros(40), callback=seen.append)
    assert tuple(seen) == solution.steps
    assert [s.index for s in solution.steps] == list(range(1, len(seen) + 1))
    norm = solution.start_norm
    for step in solution.steps:
        assert step.contraction == pytest.approx(step.residual_norm / norm)
        norm = step.residual_norm
        assert step.linear_residual <= max(step.forcing, 1e-10)
        assert sum(step.pieces["contact"].values()) == 40
        assert step.work.factorizations == 1
        assert 0 < step.length <= 1
        json.dumps(step.as_dict())
    assert solution.steps[-1].residual_norm == pytest.approx(solution.residual_norm)
    assert solution.steps[-1].accuracy <= solution.tolerance
    assert solution.steps[-1].piece_changes == 0
    with pytest.raises(AttributeError):
        solution.steps[0].index = 7
    assert len(solution.history().splitlines()) == len(solution.steps) + 2
    assert solution.contractions == [s.contraction for s in solution.steps]
    assert solution.work.symbolic_analyses == 1 or solution.work.factorizations == len(seen)


def test_solution_is_frozen_and_complete():
    for problem, start in ((Contact(), np.zeros(40)), (control(), None), (cyclic(3, 0.5), None)):
        solution = ssn.solve(problem, start)
        assert solution.converged and solution.outcome is Outcome.CONVERGED
        with pytest.raises(AttributeError):
            solution.converged = False
        assert solution.accuracy <= 10 * solution.tolerance
        assert solution.require() is solution
        assert "converged" in repr(solution)


@pytest.mark.parametrize("outcome", list(Outcome))
def test_outcomes_explain_themselves(outcome):
    assert outcome.explanation.endswith(".")
    assert outcome.advice.endswith(".")


# ends


def test_nan_at_the_start():
    solution = ssn.solve(Scalar(lambda x: np.log(x) if x > 0 else np.nan, lambda x: 1 / x), start=[-1.0])
    assert solution.outcome is Outcome.NOT_FINITE
    assert not solution.converged and not solution.steps
    with pytest.raises(ssn.NotConverged, match="not finite") as caught:
        solution.require()
    assert caught.value.solution is solution


@pytest.mark.parametrize("globalization", ["auto", "residual"])
def test_nan_at_a_trial_point_shortens_the_step(globalization):
    equation = Scalar(lambda x: np.log(x) if x > 0 else np.nan, lambda x: 1 / x)
    solution = ssn.solve(equation, start=[10.0], globalization=globalization).require()
    assert solution.x[0] == pytest.approx(1.0, abs=1e-9)
    assert solution.steps[0].length < 1


def test_nan_at_every_trial_point():
    equation = Scalar(lambda x: 1.0 if x == 2.0 else np.nan, lambda x: 1.0)
    solution = ssn.solve(equation, start=[2.0])
    assert solution.outcome is Outcome.NOT_FINITE
    assert solution.x.tolist() == [2.0]


def test_nan_at_the_full_step():
    equation = Scalar(lambda x: np.log(x) if x > 0 else np.nan, lambda x: 1 / x)
    solution = ssn.solve(equation, start=[10.0], globalization="full")
    assert solution.outcome is Outcome.NOT_FINITE
    assert not solution.converged


def test_nan_in_the_derivative():
    solution = ssn.solve(Scalar(lambda x: x - 1, lambda x: np.nan), start=[0.0])
    assert solution.outcome in (Outcome.SINGULAR, Outcome.NOT_FINITE)


def test_singular_system():
    class Inconsistent:
        """x + y = 1 and x + y = 2."""

        def residual(self, x):
            return np.array([x.sum() - 1, x.sum() - 2])

        def linearize(self, x):
            return ssn.Linearization(self.residual(x), np.ones((2, 2)))

    solution = ssn.solve(Inconsistent(), start=[0.0, 0.0])
    assert solution.outcome in (Outcome.SINGULAR, Outcome.NO_ROOT_NEARBY)
    assert "singular" in solution.message.lower()


def test_singular_derivative_of_a_consistent_system_is_overcome_or_reported():
    solution = ssn.solve(Scalar(lambda x: x**3 - 8, lambda x: 3 * x * x), start=[0.0])
    assert solution.outcome in (Outcome.SINGULAR, Outcome.NO_ROOT_NEARBY, Outcome.CONVERGED)
    assert solution.converged == (abs(solution.x[0] - 2) < 1e-6)


@pytest.mark.parametrize("start", [3.0, 0.5, -2.0, 1e6])
@pytest.mark.parametrize("globalization", ["auto", "full"])
def test_no_real_root(start, globalization):
    solution = ssn.solve(
        Scalar(lambda x: x * x + 1, lambda x: 2 * x), start=[start], globalization=globalization
    )
    assert not solution.converged
    assert solution.outcome in (Outcome.NO_ROOT_NEARBY, Outcome.STALLED, Outcome.SINGULAR, Outcome.STEP_LIMIT)
    if globalization == "auto":
        assert solution.outcome is Outcome.NO_ROOT_NEARBY
        assert abs(solution.x[0]) < 0.5  # the best point in sight


def test_start_is_the_root():
    """No linearisation is asked for, so that a derivative which is singular there does no harm."""
    equation = Scalar(lambda x: x * x, lambda x: 2 * x)
    solution = ssn.solve(equation, start=[0.0]).require()
    assert not solution.steps
    assert equation.linearizations == 0
    problem = control()
    warm = ssn.solve(problem, ssn.solve(problem).x).require()
    assert len(warm.steps) <= 1


def test_step_limit_returns_the_best():
    problem = control(16, alpha=1e-6)
    solution = ssn.solve(problem, max_steps=2)
    assert solution.outcome is Outcome.STEP_LIMIT
    assert len(solution.steps) == 2
    assert not solution.converged
    assert np.isfinite(solution.x).all()
    nothing = ssn.solve(problem, max_steps=0)
    assert nothing.outcome is Outcome.STEP_LIMIT and not nothing.steps


def test_unbounded_objectives():
    for problem in (
        ssn.CompositeProblem(smooth=ssn.Quadratic(-np.eye(3), np.ones(3)), cost=ssn.SparseCost(0.1)),
        ssn.CompositeProblem(
            smooth=ssn.Quadratic(np.diag([1.0, -1.0]), np.ones(2)), cost=ssn.Bounds(0.0, np.inf)
        ),
        ssn.CompositeProblem(
            smooth=ssn.Quadratic(np.zeros((3, 3)), np.ones(3)), cost=ssn.Bounds(0.0, np.inf)
        ),
        ssn.CompositeProblem(smooth=ssn.Quadratic(np.zeros((3, 3)), np.ones(3)), cost=ssn.SparseCost(0.5)),
        ssn.CompositeProblem(smooth=ssn.Quadratic(np.diag([1.0, 0.0]), np.ones(2)), cost=ssn.Bounds()),
    ):
        solution = ssn.solve(problem)
        assert not solution.converged, problem.part.H
        assert solution.outcome in (
            Outcome.UNBOUNDED,
            Outcome.SADDLE_POINT,
            Outcome.SINGULAR,
            Outcome.STEP_LIMIT,
            Outcome.STALLED,
        )


def test_a_negative_curvature_within_bounds_ends_at_a_stationary_point():
    problem = ssn.CompositeProblem(
        smooth=ssn.Quadratic(-np.eye(3), [0.1, 0.2, 0.3]), cost=ssn.Bounds(-1.0, 2.0)
    )
    solution = ssn.solve(problem)
    assert not problem.convex
    gradient = -solution.x - np.array([0.1, 0.2, 0.3])
    stationary = np.linalg.norm(solution.x - np.clip(solution.x - gradient, -1, 2)) < 1e-8
    assert stationary and solution.outcome is Outcome.SADDLE_POINT and not solution.converged
    assert solution.certificate is None


def test_zero_solution():
    problem = control(beta=1.0)  # far above the weight from which on the control vanishes
    solution = ssn.solve(problem).require()
    assert not solution.x.any()
    assert solution.accuracy == 0.0
    from_afar = ssn.solve(problem, np.full(144, 20.0)).require()
    assert not from_afar.x.any()
    a = np.random.default_rng(0).standard_normal((8, 5))
    b = np.ones(8)
    at_threshold = float(np.abs(a.T @ b).max())
    for beta in (at_threshold * 1.0001, at_threshold * 10):
        problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=ssn.SparseCost(beta))
        assert not ssn.solve(problem).require().x.any()
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=ssn.SparseCost(at_threshold * 0.999))
    assert np.count_nonzero(ssn.solve(problem).require().x) == 1


def test_target_reachable_exactly():
    """Zero residual of the tracking term at the solution: no digits are left in its relative size."""
    problem = control(beta=0.0, alpha=1e-6, bound=1e4)
    u = 5 * np.sin(np.arange(144.0))
    y = problem.response(u)
    reachable = control(beta=0.0, alpha=1e-12, bound=1e4, target=y)
    solution = ssn.solve(reachable)
    if solution.converged:
        np.testing.assert_allclose(solution.x, u, rtol=1e-3, atol=1e-2)
    assert not ssn.solve(control(beta=0.0, target=np.zeros(144))).require().x.any()
    a = np.random.default_rng(2).standard_normal((9, 4))
    exact = np.array([1.0, 0.0, 2.0, 0.5])
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, a @ exact), cost=ssn.Bounds(0.0, np.inf))
    np.testing.assert_allclose(ssn.solve(problem).require().x, exact, atol=1e-7)


# cycling


@pytest.mark.parametrize("n", [3, 5])
@pytest.mark.parametrize("a", [1.5, 2.0, 4.0])
def test_plain_full_steps_cycle_where_the_default_converges(n, a):
    start = np.zeros(n)
    start[0] = 1.0
    starts = [np.zeros(n), start, np.ones(n), np.arange(n) / 2.0]
    outcomes = []
    for x in starts:
        full = ssn.solve(cyclic(n, a), x, globalization="full")
        assert full.outcome in (Outcome.CYCLING, Outcome.CONVERGED)
        outcomes.append(full.outcome)
        problem = cyclic(n, a)
        solution = ssn.solve(problem, x)
        assert solution.converged, (x, solution.message)
        np.testing.assert_allclose(solution.x, np.full(n, 1 / (1 + a)), atol=1e-7)
    assert Outcome.CYCLING in outcomes
    cycling = ssn.solve(cyclic(n, a), starts[outcomes.index(Outcome.CYCLING)], globalization="full")
    assert "step" in cycling.message
    assert len(cycling.steps) < 30


# stopping


def test_a_callback_stops_the_solve():
    def stop(record):
        if record.index == 2:
            raise ssn.StopSolve("enough")

    for problem, start in ((control(16, alpha=1e-6), None), (Contact(), np.zeros(40))):
        solution = ssn.solve(problem, start, callback=stop)
        assert solution.outcome is Outcome.STOPPED
        assert solution.message == "enough"
        assert len(solution.steps) == 2
        assert not solution.converged
    # the best iterate, not the last
    full = ssn.solve(
        Scalar(lambda x: np.arctan(x), lambda x: 1 / (1 + x * x)), [2.0], globalization="full", callback=stop
    )
    assert full.x.tolist() == [2.0]


@pytest.mark.parametrize("make", [lambda: (control(16, alpha=1e-6), None), lambda: (Contact(), np.zeros(40))])
def test_ctrl_c_keeps_the_best_iterate(make):
    problem, start = make()

    def interrupt(record):
        if record.index == 1:
            raise KeyboardInterrupt

    with pytest.raises(ssn.SolveInterrupted) as caught:
        ssn.solve(problem, start, callback=interrupt)
    assert isinstance(caught.value, KeyboardInterrupt)
    solution = caught.value.solution
    assert solution.outcome is Outcome.INTERRUPTED
    assert len(solution.steps) == 1
    assert not solution.converged
    assert np.isfinite(solution.x).all()
    assert ssn.solve(problem, solution.x).converged


def test_ctrl_c_inside_the_users_model():
    class Interrupted(Contact):
        def residual(self, u):
            if self.residuals == 2:
                self.residuals += 1
                raise KeyboardInterrupt
            return super().residual(u)

    with pytest.raises(ssn.SolveInterrupted) as caught:
        ssn.solve(Interrupted(), start=np.zeros(40))
    assert caught.value.solution.x.shape == (40,)


def test_ctrl_c_on_a_path_and_stop_on_a_path():
    a = np.random.default_rng(0).standard_normal((30, 50))
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(a, a[:, 0]), cost=ssn.SparseCost(0.1))

    def stop(record):
        raise ssn.StopSolve("here")

    def interrupt(record):
        raise KeyboardInterrupt

    assert ssn.solve(problem, callback=stop).outcome is Outcome.STOPPED
    with pytest.raises(ssn.SolveInterrupted):
        ssn.solve(problem, callback=interrupt)


def test_errors_of_the_callback_pass_through():
    def broken(record):
        raise ZeroDivisionError("mine")

    with pytest.raises(ZeroDivisionError, match="mine"):
        ssn.solve(Contact(), start=np.zeros(40), callback=broken)


def test_progress_goes_to_standard_error(capsys):
    solution = ssn.solve(Contact(), start=np.zeros(40), progress=True)
    out, err = capsys.readouterr()
    assert out == ""
    assert len(err.splitlines()) == len(solution.steps)


# determinism


def digest(solution):
    parts = [solution.x, solution.residual_norm, solution.accuracy]
    parts += [(s.residual_norm, s.accuracy, s.length, s.inner_iterations) for s in solution.steps]
    return [np.asarray(p, dtype=float).tobytes() for p in parts]


@pytest.mark.parametrize(
    "make",
    [
        lambda: (control(16, alpha=1e-6), None),
        lambda: (Contact(), np.zeros(40)),
        lambda: (cyclic(5, 2.0), None),
    ],
)
def test_two_solves_are_bitwise_equal(make):
    assert digest(ssn.solve(*make())) == digest(ssn.solve(*make()))


PROGRAM = """
import hashlib, numpy as np, ssn
from tests.kernel.examples import control
s = ssn.solve(control(16, alpha=1e-6))
print(hashlib.sha256(s.x.tobytes() + repr(s.steps).encode()).hexdigest())
"""


def test_two_processes_are_bitwise_equal():
    threads = {name: "1" for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")}
    found = []
    for seed in ("1", "2"):
        path = os.pathsep.join([str(ROOT), *filter(None, sys.path)])
        environment = os.environ | threads | {"PYTHONHASHSEED": seed, "PYTHONPATH": path}
        done = subprocess.run(
            [sys.executable, "-c", PROGRAM], env=environment, capture_output=True, text=True, check=True
        )
        found.append(done.stdout)
    assert len(found[0]) == 65
    assert found[0] == found[1]


class Curved:
    """1/2 |u + u^2/2 - b|^2 + 0.05 |u|^2: its curvature grows away from zero, where the first step length is taken."""

    affine_gradient = False
    size = 12
    b = np.linspace(-0.2, 3, 12)

    def value(self, u):
        misfit = u + u * u / 2 - self.b
        return float(misfit @ misfit / 2 + 0.05 * u @ u)

    def gradient(self, u):
        return (u + u * u / 2 - self.b) * (1 + u) + 0.1 * u

    def hessian(self, u):
        return np.diag((1 + u) ** 2 + u + u * u / 2 - self.b + 0.1)


def test_the_step_follows_a_growing_curvature():
    problem = ssn.CompositeProblem(smooth=Curved(), cost=ssn.SparseCost(0.05, -0.3, 1.2))
    solution = ssn.solve(problem).require()
    assert len(solution.steps) <= 15
    reference = ssn.proximal_gradient(problem)
    np.testing.assert_allclose(reference.x, solution.x, atol=1e-6)
