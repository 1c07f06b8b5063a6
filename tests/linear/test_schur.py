"""Schur-complement preconditioning of state and adjoint: its inverse, published bounds, systems, whole solves."""

from types import SimpleNamespace

import numpy as np
import pytest
import scipy.linalg as sla
import scipy.sparse as sp

import ssn
from ssn.equations.factorised_pair import FactorisedPairEquation
from ssn.linear import schur as module
from ssn.linear.schur import SchurOperators, SchurSolver, refusal

BETA, BOUND = 1e-4, 100.0


def operator(n, wind):
    """-Lap with a recirculating wind, five-point and upwind; symmetric for wind 0."""
    h = 1.0 / (n + 1)
    line = np.arange(1, n + 1) * h
    x1, x2 = (x.ravel() for x in np.meshgrid(line, line, indexing="ij"))
    ones, one = np.ones(n - 1), sp.eye_array(n)
    second = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
    back = sp.diags_array([-ones, np.ones(n)], offsets=[-1, 0])
    matrix = sp.kron(second, one) + sp.kron(one, second)
    for speed, down in (
        ((2 * x2 - 1) * (1 - (2 * x1 - 1) ** 2), sp.kron(back, one)),
        (-(2 * x1 - 1) * (1 - (2 * x2 - 1) ** 2), sp.kron(one, back)),
    ):
        forward, backward = np.maximum(speed, 0.0), np.minimum(speed, 0.0)
        matrix = matrix + wind * h * (sp.diags_array(forward) @ down - sp.diags_array(backward) @ down.T)
    return sp.csr_array(matrix), x1, x2


def control_problem(n, alpha, *, wind=0.0, mass="lumped", observed="all", solver="direct", **options):
    matrix, x1, x2 = operator(n, wind)
    lumped = np.full(n * n, 1.0 / (n + 1) ** 2)
    weight = lumped
    if mass == "consistent":  # that of bilinear elements, boundary rows lumped by what they have
        ones = np.ones(n - 1)
        line = sp.diags_array([ones, 4.0 * np.ones(n), ones], offsets=[-1, 0, 1]) / (6.0 * (n + 1))
        weight = sp.csr_array(sp.kron(line, line))
        lumped = np.asarray(weight.sum(axis=1)).ravel()
    target = np.sin(2 * np.pi * x1) * np.sin(2 * np.pi * x2) * np.exp(2 * x1) / 6
    given = {"state_mass": weight, "control_mass": lumped}
    if observed == "half":
        seen = np.flatnonzero(x1 < 0.5)
        given["observation"] = sp.eye_array(n * n, format="csr")[seen]
        given["observation_mass"], target = lumped[seen], target[seen]
    return ssn.ControlProblem(
        state=ssn.SteadyState(matrix, solver=solver), target=target, cost=ssn.SparseCost(BETA, -BOUND, BOUND),
        control_weight=alpha, **(given | options),
    )  # fmt: skip


def patches(n):
    """The diagonal of D: active sets that look like those of a solution, the same regions on every mesh."""
    _, x1, x2 = operator(n, 0.0)
    return (np.sin(2 * np.pi * x1) * np.sin(3 * np.pi * x2) * np.exp(x1) > 0.3).astype(float)


def point(problem, diagonal, seed=1):
    residual = np.random.default_rng(seed).standard_normal(2 * problem.state.size)
    derivative = SimpleNamespace(diagonal=diagonal)
    return SimpleNamespace(residual=residual, data=SimpleNamespace(derivative=derivative))


def blocks(problem, diagonal):
    """M, E and T as dense arrays, written down from their definitions."""
    size = problem.state.size
    seen = np.eye(size) if problem.observation is None else problem.observation.toarray()
    weight = problem.observations
    inner = np.diag(weight.vector) if weight.vector is not None else weight.matrix.toarray()
    control = problem.control_operator.toarray()
    active = control @ np.diag(diagonal / problem.weights) @ control.T / problem.alpha
    return seen.T @ inner @ seen, problem.state.matrix.toarray(), active


@pytest.mark.parametrize("wind", [0.0, 50.0])
def test_the_preconditioner_inverts_the_matrix_it_stands_for(wind):
    problem, rng = control_problem(5, 1e-4, wind=wind), np.random.default_rng(0)
    operators = SchurOperators(problem)
    diagonal = patches(5)
    operators.activate(diagonal)
    mass, state, active = blocks(problem, diagonal)
    match = np.diag(np.sqrt(diagonal / problem.alpha))  # K with K M K = T for a lumped mass
    np.testing.assert_allclose(match @ mass @ match, active, atol=1e-12 * active.max())
    whole = np.block([[mass, state.T], [state, -active - state @ match - match @ state.T]])
    f, g = rng.standard_normal((2, 25))
    found = np.concatenate(operators.correct(f, g))
    np.testing.assert_allclose(
        found, np.linalg.solve(whole, np.concatenate([f, g])), rtol=1e-9, atol=1e-9 * abs(found).max()
    )


