"""Hands on the report's tables about single tests: level, forms, laws, remedies, power."""

from __future__ import annotations

from pathlib import Path

from tests.calibration import figures
from tests.calibration import summarise as s
from tests.calibration.level import LEVELS
from tests.calibration.summarise import Results, table
from tests.calibration.table import BY_NAME

ALLOWED = 1.2  # times the nominal level


def _verdict(share: s.Mean, nominal: float) -> str:
    """Whether a level is broken beyond the noise of the study."""
    if share.value <= ALLOWED * nominal:
        return "holds"
    return "**broken**" if share.value - 2 * share.error > ALLOWED * nominal else "unclear"


def level(worlds: Results, reports: Path) -> str:
    """Level of the gate and of the other nulls; draws the figure."""
    rows = []
    shown: dict[str, dict[str, s.Mean]] = {}
    for name, results in worlds.items():
        gate = [s.level_of(results, "margins", i) for i in range(len(LEVELS))]
        roomy = s.level_of(results, "margins", 0, "roomy")
        others = {
            null: s.level_of(results, null, 0)
            for null in ("exchanges", "own timing", "plain shuffle")
        }
        shown[name] = {"margins": gate[0]} | others
        rows.append(
            [
                name if BY_NAME[name].is_claimed else f"*{name}*",
                BY_NAME[name].what,
                str(gate[0].n),
                gate[0].text(),
                gate[1].text(4),
                gate[2].text(4, with_error=False),
                roomy.text(with_error=False),
                _verdict(gate[0], LEVELS[0]),
                *(share.text(with_error=False) for share in others.values()),
            ]
        )
    figures.levels(shown, LEVELS[0], reports / "figures" / "level.svg")
    head = ["world", "what is shared", "seeds", "margins ≤ .05", "≤ .01", "≤ .001"]
    head += ["≤ .05, 5+ hits expected", "claim", "exchanges ≤ .05", "own timing ≤ .05"]
    return table([*head, "plain shuffle ≤ .05"], rows)


def forms(worlds: Results) -> str:
    """Exchanged worlds against the closed form."""
    rows = [
        [
            name,
            *(
                s.fact(results, fact).text(2, with_error=False)
                for fact in ("mean_exchanges", "sd_exchanges", "mean_runs", "sd_runs")
            ),
            s.level_of(results, "exchanges", 0).text(),
            s.level_of(results, "whole runs", 0).text(),
        ]
        for name, results in worlds.items()
    ]
    head = ["world", "drawn / closed mean", "closed / drawn sd", "whole runs: mean", "sd"]
    return table([*head, "exchanges ≤ .05", "whole runs ≤ .05"], rows)


def laws(rows: list[s.Row]) -> str:
    """Level by the law that events follow."""
    groups: dict[tuple[str, float, int], list[s.Row]] = {}
    for row in rows:
        key = (row["key"]["law"], row["key"]["base_rate"], row["key"]["horizon"])
        groups.setdefault(key, []).append(row["result"])
    body = []
    for (law, base_rate, horizon), results in groups.items():
        cells = [
            s.mean(r[null][i] for r in results).text()
            for null in ("margins", "hazard")
            for i in (0, 1)
        ]
        drawn = [s.mean(r[null][0] for r in results).text() for null in ("exchanges", "whole runs")]
        body.append([law, f"{base_rate:.0%}", str(horizon), str(len(results)), *cells, *drawn])
    head = ["law", "base rate", "horizon", "seeds", "margins ≤ .05", "≤ .01", "hazard ≤ .05"]
    return table([*head, "≤ .01", "exchanges ≤ .05", "whole runs ≤ .05"], body)


REMEDIES = ("margins", "hazard", "rows by 50", "rows by 25", "recent 10", "clustered", "deflated")


def remedies(worlds: Results) -> str:
    """Level by remedy."""
    rows = [
        [
            name if BY_NAME[name].is_claimed else f"*{name}*",
            *(
                s.level_of(results, null, 0).text(with_error=null in ("margins", "hazard"))
                for null in (*REMEDIES, "larger of both")
            ),
        ]
        for name, results in worlds.items()
    ]
    return table(["world", *REMEDIES, "larger of margins and own timing"], rows)


def power(worlds: Results) -> str:
    """Power by remedy."""
    rows = []
    for name, results in worlds.items():
        cells = [
            s.mean(float(r["p"][null] <= 0.001) for r in results).text(2, with_error=False)
            for null in (*REMEDIES, "exchanges", "whole runs")
        ]
        rows.append([name if BY_NAME[name].is_claimed else f"*{name}*", str(len(results)), *cells])
    return table(["world", "seeds", *REMEDIES, "exchanges", "whole runs"], rows)


def warnings(worlds: Results) -> str:
    """Share of worlds flagged."""

    def flag(p: float) -> float:
        return float(p <= 0.05)

    rows = [
        [
            name if BY_NAME[name].is_claimed else f"*{name}*",
            s.fact(results, "p_inflated", flag).text(2),
            s.fact(results, "p_spells", flag).text(2),
            s.fact(results, "p_together", flag).text(2),
        ]
        for name, results in worlds.items()
    ]
    return table(["world", "family inflated", "names have spells", "names move together"], rows)
