from __future__ import annotations

import json
import shutil
from dataclasses import replace

import pytest

import ssn.command.run
from ssn.errors import InputError
from ssn.evidence import assess
from ssn.gate import (
    RULES,
    Measured,
    arithmetic,
    as_text,
    baseline_document,
    decide,
    equal_environments,
    figures,
    read_baseline,
    statement,
)
from ssn.problem_file import load
from tests.command.helpers import DRIFT, LEAST_SQUARES, ROOT, ssn_command, write
from tests.command.test_schema import EQUATION, validate

WRONG_DERIVATIVE = EQUATION.replace("np.diag(2 + 5.0 * (x > 1))", "1.02 * np.diag(2 + 5.0 * (x > 1))")


@pytest.fixture(autouse=True)
def wide(monkeypatch):
    """A window in which no line of interest is broken."""
    monkeypatch.setenv("COLUMNS", "200")


@pytest.fixture(scope="module")
def template(tmp_path_factory):
    """Return a folder with problems, and the text of its baseline."""
    folder = tmp_path_factory.mktemp("template")
    for name, text in {"drift": DRIFT, "squares": LEAST_SQUARES, "kinked": EQUATION}.items():
        write(folder, f"{name}.py", text)
    result = ssn_command("gate", str(folder), "--baseline", str(folder / "base.json"), "--update")
    assert result.exit_code == 0, result.stdout + result.stderr
    return (folder / "base.json").read_text("utf-8")


@pytest.fixture
def folder(tmp_path, template):
    for name, text in {"drift": DRIFT, "squares": LEAST_SQUARES, "kinked": EQUATION}.items():
        write(tmp_path, f"problems/{name}.py", text)
    (tmp_path / "base.json").write_text(template, "utf-8")
    return tmp_path


def gate(folder, *words):
    """Run the gate and return the result of the command and its JSON."""
    data = folder / "gate.json"
    data.unlink(missing_ok=True)
    baseline = ("--baseline", str(folder / "base.json"))
    result = ssn_command("gate", str(folder / "problems"), *baseline, "--json", str(data), *words)
    document = json.loads(data.read_text("utf-8")) if data.exists() else None
    if document is not None:
        validate("gate", document)
    return result, document


def test_it_passes_twice_in_a_row_untouched(folder, template):
    for _ in range(2):
        result, document = gate(folder)
        assert result.exit_code == 0, result.stdout + result.stderr
        assert document["holds"] is True and document["compared"] == 4 and document["exact"] is True
        assert document["changes"] == document["refusals"] == document["errors"] == []
        assert "The gate holds: 4 cases compared exactly" in result.stdout
    assert (folder / "base.json").read_text("utf-8") == template


def test_an_update_of_the_same_gives_the_same_bytes(folder, template):
    result, _ = gate(folder, "--update")
    assert result.exit_code == 0 and "Written: " in result.stdout
    assert (folder / "base.json").read_text("utf-8") == template


def test_the_baseline_of_the_repository_holds_twice(tmp_path):
    """For the quick ones: CI runs the gate over all of them."""
    quick = ("frost_bench", "obstacle", "sparse_elliptic", "diabetes_regression", "torsion")
    every = json.loads((ROOT / "benchmarks" / "baseline.json").read_text("utf-8"))
    cases = {name: case for name, case in every["cases"].items() if name.partition(",")[0] in quick}
    some = tmp_path / "some.json"
    some.write_text(as_text({**every, "cases": cases}), "utf-8")
    folder = tmp_path / "problems"
    folder.mkdir()
    for name in quick:
        shutil.copy(ROOT / "problems" / f"{name}.py", folder)
    words = ("gate", str(folder), "--baseline", str(some))
    for number in range(2):
        data = tmp_path / f"{number}.json"
        result = ssn_command(*words, "--json", str(data))
        assert result.exit_code == 0, result.stdout + result.stderr
        document = json.loads(data.read_text("utf-8"))
        validate("gate", document)
        assert document["compared"] >= 6
    stored = (ROOT / "benchmarks" / "baseline.json").read_text("utf-8")
    validate("baseline", json.loads(stored))
    assert as_text(json.loads(stored)) == stored


