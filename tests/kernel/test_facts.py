"""Facts of the trade: what a practitioner expects of each cost. Common practice, no source, unless one is named.

Each problem is assembled here in one or two lines of plain NumPy, and the adjoint that decides is recomputed from the
returned control with a dense or sparse solve of its own.
"""

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st
from scipy.sparse.linalg import spsolve

import ssn


def line(points):
    """Points, mesh width and stiffness matrix of linear elements on (0, 1)."""
    h = 1.0 / (points + 1)
    ones = np.ones(points - 1)
    K = sp.diags_array([-ones, 2 * np.ones(points), -ones], offsets=[-1, 0, 1]) / h
    return np.arange(1, points + 1) * h, h, sp.csr_array(K)


def poisson(cost, alpha, target, points=63, patches=None):
    """-y'' = u on (0, 1), the control distributed or constant on patches."""
    x, h, K = line(points)
    size = points if patches is None else patches
    B = h * sp.eye_array(points, format="csr")
    mass = np.full(points, h)
    if patches is not None:
        where = np.minimum((x * patches).astype(int), patches - 1)
        B = sp.csr_array((np.full(points, h), (np.arange(points), where)), shape=(points, patches))
        mass = np.full(patches, 1.0 / patches)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(K), control_operator=B, target=target(x), control_weight=alpha, cost=cost,
        observation_mass=np.full(points, h), control_mass=mass,
    )  # fmt: skip
    assert problem.unknowns == size
    return problem, K.tocsc(), B, h, mass


def pulled_back(K, B, h, mass, target, u):
    """W^-1 B' p with K' p = h (z - y), K y = B u: by a solve of its own."""
    p = spsolve(sp.csc_array(K.T), h * (target - spsolve(K, B @ u)))
    return (B.T @ p) / mass


# a larger weight and the support


@given(st.integers(0, 10_000), st.floats(1.01, 20.0), st.booleans())
def test_with_a_separable_hessian_a_larger_weight_never_gives_a_larger_support(seed, factor, control):
    rng = np.random.default_rng(seed)
    n = 12
    curvature, b = rng.uniform(0.1, 3.0, n), rng.standard_normal(n)
    weight = 0.1 * np.abs(b).max()
    lower, upper = -rng.uniform(0, 2, n), rng.uniform(0, 2, n)

    def support(beta):
        cost = ssn.SparseCost(beta, lower, upper)
        if control:
            problem = ssn.ControlProblem(
                state=ssn.SteadyState(sp.diags_array(1.0 / np.sqrt(curvature)).tocsr()),
                control_operator=sp.eye_array(n, format="csr"), target=b, control_weight=0.05, cost=cost,
            )  # fmt: skip
        else:
            problem = ssn.CompositeProblem(
                smooth=ssn.Quadratic(sp.diags_array(curvature).tocsr(), b), cost=cost
            )
        return ssn.solve(problem).require().x != 0

    few, many = support(factor * weight), support(weight)
    assert not (few & ~many).any()


def test_without_a_separable_hessian_it_may():
    """Three unknowns of which one is there at a large weight and gone at a small one: the fact needs its premise."""
    rng = np.random.default_rng(0)
    found = False
    for _ in range(60):
        a, b = rng.standard_normal((4, 3)), rng.standard_normal(4)
        largest = np.abs(a.T @ b).max()
        supports = [
            ssn.solve(ssn.CompositeProblem(smooth=ssn.LeastSquares(a, b), cost=ssn.SparseCost(t * largest))).x
            != 0
            for t in (0.4, 0.1)
        ]
        found = found or bool((supports[0] & ~supports[1]).any())
    assert found


# where an L1 control is zero


@pytest.mark.parametrize("patches", [None, 7])
@pytest.mark.parametrize("bound", [np.inf, 15.0])
@pytest.mark.parametrize("alpha", [1e-3, 1e-6])
def test_an_l1_control_is_exactly_zero_where_the_adjoint_is_below_the_weight(patches, bound, alpha):
    def target(x):
        return np.sin(2 * np.pi * x) * np.exp(x) / 6

    beta = 2e-3
    problem, K, B, h, mass = poisson(ssn.SparseCost(beta, -bound, bound), alpha, target, patches=patches)
    u = ssn.solve(problem).require().x
    q = pulled_back(K, B, h, mass, problem.target, u)
    below, above = np.abs(q) < beta * (1 - 1e-6), np.abs(q) > beta * (1 + 1e-6)
    assert below.any() and above.any()
    assert (u[below] == 0.0).all()
    assert (u[above] != 0.0).all() and (np.sign(u[above]) == np.sign(q[above])).all()


