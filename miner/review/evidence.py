"""What a rule's closed triggers say: counts with intervals, and evidence for and against it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from miner.intervals import precision_intervals
from miner.review.records import Evidence, EvidencePoint, QuarterLine, Span, Trigger
from miner.sequential.clusters import Clusters, HangTogether, hang_together
from miner.sequential.evidence import Evidence as Process
from miner.sequential.evidence import e_process
from miner.sequential.interval import confidence_sequence
from miner.triggers import TriggerTable

YEAR = 4  # quarters


@dataclass(frozen=True)
class Weighed:
    """A rule's numbers, before anything is decided about it.

    Attributes
    ----------
    log_works, log_broken : natural logs of the evidence, for comparing rules with one another
    works, broken : without what only the whole book can say
    """

    this_quarter: Span
    last_year: Span
    since: Span
    log_works: float
    log_broken: float | None
    works: Evidence
    broken: Evidence | None
    clusters: int
    in_evidence: int
    waiting: int
    lines: tuple[QuarterLine, ...]
    points: tuple[EvidencePoint, ...]


@dataclass(frozen=True)
class Ground:
    """What the evidence of a rule stands on.

    Attributes
    ----------
    session_of : date -> session, of every date in the triggers
    quarter_last : last session of each quarter since adoption, by name, in order
    dates : datetime64[D] [sessions]
    wait : sessions until the outcome of a trigger is known
    """

    session_of: Mapping[str, int]
    quarter_last: Mapping[str, int]
    dates: np.ndarray
    horizon: int
    wait: int

    def place(self, trigger: Trigger) -> int:
        """A trigger's session; one recorded under another calendar still closes in its quarter."""
        latest = self.quarter_last[trigger.quarter] - self.wait
        return min(self.session_of[trigger.session], latest)


@dataclass(frozen=True)
class Terms:
    """What is asked of a rule.

    ``keep_above`` is the precision it must not be below, None without a promise; ``expected_then``
    the rate at which the mixture over alternatives is laid out, None: that of its first triggers.
    """

    keep_above: float | None
    expected_then: float | None
    alpha: float
    restart_quarters: int
    how: HangTogether


def weigh(
    triggers: Mapping[str, Sequence[Trigger]],
    sources: Mapping[str, str],
    ground: Ground,
    terms: Terms,
) -> Weighed:
    """Weigh what is known of a rule since its adoption.

    Parameters
    ----------
    triggers : closed triggers by quarter, every quarter since adoption, in order
    sources : "ledger" or "now", by quarter
    """
    quarters = list(triggers)
    flat = [t for quarter in quarters for t in triggers[quarter]]
    session = np.array([ground.place(t) for t in flat], dtype=np.int64)
    is_hit = np.array([t.hit for t in flat], dtype=bool)
    rate = np.array([t.expected for t in flat], dtype=float)
    groups = hang_together(
        _codes([t.entity for t in flat]),
        session,
        _codes([t.peer for t in flat]),
        ground.wait,
        np.array([ground.quarter_last[q] for q in quarters], dtype=np.int64),
        how=terms.how,
    )
    n = len(quarters)
    up = e_process(
        is_hit, rate, groups, n, "up",
        reference=terms.expected_then, restart_quarters=terms.restart_quarters,
    )  # fmt: skip
    down = None
    if terms.keep_above is not None:
        floor = np.full(rate.size, terms.keep_above)
        down = e_process(
            is_hit, floor, groups, n, "down",
            reference=terms.keep_above, restart_quarters=terms.restart_quarters,
        )  # fmt: skip
    bounds = confidence_sequence(is_hit, groups, n, alpha=terms.alpha)
    year = quarters[-YEAR:]
    since = _counted(flat, quarters[0], quarters[-1])
    since = _replace_bounds(since, float(bounds.low_q[-1]), float(bounds.high_q[-1]), False)
    in_evidence = int(up.n_triggers_q[-1])
    return Weighed(
        _span(triggers, [quarters[-1]], ground),
        _span(triggers, year, ground),
        since,
        float(up.log_e_q[-1]),
        None if down is None else float(down.log_e_q[-1]),
        _evidence(up, quarters),
        None if down is None else _evidence(down, quarters),
        int(up.n_clusters_q[-1]),
        in_evidence,
        len(flat) - in_evidence,
        tuple(_lines(triggers, sources, up, down)),
        tuple(_points(flat, groups, up, down, quarters, ground.dates)),
    )