@pytest.mark.parametrize("alpha", [1e-3, 1e-5, 1e-8])
@pytest.mark.parametrize("n", [7, 14])
def test_matched_eigenvalues_lie_where_the_literature_says(n, alpha):
    """Without active sets those of the Schur complement against its match lie in [1/2, 1].

    J. W. Pearson and A. J. Wathen, Numer. Linear Algebra Appl. 19 (2012) 816-829, Theorem 4 (from memory).
    """
    problem, size = control_problem(n, alpha), n * n
    operators = SchurOperators(problem)
    operators.activate(np.ones(size))
    mass, state, active = blocks(problem, np.ones(size))
    inverse = np.stack([np.concatenate(operators.correct(e[:size], e[size:])) for e in np.eye(2 * size)]).T
    values = np.linalg.eigvals(inverse @ np.block([[mass, state.T], [state, -active]]))
    assert abs(values.imag).max() < 1e-5
    assert values.real.min() > 0.5 - 1e-6
    assert values.real.max() < 1.0 + 1e-6
    factor = state + mass / np.sqrt(alpha)
    exact = sla.eigh(
        active + state @ np.linalg.solve(mass, state.T),
        factor @ np.linalg.solve(mass, factor.T),
        eigvals_only=True,
    )
    np.testing.assert_allclose(values.real.min(), exact.min(), rtol=1e-4)


@pytest.mark.parametrize("observed", ["all", "half"])
@pytest.mark.parametrize("mass", ["lumped", "consistent"])
@pytest.mark.parametrize("wind", [0.0, 50.0])
def test_directions_solve_the_newton_system(wind, mass, observed):
    n, alpha = 9, 1e-4
    problem = control_problem(n, alpha, wind=wind, mass=mass, observed=observed)
    at = point(problem, patches(n))
    observation, state, active = blocks(problem, patches(n))
    whole = np.block([[observation, state.T], [state, -active]])
    expected = np.linalg.solve(whole, -at.residual)
    for forcing in (1e-2, 1e-10):
        found = SchurSolver(FactorisedPairEquation(problem)).solve(at, forcing)
        assert found.status == "solved"
        left = whole @ found.vector + at.residual
        left[: n * n] /= np.sqrt(alpha)
        start = at.residual.copy()
        start[: n * n] /= np.sqrt(alpha)
        share = np.linalg.norm(left) / np.linalg.norm(start)
        assert share <= forcing * (1 + 1e-3) + 1e-12
        assert found.relative_residual == pytest.approx(share, rel=1e-3, abs=1e-12)
    for part in (slice(0, n * n), slice(n * n, None)):
        error = found.vector[part] - expected[part]
        assert np.linalg.norm(error) <= 1e-6 * np.linalg.norm(expected[part])


def test_few_control_columns():
    """B with a handful of columns, dense among the nodes: T has low rank, its match is rough, the answer is not."""
    patch = sp.csr_array(np.repeat(np.eye(4), (20, 30, 40, 54), axis=0) / 169.0)
    problem = control_problem(12, 1e-4, control_operator=patch, control_mass=np.full(4, 0.2))
    direct, krylov = (ssn.solve(problem, linear=name) for name in ("subspace", "schur"))
    assert krylov.converged
    assert abs(direct.x).min() > 1e-3
    np.testing.assert_allclose(krylov.x, direct.x, rtol=1e-8)


ALPHAS = (1e-3, 1e-5, 1e-7)


@pytest.mark.parametrize(
    ("options", "most"),
    [
        ({}, (14, 18, 27)),
        ({"mass": "consistent"}, (14, 18, 27)),
        ({"solver": "multigrid"}, (15, 19, 28)),
        ({"wind": 100.0}, (28, 35, 42)),
    ],
)
def test_iterations_are_bounded_in_mesh_and_weight(options, most):
    """To a relative residual of 1e-8, for a residual without structure."""
    counts = np.zeros((2, 3), dtype=int)
    for row, n in enumerate((20, 60)):
        for column, alpha in enumerate(ALPHAS):
            problem = control_problem(n, alpha, **options)
            found = SchurSolver(FactorisedPairEquation(problem)).solve(point(problem, patches(n)), 1e-8)
            assert found.status == "solved"
            counts[row, column] = found.inner_iterations
    assert (counts <= np.array(most)).all(), counts
    assert (counts[1] <= counts[0] + 6).all(), counts
    assert counts.min() >= 3


