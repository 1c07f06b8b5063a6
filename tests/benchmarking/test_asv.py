"""asv finds the benchmarks of this repository, and one of them runs and is published."""

from __future__ import annotations

import importlib.util
import json
import os
import runpy
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
RUN = ROOT / "benchmarks" / "run.py"


def _found_without_pythonpath() -> bool:
    clean = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    command = [sys.executable, "-c", "import ssn, asv_runner"]
    return subprocess.run(command, env=clean, cwd="/", capture_output=True, check=False).returncode == 0


def _git_works() -> bool:
    if shutil.which("git") is None:
        return False
    command = ["git", "rev-parse", "HEAD"]
    return subprocess.run(command, cwd=ROOT, capture_output=True, check=False).returncode == 0


pytestmark = [
    pytest.mark.skipif(importlib.util.find_spec("asv") is None,
        reason="asv is not installed: pip install 'ssn[bench]'",
    ),
    pytest.mark.skipif(
        not _found_without_pythonpath(), reason="asv removes PYTHONPATH, and ssn is not installed: pip install -e ."
    ),
    pytest.mark.skipif(not _git_works(), reason="not a git repository"),
]  # fmt: skip


def test_asv_check(tmp_path):
    command = [sys.executable, "-m", "asv", "check", "--config", str(ROOT / "benchmarks" / "asv.conf.json")]
    command += ["-E", f"existing:{sys.executable}"]
    result = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert result.returncode == 0, result.stdout + result.stderr
    assert "No problems found" in result.stdout


def run(tmp_path: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, str(RUN), "quick", *arguments, "--results", str(tmp_path / "asv")]
    home = {"HOME": str(tmp_path)}  # asv keeps a description of the machine there
    return subprocess.run(
        command, env=os.environ | home, capture_output=True, text=True, check=False, timeout=300
    )


def test_one_benchmark_runs_and_is_published(tmp_path):
    result = run(tmp_path, "--bench", r"zoo\.Obstacle.*newton_steps")
    assert result.returncode == 0, result.stdout + result.stderr
    assert "1 results in" in result.stdout
    (path,) = (tmp_path / "asv" / ".asv" / "results").glob("*/*-existing-*.json")
    data = json.loads(path.read_text("utf-8"))
    (name,) = data["results"]
    assert name == "zoo.ObstacleFigures.track_newton_steps"
    row = dict(zip(data["result_columns"], data["results"][name], strict=False))
    assert row["version"] == "1, problem 1"
    assert [value for value in row["result"] if value == value] == [pytest.approx(9, abs=4)]
    assert (tmp_path / "asv" / ".asv" / "html" / "index.html").exists()


def test_a_run_of_nothing_fails(tmp_path):
    result = run(tmp_path, "--bench", "NoSuchProblem")
    assert result.returncode == 1, result.stdout + result.stderr


def test_failures_are_counted_by_case(tmp_path):
    """Failed cases are null in asv's results, cases that were not chosen NaN."""
    results = tmp_path / ".asv" / "results" / "machine"
    results.mkdir(parents=True)
    data = {
        "result_columns": ["result", "params", "version"],
        "results": {
            "zoo.A.track_x": [[1.0, None, float("nan")], [["32", "64", "128"]], "1"],
            "zoo.A.track_y": [None, [["32"]], "1"],
        },
    }
    (results / "01234567-existing.json").write_text(json.dumps(data))
    tally = runpy.run_path(str(RUN))["tally"]
    assert tally(tmp_path / "asv.conf.json", "0123456789abcdef") == (
        1,
        ["zoo.A.track_x(64)", "zoo.A.track_y(32)"],
    )
