import numpy as np
import pytest
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

import ssn
from ssn.evidence import check_derivative

from . import cases

RIGHT = [
    cases.kinked,
    lambda: cases.powers(1.25),
    cases.control,
    lambda: cases.control(convection=3.0, source=2.0),
    lambda: cases.control(alpha=0.0),
    lambda: cases.control(beta=1.0),
    cases.least_squares,
    lambda: cases.least_squares(15, 30),
    cases.curved,
    cases.complementarity,
    cases.linear_complementarity,
    cases.obstacle,
]


@pytest.mark.parametrize("make", RIGHT)
@pytest.mark.parametrize("seed", [0, 1])
def test_right_derivatives_pass(make, seed):
    checks = check_derivative(make(), seed=seed)
    assert cases.names(checks) == set(), [c for c in checks if not c.holds]


@pytest.mark.parametrize("make", RIGHT)
def test_right_derivatives_pass_at_the_solution(make):
    problem = make()
    assert cases.names(check_derivative(problem, ssn.solve(problem).x)) == set()


def found(problem) -> set[str]:
    return {check.name for check in check_derivative(problem)}


def test_which_checks_apply():
    everywhere = {"newton derivative", "newton step"}
    composite = everywhere | {"pieces", "proximal map", "gradient", "hessian", "hessian symmetry"}
    assert found(cases.kinked()) == everywhere
    assert found(cases.curved()) == composite
    assert found(cases.least_squares()) == composite | {"adjoint"}
    assert found(cases.complementarity()) == everywhere | {"pieces", "proximal map", "map derivative"}
    assert found(cases.obstacle()) == everywhere | {"pieces", "proximal map", "map derivative", "gradient"}
    assert found(cases.control()) == everywhere | {
        "pieces", "proximal map", "gradient", "state operator", "state solve", "adjoint solve", "adjoint",
    }  # fmt: skip


def test_names_are_unique():
    names = [check.name for check in check_derivative(cases.control())]
    assert len(names) == len(set(names))


@pytest.mark.parametrize("factor", [1.0 + 1e-5, 1.01, 0.5, -1.0])
def test_scaled_derivative(factor):
    equation = cases.kinked(change=lambda d: lambda x: factor * d(x))
    assert cases.names(check_derivative(equation)) == {"newton derivative"}


def test_derivative_at_another_point():
    # G(x) instead of G(x + h) is right for smooth F, wrong across a kink: the quotient takes the far end
    K = cases.laplacian(6)
    equation = cases.Given(
        lambda x: K @ x + np.maximum(0.0, x), lambda x: K + np.diag(1.0 * (x > 0.01)), np.full(6, 0.5)
    )
    assert cases.names(check_derivative(equation)) == set()  # right at the start and near it
    assert cases.names(check_derivative(equation, np.full(6, 0.005))) == {"newton derivative"}


class OneWrongAtKink(ssn.SparseCost):
    """Right everywhere but for one component near its kink: only a direction across the kink can tell."""

    def prox_derivative(self, v, step):
        d = super().prox_derivative(v, step)
        near = np.abs(np.abs(v) - step * self.beta) < 1e-2 * step * self.beta
        return ssn.costs.DiagonalDerivative(np.where(near, 0.5, d.diagonal))


def test_kink_crossing_directions_are_needed():
    problem = cases.least_squares(cost=OneWrongAtKink)
    check = check_derivative(problem)[0]
    assert check.name == "newton derivative" and not check.holds
    assert "across a kink" in check.detail
    assert "at the point" not in check.detail


def test_a_kink_much_nearer_than_the_sizes():
    # x = 1e-10 lies off the kink by less than the smallest size: the quotient has a hump there, the derivative is right
    equation = cases.Given(
        lambda x: 2.0 * x - np.maximum(0.0, x), lambda x: np.diag(2.0 - 1.0 * (x > 0.0)), np.ones(5)
    )
    at = np.array([1e-10, -1e-10, 1.0, -1.0, 0.0])
    assert cases.names(check_derivative(equation, at)) == set()
    wrong = cases.Given(
        lambda x: 2.0 * x - np.maximum(0.0, x), lambda x: np.diag(2.0 - 1.0 * (x > -0.5)), np.ones(5)
    )
    assert cases.names(check_derivative(wrong, at)) == {"newton derivative"}


def test_wrong_gradient_of_one_component():
    class OneWrong(cases.Curved):
        def gradient(self, u):
            g = super().gradient(u)
            g[3] += 1e-3
            return g

    problem = ssn.CompositeProblem(smooth=OneWrong(np.linspace(-1, 1, 50)), cost=ssn.SparseCost(0.05))
    assert cases.names(check_derivative(problem)) == {"gradient"}


def test_lost_term_and_missing_second_order_term():
    assert cases.names(check_derivative(cases.curved(lost=0.05))) == {"gradient"}
    assert cases.names(check_derivative(cases.curved(gauss_newton=True))) == {"hessian", "newton derivative"}
    assert "hessian symmetry" in cases.names(check_derivative(cases.curved(skew=0.1)))


