"""A made-up run's folder, of any size and with any names, as a hunt writes one. No hunt is run."""

from __future__ import annotations

import csv
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from miner.columns import CANDIDATE_COLUMNS

RLO = chr(0x202E)  # right-to-left override
HOSTILE = (
    "<script>alert(1)</script>",
    '"><img src=x onerror=alert(2)>',
    '=HYPERLINK("http://192.0.2.1","pay")',
    "אזעקה ראשונה",
    f"turned {RLO}drawkcab",
    "x" * 300,
    "long words " * 27,
    "&amp; {{ 7 * 7 }} {% raw %}",
    "'; DROP TABLE alerts; --",
    "@SUM(1+1)*cmd|' /C calc'!A0",
    "NA",
    "007",
)
VERDICTS = ("confirmed", "refuted", "underpowered")


def made_up_run(
    folder: Path,
    *,
    seed: int = 0,
    n_candidates: int = 60,
    n_rules: int = 4,
    targets: Sequence[str] = ("upset",),
    strata: Sequence[str] = ("all", "large"),
    types: Sequence[str] = ("amber", "birch", "cedar", "dune", "ember", "flint"),
    entities: Sequence[str] = ("Ardent Loom", "Brisk Quay", "Calm Ridge"),
    study: str = "a made-up study",
) -> Path:
    """Write the folder and return it. Numbers are drawn, and hang together only loosely."""
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    units = [(target, stratum) for target in targets for stratum in strata]
    rows, seen = [], set()
    while len(rows) < n_candidates:
        target, stratum = units[len(rows) % len(units)]
        size = int(rng.integers(1, 4))
        combo = tuple(sorted(rng.choice(len(types), min(size, len(types)), replace=False).tolist()))
        if (target, stratum, combo) in seen and len(seen) < len(units) * len(types) ** 2 / 2:
            continue
        seen.add((target, stratum, combo))
        rows.append(candidate(rng, target, stratum, [types[k] for k in combo], len(rows), n_rules))
    for row in rows:
        if row["verdict"] == "explained":
            row["explained_by"] = rows[0]["combination"]
            if (row["target"], row["stratum"]) != (rows[0]["target"], rows[0]["stratum"]):
                row["explained_by"] += f" [{rows[0]['target']}, {rows[0]['stratum']}]"
    rules = rows[:n_rules]
    write_csv(folder / "candidates.csv", list(CANDIDATE_COLUMNS), rows)
    write_csv(folder / "rules.csv", list(CANDIDATE_COLUMNS), rules)
    quarters = [
        {
            "rule_order": rule["rule_order"],
            "quarter": f"{2019 + q // 4}Q{q % 4 + 1}",
            "target": rule["target"],
            "stratum": rule["stratum"],
            "combination": rule["combination"],
            "triggers": (n := int(rng.integers(1, 40))),
            "hits": (h := int(rng.integers(0, n + 1))),
            "precision": h / n,
            "expected_hits": n * 0.04,
        }
        for rule in rules
        for q in range(20)
    ]
    columns = ["rule_order", "quarter", "target", "stratum", "combination", "triggers", "hits"]
    write_csv(folder / "quarters.csv", [*columns, "precision", "expected_hits"], quarters)
    write_json(folder / "run.json", record(study, units, types, rows, rules))
    write_json(folder / "evidence.json", evidence(rng, targets, strata, types, entities, rules))
    return folder


def write_json(path: Path, value: dict[str, Any]) -> None:
    """One JSON file."""
    path.write_text(json.dumps(value, ensure_ascii=False, allow_nan=False), encoding="utf-8")


