"""Journal bearing: published optimal values, chart points of the handbook, the assembly against elements."""

from __future__ import annotations

import io

import numpy as np
import pytest

import ssn

from .loading import load

bearing = load("journal_bearing")


def element_by_element(n, e, slope, width):
    """Energy Hessian and load from the triangles one by one, as the source defines them."""
    h1, h2 = 2 * np.pi / (n + 1), width / (n + 1)
    w = (1 + e * np.cos(h1 * np.arange(-1, n + 3))) ** 3  # w[i + 1] belongs to node i
    full = np.zeros(((n + 2) ** 2,) * 2)

    def edge(p, q, weight):  # weight (v_p - v_q)^2 / 2
        full[[p, q], [p, q]] += weight
        full[[p, q], [q, p]] -= weight

    for i in range(n + 2):
        lower, upper = (2 * w[i + 1] + w[i + 2]) / 6, (2 * w[i + 1] + w[i]) / 6
        for j in range(n + 2):
            p = i * (n + 2) + j
            if i <= n and j <= n:
                edge(p, p + n + 2, h2 / h1 * lower)
                edge(p, p + 1, slope * h1 / h2 * lower)
            if i >= 1 and j >= 1:
                edge(p, p - n - 2, h2 / h1 * upper)
                edge(p, p - 1, slope * h1 / h2 * upper)
    inner = np.arange((n + 2) ** 2).reshape(n + 2, n + 2)[1:-1, 1:-1].ravel()
    load = np.repeat(e * h1 * h2 * np.sin(h1 * np.arange(n + 2)), n + 2)
    return full[np.ix_(inner, inner)], load[inner]


@pytest.mark.parametrize("options", [{}, {"case": "handbook", "ratio": 0.5, "eccentricity": 0.7}])
def test_assembly_is_that_of_the_triangles(options):
    problem = bearing.build(6, **options)
    ratio, e = options.get("ratio", 1.0), options.get("eccentricity", 0.1)
    width = 2.0 if options else 20.0
    matrix, load = element_by_element(6, e, 1 / ratio**2, width)
    np.testing.assert_allclose(problem.map.M.toarray(), matrix, atol=1e-13)
    np.testing.assert_allclose(problem.map.q, -load, atol=1e-13)


@pytest.mark.parametrize("n", [2, 8, 21, 25, 30, 50])
def test_published_optimal_values(n):
    problem = bearing.build(n)
    solution = ssn.solve(problem).require()
    checks = bearing.known(problem, solution)
    assert len(checks) == 1
    assert checks[0]["holds"], checks
    assert (solution.multipliers["contact"] >= -1e-12).all()
    force = problem.map.M @ solution.x + problem.map.q
    assert np.abs(np.minimum(force, solution.x)).max() < 1e-8


@pytest.mark.parametrize("e", [0.2, 0.4, 0.6, 0.8])
@pytest.mark.parametrize("ratio", list(bearing.TABLE))
def test_chart_points_of_the_handbook(ratio, e):
    problem = bearing.build(40, case="handbook", eccentricity=e, ratio=ratio)
    checks = bearing.known(problem, ssn.solve(problem).require())
    assert len(checks) == (4 if ratio in bearing.COMPUTED else 2)
    assert [check for check in checks if not check["holds"]] == []


def test_finer_meshes_approach_the_chart_point():
    """S and attitude angle extrapolated from two meshes; tabulated 0.121 and 50.58."""
    values = []
    for n in (39, 79):
        problem = bearing.build(n, case="handbook", eccentricity=0.6)
        values.append(np.array(bearing.bearing_number(problem, ssn.solve(problem).require())))
    limit = values[1] + (values[1] - values[0]) / 3
    assert limit == pytest.approx([0.1209, 50.53], rel=1e-3)


def test_short_bearing_limit():
    """S (L/D)^2 and tan of the attitude angle in closed form: F. Ocvirk, NACA TN 2808 (1952) (from memory)."""
    e, ratio = 0.5, 0.02
    problem = bearing.build(60, case="handbook", eccentricity=e, ratio=ratio)
    number, attitude = bearing.bearing_number(problem, ssn.solve(problem).require())
    root = np.sqrt(np.pi**2 * (1 - e**2) + 16 * e**2)
    assert number * ratio**2 == pytest.approx((1 - e**2) ** 2 / (np.pi * e * root), rel=0.02)
    assert attitude == pytest.approx(np.degrees(np.arctan(np.pi * np.sqrt(1 - e**2) / (4 * e))), abs=0.5)


def test_known_values_reject_another_solution():
    for options in ({"n": 50}, {"n": 50, "case": "handbook", "eccentricity": 0.4}):
        problem = bearing.build(**options)
        other = ssn.ComplementarityProblem(ssn.AffineMap(problem.map.M, 1.1 * problem.map.q), lower=-1.0)
        other.mesh_data = problem.mesh_data
        checks = bearing.known(problem, ssn.solve(other).require())
        assert [c["what"] for c in checks if c["holds"]] == []


@pytest.mark.parametrize("options", [{}, {"case": "handbook", "eccentricity": 0.6, "ratio": np.inf}])
def test_few_steps_from_mesh_to_mesh(options):
    path = ssn.follow_meshes(bearing.build, (15, 30, 60), bearing.transfer, parameters=options)
    assert path.converged
    assert max(len(point.solution.steps) for point in path.points[1:]) <= 6


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"n": 1}, "n must be a whole number"),
        ({"case": "thrust"}, "case must be one of"),
        ({"eccentricity": 1.0}, "eccentricity must lie between"),
        ({"ratio": 0.0, "case": "handbook"}, "ratio must be positive"),
        ({"ratio": 2.0}, "ratio=2.0 has no effect"),
    ],
)
def test_unusable_parameters_are_named(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        bearing.build(**{"n": 8, **arguments})


@pytest.mark.parametrize("case", bearing.CASES)
def test_picture_is_drawn(case):
    problem = bearing.build(8, case=case)
    buffer = io.BytesIO()
    bearing.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
