"""Newton systems: the recycled subspace and the reduced solver against dense solutions of the full system."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator, aslinearoperator

import ssn
from ssn.costs import DiagonalDerivative
from ssn.inner import InnerProduct
from ssn.linear import preconditioned
from ssn.linear.reduced import ReducedSolver
from ssn.linear.subspace import SubspaceSolver
from ssn.work import WorkCounts

ALPHA = 0.03


class DenseDerivative:
    """A self-adjoint D with 0 <= D <= I in a weighted product, not diagonal."""

    diagonal = None

    def __init__(self, matrix):
        self.matrix = matrix

    def apply(self, x):
        return self.matrix @ x


class Tracking:
    """S = A with S* = Wu^-1 A' Wy."""

    def __init__(self, a, controls, observations):
        self.a = a
        self.controls, self.observations = InnerProduct(controls), InnerProduct(observations)
        self.work = WorkCounts()

    def forward(self, u):
        self.work.state_solves += 1
        return self.a @ u

    def adjoint(self, q):
        self.work.state_solves += 1
        return (self.a.T @ self.observations.apply(q)) / self.controls.vector


def dual_case(seed, m, n, *, mass="diagonal", dense_derivative=False, decay=0.7):
    rng = np.random.default_rng(seed)
    k = min(m, n)
    left, right = np.linalg.qr(rng.standard_normal((m, k)))[0], np.linalg.qr(rng.standard_normal((n, k)))[0]
    a = (left * decay ** np.arange(k)) @ right.T
    wu = rng.uniform(0.5, 2.0, n)
    if mass == "diagonal":
        wy = rng.uniform(0.5, 2.0, m)
    else:
        wy = (
            sp.diags_array([np.ones(m - 1), 4 * np.ones(m), np.ones(m - 1)], offsets=[-1, 0, 1]).tocsr() / 6.0
        )
    tracking = Tracking(a, wu, wy)
    if dense_derivative:
        q, _ = np.linalg.qr(rng.standard_normal((n, n)))
        inner = (q * rng.uniform(0, 1, n)) @ q.T
        root = np.sqrt(wu)
        derivative = DenseDerivative(inner * root / root[:, None])
    else:
        derivative = DiagonalDerivative((rng.random(n) < 0.6).astype(float))
    return tracking, derivative, rng


def point(tracking, derivative, r):
    data = SimpleNamespace(derivative=derivative, adjoint_residual=tracking.adjoint(r))
    return SimpleNamespace(residual=r, norm=tracking.observations.norm(r), data=data)


def newton_matrix(tracking, derivative):
    m, n = tracking.observations.size, tracking.controls.size
    adjoint = np.stack([tracking.adjoint(e) for e in np.eye(m)], axis=1)
    return np.eye(m) + tracking.a @ derivative.apply(np.eye(n)) @ adjoint / ALPHA


@pytest.mark.parametrize("forcing", [1e-2, 1e-6, 1e-11])
@pytest.mark.parametrize("mass", ["diagonal", "matrix"])
@pytest.mark.parametrize("dense_derivative", [False, True])
@pytest.mark.parametrize(("m", "n"), [(60, 40), (40, 60), (5, 80), (80, 3), (1, 1)])
def test_subspace_reaches_the_forcing(m, n, mass, dense_derivative, forcing):
    tracking, derivative, rng = dual_case(m + n, m, n, mass=mass, dense_derivative=dense_derivative)
    solver = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=ALPHA))
    for _ in range(3):  # the basis is kept from one right-hand side to the next
        r = rng.standard_normal(m)
        found = solver.solve(point(tracking, derivative, r), forcing)
        matrix = newton_matrix(tracking, derivative)
        d, lifted = found.vector[:m], found.vector[m:]
        left = tracking.observations.norm(matrix @ d + r) / tracking.observations.norm(r)
        assert found.status == "solved"
        assert left <= forcing * (1 + 1e-6) + 1e-14
        assert found.relative_residual == pytest.approx(left, rel=1e-4, abs=1e-13)
        np.testing.assert_allclose(lifted, tracking.adjoint(d), atol=1e-10 * np.abs(lifted).max())
        if forcing < 1e-10:
            np.testing.assert_allclose(d, np.linalg.solve(matrix, -r), atol=1e-8)
    assert solver.rank <= m


