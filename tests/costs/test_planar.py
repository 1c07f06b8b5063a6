"""PlanarMultiBangCost: regions in closed form, the envelope as a mean of settings, cells on circles."""

import numpy as np
import pytest
from scipy.optimize import linprog

import ssn
from ssn.costs.derivative import modes

SQUARE = np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
TURNS = 2 * np.pi * np.arange(6) / 6 + 0.3
CIRCLE = np.stack([np.cos(TURNS), np.sin(TURNS)], axis=1)
ROUND = np.concatenate([[[0.0, 0.0]], 1.5 * CIRCLE])


def grid(width, number):
    line = np.linspace(-width, width, number)
    return np.stack(np.meshgrid(line, line)).reshape(2, -1)


def test_the_staircase_takes_the_nearest_setting():
    rng = np.random.default_rng(0)
    settings, y = rng.uniform(-2, 2, (7, 2)), rng.uniform(-3, 3, (2, 500))
    cost = ssn.PlanarMultiBangCost(settings, 0.4)
    nearest = settings[np.argmin(((y.T[:, None] / 0.4 - settings) ** 2).sum(axis=2), axis=1)].T
    np.testing.assert_array_equal(cost.staircase(y.ravel()).reshape(2, -1), nearest)
    attained = (nearest * y).sum() - cost.value(nearest.ravel())
    assert cost.conjugate_value(y.ravel()) == pytest.approx(attained)


def test_zero_and_a_circle_of_settings():
    """Off where <p, e_k> <= alpha r/2 for all directions e_k, else the direction nearest to that of p.

    Settings 0 and r e_k: C. Clason, C. Tameling and B. Wirth, SICON 56 (2018), from memory; recomputed here.
    """
    alpha, r = 0.8, 1.5
    cost = ssn.PlanarMultiBangCost(ROUND, alpha)
    p = grid(2.0, 60)
    along = CIRCLE @ p
    expected = np.where(along.max(axis=0) <= 0.5 * alpha * r, 0.0, r * CIRCLE[along.argmax(axis=0)].T)
    np.testing.assert_array_equal(cost.staircase(p.ravel()).reshape(2, -1), expected)
    # off-setting regions of the regularised staircase shrink with gamma: its limit is the staircase
    apart = np.abs(cost.regularised_staircase(p.ravel(), 1e-9) - expected.ravel()).reshape(2, -1).max(axis=0)
    second = np.sort(along, axis=0)[-2]
    clear = (np.abs(along.max(axis=0) - 0.5 * alpha * r) > 1e-6) & (
        (along.max(axis=0) - second > 1e-6) | (along.max(axis=0) < 0.5 * alpha * r)
    )
    assert clear.sum() > 3000
    assert apart[clear].max() <= 1e-15


@pytest.mark.parametrize("gamma", [1.0, 0.1])
def test_ramp_between_zero_and_one_direction(gamma):
    """Along a direction e_k the regularised staircase is that of the settings 0 and r on the line."""
    cost, line = ssn.PlanarMultiBangCost(ROUND, 0.8), ssn.MultiBangCost([0.0, 1.5], 0.8)
    t = np.linspace(0, 3, 50)
    there = cost.regularised_staircase(np.outer(CIRCLE[2], t).ravel(), gamma).reshape(2, -1)
    np.testing.assert_allclose(there, np.outer(CIRCLE[2], line.regularised_staircase(t, gamma)), atol=1e-14)


@pytest.mark.parametrize("settings", [SQUARE, ROUND, np.random.default_rng(5).uniform(-2, 2, (8, 2))])
def test_value_is_the_least_mean(settings):
    """The envelope is the least mean of alpha/2 |u_i|^2 over all mixtures of settings with mean u."""
    cost = ssn.PlanarMultiBangCost(settings, 1.3)
    rng = np.random.default_rng(1)
    height = 0.65 * (settings**2).sum(axis=1)
    for _ in range(20):
        u = rng.dirichlet(np.ones(len(settings))) @ settings
        rows = np.vstack([settings.T, np.ones(len(settings))])
        found = linprog(height, A_eq=rows, b_eq=np.append(u, 1.0))
        assert cost.value(u) == pytest.approx(found.fun, rel=1e-9)
    np.testing.assert_allclose(cost.terms(settings.T.ravel()), height, atol=1e-13)
    assert cost.value(10.0 * settings[1]) == np.inf


