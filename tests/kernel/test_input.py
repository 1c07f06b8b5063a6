"""Public entry points name what is wrong, at once, and modify nothing they were given."""

import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from tests.kernel.examples import Contact, control

K = np.diag([2.0, 2.0, 2.0])
ONES = np.ones(3)
NAN = np.array([1.0, np.nan, 1.0])


def steady(**changes):
    arguments = {
        "state": ssn.SteadyState(K),
        "target": ONES,
        "cost": ssn.SparseCost(0.1),
        "control_weight": 1.0,
        "control_operator": np.eye(3),
    }
    return ssn.ControlProblem(**(arguments | changes))


def composite(**changes):
    return ssn.CompositeProblem(**({"smooth": ssn.Quadratic(K, ONES), "cost": ssn.SparseCost(0.1)} | changes))


class Gradient:
    """A user's smooth part."""

    def __init__(self, gradient=ONES, hessian=K):
        self.g, self.h = gradient, hessian

    def value(self, u):
        return 0.0

    def gradient(self, u):
        return self.g

    def hessian(self, u):
        return self.h


CASES = [
    (lambda: ssn.Quadratic(np.ones((2, 3)), ONES), r"H must be square"),
    (lambda: ssn.Quadratic(K, np.ones(2)), r"b has shape \(2,\), expected \(3,\)"),
    (lambda: ssn.Quadratic(K, NAN), r"b\[1\] is nan"),
    (lambda: ssn.Quadratic(np.triu(np.ones((3, 3))), ONES), r"H must be symmetric"),
    (lambda: ssn.Quadratic(np.where(np.eye(3, k=1), np.nan, K), ONES), r"H\[0, 1\] is nan"),
    (lambda: ssn.LeastSquares(np.ones((4, 3)), ONES), r"b has shape \(3,\), expected \(4,\)"),
    (lambda: ssn.LeastSquares(np.full((3, 3), np.inf), ONES), r"A\[0, 0\] is inf"),
    (lambda: ssn.LeastSquares(K, ONES, weights=[1.0, 0.0, 1.0]), r"weights\[1\] is 0\.0.*positive"),
    (lambda: ssn.LeastSquares(K, ONES, weights=np.ones(2)), r"weights has shape \(2,\), expected \(3,\)"),
    (lambda: ssn.Logistic(K, [1, 0, 1]), r"labels\[1\] is 0"),
    (lambda: ssn.Logistic(K, [1, -1]), r"labels has shape \(2,\)"),
    (lambda: ssn.AffineMap(np.ones((2, 3)), ONES), r"M must be square"),
    (lambda: ssn.AffineMap(K, NAN), r"q\[1\] is nan"),
    (lambda: ssn.SmoothMap(1.0, 2.0), r"SmoothMap needs two functions"),
    (lambda: ssn.ComplementarityProblem(3.0), r"F must be"),
    (
        lambda: ssn.ComplementarityProblem(ssn.AffineMap(K, ONES), ONES, [2.0, 0.0, 2.0]),
        r"lower 1\.0 > upper 0\.0 at index 1",
    ),
    (lambda: ssn.ComplementarityProblem(ssn.AffineMap(K, ONES), NAN), r"lower\[1\] is nan"),
    (lambda: ssn.ComplementarityProblem(ssn.AffineMap(K, ONES), np.zeros(4)), r"number of unknowns"),
    (lambda: ssn.ComplementarityProblem(ssn.SmoothMap(np.sin, np.diag)), r"number of unknowns"),
    (lambda: ssn.ComplementarityProblem(ssn.AffineMap(K, ONES), np.zeros((3, 1))), r"lower \(3, 1\)"),
    (
        lambda: ssn.ComplementarityProblem(ssn.AffineMap(K, ONES), magnitude=-1.0),
        r"magnitude must not be negative",
    ),
    (lambda: composite(smooth=3.0), r"smooth must have value, gradient and hessian, got float"),
    (lambda: composite(cost=3.0), r"cost must have.*got float"),
    (lambda: composite(cost=ssn.SparseCost(np.ones(4))), r"shape \(4,\) for 3 unknowns"),
    (lambda: composite(weights=[1.0, -1.0, 1.0]), r"weights\[1\] is -1\.0"),
    (lambda: composite(weights=NAN), r"weights\[1\] is nan"),
    (lambda: composite(size=4), r"size is 4"),
    (lambda: composite(smooth=Gradient()), r"give size"),
    (
        lambda: ssn.solve(composite(smooth=Gradient(np.ones(2)), size=3)),
        r"gradient has shape \(2,\), expected \(3,\)",
    ),
    (lambda: ssn.solve(composite(smooth=Gradient(hessian=np.eye(2)), size=3)), r"Hessian has shape \(2, 2\)"),
    (lambda: ssn.SteadyState(np.ones((2, 3))), r"E must be square"),
    (lambda: ssn.SteadyState(K, solver="magic"), r"solver must be"),
    (lambda: ssn.SteadyState(sp.csr_array([[1.0, np.nan], [0.0, 1.0]])), r"E\[0, 1\] is nan"),
    (lambda: ssn.solve(steady(state=ssn.SteadyState(np.ones((3, 3))))), r"state operator E is singular"),
    (lambda: steady(state=K), r"state must be a state model"),
    (lambda: steady(target=np.ones(4)), r"target has shape \(4,\), expected \(3,\)"),
    (lambda: steady(target=NAN), r"target\[1\] is nan"),
    (lambda: steady(control_weight=-1.0), r"control_weight must not be negative"),
    (lambda: steady(control_weight=np.nan), r"control_weight is nan"),
    (lambda: steady(control_weight="big"), r"control_weight must be a number"),
    (lambda: steady(control_operator=np.eye(4)), r"control_operator has shape 4x4"),
    (lambda: steady(observation=np.eye(4)), r"observation has shape 4x4"),
    (lambda: steady(source=np.ones(2)), r"source has shape \(2,\)"),
    (lambda: steady(source=NAN), r"source\[1\] is nan"),
    (lambda: steady(control_mass=[1.0, 0.0, 1.0]), r"control_mass\[1\] is 0\.0"),
    (lambda: steady(observation_mass=-ONES), r"observation_mass\[0\] is -1\.0"),
    (
        lambda: steady(observation_mass=-sp.eye_array(3)),
        r"observation_mass has a nonpositive diagonal entry at 0",
    ),
    (lambda: steady(observation_mass=np.ones(2)), r"observation_mass has shape \(2,\)"),
    (lambda: steady(control_operator=None), r"control_operator"),
    (lambda: steady(state_mass=ONES, observation_mass=ONES), r"state_mass has no effect"),
    (lambda: steady(cost=ssn.Bounds(np.zeros(2), 1.0)), r"shape \(2,\) for 3 unknowns"),
    (lambda: steady(cost=None), r"cost must have"),
    (lambda: ssn.solve(composite(), np.ones(4)), r"start has shape \(4,\), expected \(3,\)"),
    (lambda: ssn.solve(composite(), NAN), r"start\[1\] is nan"),
    (lambda: ssn.solve(composite(), ["a", "b", "c"]), r"start must be an array"),
    (lambda: ssn.solve(steady(), np.ones((3, 1))), r"start has shape \(3, 1\)"),
    (lambda: ssn.solve(composite(), tolerance=0.0), r"tolerance must be positive"),
    (lambda: ssn.solve(composite(), tolerance=np.nan), r"tolerance is nan"),
    (lambda: ssn.solve(composite(), max_steps=-1), r"max_steps must be at least 0"),
    (lambda: ssn.solve(composite(), max_steps=2.5), r"max_steps must be a whole number"),
    (lambda: ssn.solve(composite(), globalization="magic"), r"globalization must be"),
    (lambda: ssn.solve(composite(), globalization=3), r"globalization"),
    (lambda: ssn.solve(composite(), globalization="dual"), r"globalization='dual' needs"),
    (lambda: ssn.solve(Contact(), np.zeros(40), globalization="envelope"), r"globalization='envelope' needs"),
    (lambda: ssn.solve(composite(), linear="magic"), r"linear must be"),
    (lambda: ssn.solve(composite(), linear="subspace"), r"linear='subspace' does not fit"),
    (lambda: ssn.solve(composite(), callback=3), r"callback must be callable"),
    (lambda: ssn.solve(3.0), r"cannot solve a float"),
    (lambda: ssn.solve(Contact()), r"give start"),
    (lambda: ssn.solve(Contact(), np.zeros((40, 1))), r"start must have 1 dimension"),
    (lambda: ssn.proximal_gradient(composite(), np.ones(4)), r"start has shape"),
    (lambda: ssn.proximal_gradient(composite(), tolerance=-1.0), r"tolerance must be positive"),
    (lambda: ssn.proximal_gradient(composite(), max_iterations=0), r"max_iterations must be at least 1"),
    (lambda: ssn.proximal_gradient(Contact()), r"proximal_gradient needs an objective"),
]