def small_memory_solves(check):
    """Four systems of 120 unknowns with room for 16 directions; calls check(tracking, solver) after a compression."""
    m = n = 120
    tracking, _, rng = dual_case(7, m, n, decay=0.97)
    solver = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=ALPHA), memory=1.0)
    assert solver.capacity == 16
    compress = solver._compress

    def checked():
        compress()
        check(tracking, solver)

    solver._compress = checked
    for _ in range(4):
        derivative = DiagonalDerivative((rng.random(n) < 0.5).astype(float))
        r = rng.standard_normal(m)
        found = solver.solve(point(tracking, derivative, r), 1e-3)
        left = tracking.observations.norm(newton_matrix(tracking, derivative) @ found.vector[:m] + r)
        yield found, left / tracking.observations.norm(r)


def test_subspace_compression_keeps_an_orthonormal_basis():
    compressions = 0

    def check(tracking, solver):
        nonlocal compressions
        compressions += 1
        basis = solver._basis[: solver.rank]
        gram = np.stack([tracking.observations.apply(b) for b in basis]) @ basis.T
        np.testing.assert_allclose(gram, np.eye(solver.rank), atol=1e-8)
        lifted = np.stack([tracking.adjoint(b) for b in basis])
        np.testing.assert_allclose(solver._lifted[: solver.rank], lifted, atol=1e-8)

    for found, left in small_memory_solves(check):
        assert found.relative_residual == pytest.approx(left, rel=1e-4)
    assert compressions > 0


def test_subspace_reaches_the_forcing_in_small_memory():
    for found, left in small_memory_solves(lambda tracking, solver: None):
        assert found.status == "solved"
        assert left <= 1.001e-3


def test_subspace_recycles():
    """The second system with the same S costs fewer directions, whatever D and the right-hand side."""
    tracking, derivative, rng = dual_case(5, 60, 60)
    solver = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=ALPHA))
    first = solver.solve(point(tracking, derivative, rng.standard_normal(60)), 1e-8)
    other = DiagonalDerivative((rng.random(60) < 0.6).astype(float))
    second = solver.solve(point(tracking, other, rng.standard_normal(60)), 1e-8)
    assert 0 < second.inner_iterations < first.inner_iterations
    fresh = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=10 * ALPHA))
    fresh.carry_over(solver)
    third = fresh.solve(point(tracking, other, rng.standard_normal(60)), 1e-8)
    assert third.status == "solved"
    assert third.inner_iterations < first.inner_iterations


def test_subspace_with_empty_active_set_and_zero_residual():
    tracking, _, rng = dual_case(5, 9, 7)
    solver = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=ALPHA))
    r = rng.standard_normal(9)
    found = solver.solve(point(tracking, DiagonalDerivative(np.zeros(7)), r), 1e-8)
    np.testing.assert_array_equal(found.vector, np.concatenate([-r, -tracking.adjoint(r)]))
    assert not solver.solve(point(tracking, DiagonalDerivative(np.ones(7)), np.zeros(9)), 1e-8).vector.any()


def test_subspace_with_too_few_directions_says_inaccurate():
    tracking, derivative, rng = dual_case(5, 60, 60, decay=0.99)
    solver = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=1e-3), max_inner=2)
    found = solver.solve(point(tracking, derivative, rng.standard_normal(60)), 1e-10)
    assert found.status == "inaccurate"
    assert found.relative_residual > 1e-10


def test_subspace_reports_nan():
    tracking, derivative, _ = dual_case(5, 20, 20)
    tracking.a[:] = np.nan
    at = point(tracking, derivative, np.ones(20))
    at.data.adjoint_residual = np.ones(20)
    found = SubspaceSolver(SimpleNamespace(tracking=tracking, alpha=ALPHA)).solve(at, 1e-8)
    assert found.status == "singular"
    assert found.vector is None


class Natural:
    """What `ReducedSolver` sees of a natural residual: F' = J, weights, symmetry."""

    def __init__(self, j, weights, *, symmetric):
        self.j, self.weights, self.symmetric = j, weights, symmetric
        self.work = WorkCounts()

    def jacobian(self, x):
        return self.j


def natural_case(seed, n, *, symmetric, share, scalar_step):
    """R' = I - D (I - s W^-1 J), D diagonal with entries 0, 1 and between."""
    rng = np.random.default_rng(seed)
    b = rng.standard_normal((n, n))
    j = b @ b.T / n + np.eye(n) if symmetric else b / np.sqrt(n) + 3 * np.eye(n)
    weights = rng.uniform(0.5, 2.0, n)
    step = 0.3 if scalar_step else rng.uniform(0.1, 0.5, n)
    kind = rng.random(n)
    d = np.where(kind < share, 0.0, np.where(kind < 0.5 + share / 2, 1.0, rng.uniform(0.1, 0.9, n)))
    r = rng.standard_normal(n)
    full = np.eye(n) - d[:, None] * (np.eye(n) - (step / weights)[:, None] * j)
    data = SimpleNamespace(derivative=DiagonalDerivative(d), step=step)
    at = SimpleNamespace(x=np.zeros(n), residual=r, norm=float(np.linalg.norm(r)), data=data)
    return j, weights, at, np.linalg.solve(full, -r)


