from __future__ import annotations

import json
import re
import signal
import subprocess
import time

import pytest

from tests.command.helpers import (
    DRIFT,
    HEAD,
    LEAST_SQUARES,
    NOT_THE_GRADIENT,
    ROOT,
    command_line,
    environment,
    ssn_command,
    write,
)  # fmt: skip
from tests.command.test_schema import validate

KNOWN = """

def known(problem, solution):
    n = problem.state.size
    return [{"what": "number of patches", "expected": 8, "computed": solution.x.size if n < 40 else %s, "tolerance": 0,
             "source": "the definition"}]
"""


@pytest.fixture(autouse=True)
def wide(monkeypatch):
    """A window in which no line of interest is broken."""
    monkeypatch.setenv("COLUMNS", "200")


@pytest.fixture
def drift(tmp_path):
    return write(tmp_path, "drift.py", DRIFT)


def verified(path):
    document = json.loads(path.read_text("utf-8"))
    validate("verify", document)
    return {result["problem"]: result for result in document["results"]}, document


def test_a_folder_of_good_problems(tmp_path, drift):
    write(tmp_path, "squares.py", LEAST_SQUARES)
    data, pictures = tmp_path / "data.json", tmp_path / "pictures"
    result = ssn_command("verify", str(tmp_path), "--json", str(data), "--picture", str(pictures))
    assert result.exit_code == 0, result.stdout + result.stderr
    assert result.stderr == ""
    results, document = verified(data)
    assert list(results) == ["drift", "squares"] and document["errors"] == []
    assert [row["n"] for row in results["drift"]["mesh_study"]["rows"]] == [20, 40]
    assert results["drift"]["mesh_study"]["mesh_independent"] is True
    assert results["squares"]["mesh_study"] is None
    assert results["squares"]["mesh_study_note"] == "not applicable: the problem has no mesh"
    names = {check["name"] for check in results["drift"]["checks"]}
    assert {"newton derivative", "gradient", "rate", "agreement", "certificate", "state operator"} <= names
    assert sorted(p.name for p in pictures.iterdir()) == ["drift-n40.png", "squares.png"]
    assert (pictures / "drift-n40.png").read_bytes()[:4] == b"\x89PNG"
    lines = result.stdout.splitlines()
    assert any(re.match(r"mesh study +- +not applicable", line) for line in lines)
    assert any(
        re.match(r"drift, n = 40 +yes +exact +3, 4 +yes +holds +\S+ +- +\S+ +holds", line) for line in lines
    )
    folder_lines = [line for line in lines if line.startswith(f"{tmp_path}: ")]
    assert len(folder_lines) == 1 and "2 problems, all evidence holds" in folder_lines[0]


def test_bad_evidence_is_named_and_exit_1(tmp_path, drift):
    write(tmp_path, "wrong.py", NOT_THE_GRADIENT)
    data = tmp_path / "data.json"
    result = ssn_command("verify", str(tmp_path), "--json", str(data))
    assert result.exit_code == 1, result.stdout + result.stderr
    results, _ = verified(data)
    assert results["drift"]["holds"] is True and results["drift"]["failures"] == []
    assert results["wrong"]["holds"] is False
    assert any(failure.startswith("gradient: ") for failure in results["wrong"]["failures"])
    assert "evidence does not hold for wrong (" in result.stdout.replace("\n", " ")


def test_a_file_that_does_not_build_is_exit_2_and_loses_nothing(tmp_path, drift):
    write(tmp_path, "broken.py", "def build():\n    return 1 / 0\n")
    data = tmp_path / "data.json"
    result = ssn_command("verify", str(tmp_path), "--json", str(data))
    assert result.exit_code == 2
    assert "broken.py:2: ZeroDivisionError" in result.stderr
    results, document = verified(data)
    assert list(results) == ["drift"] and [e["problem"] for e in document["errors"]] == ["broken"]
    assert "not run to the end: broken" in result.stdout


REFERENCE = """

class Twice:
    start = np.ones(3)

    def residual(self, x):
        return 2.0 * x - 1.0

    def linearize(self, x):
        return ssn.Linearization(self.residual(x), 2.0 * np.eye(3))


def build():
    return Twice()


def reference(problem, budget):
    return np.full(3, {value})
"""


@pytest.mark.parametrize(("value", "code"), [(0.5, 0), (0.501, 1)])
@pytest.mark.parametrize("command", ["verify", "compare"])
def test_a_file_may_bring_its_own_reference(tmp_path, command, value, code):
    file = write(tmp_path, "twice.py", HEAD + REFERENCE.replace("{value}", str(value)))
    data = tmp_path / "out.json"
    assert ssn_command(command, str(file), "--json", str(data)).exit_code == code
    document = json.loads(data.read_text("utf-8"))
    validate(command, document)
    result = document["results"][0]
    assert result["methods"][-1]["name"] == "problem's own reference"
    assert result["agreement"] == ("holds" if code == 0 else "undecided")


@pytest.mark.parametrize(("figure", "code"), [("8", 0), ("9", 1)])
def test_known_values_are_checked_on_every_mesh(tmp_path, figure, code):
    file = write(tmp_path, "patches.py", DRIFT + KNOWN % figure)
    data = tmp_path / "data.json"
    result = ssn_command("verify", file, "--parameter", "n=10", "--json", str(data))
    assert result.exit_code == code, result.stdout + result.stderr
    results, _ = verified(data)
    one = results["patches"]
    assert one["parameters"]["n"] == 10 and one["known"][0]["holds"] is True
    assert [row["known"][0]["holds"] for row in one["mesh_study"]["rows"]] == [True, code == 0]
    if code:
        assert [failure.partition(":")[0] for failure in one["failures"]] == ["mesh values"]
        assert "n = 40" in one["failures"][0]


