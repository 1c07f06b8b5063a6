"""Count and power costs from their convex envelope: closed forms, enumeration, the bound for all, and what stops it."""

import dataclasses
import itertools

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.envelope_start import EnvelopeStart, Relaxation, relaxation, run_envelope_start
from ssn.evidence import assess
from ssn.newton import Limits
from ssn.prepare import prepare
from ssn.report.words import assessment_sentences
from ssn.report.writer import solution_document
from tests.problems.loading import load

SPARSE_ELLIPTIC = load("sparse_elliptic")


def elliptic(cost, n=20, alpha=1e-4):
    return SPARSE_ELLIPTIC.build(n, alpha=alpha, beta=0.0).with_cost(cost)


def least_squares(seed, cost, rows=30, n=8):
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((rows, n))
    x = np.where(np.arange(n) < 3, 2.0, 0.0) * rng.choice([-1, 1], n)
    part = ssn.LeastSquares(a, a @ x + 0.3 * rng.standard_normal(rows))
    return ssn.CompositeProblem(smooth=part, cost=cost)


def separable(cost, alpha=0.5):
    """S = diag(1/e), so that each component is a problem of its own."""
    e = np.array([1.0, 2.0, 0.5, 1.0, 3.0, 1.5])
    z = np.array([3.0, -1.0, 0.4, 0.2, 0.0, -4.0])
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(sp.diags_array(e).tocsr()), control_operator=sp.eye_array(6, format="csr"), target=z,
        control_weight=alpha, cost=cost,
    )  # fmt: skip
    return problem, 1.0 / e, z


COSTS = [
    ssn.CountCost(0.3), ssn.CountCost(0.3, -0.8, 1.1), ssn.CountCost(0.3, 0.0, np.inf), ssn.PowerCost(0.3),
    ssn.PowerCost(0.3, 2.0 / 3.0, -1.0, 1.2), ssn.PowerCost(0.3, 0.3),
]  # fmt: skip


@pytest.mark.parametrize("cost", COSTS, ids=repr)
def test_separable_control_problems_by_brute_force(cost):
    """Component by component on a grid: the solution is the global one, and no grid point beats the bound."""
    problem, s, z = separable(cost)
    solution = ssn.solve(problem).require()
    lower, upper = (np.broadcast_to(b, (6,)) for b in (cost.lower, cost.upper))
    power = getattr(cost, "power", 0.0)
    best = 0.0
    for i in range(6):
        grid = np.append(np.linspace(max(lower[i], -5), min(upper[i], 5), 20001), 0.0)
        price = np.where(grid != 0, np.abs(grid) ** power, 0.0)
        best += (0.5 * (s[i] * grid - z[i]) ** 2 + 0.25 * grid**2 + 0.3 * price).min()
    assert solution.objective == pytest.approx(best, rel=1e-6)
    assert solution.objective <= best + 1e-12
    assert solution.lower_bound <= solution.objective


def test_hard_threshold_in_closed_form():
    """1/2 (s u - z)^2 + alpha/2 u^2 + beta [u != 0]: s z / (s^2 + alpha) where (s z)^2 > 2 beta (s^2 + alpha)."""
    problem, s, z = separable(ssn.CountCost(0.3))
    curvature = s * s + 0.5
    expected = np.where((s * z) ** 2 > 2 * 0.3 * curvature, s * z / curvature, 0.0)
    np.testing.assert_allclose(ssn.solve(problem).require().x, expected, rtol=1e-9)


@pytest.mark.parametrize("seed", range(6))
def test_bound_and_solution_against_all_supports(seed):
    """The global minimum by enumeration of all 2^8 supports lies between the bound and our objective."""
    p = least_squares(seed, ssn.CountCost(4.0))
    least = 0.5 * p.part.b @ p.part.b
    for size in range(1, 9):
        for rows in itertools.combinations(range(8), size):
            x, *_ = np.linalg.lstsq(p.part.A[:, rows], p.part.b, rcond=None)
            least = min(least, 0.5 * np.sum((p.part.A[:, rows] @ x - p.part.b) ** 2) + 4.0 * size)
    solution = ssn.solve(p).require()
    assert solution.lower_bound <= least * (1 + 1e-12)
    assert solution.objective == pytest.approx(least, rel=1e-10)
    assert solution.gap <= 0.3  # there are no more than 8 components, of one support each
    assert solution.certificate is None