@pytest.mark.parametrize(("call", "message"), CASES, ids=[message for _, message in CASES])
def test_named(call, message):
    with pytest.raises(ssn.InputError, match=message):
        call()


class Wrong(Contact):
    """An equation that returns something unusable."""

    def __init__(self, residual=None, linearization=None, **members):
        super().__init__()
        self.bad_residual, self.bad_linearization = residual, linearization
        vars(self).update(members)

    def residual(self, u):
        return super().residual(u) if self.bad_residual is None else self.bad_residual

    def linearize(self, u):
        return super().linearize(u) if self.bad_linearization is None else self.bad_linearization


FORTY = np.ones(40)


@pytest.mark.parametrize(
    ("equation", "message"),
    [
        (Wrong(residual=np.ones(39)), r"residual has shape \(39,\), expected \(40,\)"),
        (Wrong(residual=np.ones((40, 1))), r"residual has shape \(40, 1\)"),
        (Wrong(residual=1.0), r"residual has shape \(\)"),
        (Wrong(linearization=ssn.Linearization(FORTY, np.eye(39))), r"derivative has shape \(39, 39\)"),
        (Wrong(linearization=ssn.Linearization(FORTY, FORTY)), r"derivative has shape \(40,\)"),
        (Wrong(linearization=ssn.Linearization(FORTY, None)), r"derivative has shape None"),
        (Wrong(linearization=np.eye(40)), r"linearize\(x\) must return a ssn.Linearization"),
        (Wrong(linearization=(FORTY, np.eye(40))), r"linearize\(x\) must return a ssn.Linearization"),
        (Wrong(scale=0.0), r"scale must be positive"),
        (Wrong(scale=np.ones(3)), r"scale must be positive.*\(3,\)"),
    ],
)
def test_a_users_equation(equation, message):
    with pytest.raises(ssn.InputError, match=message):
        ssn.solve(equation, np.zeros(40))