@pytest.mark.parametrize("scalar_step", [True, False])
@pytest.mark.parametrize("symmetric", [True, False])
@pytest.mark.parametrize("share", [0.0, 0.4, 1.0])
@pytest.mark.parametrize("kind", ["dense", "csr", "csc", "operator"])
def test_reduced_solves_the_full_system(kind, share, symmetric, scalar_step):
    for seed in range(4):
        j, weights, at, expected = natural_case(
            seed, 5 + 9 * seed, symmetric=symmetric, share=share, scalar_step=scalar_step
        )
        made = {"dense": lambda a: a, "csr": sp.csr_array, "csc": sp.csc_array, "operator": aslinearoperator}[
            kind
        ](j)
        found = ReducedSolver(Natural(made, weights, symmetric=symmetric)).solve(at, 1e-12)
        assert found.status == "solved"
        np.testing.assert_allclose(found.vector, expected, rtol=1e-7, atol=1e-8)


@pytest.mark.parametrize("operator", [False, True])
def test_reduced_with_a_dense_derivative(operator):
    rng = np.random.default_rng(8)
    j, weights, at, _ = natural_case(2, 20, symmetric=True, share=0.2, scalar_step=True)
    q, _ = np.linalg.qr(rng.standard_normal((20, 20)))
    d = (q * np.clip(rng.uniform(-0.5, 1.5, 20), 0, 1)) @ q.T
    at.data.derivative = DenseDerivative(d)
    full = np.eye(20) - d @ (np.eye(20) - 0.3 / weights[:, None] * j)
    solver = ReducedSolver(Natural(aslinearoperator(j) if operator else j, weights, symmetric=True))
    found = solver.solve(at, 1e-11)
    np.testing.assert_allclose(found.vector, np.linalg.solve(full, -at.residual), rtol=1e-6, atol=1e-8)


def test_reduced_keeps_the_factor_while_nothing_changes():
    j, weights, at, expected = natural_case(1, 14, symmetric=True, share=0.3, scalar_step=True)
    equation = Natural(sp.csr_array(j), weights, symmetric=True)
    solver = ReducedSolver(equation)
    solver.solve(at, 1e-12)
    again = solver.solve(at, 1e-12)
    assert equation.work.factorizations == 1
    np.testing.assert_allclose(again.vector, expected, rtol=1e-8)
    at.data.derivative = DiagonalDerivative(np.ones(14))
    moved = solver.solve(at, 1e-12)
    assert equation.work.factorizations == 2
    full = 0.3 / weights[:, None] * j
    np.testing.assert_allclose(moved.vector, np.linalg.solve(full, -at.residual), rtol=1e-8)


def test_reduced_does_not_reuse_a_factor_of_another_matrix():
    """A new Jacobian with the same inactive set is factorised anew, even where it takes a freed one's place."""
    _, weights, at, _ = natural_case(1, 14, symmetric=True, share=0.0, scalar_step=True)
    at.data.derivative = DiagonalDerivative(np.ones(14))
    equation = Natural(None, weights, symmetric=True)
    solver = ReducedSolver(equation)
    for k in range(1, 30):
        equation.j = None
        equation.j = np.eye(14) * k
        found = solver.solve(at, 1e-12)
        np.testing.assert_allclose(found.vector, -at.residual * weights / (0.3 * k), rtol=1e-10)


def test_reduced_marks_a_singular_system():
    _, weights, at, _ = natural_case(1, 6, symmetric=True, share=0.0, scalar_step=True)
    at.data.derivative = DiagonalDerivative(np.ones(6))
    singular = np.ones((6, 6))
    found = ReducedSolver(Natural(singular, weights, symmetric=True)).solve(at, 1e-12)
    assert found.status in ("inaccurate", "singular")
    assert "singular" in found.message or found.vector is None


def test_a_broken_operator_is_not_solved():
    _, weights, at, _ = natural_case(1, 6, symmetric=True, share=0.0, scalar_step=True)
    broken = LinearOperator((6, 6), matvec=lambda x: np.full(6, np.nan), dtype=float)
    for symmetric in (True, False):
        found = ReducedSolver(Natural(broken, weights, symmetric=symmetric)).solve(at, 1e-12)
        assert found.status == "singular"


# large matrices and preconditioners


