from dataclasses import replace

import numpy as np
import pytest

import ssn
from ssn.evidence import rate
from ssn.evidence.local import Local

from . import cases


def scaled(factor):
    return lambda derivative: lambda x: factor * derivative(x)


def frozen(derivative):
    return lambda x: derivative(np.full(x.size, 3.0))


def kinkless(derivative):
    return lambda x: cases.laplacian(x.size)


SUPERLINEAR = [1.25, 1.5, 2.0]

VERDICTS = [
    ("piecewise affine", cases.kinked, {"exact"}),
    ("fixed slope", cases.fixed_slope, {"linear"}),
    ("derivative of the start", lambda: cases.kinked(change=frozen), {"linear"}),
    ("derivative nearly right", lambda: cases.kinked(change=scaled(1.001)), {"linear"}),
    ("derivative scaled", lambda: cases.kinked(change=scaled(1.6)), {"linear"}),
    ("wrong sign", lambda: cases.kinked(change=scaled(-1.0)), {"none"}),
    ("no kink in the derivative", lambda: cases.kinked(change=kinkless), {"linear", "none"}),
    ("bounds and sparsity of a control", cases.control, {"exact"}),
    ("nonsymmetric state equation", lambda: cases.control(convection=3.0, source=2.0), {"exact"}),
    ("a vanishing control", lambda: cases.control(beta=1.0), {"exact"}),
    ("least squares", cases.least_squares, {"exact"}),
    ("least squares, fewer rows than columns", lambda: cases.least_squares(15, 30), {"exact"}),
    ("smooth and curved", cases.curved, {"superlinear"}),
    ("Hessian without its second-order term", lambda: cases.curved(gauss_newton=True), {"linear"}),
    ("obstacle", cases.obstacle, {"exact"}),
    ("linear complementarity", cases.linear_complementarity, {"exact"}),
    ("cubic complementarity", cases.complementarity, {"superlinear"}),
]  # fmt: skip


@pytest.mark.parametrize(
    ("make", "wanted"), [case[1:] for case in VERDICTS], ids=[case[0] for case in VERDICTS]
)
def test_verdict(make, wanted):
    verdict = rate(make())
    assert verdict.verdict in wanted, verdict.sentence()
    assert verdict.holds == (verdict.verdict in ("exact", "superlinear"))


def test_how_many_verdicts():
    assert len(VERDICTS) == 17


@pytest.mark.parametrize("order", SUPERLINEAR)
def test_order_of_max_composed_with_powers(order):
    verdict = rate(cases.powers(order))
    assert verdict.verdict == "superlinear"
    assert verdict.order == pytest.approx(order, abs=0.1)


@pytest.mark.parametrize("seed", range(5))
def test_order_does_not_depend_on_the_seed(seed):
    assert rate(cases.powers(1.25), seed=seed).order == pytest.approx(1.25, abs=0.1)
    assert rate(cases.kinked(), seed=seed).verdict == "exact"


def test_one_unknown_has_two_sides():
    # on one side of the kink the step is exact, on the other it is not: a one-sided sample would miss that
    verdict = rate(cases.powers(1.5, n=1), samples=2)
    assert verdict.verdict == "superlinear"
    assert verdict.order == pytest.approx(1.5, abs=0.1)


def test_wrong_derivatives_with_the_right_solution_contract_by_their_error():
    # G = c K near the root gives the contraction |1 - 1/c|, whatever solved the problem
    right = ssn.solve(cases.kinked())
    for factor, wanted, level in (
        (0.4, "none", 1.5),
        (-1.0, "none", 2.0),
        (2.0, "linear", 0.5),
        (0.8, "linear", 0.25),
    ):
        verdict = rate(cases.kinked(change=scaled(factor)), right)
        assert verdict.verdict == wanted
        assert verdict.contractions[-3][1] == pytest.approx(level, rel=1e-2)


@pytest.mark.parametrize(
    ("make", "wanted"),
    [(cases.kinked, "exact"), (lambda: cases.powers(1.5), "superlinear"), (cases.fixed_slope, "linear")],
)
def test_verdict_does_not_depend_on_the_number_of_steps(make, wanted):
    equation = make()
    near = ssn.solve(equation, ssn.solve(equation).x + 1e-4)
    slow = ssn.solve(equation, globalization=cases.AlwaysHalved(), max_steps=200)
    assert near.converged and slow.converged
    assert len(slow.steps) > 20 and len(near.steps) < 12
    verdicts = [rate(equation, solution) for solution in (near, slow)]
    assert [v.verdict for v in verdicts] == [wanted, wanted]
    for one, other in zip(*(v.contractions for v in verdicts), strict=True):
        if max(one[1], other[1]) > 1e-7:
            assert one == pytest.approx(other, rel=1e-3)


