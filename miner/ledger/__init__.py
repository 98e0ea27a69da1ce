"""The ledger: every hunt, rule, outcome, hypothesis, review and decision, with who and why.

``open_ledger`` opens one, a SQLite file or a PostgreSQL database. ``records`` holds what goes in
and comes out, ``kinds`` what each kind of entry must say, ``chain`` what its hash is taken over.
"""

from .kinds import KINDS
from .ledger import Ledger, Turn, has_ledger, login_name, open_ledger
from .records import Broken, Entry, Item, Verified

__all__ = [
    "KINDS",
    "Broken",
    "Entry",
    "Item",
    "Ledger",
    "Turn",
    "Verified",
    "has_ledger",
    "login_name",
    "open_ledger",
]
