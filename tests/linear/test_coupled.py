"""Multigrid on the pair of state and adjoint: stencils, cycles, Newton systems, solves against the dual equation."""

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st

import ssn
from ssn.equations.coupled import CoupledEquation
from ssn.linear import coupled as module
from ssn.linear.algebraic_multigrid import AlgebraicHierarchy
from ssn.linear.coupled import CoupledOperators, CoupledSolver, refusal
from ssn.linear.grid_multigrid import GridHierarchy
from ssn.linear.stencil import coarsen, dense, interpolation_weights, recognise
from ssn.plans.control import COUPLED_FROM
from ssn.prepare import prepare


def laplacian(*shape):
    """Stiffness matrix of -Lap, scaled like linear elements on a mesh of width 1 / (n + 1)."""
    total = 0.0
    for axis, n in enumerate(shape):
        factors = [sp.eye_array(m) for m in shape]
        ones = np.ones(n - 1)
        factors[axis] = sp.diags_array([-ones, 2.0 * np.ones(n), -ones], offsets=[-1, 0, 1])
        product = factors[0]
        for factor in factors[1:]:
            product = sp.kron(product, factor)
        total = total + product
    return sp.csr_array(total) / (shape[0] + 1.0) ** (len(shape) - 2)


def nodes(*shape):
    return [x.ravel() for x in np.meshgrid(*(np.arange(1, n + 1) / (n + 1) for n in shape), indexing="ij")]


def perturbed(n, amplitude=0.2):
    """Stiffness and consistent mass of linear elements on a triangular mesh with moved nodes."""
    skfem = pytest.importorskip("skfem")
    from skfem.helpers import dot, grad

    rng = np.random.default_rng(3)
    mesh = skfem.MeshTri.init_tensor(*(np.linspace(0, 1, n + 2),) * 2)
    p = mesh.p.copy()
    inner = np.ones(p.shape[1], dtype=bool)
    inner[mesh.boundary_nodes()] = False
    p[:, inner] += rng.uniform(-amplitude, amplitude, (2, inner.sum())) / (n + 1)
    basis = skfem.Basis(skfem.MeshTri(p, mesh.t), skfem.ElementTriP1())
    stiffness = skfem.BilinearForm(lambda u, v, w: dot(grad(u), grad(v))).assemble(basis).tocsr()
    mass = skfem.BilinearForm(lambda u, v, w: u * v).assemble(basis).tocsr()
    kept = basis.complement_dofs(basis.get_dofs())
    return stiffness[kept][:, kept], mass[kept][:, kept], p[:, kept]


def control_problem(matrix, x, mass, alpha, beta=1e-3, bound=30.0, **options):
    target = np.sin(2 * np.pi * x[0]) * np.sin(2 * np.pi * x[1]) * np.exp(2 * x[0]) / 6
    lumped = mass if isinstance(mass, np.ndarray) else np.asarray(mass.sum(axis=1)).ravel()
    return ssn.ControlProblem(
        state=ssn.SteadyState(matrix), target=target, cost=ssn.SparseCost(beta, -bound, bound),
        control_weight=alpha, state_mass=mass, control_mass=lumped, **options,
    )  # fmt: skip


def grid_problem(*shape, alpha=1e-5, **options):
    mass = np.full(int(np.prod(shape)), 1.0 / np.prod(np.array(shape) + 1.0))
    return control_problem(laplacian(*shape), nodes(*shape), mass, alpha, **options)


# stencils


@pytest.mark.parametrize("shape", [(4, 4), (5, 7), (12, 3), (3, 4, 5), (6, 3, 8)])
def test_a_constant_stencil_is_recognised(shape):
    found = recognise(laplacian(*shape))
    assert found is not None
    assert found[0] == shape
    assert np.allclose(dense(found[1], shape), laplacian(*shape).toarray(), atol=1e-14)


def test_other_matrices_are_not_taken_for_a_stencil():
    matrix = laplacian(8, 9).tolil()
    matrix[8, 9] = matrix[9, 8] = -1.0 / 9.0  # couples the end of a line with the start of the next
    assert recognise(sp.csr_array(matrix)) is None
    matrix = laplacian(8, 9).tolil()
    matrix[20, 20] *= 1.0 + 1e-6
    assert recognise(sp.csr_array(matrix)) is None
    assert recognise(laplacian(40)) is None
    assert recognise(sp.csr_array(sp.random(60, 60, density=0.1, random_state=1))) is None