@pytest.mark.parametrize(
    "cost", [ssn.CountCost(4.0), ssn.PowerCost(3.0), ssn.CountCost(3.0, -1.5, 1.9)], ids=repr
)
@pytest.mark.parametrize("rows", [30, 5])
def test_no_point_lies_below_the_bound(cost, rows):
    """Whatever q: the bound at random q, and random points with few nonzeros; also without strong convexity."""
    p = least_squares(3, cost, rows=rows)
    relaxed = relaxation(p)
    rng = np.random.default_rng(0)
    highest = max(relaxed.bound(rng.standard_normal(relaxed.target.size) * k) for k in (0.0, 0.1, 1.0, 5.0))
    points = [
        cost.prox(3 * rng.standard_normal(8) * (rng.random(8) < q), 1e-300) for q in (0.0, 0.3, 0.6) * 20
    ]
    assert highest <= min(p.objective(u) for u in points)
    assert ssn.solve(p).lower_bound >= highest - 1e-9 * abs(highest)


def test_relaxation_of_least_squares_has_the_same_objective():
    """Moving part of the strong convexity into the envelope changes nothing where the envelope is the cost itself."""
    p = least_squares(1, ssn.CountCost(1e-9))
    relaxed = relaxation(p)
    u = np.linspace(1, 2, 8)
    residual = relaxed.tracking.forward(u) - relaxed.target
    assert relaxed.value(u, residual) == pytest.approx(p.objective(u), rel=1e-10)


@pytest.mark.parametrize(
    ("cost", "alpha", "gap", "steps"),
    [
        (ssn.CountCost(1e-2, -30, 30), 1e-3, 1e-9, 15), (ssn.CountCost(1e-2, -30, 30), 1e-4, 5e-5, 35),
        (ssn.CountCost(1e-2, -30, 30), 1e-5, 5e-4, 50), (ssn.PowerCost(3e-3, 0.5, -30, 30), 1e-4, 1e-5, 40),
        (ssn.PowerCost(3e-3, 0.5, -30, 30), 1e-5, 5e-4, 50),
    ],
)  # fmt: skip
def test_gap_and_steps_in_sparse_elliptic_control(cost, alpha, gap, steps):
    problem = elliptic(cost, alpha=alpha)
    solution = ssn.solve(problem).require()
    assert 0 <= solution.gap <= gap
    assert len(solution.steps) <= steps
    step = problem.natural_step()
    moved = cost.prox(solution.x - step * problem.smooth(solution.x)[1], step)
    assert problem.controls.norm(moved - solution.x) <= 1e-9 * problem.controls.norm(moved)
    assert solution.objective == pytest.approx(problem.objective(solution.x), rel=1e-14)


def test_relaxation_agrees_with_a_conic_solver():
    """Perspective form of the envelope of a count with a quadratic, unbounded control: s w >= u^2, 0 <= w <= 1."""
    problem = elliptic(ssn.CountCost(1e-2), n=10)
    n = problem.unknowns
    h2 = 1.0 / 11**2
    zero, eye = sp.csr_array((n, n)), sp.eye_array(n)
    # unknowns y, u / 20, w, s / 400
    c = np.concatenate([-problem.target, np.zeros(n), np.full(n, 1e-2), np.full(n, 0.5e-4 * 400)])
    P = sp.block_diag([eye, sp.csr_array((3 * n,) * 2)], format="csc")
    state = sp.hstack([SPARSE_ELLIPTIC.five_point(10), -20 * h2 * eye, zero, zero])
    top = sp.hstack([zero, zero, eye, zero])
    blocks = sp.vstack(
        [
            sp.hstack(row)
            for row in ([zero, zero, -eye, -eye], [zero, zero, -eye, eye], [zero, -2 * eye, zero, zero])
        ],
        format="csr",
    )[np.arange(3 * n).reshape(3, n).T.ravel()]
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-10
    cones = [clarabel.ZeroConeT(n), clarabel.NonnegativeConeT(n)] + [clarabel.SecondOrderConeT(3)] * n
    b = np.concatenate([np.zeros(n), np.ones(n), np.zeros(3 * n)])
    A = sp.vstack([state, top, blocks], format="csc")
    found = clarabel.DefaultSolver(sp.triu(P, format="csc"), c, A, b, cones, settings).solve()
    assert str(found.status) == "Solved"
    constant = 0.5 * problem.target @ problem.target
    primal, dual = (h2 * (v + constant) for v in (found.obj_val, found.obj_val_dual))
    assert abs(primal - dual) <= 1e-9 * primal
    plan = prepare(problem)
    tight = run_envelope_start(
        problem, plan.equation, Limits(), EnvelopeStart(gap=1e-12, path_steps=90), None
    )
    assert tight.lower_bound == pytest.approx(primal, rel=1e-8)
    assert ssn.solve(problem).lower_bound == pytest.approx(primal, rel=2e-8)


def test_a_given_start_is_the_only_one():
    problem = elliptic(ssn.CountCost(1e-2, -30, 30))
    local = ssn.solve(problem, np.zeros(problem.unknowns)).require()
    assert local.lower_bound is None and local.gap is None
    assert not any("envelope" in step.stage for step in local.steps)
    best = ssn.solve(problem).require()
    assert any("envelope" in step.stage for step in best.steps)
    assert local.objective > 1.2 * best.objective
    again = ssn.solve(problem, best.x).require()
    assert len(again.steps) <= 1 and again.objective == pytest.approx(best.objective, rel=1e-12)


