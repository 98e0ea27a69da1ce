"""A review's page: ``review.html``, from the review's folder alone."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

from markupsafe import Markup

from miner.columns import POOLED
from miner.report import html, review_charts, words
from miner.report import review_words as said
from miner.report.charts import interval_axis
from miner.report.read_review import read_review

Row = dict[str, Any]

PAGE = "review.html"
MOST_OPEN = 12  # rules up to which every card is open
MOST_URGENT = 30  # cards of urgent rules that are open in a larger book
MOST_LISTED = 8  # rules of one proposal that are listed before the rest is folded
MOST_PANELS = 36  # alert types drawn week by week
MOST_ENTITIES = 40
LATEST = 10
WIDEST = 0.98  # end of the scale of precisions: words under its last tick need room


def render(folder: str | Path) -> Path:
    """Write the page of a review into its folder and return the page's path.

    Raises
    ------
    OutputError : the folder is no review's, or it cannot be written
    """
    from miner import placing
    from miner.errors import OutputError, explain

    folder = Path(folder)
    text = page(read_review(folder))
    try:
        whole = folder.resolve()
        with placing.aside(whole) as aside:
            (aside / PAGE).write_text(text, encoding="utf-8")
            placing.put_files(aside, whole)
    except OSError as error:
        raise OutputError(
            explain(
                "report",
                str(folder),
                "be writable",
                f"the system's error: {error.strerror or error}",
                "Free some space, or copy the review's folder to where it can be written.",
            )
        ) from error
    return folder / PAGE


def render_into(folder: Path) -> Path:
    """As ``render``, for a folder that is being written; errors of the system come as they are."""
    (folder / PAGE).write_text(page(read_review(folder)), encoding="utf-8")
    return folder / PAGE


def page(review: Row) -> str:
    """The whole page."""
    style = html.asset("report.css") + html.asset("review.css")
    script = html.asset("report.js")
    retire_at = 1 / review["alpha"]
    ordered = sorted(
        review["rules"],
        key=lambda r: (said.URGENCY.index(r["status"]), not r["marks"], r["name"], r["stratum"]),
    )
    high = _highest(ordered)
    rules = [_rule(review, i, rule, high, retire_at) for i, rule in enumerate(ordered, start=1)]
    environment = html.environment().overlay()
    environment.filters["evidence"] = said.evidence_text
    return environment.get_template("review.html.j2").render(
        review=review,
        style=Markup(style),
        script=Markup(script),
        policy=html.policy(style, script),
        rules=rules,
        axis=interval_axis(high),
        several={
            key: any(rule[key] != usual for rule in (*review["rules"], *review["retired"]))
            for key, usual in (("stratum", POOLED), ("target", _usual_target(review)))
        },
        lead=said.lead_words(review),
        quiet=said.quiet_words(review),
        groups=[
            (status, [rule for rule in rules if rule["row"]["status"] == status])
            for status in said.URGENCY
        ],
        marked=[rule for rule in rules if rule["row"]["marks"]],
        carried_out=any(
            rule["status_after"] != rule["status_before"] and not rule.get("settled")
            for rule in review["rules"]
        ),
        book_status=said.BOOK_STATUS,
        retire_at=retire_at,
        hanging=said.HANGING.get(review["hang_together"], review["hang_together"]),
        distrust=list(said.distrust(review)),
        new=_new_rules(review, rules),
        inputs=_inputs(review, rules),
        workload=review_charts.bars(
            review["workload"], "triggers", "hits", ("Closed triggers", "hits")
        )
        if review["workload"]
        else None,
        most={"open": MOST_OPEN, "listed": MOST_LISTED, "entities": MOST_ENTITIES},
        cautions=words.CAUTIONS,
    )


def _usual_target(review: Row) -> str:
    return review["rules"][0]["target"] if review["rules"] else ""


def _highest(rules: list[Row]) -> float:
    """The upper end of the common scale of precisions."""
    shown = [rule["promise"] for rule in rules]
    for key in ("this_quarter", "since"):
        shown += [rule[key][end] for rule in rules if rule[key] for end in ("high", "precision")]
    return float(min(WIDEST, 1.05 * max((x for x in shown if x is not None), default=1.0)) or 1.0)


def _rule(review: Row, order: int, rule: Row, high: float, retire_at: float) -> Row:
    last, watch_at = review["last"], review["watch_at"]
    thresholds = (
        (watch_at, f"watch at {watch_at:g}", "watchline"),
        (retire_at, f"retire at {retire_at:g}", "retireline"),
    )
    evidence = []
    if rule["quarters"]:
        evidence = [
            ("Its promise is broken",
             review_charts.evidence_plot(rule, "e_broken", last, thresholds)),
            ("It still works",
             review_charts.evidence_plot(
                 rule, "e_works", last, ((retire_at, f"strong from {retire_at:g}", "watchline"),))),
        ]  # fmt: skip
    return {
        "order": order,
        "row": rule,
        "expected": _expected(rule["since"]),
        "strip": review_charts.quarter_strip(rule),
        "plot": review_charts.precision_plot(rule, high),
        "evidence_strip": review_charts.evidence_strip(rule, last, watch_at, retire_at),
        "quarters": review_charts.rule_plot(rule) if rule["quarters"] else None,
        "evidence": [(title, plot) for title, plot in evidence if plot is not None],
        "triggers": review_charts.bars(
            rule["quarters"], "triggers", "hits", ("Closed triggers", "hits"), height=150
        )
        if rule["quarters"]
        else None,
        "stretches": [
            (name, rule[key], _expected(rule[key]))
            for key, name in (
                ("this_quarter", "this quarter"),
                ("last_year", "last four quarters"),
                ("since", "since adoption"),
            )
            if rule[key] is not None
        ],
        "latest": sorted(
            rule["triggers"], key=lambda one: (one["session"], one["entity"]), reverse=True
        )[:LATEST],
        "is_open": order <= MOST_URGENT
        and (rule["status"] in ("retire", "watch") or bool(rule["marks"])),
    }


def _expected(part: Row | None) -> float | None:
    return part["expected_hits"] / part["triggers"] if part and part["triggers"] else None


def _new_rules(review: Row, rules: list[Row]) -> Row | None:
    """The window's hunt against the book."""
    hunt = review["hunt"]
    if hunt is None:
        return None
    fates = ("new", "explained", "persisting", "gone")
    number_of = {rule["row"]["id"]: rule for rule in rules}
    found = sorted(hunt["rules"], key=lambda r: (fates.index(r["fate"]), not r["is_rejected"]))
    tested = [r for r in found if r["level"] is not None and not r["is_tested_before"]]
    return {
        "rows": [(rule, number_of.get(rule["like"] or rule["id"])) for rule in found],
        "counts": {fate: sum(rule["fate"] == fate for rule in found) for fate in fates},
        "tested": len(tested),
        "taken": sum(bool(rule["is_rejected"]) for rule in tested),
        "spent": sum(rule["level"] for rule in tested),
    }


