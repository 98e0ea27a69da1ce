"""Lays a run out as one page: what each part of the template is given."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from markupsafe import Markup

from miner.columns import CONFIRMED, REFUTED, UNDERPOWERED
from miner.report import charts, html, sections, words
from miner.report.read_run import Row, Run

MOST_EXPLAINED = 12


def page(run: Run) -> str:
    """The whole page."""
    style, script = html.asset("report.css"), html.asset("report.js")
    rules = [_rule(run, i) for i in range(len(run.rules))]
    return (
        html.environment()
        .get_template("report.html.j2")
        .render(
            run=run.record,
            counts=run.record["counts"],
            evidence=run.evidence,
            style=Markup(style),
            script=Markup(script),
            policy=html.policy(style, script),
            rules=rules,
            axis=charts.interval_axis(_highest(run.rules)),
            by_verdict={
                verdict: [rule for rule in rules if rule["row"]["verdict"] == verdict]
                for verdict in (CONFIRMED, REFUTED, UNDERPOWERED)
            },
            several=_several(run),
            distrust=list(_distrust(run, rules)),
            types=sections.types(run),
            matrix=sections.matrix(run),
            funnel=list(sections.funnel(run)),
            candidates=_candidates(run),
            settings=list(_flat(run.record["settings"])),
            cautions=words.CAUTIONS,
        )
    )


def _highest(rules: list[Row]) -> float:
    """The upper end of the interval plots' common scale."""
    ends = [rule[key] for rule in rules for key in ("precision_high", "holdout_high")]
    return min(1.0, 1.05 * max((end for end in ends if end is not None), default=1.0))


def _several(run: Run) -> dict[str, bool]:
    """Whether the run has more than one target, and more than one stratum."""
    units = run.record["margins"]
    return {key: len({unit[key] for unit in units}) > 1 for key in ("target", "stratum")}


def _rule(run: Run, i: int) -> dict[str, Any]:
    row, step, facts = run.rules[i], run.record["rules"][i], run.evidence["rules"][i]
    reach, horizon = run.evidence["reach"], run.evidence["horizon"]
    quarters = [q for q in run.quarters if q["rule_order"] == row["rule_order"]]
    explained = sorted(
        (c for c in run.candidates if _order_of(run, c) == row["rule_order"]),
        key=lambda c: (c["p_value"], c["combination"]),
    )
    first = run.record["split"]["holdout_first"]
    return {
        "row": row,
        "order": row["rule_order"],
        "step": step,
        "facts": facts,
        "plot": charts.interval_plot(row, _highest(run.rules)),
        "nulls": [
            (when, charts.null_plot(facts["null"][key], when))
            for key, when in (("discovery", "discovery"), ("holdout", "the holdout"))
        ],
        "quarters": charts.quarter_plot(quarters, f"{first[:4]}Q{(int(first[5:7]) + 2) // 3}")
        if quarters
        else None,
        "profiles": [
            (when, charts.profile_plot(facts["profile"][key], reach, horizon))
            for key, when in (("discovery", "discovery"), ("holdout", "the holdout"))
        ],
        "leads": charts.lead_plot(facts["lead"]["counts"]),
        "explained": explained[:MOST_EXPLAINED],
        "n_explained": len(explained),
    }


def _order_of(run: Run, candidate: Row) -> int | None:
    """Number of the rule that explains a candidate: of its own target and stratum, or named."""
    said = candidate["explained_by"]
    if not said:
        return None
    own = f"{said} [{candidate['target']}, {candidate['stratum']}]"
    return run.rule_of.get(own, run.rule_of.get(said))


def _distrust(run: Run, rules: list[dict[str, Any]]) -> Iterator[Markup]:
    """What to be wary of, a sentence or two each."""
    few = [
        rule["order"]
        for rule in rules
        if rule["step"]["holdout"]["too_few_clusters"] and rule["row"]["holdout_triggers"]
    ]
    if few:
        yield Markup("Too few clusters for a close interval: {} {}.").format(*_rule_list(few))
    own = [rule["order"] for rule in rules if (rule["row"]["p_own_timing"] or 0) > 0.05]
    if own:
        yield Markup(
            "The nulls disagree on {} {}: the entities' own timing explains what the margins do "
            "not. A busy spell that drives both alerts and events looks like this."
        ).format(*_rule_list(own))
    apart = run.evidence["disagreement"]
    if apart["margins_only"]:
        yield Markup(
            "{} that passed {} explained by the entities' own timing (own-timing p above {})."
        ).format(
            words.some(apart["margins_only"], "combination"),
            "is" if apart["margins_only"] == 1 else "are",
            words.level(run.record["settings"]["testing"]["fdr"]),
        )
    if apart["own_timing_only"]:
        yield Markup(
            "{} pass only when each entity's history is shifted as a whole, and not once the "
            "calendar of their peers is held: most likely shared seasons and shocks."
        ).format(words.some(apart["own_timing_only"], "combination"))
    for warning in (*run.record["warnings"], *run.evidence["warnings"]):
        yield Markup("{}").format(warning)


def _rule_list(orders: list[int]) -> tuple[str, Markup]:
    links = [Markup('<a href="#rule-{0}">{0}</a>').format(order) for order in orders]
    return "rule" if len(orders) == 1 else "rules", Markup(words.listed(links))


def _candidates(run: Run) -> dict[str, Any]:
    """Rows of the big table, the smallest p first."""
    shown = run.foremost
    return {
        "rows": [(row, row["rule_order"] or _order_of(run, row)) for row in shown],
        "n": len(run.candidates),
        "verdicts": sorted({row["verdict"] for row in shown}),
        "targets": sorted({row["target"] for row in shown}),
        "strata": sorted({row["stratum"] for row in shown}),
    }


def _flat(settings: dict[str, Any], before: str = "") -> Iterator[tuple[str, str]]:
    for key, value in settings.items():
        if isinstance(value, dict):
            yield from _flat(value, f"{before}{key}.")
        elif isinstance(value, list):
            yield f"{before}{key}", ", ".join(map(str, value))
        elif value is not None:
            yield f"{before}{key}", str(value)
