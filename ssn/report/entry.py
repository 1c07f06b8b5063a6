"""One assessed problem with all that a reader is shown beside the evidence."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from ..evidence import Assessment
from .numbers import counted, plainly


@dataclass
class Entry:
    """An assessment, the words of its problem file, and its pictures.

    Attributes
    ----------
    assessment : Assessment
    description : str
        The problem file's docstring: what, source, caution.
    summary : list of (str, str)
        What the problem file says about the solution in its own terms.
    pictures : list of (str, str)
        Caption and data URI.
    remarks : list of str
        What could not be shown, and why.
    """

    assessment: Assessment
    description: str = ""
    summary: list[tuple[str, str]] = field(default_factory=list)
    pictures: list[tuple[str, str]] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)

    @property
    def heading(self) -> str:
        """Name and mesh size."""
        n = self.assessment.parameters.get("n")
        return self.assessment.name if n is None else f"{self.assessment.name}, n = {plainly(n)}"

    @property
    def title(self) -> str:
        """First line of the description."""
        return self.description.strip().partition("\n")[0]

    @property
    def caution(self) -> str:
        """The paragraph of the description that begins with "Caution:", without that word."""
        return caution(self.description)

    @property
    def setting(self) -> str:
        """The other parameters, and the number of unknowns."""
        return setting(self.assessment.parameters, self.assessment.unknowns)


def setting(parameters: Mapping[str, Any], unknowns: int) -> str:
    """Return the parameters but the mesh size, and the number of unknowns."""
    others = [f"{name} = {plainly(value)}" for name, value in parameters.items() if name != "n"]
    return ", ".join([*others, counted(unknowns, "unknown")])


def caution(description: str) -> str:
    """Return the paragraph that begins with "Caution:", without that word; empty where there is none."""
    paragraphs = re.split(r"\n\s*\n", description)
    found = [" ".join(p.split()) for p in paragraphs if p.lstrip().startswith("Caution:")]
    text = found[0].removeprefix("Caution:").strip() if found else ""
    return text[:1].upper() + text[1:]
