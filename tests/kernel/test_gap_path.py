"""Control problems without a quadratic cost: multi-bang, bang-bang, measures, by the path that the duality gap ends."""

from __future__ import annotations

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.equations import settled
from tests.problems.quadratic_program import interior_point

SETTINGS = np.array([-2.0, -1.0, 0.0, 1.0, 2.0])


class Hidden:
    """A state model that shows no matrix."""

    def __init__(self, matrix):
        self._inside = ssn.SteadyState(matrix)
        self.size = self._inside.size
        for name in ("attach", "solve", "adjoint_solve", "residual", "adjoint_residual"):
            setattr(self, name, getattr(self._inside, name))


def stiffness(n):
    second = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    return sp.csr_array(sp.kron(second, sp.eye_array(n)) + sp.kron(sp.eye_array(n), second))


def nodes(n):
    line = np.arange(1, n + 1) / (n + 1)
    return (x.ravel() for x in np.meshgrid(line, line, indexing="ij"))


def out_of_reach(n):
    x, y = nodes(n)
    return np.sin(2 * np.pi * x) * np.sin(2 * np.pi * y) * np.exp(2 * x) / 6


def control_of(n, kind):
    """Controls whose states are targets: one that takes settings, one that varies between them, some masses."""
    x, y = nodes(n)
    if kind == "settings":
        return np.where(x < 0.4, 1.0, np.where(y < 0.5, -2.0, 0.0))
    if kind == "between":
        return 1.7 * np.sin(2 * np.pi * x) * np.sin(np.pi * y)
    u = np.zeros(n * n)
    for a, b, mass in ((0.25, 0.25, 1.0), (0.7, 0.4, -0.5), (0.6, 0.75, 0.8)):
        u[np.argmin((x - a) ** 2 + (y - b) ** 2)] = mass
    return u


def problem_of(n, cost, kind="out", model=ssn.SteadyState, consistent=False):
    """A distributed control; for L1 without bounds the masses of point sources."""
    measure = type(cost) is ssn.SparseCost
    state, mass = model(stiffness(n)), np.full(n * n, 1.0 / (n + 1) ** 2)
    operator = sp.eye_array(n * n) if measure else sp.diags_array(mass)
    target = out_of_reach(n) if kind == "out" else state.solve(operator @ control_of(n, kind))
    observed = mass
    if consistent:
        observed = sp.csr_array((sp.diags_array(np.full(n * n, 12.0)) - stiffness(n)) / 12.0 / (n + 1) ** 2)
    return ssn.ControlProblem(
        state=state, target=target, cost=cost, control_weight=0.0, control_operator=operator,
        control_mass=None if measure else mass, observation_mass=observed,
    )  # fmt: skip


