"""CountCost and PowerCost: closed forms, jumps, smoothing away from them, and problems solved from several starts."""

import itertools

import numpy as np
import pytest

import ssn

POWERS = [0.5, 2.0 / 3.0, 0.1, 0.35, 0.8, 0.99]


def parts(power, beta, lower=-np.inf, upper=np.inf):
    return ssn.CountCost(beta, lower, upper) if power == 0 else ssn.PowerCost(beta, power, lower, upper)


def test_counting_by_hand():
    cost = ssn.CountCost(2.0)  # step 1: jump at sqrt(2 * 2) = 2
    v = np.array([2.0, 2.0 + 1e-12, -2.5, 1.0, 0.0])
    np.testing.assert_array_equal(cost.prox(v, 1.0), [0.0, 2.0 + 1e-12, -2.5, 0.0, 0.0])  # at the jump: zero
    np.testing.assert_array_equal(cost.prox_derivative(v, 1.0).diagonal, [0, 1, 1, 0, 0])
    np.testing.assert_allclose(cost.margins(v, 1.0), [0, 0, 0.5, 1, 2], atol=2e-12)
    assert cost.value(v) == 8.0
    assert cost.value(v, np.array([1.0, 10.0, 100.0, 1000.0, 5.0])) == 2222.0
    # a bound nearer than the jump moves it to 2/1 + 1/2
    bounded = ssn.CountCost(2.0, -1.0, 3.0)
    v = np.array([2.1, 3.5, -2.4, -2.5, -2.6])
    np.testing.assert_array_equal(bounded.prox(v, 1.0), [2.1, 3.0, 0.0, 0.0, -1.0])
    assert bounded.pieces(v, 1.0)["control"].tolist() == [3, 4, 2, 2, 0]
    assert ssn.CountCost(2.0, 0.0, 0.0).prox(np.array([50.0, -50.0]), 1.0).tolist() == [0.0, 0.0]


def test_the_jump_of_the_square_root_in_closed_form():
    """Step beta = c: the jump is at 3/2 c^(2/3), to c^(2/3); there the derivative is 4/3."""
    c = 0.8
    cost = ssn.PowerCost(0.4, 0.5)
    jump = 1.5 * c ** (2.0 / 3.0)
    v = np.array([jump * (1 - 1e-12), jump * (1 + 1e-12), -jump * (1 + 1e-12)])
    np.testing.assert_allclose(cost.prox(v, 2.0), [0.0, c ** (2 / 3), -(c ** (2 / 3))], rtol=1e-10)
    np.testing.assert_allclose(cost.prox_derivative(v, 2.0).diagonal, [0.0, 4 / 3, 4 / 3], rtol=1e-9)


def test_the_jump_of_the_two_thirds_power_in_closed_form():
    """At 2 (2 c / 3)^(3/4), to half of it; there the derivative is 3/2."""
    c = 0.8
    cost = ssn.PowerCost(0.8, 2.0 / 3.0)
    jump = 2.0 * (2.0 * c / 3.0) ** 0.75
    v = np.array([jump * (1 - 1e-12), jump * (1 + 1e-12)])
    np.testing.assert_allclose(cost.prox(v, 1.0), [0.0, 0.5 * jump], rtol=1e-10)
    np.testing.assert_allclose(cost.prox_derivative(v, 1.0).diagonal, [0.0, 1.5], rtol=1e-9)


@pytest.mark.parametrize("power", POWERS)
def test_closed_form_and_iteration_are_stationary(power):
    cost = ssn.PowerCost(1.3, power)
    jump = cost._jump(np.asarray(np.inf), 0.7)
    v = jump * np.concatenate([1.0 + np.logspace(-10, 0, 40), np.logspace(0.5, 8, 40)])
    u = cost.prox(v, 0.7)
    residual = u + 0.7 * 1.3 * power * u ** (power - 1.0) - v
    assert (np.abs(residual) <= 4e-15 * v).all()
    slopes = cost.prox_derivative(v, 0.7).diagonal
    assert (slopes > 1.0 - 1e-15).all() and (slopes <= 1.0 / (1.0 - power / 2.0) + 1e-9).all()


