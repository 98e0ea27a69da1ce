"""The plain shuffle, for comparison only: it takes seasons, shocks and clusters for signal."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from miner import workers
from miner.kernels import bits, hits
from miner.nulls import Judgement
from miner.panel import Panel, pack_alerts
from miner.seeds import stream
from miner.time_split import Segment
from miner.triggers import Combo, find_triggers
from miner.units import Case


class PlainShuffleNull:
    """Each alert redrawn uniformly in its entity's life. Not to be relied on."""

    name = "plain-shuffle"
    holds = "each entity's number of alerts of each type; when they came is random, one by one"

    def __init__(self, n_draws: int, seed: int) -> None:
        self.n_draws = n_draws
        self.seed = seed

    def judge(self, case: Case, rows: np.ndarray, n_workers: int = 1) -> Judgement:
        """Compare precision, since the number of triggers changes with the alerts.

        ``expected_hits`` is the mean precision of the draws times the observed triggers.
        """
        unit, table = case.unit, case.unit.triggers
        combos = [table.combos[row] for row in rows]
        observed = dict(
            zip(combos, zip(table.count_c[rows], case.hits_c[rows], strict=True), strict=True)
        )
        shuffler = _Shuffler(unit.segment.panel)

        def draw(i: int) -> dict[Combo, tuple[int, int]]:
            rng = stream(self.seed, "plain shuffle", *case.name, i)
            return _recount(case, shuffler.draw(rng), combos)

        exceed = dict.fromkeys(combos, 0)
        total = dict.fromkeys(combos, 0.0)
        for drawn in workers.in_order(draw, range(self.n_draws), n_workers):
            for combo, (n, h) in drawn.items():
                n_seen, h_seen = observed[combo]
                exceed[combo] += int(n > 0 and h * n_seen >= h_seen * n)
                total[combo] += h / n if n else 0.0
        expected = [total[c] / max(1, self.n_draws) * observed[c][0] for c in combos]
        p = [(1 + exceed[c]) / (1 + self.n_draws) for c in combos]
        return Judgement(np.array(expected), np.array(p))


class _Shuffler:
    """Alerts of a panel, ready to be redrawn within each entity's covered sessions."""

    def __init__(self, panel: Panel) -> None:
        self.panel = panel
        n_types = len(panel.type_names)
        rows, sessions = np.nonzero(
            bits.unpack(panel.alert_ekw.reshape(panel.n_entities * n_types, -1), panel.n_sessions)
        )
        self.entity, self.type, self.session = rows // n_types, rows % n_types, sessions
        is_life_et = bits.unpack(np.bitwise_or.reduce(panel.cover_eqw, axis=1), panel.n_sessions)
        self.length_e = is_life_et.sum(axis=1)
        self.start_e = np.concatenate([[0], np.cumsum(self.length_e)[:-1]])
        self.life = np.append(np.nonzero(is_life_et)[1], 0)

    def draw(self, rng: np.random.Generator) -> np.ndarray:
        length = self.length_e[self.entity]
        place = self.start_e[self.entity] + (rng.random(self.entity.size) * length).astype(np.int64)
        session = np.where(
            length > 0, self.life[np.minimum(place, self.life.size - 1)], self.session
        )
        panel = self.panel
        return pack_alerts(
            self.entity,
            self.type,
            session,
            panel.n_entities,
            len(panel.type_names),
            panel.n_sessions,
        )


def _recount(
    case: Case, alert_ekw: np.ndarray, combos: Sequence[Combo]
) -> dict[Combo, tuple[int, int]]:
    """Triggers and hits of combinations on redrawn alerts."""
    unit, panel = case.unit, case.unit.segment.panel
    shuffled = replace(panel, alert_ekw=alert_ekw)
    segment = Segment(shuffled, unit.segment.first, unit.segment.last)
    table = find_triggers(
        segment, combos, unit.code, lookback=unit.lookback, horizon=unit.horizon, rest=unit.rest
    )
    is_hit = hits.look_up(table.entity, table.session, case.window_ew)
    counts = zip(table.count_c, hits.count_flags(table.offset_c, is_hit), strict=True)
    return dict(zip(table.combos, counts, strict=True))