@pytest.mark.parametrize(
    ("value", "derivative", "message"),
    [
        (lambda x: np.ones(2), lambda x: K, r"F\(x\) has shape \(2,\), expected \(3,\)"),
        (lambda x: ONES, lambda x: np.eye(2), r"F'\(x\) has shape \(2, 2\)"),
        (lambda x: ONES, lambda x: None, r"F'\(x\) has shape None"),
    ],
)
def test_a_users_map(value, derivative, message):
    with pytest.raises(ssn.InputError, match=message):
        ssn.solve(ssn.ComplementarityProblem(ssn.SmoothMap(value, derivative), size=3))


def test_pieces_must_be_labels():
    bad = ssn.Linearization(FORTY, np.eye(40), {"contact": np.full(40, 0.5)})
    with pytest.raises((TypeError, ssn.InputError), match="contact"):
        ssn.solve(Wrong(linearization=bad), np.zeros(40))


def test_a_hessian_with_nan_is_no_crash():
    class Broken(Gradient):
        def hessian(self, u):
            return np.full((3, 3), np.nan)

    try:
        solution = ssn.solve(composite(smooth=Broken(), size=3))
    except ssn.InputError as error:
        assert "Hessian" in str(error)
    else:
        assert not solution.converged


def test_a_gradient_with_nan_is_not_converged():
    solution = ssn.solve(composite(smooth=Gradient(NAN), size=3))
    assert solution.outcome is ssn.Outcome.NOT_FINITE


# nothing is modified


def frozen(array):
    array = np.array(array, dtype=float)
    array.setflags(write=False)
    return array


