import json
import time
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
import scipy.sparse as sp

import ssn
from ssn.evidence import assess, compare
from ssn.evidence.agreement import decide
from ssn.evidence.method_result import MethodResult
from ssn.evidence.residual_only import start_near

from . import cases

RESULT = {
    "problem", "parameters", "unknowns", "methods", "agreement", "agreement_tolerance", "rate", "active", "known",
    "checks", "steps",
}  # fmt: skip
METHOD = {
    "name", "converged", "outcome", "objective", "accuracy", "steps", "state_solves", "operator_products", "seconds",
    "distance", "certificate",
}  # fmt: skip
KNOWN = {"what", "expected", "computed", "tolerance", "source", "holds"}

RIGHT = [
    (cases.kinked, "residual-only root finder"),
    (lambda: cases.kinked(400), "residual-only root finder"),
    (lambda: cases.powers(1.5), "residual-only root finder"),
    (cases.control, "proximal gradient"),
    (lambda: cases.control(convection=3.0, source=2.0), "proximal gradient"),
    (lambda: cases.control(beta=1.0), "proximal gradient"),
    (cases.least_squares, "proximal gradient"),
    (lambda: cases.least_squares(15, 30), "proximal gradient"),
    (cases.curved, "proximal gradient"),
    (cases.obstacle, "proximal gradient"),
    (cases.complementarity, "extragradient"),
    (cases.linear_complementarity, "extragradient"),
]


@pytest.mark.parametrize(("make", "reference"), RIGHT)
def test_right_problems_have_all_evidence(make, reference):
    assessment = assess(make())
    assert assessment.failures() == []
    assert assessment.holds
    assert assessment.agreement == "holds"
    assert [m.name for m in assessment.methods] == ["semismooth Newton", reference]
    assert assessment.methods[1].distance <= assessment.agreement_tolerance == 1e-6
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_the_result_object():
    known = {"what": "a", "expected": 1, "computed": 1.0, "tolerance": 0.1, "source": "here", "holds": True}
    assessment = assess(
        cases.control(),
        parameters={"n": np.int64(12), "alpha": 1e-4},
        name="control",
        known=lambda p, s: [known],
    )
    result = json.loads(json.dumps(assessment.as_dict(), allow_nan=False))
    assert set(result) == RESULT
    assert [set(m) for m in result["methods"]] == [METHOD, METHOD]
    assert set(result["rate"]) == {"verdict", "order", "contractions"}
    assert set(result["active"]) == {"sizes", "changes"}
    assert [set(k) for k in result["known"]] == [KNOWN]
    assert all(set(c) == {"name", "holds", "detail"} for c in result["checks"])
    assert result["parameters"] == {"n": 12, "alpha": 1e-4}
    assert (result["problem"], result["unknowns"]) == ("control", 144)
    assert len(result["steps"]) == result["methods"][0]["steps"] == len(assessment.solution.steps)
    ours = result["methods"][0]
    assert ours["distance"] == 0.0 and ours["certificate"]["relative"] < 1e-8
    assert sum(result["active"]["sizes"]["control"].values()) == 144


def test_the_checks_have_stable_names():
    names = [c.name for c in assess(cases.control(), known=lambda p, s: []).checks]
    assert names == [
        "solved", "residual", "run", "certificate", "agreement", "objective", "rate", "newton derivative",
        "newton step", "pieces", "proximal map", "gradient", "state operator", "state solve", "adjoint solve",
        "adjoint", "known values",
    ]  # fmt: skip


def test_the_same_problem_gives_the_same_evidence():
    def repeated(result):
        for method in result["methods"]:
            del method["seconds"]
        return result

    one, other = (repeated(assess(cases.control()).as_dict()) for _ in range(2))
    assert one == other


# agreement


def moved(problem, size, **changes):
    """A solution that claims what it is not: moved by a relative distance."""
    solution = ssn.solve(problem)
    h = np.random.default_rng(0).standard_normal(solution.x.size)
    x = solution.x + size * np.linalg.norm(solution.x) * h / np.linalg.norm(h)
    return replace(solution, x=x, **changes)


