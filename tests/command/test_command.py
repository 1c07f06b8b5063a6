from __future__ import annotations

import json
import re
import signal
import subprocess
import time

import pytest

from tests.command.helpers import (
    DRIFT,
    LEAST_SQUARES,
    NOT_THE_GRADIENT,
    ROOT,
    build_with,
    command_line,
    environment,
    ssn_command,
    write,
)

RESULT_KEYS = {
    "problem", "parameters", "unknowns", "methods", "agreement", "agreement_tolerance", "rate", "active", "known",
    "checks", "steps",
}  # fmt: skip
METHOD_KEYS = {
    "name", "converged", "outcome", "objective", "accuracy", "steps", "state_solves", "operator_products", "seconds",
    "distance", "certificate",
}  # fmt: skip


@pytest.fixture
def drift(tmp_path):
    return write(tmp_path, "drift.py", DRIFT)


def check_document(document):
    assert {"format", "environment", "results", "errors"} == set(document)
    assert document["format"] == 1
    assert {"ssn", "python", "numpy", "scipy", "factorization", "threads"} <= set(document["environment"])
    for result in document["results"]:
        assert set(result) >= RESULT_KEYS
        assert result["methods"][0]["name"] == "semismooth Newton"
        assert all(set(method) >= METHOD_KEYS for method in result["methods"])
        assert result["agreement"] in ("holds", "fails", "undecided")
        assert set(result["rate"]) >= {"verdict", "order", "contractions"}
        assert set(result["active"]) >= {"sizes", "changes"}


def assert_shown(text, *words):
    assert [word for word in words if word not in text] == []


# compare


def test_a_problem_of_ones_own_runs_through_compare_unchanged(drift):
    assert len(DRIFT.splitlines()) <= 42
    result = ssn_command("compare", drift)
    assert result.exit_code == 0, result.stdout + result.stderr
    assert result.stderr == ""
    assert_shown(
        result.stdout, "drift, n = 40", "semismooth Newton", "proximal gradient", "of the exact discrete solution",
        "patches in use", "One space dimension", "All evidence holds (1 problem).",
    )  # fmt: skip


def test_sizes_parameters_and_every_output(drift, tmp_path):
    page, data, folder = tmp_path / "page.html", tmp_path / "data.json", tmp_path / "pictures"
    result = ssn_command(
        "compare", drift, "--sizes", "10,20", "--parameter", "alpha=1e-3", "--html", str(page), "--json", str(data),
        "--picture", str(folder),
    )  # fmt: skip
    assert result.exit_code == 0, result.stdout + result.stderr
    document = json.loads(data.read_text("utf-8"))
    check_document(document)
    assert [r["parameters"]["n"] for r in document["results"]] == [10, 20]
    assert all(r["parameters"]["alpha"] == 1e-3 for r in document["results"])
    assert sorted(p.name for p in folder.iterdir()) == ["drift-n10.png", "drift-n20.png"]
    text = page.read_text("utf-8")
    outside_data = re.sub(r"data:[a-z+/]+;base64,[A-Za-z0-9+/=]*", "", text)
    assert not re.search(r"https?:|src=\"(?!\")|<script|<link|@import|url\(", outside_data)
    assert text.count("data:image/") == 4
    assert text.count("<section") == 3
    assert_shown(text, "semismooth Newton", "one space dimension", "patches in use", "factorization")