def test_a_planted_step_count_regression_is_named(folder, monkeypatch):
    right = ssn.command.run.solve

    def slower(problem, **options):
        if isinstance(problem, ssn.ControlProblem):
            options["globalization"] = "residual"
        return right(problem, **options)

    monkeypatch.setattr(ssn.command.run, "solve", slower)
    result, document = gate(folder)
    assert result.exit_code == 1, result.stdout + result.stderr
    worse = {
        (c["case"], c["figure"]): (c["baseline"], c["now"])
        for c in document["changes"]
        if c["kind"] == "worse"
    }
    before, now = worse["drift, n = 40", "steps"]
    assert before < now
    assert {case for case, _ in worse} == {"drift, n = 20", "drift, n = 40"}
    line = f"Worse: drift, n = 40: steps {before} -> {now} (exact in the same environment"
    assert line in result.stdout
    assert not any(case["failures"] for case in document["cases"])  # nothing but the baseline sees it


def test_a_planted_wrong_derivative_is_named(folder):
    assert WRONG_DERIVATIVE != EQUATION
    write(folder, "problems/kinked.py", WRONG_DERIVATIVE)
    result, document = gate(folder)
    assert result.exit_code == 1, result.stdout + result.stderr
    assert document["refusals"] == []
    case = next(case for case in document["cases"] if case["case"] == "kinked")
    assert any(failure.startswith("newton derivative: ") for failure in case["failures"])
    assert "Evidence fails: kinked: newton derivative: " in result.stdout
    change = next(c for c in document["changes"] if c["figure"] == "evidence")
    assert change["case"] == "kinked" and "newton derivative" in set(change["baseline"]) - set(change["now"])
    assert any(c["figure"] == "rate" and c["now"] == "linear" for c in document["changes"])


def test_failing_evidence_fails_even_where_the_baseline_has_it(folder):
    write(folder, "problems/kinked.py", WRONG_DERIVATIVE)
    result, _ = gate(folder, "--update")
    assert result.exit_code == 1 and "Evidence fails: kinked" in result.stdout
    result, document = gate(folder)
    assert result.exit_code == 1 and document["changes"] == []


def test_nothing_compared_is_exit_2(folder):
    empty = json.loads((folder / "base.json").read_text("utf-8")) | {"cases": {}}
    (folder / "base.json").write_text(json.dumps(empty), "utf-8")
    result, document = gate(folder)
    assert result.exit_code == 2
    assert "nothing was compared" in document["refusals"] and document["compared"] == 0
    for path in (folder / "problems").iterdir():
        path.unlink()
    result, document = gate(folder)
    assert result.exit_code == 2 and "no problem files in this folder" in result.stderr


def test_a_case_on_one_side_only_is_exit_2(folder):
    (folder / "problems" / "squares.py").rename(folder / "problems" / "ovals.py")
    result, document = gate(folder)
    assert result.exit_code == 2
    assert [text.partition(";")[0] for text in document["refusals"]] == [
        "ovals: is not in the baseline", "squares: is in the baseline and was not run",
    ]  # fmt: skip
    assert document["compared"] == 3
    assert gate(folder, "--update")[0].exit_code == 0
    assert gate(folder)[0].exit_code == 0


@pytest.mark.parametrize(("before", "after", "complaint"), [
    ("alpha: float = 1e-4", "alpha: float = 2e-4", "parameters"),
    ("-20.0, 20.0", "-20.0, 19.0", "its values at fixed points differ"),
    ("np.sin(6 * x", "np.sin(6.001 * x", "its values at fixed points differ"),
])  # fmt: skip
def test_an_undeclared_change_of_a_problem_is_exit_2(folder, before, after, complaint):
    assert before in DRIFT
    write(folder, "problems/drift.py", DRIFT.replace(before, after))
    result, document = gate(folder)
    assert result.exit_code == 2
    assert all(complaint in text and text.startswith("drift, n = ") for text in document["refusals"])
    assert len(document["refusals"]) == 2 and document["compared"] == 2
    assert gate(folder, "--update")[0].exit_code == 0
    assert gate(folder)[0].exit_code == 0


def test_a_broken_file_is_exit_2_and_writes_no_baseline(folder, template):
    write(folder, "problems/broken.py", "def build():\n    return 1 / 0\n")
    result, document = gate(folder, "--update")
    assert result.exit_code == 2 and "broken.py:2: ZeroDivisionError" in result.stderr
    assert [error["problem"] for error in document["errors"]] == ["broken"]
    assert (folder / "base.json").read_text("utf-8") == template


