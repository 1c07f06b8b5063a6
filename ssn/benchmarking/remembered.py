"""What a run computes once, kept in files for the processes that come later."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from ..evidence.check import describe


class CaseFailedError(RuntimeError):
    """A case of a suite did not yield the figure; the message says why."""


def remembered(directory: str | os.PathLike[str], key: str, compute: Callable[[], Any]) -> Any:
    """Compute once a run: what a process has computed for `key` is read by those after it.

    Parameters
    ----------
    directory : path
        Kept for the run, such as one that `setup_cache` has made.
    key : str
    compute : callable
        Returns plain data for JSON.

    Returns
    -------
    The data.

    Raises
    ------
    CaseFailedError
        Where `compute` raised, here or in an earlier process, or was killed there; not computed again.
    """
    digest = hashlib.blake2b(key.encode(), digest_size=12).hexdigest()
    path = Path(directory) / f"{digest}.json"
    if not path.exists():
        # what stays behind if this process is killed
        _write(path, {"error": "an earlier process was killed, or out of time, while it computed this case"})
        try:
            stored = {"value": compute()}
        except Exception as error:
            stored = {"error": describe(error)}
        _write(path, stored)
    stored = json.loads(path.read_text("utf-8"))
    if "error" in stored:
        raise CaseFailedError(stored["error"])
    return stored["value"]


def _write(path: Path, data: Mapping[str, Any]) -> None:
    beside = path.with_suffix(".new")
    beside.write_text(json.dumps(data), "utf-8")
    os.replace(beside, path)