def test_settings_on_a_circle_make_one_cell():
    legend = ssn.PlanarMultiBangCost(SQUARE, 1.0).pieces(np.zeros(2), 1.0).legend["control"]
    assert [word for word in legend if word.startswith("within")] == ["within 1, 2, 3, 4"]
    assert sum(word.startswith("between") for word in legend) == 4
    nine = np.stack(np.meshgrid([0.0, 1.0, 2.0], [0.0, 1.0, 2.0])).reshape(2, -1).T
    legend = ssn.PlanarMultiBangCost(nine, 1.0).pieces(np.zeros(2), 1.0).legend["control"]
    assert [sum(word.startswith(kind) for word in legend) for kind in ("setting", "between", "within")] == [
        9,
        12,
        4,
    ]


def test_labels_and_shares():
    cost = ssn.PlanarMultiBangCost(SQUARE, 1.0)
    v = np.array([[0.2, 0.2, -3.0, 3.0], [0.1, -3.0, 0.0, 3.0]]).ravel()
    u = cost.prox(v, 1.0)
    np.testing.assert_allclose(u.reshape(2, -1), [[0.2, 0.2, -1.0, 1.0], [0.1, -1.0, 0.0, 1.0]])
    sizes = cost.pieces(v, 1.0).sizes()["control"]
    assert {k: n for k, n in sizes.items() if n} == {
        "setting 3": 2, "between 1 and 2": 2, "between 1 and 4": 2, "within 1, 2, 3, 4": 2
    }  # fmt: skip
    assert cost.share_between(u) == pytest.approx(0.75)
    assert cost.share_between(u, np.tile([1.0, 1.0, 1.0, 5.0], 2)) == pytest.approx(3 / 8)


def test_modes_make_up_the_derivative():
    rng = np.random.default_rng(2)
    cost = ssn.PlanarMultiBangCost(rng.uniform(-1, 1, (6, 2)), 0.5)
    v, weights = rng.uniform(-3, 3, 40), np.tile(rng.uniform(0.5, 2, 20), 2)
    derivative = cost.prox_derivative(v, 0.7)
    basis, d = modes(derivative, weights)
    kinds = {np.round(derivative.apply(np.eye(40))[[k, 20 + k]][:, [k, 20 + k]].trace()) for k in range(20)}
    assert kinds == {0.0, 1.0, 2.0}
    np.testing.assert_allclose(basis.T @ (weights[:, None] * basis.toarray()), np.eye(d.size), atol=1e-14)
    made = basis.toarray() @ np.diag(d) @ basis.T * weights
    np.testing.assert_allclose(made, derivative.apply(np.eye(40)), atol=1e-14)


def test_two_controls_of_a_state():
    """Both components act on one state; the target is out of reach, so that every point has a listed pair."""
    rng = np.random.default_rng(4)
    n, s = 30, rng.standard_normal((20, 60)) / 10
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(np.eye(20)), target=5 * rng.standard_normal(20), cost=ssn.PlanarMultiBangCost(ROUND, 0.2),
        control_weight=0.0, control_operator=s,
    )  # fmt: skip
    solution = ssn.solve(problem).require()
    assert solution.accuracy <= 1e-12
    p = problem.adjoint(problem.target - problem.forward(solution.x))
    on = np.flatnonzero(np.abs(solution.x - problem.cost.staircase(p)).reshape(2, -1).max(axis=0) < 1e-12)
    assert on.size >= n - 20
    assert problem.cost.share_between(solution.x, tolerance=1e-9) <= 1 - on.size / n + 1e-12


@pytest.mark.parametrize(
    ("settings", "alpha", "message"),
    [
        ([[0, 0], [1, 1]], 1.0, "d >= 3"),
        ([[0, 0], [1, 1], [2, 2]], 1.0, "on one line"),
        ([[0, 0], [1, 1], [0, 0]], 1.0, "settings.0. = settings.2."),
        (SQUARE, -1.0, "alpha must not be negative"),
    ],
)
def test_bad_input(settings, alpha, message):
    with pytest.raises(ssn.InputError, match=message):
        ssn.PlanarMultiBangCost(settings, alpha)


def test_pairs_are_asked_for():
    cost = ssn.PlanarMultiBangCost(SQUARE, 1.0)
    with pytest.raises(ssn.InputError, match="even number, not 3"):
        cost.check_size(3)
    with pytest.raises(ssn.InputError, match=r"point 1 have weights 2.0 and 1.0"):
        cost.value(np.zeros(4), np.array([1.0, 2.0, 1.0, 1.0]))