def conic_objective(problem, levels, slopes, constants):
    """The least objective by Clarabel, with the state and an epigraph variable a control as unknowns.

    g is the largest of slopes u + constants on [levels[0], levels[-1]].
    """
    size, n = problem.control_operator.shape
    mass = problem.observations.matrix
    mass = sp.diags_array(problem.observations.vector) if mass is None else mass
    scale = 1.0 / problem.weights.mean()
    p = sp.block_diag([scale * mass, sp.csr_array((2 * n, 2 * n))], format="csc")
    q = np.concatenate(
        [-scale * problem.observations.apply(problem.target), np.zeros(n), scale * problem.weights]
    )
    eye, no_state, no_control = sp.eye_array(n), sp.csr_array((n, size)), sp.csr_array((n, n))
    rows = [sp.hstack([problem.state.matrix, -problem.control_operator, sp.csr_array((size, n))])]
    right = [np.zeros(size)]
    for sign, end in ((-1.0, levels[0]), (1.0, levels[-1])):
        rows.append(sp.hstack([no_state, sign * eye, no_control]))
        right.append(np.full(n, sign * end))
    for slope, constant in zip(slopes, constants, strict=True):
        rows.append(sp.hstack([no_state, slope * eye, -eye]))
        right.append(np.full(n, -constant))
    a, b = sp.vstack(rows, format="csc"), np.concatenate(right)
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    cones = [clarabel.ZeroConeT(size), clarabel.NonnegativeConeT(b.size - size)]
    found = clarabel.DefaultSolver(sp.triu(p, format="csc"), q, a, b, cones, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved", "InsufficientProgress")
    constant = 0.5 * problem.observations.dot(problem.target, problem.target)
    return 0.5 * (found.obj_val + found.obj_val_dual) / scale + constant


# step counts, the largest measured on three meshes in brackets; the gap is at rounding level in all of them
MOST = {
    ("out", 1e-3): 12, ("out", 1e-4): 8, ("out", 1e-5): 8,
    ("between", 1e-3): 10, ("between", 1e-4): 20, ("between", 1e-5): 40,
    ("settings", 1e-3): 15, ("settings", 1e-4): 35, ("settings", 1e-5): 40,
}  # fmt: skip


@pytest.mark.parametrize(("kind", "alpha"), MOST)
def test_multibang_steps_and_gap(kind, alpha):
    problem = problem_of(31, ssn.MultiBangCost(SETTINGS, alpha), kind)
    solution = ssn.solve(problem).require()
    assert len(solution.steps) <= MOST[kind, alpha]
    assert solution.accuracy <= 1e-10
    assert solution.certificate.kind == "gap" and solution.certificate.relative <= 1e-10
    share = problem.cost.share_between(solution.x)
    assert share <= (0.0 if kind == "out" and alpha < 1e-3 else 0.07)
    # off the kinks of the conjugate the control is the setting that the adjoint state asks for
    p = problem.adjoint(problem.target - problem.forward(solution.x))
    off = (np.abs(p[:, None] - problem.cost.jumps) > 1e-9 * np.abs(p).max()).all(axis=1)
    assert off.mean() >= 0.9
    np.testing.assert_array_equal(solution.x[off], problem.cost.staircase(p)[off])


@pytest.mark.parametrize(("kind", "beta"), [("out", 1e-3), ("out", 1e-4), ("masses", 1e-3), ("masses", 1e-4)])
def test_measures_steps_and_gap(kind, beta):
    problem = problem_of(31, ssn.SparseCost(beta), kind)
    solution = ssn.solve(problem).require()
    assert len(solution.steps) <= 35
    assert solution.accuracy <= 1e-12
    p = problem.adjoint(problem.target - problem.forward(solution.x))
    assert np.abs(p).max() <= beta * (1 + 1e-9)
    on = solution.x != 0
    assert 0 < on.sum() < 400
    np.testing.assert_allclose(p[on], beta * np.sign(solution.x[on]), rtol=1e-8)


@pytest.mark.parametrize("consistent", [False, True])
@pytest.mark.parametrize("kind", ["out", "between", "settings"])
@pytest.mark.parametrize("alpha", [1e-3, 1e-5])
def test_multibang_objective_from_outside(kind, alpha, consistent):
    problem = problem_of(12, ssn.MultiBangCost(SETTINGS, alpha), kind, consistent=consistent)
    solution = ssn.solve(problem).require()
    levels, height = SETTINGS, 0.5 * alpha * SETTINGS**2
    slopes = np.diff(height) / np.diff(levels)
    expected = conic_objective(problem, levels, slopes, height[:-1] - slopes * levels[:-1])
    assert solution.objective == pytest.approx(expected, rel=1e-8)
    assert abs(solution.objective - problem.objective(solution.x)) <= 1e-13 * abs(expected)


@pytest.mark.parametrize(("kind", "beta"), [("out", 1e-3), ("out", 1e-5), ("masses", 1e-3), ("masses", 1e-5)])
def test_measure_objective_from_outside(kind, beta):
    problem = problem_of(12, ssn.SparseCost(beta), kind)
    solution = ssn.solve(problem).require()
    assert solution.objective == pytest.approx(interior_point(problem)[0], rel=1e-8)


def test_bang_bang_objective_from_outside():
    problem = problem_of(12, ssn.Bounds(-2.0, 2.0))
    solution = ssn.solve(problem).require()
    assert (np.abs(solution.x) == 2.0).mean() > 0.8
    expected = conic_objective(problem, SETTINGS, [0.0], [0.0])
    assert solution.objective == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("kind", ["between", "masses"])
def test_columns_and_sparse_systems_agree(kind, monkeypatch):
    """The same steps whether coefficients are solved for by columns of S or with state and adjoint."""
    cost = ssn.SparseCost(1e-4) if kind == "masses" else ssn.MultiBangCost(SETTINGS, 1e-4)
    solutions = []
    for few in (0, 10_000):
        monkeypatch.setattr(settled, "FEW", few)
        solutions.append(ssn.solve(problem_of(15, cost, kind)).require())
    monkeypatch.undo()
    solutions.append(ssn.solve(problem_of(15, cost, kind, model=Hidden)).require())
    first = solutions[0]
    for other in solutions[1:]:
        assert len(other.steps) == len(first.steps)
        np.testing.assert_allclose(other.x, first.x, atol=1e-7 * np.abs(first.x).max())


@pytest.mark.parametrize("cost", [ssn.SparseCost(1e-3), ssn.MultiBangCost(SETTINGS, 1e-4)])
def test_the_solution_as_start_takes_no_step(cost):
    problem = problem_of(15, cost, "between")
    solution = ssn.solve(problem).require()
    assert len(solution.steps) > 0
    again = ssn.solve(problem, solution.x).require()
    assert len(again.steps) == 0
    np.testing.assert_allclose(again.x, solution.x, rtol=1e-12)


def test_largest_weight_with_a_control():
    """Zero exactly from max |S* z| on; just below it the control is there, and as small."""
    problem = problem_of(15, ssn.SparseCost(1.0))
    largest = np.abs(problem.adjoint(problem.target)).max()
    above = ssn.solve(problem.with_cost(ssn.SparseCost(largest * (1 + 1e-9)))).require()
    assert not above.x.any() and len(above.steps) == 0 and above.accuracy == 0.0
    assert above.objective == pytest.approx(0.5 * problem.observations.dot(problem.target, problem.target))
    below = ssn.solve(problem.with_cost(ssn.SparseCost(largest * 0.999))).require()
    on = np.flatnonzero(below.x)
    assert 0 < on.size <= 2
    images = np.stack([problem.forward(unit) for unit in np.eye(problem.unknowns)[on]])
    gram = np.array([[problem.observations.dot(a, b) for a in images] for b in images])
    excess = 0.001 * largest * np.sign(below.x[on])  # S* z there is +-largest
    np.testing.assert_allclose(below.x[on], np.linalg.solve(gram, excess), rtol=1e-6)


@pytest.mark.parametrize("cost", [ssn.SparseCost(1e-3), ssn.MultiBangCost(SETTINGS, 1e-3), ssn.Bounds(-1, 1)])
def test_zero_target(cost):
    problem = problem_of(10, cost)
    zero = ssn.ControlProblem(
        state=ssn.SteadyState(stiffness(10)), target=np.zeros(100), cost=cost, control_weight=0.0,
        control_operator=problem.control_operator,
    )  # fmt: skip
    solution = ssn.solve(zero).require()
    assert not solution.x.any() and solution.accuracy == 0.0 and len(solution.steps) == 0


@pytest.mark.parametrize("kind", ["settings", "between"])
def test_a_target_within_reach_and_no_cost(kind):
    """Bounds alone: the least objective is zero, and a ten-thousandth of 1/2 ||z||^2 is the scale of its gap."""
    problem = problem_of(15, ssn.Bounds(-2.0, 2.0), kind)
    solution = ssn.solve(problem).require()
    assert solution.objective <= 1e-13 * 0.5 * problem.observations.dot(problem.target, problem.target)
    np.testing.assert_allclose(solution.x, control_of(15, kind), atol=1e-6)


@pytest.mark.parametrize("shape", [(15, 15), (225, 1), (1, 225)])
def test_costs_that_couple_components_end_on_their_active_sets(shape):
    """Norms of rows: curved off zero, so that the last steps converge quadratically."""
    problem = problem_of(15, ssn.GroupSparseCost(1e-3, shape=shape, axis=1))
    solution = ssn.solve(problem).require()
    assert solution.accuracy <= 1e-12 and len(solution.steps) <= 20
    assert "active sets" in solution.steps[-1].stage
    reference = ssn.proximal_gradient(problem, tolerance=1e-6)
    assert solution.objective <= reference.objective * (1 + 1e-13)
    assert reference.objective == pytest.approx(solution.objective, rel=1e-6)


@pytest.mark.parametrize(
    ("cost", "kind"),
    [(ssn.GroupSparseCost(1e-3, shape=(15, 15), axis=0), "out"), (ssn.SparseCost(1e-3), "out"),
     (ssn.MultiBangCost(SETTINGS, 1e-4), "settings")],
)  # fmt: skip
def test_the_path_alone_reaches_the_tolerance(cost, kind, monkeypatch):
    """Where no active sets are tried, by proximal points whose weight falls only while they can be solved."""
    monkeypatch.setattr(settled, "modes", lambda derivative, weights: None)
    solution = ssn.solve(problem_of(15, cost, kind)).require()
    assert 1e-16 < solution.accuracy <= 1e-9
    assert not any("active sets" in step.stage for step in solution.steps)


def test_what_the_tolerance_asks_and_rounding_does_not_give(monkeypatch):
    monkeypatch.setattr(settled, "modes", lambda derivative, weights: None)
    problem = problem_of(10, ssn.SparseCost(1e-3))
    solution = ssn.solve(problem, tolerance=1e-30, max_steps=1000)
    assert solution.outcome is ssn.Outcome.INACCURATE
    assert f"the duality gap is {solution.accuracy:.1e}" in solution.message
    assert 1e-30 < solution.accuracy < 1e-8
    few = ssn.solve(problem, max_steps=3)
    assert few.outcome is ssn.Outcome.STEP_LIMIT and "the duality gap is" in few.message
    assert few.accuracy == pytest.approx(problem.accuracy(few.x), rel=1e-6)


def test_callbacks_stop_the_path():
    def stop(record):
        if "active sets" in record.stage:
            raise ssn.StopSolve("seen enough")

    solution = ssn.solve(problem_of(15, ssn.SparseCost(1e-4)), callback=stop)
    assert solution.outcome is ssn.Outcome.STOPPED and solution.message == "seen enough"
    assert "active sets" in solution.steps[-1].stage


def test_an_unbounded_linear_cost_keeps_the_proximal_point_path():
    """g(u) = u/2 has no lower bound, so that zero is no dual point: no gap is claimed."""
    cost = ssn.PiecewiseQuadraticCost([], [1e-3])
    problem = problem_of(8, cost)
    assert not problem.has_gap
    solution = ssn.solve(problem)
    assert "proximal point" in solution.choices["path"] and solution.certificate is None


def test_the_gap_is_the_difference_of_primal_and_dual_value():
    """Against the dual objective written out, at a control and a dual point with no relation but t (S u - z)."""
    problem = problem_of(8, ssn.MultiBangCost(SETTINGS, 1e-3))
    u = np.clip(np.random.default_rng(0).standard_normal(64), -2, 2)
    q = problem.forward(u) - problem.target
    p = -problem.adjoint(q)
    products = problem.observations
    conjugate = problem.weights @ (np.max(SETTINGS * p[:, None] - 5e-4 * SETTINGS**2, axis=1))
    dual = -0.5 * products.dot(q, q) - products.dot(q, problem.target) - conjugate
    gap = problem.duality_gap(u, -q, p)
    assert gap.value == pytest.approx(problem.objective(u) - dual, rel=1e-12)
    measure = problem_of(8, ssn.SparseCost(1e-3))
    q = measure.forward(u) - measure.target
    p = -measure.adjoint(q)
    t = 1e-3 / np.abs(p).max()
    assert t < 1
    dual = -0.5 * t * t * products.dot(q, q) - t * products.dot(q, measure.target)
    gap = measure.duality_gap(u, -q, p)
    assert gap.value == pytest.approx(measure.objective(u) - dual, rel=1e-10)


@pytest.mark.parametrize("kind", ["out", "between"])
@pytest.mark.parametrize("alpha", [1e-3, 1e-4])
def test_pairs_of_controls_take_listed_pairs(kind, alpha):
    """Two heated fields with settings in the plane; by Clarabel as mixtures of settings, with the state an unknown."""
    n = 9
    turns = 2 * np.pi * np.arange(6) / 6
    settings = np.vstack([[0.0, 0.0], np.stack([np.cos(turns), np.sin(turns)], axis=1)])
    size, mass = n * n, np.full(2 * n * n, 1.0 / (n + 1) ** 2)
    matrix, operator = sp.block_diag([stiffness(n)] * 2, format="csr"), sp.diags_array(mass)
    x, y = nodes(n)
    fields = [np.sin(2 * np.pi * x) * np.sin(np.pi * y), x * np.cos(2 * np.pi * y)]
    state = ssn.SteadyState(matrix)
    target = np.concatenate([out_of_reach(n), out_of_reach(n)[::-1] / 2])
    if kind == "between":
        target = state.solve(mass * 0.8 * np.concatenate(fields))
    problem = ssn.ControlProblem(
        state=state, target=target, cost=ssn.PlanarMultiBangCost(settings, alpha), control_weight=0.0,
        control_operator=operator, control_mass=mass, observation_mass=mass,
    )  # fmt: skip
    solution = ssn.solve(problem).require()
    assert solution.accuracy <= 1e-10 and len(solution.steps) <= 25
    assert problem.cost.share_between(solution.x, tolerance=1e-9) <= (0.1 if kind == "out" else 0.35)
    d = len(settings)
    mixed = sp.vstack([sp.kron(settings[:, k][None], sp.eye_array(size)) for k in range(2)])
    whole = sp.kron(np.ones((1, d)), sp.eye_array(size))
    p = sp.block_diag([sp.eye_array(2 * size), sp.csr_array((d * size, d * size))], format="csc")
    q = np.concatenate([-target, np.repeat(0.5 * alpha * (settings**2).sum(axis=1), size)])
    a = sp.vstack([
        sp.hstack([matrix, -operator @ mixed]),
        sp.hstack([sp.csr_array((size, 2 * size)), whole]),
        sp.hstack([sp.csr_array((d * size, 2 * size)), -sp.eye_array(d * size)]),
    ], format="csc")  # fmt: skip
    b = np.concatenate([np.zeros(2 * size), np.ones(size), np.zeros(d * size)])
    options = clarabel.DefaultSettings()
    options.verbose = False
    options.tol_gap_abs = options.tol_gap_rel = options.tol_feas = 1e-12
    cones = [clarabel.ZeroConeT(3 * size), clarabel.NonnegativeConeT(d * size)]
    found = clarabel.DefaultSolver(sp.triu(p, format="csc"), q, a, b, cones, options).solve()
    expected = mass[0] * (0.5 * (found.obj_val + found.obj_val_dual) + 0.5 * target @ target)
    assert solution.objective == pytest.approx(expected, rel=1e-8)


class Untransposed(ssn.SteadyState):
    def adjoint_solve(self, rhs):
        return self.solve(rhs)


class Early(ssn.SteadyState):
    """Stops its solves with an error of 1e-5, alike in both directions."""

    def solve(self, rhs):
        return (1 + 1e-5) * super().solve(rhs)

    def adjoint_solve(self, rhs):
        return (1 + 1e-5) * super().adjoint_solve(rhs)


@pytest.mark.parametrize(
    ("model", "message"), [(Untransposed, "is not the adjoint of S"), (Early, "leave an error of")]
)
def test_a_gap_of_wrong_solves_is_not_believed(model, message):
    n = 10
    drift = sp.kron(sp.diags_array([-np.ones(n - 1), np.ones(n - 1)], offsets=[-1, 1]), sp.eye_array(n))
    problem = ssn.ControlProblem(
        state=model(stiffness(n) + 0.5 * drift), target=out_of_reach(n) + 0.1, cost=ssn.MultiBangCost(SETTINGS, 1e-3),
        control_weight=0.0, state_mass=np.full(n * n, 1.0 / (n + 1) ** 2),
        control_mass=np.full(n * n, 1.0 / (n + 1) ** 2),
    )  # fmt: skip
    solution = ssn.solve(problem)
    assert not solution.converged and solution.outcome is ssn.Outcome.INACCURATE
    assert message in solution.message


@pytest.mark.parametrize(
    ("dimension", "n", "light"), [(2, 80, True), (3, 12, True), (3, 17, False), (2, 500, False)]
)
def test_which_state_equations_are_factorised_with_their_adjoint(dimension, n, light):
    """Meshes of a square, and small ones of a cube; not what fills up."""
    matrix = stiffness(n)
    if dimension == 3:
        matrix = sp.kron(matrix, sp.eye_array(n)) + sp.kron(sp.eye_array(n * n), stiffness(n)[:n, :n])
    assert settled._light(sp.csr_array(matrix)) is light
