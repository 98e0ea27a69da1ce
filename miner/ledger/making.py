"""Items out of what the program has: a hunt's record, a rule of a rule book."""

from __future__ import annotations

import datetime as dt
import hashlib
from collections.abc import Mapping, Sequence
from typing import Any

from miner.rule_book.records import BookRule, RunOrigin

from .chain import canonical
from .records import Item


def hunt_item(
    record: Mapping[str, Any], rule_ids: Sequence[str], quarter: str | None = None
) -> Item:
    """A hunt, from its record (``run.json``) and the ids of the rules it found, in order.

    Beyond its contract the body has the calendar's first and last date, the split, the number of
    confirmed rules, the mean number of rules in placebo worlds, and SHA-256 of the inputs.
    """
    settings, counts = record["settings"], record["counts"]
    testing = settings["testing"]
    body = {
        "study": record["study"],
        "settings_sha256": hashlib.sha256(canonical(settings).encode("utf-8")).hexdigest(),
        "program": record["versions"]["combination-signal-miner"],
        "targets": list(dict.fromkeys(part["target"] for part in record["margins"])),
        "family": counts["family"],
        "proposed": counts["candidates"],
        "passed": counts["passed"][testing["adjust"]],
        "fdr": testing["fdr"],
        "adjust": testing["adjust"],
        "rules": list(rule_ids),
        "confirmed": counts["confirmed"],
        "placebo_mean_rules": record["placebo"]["mean_rules"],
        "first": record["calendar"]["first"],
        "last": record["calendar"]["last"],
        "discovery_last": record["split"]["discovery_last"],
        "holdout_first": record["split"]["holdout_first"],
        "inputs": dict(record["inputs"]),
    }
    return Item("hunt", None, quarter, body)


def rule_item(rule: BookRule, origin: RunOrigin | None = None, quarter: str | None = None) -> Item:
    """A rule of a rule book: what it says, and what it promises.

    Parameters
    ----------
    origin : the run it came from. It is adopted on the day after that run's holdout; a rule without
        one has no such date
    """
    adopted = None
    if origin is not None:
        adopted = str(dt.date.fromisoformat(origin.holdout_to) + dt.timedelta(days=1))
    body = {
        "target": rule.target,
        "stratum": rule.stratum,
        "combination": list(rule.combination),
        "lookback": rule.lookback,
        "horizon": rule.horizon,
        "rest": rule.rest,
        "status": rule.status,
        "promise": rule.precision,
        "promise_low": rule.precision_low,
        "promise_high": rule.precision_high,
        "expected": rule.expected,
        "adopted": adopted,
        "verdict": rule.verdict,
        "sharpens": rule.sharpens,
        "run": rule.run,
    }
    return Item("rule", rule.id, quarter, body)
