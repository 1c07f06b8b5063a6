"""Results for people and programs: tables and sentences, pictures, an HTML page, JSON."""

from .entry import Entry, setting
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
from .tables import catalogue_table, comparison, conclusion, overview_table, pairs_table, solution_summary
from .terminal import Terminal
from .writer import as_text, comparison_document, solution_document

__all__ = [
    "Entry",
    "Terminal",
    "as_text",
    "catalogue_table",
    "check_picture_path",
    "comparison",
    "comparison_document",
    "conclusion",
    "embedded",
    "history_figure",
    "is_figure",
    "overview_table",
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
