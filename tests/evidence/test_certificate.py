from dataclasses import replace

import numpy as np
import pytest

import ssn
from ssn.evidence.certificate import certificate

from . import cases


class SmallBound(ssn.ControlProblem):
    factor = 0.05

    def certify(self, difference, reference, gradient_error, moved=0.0):
        right = super().certify(difference, reference, gradient_error, moved)
        return replace(right, bound=self.factor * right.bound, relative=self.factor * right.relative)


class Overstated(ssn.CompositeProblem):
    """Claims to be twenty times as strongly convex as it is."""

    @property
    def strong_convexity(self):
        return 20.0 * super().strong_convexity


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(
    "make",
    [
        cases.control,
        lambda: cases.control(alpha=1e-6, convection=3.0, source=1.0),
        lambda: cases.control(beta=1.0),
        cases.least_squares,
    ],
)
def test_true_certificates(make, seed):
    problem = make()
    check = certificate(problem, ssn.solve(problem), seed=seed)
    assert check.holds, check.detail
    assert "at 6 points" in check.detail


@pytest.mark.parametrize(
    "make", [lambda: cases.control(kind=SmallBound), lambda: cases.least_squares(kind=Overstated)]
)
def test_bounds_that_are_too_small(make):
    problem = make()
    check = certificate(problem, ssn.solve(problem))
    assert not check.holds
    assert "too small" in check.detail or "the certificate allows" in check.detail


def test_a_point_outside_its_certificate():
    problem = cases.control()
    solution = ssn.solve(problem)
    moved = replace(solution, x=solution.x * (1.0 + 1e-6))
    check = certificate(problem, moved)
    assert not check.holds
    assert "tighter solve" in check.detail


def test_no_certificate_no_check():
    for problem in (cases.curved(), cases.obstacle()):
        assert certificate(problem, ssn.solve(problem)) is None


def test_the_bound_is_not_vacuous():
    problem = cases.control()
    detail = certificate(problem, ssn.solve(problem)).detail
    assert float(detail.split("at best ")[1].split(" ")[0]) < 10.0
    assert np.isfinite(float(detail.split("bound ")[1].split(" ")[0]))