def test_closed_forms_agree_with_the_iteration():
    v = np.linspace(-9, 9, 4001)
    for power in (0.5, 2.0 / 3.0):
        other = ssn.PowerCost(1.0, power * (1 + 1e-14))  # not recognised: iterated
        assert other.power != power
        np.testing.assert_allclose(ssn.PowerCost(1.0, power).prox(v, 1.0), other.prox(v, 1.0), atol=1e-11)


@pytest.mark.parametrize("power", [0.0, *POWERS])
def test_brute_force_with_and_without_bounds(power):
    """No point of a fine grid is better, and the objective at the proximal point is as stated."""
    rng = np.random.default_rng(1)
    grid = np.linspace(-7, 7, 28001)
    for lower, upper, beta in itertools.product((-np.inf, -0.7, 0.0), (np.inf, 2.0, 0.3), (0.0, 0.4, 2.0)):
        cost = parts(power, beta, lower, upper)
        allowed = np.append(grid[(grid >= lower) & (grid <= upper)], 0.0)
        for v, step in zip(rng.uniform(-6, 6, 12), rng.uniform(0.2, 3, 12), strict=True):
            u = cost.prox(np.array([v]), step)[0]
            prices = np.where(allowed != 0, np.abs(allowed) ** power, 0.0)
            best = (step * beta * prices + 0.5 * (allowed - v) ** 2).min()
            assert step * cost.value(np.array([u])) + 0.5 * (u - v) ** 2 <= best + 1e-12


def test_the_power_tends_to_the_count():
    v = np.linspace(-5, 5, 997)
    count = ssn.CountCost(1.0)
    away = count.margins(v, 1.0) > 0.02
    np.testing.assert_allclose(
        ssn.PowerCost(1.0, 1e-4).prox(v, 1.0)[away], count.prox(v, 1.0)[away], atol=1e-3
    )


@pytest.mark.parametrize("power", [0.0, 0.5, 2.0 / 3.0, 0.35])
@pytest.mark.parametrize(("lower", "upper"), [(-np.inf, np.inf), (-0.6, 2.5), (0.0, np.inf), (-1.0, 0.0)])
def test_smoothed_map(power, lower, upper):
    """Tends to the map away from its jumps, with its own derivative, smooth everywhere (zero included)."""
    cost = parts(power, 0.9, lower, upper)
    v = np.linspace(-6, 6, 481)
    away = cost.margins(v, 0.8) > 0.1
    exact = cost.prox(v, 0.8)
    for eps in (1e-2, 1e-3, 1e-5):
        error = np.abs(cost.smoothed_prox(v, 0.8, eps) - exact)
        assert error[away].max() <= 3.0 * eps
    h = 1e-5
    for eps in (0.5, 0.1):
        right = (cost.smoothed_prox(v + h, 0.8, eps) - cost.smoothed_prox(v, 0.8, eps)) / h
        left = (cost.smoothed_prox(v, 0.8, eps) - cost.smoothed_prox(v - h, 0.8, eps)) / h
        slope = cost.smoothed_prox_derivative(v, 0.8, eps).diagonal
        np.testing.assert_allclose(right, left, atol=2e-3)
        np.testing.assert_allclose(slope, 0.5 * (right + left), atol=1e-6)


