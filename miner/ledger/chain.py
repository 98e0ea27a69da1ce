"""The chain of hashes: what an entry's hash is taken over, and whether a chain holds.

An entry's hash is the SHA-256, in hexadecimal, of the UTF-8 bytes of one JSON object with its
number, stamp, kind, rule, quarter, who, why, body and previous, where ``previous`` is the hash of
the entry before. The object is written with sorted keys, without spaces, with every character as
itself and numbers as Python's ``repr`` has them (the shortest text that reads back as the same
double). So changing, removing or inserting an entry breaks every hash after it; only a removed tail
has to be told by a hash noted elsewhere.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from .records import Broken, Entry, Json, Verified

GENESIS = "0" * 64
HASHED = ("number", "stamp", "kind", "rule", "quarter", "who", "why", "body", "previous")


def canonical(value: Json) -> str:
    """The one way a JSON value is written.

    Raises
    ------
    ValueError : it holds what is no JSON (NaN, infinity, another type, itself), or text that
        databases cannot keep (half of a surrogate pair)
    """
    try:
        text = json.dumps(
            value, ensure_ascii=False, allow_nan=False, sort_keys=True, separators=(",", ":")
        )
        text.encode("utf-8")
    except UnicodeEncodeError:
        raise ValueError("text that is no Unicode (half of a surrogate pair)") from None
    except RecursionError:
        raise ValueError("lists within lists without end") from None
    except TypeError as error:
        raise ValueError(str(error)) from None
    return text


def hash_of(fields: dict[str, Any]) -> str:
    """The hash of an entry given as a mapping that holds ``HASHED``."""
    text = canonical({name: fields[name] for name in HASHED})
    return hashlib.sha256(text.encode("utf-8")).hexdigest()


@dataclass(frozen=True)
class Stored:
    """An entry as it was found: the entry, or why it cannot be read as one."""

    number: int
    entry: Entry | None
    problem: str = ""


def verify(found: Iterable[Stored], known: str | None = None) -> Verified:
    """Check a whole ledger, given in the order of its numbers.

    Parameters
    ----------
    known : a hash noted earlier, which has to be that of some entry
    """
    count, last = 0, None
    is_known = known is None
    for stored in found:
        problem = _problem(stored, count, last)
        if problem:
            return Verified(count, last, Broken(count + 1, problem))
        count, last = count + 1, stored.entry.hash if stored.entry else None
        is_known = is_known or last == known
    if not is_known:
        problem = f"no entry has the hash noted earlier, {known}: the ledger's end was removed"
        return Verified(count, last, Broken(count + 1, problem))
    return Verified(count, last, None)


def _problem(stored: Stored, count: int, last: str | None) -> str:
    if stored.number != count + 1:
        return f"missing: the next entry that is there has number {stored.number}"
    entry = stored.entry
    if entry is None:
        return stored.problem
    if entry.previous != (last or GENESIS):
        return "does not follow from the entry before: the hash it holds of that one is another"
    if hash_of(vars(entry)) != entry.hash:
        return "changed: its fields do not give its hash"
    return ""


def chained(fields: Iterable[dict[str, Any]], number: int, previous: str) -> Iterator[Entry]:
    """Entries out of what they say, after the entry with this number and hash."""
    for said in fields:
        number += 1
        linked = {**said, "number": number, "previous": previous}
        entry = Entry(**linked, hash=hash_of(linked))
        previous = entry.hash
        yield entry
