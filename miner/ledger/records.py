"""What is given to a ledger and what comes back: items, entries, and the word on its integrity."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from miner.errors import LedgerError, explain

Json = Any  # None, bool, int, float, str, list of Json, dict of str to Json


@dataclass(frozen=True)
class Item:
    """What is to be entered.

    Attributes
    ----------
    kind : one of ``kinds.KINDS``
    rule : id of the rule it is about, or None
    quarter : calendar quarter it is about, as 2025Q3, or None
    body : the rest, as plain JSON; what it must hold is said in ``kinds``
    """

    kind: str
    rule: str | None
    quarter: str | None
    body: Mapping[str, Json]


@dataclass(frozen=True)
class Entry:
    """What was entered.

    Attributes
    ----------
    number : 1, 2, 3 and so on without holes
    stamp : when, in UTC, as 2025-10-03T14:05:09.123456Z; one for all items of an append
    who, why : who entered it, and the reason given
    previous : hash of the entry before, ``chain.GENESIS`` for the first
    hash : see ``chain``
    """

    number: int
    stamp: str
    kind: str
    rule: str | None
    quarter: str | None
    who: str
    why: str
    body: dict[str, Json]
    previous: str
    hash: str


@dataclass(frozen=True)
class Broken:
    """The first place at which a ledger is not what was written: an entry's number, and how."""

    number: int
    problem: str


@dataclass(frozen=True)
class Verified:
    """What came out of checking every entry.

    Attributes
    ----------
    count : entries that are whole, from the first
    last_hash : of the last whole entry, None if there is none
    broken : the first one that is not, or None
    """

    count: int
    last_hash: str | None
    broken: Broken | None

    def raise_if_broken(self, where: str) -> None:
        """Say which entry is broken, and how, as an error.

        Raises
        ------
        LedgerError : one is
        """
        if self.broken is not None:
            what, found = f"entry {self.broken.number}", self.broken.problem
            advice = (
                f"The {self.count:,} before it are as they were; compare the rest with an export "
                "or a copy."
            )
            raise LedgerError(explain(where, what, "be as it was written", found, advice))
