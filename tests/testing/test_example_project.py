"""A project that depends on ssn, installed beside ours: its tests pass, and fail when its problem is broken."""

from __future__ import annotations

import importlib.util
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import ssn

EXAMPLE = Path(__file__).resolve().parents[1] / "example_project"
OURS = Path(ssn.__file__).resolve().parents[1]

needs_backend = pytest.mark.skipif(
    not (importlib.util.find_spec("hatchling") and importlib.util.find_spec("pip")),
    reason="hatchling builds the example project without network: pip install 'ssn[test]'",
)


def environment(site: Path) -> dict[str, str]:
    paths = os.pathsep.join(map(str, (site, OURS)))
    return os.environ | {
        "PYTHONPATH": paths,
        "PYTHONDONTWRITEBYTECODE": "1",
        "PIP_DISABLE_PIP_VERSION_CHECK": "1",
    }


def run_tests_of(copy: Path) -> subprocess.CompletedProcess[str]:
    """Install a copy of the project, without network, and run its tests."""
    site = copy.parent / "site"
    install = [
        sys.executable,
        "-m",
        "pip",
        "install",
        "--no-deps",
        "--no-build-isolation",
        "--no-index",
        "--target",
    ]
    installed = subprocess.run(
        [*install, str(site), str(copy)], env=environment(site), capture_output=True, text=True, check=False
    )
    assert installed.returncode == 0, installed.stderr
    assert (site / "taut_string" / "string.py").exists()
    command = [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "-p", "no:xdist"]
    return subprocess.run(
        command, cwd=copy, env=environment(site), capture_output=True, text=True, check=False, timeout=300
    )


@pytest.fixture
def copy(tmp_path: Path) -> Path:
    leave_out = shutil.ignore_patterns("__pycache__", ".pytest_cache", ".asv")
    return Path(shutil.copytree(EXAMPLE, tmp_path / "project", ignore=leave_out))


def change(copy: Path, old: str, new: str) -> None:
    path = copy / "src" / "taut_string" / "string.py"
    text = path.read_text("utf-8")
    assert text.count(old) == 1
    path.write_text(text.replace(old, new), "utf-8")


@needs_backend
def test_its_tests_pass(copy):
    result = run_tests_of(copy)
    assert result.returncode == 0, result.stdout + result.stderr
    assert "6 passed" in result.stdout


@needs_backend
def test_its_tests_fail_with_a_wrong_derivative(copy):
    change(copy, "self.tension + sp.diags_array(self.h", "self.tension + sp.diags_array(0.5 * self.h")
    result = run_tests_of(copy)
    assert result.returncode == 1, result.stdout + result.stderr
    assert "test_the_derivative_is_a_newton_derivative" in result.stdout
    assert "fails  newton derivative: " in result.stdout
    assert "test_steps_converge_superlinearly" in result.stdout
    assert "contractions of the run: " in result.stdout


@needs_backend
def test_its_tests_fail_with_a_wrong_force(copy):
    """A bed twice as stiff as said, with the derivative to match: values from elsewhere see it."""
    change(copy, "self.h * (self.weight - push)", "self.h * (self.weight - 2.0 * push)")
    change(copy, "sp.diags_array(self.h * self.stiffness", "sp.diags_array(2.0 * self.h * self.stiffness")
    result = run_tests_of(copy)
    assert result.returncode == 1, result.stdout + result.stderr
    assert "bed and ends carry the weight" in result.stdout
    assert "test_the_derivative_is_a_newton_derivative" not in result.stdout


def test_the_benchmark_module_has_five_lines():
    lines = (EXAMPLE / "benchmarks" / "suite" / "strings.py").read_text("utf-8").splitlines()
    assert len([line for line in lines if line.strip()]) <= 5
