"""From coded logs to the panel: entities x sessions, with alerts, events, coverage and groups."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from miner.columns import ODDS
from miner.kernels import bits, margins

Events = tuple[np.ndarray, np.ndarray]


@dataclass(frozen=True)
class Labels:
    """A point-in-time label of every entity-session.

    ``code_et`` int16 [entities, sessions] indexes ``names``; -1 is "no label".
    """

    names: tuple[str, ...]
    code_et: np.ndarray

    @cached_property
    def single_e(self) -> np.ndarray:
        """Code of each entity that has one label throughout, else -1: int16 [entities]."""
        return margins.single_groups(self.code_et)


@dataclass(frozen=True)
class Panel:
    """Everything a hunt needs of the inputs, on sessions ``0 .. n_sessions - 1``.

    Attributes
    ----------
    alert_ekw : uint64 [entities, types, words], bit t of a row: an alert on session t
    events : per target, int32 arrays (entity, session), sorted and distinct
    cover_eqw : uint64 [entities, coverage classes, words], bit t: covered on session t
    class_k : int64 [types], the coverage class of each type
    strata, peers : labels of the entity-sessions; ``peers`` always labels every one
    law : how an entity's and a date's share combine in the margins null (``miner.columns``)
    known : for targets whose events are known only later than their session (a price move, by
        its end), int32 [events], the session they are known at
    """

    entity_names: tuple[str, ...]
    type_names: tuple[str, ...]
    n_sessions: int
    alert_ekw: np.ndarray
    events: dict[str, Events]
    cover_eqw: np.ndarray
    class_k: np.ndarray
    strata: Labels | None
    peers: Labels
    law: str = ODDS
    known: dict[str, np.ndarray] = field(default_factory=dict)

    @property
    def n_entities(self) -> int:
        """Number of known entities."""
        return len(self.entity_names)

    def until(self, stop: int) -> Panel:
        """The panel as it would have been with the calendar cut before session ``stop``.

        Events that were known only later are not there.
        """
        words = bits.n_words(stop)
        is_kept = {
            target: (session < stop) & (self.known.get(target, session) < stop)
            for target, (_, session) in self.events.items()
        }

        def cut(bits_exw: np.ndarray) -> np.ndarray:
            kept = bits_exw[:, :, :words].copy()  # never a view: what is cut is not ours
            bits.cut_after(kept.reshape(-1, words), stop)
            return kept

        def cut_labels(labels: Labels) -> Labels:
            return Labels(labels.names, np.ascontiguousarray(labels.code_et[:, :stop]))

        return Panel(
            self.entity_names,
            self.type_names,
            stop,
            cut(self.alert_ekw),
            {
                target: (entity[is_kept[target]], session[is_kept[target]])
                for target, (entity, session) in self.events.items()
            },
            cut(self.cover_eqw),
            self.class_k,
            None if self.strata is None else cut_labels(self.strata),
            cut_labels(self.peers),
            self.law,
            {target: session[is_kept[target]] for target, session in self.known.items()},
        )


@dataclass(frozen=True)
class Spans:
    """Inclusive spans of sessions, one label code each (-1: none given)."""

    entity: np.ndarray
    first: np.ndarray
    last: np.ndarray
    label: np.ndarray
    names: tuple[str, ...] = field(default=())


def pack_alerts(
    entity: np.ndarray,
    type_: np.ndarray,
    session: np.ndarray,
    n_entities: int,
    n_types: int,
    n_sessions: int,
) -> np.ndarray:
    """Alerts as bits, uint64 [entities, types, words]; repeats within a session fall together."""
    words = bits.n_words(n_sessions)
    alert_ekw = np.zeros((n_entities, n_types, words), dtype=np.uint64)
    row = entity.astype(np.int64) * n_types + type_
    bits.pack(row, session.astype(np.int64), alert_ekw.reshape(-1, words))
    return alert_ekw


def distinct_events(entity: np.ndarray, session: np.ndarray) -> Events:
    """Events sorted by entity, then session, each (entity, session) once."""
    pairs = np.unique(np.stack([entity, session]).astype(np.int32), axis=1)
    return np.ascontiguousarray(pairs[0]), np.ascontiguousarray(pairs[1])


def pack_coverage(
    spans: Spans | None, n_entities: int, type_names: tuple[str, ...], n_sessions: int
) -> tuple[np.ndarray, np.ndarray]:
    """Coverage bits by class of types that are covered alike, and the class of each type.

    ``spans.label`` indexes ``spans.names``, the types' names; the name "" covers every type.
    Without a table every entity is covered throughout.
    """
    words = bits.n_words(n_sessions)
    n_types = len(type_names)
    if spans is None:
        cover_eqw = np.full((n_entities, 1, words), bits.ALL, dtype=np.uint64)
        bits.cut_after(cover_eqw.reshape(-1, words), n_sessions)
        return cover_eqw, np.zeros(n_types, dtype=np.int64)
    code = {name: k for k, name in enumerate(type_names)}
    type_of_label = np.array([code.get(name, -1) for name in spans.names] or [-1], dtype=np.int64)
    is_for_all = np.array([name == "" for name in spans.names] or [False])
    classes: list[np.ndarray] = []
    class_k = np.zeros(n_types, dtype=np.int64)
    for k in range(n_types):
        mine = is_for_all[spans.label] | (type_of_label[spans.label] == k)
        row_ew = np.zeros((n_entities, words), dtype=np.uint64)
        bits.fill_ranges(
            spans.entity[mine].astype(np.int64), spans.first[mine], spans.last[mine] + 1, row_ew
        )
        for q, known in enumerate(classes):
            if np.array_equal(known, row_ew):
                class_k[k] = q
                break
        else:
            class_k[k] = len(classes)
            classes.append(row_ew)
    if not classes:
        classes.append(np.zeros((n_entities, words), dtype=np.uint64))
    return np.ascontiguousarray(np.stack(classes, axis=1)), class_k


def label_sessions(spans: Spans, n_entities: int, n_sessions: int) -> Labels:
    """Labels by session; where spans overlap the one that starts last holds."""
    code_et = np.full((n_entities, n_sessions), -1, dtype=np.int16)
    for i in np.lexsort((spans.label, spans.last, spans.first)):
        code_et[spans.entity[i], spans.first[i] : spans.last[i] + 1] = spans.label[i]
    return Labels(spans.names, code_et)


def as_peers(labels: Labels | None, n_entities: int, n_sessions: int) -> Labels:
    """Peer groups for every entity-session: the unlabelled share a group named ""."""
    if labels is None:
        return Labels(("",), np.zeros((n_entities, n_sessions), dtype=np.int16))
    if not (labels.code_et < 0).any():
        return labels
    code_et = labels.code_et.copy()
    code_et[code_et < 0] = len(labels.names)
    return Labels((*labels.names, ""), code_et)