def test_verdict_does_not_depend_on_the_tolerance_of_the_solve():
    problem = cases.control()
    loose, tight = (rate(problem, ssn.solve(problem, tolerance=t)) for t in (1e-3, 1e-10))
    assert loose.verdict == tight.verdict == "exact"
    assert loose.exact_below == tight.exact_below


def test_a_problem_without_quadratic_cost_is_measured_by_a_proximal_point_subproblem():
    problem = cases.control(alpha=0.0, n=8)
    solution = ssn.solve(problem)
    assert problem.accuracy(solution.x) <= 1e-9
    verdict = rate(problem, replace(solution, converged=True))
    assert verdict.verdict == "exact"
    assert "proximal point" in verdict.note


def test_fixed_contraction_is_measured():
    q = [q for _, q in rate(cases.fixed_slope(0.3)).contractions]
    assert q == pytest.approx([0.3] * len(q), rel=1e-2)


def test_the_same_seed_gives_the_same_bits():
    assert rate(cases.powers(1.5)) == rate(cases.powers(1.5))
    assert rate(cases.powers(1.5)) != rate(cases.powers(1.5), seed=1)


def test_exact_below_falls_with_the_mesh():
    coarse, fine = rate(cases.control(6)), rate(cases.control(40, alpha=1e-5))
    assert coarse.verdict == fine.verdict == "exact"
    assert fine.exact_below < coarse.exact_below


def test_an_ill_conditioned_equation_that_vanishes_exactly_at_its_root():
    # steps scatter by condition times rounding around a root with residual zero: that is no linear rate
    H = 1.0 / (1.0 + np.add.outer(np.arange(7), np.arange(7)))
    b = H @ np.ones(7)
    verdict = rate(
        cases.Given(lambda x: H @ x - b, lambda x: H, np.ones(7)), deltas=(1e-1, 1e-2, 1e-3, 1e-4, 1e-5)
    )
    assert verdict.verdict == "exact", verdict.sentence()
    assert verdict.floor > 1e-11


def test_singular_systems_near_the_solution():
    right = ssn.solve(cases.kinked())
    verdict = rate(cases.kinked(change=lambda d: lambda x: np.zeros((20, 20))), right)
    assert verdict.verdict == "none"
    assert verdict.contractions[-1][1] == np.inf
    assert verdict.as_dict()["contractions"][-1] == [1e-6, None]


def test_the_linear_solve_is_accounted_for():
    problem = cases.control()
    local = Local(problem, ssn.solve(problem).x)
    at = local.evaluate(local.x + 0.1 * local.direction(np.random.default_rng(0), smooth=False))
    direction = replace(local.step(at), relative_residual=1e-3)
    assert local.solve_error(at, direction) == pytest.approx(1e-3 * at.norm)
    assert local.solve_error(at, replace(direction, relative_residual=0.0)) == 0.0


def test_no_solution_no_rate():
    equation = cases.kinked()
    failed = replace(ssn.solve(equation), converged=False, outcome=ssn.Outcome.STALLED)
    verdict = rate(equation, failed)
    assert verdict.verdict == "none"
    assert "stalled" in verdict.note


def test_a_domain_that_perturbations_leave():
    # log x = 0 with root 1e-0: a relative perturbation of 0.5 would do no harm, an absolute one to x < 0 would
    equation = cases.Given(lambda x: np.log(x), lambda x: np.diag(1.0 / x), np.array([1.5, 1.5]))
    verdict = rate(equation, deltas=(0.99, 0.9, 1e-1, 1e-2, 1e-3, 1e-4))
    assert verdict.verdict == "superlinear"
    assert verdict.order == pytest.approx(2.0, abs=0.1)


def test_rounding_that_leaves_too_little():
    # (x - 1)^5: the Newton step at a multiple root is known to 1e-3 only
    equation = cases.Given(
        lambda x: (x - 1.0) ** 5,
        lambda x: np.diag(5.0 * (x - 1.0) ** 4 + 1e-300),
        np.array([1.1]),
        scale=1e-3,
    )
    assert rate(equation).verdict in ("undecided", "linear", "none")


@pytest.mark.parametrize("deltas", [(0.1, 0.01), (0.1, 0.2, 0.3), (2.0, 0.1, 0.01), (0.1, 0.0, -1.0)])
def test_bad_deltas_are_refused(deltas):
    with pytest.raises(ssn.InputError, match="deltas"):
        rate(cases.kinked(), deltas=deltas)


def test_the_dual_variable_is_measured_with_its_adjoint_kept_consistent():
    problem = cases.control()
    local = Local(problem, ssn.solve(problem).x)
    h = local.direction(np.random.default_rng(0), smooth=False)
    m = problem.target.size
    assert problem.adjoint(h[:m]) == pytest.approx(h[m:])
    assert problem.observations.norm(h[:m]) == pytest.approx(1.0)
    assert "observation norm" in local.note
