"""A ledger for a terminal: a list of entries, one rule's life, the word on its integrity."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterable, Iterator, Sequence
from typing import Any

from miner.columns import JOINER, POOLED
from miner.ledger.records import Entry, Verified
from miner.summary import WIDTH, cut, p_text, percent, plain, wrapped

HEADER = ("entry", "when (UTC)", "quarter", "kind", "rule", "who", "what")
LONGEST_NAME = 14


def list_lines(entries: Sequence[Entry], earlier: int = 0) -> Iterator[str]:
    """Entries one a line, oldest first; ``earlier`` ones are not among them."""
    if not entries:
        yield "No entries."
        return
    if earlier:
        yield f"{earlier:,} earlier ones are not shown (--last)."
    rows = [HEADER, *(_row(entry) for entry in entries)]
    widths = [max(len(row[i]) for row in rows) for i in range(len(HEADER) - 1)]
    for row in rows:
        left = "  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=False))
        yield cut(f"{left}  {row[-1]}", WIDTH).rstrip()


def life_lines(rule: str, entries: Sequence[Entry]) -> Iterator[str]:
    """One rule's life: what happened to it when, by whom and why."""
    said = next((entry for entry in entries if entry.kind == "rule"), None)
    yield wrapped(f"Rule {rule}" + (f": {_what(said)}" if said else ""))
    last = ("", "", "")
    for entry in entries:
        if (entry.stamp, entry.who, entry.why) != last:
            last = entry.stamp, entry.who, entry.why
            yield ""
            yield wrapped(f"{_when(entry)}, {entry.who}: {entry.why}")
        label = f"  {entry.number:>6}  {entry.quarter or '':<6}  {entry.kind:<10}  "
        yield wrapped(_what(entry), label, " " * len(label))


def verified_lines(verified: Verified) -> Iterator[str]:
    """Of a ledger that is whole."""
    noun = "entry" if verified.count == 1 else "entries"
    if verified.last_hash is None:
        yield "No entries."
    else:
        yield f"Whole: {verified.count:,} {noun}, each following from the one before."
        yield f"Last hash {verified.last_hash}"
        yield from textwrap.wrap(
            "Note it outside the ledger: with --known it proves later that nothing was removed "
            "from the end.",
            WIDTH,
        )


def added_lines(entries: Sequence[Entry], label: str) -> Iterator[str]:
    """What was just entered."""
    if not entries:
        yield f"Nothing new: {label} has it all."
        return
    kinds = list(dict.fromkeys(entry.kind for entry in entries))
    parts = [f"{sum(e.kind == kind for e in entries)} of kind {kind}" for kind in kinds]
    numbers = f"{entries[0].number} to {entries[-1].number}"
    yield f"Entered in {label}: {', '.join(parts)} (entries {numbers})."


def _row(entry: Entry) -> tuple[str, ...]:
    return (
        str(entry.number),
        _when(entry),
        entry.quarter or "",
        entry.kind,
        plain(entry.rule or ""),
        cut(entry.who, LONGEST_NAME),
        plain(_what(entry)),
    )


def _when(entry: Entry) -> str:
    return entry.stamp[:16].replace("T", " ")


def _what(entry: Entry) -> str:
    return _WORDS[entry.kind](entry.body)


def _hunt(body: dict[str, Any]) -> str:
    rules = len(body["rules"])
    return (
        f"study {body['study']}: {rules} {'rule' if rules == 1 else 'rules'} from a family of "
        f"{body['family']:,}, {body['passed']:,} passed"
    )


def _rule(body: dict[str, Any]) -> str:
    where = "" if body["stratum"] == POOLED else f" ({body['stratum']})"
    promise = "" if body["promise"] is None else f", promises {percent(body['promise'])}"
    return f"{JOINER.join(body['combination'])} -> {body['target']}{where}{promise}"


def _outcome(body: dict[str, Any]) -> str:
    word = "hit" if body["hit"] else "miss"
    return f"{word}: {body['entity']}, {body['session']} (expected {percent(body['expected'])})"


def _hypothesis(body: dict[str, Any]) -> str:
    word = "accepted" if body["rejected"] else "not accepted"
    return f"{word} by {body['procedure']}: p {p_text(body['p'])} at level {p_text(body['level'])}"


def _review(body: dict[str, Any]) -> str:
    reasons = "; ".join(body["reasons"])
    counts = f"{body['hits']} of {body['triggers']} hit, {body['expected_hits']:.1f} expected"
    return f"proposes {body['proposed']} ({counts})" + (f": {reasons}" if reasons else "")


def _decision(body: dict[str, Any]) -> str:
    return f"{body['before']} -> {body['after']}"


_WORDS: dict[str, Callable[[dict[str, Any]], str]] = {
    "hunt": _hunt,
    "rule": _rule,
    "outcome": _outcome,
    "hypothesis": _hypothesis,
    "review": _review,
    "decision": _decision,
}


def last_of(entries: Iterable[Entry], most: int) -> tuple[list[Entry], int]:
    """The last ``most`` entries, and how many came before them."""
    kept: list[Entry] = []
    count = 0
    for entry in entries:
        count += 1
        kept.append(entry)
        if len(kept) > 2 * most:
            del kept[: len(kept) - most]
    kept = kept[-most:]
    return kept, count - len(kept)
