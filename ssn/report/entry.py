"""One assessed problem with all that a reader is shown beside the evidence."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from ..evidence import Assessment
from .numbers import plainly


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
    figures : list of (str, Figure)
        Caption and matplotlib figure.
    remarks : list of str
        What could not be shown, and why.
    """

    assessment: Assessment
    description: str = ""
    summary: list[tuple[str, str]] = field(default_factory=list)
    figures: list[tuple[str, Any]] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)

    @property
    def heading(self) -> str:
        """Name and mesh size."""
        n = self.assessment.parameters.get("n")
        return self.assessment.name if n is None else f"{self.assessment.name}, n = {plainly(n)}"

    @property
    def setting(self) -> str:
        """The other parameters, and the number of unknowns."""
        others = [f"{k} = {plainly(v)}" for k, v in self.assessment.parameters.items() if k != "n"]
        return ", ".join([*others, f"{self.assessment.unknowns} unknowns"])