def test_a_reference_short_of_time_leaves_it_undecided():
    assessment = assess(cases.control(40, alpha=1e-7), budget=0.0)
    assert assessment.agreement == "undecided"
    assert not assessment.holds
    assert assessment.methods[1].outcome == "budget used up"
    assert any(f.startswith("agreement: undecided") for f in assessment.failures())


@pytest.mark.parametrize(
    "make", [cases.control, cases.least_squares, cases.linear_complementarity, cases.obstacle, cases.kinked]
)
@pytest.mark.parametrize("size", [1e-2, 1e-4])
def test_a_wrong_solution_that_claims_to_be_right(make, size):
    problem = make()
    assessment = assess(problem, solution=moved(problem, size))
    assert assessment.agreement == "fails", assessment.agreement_note
    assert {"agreement", "residual"} <= cases.names(assessment.checks)


def test_a_wrong_certificate_does_not_hide_a_wrong_solution():
    problem = cases.control()
    solution = moved(problem, 1e-3)
    assert assess(problem, solution=replace(solution, certificate=None)).agreement == "fails"


def test_a_solution_within_its_certificate_is_not_contradicted():
    problem = cases.control(n=20, alpha=1e-6)
    steps = len(ssn.solve(problem).steps)
    early = ssn.solve(problem, max_steps=steps - 2)
    assert early.certificate.relative > 1e-3
    assessment = assess(problem, solution=early)
    assert assessment.methods[1].distance > 1e-6
    assert assessment.agreement == "undecided", assessment.agreement_note


def result(distance, *, bound=None, converged=True, accuracy=1e-10, objective=1.0, name="other", x=True):
    certificate = None if bound is None else {"bound": bound, "relative": bound, "method": "given"}
    point = np.ones(2) if x else None
    return MethodResult(
        name,
        converged,
        "converged",
        objective,
        accuracy,
        1,
        0,
        0,
        0.0,
        distance,
        certificate,
        "raised",
        point,
    )


@pytest.mark.parametrize(
    ("other", "verdict"),
    [
        (result(1e-7), "holds"),
        (result(1e-6), "holds"),
        (result(1e-2, bound=1e-3), "fails"),
        (result(1e-2, bound=1e-2), "undecided"),
        (result(1e-2, bound=1e-1), "undecided"),
        (result(1e-2, bound=1e-3, converged=False), "fails"),
        (result(1e-2, converged=False), "undecided"),
        (result(1e-7, converged=False), "holds"),
        (result(float("nan"), x=False), "undecided"),
    ],
)
def test_the_rule(other, verdict):
    problem = cases.least_squares()
    assert decide(problem, ssn.solve(problem), [other], 1e-6)[0] == verdict


def test_a_proven_contradiction_outweighs_agreement():
    problem = cases.least_squares()
    both = [result(1e-9, name="one"), result(1e-2, bound=1e-3, name="two")]
    verdict, note = decide(problem, ssn.solve(problem), both, 1e-6)
    assert verdict == "fails" and note.startswith("two")
    assert decide(problem, ssn.solve(problem), [], 1e-6)[0] == "undecided"


def test_two_solutions_of_a_problem_without_uniqueness_are_undecided():
    # minimise 1/2 (u1 + u2 - 1)^2 over u >= 0: every point of a segment is a solution
    A = np.array([[1.0, 1.0]])
    problem = ssn.CompositeProblem(smooth=ssn.LeastSquares(A, [1.0]), cost=ssn.Bounds(0.0, np.inf))
    solution = ssn.solve(problem)
    away = np.array([1.0, 0.0]) if solution.x[1] > 0.1 else np.array([0.0, 1.0])
    assessment = assess(problem, methods={"corner": lambda p: away}, solution=solution)
    corner = assessment.methods[-1]
    assert corner.distance > 0.1 and corner.accuracy < 1e-12
    assert decide(problem, solution, [corner], 1e-6)[0] == "undecided"


