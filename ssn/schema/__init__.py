"""The form of the JSON that commands write: a JSON Schema (draft 2020-12) shipped with the package."""

from __future__ import annotations

import json
from importlib import resources
from typing import Any

FORMAT = 1
DOCUMENTS = ("compare", "verify", "solve", "gate", "baseline")


def schema(document: str) -> dict[str, Any]:
    """Return the schema of what a command writes; it stands alone.

    Parameters
    ----------
    document : {"compare", "verify", "solve", "gate", "baseline"}
        What ``ssn compare --json``, ``verify --json``, ``solve --json`` and ``gate --json`` write, and the file of
        ``gate --baseline``.

    Returns
    -------
    dict
        For a JSON Schema validator. Objects may have further members: they can be added without a new format number.
    """
    if document not in DOCUMENTS:
        raise ValueError(f"there is no document {document!r}, only {', '.join(DOCUMENTS)}")
    text = resources.files(__package__).joinpath(f"format-{FORMAT}.json").read_text("utf-8")
    whole: dict[str, Any] = json.loads(text)
    return {**whole, "$ref": f"#/$defs/{document}"}