@pytest.mark.parametrize("patches", [None, 7])
@pytest.mark.parametrize(("lower", "upper"), [(-np.inf, np.inf), (-3.0, 1.0), (0.0, 2.0)])
def test_an_l1_control_vanishes_from_the_largest_adjoint_of_zero_on(patches, lower, upper):
    def target(x):
        return 0.1 * np.sin(np.pi * x) - 0.3 * (x > 0.7)

    problem, K, B, h, mass = poisson(ssn.SparseCost(1.0, lower, upper), 1e-4, target, patches=patches)
    q = pulled_back(K, B, h, mass, problem.target, np.zeros(problem.unknowns))
    threshold = max(q.max() if upper > 0 else 0.0, (-q).max() if lower < 0 else 0.0)
    assert ssn.vanishing_weight(problem) == pytest.approx(threshold, rel=1e-10)
    for factor, zero in ((1 + 1e-8, True), (2.0, True), (1 - 1e-4, False)):
        u = ssn.solve(problem.with_cost(ssn.SparseCost(factor * threshold, lower, upper))).require().x
        assert (not u.any()) is zero


# one actuator at a time


def two_zones(weight, alpha):
    """A rod heated in two zones after a moving set point; also what the conditions need."""
    points, steps = 24, 60
    x, h, K = line(points)
    state = ssn.TimeDependentState(np.full(points, h), 0.1 * K, steps=steps, duration=1.0)
    zones = h * np.stack([(x > 0.05) & (x < 0.45), (x > 0.55) & (x < 0.95)], axis=1)
    t = state.times[1:, None]
    z = np.exp(-(((x - 0.3 - 0.4 * np.sin(3 * t) ** 2) / 0.15) ** 2)).ravel()
    problem = ssn.ControlProblem(
        state=state, target=z, control_operator=state.control_operator(zones), control_weight=alpha,
        observation_mass=state.observation_mass(), control_mass=state.control_mass(np.ones(2)),
        cost=ssn.SwitchingCost(weight, (steps, 2)),
    )  # fmt: skip
    return problem, (K, zones, h, steps, z)


def adjoint_of_zones(data, u):
    """B'p at each instant by implicit Euler forwards and backwards, one dense step matrix."""
    K, zones, h, steps, z = data
    tau = 1.0 / steps
    step = np.linalg.inv(h * np.eye(K.shape[0]) + tau * 0.1 * K.toarray())
    y, levels = np.zeros(K.shape[0]), []
    for k in range(steps):
        y = step @ (h * y + tau * zones @ u[k])
        levels.append(y)
    p, pulled = np.zeros(K.shape[0]), np.empty((steps, 2))
    for k in reversed(range(steps)):
        p = step.T @ (h * p + tau * h * (z.reshape(steps, -1)[k] - levels[k]))
        pulled[k] = zones.T @ p
    return pulled


@pytest.mark.parametrize("alpha", [1e-4, 1e-6])
def test_the_share_of_instants_with_one_actuator_on_grows_with_the_switching_weight(alpha):
    """And at every instant the two adjoints decide: alone where the smaller is at most b / (a + b) of the larger.

    It is the optimality condition of a/2 (u1^2 + u2^2) + b/2 (|u1| + |u2|)^2 - q1 u1 - q2 u2.
    """
    shares = []
    for ratio in (1.0, 10.0, 100.0, 1e4):
        problem, data = two_zones(ratio * alpha, alpha)
        u = ssn.solve(problem).require().x.reshape(-1, 2)
        size = np.sort(np.abs(adjoint_of_zones(data, u)), axis=1)
        alone = (u != 0).sum(axis=1) <= 1
        limit = ratio / (1.0 + ratio) * size[:, 1]
        clear = np.abs(size[:, 0] - limit) > 1e-6 * limit
        assert clear.mean() > 0.9
        np.testing.assert_array_equal(alone[clear], (size[:, 0] < limit)[clear])
        shares.append(alone.mean())
    assert (np.diff(shares) > 0).all()
    assert shares[0] < 0.2 and shares[-1] > 0.95