def transport(shape, wind):
    """-Lap with upwinded transport along each axis; symmetric for wind 0."""
    total = 0.0
    for axis, n in enumerate(shape):
        factors = [sp.eye_array(m) for m in shape]
        ones, drift = np.ones(n - 1), wind / (n + 1)
        factors[axis] = sp.diags_array(
            [-(1 + drift) * ones, (2 + drift) * np.ones(n), -ones], offsets=[-1, 0, 1]
        )
        matrix = factors[0]
        for factor in factors[1:]:
            matrix = sp.kron(matrix, factor)
        total = total + matrix
    return sp.csr_array(total)


def biharmonic(shape):
    """Squared -Lap: positive definite with large positive entries beside the diagonal."""
    matrix = transport(shape, 0.0)
    return sp.csr_array(matrix @ matrix)


@pytest.fixture
def small_counts_as_large(monkeypatch):
    monkeypatch.setattr(preconditioned, "LARGE", 100)
    monkeypatch.setattr(preconditioned, "WIDE", 100)


def test_why_a_matrix_is_iterated_on(small_counts_as_large):
    assert preconditioned.why_iterate(transport((9, 9), 0.0)) is None
    assert preconditioned.why_iterate(np.eye(200)) is None
    assert preconditioned.why_iterate(transport((20, 20), 0.0))[0] == "multigrid"
    assert preconditioned.why_iterate(transport((20, 20), 500.0))[0] == "multigrid"
    assert preconditioned.why_iterate(biharmonic((20, 20))) is None
    assert preconditioned.why_iterate(-transport((20, 20), 0.0)) is None
    assert preconditioned.why_iterate(abs(transport((20, 20), 0.0))) is None
    kind, why = preconditioned.why_iterate(biharmonic((9, 9, 9)))
    assert kind == "incomplete factors"
    assert "729" in why


@pytest.mark.parametrize(("shape", "width"), [((30, 7), 7), ((12, 40), 12), ((6, 7, 8), 42)])
def test_the_width_is_that_of_the_best_ordering_by_levels(shape, width):
    matrix = transport(shape, 0.0)
    shuffled = np.random.default_rng(1).permutation(matrix.shape[0])
    found = preconditioned.bandwidth(sp.csr_array(matrix[shuffled][:, shuffled]))
    assert 0.9 * width <= found <= 1.5 * width


class Large:
    """F(x) = A x + x^3 / 10 - b as an `Equation`."""

    def __init__(self, matrix, *, claims=(False, False), operator=False, preconditioner=None):
        self.matrix, self.claims, self.operator = matrix, claims, operator
        n = matrix.shape[0]
        self.b = np.cos(np.arange(n))
        self.start = np.zeros(n)
        if preconditioner is not None:
            self.preconditioner = preconditioner

    def residual(self, x):
        return self.matrix @ x + 0.1 * x**3 - self.b

    def linearize(self, x):
        derivative = sp.csr_array(self.matrix + sp.diags_array(0.3 * x**2))
        return ssn.Linearization(
            self.residual(x), aslinearoperator(derivative) if self.operator else derivative,
            symmetric=self.claims[0], positive_definite=self.claims[1],
        )  # fmt: skip


@pytest.mark.parametrize(
    ("matrix", "claims", "words"),
    [
        (transport((20, 20), 0.0), (True, True), "multigrid (400 unknowns, the diagonal dominates)"),
        (transport((20, 20), 0.0), (False, False), "multigrid"),
        (transport((20, 20), 300.0), (False, False), "multigrid"),
        (biharmonic((8, 8, 8)), (False, False), "incomplete factors"),
    ],
)
def test_large_general_equations_are_iterated_on(small_counts_as_large, matrix, claims, words):
    found = ssn.solve(Large(matrix, claims=claims), tolerance=1e-10)
    assert found.converged
    assert words in found.choices["linear"]
    assert sum(step.inner_iterations for step in found.steps) > 0
    assert all(step.linear_residual <= 1.01 * step.forcing for step in found.steps)
    small = ssn.solve(Large(matrix, claims=claims), tolerance=1e-12, linear="general")
    np.testing.assert_allclose(found.x, small.x, atol=1e-7 * abs(small.x).max())


def test_a_failing_iteration_gives_way_to_factors(small_counts_as_large, monkeypatch):
    monkeypatch.setattr(preconditioned, "ITERATIONS", 1)
    found = ssn.solve(Large(transport((20, 20), 0.0)), tolerance=1e-11)
    assert found.converged
    assert "direct, the iteration with multigrid left" in found.choices["linear"]
    assert found.steps[-1].inner_iterations == 0


