"""Results for people and programs: tables and sentences, pictures, an HTML page, JSON."""

from .entry import Entry, caution, setting
from .html import page
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
from .writer import as_text, comparison_document, solution_document

__all__ = [
    "Entry",
    "Overview",
    "Report",
    "Terminal",
    "as_text",
    "catalogue_table",
    "caution",
    "check_picture_path",
    "comparison",
    "comparison_document",
    "conclusion",
    "embedded",
    "history_figure",
    "is_figure",
    "page",
    "pairs_table",
    "pictures_available",
    "rate_figure",
    "require_pictures",
    "save",
    "setting",
    "solution_document",
    "solution_summary",
]