def test_json_on_standard_output_is_json_only(tmp_path):
    noisy = write(tmp_path, "noisy.py", DRIFT.replace("    h = 1.0", "    print('hello')\n    h = 1.0"))
    done = subprocess.run(
        command_line("compare", noisy, "--json", "-"), capture_output=True, text=True, env=environment(), cwd=tmp_path
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    document = json.loads(done.stdout)
    check_document(document)
    assert len(document["results"]) == 1
    assert "hello" in done.stderr and "hello" not in done.stdout


def test_descriptor_one_is_kept_free_too(tmp_path):
    shouting = DRIFT.replace("    h = 1.0", "    import os\n    os.write(1, b'compiled')\n    h = 1.0")
    done = subprocess.run(
        command_line("solve", write(tmp_path, "loud.py", shouting), "--json", "-"),
        capture_output=True, text=True, env=environment(), cwd=tmp_path,
    )  # fmt: skip
    assert json.loads(done.stdout)["converged"] is True
    assert "compiled" in done.stderr


BROKEN = [
    ("no_build", "x = 1\n", "no_build.py: has no function build"),
    ("syntax", "def build(:\n", "syntax.py:1: syntax error"),
    ("shapes", build_with("return ssn.LeastSquares(np.eye(3), np.ones(4))"),
     "shapes.py:6: b has shape (4,), expected (3,)"),
    ("gradient_shape", NOT_THE_GRADIENT.replace("2.0 * u - 1.0", "u[:-1]"), "gradient has shape (3,), expected (4,)"),
    ("target", DRIFT.replace("np.sin(6 * x[x > 0.5])", "np.log(x[x > 0.5] - 0.9)"), "target[0] is nan"),
    ("bounds", DRIFT.replace("-20.0, 20.0", "20.0, -20.0"), "lower 20.0 > upper -20.0"),
    ("none", build_with("pass"), "build returned None"),
    ("raises", build_with("return 1 // 0"), "raises.py:6: ZeroDivisionError in build"),
]  # fmt: skip


@pytest.mark.filterwarnings("ignore:invalid value:RuntimeWarning")
@pytest.mark.parametrize(("name", "text", "complaint"), BROKEN, ids=[case[0] for case in BROKEN])
@pytest.mark.parametrize("command", ["compare", "solve"])
def test_a_broken_file_is_one_line_and_exit_2(tmp_path, command, name, text, complaint):
    result = ssn_command(command, write(tmp_path, f"{name}.py", text))
    assert result.exit_code == 2, result.stdout + result.stderr
    assert complaint in result.stderr
    assert len(result.stderr.splitlines()) == 1


@pytest.mark.parametrize(("words", "complaint"), [
    (["--parameter", "m=3"], "build has no parameter 'm'; it takes: n, alpha, beta, speed, patches"),
    (["--parameter", "n"], "'n' is not NAME=VALUE"),
    (["--parameter", "n=1", "--parameter", "n=2"], "n is given twice"),
    (["--parameter", "n=many"], "parameter n='many' does not fit: expected a whole number"),
    (["--sizes", "32,x"], "is not a list of positive whole numbers"),
    (["--sizes", "10", "--parameter", "n=5"], "not both"),
    (["--budget", "0"], "--budget"),
    (["--no-such-option"], "No such option"),
    (["--json", "nowhere/out.json"], "there is no folder nowhere"),
    (["--method", "drift"], "expected MODULE:FUNCTION"),
    (["--method", "no_such_module_anywhere:f"], "ModuleNotFoundError"),
    (["--method", "missing.py:f"], "missing.py"),
    (["--method", "math:no_such_function"], "math has no function 'no_such_function'"),
    (["nowhere.py"], "nowhere.py: no such file"),
])  # fmt: skip
def test_bad_usage_is_one_line_and_exit_2(drift, words, complaint):
    result = (
        ssn_command("compare", drift, *words) if words != ["nowhere.py"] else ssn_command("compare", *words)
    )
    assert result.exit_code == 2, result.stdout + result.stderr
    assert complaint in result.stderr
    assert len(result.stderr.splitlines()) == 1


def test_sizes_without_a_mesh_are_refused(tmp_path):
    result = ssn_command("compare", write(tmp_path, "squares.py", LEAST_SQUARES), "--sizes", "3,4")
    assert result.exit_code == 2
    assert "--sizes has no effect" in result.stderr


def test_a_gradient_that_is_not_the_gradient_fails_a_named_check(tmp_path):
    result = ssn_command("compare", write(tmp_path, "wrong.py", NOT_THE_GRADIENT))
    assert result.exit_code == 1, result.stdout + result.stderr
    assert "gradient" in result.stdout.split("Conclusion")[1]
    assert "Evidence does not hold for wrong." in result.stdout


def test_a_bad_file_does_not_lose_the_results_of_the_others(drift, tmp_path):
    write(tmp_path, "broken.py", "def build():\n    return 1 / 0\n")
    write(tmp_path, "squares.py", LEAST_SQUARES)
    data = tmp_path / "data.json"
    result = ssn_command("compare", str(tmp_path), "--json", str(data))
    assert result.exit_code == 2
    assert "broken.py:2: ZeroDivisionError" in result.stderr
    document = json.loads(data.read_text("utf-8"))
    assert [r["problem"] for r in document["results"]] == ["drift", "squares"]
    assert [e["problem"] for e in document["errors"]] == ["broken"]
    assert "Not run to the end: broken." in result.stdout


def test_a_method_of_ones_own_takes_part(drift, tmp_path):
    method = "import ssn\n\ndef half(problem, start, budget):\n    return 0.5 * ssn.solve(problem).x\n"
    data = tmp_path / "data.json"
    place = write(tmp_path, "methods/mine.py", method)
    result = ssn_command("compare", drift, "--method", f"{place}:half", "--json", str(data))
    assert "mine:half" in result.stdout
    methods = {m["name"]: m for m in json.loads(data.read_text("utf-8"))["results"][0]["methods"]}
    assert methods["mine:half"]["distance"] == pytest.approx(0.5, rel=1e-6)
    assert result.exit_code in (0, 1)


# solve


def test_solve_shows_the_steps_and_writes_picture_and_json(drift, tmp_path):
    picture, data = tmp_path / "steps.png", tmp_path / "data.json"
    result = ssn_command(
        "solve", drift, "--parameter", "n=15", "--picture", str(picture), "--json", str(data)
    )
    assert result.exit_code == 0, result.stdout + result.stderr
    assert "Converged in" in result.stdout and "of the exact discrete solution" in result.stdout
    assert picture.read_bytes()[:4] == b"\x89PNG"
    document = json.loads(data.read_text("utf-8"))
    assert document["converged"] is True and document["parameters"]["n"] == 15
    assert len(document["steps"]) > 0


def test_solve_that_does_not_converge_is_exit_1_and_says_what_to_try(drift):
    result = ssn_command("solve", drift, "--max-steps", "1")
    assert result.exit_code == 1
    assert "Not converged after 1 step: step limit" in result.stdout and "Raise max_steps" in result.stdout


def test_a_globalization_that_does_not_fit_is_exit_2(tmp_path):
    result = ssn_command("solve", write(tmp_path, "squares.py", LEAST_SQUARES), "--globalization", "nothing")
    assert result.exit_code == 2 and "'nothing'" in result.stderr


def test_a_picture_of_an_unknown_kind_is_refused_before_the_work(drift, tmp_path):
    result = ssn_command("solve", drift, "--picture", str(tmp_path / "out.txt"))
    assert result.exit_code == 2 and "ends in one of .png" in result.stderr


@pytest.mark.parametrize(("hook", "complaint"), [
    ("def picture(problem, solution):\n    return 3\n", "picture must return a matplotlib Figure, got 3"),
    ("def summary(problem, solution):\n    return solution.nothing\n", "AttributeError in summary"),
])  # fmt: skip
def test_a_hook_that_fails_is_named(tmp_path, hook, complaint):
    file = write(tmp_path, "hooks.py", LEAST_SQUARES + "\n\n" + hook)
    result = ssn_command("solve", file, "--picture", str(tmp_path / "out.png"))
    assert result.exit_code == 2 and complaint in result.stderr
    assert "Converged in" in result.stdout


# list and the program itself


def test_list_shows_problem_files(drift, tmp_path):
    write(tmp_path, "squares.py", LEAST_SQUARES)
    result = ssn_command("list", str(tmp_path))
    assert result.exit_code == 0
    assert (
        "Sources along a channel" in result.stdout
        and "20, 40" in result.stdout
        and "price=0.1" in result.stdout
    )


def test_list_without_a_folder_looks_for_problems(drift, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = ssn_command("list")
    assert result.exit_code == 2 and "no folder 'problems'" in result.stderr
    write(tmp_path, "problems/squares.py", LEAST_SQUARES)
    listed = ssn_command("list").stdout
    assert "Problem files in problems" in listed and "squares.py" in listed


def test_the_problems_of_the_repository_are_listed():
    result = ssn_command("list", str(ROOT / "problems"))
    assert result.exit_code == 0, result.stderr
    assert "obstacle.py" in result.stdout


def test_version_help_and_nothing():
    assert ssn_command("--version").stdout.startswith("ssn ")
    for words in (["--help"], ["solve", "--help"], ["compare", "--help"], ["list", "-h"]):
        assert ssn_command(*words).exit_code == 0
    assert ssn_command().exit_code == 2


def test_the_traceback_is_there_for_those_who_ask(tmp_path):
    file = write(tmp_path, "raises.py", build_with("return 1 // 0"))
    done = subprocess.run(
        command_line("--traceback", "compare", file), capture_output=True, text=True, env=environment(), cwd=tmp_path
    )  # fmt: skip
    assert done.returncode == 2
    assert "Traceback" in done.stderr and "return 1 // 0" in done.stderr


# Ctrl-C

SLOW = DRIFT.replace("def build(", '''class Sleepy:
    def __init__(self, model):
        self.model, self.size, self.calls = model, model.size, 0

    def __getattr__(self, name):
        return getattr(self.model, name)

    def attach(self, work):
        self.model.attach(work)

    def residual(self, y, rhs):
        return self.model.residual(y, rhs)

    def adjoint_residual(self, p, rhs):
        return self.model.adjoint_residual(p, rhs)

    def solve(self, rhs):
        self.calls += 1
        if self.calls == 20:
            open("asleep", "w").close()
            time.sleep(120)
        return self.model.solve(rhs)

    def adjoint_solve(self, rhs):
        return self.model.adjoint_solve(rhs)


def build(''').replace("state=ssn.SteadyState(sp.csr_array(diffusion + current))",
                       "state=Sleepy(ssn.SteadyState(sp.csr_array(diffusion + current)))").replace(
    "import numpy", "import time\n\nimport numpy", 1)  # fmt: skip


@pytest.mark.skipif(not hasattr(signal, "pthread_sigmask"), reason="signals as on POSIX")
@pytest.mark.parametrize(
    ("command", "solves", "complaint"),
    [
        ("solve", 8, "interrupted; the best iterate:"),
        ("compare", 8, "interrupted; the best iterate:"),
        ("compare", 60, "interrupted; the solve was complete, its evidence is not:"),
        ("compare", 1, "interrupted before the first step"),
    ],
)
def test_ctrl_c_prints_the_best_iterate_and_exits_130(tmp_path, command, solves, complaint):
    file = write(tmp_path, "slow.py", SLOW.replace("calls == 20", f"calls == {solves}"))
    process = subprocess.Popen(
        command_line(command, file), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment(),
        cwd=tmp_path, preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
    )  # fmt: skip
    with process:
        deadline = time.monotonic() + 60
        while process.poll() is None and time.monotonic() < deadline and not (tmp_path / "asleep").exists():
            time.sleep(0.05)
        process.send_signal(signal.SIGINT)
        try:
            out, err = process.communicate(timeout=60)
        finally:
            process.kill()
    assert process.returncode == 130, out + err
    assert complaint in err
    assert ("residual" in out and "onverge" in out) or solves == 1
    assert "Traceback" not in out + err