def interpolation(shape, weights):
    """The interpolation as a matrix, written down from its meaning."""
    factors = []
    for n, (to_left, to_right) in zip(shape, weights, strict=True):
        factor = np.zeros((n, n // 2))
        for i in range(n):
            k = i // 2
            if i % 2:
                factor[i, k] = 1.0
                continue
            if k > 0:
                factor[i, k - 1] = to_left[k]
            if k < n // 2:
                factor[i, k] = to_right[k]
        factors.append(factor)
    total = factors[0]
    for factor in factors[1:]:
        total = np.kron(total, factor)
    return total


@given(st.integers(3, 9), st.integers(3, 9), st.integers(0, 1000))
def test_coarse_stencils_are_galerkin_products(n, m, seed):
    rng = np.random.default_rng(seed)
    shape = (n, m)
    positions = [np.sort(rng.uniform(0.05, 0.95, k)) for k in shape]
    weights = [interpolation_weights(p, (0.0, 1.0)) for p in positions]
    stencil = {(i, j): rng.standard_normal(shape) for i in (-1, 0, 1) for j in (-1, 0, 1)}
    stencil[0, 1] = 0.7
    p = interpolation(shape, weights)
    expected = p.T @ dense(stencil, shape) @ p
    assert np.allclose(dense(coarsen(stencil, shape, weights), (n // 2, m // 2)), expected, atol=1e-12)


def test_interpolation_is_exact_for_functions_that_are_linear_between_coarse_nodes():
    for n in (7, 8):
        x = np.arange(1, n + 1) / (n + 1)
        p = interpolation((n,), [interpolation_weights(x, (0.0, 1.0))])
        coarse = np.concatenate([[0.0], x[1::2], [1.0]])
        bump = np.concatenate([[0.0], np.sin(5 * x[1::2]), [0.0]])
        assert np.allclose(p @ bump[1:-1], np.interp(x, coarse, bump), atol=1e-14)


# cycles


def contraction(hierarchy, matrix, mass, active, cycles=5):
    """The mean factor by which cycles reduce the residual of the coupled system, and of K alone."""
    n = matrix.shape[0]
    hierarchy.refresh(active)
    rng = np.random.default_rng(5)
    coupling = sp.diags_array(active) if isinstance(active, np.ndarray) else active
    system = sp.csr_array(sp.block_array([[matrix, -coupling], [mass, matrix]]))
    load = rng.standard_normal(2 * n)
    x, left = np.zeros(2 * n), load
    for _ in range(cycles):
        x += np.concatenate(hierarchy.correct(left[:n], left[n:]))
        left = load - system @ x
    together = (np.linalg.norm(left) / np.linalg.norm(load)) ** (1.0 / cycles)
    y, q = hierarchy.solve_each(load[:n], load[n:])
    alone = max(
        np.linalg.norm(load[:n] - matrix @ y) / np.linalg.norm(load[:n]),
        np.linalg.norm(load[n:] - matrix @ q) / np.linalg.norm(load[n:]),
    )
    return together, alone


@pytest.mark.parametrize("shape", [(31, 31), (40, 57), (64, 64), (20, 21, 14)])
@pytest.mark.parametrize("alpha", [1e-3, 1e-5])
def test_a_geometric_cycle_reduces_the_residual_by_a_factor_of_five(shape, alpha):
    matrix = laplacian(*shape)
    mass = np.full(matrix.shape[0], 1.0 / np.prod(np.array(shape) + 1.0)) / np.sqrt(alpha)
    found = recognise(matrix)
    hierarchy = GridHierarchy(shape, found[1], {(0,) * len(shape): float(mass[0])})
    active = mass * (np.random.default_rng(2).random(mass.size) < 0.5)
    together, alone = contraction(hierarchy, matrix, sp.diags_array(mass), active)
    assert together < 0.2
    assert alone < 0.1


@pytest.mark.parametrize("alpha", [1e-3, 1e-5])
@pytest.mark.parametrize("lumped", [True, False])
def test_an_algebraic_cycle_reduces_the_residual_by_a_factor_of_three(alpha, lumped):
    matrix, mass, x = perturbed(40)
    if lumped:
        mass = sp.diags_array(np.asarray(mass.sum(axis=1)).ravel())
    scaled = mass / np.sqrt(alpha)
    on = (np.sin(9 * x[0]) * np.sin(7 * x[1]) > 0).astype(float)
    active = scaled @ sp.diags_array(on / np.asarray(mass.sum(axis=1)).ravel()) @ mass
    hierarchy = AlgebraicHierarchy(matrix, scaled, abs(mass) @ abs(mass))
    together, alone = contraction(hierarchy, matrix, scaled, sp.csr_array(active))
    assert together < 0.34
    assert alone < 0.3
    assert hierarchy.complexity < 4.0


def test_single_precision_inside_a_cycle_bears_loads_of_any_size():
    shape = (20, 20)
    hierarchy = GridHierarchy(shape, recognise(laplacian(*shape))[1], {(0, 0): 1.0})
    hierarchy.refresh(np.ones(400))
    load = np.random.default_rng(0).standard_normal(400)
    y, q = hierarchy.correct(load, 2 * load)
    for size in (1e-60, 1e60):
        small = hierarchy.correct(size * load, size * 2 * load)
        assert np.allclose(small[0] / size, y, rtol=1e-4, atol=1e-5 * abs(y).max())
        assert np.allclose(small[1] / size, q, rtol=1e-4, atol=1e-5 * abs(q).max())
    assert not np.any(hierarchy.correct(0 * load, 0 * load))


# Newton systems


@pytest.mark.parametrize("kind", ["grid", "mesh"])
def test_the_direction_solves_the_newton_system(kind):
    if kind == "grid":
        problem = grid_problem(12, 15)
    else:
        matrix, mass, x = perturbed(12)
        problem = control_problem(matrix, x, mass, 1e-5)
    equation = CoupledEquation(problem)
    n = equation.size
    rng = np.random.default_rng(4)
    at = equation.evaluate(np.concatenate([rng.standard_normal(n), 1e-3 * rng.standard_normal(n)]))
    direction = CoupledSolver(equation).solve(at, 1e-11)
    matrix, b = problem.state.matrix, problem.control_operator
    slope = sp.diags_array(at.data.derivative.diagonal / problem.weights / problem.alpha)
    seen = problem.observations.matrix
    seen = sp.diags_array(problem.observations.vector) if seen is None else seen
    newton = sp.csc_array(sp.block_array([[seen, matrix.T], [matrix, -b @ slope @ b.T]]))
    expected = sp.linalg.spsolve(newton, -at.residual)
    assert direction.status == "solved"
    assert np.linalg.norm(direction.vector - expected) <= 1e-8 * np.linalg.norm(expected)


def test_the_dual_slope_is_the_derivative_of_the_dual_function():
    matrix, mass, x = perturbed(9)
    for problem in (grid_problem(9, 8, source=np.full(72, 0.01)), control_problem(matrix, x, mass, 1e-4)):
        equation, n = CoupledEquation(problem), problem.unknowns
        weight = problem.observations
        rng = np.random.default_rng(8)
        p, d = 1e-2 * rng.standard_normal(n), 1e-2 * rng.standard_normal(n)

        def phi(t, problem=problem, p=p, d=d, weight=weight):
            moved = p + t * d
            full = weight.matrix.toarray() if weight.matrix is not None else np.diag(weight.vector)
            load = problem.state.matrix @ moved
            y = problem.target - np.linalg.solve(full, load)
            u = problem.cost.prox(problem.pull_back(moved) / problem.alpha, 1 / problem.alpha)
            reward = problem.weights @ (
                problem.pull_back(moved) * u
            ) - 0.5 * problem.alpha * problem.controls.dot(u, u)
            source = 0.0 if problem.source is None else problem.source @ moved
            return 0.5 * weight.dot(y, y) + reward - problem.cost.value(u, problem.weights) + source

        slope = equation.merit_line(
            equation.evaluate(np.concatenate([rng.standard_normal(n), p])), np.concatenate([d, d])
        )
        for t in (0.0, 0.4, 1.3):
            quotient = (phi(t + 1e-5) - phi(t - 1e-5)) / 2e-5
            value, curvature, _ = slope(t)
            assert value == pytest.approx(quotient, rel=1e-5, abs=1e-9)
            assert curvature > 0.0


# solves


def agree(problem, **options):
    ours = ssn.solve(problem, linear="coupled", **options).require()
    other = ssn.solve(problem, linear="subspace", tolerance=1e-11).require()
    distance = problem.controls.norm(ours.x - other.x)
    assert distance <= 1e-7 * problem.controls.norm(other.x)
    assert distance <= ours.certificate.bound + other.certificate.bound
    assert ours.objective == pytest.approx(other.objective, rel=1e-9)
    assert np.allclose(ours.adjoint, other.adjoint, atol=1e-7 * abs(other.adjoint).max(initial=1e-30))
    assert np.array_equal(ours.pieces["control"], other.pieces["control"])
    return ours


@pytest.mark.parametrize("alpha", [1e-3, 1e-4, 1e-5, 1e-6, 1e-7])
@pytest.mark.parametrize("shape", [(31, 31), (40, 40)])
def test_geometric_multigrid_and_the_dual_equation_give_the_same_control(shape, alpha):
    solution = agree(grid_problem(*shape, alpha=alpha))
    assert "geometric" in solution.choices["linear"]
    assert solution.work.factorizations == 0
    assert len(solution.steps) <= 32


def test_in_space():
    solution = agree(grid_problem(12, 13, 14, alpha=1e-5))
    assert "geometric" in solution.choices["linear"]


@pytest.mark.parametrize("consistent", [False, True])
def test_algebraic_multigrid_on_a_triangular_mesh(consistent):
    matrix, mass, x = perturbed(30)
    weight = mass if consistent else np.asarray(mass.sum(axis=1)).ravel()
    solution = agree(control_problem(matrix, x, weight, 1e-5))
    assert "algebraic" in solution.choices["linear"]
    assert max(s.inner_iterations for s in solution.steps) <= 12


def test_controls_and_observations_in_a_part_of_the_domain():
    matrix, mass, x = perturbed(24)
    inside = np.flatnonzero(x[0] < 0.6)
    seen = np.flatnonzero(x[1] > 0.3)
    lumped = np.asarray(mass.sum(axis=1)).ravel()
    full = sp.eye_array(matrix.shape[0], format="csr")
    target = np.sin(2 * np.pi * x[0]) * np.sin(2 * np.pi * x[1])
    options = {
        "state": ssn.SteadyState(matrix), "cost": ssn.SparseCost(1e-4, -5.0, 20.0), "control_weight": 1e-5,
        "control_operator": (sp.diags_array(lumped) @ full)[:, inside], "control_mass": lumped[inside],
    }  # fmt: skip
    agree(ssn.ControlProblem(target=target, observation_mass=lumped, **options))
    part = ssn.ControlProblem(
        target=target[seen], observation=full[seen], observation_mass=lumped[seen], **options
    )
    solution = agree(part)
    assert "residual" in solution.choices["globalization"]


def test_a_source_a_start_and_a_pair():
    problem = grid_problem(33, 32, source=np.full(33 * 32, 2e-3))
    cold = agree(problem)
    assert len(ssn.solve(problem, cold.x, linear="coupled", tolerance=1e-8).require().steps) == 0
    pair = ssn.solve(problem, (cold.state, cold.adjoint), linear="coupled").require()
    assert len(pair.steps) == 0
    assert np.array_equal(pair.x, cold.x)
    # the same pair is a start for the dual equation, too
    assert len(ssn.solve(problem, (cold.state, cold.adjoint), linear="subspace").require().steps) <= 1


def test_the_control_that_vanishes():
    problem = grid_problem(20, 20)
    threshold = abs(problem.adjoint(problem.reduced_target())).max()
    solution = ssn.solve(grid_problem(20, 20, beta=1.001 * threshold), linear="coupled").require()
    assert not solution.x.any()
    assert ssn.solve(grid_problem(20, 20, beta=0.98 * threshold), linear="coupled").require().x.any()


def test_it_is_taken_for_many_states_and_says_why():
    n = 1 + int(np.sqrt(COUPLED_FROM))
    plan = prepare(grid_problem(n, n))
    assert plan.solver.name == "coupled"
    assert "too many" in plan.choices["linear"]
    assert prepare(grid_problem(20, 20)).solver.name == "subspace"
    assert prepare(grid_problem(n, n), linear="subspace").solver.name == "subspace"


def test_where_the_cycle_fails_the_dual_equation_takes_over(monkeypatch):
    monkeypatch.setattr("ssn.plans.control.COUPLED_FROM", 10)
    problem = grid_problem(16, 16)
    monkeypatch.setattr(GridHierarchy, "correct", lambda self, f, g: (1e-3 * f, 1e-3 * g))
    solution = ssn.solve(problem).require()
    assert "taken after coupled" in solution.choices["linear"]
    assert solution.steps[-1].inner_iterations < module.IDLE
    asked = ssn.solve(problem, linear="coupled")
    assert not asked.converged
    assert np.isfinite(asked.x).all()


def test_a_final_check_of_its_own(monkeypatch):
    """A hierarchy that claims small corrections does not make a solution."""
    problem = grid_problem(16, 16)
    monkeypatch.setattr(GridHierarchy, "correct", lambda self, f, g: (1e-14 * f, 1e-14 * g))
    solution = ssn.solve(problem, linear="coupled")
    assert solution.outcome is ssn.Outcome.INACCURATE
    assert solution.certificate.relative > 1e-3


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ("dense", "dense"),
        ("nonsymmetric", "symmetric"),
        ("groups", "separable"),
        ("patches", "not local"),
        ("zero weight", "weight is zero"),
    ],
)
def test_what_it_does_not_fit(change, reason):
    matrix, alpha, options = laplacian(20, 20), 1e-4, {}
    cost = ssn.SparseCost(1e-3)
    mass = np.full(400, 1.0 / 441)
    if change == "dense":
        matrix = matrix.toarray()
    elif change == "nonsymmetric":
        matrix = matrix + sp.diags_array(np.full(399, 0.01), offsets=1)
    elif change == "groups":
        cost = ssn.GroupSparseCost(1e-3, shape=(20, 20), axis=0)
    elif change == "patches":
        options["control_operator"] = sp.csr_array(np.kron(np.eye(4), np.ones((100, 1))) / 441)
    else:
        alpha = 0.0
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(matrix), target=np.ones(400), cost=cost, control_weight=alpha,
        observation_mass=mass, **(options or {"state_mass": mass, "control_mass": mass}),
    )  # fmt: skip
    assert reason in refusal(problem)
    with pytest.raises(ssn.InputError, match=reason):
        ssn.solve(problem, linear="coupled")


def test_bad_pairs_are_refused():
    problem = grid_problem(8, 8)
    with pytest.raises(ssn.InputError, match="3 entries"):
        ssn.solve(problem, (np.zeros(64),) * 3)
    with pytest.raises(ssn.InputError, match=r"start\[1\]"):
        ssn.solve(problem, (np.zeros(64), np.zeros(63)))


def test_the_active_term_is_formed_anew_only_where_it_changes():
    operators = CoupledOperators(grid_problem(16, 16))
    calls = []
    refresh = operators.hierarchy.refresh
    operators.hierarchy.refresh = lambda active: (calls.append(1), refresh(active))
    for diagonal in (np.ones(256), np.ones(256), np.zeros(256)):
        operators.activate(diagonal)
    assert len(calls) == 2


@pytest.mark.parametrize("tolerance", [1e-2, 1e-4, 1e-6])
def test_a_loose_tolerance_is_enough_where_it_is_asked_for(tolerance):
    solution = ssn.solve(grid_problem(33, 33), linear="coupled", tolerance=tolerance).require()
    assert solution.accuracy <= tolerance
    assert solution.certificate.relative <= 100 * tolerance
    assert solution.work.factorizations == 0