def test_sizes_replace_those_of_the_file_and_are_sorted(tmp_path, drift):
    write(tmp_path, "squares.py", LEAST_SQUARES)
    data = tmp_path / "data.json"
    assert ssn_command("verify", str(tmp_path), "--sizes", "30,10,20", "--json", str(data)).exit_code == 0
    results, _ = verified(data)
    assert [row["n"] for row in results["drift"]["mesh_study"]["rows"]] == [10, 20, 30]
    assert results["drift"]["parameters"]["n"] == 40
    result = ssn_command("verify", str(tmp_path / "squares.py"), "--sizes", "3,4")
    assert result.exit_code == 2 and "--sizes has no effect" in result.stderr


def test_a_mesh_without_sizes_says_so(tmp_path):
    file = write(tmp_path, "drift.py", DRIFT.replace("SIZES = (20, 40)\n", ""))
    result = ssn_command("verify", file)
    assert result.exit_code == 0 and "not applicable: the file names no SIZES" in result.stdout


def test_a_mesh_that_cannot_be_built_keeps_the_evidence_before_it(tmp_path, drift):
    fragile = DRIFT.replace("    h = 1.0", "    assert n > 9, 'too coarse'\n    h = 1.0")
    data = tmp_path / "data.json"
    result = ssn_command(
        "verify", write(tmp_path, "fragile.py", fragile), "--sizes", "5,10", "--json", str(data)
    )
    assert result.exit_code == 2 and "too coarse" in result.stderr
    results, document = verified(data)
    assert results["fragile"]["failures"] == ["mesh study: not run to the end"]
    assert [e["problem"] for e in document["errors"]] == ["fragile, n = 40"]


def test_json_on_standard_output_is_json_only(drift, tmp_path):
    done = subprocess.run(
        command_line("verify", drift, "--json", "-"), capture_output=True, text=True, env=environment(), cwd=tmp_path
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    validate("verify", json.loads(done.stdout))
    assert done.stderr == ""


@pytest.mark.parametrize("width", ["60", "100", "200"])
def test_tables_fit_the_window(drift, monkeypatch, width):
    monkeypatch.setenv("COLUMNS", width)
    result = ssn_command("verify", drift, str(ROOT / "problems" / "obstacle.py"), "--sizes", "8,12")
    assert "…" not in result.stdout
    assert max(map(len, result.stdout.splitlines())) <= int(width)


def test_a_picture_where_no_folder_can_be(drift, tmp_path):
    (tmp_path / "file").write_text("")
    for place in ("file", "file/below"):
        result = ssn_command("verify", drift, "--picture", str(tmp_path / place))
        assert result.exit_code == 2 and "--picture" in result.stderr


@pytest.mark.skipif(not hasattr(signal, "pthread_sigmask"), reason="signals as on POSIX")
def test_ctrl_c_keeps_what_is_there(tmp_path):
    sleepy = DRIFT.replace(
        "    h = 1.0",
        "    if n == 20:\n        open('asleep', 'w').close()\n        time.sleep(120)\n    h = 1.0",
    ).replace("import numpy", "import time\n\nimport numpy", 1)
    write(tmp_path, "drift.py", DRIFT)
    write(tmp_path, "sleepy.py", sleepy)
    process = subprocess.Popen(
        command_line("verify", "drift.py", "sleepy.py", "--json", "data.json"), stdout=subprocess.PIPE,
        stderr=subprocess.PIPE, text=True, env=environment(), cwd=tmp_path,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
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
    assert "sleepy, n = 40: interrupted in the mesh study; the evidence before it:" in err
    results, document = verified(tmp_path / "data.json")
    assert results["drift"]["holds"] is True
    assert results["sleepy"]["failures"] == ["mesh study: not run to the end"]
    assert document["errors"] == [{"problem": "sleepy, n = 40", "message": "interrupted"}]
    assert "newton derivative" in out


def test_the_overview_as_markdown(drift, tmp_path):
    document = tmp_path / "about.md"
    document.write_text("# About\n<!-- verified: begin -->\nold\n<!-- verified: end -->\nafter\n")
    result = ssn_command("verify", drift, "--markdown", str(document))
    assert result.exit_code == 0, result.stderr
    lines = document.read_text().splitlines()
    assert lines[0] == "# About" and lines[-1] == "after" and "old" not in lines
    head, _, row = (line.strip("| ").split(" | ") for line in lines if line.startswith("|"))
    cells = dict(zip(head, row, strict=True))
    assert (
        cells["problem"] == "drift"
        and cells["evidence"] == "holds"
        and cells["steps over meshes"].count(",") >= 1
    )
    fresh = tmp_path / "fresh.md"
    assert ssn_command("verify", drift, "--markdown", str(fresh)).exit_code == 0
    assert "| drift |" in fresh.read_text()


def test_markdown_without_marks_is_refused(drift, tmp_path):
    document = tmp_path / "about.md"
    document.write_text("# About\n")
    result = ssn_command("verify", drift, "--markdown", str(document))
    assert result.exit_code == 2 and "no lines" in result.stderr
    assert document.read_text() == "# About\n"


def test_the_table_of_the_readme_has_every_problem():
    text = (
        (ROOT / "README.md")
        .read_text()
        .partition("<!-- verified: begin -->")[2]
        .partition("<!-- verified: end -->")[0]
    )
    rows = [line.strip("| ").split(" | ") for line in text.splitlines() if line.startswith("|")][2:]
    names = {path.stem.replace("_", " ") for path in (ROOT / "problems").glob("*.py")}
    assert {row[0] for row in rows} == names
    for row in rows:
        assert row[-1] == "holds" or row[-1].startswith("**not: "), row
