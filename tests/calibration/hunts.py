"""Whole hunts: how many rules are found where there is nothing, and where the truth is known."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import Any

import numpy as np

from miner.columns import CONFIRMED
from miner.discovery import TIE as SLACK
from miner.discovery import Adjuster, Found, draw, find
from miner.explain_away import explain_away
from miner.holdout import judge_holdout
from miner.kernels import hits, tails
from miner.search import Search, cases_of, placebo_rules
from miner.time_split import DiscoverySlice, discovery_slice, holdout_slice
from miner.triggers import Combo
from tests.calibration import remedies
from tests.calibration.discrete import cdf_at, from_draws, heyse, step_down, tarone_factor
from tests.calibration.in_memory import panel_of, study_of
from tests.calibration.level import Tasks
from tests.calibration.table import BY_NAME, NamedWorld
from tests.calibration.whole_runs import RunExchanger
from tests.worlds import TARGET, Plant, WorldArrays

FDRS = (0.01, 0.05, 0.10)
ADJUSTS = ("bh", "by", "westfall-young")
DRAWS = 999
QUIET_WORLDS = (
    "quiet",
    "season",
    "sectors",
    "busy names",
    "both clusters",
    "calendar, busy",
    "calendar, busy, common",
    "all held",
    "all held, common",
    "all held, 8 types",
    "sectors unknown",
    "reactive, clustered",
    "busy spell, mild",
    "busy spell",
)
PLANT_WORLDS = ("quiet", "calendar, busy", "all held")
PLANT_TYPES = 14
# types published throughout, so that every plant finds room
PLANT_SIZE = {"n_types": PLANT_TYPES, "alerts_per_type": 800, "type_coverage": 0.0}
LIFTS = (1.5, 2.0, 3.0, 5.0, 8.0)
TRIGGERS = (20, 50, 100, 200, 500, 1000, 2000)


def kind_of(combo: Combo, planted: Sequence[Combo]) -> str:
    """ "found": planted so; "near": more or fewer types of one; "shares": a type; else "false"."""
    mine = set(combo)
    if combo in planted:
        return "found"
    if any(mine < set(other) or mine > set(other) for other in planted):
        return "near"
    return "shares" if any(mine & set(other) for other in planted) else "false"


def count_kinds(combos: Sequence[Combo], planted: Sequence[Combo]) -> dict[str, int]:
    """Number of combinations of each kind."""
    kinds = [kind_of(combo, planted) for combo in combos]
    return {kind: kinds.count(kind) for kind in ("found", "near", "shares", "false")}


def draw_plants(rng: np.random.Generator, base_rate: float) -> list[tuple[Plant, float]]:
    """One to five plants of distinct types where there are enough, each with its nominal lift."""
    types = rng.permutation(PLANT_TYPES)
    plants: list[tuple[Plant, float]] = []
    used = slots = 0
    for _ in range(rng.integers(1, 6)):
        size = int(rng.integers(1, 4))
        lift = float(rng.choice(LIFTS))
        n_triggers = int(rng.choice(TRIGGERS))
        if used + size > PLANT_TYPES or slots + n_triggers > 2600:
            continue
        combo = tuple(sorted(int(k) for k in types[used : used + size]))
        # what is planted comes on top of the background's share
        precision = (lift - 1) * base_rate / (1 - base_rate)
        plants.append((Plant(combo, precision, n_triggers), lift))
        used, slots = used + size, slots + n_triggers
    return plants


def search_all(
    early: DiscoverySlice, world: WorldArrays, *, with_whole_runs: bool = False
) -> tuple[Found, dict[str, Adjuster], np.ndarray, np.ndarray | None]:
    """The case judged once, its adjusters, and drawn log p-values of both permutation forms."""
    study = study_of(world)
    (case,) = cases_of(early, [TARGET], study)
    found = find(case, min_hits=study.mining.min_hits, max_size=study.mining.max_size)
    log_p = draw(found, DRAWS, world.seed).log_p_cr
    adjusters = {how: Adjuster([found], how, [log_p]) for how in ADJUSTS}
    runs_log_p = None
    if with_whole_runs:
        table = case.unit.triggers
        hits_cr = np.ascontiguousarray(RunExchanger(case, world.seed).hits(DRAWS).T)
        runs_log_p = hits.log_tail_ranks(
            np.arange(found.size),
            table.offset_c,
            table.entity,
            table.session,
            found.margins.table,
            hits_cr,
        )
        adjusters["wy, whole runs"] = Adjuster([found], "westfall-young", [runs_log_p])
    return found, adjusters, log_p, runs_log_p


def hunt_world(
    world: WorldArrays, *, by_discrete: bool = False, n_placebo: int = 0
) -> dict[str, Any] | None:
    """One whole hunt by every adjustment and level; rules by kind, confirmed rules, plants."""
    panel = panel_of(world)
    study = study_of(world, testing={"placebo": n_placebo})
    first = world.n_sessions - round(study.holdout.share * world.n_sessions)
    early = discovery_slice(panel, first - study.holdout.embargo - 1)
    found, adjusters, log_p, runs_log_p = search_all(early, world, with_whole_runs=True)
    if found.size == 0:
        return None
    combos = found.case.unit.triggers.combos
    planted = [plant.combination for plant in world.planted]
    row: dict[str, Any] = {"family": found.size, "rules": {}, "passed": {}}
    for how, adjuster in adjusters.items():
        (adjusted,) = adjuster.adjusted([found.p])
        for fdr in FDRS:
            passing = [combos[c] for c in np.flatnonzero(adjusted <= fdr)]
            row["passed"][f"{how} {fdr}"] = count_kinds(passing, planted)
            explanation = explain_away(
                [found], adjuster, fdr=fdr, min_triggers=study.mining.min_triggers
            )
            rules = [combos[rule.row] for rule in explanation.rules]
            row["rules"][f"{how} {fdr}"] = count_kinds(rules, planted)
            if how == "bh" and fdr == study.testing.fdr:
                search = Search((found,), adjuster, explanation)
                row |= _confirmed(search, panel_of(world), first, world, planted)
                row["plants"] = _plants(world, found, adjusted, rules)
                if n_placebo:
                    row["placebo"] = placebo_rules(search, study)
    hazard = np.where(found.is_proposed, remedies.multiplied_hazard(found.case), 1.0)
    (adjusted,) = adjusters["bh"].adjusted([hazard])
    for fdr in FDRS:
        passing = [combos[c] for c in np.flatnonzero(adjusted <= fdr)]
        row["passed"][f"hazard {fdr}"] = count_kinds(passing, planted)
    if by_discrete and runs_log_p is not None:
        row["passed"] |= _discrete(found, planted, log_p, runs_log_p)
    return row


def _confirmed(
    search: Search, panel: Any, first: int, world: WorldArrays, planted: Sequence[Combo]
) -> dict[str, Any]:
    study = study_of(world)
    chosen = search.chosen()
    outcomes = judge_holdout(
        holdout_slice(panel, first, world.n_sessions - 1),
        chosen,
        alpha=study.holdout.alpha,
        lookback=study.windows.lookback,
        horizon=study.windows.horizon,
        rest=study.windows.rest,
    )
    confirmed = [
        rule.combo
        for rule, outcome in zip(chosen, outcomes, strict=True)
        if outcome.verdict == CONFIRMED
    ]
    verdicts: dict[str, dict[str, int]] = {}
    for rule, outcome in zip(chosen, outcomes, strict=True):
        by_kind = verdicts.setdefault(outcome.verdict, {})
        kind = kind_of(rule.combo, planted)
        by_kind[kind] = by_kind.get(kind, 0) + 1
    return {
        "confirmed": count_kinds(confirmed, planted),
        "verdicts": verdicts,
        "confirmed_combos": [list(combo) for combo in confirmed],
    }


def _plants(
    world: WorldArrays, found: Found, adjusted: np.ndarray, rules: Sequence[Combo]
) -> list[dict[str, Any]]:
    """What became of each plant."""
    table = found.case.unit.triggers
    result = []
    for plant in world.planted:
        combo = plant.combination
        row = table.combos.index(combo) if combo in table.combos else None
        near = [rule for rule in rules if set(rule) < set(combo) or set(rule) > set(combo)]
        result.append(
            {
                "size": len(combo),
                "planted": plant.n_triggers,
                "precision": plant.precision,
                "triggers": 0 if row is None else int(table.count_c[row]),
                "hits": 0 if row is None else int(found.hits[row]),
                "expected": 0.0 if row is None else float(found.expected[row]),
                "passed": row is not None and bool(adjusted[row] <= 0.05),
                "rule": combo in rules,
                "near": len(near),
            }
        )
    return result


def _discrete(
    found: Found, planted: Sequence[Combo], log_p: np.ndarray, runs_log_p: np.ndarray
) -> dict[str, dict[str, int]]:
    """Kinds of combinations that pass by the adjustments on trial."""
    table = found.case.unit.triggers
    supports = [tail_steps(found.rates_of(c), int(found.hits[c])) for c in range(found.size)]
    cdf_ck = cdf_at(supports, found.p)
    smallest = np.array([support[0] for support in supports])
    logs = np.log(found.p)
    trial = {
        "dbh-sd": step_down(found.p, cdf_ck),
        "heyse": heyse(found.p, cdf_ck),
        "drawn": from_draws(logs, log_p, SLACK),
        "drawn, whole runs": from_draws(logs, runs_log_p, SLACK),
    }
    result = {}
    for fdr in FDRS:
        for name, adjusted in trial.items():
            passing = [table.combos[c] for c in np.flatnonzero(adjusted <= fdr)]
            result[f"{name} {fdr}"] = count_kinds(passing, planted)
        factor = tarone_factor(smallest, fdr)
        passing = [table.combos[c] for c in np.flatnonzero(found.p <= fdr / factor)]
        result[f"tarone {fdr}"] = count_kinds(passing, planted)
        passing = [table.combos[c] for c in np.flatnonzero(found.p <= fdr / found.size)]
        result[f"bonferroni {fdr}"] = count_kinds(passing, planted)
    return result


def tail_steps(rates: np.ndarray, hits: int) -> np.ndarray:
    """Attainable p-values of hits under the rates, rising, from below 1e-12 or all hits up."""
    top = min(rates.size, max(hits, int(rates.sum() + 12 * np.sqrt(rates.sum()) + 25)))
    table = tails.tail_table(rates, 0, top)
    return np.unique(np.maximum(table, 1e-300))


def nothing_planted(n_seeds: int) -> Tasks:
    """Hunts in worlds where no combination says anything."""
    for i in range(n_seeds):
        for name in QUIET_WORLDS:
            seed = 20_000 + i
            yield (
                {"part": "nothing", "world": name, "seed": seed},
                lambda name=name, seed=seed: hunt_world(BY_NAME[name].make(seed)),
            )


def planted_world(world: NamedWorld, seed: int) -> dict[str, Any] | None:
    """One hunt in a world with random plants."""
    rng = np.random.default_rng([seed, 1])
    plants = draw_plants(rng, world.drivers.get("base_rate", 0.05))
    made = world.make(seed, [plant for plant, _ in plants], **PLANT_SIZE)
    row = hunt_world(made, by_discrete=True)
    if row is not None:
        for record, (_, lift) in zip(row["plants"], plants, strict=True):
            record["lift"] = lift
    return row


def planted(n_seeds: int) -> Tasks:
    """Hunts in worlds with one to five plants."""
    for i in range(n_seeds):
        for name in PLANT_WORLDS:
            seed = 30_000 + i
            yield (
                {"part": "planted", "world": name, "seed": seed},
                partial(planted_world, BY_NAME[name], seed),
            )