@pytest.mark.parametrize(("text", "complaint"), [
    (None, "no such file; --update writes it"),
    ("{", "is not JSON"),
    ("[]", "is not a baseline: it has no format number"),
    ('{"format": 2}', "has format 2, this version reads 1"),
    ('{"format": 1, "environment": {}}', "environment or cases are missing"),
    ('{"format": 1, "environment": {}, "cases": {"a": {"problem": "a"}}}', "the case 'a' lacks problem, identity or"),
    ('{"format": 1, "environment": {}, "cases": {"a": {"problem": "a", "identity": {}, "figures": {}}}}',
     "lacks parameters, unknowns, statement"),
])  # fmt: skip
def test_an_unusable_baseline_is_one_line_and_exit_2(folder, text, complaint):
    base = folder / "base.json"
    base.unlink() if text is None else base.write_text(text, "utf-8")
    result, document = gate(folder)
    assert result.exit_code == 2 and complaint in result.stderr and document is None
    assert len(result.stderr.splitlines()) == 1


def test_usage(folder):
    assert "Missing option '--baseline'" in ssn_command("gate", str(folder)).stderr
    nowhere = str(folder / "nowhere" / "base.json")
    result = ssn_command("gate", str(folder / "problems"), "--baseline", nowhere, "--update")
    assert result.exit_code == 2 and "there is no folder" in result.stderr
    assert ssn_command("gate", str(folder / "problems"), "--baseline", str(folder)).exit_code == 2


# The pure part


BEFORE = {
    "steps": 10, "state_solves": 100, "operator_products": 0, "accuracy_met": True, "objective": 2.0,
    "rate": "superlinear", "order": 1.5, "agreement": "holds", "known_values": 3, "evidence": ["gradient", "rate"],
    "pieces": {"control": {"zero": 600, "free": 400}},
}  # fmt: skip
IDENTITY = {"parameters": {"n": 4}, "unknowns": 1000, "statement": [1.0, None, 3.0, 4.0]}
STORED = {"a, n = 4": {"problem": "a", "identity": IDENTITY, "figures": BEFORE}}


def judged(exact, identity=None, **changed):
    case = Measured("a", "a, n = 4", IDENTITY | (identity or {}), BEFORE | changed)
    return decide(STORED, [case], exact=exact)


# figure, new value, verdict in the same environment, verdict on another platform
JUDGED = [
    ("steps", 9, "better", "better"), ("steps", 11, "worse", "tolerated"), ("steps", 12, "worse", "worse"),
    ("state_solves", 115, "worse", "tolerated"), ("state_solves", 116, "worse", "worse"),
    ("operator_products", 2, "worse", "tolerated"), ("operator_products", 3, "worse", "worse"),
    ("accuracy_met", False, "worse", "worse"),
    ("objective", 2.0 + 1e-8, "", ""), ("objective", 2.0 + 4e-8, "worse", "worse"),
    ("objective", 2.0 - 4e-8, "worse", "worse"), ("objective", None, "worse", "worse"),
    ("rate", "exact", "better", "better"), ("rate", "linear", "worse", "worse"),
    ("rate", "undecided", "worse", "worse"), ("rate", "none", "worse", "worse"), ("rate", "odd", "worse", "worse"),
    ("order", 1.45, "", "tolerated"), ("order", 1.35, "worse", "worse"), ("order", 1.7, "better", "better"),
    ("agreement", "undecided", "worse", "worse"), ("agreement", "fails", "worse", "worse"),
    ("known_values", 2, "worse", "worse"), ("known_values", 4, "better", "better"),
    ("evidence", ["rate"], "worse", "worse"), ("evidence", ["gradient", "pieces", "rate"], "better", "better"),
    ("evidence", ["pieces", "rate"], "worse", "worse"),
    ("pieces", {"control": {"zero": 605, "free": 395}}, "worse", "tolerated"),
    ("pieces", {"control": {"zero": 606, "free": 394}}, "worse", "worse"),
    ("pieces", {"state": {"zero": 600, "free": 400}}, "worse", "worse"),
]  # fmt: skip


@pytest.mark.parametrize(("figure", "now", "same", "elsewhere"), JUDGED)
def test_rules(figure, now, same, elsewhere):
    for exact, kind in ((True, same), (False, elsewhere)):
        verdict = judged(exact, **{figure: now})
        assert [(c.figure, c.kind) for c in verdict.changes] == ([(figure, kind)] if kind else [])
        assert verdict.holds is (kind != "worse") and verdict.usable and verdict.compared == 1
        for change in verdict.changes:
            assert change.sentence().startswith(f"a, n = 4: {figure.replace('_', ' ')}")
            assert change.tolerance == RULES[figure].tolerance