def test_nonconvex_problems_compare_objective_and_stationarity():
    # f = u1^2/2 - u2^2/2 + ...: a saddle and two minimisers at the bounds
    part = ssn.Quadratic(np.diag([1.0, -1.0]), np.array([0.3, 0.1]))
    problem = ssn.CompositeProblem(smooth=part, cost=ssn.Bounds(-1.0, 1.0))
    best = assess(problem, solution=ssn.solve(problem, [0.3, 1.0]))
    assert best.agreement == "holds"
    saddle = ssn.solve(problem, [0.3, -0.1])
    assert saddle.objective > best.solution.objective + 0.1
    verdict = assess(problem, solution=saddle)
    assert verdict.agreement == "undecided" and "nonconvex" in verdict.agreement_note


def test_complementarity_with_two_solutions_is_confirmed_locally():
    # Kojima and Shindo (1986): extragradient may end in the other solution
    def F(x):
        a, b, c, d = x
        return np.array([
            3 * a * a + 2 * a * b + 2 * b * b + c + 3 * d - 6, 2 * a * a + a + b * b + 10 * c + 2 * d - 2,
            3 * a * a + a * b + 2 * b * b + 2 * c + 9 * d - 9, a * a + 3 * b * b + 2 * c + 3 * d - 3,
        ])  # fmt: skip

    def derivative(x):
        a, b, _, _ = x
        return np.array([
            [6 * a + 2 * b, 2 * a + 4 * b, 1, 3], [4 * a + 1, 2 * b, 10, 2], [6 * a + b, a + 4 * b, 2, 9],
            [2 * a, 6 * b, 2, 3],
        ], dtype=float)  # fmt: skip

    problem = ssn.ComplementarityProblem(ssn.SmoothMap(F, derivative), size=4)
    elsewhere = 0
    for start, root in (
        ([1.0, 0.0, 2.5, 0.0], [1.0, 0.0, 3.0, 0.0]),
        ([1.25, 0.0, 0.0, 0.5], [np.sqrt(6.0) / 2.0, 0.0, 0.0, 0.5]),
    ):
        solution = ssn.solve(problem, start)
        assert solution.x == pytest.approx(root, abs=1e-8)
        assessment = assess(problem, solution=solution)
        assert assessment.agreement == "holds", assessment.agreement_note
        if assessment.methods[1].distance > 0.1:
            elsewhere += 1
            assert [m.name for m in assessment.methods[1:]] == ["extragradient", "residual-only root finder"]
    assert elsewhere == 1


def test_a_reference_that_stops_too_early_goes_on(monkeypatch):
    def early(problem, start, *, tolerance, **budget):
        tolerances.append(tolerance)
        return ssn.proximal_gradient(problem, start, tolerance=min(1e3 * tolerance, 0.1), **budget)

    tolerances = []
    monkeypatch.setattr("ssn.evidence.references.proximal_gradient", early)
    assessment = assess(cases.obstacle(40))
    assert assessment.agreement == "holds", assessment.agreement_note
    assert len(tolerances) > 1
    assert tolerances == pytest.approx([3e-7 * 0.1**k for k in range(len(tolerances))])


def test_a_reference_that_did_not_converge_contradicts_nothing():
    problem = cases.obstacle()
    wrong = moved(problem, 1e-2)
    for converged, verdict in ((True, "fails"), (False, "undecided")):
        assert decide(problem, wrong, [result(1e-2, converged=converged)], 1e-6)[0] == verdict


def test_agreement_tolerance_is_never_loose():
    with pytest.raises(ssn.InputError, match="looser"):
        assess(cases.control(), agreement_tolerance=1e-2)


# methods of the user's own


def test_own_methods_are_run_and_judged():
    problem = cases.least_squares()
    seen = {}

    def with_budget(problem, start=None, *, budget):
        seen["budget"], seen["start"] = budget, start
        return ssn.proximal_gradient(problem, start, tolerance=1e-9, budget=budget)

    def stops_early(problem):
        return SimpleNamespace(x=ssn.solve(problem).x * 1.001, converged=True, outcome="good enough", nit=3)

    assessment = compare(problem, [with_budget, ("named", stops_early)], budget=7.0)
    assert [m.name for m in assessment.methods[2:]] == ["with_budget", "named"]
    good, early = assessment.methods[2:]
    assert seen["budget"] == 7.0 and (seen["start"] == 0.0).all()
    assert good.converged and good.distance < 1e-8 and good.bound < 1e-8 and good.operator_products > 0
    assert early.converged and early.outcome == "good enough" and early.steps == 3
    assert early.distance == pytest.approx(1e-3, rel=1e-6)
    assert early.accuracy > 1e-5
    assert assessment.holds  # a method of the user's that stops early is not evidence against our solution