def write_csv(path: Path, columns: list[str], rows: list[dict[str, Any]]) -> None:
    """One table, empty where a value is None."""
    with path.open("w", encoding="utf-8", newline="") as lines:
        writer = csv.DictWriter(lines, columns, lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def candidate(
    rng: np.random.Generator, target: str, stratum: str, types: list[str], i: int, n_rules: int
) -> dict[str, Any]:
    """A row of the candidates table; the first ``n_rules`` are rules."""
    n = int(rng.integers(20, 900))
    precision = float(rng.uniform(0.02, 0.6))
    p = float(10 ** -rng.uniform(0, 3)) if i >= n_rules else 10.0 ** -(60 - i)
    row: dict[str, Any] = dict.fromkeys(CANDIDATE_COLUMNS) | {
        "target": target,
        "stratum": stratum,
        "combination": " + ".join(types),
        "size": len(types),
        "triggers": n,
        "hits": round(n * precision),
        "precision": precision,
        "precision_low": precision * 0.7,
        "precision_high": min(1.0, precision * 1.4),
        "base_rate": 0.024,
        "expected_hits": n * 0.03,
        "lift": precision / 0.03,
        "p_value": p,
        "q_value": min(1.0, 2 * p),
        "p_own_timing": p,
        "verdict": "explained" if p < 0.02 else "not significant",
    }
    if i < n_rules:
        row |= {
            "rule_order": i + 1,
            "verdict": VERDICTS[i % 3],
            "holdout_triggers": 50 if i % 7 != 6 else 0,
            "holdout_hits": 12 if i % 7 != 6 else 0,
            "holdout_precision": 0.24 if i % 7 != 6 else None,
            "holdout_low": 0.14 if i % 7 != 6 else None,
            "holdout_high": 0.4 if i % 7 != 6 else None,
            "holdout_base_rate": 0.025,
            "holdout_expected_hits": 1.7 if i % 7 != 6 else 0.0,
            "holdout_p_value": 1e-9 if i % 7 != 6 else 1.0,
        }
    return row


def record(
    study: str,
    units: list[tuple[str, str]],
    types: Sequence[str],
    rows: list[dict[str, Any]],
    rules: list[dict[str, Any]],
) -> dict[str, Any]:
    """What ``run.json`` holds, as far as the report reads it."""
    used = {"rows": 1000, "unreadable": 1, "outside calendar": 2, "unknown entity": 0, "used": 997}
    return {
        "study": study,
        "settings": {
            "study": {"name": study},
            "events": {"source": "events.csv", "targets": sorted({unit[0] for unit in units})},
            "windows": {"lookback": 5, "horizon": 5, "rest": 5},
            "mining": {"max_size": 3, "min_triggers": 20, "min_hits": 3},
            "testing": {"adjust": "bh", "fdr": 0.05, "placebo": 20, "shuffle": 0, "seed": 7},
            "holdout": {"start": "2022-07-01", "share": None, "embargo": 10, "alpha": 0.05},
        },
        "warnings": ["rest is below horizon."],
        "versions": {"python": "3.11", "numpy": "2.4"},
        "calendar": {
            "name": "weekdays",
            "timezone": "UTC",
            "sessions": 1303,
            "first": "2019-01-02",
            "last": "2023-12-29",
            "fingerprint": "f" * 64,
        },
        "split": {
            "discovery_last": "2022-06-16",
            "holdout_first": "2022-07-01",
            "embargo": 10,
            "discovery_sessions": 902,
            "holdout_sessions": 391,
        },
        "inputs": {"alerts.csv": "a" * 64, "events.csv": "b" * 64},
        "counts": {
            "tables": {"alerts": used, "events": used},
            "entities": 300,
            "alert_types": len(types),
            "family": 4 * len(rows),
            "proposed": 5 * len(rows),
            "candidates": len(rows),
            "passed": {"bh": len(rules) + 9, "by": len(rules) + 4, "westfall-young": len(rules)},
            "rules": len(rules),
            "confirmed": sum(rule["verdict"] == "confirmed" for rule in rules),
        },
        "margins": [
            {
                "target": target,
                "stratum": stratum,
                "sweeps": 9,
                "largest_miss": 1e-12,
                "events": 400,
                "family": len(rows),
                "proposed": len(rows),
                "base_rate": 0.024,
            }
            for target, stratum in units
        ],
        "placebo": {"worlds": 20, "rules": [0] * 20, "mean_rules": 0.1, "share_with_any": 0.05},
        "rules": [
            {
                "order": rule["rule_order"],
                "instead_of": None,
                "p_sharper": None,
                "holdout": {
                    "p_holm": 1e-7,
                    "power": 0.7,
                    "p_sharper": None,
                    "too_few_clusters": i % 2 == 1,
                },
            }
            for i, rule in enumerate(rules)
        ],
        "walk_forward": [
            {
                "fold": 1,
                "found_until": "2020-01-01",
                "judged_from": "2020-01-16",
                "judged_to": "2021-01-01",
                "rules": 2,
                "triggers": 90,
                "hits": 20,
                "expected_hits": 3.3,
            }
        ],
        "models": [
            {
                "target": target,
                "against": "confirmed rules",
                "triggers": 90,
                "confirmed rules": 0.31,
                "gradient boosting": 0.33,
                "logistic regression": 0.27,
            }
            for target in sorted({unit[0] for unit in units})
        ],
        "seconds": {},
    }


def evidence(
    rng: np.random.Generator,
    targets: Sequence[str],
    strata: Sequence[str],
    types: Sequence[str],
    entities: Sequence[str],
    rules: list[dict[str, Any]],
) -> dict[str, Any]:
    """What ``evidence.json`` holds."""

    def share(n: int) -> dict[str, Any]:
        return {"triggers": n, "hits": n // 4, "precision": n // 4 / n, "expected": 0.03}

    def null() -> dict[str, Any]:
        chance = rng.dirichlet(np.ones(30)).round(6).tolist()
        return {
            "triggers": 90, "hits": 30, "expected": 4.4, "first": 0, "width": 1, "chance": chance,
        }  # fmt: skip

    def profile() -> dict[str, Any]:
        rate = rng.uniform(0, 0.02, 41).round(6)
        rate[21:26] += 0.05
        side = {"events": 12, "expected": 3.2, "p": 0.001}
        return {
            "triggers": 90,
            "rate": rate.tolist(),
            "expected": [0.01] * 41,
            "low": [0.0] * 41,
            "high": [0.021] * 41,
            "before": side,
            "after": side,
        }

    def facts(rule: dict[str, Any]) -> dict[str, Any]:
        names = rule["combination"].split(" + ")
        part = {"low": 0.02, "high": 0.3} | share(80)
        singles = [{"types": [name]} | part for name in names]
        latest = ({"outcome": "yes", "sessions": 2}, {"outcome": "no", "sessions": None},
                  {"outcome": "open", "sessions": None})  # fmt: skip
        return {
            "null": {"discovery": null(), "holdout": null()},
            "profile": {"discovery": profile(), "holdout": profile()},
            "lead": {"counts": [3, 5, 2, 0, 1], "quartiles": [1.0, 2.0, 2.5]},
            "load": {
                "triggers": 140, "triggers_a_month": 2.3, "events": 900, "share_caught": 0.013,
            },
            "arrivals": {
                "types": names,
                "median_age": [1.0] * len(names),
                "completes": [0.5] * len(names),
                "orders": [
                    {"groups": [[name] for name in names], "triggers": 100, "hits": 20},
                    {"groups": [names], "triggers": 30, "hits": 2},
                ],
                "other": [10, 1],
            },
            "parts": [*singles, {"types": names} | part] if len(names) > 1 else singles,
            "strata": [
                {"name": name, "discovery": share(40), "holdout": share(20) if i else None}
                for i, name in enumerate(name for name in strata if name != "all")
            ],
            "latest": [
                {"date": f"2023-11-{28 - i:02}", "entity": entities[i % len(entities)]}
                | latest[i % 3]
                for i in range(20)
            ],
        }  # fmt: skip

    n = len(types)
    ratio = rng.uniform(0.5, 6, (n, n)).round(3).tolist()
    excess = rng.normal(0, 5, (n, n)).round(3).tolist()
    for k in range(n):
        ratio[k][k] = excess[k][k] = None
    return {
        "format": 1,
        "horizon": 5,
        "reach": 20,
        "warnings": ["alerts: type 'amber' goes from about 0 to 62 a month at 2020-01."],
        "disagreement": {"margins_only": 1, "own_timing_only": 3},
        "loads": [
            {
                "target": target,
                "rules": sum(r["verdict"] == "confirmed" and r["target"] == target for r in rules),
                "triggers": 900,
                "triggers_a_month": 15.0,
                "events": 900,
                "share_caught": 0.11,
            }
            for target in dict.fromkeys(rule["target"] for rule in rules)
        ],
        "rules": [facts(rule) for rule in rules],
        "types": list(types),
        "targets": list(targets),
        "profiles": [
            {
                "target": target,
                "type": k,
                "timing": ("precedes", "follows", "both", "neither")[k % 4],
            }
            | profile()
            for target in targets
            for k in range(n)
        ],
        "timing_level": 0.05 / (2 * n * len(targets)),
        "together": {
            "arrivals": [[500] * n] * n,
            "seen": [[450 if j == i + 1 else 60 for j in range(n)] for i in range(n)],
            "ratio": ratio,
            "excess": excess,
        },
    }
