"""The whole search on one segment: family, candidates, explaining away; and on drawn worlds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from miner import memory_estimate, workers
from miner.chosen import ChosenRule
from miner.discovery import Adjuster, Drawn, Found, draw, find, lean_p
from miner.explain_away import Explanation, explain_away
from miner.nulls.exchanges import Exchanger
from miner.panel import Panel
from miner.settings import Study
from miner.time_split import DiscoverySlice
from miner.triggers import TriggerTable, find_family
from miner.units import Case, make_case, make_unit, stratum_codes
from miner.workers import Progress, silent


@dataclass(frozen=True)
class Search:
    """What discovery found: one ``Found`` a target and stratum, and the rules over all of them.

    ``leans`` has, where worlds were drawn, one p-value a ``Found``: of its family as a whole, not
    only the rules, leaning towards events.
    """

    found: tuple[Found, ...]
    adjuster: Adjuster
    explanation: Explanation
    leans: tuple[float, ...] = ()

    def chosen(self) -> list[ChosenRule]:
        """The rules as the holdout takes them, in the order found."""
        chosen = []
        for rule in self.explanation.rules:
            case = self.found[rule.case].case
            table = case.unit.triggers
            base = None if rule.sharpens is None else self.explanation.rules[rule.sharpens].row
            chosen.append(
                ChosenRule(
                    case.target,
                    case.unit.stratum,
                    case.unit.code,
                    table.combos[rule.row],
                    float(case.hits_c[rule.row] / table.count_c[rule.row]),
                    None if base is None else table.combos[base],
                )
            )
        return chosen


Families = dict[str, TriggerTable]


def families_of(segment: DiscoverySlice, study: Study, n_workers: int = 1) -> Families:
    """The family of each stratum, with its triggers."""
    windows, mining = study.windows, study.mining
    return find_family(
        segment,
        codes_of(segment.panel, study),
        lookback=windows.lookback,
        horizon=windows.horizon,
        rest=windows.rest,
        max_size=mining.max_size,
        min_triggers=mining.min_triggers,
        n_workers=n_workers,
    )


def families_until(latest: Families, until: int, study: Study, n_workers: int = 1) -> Families:
    """Families as they stood by session ``until``, cut from those of a later session.

    A trigger depends on nothing after it, so one search for triggers serves every earlier end.
    """
    stop_t = until - study.windows.horizon + 1
    return {
        name: table.until(stop_t, study.mining.min_triggers, n_workers)
        for name, table in latest.items()
    }


def codes_of(panel: Panel, study: Study) -> dict[str, int | None]:
    """The strata a study hunts in (``units.stratum_codes``)."""
    return stratum_codes(panel, study.groups is not None and study.groups.pooled)


def cases_of(
    segment: DiscoverySlice,
    targets: Sequence[str],
    study: Study,
    families: Families | None = None,
    n_workers: int = 1,
) -> list[Case]:
    """Every target in every stratum, with the family of each stratum."""
    families = families or families_of(segment, study, n_workers)
    units = [
        make_unit(segment, name, code, families[name], **study.windows.model_dump())
        for name, code in codes_of(segment.panel, study).items()
    ]
    return [
        make_case(target, unit, segment.panel.events[target])
        for target in targets
        for unit in units
    ]


def search(
    segment: DiscoverySlice,
    targets: Sequence[str],
    study: Study,
    families: Families | None = None,
    *,
    in_full: bool = True,
    progress: Progress = silent,
    n_workers: int = 1,
) -> Search:
    """Find the rules of a segment.

    Parameters
    ----------
    families : of the segment, if they are at hand already
    in_full : draw exchanged worlds, so that westfall-young can be shown beside the chosen
        adjustment (always done where it is the chosen one), count proposals outside the family, and
        work out every p-value, not only those that may pass
    """
    mining, testing = study.mining, study.testing
    cases = cases_of(segment, targets, study, families, n_workers)
    with_draws = testing.permutations > 0 and (in_full or testing.adjust == "westfall-young")
    if in_full:  # and all that follows it; a fold takes less
        n_draws = testing.permutations if with_draws else 0
        memory_estimate.refuse(_need_of(cases, n_draws, n_workers))
    progress("hits against the margins null")
    found = [
        find(
            case,
            min_hits=mining.min_hits,
            max_size=mining.max_size,
            by_mining=in_full,
            level=None if in_full else _level(study),
            n_workers=n_workers,
        )
        for case in cases
    ]
    draws: list[Drawn] = []
    if with_draws:
        progress("exchanging sessions")
        draws = [draw(f, testing.permutations, testing.seed, n_workers, progress) for f in found]
    adjuster = Adjuster(found, testing.adjust, [d.log_p_cr for d in draws] or None)
    progress("explaining away")
    explanation = explain_away(
        found, adjuster, fdr=testing.fdr, min_triggers=mining.min_triggers, n_workers=n_workers
    )
    leans = tuple(
        lean_p(f, drawn, [rule.row for rule in explanation.rules if rule.case == i], n_workers)
        for i, (f, drawn) in enumerate(zip(found, draws, strict=False))
    )
    return Search(tuple(found), adjuster, explanation, leans)


def _level(study: Study) -> float | None:
    """The level above which a p-value need not be worked out: it cannot pass, and is not shown."""
    # drawn adjusted p-values may lie a little below the closed form's, so no short cut there
    return None if study.testing.adjust == "westfall-young" else study.testing.fdr


def _need_of(cases: Sequence[Case], n_draws: int, n_workers: int) -> memory_estimate.Need:
    tables = [case.unit.triggers for case in cases]
    panel = cases[0].unit.segment.panel if cases else None
    return memory_estimate.of_search(
        0 if panel is None else panel.n_entities * panel.n_sessions,
        len({case.unit.stratum for case in cases}),
        [table.entity.size for table in tables],
        [len(table.combos) for table in tables],
        [case.events[0].size for case in cases],
        n_draws,
        n_workers,
    )


def placebo_rules(
    real: Search, study: Study, n_workers: int = 1, progress: Progress = silent
) -> list[int]:
    """Number of rules the same search finds in each of ``study.testing.placebo`` drawn worlds.

    A drawn world exchanges sessions between events of one peer group, case by case; triggers and
    family do not change with it, and its margins are refitted from the real ones.
    """
    n_worlds = study.testing.placebo
    mining = study.mining
    drawn = [
        list(Exchanger(f.case, study.testing.seed, "placebo").worlds(n_worlds)) for f in real.found
    ]

    def count(world: int) -> int:
        found = [
            find(
                make_case(f.case.target, f.case.unit, drawn[i][world]),
                min_hits=mining.min_hits,
                max_size=mining.max_size,
                start=f.margins,
                by_mining=False,
                level=_level(study),
            )
            for i, f in enumerate(real.found)
        ]
        explanation = explain_away(
            found, real.adjuster, fdr=study.testing.fdr, min_triggers=mining.min_triggers
        )
        return len(explanation.rules)

    return workers.in_order(count, range(n_worlds), n_workers, "placebo worlds", progress)
