"""What changed from one rule book to another."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from .records import BookRule, RuleBook

PARTS = ("discovery", "holdout", "lead", "workload")


@dataclass(frozen=True)
class BookDiff:
    """Rules only in the new book, only in the old, and the values that differ in both.

    ``changed`` holds (rule of the new book, key, old value, new value); keys of evidence are
    dotted, as in "holdout.hits".
    """

    added: tuple[BookRule, ...]
    removed: tuple[BookRule, ...]
    changed: tuple[tuple[BookRule, str, Any, Any], ...]

    @property
    def is_empty(self) -> bool:
        """Whether the two hold the same rules, word for word."""
        return not (self.added or self.removed or self.changed)


def diff_rule_books(old: RuleBook, new: RuleBook) -> BookDiff:
    """Compare two books rule by rule, by id."""
    before, after = old.by_id(), new.by_id()
    changed = []
    for key, rule in after.items():
        if key not in before:
            continue
        one, other = _flat(before[key]), _flat(rule)
        changed += [
            (rule, name, one.get(name), other.get(name))
            for name in dict.fromkeys((*other, *one))
            if one.get(name) != other.get(name)
        ]
    return BookDiff(
        tuple(rule for key, rule in after.items() if key not in before),
        tuple(rule for key, rule in before.items() if key not in after),
        tuple(changed),
    )


def _flat(rule: BookRule) -> dict[str, Any]:
    values = rule.model_dump()
    flat = {key: value for key, value in values.items() if key not in PARTS}
    for part in PARTS:
        flat |= {f"{part}.{key}": value for key, value in (values[part] or {}).items()}
    return flat
