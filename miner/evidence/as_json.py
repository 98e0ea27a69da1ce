"""Evidence as plain lists and numbers, for ``evidence.json``: the only form the report reads."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from miner.evidence.hits_null import HitsNull
from miner.evidence.profiles import REACH, Profile, timing
from miner.evidence.rule_facts import RuleFacts
from miner.triggers import Combo

if TYPE_CHECKING:
    from miner.evidence.records import Evidence

FORMAT = 1
DIGITS = 6


def as_dict(evidence: Evidence) -> dict[str, Any]:
    """Everything, ready for ``json.dumps``; undefined numbers are None."""
    return {
        "format": FORMAT,
        "horizon": evidence.horizon,
        "reach": REACH,
        "warnings": list(evidence.warnings),
        "disagreement": {
            "margins_only": evidence.disagreement.margins_only,
            "own_timing_only": evidence.disagreement.own_timing_only,
        },
        "loads": [
            {
                "target": load.target,
                "rules": load.rules,
                "triggers": load.triggers,
                "triggers_a_month": _number(load.triggers / load.months) if load.months else None,
                "events": load.events,
                "share_caught": _number(load.caught / load.events) if load.events else None,
            }
            for load in evidence.loads
        ],
        "rules": [_rule(evidence, facts) for facts in evidence.rules],
        "types": list(evidence.type_names),
        "targets": list(evidence.targets),
        "profiles": [
            {
                "target": target,
                "type": k,
                "timing": timing(made, evidence.timing_level),
                **_profile(made),
            }
            for (target, k), made in evidence.profiles.items()
        ],
        "timing_level": evidence.timing_level,
        "together": {
            "arrivals": evidence.together.arrivals.tolist(),
            "seen": evidence.together.seen.tolist(),
            "ratio": _table(evidence.together.ratio),
            "excess": _table(evidence.together.excess),
        },
    }


def _rule(evidence: Evidence, facts: RuleFacts) -> dict[str, Any]:
    leads = facts.leads
    quantiles = np.quantile(leads, [0.25, 0.5, 0.75]) if leads.size else np.full(3, np.nan)

    def names(combo: Combo) -> list[str]:
        return [evidence.type_names[k] for k in combo]

    return {
        "null": {"discovery": _null(facts.discovery), "holdout": _null(facts.holdout)},
        "profile": {
            "discovery": _profile(facts.profile_discovery),
            "holdout": _profile(facts.profile_holdout),
        },
        "lead": {
            "counts": np.bincount(leads, minlength=evidence.horizon + 1)[1:].tolist(),
            "quartiles": [_number(x) for x in quantiles],
        },
        "load": {
            "triggers": facts.triggers,
            "triggers_a_month": _number(facts.triggers / facts.months),
            "events": facts.events,
            "share_caught": _number(facts.caught),
        },
        "arrivals": {
            "types": names(facts.parts[-1].combo),
            "median_age": list(facts.arrivals.median_age),
            "completes": [_number(x) for x in facts.arrivals.completes],
            "orders": [
                {"groups": [names(group) for group in groups], "triggers": n, "hits": hits}
                for groups, n, hits in facts.arrivals.orders
            ],
            "other": list(facts.arrivals.other),
        },
        "parts": [
            {
                "types": names(part.combo),
                "triggers": part.triggers,
                "hits": part.hits,
                "precision": _number(part.hits / part.triggers) if part.triggers else None,
                "expected": _number(part.expected / part.triggers) if part.triggers else None,
                "low": _number(part.low),
                "high": _number(part.high),
            }
            for part in facts.parts
        ],
        "strata": [
            {
                "name": stratum.name,
                "discovery": _share(stratum.triggers, stratum.hits, stratum.expected),
                "holdout": None if stratum.holdout is None else _share(*stratum.holdout),
            }
            for stratum in facts.strata
        ],
        "latest": [
            {
                "date": str(evidence.dates[trigger.session]),
                "entity": evidence.entity_names[trigger.entity],
                "outcome": "yes" if trigger.wait else "open" if trigger.is_open else "no",
                "sessions": trigger.wait or None,
            }
            for trigger in facts.latest
        ],
    }


def _share(triggers: int, hits: int, expected: float) -> dict[str, Any]:
    return {
        "triggers": triggers,
        "hits": hits,
        "precision": _number(hits / triggers) if triggers else None,
        "expected": _number(expected / triggers) if triggers else None,
    }


def _null(null: HitsNull) -> dict[str, Any]:
    return {
        "triggers": null.triggers,
        "hits": null.hits,
        "expected": _number(null.expected),
        "first": null.first,
        "width": null.width,
        "chance": [_number(x) for x in null.chance],
    }


def _profile(made: Profile) -> dict[str, Any]:
    """Rates by offset; those of offsets that no trigger reaches are None."""

    def rate(count: np.ndarray) -> list[float | None]:
        share = np.full(count.shape, np.nan)
        np.divide(count, made.n, out=share, where=made.n > 0)
        return [_number(x) for x in share]

    return {
        "triggers": int(made.n.max(initial=0)),
        "rate": rate(made.events),
        "expected": rate(made.expected),
        "low": rate(made.low),
        "high": rate(made.high),
        **{
            side: {"events": seen, "expected": _number(expected), "p": _number(p)}
            for side, (seen, expected, p) in (("before", made.before), ("after", made.after))
        },
    }


def _table(values: np.ndarray) -> list[list[float | None]]:
    return [[_number(x) for x in row] for row in values]


def _number(value: float) -> float | None:
    return float(f"{value:.{DIGITS}g}") if math.isfinite(value) else None