def test_the_same_every_time():
    problem = elliptic(ssn.PowerCost(3e-3, 0.5, -30, 30), n=12)
    one, two = ssn.solve(problem), ssn.solve(problem)
    assert (
        one.x.tobytes() == two.x.tobytes() and one.lower_bound == two.lower_bound and one.steps == two.steps
    )


@pytest.mark.parametrize("most", [0, 3, 12])
def test_few_steps_allowed(most):
    """The bound holds however early the path is left, and the outcome is told."""
    problem = elliptic(ssn.CountCost(1e-2, -30, 30), n=12)
    full = ssn.solve(problem).require()
    short = ssn.solve(problem, max_steps=most)
    assert short.lower_bound <= full.objective
    assert len(short.steps) <= most + 1
    assert np.isfinite(short.objective) or not short.converged


def test_a_callback_may_stop_it():
    def stop(record):
        if record.index == 4:
            raise ssn.StopSolve("enough")

    solution = ssn.solve(elliptic(ssn.CountCost(1e-2, -30, 30), n=12), callback=stop)
    assert solution.outcome is ssn.Outcome.STOPPED and "enough" in solution.message
    assert len(solution.steps) == 4


def test_zero_target_and_zero_price():
    problem = elliptic(ssn.CountCost(1e-2), n=8)
    nothing = ssn.ControlProblem(
        state=problem.state, target=np.zeros(64), cost=problem.cost, control_weight=1e-3, state_mass=problem.weights,
        control_mass=problem.weights,
    )  # fmt: skip
    solution = ssn.solve(nothing).require()
    assert not solution.x.any() and solution.objective == 0.0
    free = elliptic(ssn.CountCost(0.0, -30, 30), n=8)
    plain = ssn.solve(elliptic(ssn.Bounds(-30, 30), n=8)).require()
    assert ssn.solve(free).require().objective == pytest.approx(plain.objective, rel=1e-9)


def test_without_control_weight():
    """alpha = 0 and bounds: the envelope is L1 with weight beta / bound."""
    problem = elliptic(ssn.CountCost(1e-1, -30, 30), n=8, alpha=1e-4)
    problem.alpha = 0.0
    solution = ssn.solve(problem)
    convex = ssn.solve(problem.with_cost(ssn.SparseCost(1e-1 / 30, -30, 30))).require()
    assert solution.lower_bound == pytest.approx(convex.objective, rel=1e-6)
    assert solution.lower_bound <= convex.objective * (1 + 1e-12)
    assert solution.objective >= solution.lower_bound


def test_a_bound_that_is_too_high_is_found():
    """Agreement fails where another method's objective lies below our bound."""
    problem = elliptic(ssn.CountCost(1e-2, -30, 30), n=10)
    solution = ssn.solve(problem).require()
    wrong = dataclasses.replace(solution, lower_bound=2.0 * solution.objective)
    ours = {"other": lambda p: solution.x * (1 + 1e-5)}
    assert assess(problem, solution=solution, budget=2.0).agreement == "holds"
    verdict = assess(problem, solution=wrong, methods=ours, budget=0.5)
    assert verdict.agreement == "fails" and "below our lower bound" in verdict.agreement_note


def test_the_gap_is_told_in_words_and_as_data():
    problem = elliptic(ssn.CountCost(1e-2, -30, 30), n=10)
    solution = ssn.solve(problem).require()
    told = {s.topic: s.text for s in assessment_sentences(assess(problem, solution=solution, budget=2.0))}
    assert "No other point can have an objective lower by more than" in told["Certainty"]
    assert solution_document({}, "name", {}, solution)["lower_bound"] == solution.lower_bound
    plain = ssn.solve(elliptic(ssn.SparseCost(1e-3), n=10))
    assert plain.gap is None and solution_document({}, "name", {}, plain)["lower_bound"] is None


def test_the_wrong_conjugate_is_no_bound(monkeypatch):
    """A bound that forgets the cost of the quadratic lies above what is attained: the checks above would see it."""
    problem = elliptic(ssn.CountCost(1e-2, -30, 30), n=10)
    right = Relaxation.bound
    best = ssn.solve(problem).require()

    def wrong(self, q):
        observations = self.tracking.observations
        return right(self, q) + 0.1 * observations.dot(q, q)

    monkeypatch.setattr(Relaxation, "bound", wrong)
    plan = prepare(problem)
    found = run_envelope_start(problem, plan.equation, Limits(), EnvelopeStart(), None)
    assert found.lower_bound > best.objective