@pytest.mark.parametrize("power", [0.0, 0.5, 0.35])
def test_multipliers(power):
    cost = parts(power, 0.5, -1.0, 1.0)
    v = np.array([0.2, 0.9, -0.95, 4.0, -5.0])
    u = cost.prox(v, 0.4)
    xi = (v - u) / 0.4
    found = cost.multipliers(u, xi)
    np.testing.assert_allclose(found["sparsity"] + found["bounds"], xi, atol=1e-12)
    assert found["bounds"][3] > 0 > found["bounds"][4]
    np.testing.assert_allclose(found["bounds"][:3], 0.0, atol=1e-12)
    derivative = 0.5 * power * np.abs(u[1:]) ** (power - 1.0) * np.sign(u[1:]) if power else np.zeros(4)
    np.testing.assert_allclose(found["sparsity"][1:], derivative)


def problem(seed, cost, rows=30, n=8):
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((rows, n))
    x = np.where(np.arange(n) < 3, 2.0, 0.0) * rng.choice([-1, 1], n)
    return ssn.CompositeProblem(
        smooth=ssn.LeastSquares(a, a @ x + 0.3 * rng.standard_normal(rows)), cost=cost
    )


def best_subset(p, beta):
    """The global minimum for CountCost: all supports."""
    a, b = p.part.A, p.part.b
    found = 0.5 * b @ b
    for size in range(1, a.shape[1] + 1):
        for rows in itertools.combinations(range(a.shape[1]), size):
            x, *_ = np.linalg.lstsq(a[:, rows], b, rcond=None)
            found = min(found, 0.5 * np.sum((a[:, rows] @ x - b) ** 2) + beta * size)
    return found


@pytest.mark.parametrize("seed", range(5))
def test_several_starts_find_the_best_subset(seed):
    """The pattern of the documentation; the global minimum by enumeration of all 2^8 supports."""
    p = problem(seed, ssn.CountCost(4.0))
    rng = np.random.default_rng(seed)
    starts = [np.zeros(8), np.linalg.lstsq(p.part.A, p.part.b, rcond=None)[0], *(rng.standard_normal((8, 8)))]
    best = min((ssn.solve(p, s).require() for s in starts), key=lambda found: found.objective)
    assert best.objective == pytest.approx(best_subset(p, 4.0), rel=1e-10)
    assert best.certificate is None


COSTS = [
    ssn.CountCost(4.0), ssn.CountCost(3.0, -1.5, 1.9), ssn.PowerCost(3.0), ssn.PowerCost(3.0, 2.0 / 3.0),
    ssn.PowerCost(2.0, 0.3, -1.5, 1.5),
]  # fmt: skip


@pytest.mark.parametrize("cost", COSTS, ids=repr)
@pytest.mark.parametrize("seed", range(4))
def test_what_is_returned_is_a_fixed_point_no_worse_than_the_start(cost, seed):
    p = problem(seed, cost)
    rng = np.random.default_rng(10 + seed)
    for start in (np.zeros(8), cost.prox(3.0 * rng.standard_normal(8), 1e-300)):
        solution = ssn.solve(p, start).require()
        step = p.natural_step()
        moved = cost.prox(solution.x - step * p.smooth(solution.x)[1], step)
        np.testing.assert_allclose(moved, solution.x, atol=1e-8 * (1 + np.abs(solution.x).max()))
        assert solution.objective <= p.objective(start) + 1e-12 * abs(solution.objective)
        assert solution.certificate is None
        assert len(solution.steps) <= 30


@pytest.mark.parametrize("cost", COSTS, ids=repr)
def test_the_objective_falls_from_step_to_step(cost):
    """At the proximal gradient points of the iterates."""
    p = problem(7, cost, rows=12, n=20)
    rng = np.random.default_rng(0)
    for start in (np.zeros(20), 2.0 * rng.standard_normal(20)):
        iteration = ssn.Iteration(p, start)
        objectives = []
        for _ in range(40):
            step = p.natural_step()
            z = cost.prox(iteration.x - step * p.smooth(iteration.x)[1], step)
            objectives.append(p.objective(z))
            if iteration.finished or iteration.step() is None:
                break
        assert len(objectives) >= 2
        assert (np.diff(objectives) <= 1e-12 * abs(objectives[-1])).all()


