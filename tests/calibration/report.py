"""Writes reports/calibration.md and its figures from the result lines."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

from tests.calibration import figures, lines
from tests.calibration import summarise as s
from tests.calibration.hunts import ADJUSTS, FDRS, LIFTS, TRIGGERS
from tests.calibration.level import LEVELS
from tests.calibration.prose import PROSE
from tests.calibration.table import BY_NAME, WORLDS

ALLOWED = 1.2  # times the nominal level
Results = dict[str, list[s.Row]]


def table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A markdown table."""
    body = [head, ["---"] * len(head), *rows]
    return "\n".join("| " + " | ".join(cells) + " |" for cells in body)


def write_report(folder: Path, reports: Path, versions: Mapping[str, str]) -> None:
    """Read the lines of every part, write the report and the figures."""
    (reports / "figures").mkdir(parents=True, exist_ok=True)
    parts = {path.stem: lines.read(path) for path in sorted(folder.glob("*.jsonl"))}
    sections: list[tuple[str, str, Callable[[list[s.Row]], str]]] = [
        ("level", "level", lambda rows: _level(s.by_world(rows), reports)),
        ("level", "forms", lambda rows: _forms(s.by_world(rows))),
        ("level", "remedies", lambda rows: _remedies(s.by_world(rows))),
        ("power", "power", lambda rows: _power(s.by_world(rows))),
        ("level", "warnings", lambda rows: _warnings(s.by_world(rows))),
        ("nothing", "nothing", lambda rows: _nothing(s.by_world(rows))),
        ("planted", "planted", lambda rows: _planted(s.by_world(rows), reports)),
        ("planted", "adjustments", lambda rows: _adjustments(s.by_world(rows))),
        ("intervals", "intervals", _intervals),
        ("placebo", "placebo", _placebo),
        ("practice", "practice", lambda rows: _practice(s.by_world(rows))),
    ]
    text = [PROSE["head"]]
    for part, name, make in sections:
        if parts.get(part):
            text.append(PROSE[name].format(table=make(parts[part])))
    seconds = sum(row["seconds"] for rows in parts.values() for row in rows)
    runs = sum(len(rows) for rows in parts.values())
    named = ", ".join(f"{name} {number}" for name, number in versions.items())
    text.append(PROSE["foot"].format(runs=runs, minutes=round(seconds / 60), versions=named))
    (reports / "calibration.md").write_text("\n\n".join(text) + "\n", encoding="utf-8")


def _verdict(share: s.Mean, nominal: float) -> str:
    """Whether a level is broken beyond the noise of the study."""
    if share.value <= ALLOWED * nominal:
        return "holds"
    return "**broken**" if share.value - 2 * share.error > ALLOWED * nominal else "unclear"


def _level(worlds: Results, reports: Path) -> str:
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


def _forms(worlds: Results) -> str:
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


REMEDIES = ("margins", "hazard", "rows by 50", "rows by 25", "recent 10", "clustered", "deflated")


def _remedies(worlds: Results) -> str:
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


def _power(worlds: Results) -> str:
    rows = []
    for name, results in worlds.items():
        cells = [
            s.mean(float(r["p"][null] <= 0.001) for r in results).text(2, with_error=False)
            for null in (*REMEDIES, "exchanges", "whole runs")
        ]
        rows.append([name if BY_NAME[name].is_claimed else f"*{name}*", str(len(results)), *cells])
    return table(["world", "seeds", *REMEDIES, "exchanges", "whole runs"], rows)


def _warnings(worlds: Results) -> str:
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


def _nothing(worlds: Results) -> str:
    hows = (*ADJUSTS, "wy, whole runs")
    rows = []
    for name, results in worlds.items():
        cells = [
            " / ".join(
                s.any_rule(results, f"{how} {fdr}").text(3, with_error=False) for fdr in FDRS
            )
            for how in hows
        ]
        hazard = " / ".join(
            s.mean(float(sum(r["passed"][f"hazard {fdr}"].values()) > 0) for r in results).text(
                3, with_error=False
            )
            for fdr in FDRS
        )
        confirmed = s.mean(float(sum(r["confirmed"].values()) > 0) for r in results)
        error = s.any_rule(results, "bh 0.05").error
        rows.append(
            [
                name if BY_NAME[name].is_claimed else f"*{name}*",
                str(len(results)),
                *cells,
                f"{error:.3f}",
                hazard,
                confirmed.text(),
            ]
        )
    head = ["world", "seeds", *hows, "s.e. of bh at 5 %", "bh, hazard", "any confirmed (bh, 5 %)"]
    return table(head, rows)