def test_the_factor_is_kept_while_few_components_change():
    problem = control_problem(20, 1e-4)
    operators = SchurOperators(problem)
    first, before = patches(20), problem.work.factorizations
    operators.activate(first)
    operators.activate(first.copy())
    few = first.copy()
    few[:3] = 1.0 - few[:3]
    operators.activate(few)
    assert problem.work.factorizations == before + 1
    assert operators.stale
    _, _, active = blocks(problem, few)
    y, p = np.random.default_rng(2).standard_normal((2, 400))
    np.testing.assert_allclose(operators.apply(y, p)[1], problem.state.matrix @ y - active @ p, atol=1e-10)
    operators.activate(1.0 - first)
    assert problem.work.factorizations == before + 2
    assert not operators.stale


def test_an_old_factor_is_replaced_when_it_serves_badly(monkeypatch):
    monkeypatch.setattr(module, "FEW", 1.0)
    problem = control_problem(30, 1e-7)
    equation = FactorisedPairEquation(problem)
    solver = SchurSolver(equation)
    solver.solve(point(problem, np.zeros(900)), 1e-8)
    before = problem.work.factorizations
    found = solver.solve(point(problem, patches(30)), 1e-8)
    assert found.status == "solved"
    assert problem.work.factorizations == before + 1


@pytest.mark.parametrize(
    ("options", "alpha"),
    [
        ({}, 1e-5),
        ({"mass": "consistent"}, 1e-6),
        ({"observed": "half"}, 1e-4),
        ({"wind": 50.0}, 1e-4),
        ({"wind": 50.0, "mass": "consistent", "source": np.linspace(-0.01, 0.01, 441)}, 1e-3),
        ({"solver": "multigrid"}, 1e-5),
    ],
)
def test_solves_agree_with_the_dual_equation(options, alpha):
    problem = control_problem(21, alpha, **options)
    reference = ssn.solve(problem, linear="subspace", tolerance=1e-11)
    found = ssn.solve(problem, linear="schur")
    assert found.converged
    assert "schur" in found.choices["linear"]
    error = problem.controls.norm(found.x - reference.x)
    assert error <= found.certificate.bound + reference.certificate.bound
    assert error <= 1e-8 * problem.controls.norm(reference.x)
    assert found.certificate.relative < 1e-8
    np.testing.assert_allclose(found.adjoint, reference.adjoint, atol=1e-7 * abs(reference.adjoint).max())
    assert found.objective == pytest.approx(reference.objective, rel=1e-9)


def test_the_certificate_bounds_the_distance_of_rough_solutions():
    problem = control_problem(21, 1e-5, wind=50.0)
    reference = ssn.solve(problem, linear="subspace", tolerance=1e-11)
    for tolerance in (1e-1, 1e-3, 1e-5):
        found = ssn.solve(problem, linear="schur", tolerance=tolerance)
        assert problem.controls.norm(found.x - reference.x) <= found.certificate.bound * (1 + 1e-6)


def test_a_pair_or_the_solution_as_start_takes_no_step():
    problem = control_problem(15, 1e-4, wind=50.0)
    first = ssn.solve(problem, linear="schur")
    for start in (first.x, (first.state, first.adjoint)):
        again = ssn.solve(problem, start, linear="schur")
        assert again.converged
        assert len(again.steps) <= 1


def test_what_does_not_fit_is_refused():
    class Hidden:
        size = 25

        def __init__(self, state):
            self.state = state

        def __getattr__(self, name):
            if name == "matrix":
                raise AttributeError(name)
            return getattr(self.state, name)

    problem = control_problem(5, 1e-4)
    assert refusal(problem) is None
    cases = {
        "explicit sparse": control_problem(5, 1e-4),
        "not separable": problem.with_cost(ssn.GroupSparseCost(1e-3, np.arange(25) // 5)),
        "weight is zero": control_problem(5, 0.0),
        "not sparse": control_problem(5, 1e-4, control_operator=np.ones((25, 1)), control_mass=np.ones(1)),
    }
    cases["explicit sparse"].state = Hidden(problem.state)
    for words, case in cases.items():
        assert words in refusal(case)
        with pytest.raises(ssn.InputError, match=words):
            ssn.solve(case, linear="schur")
