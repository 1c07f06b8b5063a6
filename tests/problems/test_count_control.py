"""Count and power costs in a control problem: gap, L1 path, and a conic solver on an assembly of its own."""

from __future__ import annotations

import io

import clarabel
import numpy as np
import pytest
import scipy.sparse as sp

import ssn

from .loading import load

count_control = load("count_control")


@pytest.fixture(scope="module")
def solved():
    """Problem and solution by (power, n)."""
    results = {}
    for power in (0.0, 0.5, 1.0):
        for n in (10, 20, 40):
            problem = count_control.build(n, power=power)
            results[power, n] = problem, ssn.solve(problem).require()
    return results


@pytest.mark.parametrize("power", [0.0, 0.5, 1.0])
@pytest.mark.parametrize("n", [10, 20, 40])
def test_known_values_hold(solved, power, n):
    problem, solution = solved[power, n]
    known = count_control.known(problem, solution)
    assert len(known) == (1 if power == 1 else 4 if (power, n) == (0.0, 10) else 3)
    for check in known:
        assert check["holds"], check


def test_gap_and_steps_do_not_grow_with_the_mesh(solved):
    """Fewer undecided components a unit of area: the gap falls."""
    gaps = [solved[0.0, n][1].gap for n in (10, 20, 40)]
    assert gaps[2] < 1e-5 and gaps[2] < gaps[1] < gaps[0] < 2e-3
    for power in (0.0, 0.5):
        assert max(len(solved[power, n][1].steps) for n in (10, 20, 40)) <= 40
    assert solved[0.5, 40][1].gap <= 1e-9


def test_a_price_on_the_area_needs_less_area_than_a_price_on_the_amount(solved):
    area = {p: float(solved[p, 20][0].weights[solved[p, 20][1].x > 0].sum()) for p in (0.0, 0.5, 1.0)}
    assert area[0.0] < 0.5 * area[0.5] and area[0.5] < 0.5 * area[1.0]


def test_the_proximal_iteration_depends_on_its_start(solved):
    """From the zero control it stays where it is, or nearly: much worse than the best known point."""
    problem, solution = solved[0.0, 20]
    assert ssn.proximal_gradient(problem).objective > 1.5 * solution.objective
    local = ssn.solve(problem, np.zeros(problem.unknowns)).require()
    assert local.lower_bound is None and local.gap is None
    assert local.objective > 1.5 * solution.objective


# the same problem without scikit-fem