def test_every_figure_has_a_rule_and_every_rule_was_tried():
    assert {row[0] for row in JUDGED} == set(RULES) == set(BEFORE)


def test_an_order_that_comes_or_goes_is_the_verdicts_matter():
    assert [c.figure for c in judged(True, order=None, rate="exact").changes] == ["rate"]


@pytest.mark.parametrize(("identity", "complaint"), [
    ({"parameters": {"n": 5}}, "parameters n: 4, now n: 5"), ({"unknowns": 999}, "1000 unknowns, now 999"),
    ({"statement": [1.0, 2.0, 3.0, 4.0]}, "values at fixed points"), ({"statement": [1.0]}, "values at fixed points"),
    ({"statement": [1.0, None, 3.0, 4.001]}, "values at fixed points"),
])  # fmt: skip
def test_another_problem_is_refused_not_judged(identity, complaint):
    verdict = judged(True, identity, steps=50)
    assert not verdict.usable and verdict.changes == () and complaint in verdict.refusals[0]
    assert verdict.refusals[-1] == "nothing was compared"


def test_rounding_in_the_statement_is_the_same_problem():
    assert judged(False, {"statement": [1.0 + 1e-9, None, 3.0, 4.0]}).usable


def test_a_parameter_more_is_the_same_problem_where_its_values_are():
    more = {"parameters": {"n": 4, "dimension": 2}}
    assert judged(False, more).usable
    assert "values at fixed points" in judged(False, more | {"statement": [1.0, 2.0, 3.0, 4.0]}).refusals[0]
    fewer = {"parameters": {"dimension": 2}}
    assert "parameters n: 4, now dimension: 2" in judged(False, fewer).refusals[0]


def test_figures_on_one_side_only_are_refused():
    case = Measured("a", "a, n = 4", IDENTITY, BEFORE | {"colour": 1})
    assert "figures on one side only (colour)" in decide(STORED, [case], exact=True).refusals[0]


def test_failing_evidence_is_named():
    case = Measured("a", "a, n = 4", IDENTITY, BEFORE, ("gradient: is not one",))
    verdict = decide(STORED, [case], exact=True)
    assert verdict.failing == (("a, n = 4", "gradient: is not one"),) and not verdict.holds


def test_environments():
    here = {
        "python": "3.11.7",
        "numpy": "2.0",
        "threads": {"OMP_NUM_THREADS": "1"},
        "cpus": 8,
        "platform": "one",
    }
    assert equal_environments(here, here | {"platform": "another kernel", "ssn": "9"})
    assert not equal_environments(here, here | {"numpy": "2.1"})
    assert not equal_environments(here, here | {"arithmetic": "0"})
    assert not equal_environments(here, here | {"threads": {"OMP_NUM_THREADS": None}})
    assert equal_environments(here, here | {"threads": {}, "cpus": 1})
    assert arithmetic() == arithmetic()


def test_a_baseline_survives_writing_and_reading():
    case = Measured("a", "a, n = 4", IDENTITY, BEFORE)
    text = as_text(baseline_document({"ssn": "0"}, [case]))
    read = read_baseline(text, "base.json")
    assert read.cases == STORED and read.environment == {"ssn": "0"}
    assert as_text(json.loads(text)) == text
    with pytest.raises(InputError, match=r"base\.json: has format 3"):
        read_baseline(text.replace('"format": 1', '"format": 3'), "base.json")


def test_figures_and_statement_repeat(tmp_path):
    file = load(write(tmp_path, "drift.py", DRIFT))
    problem = file.build(n=20)
    assessment = assess(problem, name="drift")
    found = figures(assessment)
    assert set(found) == set(RULES)
    assert found == figures(assess(file.build(n=20), name="drift"))
    assert statement(file.build(n=20), 8) == statement(problem, 8)
    assert None not in statement(problem, 8)
    spoilt = replace(assessment.methods[0], accuracy=1e-3)
    assert figures(replace(assessment, methods=(spoilt,)))["accuracy_met"] is False
    # no time, no host: nothing in the figures changes from run to run
    assert not {"seconds", "distance"} & set(found)


def test_a_statement_that_is_undefined_somewhere():
    class Logarithm:
        start = (1.0, 1.0)

        def residual(self, x):
            if min(x) <= 0:
                raise ValueError("undefined")
            return [float("inf"), 0.0] if max(x) > 100 else x

    assert statement(Logarithm(), 2)[2:] == [None, None]
    assert statement(Logarithm(), 2)[0] == pytest.approx(2**0.5)
