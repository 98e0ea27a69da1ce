"""Alert types by quarter: how many, on how many entities, at what hour, with what others."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np
from scipy.sparse import csr_array

from miner.assemble import Inputs, code_map
from miner.kernels import bits
from miner.panel import Panel
from miner.read_tables import read_log
from miner.reading.zones import DAY_US, to_local
from miner.review.quarters import Quarter

SLOTS = 96  # quarters of an hour in a day
PER_HOUR = 4
MOST_TYPES = 400  # beyond, what comes together is not counted


@dataclass(frozen=True)
class Tally:
    """Counts by type and quarter: arrays [types, quarters] and more.

    Attributes
    ----------
    alerts : distinct entity-sessions with an alert
    entities : entities with one
    covered : mean number of entities covered for the type; ``reachable``: entities ever covered
    slots : int64 [types, quarters, 96], alerts by local quarter of an hour; bare dates are not in
    together : per quarter int64 [types, types], entity-sessions with both; None with very many
        types
    first_k : first session with an alert of each type
    """

    alerts: np.ndarray
    entities: np.ndarray
    covered: np.ndarray
    reachable: np.ndarray
    slots: np.ndarray
    together: tuple[np.ndarray, ...] | None
    first_k: np.ndarray


Alerts = tuple[np.ndarray, np.ndarray, np.ndarray]


def tally(inputs: Inputs, alerts: Alerts, quarters: Sequence[Quarter]) -> Tally:
    """Count; ``inputs`` are cut at the end of the last of the quarters, ``alerts`` theirs."""
    panel = inputs.panel
    n_types, n_quarters = len(panel.type_names), len(quarters)
    entity, kind, session = alerts
    quarter_t = place_of_sessions(quarters, panel.n_sessions)
    quarter = quarter_t[session]
    kept = quarter >= 0
    e, k, t, q = entity[kept], kind[kept], session[kept], quarter[kept]
    shape = n_types, n_quarters
    count = np.bincount(k * n_quarters + q, minlength=n_types * n_quarters).reshape(shape)
    seen = distinct((k * n_quarters + q) * panel.n_entities + e) // max(panel.n_entities, 1)
    entities = np.bincount(seen, minlength=n_types * n_quarters).reshape(shape)
    covered, reachable = _coverage(panel, quarters)
    first_k = np.full(n_types, panel.n_sessions, dtype=np.int64)
    np.minimum.at(first_k, kind, session)
    together = None
    if n_types <= MOST_TYPES:
        together = tuple(
            _together(e[q == i] * panel.n_sessions + t[q == i], k[q == i], n_types)
            for i in range(n_quarters)
        )
    return Tally(
        count, entities, covered, reachable, _slots(inputs, quarter_t, shape), together, first_k
    )


def distinct_alerts(inputs: Inputs) -> Alerts:
    """Entity, type and session of the alerts, each once: int64."""
    log, panel = inputs.alerts, inputs.panel
    n_types = max(len(panel.type_names), 1)
    key = (log.entity.astype(np.int64) * n_types + log.type) * panel.n_sessions + log.session
    key = distinct(key)
    rest, session = np.divmod(key, panel.n_sessions)
    entity, kind = np.divmod(rest, n_types)
    return entity, kind, session


def distinct(key: np.ndarray) -> np.ndarray:
    """Keys sorted, each once."""
    key = np.sort(key)
    return key[np.append(True, key[1:] != key[:-1])] if key.size else key


def place_of_sessions(quarters: Sequence[Quarter], n_sessions: int) -> np.ndarray:
    """Place in ``quarters`` of each session, -1 where in none: int64 [sessions]."""
    quarter_t = np.full(n_sessions, -1, dtype=np.int64)
    for i, quarter in enumerate(quarters):
        quarter_t[quarter.first : quarter.last + 1] = i
    return quarter_t


def _coverage(panel: Panel, quarters: Sequence[Quarter]) -> tuple[np.ndarray, np.ndarray]:
    """Mean entities covered, and entities ever covered, by type and quarter."""
    n_classes = panel.cover_eqw.shape[1]
    mean = np.zeros((n_classes, len(quarters)))
    ever = np.zeros((n_classes, len(quarters)), dtype=np.int64)
    for c in range(n_classes):
        is_covered_et = bits.unpack(np.ascontiguousarray(panel.cover_eqw[:, c]), panel.n_sessions)
        for i, quarter in enumerate(quarters):
            part = is_covered_et[:, quarter.first : quarter.last + 1]
            mean[c, i] = part.sum() / part.shape[1]
            ever[c, i] = part.any(axis=1).sum()
    return mean[panel.class_k], ever[panel.class_k]


def _together(cell: np.ndarray, kind: np.ndarray, n_types: int) -> np.ndarray:
    """Cells in which two types come together: int64 [types, types], a type with itself on top."""
    if not cell.size:
        return np.zeros((n_types, n_types), dtype=np.int64)
    cells, row = np.unique(cell, return_inverse=True)
    is_there = csr_array((np.ones(row.size, dtype=np.int64), (row, kind)), (cells.size, n_types))
    return np.asarray((is_there.T @ is_there).todense())


def _slots(inputs: Inputs, quarter_t: np.ndarray, shape: tuple[int, int]) -> np.ndarray:
    """Alerts by type, quarter and quarter of an hour, local. Reads the log: the panel has none."""
    log = read_log(inputs.study, "alerts")
    calendar, panel = inputs.calendar, inputs.panel
    kind = code_map(log.type_names, panel.type_names)[log.type_code]
    entity = code_map(log.entity_names, panel.entity_names)[log.entity_code]
    session = calendar.session_of(log.stamp_us, log.is_bare_date)
    kept = (session >= 0) & (session < panel.n_sessions) & (kind >= 0) & (entity >= 0)
    kept &= ~log.is_bare_date
    kept[kept] = quarter_t[session[kept]] >= 0
    local = to_local(log.stamp_us[kept], ZoneInfo(calendar.timezone)) % DAY_US
    slot = local * SLOTS // DAY_US
    cell = kind[kept].astype(np.int64) * shape[1] + quarter_t[session[kept]]
    return np.bincount(cell * SLOTS + slot, minlength=shape[0] * shape[1] * SLOTS).reshape(
        *shape, SLOTS
    )


def quantile_hour(count_s: np.ndarray, share: float) -> float:
    """The hour by which a share of the alerts has come, from counts by quarter of an hour."""
    total = np.cumsum(count_s)
    at = int(np.searchsorted(total, share * total[-1]))
    before = total[at - 1] if at else 0
    return float((at + (share * total[-1] - before) / count_s[at]) / PER_HOUR)
