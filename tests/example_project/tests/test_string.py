from pathlib import Path

from taut_string import StringOverBed

import ssn
from ssn.problem_file import load
from ssn.testing import (
    assert_matches_reference,
    assert_mesh_independent,
    assert_newton_differentiable,
    assert_superlinear,
)

FILE = load(Path(__file__).parents[1] / "problems" / "string_over_bed.py")


def test_the_derivative_is_a_newton_derivative():
    assert_newton_differentiable(StringOverBed(60))


def test_steps_converge_superlinearly():
    solution = assert_superlinear(StringOverBed(60), least_order=1.5)
    assert StringOverBed(60).contact_length(solution.x) > 0.1


def test_another_method_finds_the_same_string():
    assert_matches_reference(FILE.build(n=60), known=FILE.known)


def test_steps_do_not_grow_with_the_mesh():
    assert_mesh_independent(FILE.build, [50, 100, 200], known=FILE.known)


def test_a_light_string_does_not_touch():
    string = StringOverBed(60, weight=1.0)
    assert string.contact_length(ssn.solve(string).require().x) == 0.0