def test_the_ratio_of_the_weights_alone_does_not_decide():
    """The same ratio of switching weight to alpha, another share: S*S is the scale."""
    shares = []
    for alpha in (1e-4, 1e-6):
        problem, _ = two_zones(100 * alpha, alpha)
        shares.append(((ssn.solve(problem).require().x.reshape(-1, 2) != 0).sum(axis=1) <= 1).mean())
    assert shares[0] > shares[1] + 0.5


# listed settings


@pytest.mark.parametrize("settings", [(-1.0, 0.0, 1.0), (0.0, 0.5, 1.0, 2.0, 3.0)])
@pytest.mark.parametrize("alpha", [1e-3, 1e-5])
def test_multi_bang_controls_take_listed_settings_where_the_target_is_missed(settings, alpha):
    """The target is far outside the states that controls within the settings reach."""

    def target(x):
        return np.where(x > 0.4, 2.0, -2.0)

    problem, *_ = poisson(ssn.MultiBangCost(settings, alpha), 0.0, target)
    solution = ssn.solve(problem).require()
    assert (np.abs(solution.state - problem.target) > 0.1).mean() > 0.95
    assert np.isin(solution.x, settings).all()
    assert set(np.unique(solution.x)) >= {settings[0], settings[-1]}
    sizes = solution.pieces.sizes()["control"]
    assert not any(count for name, count in sizes.items() if name.startswith("between"))


def test_where_the_target_is_reachable_the_share_off_the_settings_is_reported():
    x, h, K = line(63)
    reach = spsolve(K.tocsc(), h * (0.4 * np.sin(np.pi * x) + 0.3 * np.sin(3 * np.pi * x)))
    problem, *_ = poisson(ssn.MultiBangCost((-1.0, 0.0, 1.0), 1e-3), 0.0, lambda x: reach)
    solution = ssn.solve(problem).require()
    off = np.abs(solution.x[:, None] - np.array([-1.0, 0.0, 1.0])).min(axis=1) > 1e-9
    assert 0.01 < off.mean() < 0.3
    sizes = solution.pieces.sizes()["control"]
    assert sum(count for name, count in sizes.items() if name.startswith("between")) == off.sum()


# a source that stays and one that moves


def moving_source(cost_of):
    """A rod with a source that moves from 0.2 to 0.8; the target is its temperature."""
    points, steps = 31, 40
    x, h, K = line(points)
    state = ssn.TimeDependentState(np.full(points, h), 0.02 * K, steps=steps, duration=1.0)
    centre = 0.2 + 0.6 * state.load_times
    source = 10 * np.exp(-(((x - centre[:, None]) / 0.06) ** 2))
    z = state.solve(state.source(h * source))
    problem = ssn.ControlProblem(
        state=state, target=z, control_operator=state.control_operator(), control_weight=1e-4, cost=cost_of(state),
        observation_mass=state.observation_mass(), control_mass=state.control_mass(),
    )  # fmt: skip
    control = ssn.solve(problem).require().x.reshape(steps, points)
    return control, x, centre


@pytest.mark.parametrize("bound", [np.inf, 8.0])
def test_directional_sparsity_keeps_a_source_in_place(bound):
    control, *_ = moving_source(
        lambda state: ssn.GroupSparseCost(
            0.02,
            shape=(state.steps, state.points),
            axis=0,
            inner_weights=state.step_sizes,
            lower=-bound,
            upper=bound,
        )
    )
    used = (control != 0).any(axis=0)
    assert 0.2 < used.mean() < 0.9
    assert ((control != 0) == used).all()  # a place is used at every instant or never


@pytest.mark.parametrize("bound", [np.inf, 8.0])
def test_space_time_sparsity_lets_a_source_move(bound):
    control, x, centre = moving_source(lambda state: ssn.SparseCost(0.02, -bound, bound))
    on = control > 0
    acts = on.any(axis=1)
    assert acts.mean() > 0.8
    middle = (control * on) @ x / np.maximum((control * on).sum(axis=1), 1e-300)
    assert np.abs(middle - centre)[acts].max() < 0.12
    assert middle[acts][-1] - middle[acts][0] > 0.4
    assert on.mean(axis=0).max() < 0.7  # no place is used all the time
