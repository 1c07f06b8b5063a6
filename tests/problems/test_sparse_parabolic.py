"""Sparse control of the heat equation: known values, an independent assembly, mesh independence, three patterns."""

from __future__ import annotations

import io

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

sparse_parabolic = load("sparse_parabolic")

PATTERNS = ("both", "space", "time")
MANUFACTURED = {"case": "manufactured", "alpha": 0.01, "beta": 0.3, "bound": 50.0}
SCHEMES = {"implicit Euler": 1.0, "Crank-Nicolson": 0.5}


@pytest.mark.parametrize(
    ("parameters", "checks"),
    [
        ({"n": 8}, 3),
        ({"n": 8, "sparsity": "space"}, 3),
        ({"n": 8, "sparsity": "time"}, 3),
        ({"n": 12, "steps": 31, "scheme": "Crank-Nicolson"}, 2),
        ({"n": 10, "alpha": 1e-2, "bound": np.inf}, 2),
        ({"n": 10, "alpha": 1e-3, "beta": 0.0, "bound": np.inf}, 2),
        ({"n": 16} | MANUFACTURED, 2),
        ({"n": 16, "steps": 20, "scheme": "Crank-Nicolson"} | MANUFACTURED, 2),
        ({"n": 16, "case": "manufactured", "alpha": 1e-3, "beta": 0.0, "bound": np.inf}, 2),
        ({"n": 7, "dimension": 3}, 2),
        ({"n": 6, "dimension": 3, "sparsity": "space"}, 2),
        ({"n": 6, "dimension": 3, "sparsity": "time"}, 2),
        ({"n": 7, "steps": 10, "scheme": "Crank-Nicolson", "dimension": 3} | MANUFACTURED, 2),
    ],
)
def test_known_values_hold(parameters, checks):
    problem = sparse_parabolic.build(**parameters)
    known = sparse_parabolic.known(problem, ssn.solve(problem).require())
    assert len(known) == checks
    assert [check for check in known if not check["holds"]] == []


def test_known_values_reject_another_control():
    problem = sparse_parabolic.build(16, **MANUFACTURED)
    wrong = ssn.solve(sparse_parabolic.build(16, **MANUFACTURED | {"beta": 0.4}))
    assert [check["holds"] for check in sparse_parabolic.known(problem, wrong)] == [True, False]
    problem = sparse_parabolic.build(8)
    wrong = ssn.solve(sparse_parabolic.build(8, beta=0.04))
    assert [check["holds"] for check in sparse_parabolic.known(problem, wrong)] == [False, True, False]


@pytest.mark.parametrize("scheme", SCHEMES)
def test_manufactured_control_converges_at_the_order_of_the_scheme(scheme):
    errors, widths = [], []
    for n in (7, 15, 31):
        steps = (n + 1) ** 2 // 4 if scheme == "implicit Euler" else 2 * (n + 1)  # either error is O(h^2)
        problem = sparse_parabolic.build(n, steps, scheme=scheme, **MANUFACTURED)
        solution = ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2, 3, 4}  # bounds, both signs, zero
        errors.append(problem.controls.norm(solution.x - problem.mesh_data.exact_control))
        widths.append(problem.mesh_data.h)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.8 < slope < 2.2
    assert errors[-1] < 6e-2  # of a control between -50 and 50


def test_manufactured_control_converges_at_order_h2_in_a_cube():
    errors, widths = [], []
    for n in (7, 11, 15):
        problem = sparse_parabolic.build(n, n + 1, scheme="Crank-Nicolson", dimension=3, **MANUFACTURED)
        solution = ssn.solve(problem).require()
        assert set(np.unique(solution.pieces["control"])) == {0, 1, 2, 3, 4}
        errors.append(problem.controls.norm(solution.x - problem.mesh_data.exact_control))
        widths.append(problem.mesh_data.h)
    slope = np.polyfit(np.log(widths), np.log(errors), 1)[0]
    assert 1.7 < slope < 2.3
    assert errors[-1] < 1.0  # of a control between -50 and 50