def _planted(worlds: Results, reports: Path) -> str:
    everything = [r for results in worlds.values() for r in results]
    figures.recovery(s.plants(everything), LIFTS, TRIGGERS, reports / "figures" / "recovery.svg")
    rows = []
    for name, results in worlds.items():
        n_plants = len(s.plants(results))
        for how in (*ADJUSTS, "wy, whole runs"):
            for fdr in FDRS:
                key = f"{how} {fdr}"
                kinds = s.kinds(results, "rules", key)
                rows.append(
                    [
                        name,
                        how,
                        f"{fdr:.0%}",
                        f"{kinds['found']} of {n_plants}",
                        str(kinds["near"]),
                        str(kinds["shares"]),
                        str(kinds["false"]),
                        s.false_share(results, "rules", key, ("false",)).text(),
                        s.false_share(results, "rules", key, ("false", "shares")).text(),
                        s.false_share(results, "passed", key, ("false",)).text(),
                    ]
                )
    head = ["world", "adjustment", "nominal", "found", "near", "share a type", "unrelated"]
    head += ["FDR of rules", "FDR, type-sharers wrong too", "FDR before explaining away"]
    return "\n\n".join((table(head, rows), _confirmed(worlds)))


def _confirmed(worlds: Results) -> str:
    rows = []
    for name, results in worlds.items():
        for verdict in ("confirmed", "refuted", "underpowered"):
            total = {"found": 0, "near": 0, "shares": 0, "false": 0}
            for r in results:
                for kind, n in r["verdicts"].get(verdict, {}).items():
                    total[kind] += n
            rows.append([name, verdict, *(str(n) for n in total.values())])
    head = ["world", "holdout verdict", "plants", "near", "share a type", "unrelated"]
    return table(head, rows)


def _adjustments(worlds: Results) -> str:
    everything = [r for results in worlds.values() for r in results]
    n_plants = len(s.plants(everything))
    rows = []
    names = ("bh", "by", "westfall-young", "wy, whole runs", "dbh-sd", "heyse", "drawn")
    for name in (*names, "drawn, whole runs", "tarone", "bonferroni", "hazard"):
        cells = []
        for fdr in FDRS:
            key = f"{name} {fdr}"
            found = s.kinds(everything, "passed", key).get("found", 0)
            fdr_seen = s.false_share(everything, "passed", key, ("false",))
            any_false = s.mean(
                float(r["passed"][key]["false"] > 0) for r in everything if key in r["passed"]
            )
            cells += [f"{found / n_plants:.3f}", fdr_seen.text(), any_false.text(with_error=False)]
        rows.append([name, *cells])
    head = ["adjustment"]
    for fdr in FDRS:
        head += [f"plants passed at {fdr:.0%}", "FDR", "any unrelated"]
    return table(head, rows)


def _intervals(rows: list[s.Row]) -> str:
    body = []
    for row in rows:
        entities, dates, triggers, precision, sd_e, sd_d = row["key"]["design"]
        r = row["result"]
        body.append(
            [
                f"{entities} x {dates}",
                str(triggers),
                f"{precision:g}",
                f"{sd_e:g}, {sd_d:g}",
                f"{r['plain']:.3f}",
                f"{r['ours']:.3f}",
                f"{r['width']:.2f}",
                f"{r['few']:.2f}",
                str(r["worlds"]),
            ]
        )
    head = ["entities x dates", "triggers", "precision", "sd of entity, date effects"]
    head += ["plain Wilson", "ours", "ours / plain width", "too few clusters", "worlds"]
    return table(head, body)


def _placebo(rows: list[s.Row]) -> str:
    groups: dict[tuple[str, bool], list[s.Row]] = {}
    for row in rows:
        if row["result"] is not None:
            key = (row["key"]["world"], row["key"]["plants"])
            groups.setdefault(key, []).append(row["result"])
    body = []
    for (name, has_plants), results in groups.items():
        false = s.mean(
            r["rules"]["false"] + (0 if has_plants else r["rules"]["shares"]) for r in results
        )
        drawn = s.mean(sum(r["placebo"]) / len(r["placebo"]) for r in results)
        any_false = s.mean(float(r["rules"]["false"] > 0) for r in results)
        any_drawn = s.mean(sum(n > 0 for n in r["placebo"]) / len(r["placebo"]) for r in results)
        body.append(
            [
                name if BY_NAME[name].is_claimed else f"*{name}*",
                "yes" if has_plants else "no",
                str(len(results)),
                false.text(),
                drawn.text(),
                any_false.text(),
                any_drawn.text(),
            ]
        )
    head = ["world", "plants", "seeds", "false rules a hunt", "placebo's mean"]
    return table([*head, "share with any false", "placebo's share"], body)


def _practice(worlds: Results) -> str:
    ways = (
        "base rate",
        "plain shuffle",
        "circular shift",
        "circular shift, whole family",
        "margins, mined only",
        "this tool",
        "hazard, whole family",
        "this tool, rules",
    )
    rows = []
    for name, results in worlds.items():
        cells = []
        for way in ways:
            numbers = [r["passed"].get(way, 0) for r in results]
            share = sum(n > 0 for n in numbers) / len(numbers)
            cells.append(f"{sum(numbers) / len(numbers):.1f} ({share:.0%})")
        size = s.mean(r["family"] for r in results).text(0, with_error=False)
        rows.append([name, str(len(results)), size, *cells])
    return table(["world", "seeds", "family", *ways], rows)


CLAIMED = tuple(world.name for world in WORLDS if world.is_claimed)
