"""Where a result was computed: versions, the factorisation in use and why, and the machine."""

from __future__ import annotations

import os
import platform
import sys
from importlib import metadata
from typing import Any

from .linear import cholmod

THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


def fingerprint(version: str) -> dict[str, Any]:
    """Describe the installation that a result comes from.

    Parameters
    ----------
    version : str
        The version of ssn.

    Returns
    -------
    dict
        Plain data with the keys "ssn", "python", "numpy", "scipy", "pyamg", "factorization" ("CHOLMOD" or
        "SuperLU"), "factorization_note" (which version, or why not CHOLMOD), "platform", "machine", "cpus"
        (logical ones) and "threads" (the environment variables that limit BLAS threads; None where unset).
    """
    fast = cholmod.available()
    return {
        "ssn": version,
        "python": platform.python_version(),
        "numpy": _version("numpy"),
        "scipy": _version("scipy"),
        "pyamg": _version("pyamg"),
        "factorization": "CHOLMOD" if fast else "SuperLU",
        "factorization_note": f"scikit-sparse {_version('scikit-sparse')}" if fast else cholmod.why_not(),
        "platform": f"{platform.system()} {platform.release()}",
        "machine": platform.machine() or sys.platform,
        "cpus": os.cpu_count(),
        "threads": {name: os.environ.get(name) for name in THREAD_VARIABLES},
    }


def _version(package: str) -> str:
    try:
        return metadata.version(package)
    except metadata.PackageNotFoundError:
        return "not installed"
