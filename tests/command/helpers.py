"""Problem files as a user would write them, and a way to run the command."""

from __future__ import annotations

import inspect
import os
import sys
from pathlib import Path
from textwrap import dedent

from click.testing import CliRunner

from ssn.command import program

ROOT = Path(__file__).resolve().parents[2]

# A user's own problem: another operator (convection, not symmetric), patches, part of the state observed.
DRIFT = '''\
"""Sources along a channel with a current: few of them, and none too strong.

Source: made up for the tests.

Caution: one space dimension.
"""

import numpy as np
import scipy.sparse as sp

import ssn

SIZES = (20, 40)


def build(n: int = 40, alpha: float = 1e-4, beta: float = 1e-3, speed: float = 5.0, patches: int = 8):
    h = 1.0 / (n + 1)
    x = h * np.arange(1, n + 1)
    ones = np.ones(n)
    diffusion = sp.diags_array([-ones[1:], 2 * ones, -ones[1:]], offsets=[-1, 0, 1]) / h
    current = speed * sp.diags_array([-ones[1:], ones], offsets=[-1, 0])
    B = sp.csr_array((h * ones, (np.arange(n), (x * patches).astype(int))), shape=(n, patches))
    C = sp.csr_array(np.eye(n)[x > 0.5])
    return ssn.ControlProblem(
        state=ssn.SteadyState(sp.csr_array(diffusion + current)),
        control_operator=B,
        observation=C,
        target=np.sin(6 * x[x > 0.5]),
        observation_mass=np.full(C.shape[0], h),
        control_mass=np.full(patches, 1 / patches),
        control_weight=alpha,
        cost=ssn.SparseCost(beta, -20.0, 20.0),
    )


def summary(problem, solution):
    return [("patches in use", str(int(np.count_nonzero(solution.x))))]
'''

HEAD = "import numpy as np\nimport ssn\n\n\n"

NOT_THE_GRADIENT = HEAD + dedent("""\
    class Part:
        size = 4

        def value(self, u):
            return 0.5 * float(u @ u) - float(u.sum())

        def gradient(self, u):
            return 2.0 * u - 1.0

        def hessian(self, u):
            return np.eye(4)


    def build():
        return ssn.CompositeProblem(smooth=Part(), cost=ssn.SparseCost(0.1))
    """)

LEAST_SQUARES = HEAD + dedent("""\
    def build(rows: int = 6, price: float = 0.1, label: str = "a", scale: float | None = None, exact: bool = False):
        A = np.vander(np.linspace(0.1, 1.0, rows), 3)
        return ssn.CompositeProblem(smooth=ssn.LeastSquares(A, np.ones(rows)), cost=ssn.SparseCost(price))
    """)


def build_with(*lines: str) -> str:
    """Return a problem file whose build consists of these lines."""
    return HEAD + "def build(n: int = 4):\n" + "".join(f"    {line}\n" for line in lines)


def write(folder: Path, name: str, text: str) -> str:
    """Write a problem file and return its path."""
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, "utf-8")
    return str(path)


def ssn_command(*arguments: str):
    """Run the command in this process; the result has exit_code, stdout, stderr."""
    mixing = "mix_stderr" in inspect.signature(CliRunner).parameters  # Click below 8.2
    runner = CliRunner(**({"mix_stderr": False} if mixing else {}))
    result = runner.invoke(program, list(arguments), catch_exceptions=False, prog_name="ssn")
    assert "Traceback" not in result.stdout + result.stderr
    return result


def environment() -> dict[str, str]:
    """Return the environment for a command in a process of its own."""
    return os.environ | {"PYTHONPATH": str(ROOT), "NO_COLOR": "1"}


def command_line(*arguments: str) -> list[str]:
    """Return the command line for a process of its own."""
    return [sys.executable, "-m", "ssn", *arguments]