def test_wrong_map_derivative():
    assert {"map derivative", "newton derivative"} <= cases.names(
        check_derivative(cases.complementarity(wrong=0.5))
    )


class Transposed(ssn.SteadyState):
    """Solves with E where E' is asked for."""

    def adjoint_solve(self, rhs):
        return self.solve(rhs)


class Sloppy(ssn.SteadyState):
    """Leaves a relative error of 1e-5."""

    def solve(self, rhs):
        return super().solve(rhs) * (1.0 + 1e-5)


def test_state_models():
    wrong = check_derivative(cases.control(state=Transposed, convection=3.0))
    assert {"adjoint solve", "adjoint", "gradient"} <= cases.names(wrong)
    assert "state solve" in cases.names(check_derivative(cases.control(state=Sloppy)))
    assert cases.names(check_derivative(cases.control(state=Transposed))) == set()  # symmetric: no difference


def test_operators_with_a_wrong_adjoint():
    n = 25
    h = 1.0 / 6
    E = sp.csr_array(sp.kron(cases.laplacian(5), np.eye(5)) + sp.kron(np.eye(5), cases.laplacian(5)))
    rng = np.random.default_rng(0)
    B, C = rng.standard_normal((n, 4)), rng.standard_normal((7, n))
    wrong = {"matvec": lambda u: B @ u, "rmatvec": lambda p: 2.0 * (B.T @ p)}
    right = {"matvec": lambda u: B @ u, "rmatvec": lambda p: B.T @ p}
    for members, expected in ((right, set()), (wrong, {"control operator adjoint", "adjoint", "gradient"})):
        problem = ssn.ControlProblem(
            state=ssn.SteadyState(E), control_operator=LinearOperator((n, 4), dtype=float, **members), observation=C,
            target=rng.standard_normal(7), cost=ssn.SparseCost(1e-3), control_weight=1e-2, control_mass=np.full(4, h),
        )  # fmt: skip
        assert cases.names(check_derivative(problem)) & {
            "control operator adjoint", "adjoint", "gradient", "observation adjoint", "state solve",
        } == expected  # fmt: skip


def test_multigrid_states_pass():
    class Multigrid(ssn.SteadyState):
        def __init__(self, E):
            super().__init__(E, solver="multigrid", accuracy=1e-10)

    assert cases.names(check_derivative(cases.control(10, state=Multigrid))) == set()


def test_at_must_fit():
    with pytest.raises(ssn.InputError):
        check_derivative(cases.control(), np.zeros(3))
    with pytest.raises(ssn.InputError):
        check_derivative(cases.kinked(), np.full(20, np.nan))


def test_nothing_given_is_changed():
    equation = cases.kinked()
    at = np.full(20, 0.9)
    check_derivative(equation, at)
    assert (at == 0.9).all()
    assert (equation.start == 3.0).all()


class GroupWithOneLabelSwapped(ssn.GroupSparseCost):
    """A component of a vanishing group carries the label of the others."""

    def pieces(self, v, step):
        found = super().pieces(v, step)
        labels = found["control"].copy()
        labels[int(np.argmax(labels == 0))] = 1
        return ssn.Pieces({"control": labels}, found.legend)


class SwitchingWithOneLabelSwapped(ssn.SwitchingCost):
    """An actuator that is off carries the label of one that is on."""

    def pieces(self, v, step):
        found = super().pieces(v, step)
        labels = found["control"].copy()
        labels[int(np.argmax(labels == 1))] = 2
        return ssn.Pieces({"control": labels}, found.legend)


def coupled(cost):
    rng = np.random.default_rng(4)
    a = rng.standard_normal((30, 12))
    a *= np.repeat([1.0, 0.1], 6)  # the second half is hardly worth its price
    return ssn.CompositeProblem(smooth=ssn.LeastSquares(a, a @ np.ones(12)), cost=cost)


@pytest.mark.parametrize(
    ("right", "wrong"),
    [
        (ssn.GroupSparseCost, GroupWithOneLabelSwapped), (ssn.SwitchingCost, SwitchingWithOneLabelSwapped),
    ],
)  # fmt: skip
def test_labels_of_coupled_components_are_checked(right, wrong):
    """The derivative is no diagonal there: rows of zeros are told from others."""
    given = {"groups": np.repeat(np.arange(4), 3)} if right is ssn.GroupSparseCost else {"shape": (4, 3)}
    solution = ssn.solve(coupled(right(2.0, **given))).require()
    sizes = solution.pieces.sizes()["control"]
    assert 0 < sizes["zero" if right is ssn.GroupSparseCost else "off"] < 12
    for kind, names in ((right, set()), (wrong, {"pieces"})):
        checks = check_derivative(coupled(kind(2.0, **given)), solution.x)
        assert {c.name for c in checks} >= {"pieces"}
        assert cases.names(checks) == names, [c for c in checks if not c.holds]
