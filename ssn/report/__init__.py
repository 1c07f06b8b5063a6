"""Results for people and programs: tables and sentences, pictures, an HTML page, JSON."""

from .entry import Entry, caution, setting
from .gate_tables import GateTable, gate_conclusion, gate_document, gate_lines
from .html import page
from .markdown import markdown_table, write_markdown
from .pictures import (
    check_picture_path,
    embedded,
    history_figure,
    is_figure,
    pictures_available,
    rate_figure,
    require_pictures,
    save,
)
from .tables import Overview, catalogue_table, comparison, conclusion, pairs_table, solution_summary
from .terminal import Report, Terminal
from .verify_tables import (
    Verified,
    VerifiedOverview,
    folder_line,
    verification_document,
    verification_table,
    verify_figure,
)
from .writer import as_text, comparison_document, solution_document

__all__ = [
    "Entry",
    "GateTable",
    "Overview",
    "Report",
    "Terminal",
    "Verified",
    "VerifiedOverview",
    "as_text",
    "catalogue_table",
    "caution",
    "check_picture_path",
    "comparison",
    "comparison_document",
    "conclusion",
    "embedded",
    "folder_line",
    "gate_conclusion",
    "gate_document",
    "gate_lines",
    "history_figure",
    "is_figure",
    "markdown_table",
    "page",
    "pairs_table",
    "pictures_available",
    "rate_figure",
    "require_pictures",
    "save",
    "setting",
    "solution_document",
    "solution_summary",
    "verification_document",
    "verification_table",
    "verify_figure",
    "write_markdown",
]