def stiffness(n):
    """Linear elements on rectangles that are cut from lower left to upper right, by triangles and in plain loops."""
    lines = np.linspace(0, 600, 3 * (n + 1) // 2 + 1), np.linspace(0, 400, n + 2)
    shape = lines[0].size, lines[1].size
    points = np.array([(a, b) for a in lines[0] for b in lines[1]])
    matrix = np.zeros((len(points),) * 2)
    mass = np.zeros(len(points))
    for i in range(shape[0] - 1):
        for j in range(shape[1] - 1):
            a, b, c, d = (k * shape[1] + m for k, m in ((i, j), (i + 1, j), (i, j + 1), (i + 1, j + 1)))
            for corners in ((a, b, d), (a, c, d)):
                xy = points[list(corners)]
                edges = np.array([xy[2] - xy[1], xy[0] - xy[2], xy[1] - xy[0]])
                area = 0.5 * abs(edges[0, 0] * edges[1, 1] - edges[0, 1] * edges[1, 0])
                inside = np.array([[4, 1, 1], [1, 4, 1], [1, 1, 4]]) / 6 @ xy
                axis = inside[:, 1] - 120 - 0.25 * inside[:, 0]
                t = (200 + 400 * np.exp(-((axis / 40) ** 4))).mean()
                matrix[np.ix_(corners, corners)] += t * edges @ edges.T / (4 * area)
                mass[list(corners)] += area / 3
    inner = [k for k, (x, y) in enumerate(points) if 0 < x < 600 and 0 < y < 400]
    return matrix[np.ix_(inner, inner)], mass[inner], points[inner]


def conic_bound(n, alpha=20.0, beta=0.02, bound=0.06):
    """The envelope in its perspective form: beta w + alpha/2 s with s w >= u^2, 0 <= u <= bound w, w <= 1."""
    K, mass, points = stiffness(n)
    size = mass.size
    wet = np.flatnonzero(((points[:, 0] - 380) / 110) ** 2 + ((points[:, 1] - 220) / 65) ** 2 <= 1)
    scale = 1.0 / mass.mean()
    # unknowns y, v = u / bound, w, r = s / bound^2
    zero, eye = sp.csr_array((size, size)), sp.eye_array(size)
    weight = np.zeros(size)
    weight[wet] = mass[wet]
    P = sp.block_diag([sp.diags_array(scale * weight), sp.csr_array((3 * size,) * 2)], format="csc")
    cost = scale * np.concatenate([-0.8 * weight, 0 * mass, beta * mass, 0.5 * alpha * bound**2 * mass])
    state = sp.hstack([sp.csr_array(K) / 200, -sp.diags_array(mass * bound / 200), zero, zero])
    rows = [zero, -eye, zero, zero], [zero, eye, -eye, zero], [zero, zero, eye, zero]
    above = [sp.hstack(row) for row in rows]
    cones = sp.vstack(
        [
            sp.hstack(row)
            for row in ([zero, zero, -eye, -eye], [zero, zero, -eye, eye], [zero, -2 * eye, zero, zero])
        ],
        format="csr",
    )  # (w + r, w - r, 2 v)
    order = np.arange(3 * size).reshape(3, size).T.ravel()
    A = sp.vstack([state, *above, cones[order]], format="csc")
    b = np.concatenate([np.zeros(3 * size), np.ones(size), np.zeros(3 * size)])
    kinds = [clarabel.ZeroConeT(size), clarabel.NonnegativeConeT(3 * size)]
    kinds += [clarabel.SecondOrderConeT(3)] * size
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.tol_gap_abs = settings.tol_gap_rel = settings.tol_feas = 1e-11
    found = clarabel.DefaultSolver(sp.triu(P, format="csc"), cost, A, b, kinds, settings).solve()
    assert str(found.status) in ("Solved", "AlmostSolved")
    constant = 0.5 * 0.64 * weight.sum()
    return found.obj_val / scale + constant, found.obj_val_dual / scale + constant


def test_assembly_without_scikit_fem(solved):
    problem = solved[0.0, 10][0]
    K, mass, _ = stiffness(10)
    assert abs(problem.state.matrix.toarray() - K).max() <= 1e-10 * abs(K).max()
    np.testing.assert_allclose(problem.weights, mass, rtol=1e-12)


def test_lower_bound_against_a_conic_solver(solved):
    """The optimum of the relaxation lies between the solver's primal and dual value; ours may not lie above."""
    primal, dual = conic_bound(10)
    bound = solved[0.0, 10][1].lower_bound
    assert abs(primal - dual) <= 1e-8 * primal
    assert bound == pytest.approx(primal, rel=1e-8)
    assert bound <= primal + 1e-9 * primal
    assert count_control.REFERENCE_BOUND[0.0] == pytest.approx(primal, rel=1e-9)


# the file


def test_transfer_keeps_zero():
    coarse, fine = count_control.build(9), count_control.build(19)
    control = (coarse.mesh_data.wetland.size * np.arange(coarse.unknowns)) % 7 == 0
    carried = count_control.transfer(coarse, fine)(control.astype(float))
    assert set(np.unique(carried)) == {0.0, 1.0}
    assert carried.mean() == pytest.approx(control.mean(), abs=0.1)


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"n": 3}, "n must be a whole number of at least 4"),
        ({"n": 8.0}, "n must be a whole number"),
        ({"alpha": 0.0}, "alpha must"),
        ({"beta": -1.0}, "beta must"),
        ({"bound": 0.0}, "bound must"),
        ({"power": 1.5}, "power must lie between 0 and 1"),
        ({"power": np.nan}, "power must lie between 0 and 1"),
        ({"rise": np.inf}, "rise must be finite"),
    ],
)
def test_unusable_parameters_are_named(parameters, complaint):
    with pytest.raises(ssn.InputError, match=complaint):
        count_control.build(**parameters)


@pytest.mark.parametrize("parameters", [{}, {"power": 0.5}, {"power": 1.0}, {"beta": 100.0}])
def test_picture_and_summary(parameters):
    problem = count_control.build(8, **parameters)
    solution = ssn.solve(problem)
    buffer = io.BytesIO()
    count_control.picture(problem, solution).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
    assert all(
        isinstance(text, str) and text for row in count_control.summary(problem, solution) for text in row
    )