def test_state_bounds_refuse_them_by_name():
    with pytest.raises(ssn.InputError, match="CountCost is not convex: state bounds need a convex cost"):
        ssn.solve(
            ssn.ControlProblem(
                state=ssn.SteadyState(np.eye(3)), state_mass=np.ones(3), target=np.ones(3), control_weight=1.0,
                cost=ssn.CountCost(1.0), state_upper=0.5,
            )
        )  # fmt: skip


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.CountCost(-1.0), "beta must not be negative"),
        (lambda: ssn.CountCost([1.0, np.nan]), r"beta\[1\] is nan"),
        (lambda: ssn.CountCost(1.0, 0.5, 1.0), "lower <= 0 <= upper"),
        (lambda: ssn.CountCost([1.0, 1.0], lower=[-1.0, -1.0, -1.0]), "do not broadcast"),
        (lambda: ssn.CountCost([[1.0]]), r"numbers or arrays \(n,\)"),
        (lambda: ssn.CountCost([1.0, 2.0]).check_size(3), "not 3"),
        (lambda: ssn.PowerCost(1.0, 0.0), "power must be positive"),
        (lambda: ssn.PowerCost(1.0, 1.0), "take SparseCost"),
        (lambda: ssn.PowerCost(1.0, 0.5, -1.0, -0.5), "PowerCost needs bounds"),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()


@pytest.mark.parametrize("power", [0.0, 0.5, 2.0 / 3.0, 0.3])
@pytest.mark.parametrize(
    ("lower", "upper", "alpha"), [(-np.inf, np.inf, 0.8), (-0.5, 2.0, 0.8), (0.0, 0.7, 0.0), (-3.0, 3.0, 5.0)]
)
def test_the_envelope_is_the_lower_convex_hull(power, lower, upper, alpha):
    """Against the hull of the graph on a fine grid, by chords."""
    cost = parts(power, 0.9, lower, upper)
    envelope = ssn.costs.ConvexEnvelope(cost, alpha)
    grid = np.linspace(max(lower, -4.0), min(upper, 4.0), 801)
    grid = np.unique(np.append(grid, 0.0))
    h = np.where(grid != 0, 0.9 * np.abs(grid) ** power, 0.0) + 0.5 * alpha * grid**2
    hull = []
    for point in zip(grid, h, strict=True):
        while len(hull) > 1:
            (a, fa), (b, fb) = hull[-2:]
            if (fb - fa) * (point[0] - a) < (point[1] - fa) * (b - a):
                break
            hull.pop()
        hull.append(point)
    x, fx = np.transpose(hull)
    expected = np.interp(grid, x, fx)
    found = envelope.terms(grid)
    np.testing.assert_allclose(
        found, expected, atol=3e-3
    )  # the hull of a grid lies above, near the tangent point
    assert (found <= expected + 1e-12).all() and (found <= h + 1e-12).all()
    above, below = envelope.tangent_sizes
    touching = np.clip(np.array([float(above), -float(below)]), -10, 10)
    direct = np.where(touching != 0, 0.9 * np.abs(touching) ** power, 0.0) + 0.5 * alpha * touching**2
    np.testing.assert_allclose(envelope.terms(touching), direct, rtol=1e-12)


def test_the_envelope_of_a_count_in_closed_form():
    """Sqrt(2 alpha beta) |u| up to sqrt(2 beta / alpha), then beta + alpha/2 u^2."""
    envelope = ssn.costs.ConvexEnvelope(ssn.CountCost(2.0), 4.0)
    assert [float(t) for t in envelope.tangent_sizes] == [1.0, 1.0]
    np.testing.assert_allclose(envelope.terms(np.array([0.0, -0.5, 1.0, 2.0])), [0.0, 2.0, 4.0, 10.0])
    with pytest.raises(ssn.InputError, match="CountCost or PowerCost"):
        ssn.costs.ConvexEnvelope(ssn.SparseCost(1.0), 1.0)