def _inputs(review: Row, rules: list[Row]) -> Row:
    """What moved, with the rules that it touches; each type's weeks, those that moved first."""
    inputs = review["inputs"]
    using: dict[str, list[Row]] = {}
    for rule in rules:
        for kind in rule["row"]["combination"]:
            using.setdefault(kind, []).append(rule)
    level = {c["type"]: c["since"] for c in inputs["changes"] if c["kind"] == "level"}
    changed = {c["type"] for c in inputs["changes"]}
    weekly = sorted(inputs["weekly"], key=lambda one: (one["type"] not in changed, one["type"]))
    return {
        "changes": [(change, using.get(change["type"], [])) for change in inputs["changes"]],
        "panels": [
            (
                one["type"],
                one["type"] in changed,
                review_charts.weeks_plot(
                    inputs["weeks"], one["alerts"], level.get(one["type"]), review
                ),
            )
            for one in weekly[:MOST_PANELS]
            if inputs["weeks"]
        ],
        "n_panels": len(weekly),
        "types": list(_type_rows(inputs)),
        "moves": [
            (change, [e for e in inputs["entities"] if e["change"] == change])
            for change in ("joined", "left")
        ],
    }


def _type_rows(inputs: Row) -> Iterator[tuple[Row, Row | None]]:
    """Each type in the reviewed quarter, and in the one before."""
    quarters = inputs["quarters"]
    by_place = {(row["type"], row["quarter"]): row for row in inputs["types"]}
    for kind in dict.fromkeys(row["type"] for row in inputs["types"]):
        now = by_place.get((kind, quarters[-1]))
        if now is not None:
            before = by_place.get((kind, quarters[-2])) if len(quarters) > 1 else None
            yield now, before