@pytest.mark.parametrize("operator", [False, True])
@pytest.mark.parametrize("claims", [(False, False), (True, True)])
def test_a_preconditioner_of_the_equation_is_used(operator, claims):
    matrix = transport((15, 15), 0.0)
    inverse = aslinearoperator(np.linalg.inv(matrix.toarray()))
    found = ssn.solve(Large(matrix, claims=claims, operator=operator, preconditioner=inverse))
    assert found.converged
    counts = [step.inner_iterations for step in found.steps]
    assert 0 < max(counts) <= 12
    if operator:
        without = ssn.solve(Large(matrix, claims=claims, operator=True))
        assert max(step.inner_iterations for step in without.steps) > 2 * max(counts)


def test_a_preconditioner_of_the_linearisation_comes_first():
    matrix = transport((15, 15), 50.0)
    calls = []

    class Own(Large):
        def linearize(self, x):
            lin = super().linearize(x)
            inverse = np.linalg.inv(lin.derivative.toarray())
            calls.append(1)
            return replace(lin, preconditioner=aslinearoperator(inverse))

    found = ssn.solve(Own(matrix, preconditioner=aslinearoperator(np.eye(225))))
    assert found.converged
    assert calls
    assert max(step.inner_iterations for step in found.steps) <= 2


@pytest.mark.parametrize("bad", [np.eye(225), aslinearoperator(np.eye(3))])
def test_a_preconditioner_that_does_not_fit_is_refused(bad):
    with pytest.raises(ssn.InputError, match="preconditioner"):
        ssn.solve(Large(transport((15, 15), 0.0), preconditioner=bad))


def test_a_useless_preconditioner_gives_way_to_factors():
    zero = LinearOperator((225, 225), matvec=lambda x: 0.0 * x, dtype=float)
    found = ssn.solve(Large(transport((15, 15), 0.0), preconditioner=zero))
    assert found.converged
    assert "direct" in found.choices["linear"]


@pytest.mark.parametrize("wind", [0.0, 80.0])
def test_large_reduced_systems_are_iterated_on(small_counts_as_large, monkeypatch, wind):
    matrix = transport((24, 24), wind)
    load = np.sin(np.arange(576) / 40.0) / 50.0
    small = 1e-3 * np.ones(576)
    problem = ssn.ComplementarityProblem(ssn.AffineMap(matrix, load), -small, 30 * small)
    found = ssn.solve(problem)
    assert found.converged
    assert "multigrid" in found.choices["linear"]
    monkeypatch.setattr(preconditioned, "LARGE", 10**9)
    direct = ssn.solve(problem)
    assert "linear" not in direct.choices
    np.testing.assert_allclose(found.x, direct.x, atol=1e-8 * abs(direct.x).max())


@pytest.mark.parametrize("symmetric", [True, False])
def test_reduced_operators_take_the_preconditioner_of_the_map(symmetric):
    n = 225
    matrix = transport((15, 15), 0.0 if symmetric else 60.0)
    _, weights, at, _ = natural_case(1, n, symmetric=True, share=0.3, scalar_step=True)
    d = at.data.derivative.diagonal
    full = np.eye(n) - d[:, None] * (np.eye(n) - 0.3 / weights[:, None] * matrix.toarray())
    expected = np.linalg.solve(full, -at.residual)
    counts = []
    for given in (None, aslinearoperator(np.linalg.inv(matrix.toarray()))):
        equation = Natural(aslinearoperator(matrix), weights, symmetric=symmetric)
        equation.map = SimpleNamespace(preconditioner=given)
        found = ReducedSolver(equation).solve(at, 1e-11)
        assert found.status == "solved"
        np.testing.assert_allclose(found.vector, expected, rtol=1e-6, atol=1e-8)
        counts.append(found.inner_iterations)
    assert counts[1] < counts[0]


def test_transport_without_a_preconditioner_does_not_stall():
    """With SciPy's own restart of 20 it takes more than ten times as many iterations."""
    n = 90
    matrix = sp.csr_array(transport((n,), 5.0))
    at = SimpleNamespace(
        x=np.zeros(n), residual=np.ones(n), norm=1.0,
        data=SimpleNamespace(derivative=DiagonalDerivative(np.ones(n)), step=0.3),
    )  # fmt: skip
    equation = Natural(aslinearoperator(matrix), np.ones(n), symmetric=False)
    found = ReducedSolver(equation).solve(at, 1e-8)
    assert found.status == "solved"
    assert found.inner_iterations <= 2 * n
    np.testing.assert_allclose(0.3 * (matrix @ found.vector), -at.residual, atol=1e-6)
