"""Which entity or date keeps the margins null from settling, where its fit did not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.nulls.margins import Margins

ENOUGH = 1e-6  # relative miss of a total up to which no p-value changes visibly


@dataclass(frozen=True)
class Unsettled:
    """The total that the fit misses by most.

    Attributes
    ----------
    entity : its code, or None where a date's total is missed by most
    group, session : peer group and session of that date, or None
    fitted, observed : expected and actual cells in an event window
    """

    entity: int | None
    group: int | None
    session: int | None
    fitted: float
    observed: int


def unsettled(
    margins: Margins, is_open_et: np.ndarray, is_window_et: np.ndarray
) -> Unsettled | None:
    """The entity or date that stands in the way; None where the fit has settled.

    Parameters
    ----------
    is_open_et, is_window_et : bool [entities, sessions], what the margins were fitted to
    """
    if margins.miss <= ENOUGH:
        return None
    n_entities, n_sessions = is_open_et.shape
    entity, session = np.nonzero(is_open_et)
    group = margins.peers.code_et[entity, session].astype(np.int64)
    excess = margins.rates(entity, session) - is_window_et[entity, session]
    observed = is_window_et[entity, session]
    worst: list[tuple[float, int, float, int]] = []  # relative miss, place, fitted, observed
    for place, n in ((entity, n_entities), (group * n_sessions + session, None)):
        missed = np.bincount(place, excess, minlength=n or 0)
        total = np.bincount(place[observed], minlength=missed.size)
        share = np.abs(missed) / np.maximum(total, 1)
        at = int(share.argmax())
        worst.append((float(share[at]), at, float(total[at] + missed[at]), int(total[at])))
    (of_entity, e, fitted_e, n_e), (of_date, cell, fitted_d, n_d) = worst
    if of_entity >= of_date:
        return Unsettled(e, None, None, fitted_e, n_e)
    return Unsettled(None, cell // n_sessions, cell % n_sessions, fitted_d, n_d)