def _codes(names: Sequence[str]) -> np.ndarray:
    return np.unique(np.array(names, dtype=object).astype(str), return_inverse=True)[1].astype(
        np.int64
    )


def _counted(triggers: Sequence[Trigger], first: str, last: str) -> Span:
    n, hits = len(triggers), sum(t.hit for t in triggers)
    expected = math.fsum(t.expected for t in triggers)
    return Span(first, last, n, hits, expected, hits / n if n else None, None, None, False)


def _replace_bounds(span: Span, low: float, high: float, is_few: bool) -> Span:
    is_known = math.isfinite(low) and math.isfinite(high)
    return Span(
        span.first_quarter, span.last_quarter, span.triggers, span.hits, span.expected_hits,
        span.precision, low if is_known else None, high if is_known else None, is_few,
    )  # fmt: skip


def _span(
    triggers: Mapping[str, Sequence[Trigger]], quarters: Sequence[str], ground: Ground
) -> Span:
    """Counts of some quarters, with the interval that allows for triggers hanging together."""
    mine = sorted(
        (t for quarter in quarters for t in triggers[quarter]),
        key=lambda t: (t.entity, t.session),
    )
    counted = _counted(mine, quarters[0], quarters[-1])
    if not mine:
        return counted
    session = np.array([ground.place(t) for t in mine], dtype=np.int64)
    begin = min(0, int(session.min()))  # before the calendar: blocks only need an origin
    table = TriggerTable(
        ((0,),),
        np.array([0, len(mine)], dtype=np.int64),
        _codes([t.entity for t in mine]).astype(np.int32),
        (session - begin).astype(np.int32),
    )
    is_hit = np.array([t.hit for t in mine], dtype=bool)
    interval = precision_intervals(
        table, np.array([0]), is_hit, ground.horizon, len(ground.dates) - begin
    )
    low, high, is_few = interval.low[0], interval.high[0], interval.is_few[0]
    return _replace_bounds(counted, float(low), float(high), bool(is_few))


def _evidence(process: Process, quarters: Sequence[str]) -> Evidence:
    highest = int(np.argmax(process.log_e_q))
    restart = int(process.best_restart_q[-1])
    return Evidence(
        e=_e(process.log_e_q[-1]),
        e_highest=_e(process.log_e_q[highest]),
        highest_quarter=quarters[highest] if process.n_clusters_q[-1] else None,
        e_since=_e(process.log_since_q[-1]),
        e_restarted=_e(process.log_restarted_q[-1]),
        restarted_quarter=quarters[restart] if restart >= 0 else None,
        in_book=False,
        least_alpha=1.0,
    )


def _e(log: float) -> float:
    return math.exp(min(float(log), 690.0))


def _lines(
    triggers: Mapping[str, Sequence[Trigger]],
    sources: Mapping[str, str],
    up: Process,
    down: Process | None,
) -> list[QuarterLine]:
    lines = []
    for i, (quarter, mine) in enumerate(triggers.items()):
        counted = _counted(mine, quarter, quarter)
        lines.append(
            QuarterLine(
                quarter,
                counted.triggers,
                counted.hits,
                counted.expected_hits,
                counted.precision,
                _e(up.log_e_q[i]),
                None if down is None else _e(down.log_e_q[i]),
                "ledger" if sources[quarter] == "ledger" else "now",
            )
        )
    return lines


def _points(
    flat: Sequence[Trigger],
    groups: Clusters,
    up: Process,
    down: Process | None,
    quarters: Sequence[str],
    dates: np.ndarray,
) -> list[EvidencePoint]:
    size_c = np.bincount(groups.code_i, minlength=up.log_e_c.size) if flat else np.zeros(0, int)
    total_c = np.cumsum(size_c)
    points = []
    for c in range(up.log_e_c.size):
        at = min(max(int(groups.closed_c[c]), 0), len(dates) - 1)
        points.append(
            EvidencePoint(
                str(dates[at]),
                quarters[int(groups.quarter_c[c])],
                int(total_c[c]),
                _e(up.log_e_c[c]),
                None if down is None else _e(down.log_e_c[c]),
            )
        )
    return points
