"""Enters a hunt that was made, and the rules of a rule book, each once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from miner.columns import JOINER
from miner.rule_book.making import read_run
from miner.rule_book.reading import read_rule_book
from miner.rule_book.records import RuleBook, rule_id

from .ledger import Ledger
from .making import hunt_item, rule_item
from .records import Entry, Item


def items_of_run(run: str | Path, book: str | Path | None = None) -> list[Item]:
    """The hunt of a run's folder, and the rules of a rule book.

    Raises
    ------
    InputError : the folder is no run, or the file no rule book
    """
    record, rows = read_run(Path(run))
    items = [hunt_item(record, _ids(record, rows))]
    if book is not None:
        items += _rules(read_rule_book(Path(book)))
    return items


def record_new(ledger: Ledger, items: Sequence[Item], *, who: str, why: str) -> tuple[Entry, ...]:
    """Enter hunts and rules that the ledger does not have; returns what is new.

    A hunt is known by its settings, inputs, program and rules; a rule by its id.

    Raises
    ------
    LedgerError : the ledger does not take them
    """
    with ledger.exclusive() as turn:
        known = list(turn.entries(kinds=["hunt", "rule"]))
        hunts = [_same(entry.body) for entry in known if entry.kind == "hunt"]
        rules = {entry.rule for entry in known if entry.kind == "rule"}
        new = [
            item
            for item in items
            if (item.rule not in rules if item.kind == "rule" else _same(item.body) not in hunts)
        ]
        return turn.append(new, who=who, why=why)


def _same(body: Mapping[str, Any]) -> tuple[Any, ...]:
    return body["settings_sha256"], body.get("inputs"), body["rules"], body["program"]


def _ids(record: Mapping[str, Any], rows: Sequence[Mapping[str, Any]]) -> list[str]:
    windows = record["settings"]["windows"]
    sizes = windows["lookback"], windows["horizon"], windows["rest"]
    return [
        rule_id(row["target"], row["stratum"], row["combination"].split(JOINER), *sizes)
        for row in rows
    ]


def _rules(book: RuleBook) -> list[Item]:
    return [
        rule_item(rule, book.run.get(rule.run) if rule.run is not None else None)
        for rule in book.rule
    ]
