"""Hands on the study in a few lines: one table for those who read no further."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from tests.calibration import summarise as s
from tests.calibration.summarise import Results, Row, table
from tests.calibration.table import BY_NAME

FDR = "0.05"


def in_short(parts: Mapping[str, Sequence[Row]], worlds: Mapping[str, Results]) -> str:
    """Question, answer and section; only of parts that have been run."""
    rows: list[tuple[str, str, str]] = []
    if "level" in worlds:
        claimed = _claimed(worlds["level"])
        shares = {name: s.level_of(results, "margins", 0) for name, results in claimed.items()}
        worst = max(shares, key=lambda name: shares[name].value)
        n_held = sum(share.value <= 0.06 for share in shares.values())
        rows.append(
            (
                "Noise with p at most .05, where everything shared is held fixed",
                f"{s.mean(share.value for share in shares.values()).value:.3f} on average over "
                f"{len(shares)} worlds, at most .060 in {n_held}; worst {worst}: "
                f"{shares[worst].text()}",
                "1",
            )
        )
    if "nothing" in worlds:
        claimed = _claimed(worlds["nothing"])
        shares = {name: s.any_rule(results, f"bh {FDR}") for name, results in claimed.items()}
        worst = max(shares, key=lambda name: shares[name].value)
        confirmed = [sum(r["confirmed"].values()) > 0 for rs in claimed.values() for r in rs]
        rows.append(
            (
                "Hunts that report any rule when there is none (nominal 5 %)",
                f"{s.mean(share.value for share in shares.values()).value:.1%} on average, worst "
                f"{worst}: {shares[worst].value:.1%}; confirmed by the holdout: "
                f"{sum(confirmed)} of {len(confirmed)} hunts",
                "6",
            )
        )
    if "planted" in worlds:
        everything = [r for results in worlds["planted"].values() for r in results]
        wrong = s.false_share(everything, "rules", f"bh {FDR}", ("false",))
        sure = [p for p in s.plants(everything) if p["lift"] >= 5 and p["planted"] >= 200]
        found = sum(p["rule"] or p["near"] > 0 for p in sure) / max(1, len(sure))
        confirmed_kinds = s.kinds([{"c": {"c": r["confirmed"]}} for r in everything], "c", "c")
        rows += [
            ("Share of wrong rules among those reported (nominal 5 %)", wrong.text(), "7"),
            (
                "Plants of 5 times the base rate with 200 triggers or more that are reported",
                f"{found:.0%} of {len(sure)}",
                "7",
            ),
            (
                "Confirmed rules that have nothing to do with a plant",
                f"{confirmed_kinds['false']} of {sum(confirmed_kinds.values())}",
                "7",
            ),
        ]
    if parts.get("intervals"):
        ours = [row["result"]["ours"] for row in parts["intervals"]]
        plain = [row["result"]["plain"] for row in parts["intervals"]]
        rows.append(
            (
                "95 % intervals that hold the truth, triggers in clusters",
                f"{min(ours):.3f} to {max(ours):.3f} (plain Wilson {min(plain):.3f} to "
                f"{max(plain):.3f})",
                "10",
            )
        )
    if "practice" in worlds:
        way = "circular shift"
        results = worlds["practice"].get("calendar, busy", [])
        usual = s.mean(r["passed"].get(way, 0) for r in results)
        tool = s.mean(r["passed"]["this tool, rules"] for r in results)
        rows.append(
            (
                "False combinations a hunt, shared season, shocks and busy names",
                f"{tool.value:.2f} rules; {usual.value:.0f} with shifted histories and "
                "adjustment over what was mined",
                "12",
            )
        )
    return table(["question", "answer", "section"], rows)


def _claimed(worlds: Results) -> Results:
    return {name: results for name, results in worlds.items() if BY_NAME[name].is_claimed}