def test_a_method_of_the_users_can_decide():
    problem = cases.control(40, alpha=1e-7)
    ours = ssn.solve(problem)
    assessment = compare(problem, {"another": lambda p: ours.x * (1.0 + 1e-8)}, budget=0.0)
    assert assessment.agreement == "holds"
    assert "another" in assessment.agreement_note


@pytest.mark.parametrize(("factor", "verdict"), [(1.0 + 1e-9, "holds"), (1.0 + 1e-3, "undecided")])
def test_a_problems_own_reference_has_to_agree(factor, verdict):
    problem = cases.kinked()  # an equation, whose root finder starts near our solution
    ours = ssn.solve(problem)
    assessment = assess(problem, reference=lambda p, budget: factor * ours.x)
    assert [m.name for m in assessment.methods][1:] == [
        "residual-only root finder",
        "problem's own reference",
    ]
    assert assessment.methods[1].distance <= 1e-6
    assert assessment.agreement == verdict and "problem's own reference" in assessment.agreement_note
    assert assessment.holds is (verdict == "holds")


def test_a_reference_that_raises_is_named():
    assessment = assess(cases.kinked(), reference=lambda p: 1 / 0)
    assert assessment.agreement == "undecided"
    assert any("problem's own reference: raised ZeroDivisionError" in text for text in assessment.failures())


def test_no_method_takes_the_name_of_the_problems_own_reference():
    with pytest.raises(ssn.InputError, match="two methods named"):
        assess(cases.kinked(), methods={"problem's own reference": lambda p: 0.0})


@pytest.mark.parametrize(
    ("method", "words"),
    [
        (lambda problem: 1 / 0, "ZeroDivisionError"),
        (lambda problem: np.zeros(3), "shape (3,)"),
        (lambda problem: np.full(20, np.nan), "NaN"),
        (lambda problem: None, "shape ()"),
        (lambda: None, "TypeError"),
    ],
)
def test_a_method_that_fails_is_a_failing_check(method, words):
    assessment = compare(cases.least_squares(), {"bad": method})
    assert assessment.failures() == [f for f in assessment.failures() if f.startswith("method bad:")]
    assert len(assessment.failures()) == 1
    assert words in assessment.failures()[0]
    assert assessment.methods[-1].outcome == "raised"
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_bad_methods_are_refused():
    with pytest.raises(ssn.InputError, match="not a function"):
        compare(cases.least_squares(), {"one": 1})
    with pytest.raises(ssn.InputError, match="two methods"):
        compare(cases.least_squares(), [("a", len), ("a", len)])


def test_a_lower_objective_is_a_failing_check():
    problem = cases.least_squares()
    wrong = replace(ssn.solve(problem), x=ssn.solve(problem).x * 0.9)
    assert "objective" in cases.names(assess(problem, solution=wrong).checks)


# known values


def row(**changes):
    return {
        "what": "w",
        "expected": 1.0,
        "computed": 1.0,
        "tolerance": 0.1,
        "source": "s",
        "holds": True,
    } | changes


@pytest.mark.parametrize(
    ("known", "words"),
    [
        (lambda p, s: [row(holds=False)], "expected 1.0"),
        (lambda p, s: [row(computed=float("nan"))], "nan"),
        (lambda p, s: [{"what": "w"}], "lacks expected"),
        (lambda p, s: [3], "lacks what"),
        (lambda p, s: 1 / 0, "ZeroDivisionError"),
        (lambda p, s: None, "TypeError"),
        (lambda p, s: [{k: v for k, v in row(computed=2.0).items() if k != "holds"}], "computed 2.0"),
    ],
)
def test_known_values_that_do_not_hold(known, words):
    assessment = assess(cases.least_squares(), known=known)
    assert cases.names(assessment.checks) == {"known values"}
    assert words in assessment.failures()[0]
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_known_values_that_hold():
    without = {k: v for k, v in row(computed=1.05).items() if k != "holds"}
    assessment = assess(cases.least_squares(), known=lambda p, s: [row(), without])
    assert assessment.holds
    assert [k.holds for k in assessment.known] == [True, True]


