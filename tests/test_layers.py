"""Imports in ssn/ point downwards only; the table below is the layout, and the only place to change it.

No code is imported: the files are parsed.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "ssn"

# Module or folder directly under ssn/ -> level. A part may import parts of a lower level and, if it is a
# folder, its own modules. Parts of one level never import each other, but on level 0, where they may as
# long as there is no cycle. The package itself ("", which re-exports everything) is for the commands.
LEVELS: dict[str, float] = {
    # vocabulary
    "errors": 0,
    "inner": 0,
    "pieces": 0,
    "protocols": 0,
    "records": 0,
    "status": 0,
    "schema": 0,
    "validate": 0,
    "work": 0,
    # building blocks
    "costs": 1,
    "globalization": 1,
    "linear": 1,
    "plotting": 1,
    "traced": 1,
    # what is built from matrices; the result
    "smooth": 1.5,
    "solution": 1.5,
    "states": 1.5,
    "time_grid": 1.2,
    "time_state": 1.5,
    "checkpoints": 0,
    "time_tracking": 1.5,
    "environment": 1.5,
    "duality": 1.5,
    "nonlinear_states": 1.6,
    "nonlinear_time_state": 1.7,
    # statements, and the loop
    "complementarity": 2,
    "composite": 2,
    "control": 2,
    "equations": 2,
    "newton": 2,
    "reference": 2,
    "control_part": 2.02,
    "norm_terms": 1.5,
    "sum_problem": 2.04,
    "duality_gap": 2.06,
    "nonlinear_control": 2.1,
    "primal_dual": 2.1,
    "weight_path": 3.2,
    "user_equation": 2,
    # the loop over a path of equations
    "gap_path": 2.27,
    "proximal_newton": 2.2,
    "moreau_yosida": 2.25,
    "easier_weight": 2.25,
    "proximal_point": 2.25,
    "smoothing_path": 2.25,
    "augmented_lagrangian": 2.25,
    "second_order": 2.25,
    "envelope_start": 2.27,
    "primal_dual_path": 2.25,
    # what "auto" decides, and the end of a solve
    "extragradient": 2.1,
    "plans": 2.28,
    "prepare": 2.3,
    "finish": 2.4,
    # front doors
    "batch": 2.5,
    "iteration": 2.5,
    "solve": 2.5,
    # many solves
    "evidence": 3,
    "follow": 3,
    "problem_file": 3.5,
    # evidence about problem files
    "gate": 3.75,
    "verification": 3.75,
    # for people
    "benchmarking": 4,
    "report": 4,
    "testing": 4,
    "": 4.5,
    "command": 5,
    "__main__": 5.5,
}

REQUIRED = {"numpy", "scipy", "pyamg", "click", "rich", "jinja2"}
# Installed by extras or by the user: imported where used, or in a try block.
OPTIONAL = {"asv", "asv_runner", "clarabel", "matplotlib", "numba", "sklearn", "sksparse", "threadpoolctl"}
# The kernel knows no mesh: problems assemble.
FORBIDDEN = {"skfem"}


def _imports(tree: ast.Module) -> Iterator[tuple[ast.stmt | ast.expr, list[str], int, bool, bool]]:
    """Yield (node, dotted names, relative level, inside a function, inside a try body or TYPE_CHECKING)."""

    def visit(node: ast.AST, deferred: bool, guarded: bool) -> Iterator:
        if isinstance(node, ast.Import):
            yield node, [alias.name for alias in node.names], 0, deferred, guarded
        elif isinstance(node, ast.ImportFrom):
            base = node.module + "." if node.module else ""
            yield node, [base + alias.name for alias in node.names], node.level, deferred, guarded
        elif isinstance(node, ast.Call):
            called = getattr(node.func, "attr", getattr(node.func, "id", ""))
            if called in {"import_module", "__import__"} and node.args:
                name = node.args[0]
                if isinstance(name, ast.Constant) and isinstance(name.value, str):
                    yield node, [name.value.lstrip(".")], int(name.value.startswith(".")), deferred, guarded
        deferred = deferred or isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
        type_checking = isinstance(node, ast.If) and ast.unparse(node.test).endswith("TYPE_CHECKING")
        for field, value in ast.iter_fields(node):
            inner = guarded or (field == "body" and (isinstance(node, ast.Try) or type_checking))
            for child in value if isinstance(value, list) else [value]:
                if isinstance(child, ast.AST):
                    yield from visit(child, deferred, inner)

    yield from visit(tree, False, False)


def check(package: Path, levels: dict[str, float]) -> tuple[list[str], int]:
    """Return the violations, one sentence each, and the number of modules looked at."""
    violations: list[str] = []
    base_edges: dict[str, set[str]] = {}
    checked = 0
    for path in sorted(package.rglob("*.py")):
        inside = path.relative_to(package)
        if inside == Path("__init__.py"):
            continue  # re-exports everything
        checked += 1
        part = inside.parts[0].removesuffix(".py")
        if part not in levels:
            violations.append(
                f"ssn/{inside}: {part!r} has no level: add it to LEVELS in tests/test_layers.py"
            )
            continue
        own_package = ["ssn", *inside.parts[:-1]]
        for node, names, dots, deferred, guarded in _imports(ast.parse(path.read_text("utf-8"))):
            where = f"ssn/{inside}:{node.lineno}"
            for name in names:
                words = name.split(".")
                if dots:
                    words = own_package[: len(own_package) - dots + 1] + words
                if words[0] != "ssn":
                    violations += _third_party(where, words[0], deferred, guarded)
                    continue
                if deferred:
                    violations.append(f"{where}: deferred import of {'.'.join(words)}: move it to the top")
                target = words[1] if len(words) > 1 else ""
                known = target in levels or (package / target).is_dir() or (package / f"{target}.py").exists()
                target = target if known else ""  # "from ssn import __version__": a name of the package
                if target not in levels:
                    violations.append(f"{where}: imports {target!r}, which has no level in LEVELS")
                elif target == part:
                    continue
                elif levels[part] == levels[target] == 0:
                    base_edges.setdefault(part, set()).add(target)
                elif levels[part] <= levels[target]:
                    direction = "sideways" if levels[part] == levels[target] else "upwards"
                    shown = f"ssn.{target}" if target else "the package ssn itself"
                    violations.append(f"{where}: {part} (level {levels[part]}) imports {direction}: {shown}")
    try:
        TopologicalSorter(base_edges).prepare()
    except CycleError as error:
        violations.append(f"cycle on level 0: {' -> '.join(error.args[1])}")
    return list(dict.fromkeys(violations)), checked  # two names in one statement are one violation


def _third_party(where: str, name: str, deferred: bool, guarded: bool) -> list[str]:
    if name in FORBIDDEN:
        return [f"{where}: {name} must not be imported in ssn/"]
    if name in OPTIONAL:
        fine = deferred or guarded
        return [] if fine else [f"{where}: {name} is optional: import it in a function or a try block"]
    if name in REQUIRED or name in sys.stdlib_module_names:
        return []
    return [f"{where}: {name} is neither required nor an optional dependency"]


def test_imports_point_downwards():
    violations, checked = check(PACKAGE, LEVELS)
    assert not violations, "\n" + "\n".join(violations)
    assert checked > 10


# The checker is shown to catch what it is for, on small trees of its own.
GOOD = {
    "__init__.py": "from .solve import solve\nfrom .command import main",
    "errors.py": "class InputError(ValueError): ...",
    "records.py": "from ssn.errors import InputError",
    "linear/__init__.py": "from .direct import factor\nfrom ssn.linear import krylov",
    "linear/direct.py": "import scipy.sparse\nfrom ..errors import InputError\nfrom . import krylov\n"
    "try:\n    import sksparse.cholmod\nexcept ImportError:\n    pass",
    "linear/krylov.py": "def plot():\n    import matplotlib.pyplot",
    "costs/__init__.py": "from __future__ import annotations",
    "composite.py": "from . import costs\nimport ssn.errors",
    "solve.py": "from .composite import build\nfrom .linear.direct import factor",
    "command.py": "import ssn\nfrom ssn import solve, __version__",
    "__main__.py": "from .command import main",
}

BAD = [
    ("linear/krylov.py", "from ..solve import solve", "imports upwards: ssn.solve"),
    ("linear/krylov.py", "import ssn.solve", "imports upwards: ssn.solve"),
    ("linear/krylov.py", "from ssn import solve", "imports upwards: ssn.solve"),
    ("linear/krylov.py", "from ssn import __version__", "imports upwards: the package ssn itself"),
    ("linear/krylov.py", "from .. import InputError", "imports upwards: the package ssn itself"),
    ("linear/krylov.py", "from ..costs.l1 import soft", "imports sideways: ssn.costs"),
    ("linear/krylov.py", "from .. import costs", "imports sideways: ssn.costs"),
    (
        "linear/krylov.py",
        "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from ..solve import solve",
        "upwards",
    ),
    ("control.py", "from .composite import build", "imports sideways: ssn.composite"),
    ("solve.py", "def f():\n    from .errors import InputError", "deferred import of ssn.errors"),
    (
        "solve.py",
        "class A:\n    async def f(self):\n        import ssn.costs",
        "deferred import of ssn.costs",
    ),
    ("solve.py", "import importlib\nimportlib.import_module('ssn.command')", "imports upwards: ssn.command"),
    ("solve.py", "import matplotlib.pyplot", "matplotlib is optional"),
    ("solve.py", "try:\n    pass\nexcept ValueError:\n    import numba", "numba is optional"),
    ("solve.py", "def f():\n    import skfem", "skfem must not be imported"),
    ("solve.py", "import pandas", "pandas is neither required nor an optional dependency"),
    ("errors.py", "from .records import Record", "cycle on level 0"),
    ("novelty.py", "x = 1", "'novelty' has no level: add it to LEVELS"),
    ("novelty/__init__.py", "x = 1", "'novelty' has no level: add it to LEVELS"),
]


def _tree(root: Path, files: dict[str, str]) -> Path:
    for name, text in files.items():
        path = root / "ssn" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, "utf-8")
    return root / "ssn"


def test_the_checker_passes_a_good_tree(tmp_path):
    assert check(_tree(tmp_path, GOOD), LEVELS) == ([], len(GOOD) - 1)


@pytest.mark.parametrize(("name", "text", "complaint"), BAD)
def test_the_checker_catches(tmp_path, name, text, complaint):
    violations, _ = check(_tree(tmp_path, GOOD | {name: text}), LEVELS)
    assert len(violations) == 1, violations
    assert complaint in violations[0]
