"""Hands on the report's tables about whole hunts, intervals, the placebo and usual practice."""

from __future__ import annotations

from pathlib import Path

from tests.calibration import figures
from tests.calibration import summarise as s
from tests.calibration.hunts import ADJUSTS, FDRS, LIFTS, TRIGGERS
from tests.calibration.joint import WAYS
from tests.calibration.summarise import Results, table
from tests.calibration.table import BY_NAME


def nothing(worlds: Results) -> str:
    """Hunts in worlds without plants."""
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


def planted(worlds: Results, reports: Path) -> str:
    """Hunts in worlds with plants; draws the figure."""
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


def adjustments(worlds: Results) -> str:
    """What passes, by adjustment."""
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


def joint(worlds: Results) -> str:
    """Westfall-Young by the way of drawing."""
    rows = []
    for name, results in worlds.items():
        cells = []
        for way in WAYS:
            for what, level in (("smallest", 0.05), ("smallest", 0.10), ("pair", 0.05)):
                share = s.mean(float(r[way][what] <= level) for r in results)
                cells.append(share.text(2, with_error=(what, way) == ("smallest", "own mean")))
        rows.append([name, str(len(results)), *cells])
    head = ["world", "seeds"]
    for way in WAYS:
        head += [f"{way}: any at 5 %", "10 %", "pair found at 5 %"]
    return table(head, rows)


def intervals(rows: list[s.Row]) -> str:
    """Coverage."""
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


def placebo(rows: list[s.Row]) -> str:
    """Placebo beside truth."""
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


def practice(worlds: Results) -> str:
    """Usual practice beside this tool."""
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
