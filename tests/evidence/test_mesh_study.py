import json

import numpy as np
import pytest

import ssn
from ssn.evidence import mesh_study
from ssn.evidence.mesh_study import mesh_independent

from . import cases


@pytest.mark.parametrize(
    ("steps", "verdict"),
    [
        ([5, 5, 5], True),
        ([5, 6, 7], True),
        ([5, 6, 8], False),
        ([9, 7, 6], True),
        ([5, 9, 8], False),
        ([12, 8, 9, 12], False),
        ([7, 12, 8], True),
        ([4, 7, 9, 18, 34], False),
        ([4], None),
    ],
)
def test_the_rule(steps, verdict):
    assert mesh_independent(steps, [True] * len(steps))[0] is verdict


def test_an_unsolved_mesh_is_not_independent():
    assert mesh_independent([5, 5], [True, False])[0] is False


def test_a_control_problem():
    def known(problem, solution):
        return [{"what": "w", "expected": 0, "computed": 0, "tolerance": 0, "source": "s", "holds": True}]

    words = []
    study = mesh_study(
        lambda n, alpha: cases.control(n, alpha), [8, 16, 32], parameters={"alpha": 1e-5, "n": 3}, known=known,
        progress=words.append,
    )  # fmt: skip
    assert [row.n for row in study.rows] == [8, 16, 32]
    assert [row.unknowns for row in study.rows] == [64, 256, 1024]
    assert study.mesh_independent is True and study.holds
    assert all(row.accuracy <= 1e-8 and row.state_solves > 0 and len(row.known) == 1 for row in study.rows)
    assert words == ["n = 8", "n = 16", "n = 32"]
    data = json.loads(json.dumps(study.as_dict(), allow_nan=False))
    assert [set(row) for row in data["rows"]] == 3 * [{
        "n", "unknowns", "steps", "state_solves", "accuracy", "outcome", "converged", "objective", "known", "failures",
    }]  # fmt: skip


def test_growing_steps_are_seen():
    # min(x, M x - 1) with M of Murty's kind: Newton steps move one unknown a step
    def build(n):
        M = np.eye(n) + 2.0 * np.triu(np.ones((n, n)), 1)

        def derivative(x):
            low = x <= M @ x - 1.0
            return np.where(low[:, None], np.eye(n), M)

        return cases.Given(lambda x: np.minimum(x, M @ x - 1.0), derivative, np.zeros(n))

    study = mesh_study(build, [4, 8, 16])
    assert study.rows[-1].steps > study.rows[0].steps + 2
    assert study.mesh_independent is False
    assert [check.name for check in study.checks() if not check.holds] == ["mesh study"]


def test_failing_known_values_name_the_mesh():
    study = mesh_study(lambda n: cases.control(n), [6, 8], known=lambda p, s: 1 / 0)
    assert not study.holds
    failing = [c for c in study.checks() if not c.holds]
    assert [c.name for c in failing] == ["mesh values"]
    assert "n = 6" in failing[0].detail and "ZeroDivisionError" in failing[0].detail


def test_unsolved_meshes_fail():
    study = mesh_study(lambda n: cases.kinked(n, change=lambda d: lambda x: -d(x)), [4, 8])
    assert study.mesh_independent is False and not study.holds


def test_one_mesh_is_not_applicable():
    study = mesh_study(lambda n: cases.control(n), [8])
    assert study.mesh_independent is None and study.holds
    assert "not applicable" in study.note


@pytest.mark.parametrize("sizes", [[], [8, 8], [16, 8]])
def test_sizes_must_rise(sizes):
    with pytest.raises(ssn.InputError, match="rise"):
        mesh_study(lambda n: cases.control(n), sizes)


def test_growth_from_zero_is_judged_again_from_mesh_to_mesh():
    """Obstacle problems move the contact set by a layer a step from afar, and hardly from the mesh before."""
    from pathlib import Path

    from ssn.problem_file import load

    file = load(Path(__file__).parents[2] / "problems" / "obstacle.py")
    alone = mesh_study(file.build, [32, 64, 128])
    assert alone.mesh_independent is False and not alone.nested_steps
    study = mesh_study(file.build, [32, 64, 128], transfer=file.transfer)
    assert study.mesh_independent is True and "from the mesh before" in study.note
    assert len(study.nested_steps) == 3 and max(study.nested_steps[1:]) <= 5
    assert study.as_dict()["nested_steps"] == list(study.nested_steps)
    bad = mesh_study(
        file.build, [32, 64, 128], transfer=lambda coarse, fine: lambda x: np.full(fine.unknowns, 50.0)
    )
    assert bad.mesh_independent is False