@pytest.mark.parametrize("sparsity", PATTERNS)
def test_steps_from_zero_do_not_grow_with_the_mesh_in_a_cube(sparsity):
    steps = []
    for n in (4, 6, 9):
        solution = ssn.solve(sparse_parabolic.build(n, alpha=1e-3, sparsity=sparsity, dimension=3)).require()
        steps.append(len(solution.steps))
    assert max(steps) <= 20 and steps[-1] <= steps[0] + 3


def test_the_cube_is_the_square_times_a_line():
    """The seven-point matrix against products of one-dimensional ones, and a mode that decays at its own rate."""
    n = 5
    h = 1.0 / (n + 1)
    line = np.arange(1, n + 1) * h
    waves = [np.sin(k * np.pi * line) for k in (1, 2, 3)]
    mode = np.einsum("i,j,k->ijk", *waves).ravel()
    eigenvalue = sum(4 / h**2 * np.sin(k * np.pi * h / 2) ** 2 for k in (1, 2, 3))
    assert np.abs(sparse_parabolic.seven_point(n) @ mode - h**3 * eigenvalue * mode).max() < 1e-14


# agreement with a general solver on an assembly of its own


def _by_interior_point(problem, beta):
    """Objective and control by Clarabel; matrices assembled here, from the definition of the scheme.

    Unknowns: the state, the control u, and bounds t of the norms of its groups, all of which are second-order cones.
    """
    mesh = problem.mesh_data
    n, steps, h, alpha = mesh.n, mesh.steps, mesh.h, mesh.parameters["alpha"]
    theta, tau, points = SCHEMES[mesh.parameters["scheme"]], 1.0 / mesh.steps, mesh.n**2
    K = np.zeros((points, points))
    for i in range(n):
        for j in range(n):
            K[i * n + j, i * n + j] = 4.0
            for a, b in ((i + 1, j), (i - 1, j), (i, j + 1), (i, j - 1)):
                if 0 <= a < n and 0 <= b < n:
                    K[i * n + j, a * n + b] = -1.0
    K *= 0.1
    now, before = h * h * np.eye(points) + theta * tau * K, h * h * np.eye(points) - (1 - theta) * tau * K
    E = sp.kron(sp.eye_array(steps), now) - sp.kron(sp.eye_array(steps, k=-1), before)
    level = np.full(steps, tau)
    level[-1] *= theta
    weight, mass = np.repeat(level, points) * h * h, np.full(steps * points, tau * h * h)
    index = np.arange(steps * points).reshape(steps, points)
    groups, outer, inner = {
        "both": (index.reshape(-1, 1), tau * h * h, 1.0),
        "space": (index.T, h * h, tau),
        "time": (index, tau, h * h),
    }[mesh.parameters["sparsity"]]
    size, scale = steps * points, 1.0 / (tau * h * h)
    P = sp.block_diag(
        [
            sp.diags_array(scale * weight),
            sp.diags_array(scale * alpha * mass),
            sp.csr_array((len(groups),) * 2),
        ]
    )
    q = np.concatenate(
        [-scale * weight * problem.target, np.zeros(size), np.full(len(groups), scale * outer * beta)]
    )
    state = sp.hstack([E, -sp.diags_array(mass), sp.csr_array((size, len(groups)))])
    box = sp.hstack([sp.csr_array((size, size)), sp.eye_array(size), sp.csr_array((size, len(groups)))])
    # (t_g, sqrt(inner) u_g) in a cone for each group: b - A x with b = 0
    length = groups.shape[1]
    rows = np.arange(len(groups) * (length + 1)).reshape(len(groups), length + 1)
    entries = np.concatenate([np.full(len(groups), -1.0), np.full(groups.size, -np.sqrt(inner))])
    columns = np.concatenate([2 * size + np.arange(len(groups)), size + groups.ravel()])
    norms = sp.csr_array(
        (entries, (np.concatenate([rows[:, 0], rows[:, 1:].ravel()]), columns)),
        shape=(rows.size, 2 * size + len(groups)),
    )
    bound = mesh.parameters["bound"]
    blocks, b = [state], [np.zeros(size)]
    cones = [clarabel.ZeroConeT(size)]
    if np.isfinite(bound):
        blocks += [box, -box]
        b += [np.full(2 * size, bound)]
        cones += [clarabel.NonnegativeConeT(2 * size)]
    blocks += [norms]
    b += [np.zeros(rows.size)]
    cones += [clarabel.SecondOrderConeT(length + 1) for _ in groups]
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-12
    A = sp.vstack(blocks, format="csc")
    found = clarabel.DefaultSolver(sp.triu(P, format="csc"), q, A, np.concatenate(b), cones, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved", "InsufficientProgress")
    constant = 0.5 * float(weight @ problem.target**2)
    # its own primal-dual pair: the optimum lies between the two, and sometimes it stops short of 1e-11
    gap = abs(found.obj_val - found.obj_val_dual) / scale
    return found.obj_val / scale + constant, np.asarray(found.x)[size : 2 * size], gap


@pytest.mark.parametrize("sparsity", PATTERNS)
@pytest.mark.parametrize(
    "parameters",
    [{}, {"alpha": 1e-2, "bound": np.inf}, {"alpha": 1e-5, "bound": 12.0, "scheme": "Crank-Nicolson"}],
    ids=["default", "no bounds", "tight bounds"],
)
def test_agrees_with_an_interior_point_solver(sparsity, parameters):
    n = 8 if not parameters else 6
    problem = sparse_parabolic.build(n, sparsity=sparsity, **parameters)
    solution = ssn.solve(problem).require()
    objective, control, gap = _by_interior_point(problem, 0.05)
    assert gap <= 1e-6 * objective
    assert solution.objective == pytest.approx(objective, rel=1e-8, abs=gap + 1e-8 * objective)
    # the objective grows by alpha/2 ||u - u*||^2 at least: so far may a control within the gap be off
    off = np.sqrt(2.0 * gap / problem.alpha)
    assert problem.controls.norm(solution.x - control) <= 1e-4 * problem.controls.norm(control) + off
    if not parameters:
        assert sparse_parabolic.REFERENCE_OBJECTIVE[sparsity] == pytest.approx(
            objective, abs=gap + 1e-9 * objective
        )


@pytest.mark.parametrize("sparsity", PATTERNS)
@pytest.mark.parametrize("bound", [20.0, np.inf])
def test_agrees_with_the_reference(sparsity, bound):
    problem = sparse_parabolic.build(12, alpha=1e-3, bound=bound, sparsity=sparsity)
    solution = ssn.solve(problem).require()
    reference = ssn.proximal_gradient(problem, tolerance=1e-3)
    assert reference.converged
    assert problem.controls.norm(solution.x - reference.x) <= 1e-3 * problem.controls.norm(solution.x)


# steps


@pytest.mark.parametrize("sparsity", PATTERNS)
@pytest.mark.parametrize("alpha", [1e-2, 1e-3, 1e-4])
@pytest.mark.parametrize("bound", [20.0, np.inf])
def test_steps_from_zero_do_not_grow_with_the_mesh(sparsity, alpha, bound):
    steps = []
    for n in (8, 16, 24):
        solution = ssn.solve(sparse_parabolic.build(n, alpha=alpha, bound=bound, sparsity=sparsity)).require()
        steps.append(len(solution.steps))
    assert max(steps) <= 20
    assert steps[-1] <= steps[0] + 3


@pytest.mark.slow
@pytest.mark.parametrize("alpha", [1e-2, 1e-3, 1e-4, 1e-5])
@pytest.mark.parametrize("sparsity", PATTERNS)
def test_a_hundred_thousand_unknowns(sparsity, alpha):
    problem = sparse_parabolic.build(37, alpha=alpha, sparsity=sparsity)
    assert problem.unknowns == 101306
    solution = ssn.solve(problem, tolerance=1e-8).require()
    assert len(solution.steps) <= 40
    assert problem.accuracy(solution.x) <= 1e-8
    # the target is simulated with the same state model, which has made its one factorisation then
    assert len(problem.state._factors) == 1 and problem.state.work.factorizations == 0


@pytest.mark.parametrize(("n", "alpha"), sparse_parabolic.PLAIN_STEPS_FAIL)
def test_plain_steps_fail_where_the_default_converges(n, alpha):
    problem = sparse_parabolic.build(n, alpha=alpha)
    plain = ssn.solve(problem, globalization="full", max_steps=100)
    assert plain.outcome in (ssn.Outcome.CYCLING, ssn.Outcome.STEP_LIMIT)
    assert len(ssn.solve(problem, max_steps=40).require().steps) <= 40


# facts of the three patterns


def test_patterns_are_what_they_say():
    zero = {}
    for sparsity in PATTERNS:
        problem = sparse_parabolic.build(12, alpha=1e-3, sparsity=sparsity)
        control = ssn.solve(problem).require().x.reshape(problem.mesh_data.shape)
        zero[sparsity] = control == 0
    rests = zero["space"].all(axis=0)  # a place rests for ever or acts at nearly all times
    assert 0.3 < rests.mean() < 0.95
    assert zero["space"][:, ~rests].mean() < 0.05
    rests = zero["time"].all(axis=(1, 2))
    assert 0.05 < rests.mean() < 0.95
    assert zero["time"][~rests].mean() < 0.05
    # the source moves: with sparsity in both some places act now and then
    acts = ~zero["both"]
    sometimes = acts.any(axis=0)
    assert acts[:, sometimes].mean() < 0.5


# the file


def test_transfer_carries_a_trilinear_control():
    for scheme in SCHEMES:
        coarse, fine = (sparse_parabolic.build(n, scheme=scheme) for n in (7, 15))
        fields = []
        for problem in (coarse, fine):
            mesh = problem.mesh_data
            t, x = mesh.control_times[:, None, None], mesh.line
            hat = np.minimum(x, 1 - x)  # linear between the points of the coarse mesh
            t = np.clip(t, coarse.mesh_data.control_times[0], coarse.mesh_data.control_times[-1])
            fields.append(((1 + t) * hat[:, None] * hat).ravel())
        carried = sparse_parabolic.transfer(coarse, fine)(fields[0])
        assert np.abs(carried - fields[1]).max() <= 1e-13


def test_transfer_in_a_cube():
    coarse, fine = (sparse_parabolic.build(n, 6, dimension=3) for n in (3, 7))
    fields = []
    for problem in (coarse, fine):
        hat = np.minimum(problem.mesh_data.line, 1 - problem.mesh_data.line)
        t = problem.mesh_data.control_times
        fields.append(np.einsum("t,i,j,k->tijk", t, hat, hat, hat).ravel())
    assert np.abs(sparse_parabolic.transfer(coarse, fine)(fields[0]) - fields[1]).max() <= 1e-14


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 1}, "n must be a whole number of at least 2"),
        ({"n": 4.0}, "n must be a whole number"),
        ({"steps": -1}, "steps must be a whole number of at least 0"),
        ({"steps": True}, "steps must be a whole number"),
        ({"alpha": 0.0}, "alpha must"),
        ({"alpha": np.inf}, "alpha must"),
        ({"beta": -1e-3}, "beta must"),
        ({"beta": np.nan}, "beta"),
        ({"bound": 0.0}, "bound must"),
        ({"bound": np.nan}, "bound must"),
        ({"sparsity": "none"}, "sparsity must be one of both, space, time"),
        ({"scheme": "explicit"}, "scheme must be one of"),
        ({"case": "other"}, "case must be one of"),
        ({"dimension": 4}, "dimension must be 2 or 3"),
        ({"case": "manufactured", "sparsity": "time"}, "known for sparsity='both' only"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        sparse_parabolic.build(**parameters)


@pytest.mark.parametrize(
    "parameters",
    [{}, {"beta": 10.0}, {"sparsity": "space"}, {"sparsity": "time"}, MANUFACTURED, {"dimension": 3}],
)
def test_picture_is_drawn(parameters):
    problem = sparse_parabolic.build(6, **parameters)
    buffer = io.BytesIO()
    sparse_parabolic.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
