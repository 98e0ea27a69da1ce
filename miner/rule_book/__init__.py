"""The rule book: rules as something to act on, in a file that people edit and programs check.

Hands on the records, reading, writing and comparing; making one from a run is ``making``, since
only that needs the study's tables.
"""

from .differences import BookDiff, diff_rule_books
from .reading import read_rule_book
from .records import BookRule, RuleBook, rule_id
from .words import book_lines, diff_lines, rule_words
from .writing import write_rule_book

__all__ = [
    "BookDiff",
    "BookRule",
    "RuleBook",
    "book_lines",
    "diff_lines",
    "diff_rule_books",
    "read_rule_book",
    "rule_id",
    "rule_words",
    "write_rule_book",
]