# solves that fail


def test_a_failed_solve_is_named():
    assessment = assess(cases.kinked(change=lambda d: lambda x: -d(x)))
    assert not assessment.holds
    assert {"solved", "rate", "newton derivative"} <= cases.names(assessment.checks)
    assert "stalled" in assessment.check("solved").detail
    assert assessment.rate.verdict == "none"
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_no_root():
    equation = cases.Given(lambda x: x**2 + 1.0, lambda x: np.diag(2.0 * x), np.array([1.0]))
    assessment = assess(equation)
    assert "solved" in cases.names(assessment.checks)
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_nan_residual():
    equation = cases.Given(lambda x: np.full(3, np.nan), lambda x: np.eye(3), np.ones(3))
    assessment = assess(equation)
    assert "solved" in cases.names(assessment.checks)
    json.dumps(assessment.as_dict(), allow_nan=False)


def test_a_slow_end_of_the_run_shows():
    problem = cases.control()
    slow = ssn.solve(problem, globalization=cases.AlwaysHalved(), max_steps=200)
    assert slow.converged
    assert cases.names(assess(problem, solution=slow).checks) == {"run"}


def test_progress_gets_words():
    words = []
    assess(cases.least_squares(), progress=words.append, methods={"mine": lambda p: ssn.solve(p).x})
    assert words == ["solving", "proximal gradient", "mine", "measuring the rate", "checking derivatives"]


def test_budget_is_kept():
    began = time.monotonic()
    assess(cases.control(24, alpha=1e-8), budget=0.3)
    assert time.monotonic() - began < 20.0


def test_large_equations_are_confirmed_by_residuals_alone():
    n = 900
    K = sp.csr_array(sp.kron(cases.laplacian(30), np.eye(30)) + sp.kron(np.eye(30), cases.laplacian(30)))
    equation = cases.Given(
        lambda x: K @ x + 5.0 * np.maximum(0.0, x - 1.0) - 0.02,
        lambda x: sp.csr_array(K + sp.diags_array(5.0 * (x > 1.0))),
        np.zeros(n),
    )
    assessment = assess(equation)
    assert assessment.failures() == []


def test_the_root_finder_starts_elsewhere():
    x = np.linspace(1.0, 2.0, 5)
    assert np.linalg.norm(start_near(x) - x) == pytest.approx(1e-2 * np.linalg.norm(x))
    # every point of a line is a root: it finds one, but not ours
    line = cases.Given(
        lambda x: np.array([x[0] + x[1] - 1.0, 0.0]), lambda x: np.array([[1.0, 1.0], [0.0, 0.0]]), [0.5, 0.5]
    )
    solution = ssn.solve(line)
    assert assess(line, solution=solution).agreement == "undecided"


def test_a_budget_of_iterations_repeats_whatever_the_seconds():
    """Seconds of almost nothing do not cut it short; the counts repeat, and too few iterations decide nothing."""
    verdicts = [assess(cases.control(), budget=1e-9, iterations=5000) for _ in range(2)]
    assert [v.agreement for v in verdicts] == ["holds", "holds"]
    assert verdicts[0].methods[1].steps == verdicts[1].methods[1].steps > 3
    few = assess(cases.control(), iterations=3)
    assert few.agreement == "undecided" and few.methods[1].steps == 3
    assert assess(cases.control(), budget=1e-9).agreement == "undecided"
    with pytest.raises(ssn.InputError, match="iterations"):
        assess(cases.control(), iterations=0)


@pytest.mark.parametrize("make", [cases.complementarity, cases.obstacle, cases.least_squares, cases.kinked])
def test_every_kind_of_reference_takes_a_budget_of_iterations(make):
    assert assess(make(), budget=1e-9, iterations=20_000).agreement == "holds"
