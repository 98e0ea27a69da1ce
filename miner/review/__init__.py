"""The quarterly review: does each rule of a book still work, does it keep its promise, what is new.

``review`` looks at one quarter, records what it saw in the ledger and returns a ``Review``.
"""

from .engine import review
from .records import Review

__all__ = ["Review", "review"]