def test_control_input_is_not_modified():
    rng = np.random.default_rng(4)
    n = 30
    e = sp.csc_matrix(
        sp.diags_array([-np.ones(n - 1), 2.1 * np.ones(n), -0.9 * np.ones(n - 1)], offsets=[-1, 0, 1])
    )
    b, c = sp.coo_array(rng.standard_normal((n, 7))), rng.standard_normal((9, n))
    arrays = {
        "target": frozen(rng.standard_normal(9)),
        "source": frozen(rng.standard_normal(n)),
        "control_mass": frozen(rng.uniform(1, 2, 7)),
        "observation_mass": frozen(rng.uniform(1, 2, 9)),
    }
    lower, upper, start = frozen(-np.ones(7)), frozen(np.ones(7)), frozen(rng.standard_normal(7))
    c.setflags(write=False)
    before = [e.data.tobytes(), e.indices.tobytes(), b.data.tobytes(), c.tobytes()]
    before += [a.tobytes() for a in (*arrays.values(), lower, upper, start)]
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(e), control_operator=b, observation=c, control_weight=1.0,
        cost=ssn.SparseCost(0.01, lower, upper), **arrays,
    )  # fmt: skip
    solution = ssn.solve(problem, start).require()
    ssn.proximal_gradient(problem, start, max_iterations=20)
    after = [e.data.tobytes(), e.indices.tobytes(), b.data.tobytes(), c.tobytes()]
    after += [a.tobytes() for a in (*arrays.values(), lower, upper, start)]
    assert before == after
    assert not any(np.shares_memory(solution.x, a) for a in (lower, upper, start))
    again = ssn.solve(problem, start)
    np.testing.assert_array_equal(again.x, solution.x)


@pytest.mark.parametrize("kind", ["quadratic", "least squares", "logistic", "complementarity", "equation"])
def test_other_input_is_not_modified(kind):
    rng = np.random.default_rng(5)
    a = rng.standard_normal((12, 6))
    h, b, labels = (
        frozen(a.T @ a + np.eye(6)),
        frozen(rng.standard_normal(6)),
        frozen(np.sign(rng.standard_normal(12))),
    )
    rhs, start = frozen(rng.standard_normal(12)), frozen(0.1 * np.ones(6))
    a.setflags(write=False)
    cost = ssn.SparseCost(0.05, frozen(-np.ones(6)), frozen(np.ones(6)))
    if kind == "complementarity":
        problem = ssn.ComplementarityProblem(ssn.AffineMap(h, b), frozen(np.zeros(6)), frozen(np.ones(6)))
    elif kind == "equation":
        problem, start = Contact(), frozen(np.zeros(40))
    else:
        parts = {"quadratic": (ssn.Quadratic, h, b), "least squares": (ssn.LeastSquares, a, rhs)}
        make, *data = parts.get(kind, (ssn.Logistic, a, labels))
        problem = ssn.CompositeProblem(smooth=make(*data), cost=cost)
    kept = [x.tobytes() for x in (h, b, labels, rhs, start, a)]
    ssn.solve(problem, start).require()
    assert kept == [x.tobytes() for x in (h, b, labels, rhs, start, a)]


def test_later_changes_to_the_input_do_not_reach_the_problem():
    h, b = np.diag([1.0, 2.0]), np.ones(2)
    problem = ssn.CompositeProblem(smooth=ssn.Quadratic(h, b), cost=ssn.Bounds(-5.0, 5.0))
    h[:], b[:] = np.nan, np.nan
    np.testing.assert_allclose(ssn.solve(problem).require().x, [1.0, 0.5])


def test_a_user_who_writes_into_x_does_no_harm():
    class Scribbler(Contact):
        def residual(self, u):
            value = super().residual(u)
            u[:] = 1e9
            return value

        def linearize(self, u):
            value = super().linearize(u)
            u[:] = np.nan
            return value

    np.testing.assert_allclose(
        ssn.solve(Scribbler(), np.zeros(40)).require().x, ssn.solve(Contact(), np.zeros(40)).x, atol=1e-12
    )


def test_the_start_may_be_outside_the_bounds():
    problem = control()
    np.testing.assert_allclose(
        ssn.solve(problem, np.full(144, 1e3)).require().x, ssn.solve(problem).x, atol=1e-6
    )
