"""Results for people and programs: tables and sentences, pictures, an HTML page, JSON."""

from .entry import Entry
from .html import page
from .tables import (
    catalogue_table,
    comparison,
    history_table,
    overview_table,
    pairs_table,
    solution_summary,
)
from .terminal import Terminal
from .words import Sentence, assessment_sentences, solution_sentences
from .writer import as_text, comparison_document, plain, solution_document

__all__ = [
    "Entry",
    "Sentence",
    "Terminal",
    "as_text",
    "assessment_sentences",
    "catalogue_table",
    "comparison",
    "comparison_document",
    "history_table",
    "overview_table",
    "page",
    "pairs_table",
    "plain",
    "solution_document",
    "solution_sentences",
    "solution_summary",
]
