"""Families of control problems against a general conic solver on an assembly of its own, to 1e-8 in the objective.

The solver gets the state as a variable, so that no operator is squared. What it says of itself stands beside each
comparison: its primal and dual value, between which the optimum lies, must agree to 1e-8, too.
"""

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

AGREEMENT = 1e-8


def line(points):
    """Points, mesh width and stiffness matrix of linear elements on (0, 1)."""
    h = 1.0 / (points + 1)
    ones = np.ones(points - 1)
    return (
        np.arange(1, points + 1) * h,
        h,
        sp.diags_array([-ones, 2 * np.ones(points), -ones], offsets=[-1, 0, 1]) / h,
    )


def conic(P, q, blocks, constant, tolerance=1e-11):
    """Primal and dual value and point of: minimise 1/2 x'Px + q'x + constant, b - A x in a cone for each block."""
    A = sp.vstack([a for _, a, _ in blocks], format="csc")
    b = np.concatenate([b for _, _, b in blocks])
    kinds = {"zero": clarabel.ZeroConeT, "nonnegative": clarabel.NonnegativeConeT}
    cones = []
    for kind, _, right in blocks:
        if isinstance(kind, int):  # second-order cones of that length, one after the other
            cones += [clarabel.SecondOrderConeT(kind)] * (right.size // kind)
        else:
            cones.append(kinds[kind](right.size))
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = tolerance
    found = clarabel.DefaultSolver(sp.triu(P, format="csc"), q, A, b, cones, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved")
    return found.obj_val + constant, found.obj_val_dual + constant, np.asarray(found.x)


def agrees(objective, primal, dual, scale):
    """Both values of the solver, and ours with them; `scale` takes the solver's units to ours."""
    assert abs(primal - dual) <= AGREEMENT * abs(primal)
    assert objective == pytest.approx(scale * primal, rel=AGREEMENT)


def rod(points=15, steps=20):
    """A rod with a source that moves: data of the time-dependent problems, and the implicit Euler matrix."""
    x, h, K = line(points)
    tau = 1.0 / steps
    state = ssn.TimeDependentState(np.full(points, h), sp.csr_array(0.05 * K), steps=steps, duration=1.0)
    t = np.arange(1, steps + 1)[:, None] * tau
    z = np.exp(-(((x - 0.25 - 0.5 * t) / 0.12) ** 2)).ravel()
    eye = sp.eye_array(points)
    E = sp.kron(sp.eye_array(steps), h * eye + tau * 0.05 * K) - sp.kron(sp.eye_array(steps, k=-1), h * eye)
    return state, z, E, h, tau


def selected(size, total, first):
    return sp.eye_array(size, total, k=first, format="csr")


@pytest.mark.parametrize("pattern", ["space", "time", "both"])
@pytest.mark.parametrize(("alpha", "bound"), [(1e-2, np.inf), (1e-3, 6.0), (1e-4, 8.0)])
def test_sparse_parabolic_patterns_with_and_without_bounds(pattern, alpha, bound):
    """Directional sparsity by one second-order cone a group, sparsity in both by two rows a component."""
    points, steps, beta = 15, 20, 0.01
    state, z, E, h, tau = rod(points, steps)
    size = points * steps
    if pattern == "both":
        cost = ssn.SparseCost(beta, -bound, bound)
    else:
        axis, inner = (0, np.full(steps, tau)) if pattern == "space" else (1, np.full(points, h))
        cost = ssn.GroupSparseCost(
            beta, shape=(steps, points), axis=axis, inner_weights=inner, lower=-bound, upper=bound
        )
    problem = ssn.ControlProblem(
        state=state, target=z, cost=cost, control_weight=alpha, control_operator=state.control_operator(),
        observation_mass=state.observation_mass(), control_mass=state.control_mass(),
    )  # fmt: skip
    solution = ssn.solve(problem).require()
    # in units of tau h: y, u and the norm of each group
    index = np.arange(size).reshape(steps, points)
    groups, outer, inner = {
        "both": (index.reshape(-1, 1), 1.0, 1.0), "space": (index.T, 1.0 / tau, tau), "time": (index, 1.0 / h, h),
    }[pattern]  # fmt: skip
    number, length = groups.shape
    total = 2 * size + number
    P = sp.block_diag([sp.eye_array(size), alpha * sp.eye_array(size), sp.csr_array((number, number))])
    q = np.concatenate([-z, np.zeros(size), np.full(number, outer * beta)])
    u = selected(size, total, size)
    blocks = [
        ("zero", sp.hstack([E / h, -tau * sp.eye_array(size), sp.csr_array((size, number))]), np.zeros(size))
    ]
    if np.isfinite(bound):
        blocks += [("nonnegative", sp.vstack([u, -u]), np.full(2 * size, bound))]
    norms = selected(number, total, 2 * size)
    parts = np.sqrt(inner) * u[groups.ravel()]
    order = np.argsort(np.concatenate([np.arange(number) * (length + 1), np.delete(
        np.arange(number * (length + 1)), np.arange(number) * (length + 1))]), kind="stable")  # fmt: skip
    rows = sp.vstack([norms, parts], format="csr")[order]
    blocks += [(length + 1, -rows, np.zeros(rows.shape[0]))]
    primal, dual, found = conic(P, q, blocks, 0.5 * z @ z)
    agrees(solution.objective, primal, dual, tau * h)
    assert problem.controls.norm(solution.x - found[size : 2 * size]) <= 1e-3 * problem.controls.norm(
        solution.x
    )
    if np.isfinite(bound):
        assert (np.abs(solution.x) >= bound).any()


@pytest.mark.parametrize(("alpha", "weight"), [(1e-2, 1e-2), (1e-4, 1e-3), (1e-4, 1.0)])
def test_switching_with_four_patches(alpha, weight):
    """weight/2 (sum |u_i|)^2 as a quadratic in a variable that is not below the sum: a plain quadratic program."""
    points, steps = 15, 20
    state, z, E, h, tau = rod(points, steps)
    x = np.arange(1, points + 1) * h
    zones = h * np.stack([(x > 0.25 * k) & (x <= 0.25 * (k + 1)) for k in range(4)], axis=1)
    problem = ssn.ControlProblem(
        state=state, target=z, cost=ssn.SwitchingCost(weight, (steps, 4)), control_weight=alpha,
        control_operator=state.control_operator(zones), observation_mass=state.observation_mass(),
        control_mass=state.control_mass(np.ones(4)),
    )  # fmt: skip
    solution = ssn.solve(problem).require()
    size, n = points * steps, 4 * steps
    # in units of tau h: y, u, a >= |u|, s >= the sum of a at each instant
    P = sp.block_diag(
        [
            sp.eye_array(size),
            alpha / h * sp.eye_array(n),
            sp.csr_array((n, n)),
            weight / h * sp.eye_array(steps),
        ]
    )
    total = size + 2 * n + steps
    q = np.concatenate([-z, np.zeros(2 * n + steps)])
    u, a, s = selected(n, total, size), selected(n, total, size + n), selected(steps, total, size + 2 * n)
    B = sp.kron(sp.eye_array(steps), sp.csr_array(zones)) * tau
    state_rows = sp.hstack([E / h, -B / h, sp.csr_array((size, n + steps))])
    summed = sp.kron(sp.eye_array(steps), np.ones((1, 4))) @ a
    above = sp.vstack([u - a, -u - a, summed - s])
    blocks = [("zero", state_rows, np.zeros(size)), ("nonnegative", above, np.zeros(above.shape[0]))]
    primal, dual, _ = conic(P, q, blocks, 0.5 * z @ z)
    agrees(solution.objective, primal, dual, tau * h)
    on = (solution.x.reshape(steps, 4) != 0).sum(axis=1)
    assert on.min() < 4 and (on.max() == 1 if weight == 1.0 else on.max() > 1)


def bounded_state(points=40, alpha=1e-4, ceiling=0.06):
    x, h, K = line(points)
    z = 0.15 * np.sin(np.pi * x) - 0.05 * np.sin(3 * np.pi * x)
    mass = np.full(points, h)
    problem = ssn.ControlProblem(
        state=ssn.SteadyState(sp.csr_array(K)), target=z, cost=ssn.SparseCost(1e-4, -8.0, 8.0), control_weight=alpha,
        state_mass=mass, control_mass=mass, state_upper=ceiling, state_tolerance=1e-9,
    )  # fmt: skip
    return problem, K, h, z


def test_state_constraints_by_the_penalty_path():
    """The hard problem's optimum F*: the path gives bounds on both sides of it, and nearly F* when extrapolated.

    With v = the penalty term at penalty gamma, the penalised optimum F + v is not above F*, and F* = F + 2 v up to
    terms of higher order in 1/gamma (the value function is F* - c/gamma). F alone lies below F* by about 2 v: the
    control violates the bound a little.
    """
    problem, K, h, z = bounded_state()
    n, alpha = 40, 1e-4
    solution = ssn.solve(problem).require()
    # y, p, m with u = p - m, in units of h
    P = sp.block_diag([sp.eye_array(n), alpha * sp.eye_array(n), alpha * sp.eye_array(n)])
    q = np.concatenate([-z, np.full(2 * n, 1e-4)])
    eye, zero = sp.eye_array(n), sp.csr_array((n, n))
    state = sp.hstack([K * h, -h * h * eye, h * h * eye])
    y, parts = sp.hstack([eye, zero, zero]), selected(2 * n, 3 * n, n)
    blocks = [
        ("zero", state, np.zeros(n)), ("nonnegative", y, np.full(n, 0.06)), ("nonnegative", parts, np.full(2 * n, 8.0)),
        ("nonnegative", -parts, np.zeros(2 * n)),
    ]  # fmt: skip
    primal, dual, _ = conic(P, q, blocks, 0.5 * z @ z)
    assert abs(primal - dual) <= AGREEMENT * primal
    hard = h * primal
    u = solution.x
    excess = np.maximum(solution.state - 0.06, 0.0)
    assert (excess > 0).any() and solution.violation <= 1e-9
    value = 0.5 * h * np.sum((solution.state - z) ** 2) + 0.5 * alpha * h * u @ u + 1e-4 * h * np.abs(u).sum()
    penalty = solution.objective - value
    assert 0 < penalty < 1e-4 * hard
    assert solution.objective <= hard * (1 + 1e-9)
    assert value + 2 * penalty == pytest.approx(hard, rel=AGREEMENT)
    assert abs(value - hard) <= 3 * penalty + AGREEMENT * hard
