"""Hands on a quarter whose triggers and events share days and busy names, rates fitted to it."""

from __future__ import annotations

import numpy as np

from miner.nulls.margins import fit_margins
from miner.panel import Labels
from tests.calibration.review_worlds import PER_SECTOR, SECTORS, SESSIONS

HORIZON = 5
AN_EVENT = 0.02  # chance of an event an entity and session, about


def fitted_quarter(
    random: np.random.Generator, n_rules: int, n_triggers: int, strength: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Triggers of rules that favour busy names and restless days, as events do.

    ``strength``: log of how much more often a rule picks a cell before an event. Returns entity,
    session, outcome and fitted rate, each [rules, triggers].
    """
    n_entities = SECTORS * PER_SECTOR
    sector = np.arange(n_entities) // PER_SECTOR
    busy_e = 0.8 * random.standard_normal(n_entities)
    restless_gt = 0.7 * random.standard_normal((SECTORS, SESSIONS))
    restless_gt += 0.7 * random.standard_normal(SESSIONS)
    lean_et = busy_e[:, None] + restless_gt[sector]
    is_event_et = random.random(lean_et.shape) < AN_EVENT * np.exp(lean_et - 0.8)
    is_window_et = np.zeros_like(is_event_et)
    for ahead in range(1, HORIZON + 1):
        is_window_et[:, :-ahead] |= is_event_et[:, ahead:]
    is_open_et = np.zeros_like(is_event_et)
    is_open_et[:, : SESSIONS - HORIZON] = True
    codes = np.repeat(sector[:, None], SESSIONS, axis=1).astype(np.int16)
    peers = Labels(tuple(f"sector {g}" for g in range(SECTORS)), codes)
    margins = fit_margins(is_open_et, is_window_et & is_open_et, peers)
    # before an event the days are restless on average: the lean of the windows' own sessions
    ahead_et = np.zeros_like(lean_et)
    for ahead in range(1, HORIZON + 1):
        ahead_et[:, :-ahead] += np.exp(restless_gt[sector])[:, ahead:] / HORIZON
    weight_et = np.exp(busy_e)[:, None] * ahead_et * np.exp(strength * is_window_et) * is_open_et
    chance = (weight_et / weight_et.sum()).ravel()
    cell = random.choice(chance.size, (n_rules, n_triggers), p=chance)
    entity, session = cell // SESSIONS, cell % SESSIONS
    rate = margins.rates(entity.ravel(), session.ravel()).reshape(cell.shape)
    return entity, session, is_window_et[entity, session], rate
