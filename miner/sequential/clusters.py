"""Hands on which triggers hang together: evidence averages inside a cluster, multiplies over them.

Clusters are built forward in time, so that a later trigger never changes an earlier one's label:
the first trigger of a key (a peer group, an entity, or everything) opens a cluster, which takes the
key's triggers of the next ``SPAN`` horizons; the next one after that opens another.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np

HangTogether = Literal["peers", "dates", "entity", "quarter"]
HANG_TOGETHER: tuple[str, ...] = get_args(HangTogether)
DEFAULT_HANG_TOGETHER: HangTogether = "peers"
SPAN = 1  # horizons over which a cluster takes triggers
CAUTION: dict[str, str] = {
    "peers": "Valid where what hits several triggers at once stays within a peer group and within "
    "days. A shock to the whole market at once counts as several findings, and a precision that "
    "swings for months at a time is taken for a change.",
    "dates": "Valid where what hits several triggers at once passes within days, whomever it "
    "hits. A precision that swings for months at a time is taken for a change. Slow where "
    "triggers are many and precision is low.",
    "entity": "Valid only where entities share nothing: a shock to a sector, or a burst of "
    "triggers before one event of many, counts as many findings.",
    "quarter": "Valid even where a whole quarter is good or bad at once; too slow to show "
    "anything in practice.",
}


@dataclass(frozen=True)
class Clusters:
    """Which triggers hang together.

    Attributes
    ----------
    code_i : int64 [triggers], the trigger's cluster; codes are in order of ``closed_c``
    closed_c : int64 [clusters], the session by which no trigger can join any more and all windows
        are over
    quarter_c : int64 [clusters], the first quarter at whose end it is closed; the number of
        quarters where none is: the cluster waits
    """

    code_i: np.ndarray
    closed_c: np.ndarray
    quarter_c: np.ndarray


def hang_together(
    entity_i: np.ndarray,
    session_i: np.ndarray,
    peer_i: np.ndarray,
    horizon: int,
    quarter_last: np.ndarray,
    how: HangTogether = DEFAULT_HANG_TOGETHER,
) -> Clusters:
    """Put triggers into clusters.

    Parameters
    ----------
    entity_i, session_i, peer_i : int [triggers], closed ones, in any order; ``peer_i`` is the code
        of the entity's peer group at the trigger, zero throughout where there are none
    horizon : int, sessions
    quarter_last : int64 [quarters], last session of each quarter, ascending

    Raises
    ------
    ValueError : a name ``how`` that is not in ``HANG_TOGETHER``, a trigger that is not closed by
        the end of the last quarter, quarters that do not ascend
    """
    if how not in HANG_TOGETHER:
        raise ValueError(f"`how` must be one of {', '.join(HANG_TOGETHER)}; got {how!r}")
    session_i = np.asarray(session_i, dtype=np.int64)
    quarter_last = np.asarray(quarter_last, dtype=np.int64)
    if (np.diff(quarter_last) <= 0).any():
        raise ValueError("`quarter_last` must ascend")
    over_i = session_i + horizon
    if session_i.size and (quarter_last.size == 0 or over_i.max() > quarter_last[-1]):
        raise ValueError("`session_i` must hold triggers closed by the last quarter's end only")
    if how == "quarter":
        key_i = np.searchsorted(quarter_last, over_i)
        codes, code_i = np.unique(key_i, return_inverse=True)
        return Clusters(code_i, quarter_last[codes], codes.astype(np.int64))
    key_i = {"peers": peer_i, "entity": entity_i, "dates": np.zeros_like(session_i)}[how]
    code_i, opened_c = _forward(np.asarray(key_i), session_i, SPAN * horizon)
    closed_c = opened_c + SPAN * horizon - 1 + horizon
    order = np.argsort(closed_c, kind="stable")
    place = np.empty_like(order)
    place[order] = np.arange(order.size)
    closed_c = closed_c[order]
    return Clusters(place[code_i], closed_c, np.searchsorted(quarter_last, closed_c))


def _forward(key_i: np.ndarray, session_i: np.ndarray, span: int) -> tuple[np.ndarray, np.ndarray]:
    """Cluster of each trigger, and the session each cluster opens on, by key and session."""
    code_i = np.empty(session_i.size, dtype=np.int64)
    opened: list[int] = []
    last_key = None
    order = np.lexsort((session_i, key_i))
    for i, key, session in zip(
        order.tolist(), key_i[order].tolist(), session_i[order].tolist(), strict=True
    ):
        if key != last_key or session >= opened[-1] + span:
            opened.append(session)
            last_key = key
        code_i[i] = len(opened) - 1
    return code_i, np.array(opened, dtype=np.int64)
