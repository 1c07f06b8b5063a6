"""Load the problem files by path, as users' own are."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

FOLDER = Path(__file__).resolve().parents[2] / "problems"


def load(name: str) -> ModuleType:
    """Return problems/name.py as a module; a file must not rely on being in `sys.modules`."""
    spec = importlib.util.spec_from_file_location(f"problem_file_{name}", FOLDER / f"{name}.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module
