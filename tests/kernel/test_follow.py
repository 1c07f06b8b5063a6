"""Path-following in a parameter."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest

import ssn
from tests.kernel.examples import control


def test_warm_starts_over_alpha():
    """Fewer Newton steps than from zero at every value, and the same solutions."""
    values = [1e-2, 1e-3, 1e-4, 1e-5, 1e-6]
    path = ssn.follow(lambda alpha: control(20, alpha=alpha), values)
    assert path.converged and list(path.values) == values
    cold = [ssn.solve(control(20, alpha=alpha)).require() for alpha in values]
    for point, alone in zip(path.points, cold, strict=True):
        np.testing.assert_allclose(point.solution.x, alone.x, atol=1e-6 * max(np.abs(alone.x).max(), 1e-9))
    assert path.newton_steps <= sum(len(s.steps) for s in cold)
    assert path.points[0].predictor == "own start" and path.points[1].predictor == "last solution"


def family(stiff):
    """A root that runs away quickly: stiff steps fail without an inserted value."""
    return lambda x: np.tanh(40.0 * (x - stiff)) + 0.01 * (x - stiff)


def test_a_failed_value_is_approached_by_inserted_ones():
    path = ssn.follow(family, [0.1, 1.5], start=np.full(1, 0.12), globalization="full", max_steps=12)
    assert path.converged, path.message
    assert any(p.inserted for p in path.points) and path.failed
    np.testing.assert_allclose(path.solution.x, 1.5, atol=1e-7)
    values = list(path.values)
    assert values == sorted(values) and values[-1] == 1.5


def test_a_hopeless_value_ends_the_path_with_what_there_is():
    path = ssn.follow(lambda s: lambda x: x * x - s, [1.0, -1.0], start=np.ones(1), max_steps=15)
    assert not path.converged and "no convergence" in path.message
    assert path.points[0].value == 1.0 and path.failed
    assert all(not s.converged for _, s in path.failed)


def test_stop_rule_and_step_length_control():
    seen = []
    path = ssn.follow(
        lambda eps: lambda x: x - 1.0 + eps * np.exp(x),
        first=1.0,
        factor=0.5,
        stop=lambda eps, s: abs(s.x[0] - 1.0) < 1e-3,
        start=np.zeros(1),
        callback=lambda point: seen.append(point.value),
    )
    assert path.converged and path.message == "the stop rule holds"
    assert abs(path.solution.x[0] - 1.0) < 1e-3
    assert seen == list(path.values)
    assert min(b / a for a, b in itertools.pairwise(seen)) == pytest.approx(0.5**1.5)  # easy points


def test_secant_predictor_saves_steps():
    def smooth(t):
        return lambda x: x - np.cos(t * x) - t * t

    values = np.linspace(0.5, 1.5, 11)
    with_secant = ssn.follow(smooth, values, start=np.ones(3))
    without = ssn.follow(smooth, values, start=np.ones(3), predictor="none")
    np.testing.assert_allclose(with_secant.solution.x, without.solution.x, atol=1e-8)
    assert any(p.predictor == "secant" for p in with_secant.points)
    assert with_secant.newton_steps < without.newton_steps
    assert "secant" in with_secant.table()


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({}, "either values"),
        ({"values": [1.0], "first": 1.0}, "either values"),
        ({"values": []}, "values is empty"),
        ({"values": [1.0], "stop": lambda v, s: True}, "no effect"),
        ({"first": 1.0}, "give stop"),
        ({"first": 1.0, "stop": lambda v, s: True, "factor": 1.0}, "factor"),
        ({"values": [1.0], "predictor": "cubic"}, "predictor"),
        ({"values": [np.nan]}, r"values\[0\]"),
    ],
)
def test_refused(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        ssn.follow(lambda v: control(), **arguments)


def loaded(name):
    from ssn.problem_file import load

    return load(Path(__file__).parents[2] / "problems" / name)


@pytest.mark.parametrize(
    ("name", "sizes", "most"),
    [("obstacle.py", [16, 32, 64, 128], 5), ("sparse_elliptic.py", [16, 32, 64, 128], 5)],
)
def test_nested_meshes_need_few_steps_on_the_finest(name, sizes, most):
    file = loaded(name)
    path = ssn.follow_meshes(file.builder, sizes, file.transfer)
    assert path.converged and list(path.values) == sizes
    direct = ssn.solve(file.builder(n=sizes[-1])).require()
    np.testing.assert_allclose(path.solution.x, direct.x, atol=1e-6 * np.abs(direct.x).max())
    assert len(path.solution.steps) <= most < len(direct.steps)


def test_nested_meshes_say_where_they_failed():
    file = loaded("sparse_elliptic.py")
    path = ssn.follow_meshes(file.builder, [8, 16], file.transfer, max_steps=1)
    assert not path.converged and "n = 8" in path.message and not path.points and path.failed
    with pytest.raises(ssn.InputError, match="ascend"):
        ssn.follow_meshes(file.builder, [16, 8], file.transfer)
