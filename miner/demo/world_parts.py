"""Hands on the building blocks of invented worlds: names, drivers, timed points, planting slots.

Every function draws from the generator it is given and works on whole arrays. A *level* is a
positive intensity per group and session with mean 1; drivers multiply, so that a share of the
alerts and of the events that only the calendar, the group and the name explain is also what a
model with margins in the logit can hold fixed.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]

_HEADS = "Bra Cor Dal Fen Gor Hel Jor Kel Lum Mar Nev Orl Pel Quor Ras Sel Tor Ul Vel Wen Yor Zel"
_HEARTS = "va ri do mu na lo ske ti pra go zu bi le shu ra fo"
_CODAS = "dor lin mak nor pex rand sul tek vik wen zar bolt"
_TAILS = "Arv Belk Corv Dovan Eskor Fenk Galv Hestor Ilm Jask Kolt Lomb Murn Nask Orvel Pask"


def company_names(rng: np.random.Generator, n_names: int) -> NDArray[np.str_]:
    """Return ``n_names`` distinct invented two-word names, in random order.

    Raises
    ------
    ValueError
        When more names are asked for than can be formed.
    """
    parts = [text.split() for text in (_HEADS, _HEARTS, _CODAS, _TAILS)]
    sizes = [len(part) for part in parts]
    n_possible = int(np.prod(sizes))
    if not 0 <= n_names <= n_possible:
        raise ValueError(
            f"`company_names`: `n_names` must lie in 0..{n_possible}; got {n_names}. Ask for fewer."
        )
    picks = np.unravel_index(rng.permutation(n_possible)[:n_names], sizes)
    head, heart, coda, tail = (np.array(part)[i] for part, i in zip(parts, picks, strict=True))
    first = np.strings.add(np.strings.add(head, heart), coda)
    return np.strings.add(np.strings.add(first, " "), tail)


def season_level(phase: FloatArray, strength: float) -> FloatArray:
    """Return the level [sessions] of a season, from each session's place in its period, 0 to 1.

    The middle half of a period is busy: at strength 1 its height is about six times the rest.
    """
    bump = np.clip(np.sin(2 * np.pi * (phase - 0.25)), 0.0, None)
    level: FloatArray = np.exp(1.8 * strength * bump)
    level /= level.mean()
    return level


def shock_level(
    rng: np.random.Generator, n_groups: int, n_sessions: int, strength: float, every: int = 60
) -> FloatArray:
    """Return levels [groups, sessions] with one shock per ``every`` sessions in each group.

    A shock multiplies the level by up to ``1 + 12 * strength`` and fades within two weeks.
    """
    n_shocks = max(1, n_sessions // every)
    start = rng.integers(0, n_sessions, (n_groups, n_shocks))
    height = rng.uniform(5.0, 12.0, (n_groups, n_shocks)) * strength
    impulse = np.zeros((n_groups, n_sessions))
    np.add.at(impulse, (np.arange(n_groups)[:, None], start), height)
    level: FloatArray = 1.0 + impulse
    for lag in range(1, min(10, n_sessions)):
        level[:, lag:] += np.exp(-lag / 3.0) * impulse[:, :-lag]
    level /= level.mean(axis=1, keepdims=True)
    return level


def name_weights(rng: np.random.Generator, n_names: int, strength: float) -> FloatArray:
    """Return a log-normal busyness [names] with mean 1 in expectation; strength is its log sd."""
    weight: FloatArray = np.exp(strength * rng.standard_normal(n_names) - strength**2 / 2)
    return weight


@dataclass(frozen=True)
class Intensity:
    """A multiplicative intensity: weight of the entity x level of its group on the session.

    Parameters
    ----------
    weight : float [entities]
    level : float [groups, sessions]
    group : int [entities], row of ``level``
    start, stop : int [entities], sessions of life, half-open, at least one session each
    """

    weight: FloatArray
    level: FloatArray
    group: IntArray
    start: IntArray
    stop: IntArray
    _cumulative: FloatArray = field(init=False, repr=False)

    def __post_init__(self) -> None:
        # One leading zero for all groups: the mass of a life is then a difference of two entries.
        flat = np.concatenate(([0.0], np.cumsum(self.level.ravel())))
        object.__setattr__(self, "_cumulative", flat)

    def mass(self) -> FloatArray:
        """Return each entity's intensity [entities] summed over its life."""
        base = self.group * self.level.shape[1]
        flat = self._cumulative
        mass: FloatArray = self.weight * (flat[base + self.stop] - flat[base + self.start])
        return mass

    def draw(self, rng: np.random.Generator, n_expected: float) -> tuple[IntArray, IntArray]:
        """Return entity and session of a Poisson number of points, sorted by entity only."""
        mass = self.mass()
        count = rng.poisson(n_expected * mass / mass.sum())
        entity = np.repeat(np.arange(mass.size), count)
        return entity, self.draw_sessions(rng, entity)

    def draw_sessions(self, rng: np.random.Generator, entity: IntArray) -> IntArray:
        """Return one session [points] for each entity given, drawn by its level in its life."""
        base = self.group * self.level.shape[1]
        low, high = self._cumulative[base + self.start], self._cumulative[base + self.stop]
        point = low[entity] + rng.random(entity.size) * (high - low)[entity]
        session = np.searchsorted(self._cumulative, point, side="right") - 1 - base[entity]
        # Rounding may put a point on the border of the life.
        inside: IntArray = np.clip(session, self.start[entity], self.stop[entity] - 1)
        return inside


def follow_ups(
    rng: np.random.Generator, session: IntArray, mean: float, reach: int = 6
) -> tuple[IntArray, IntArray]:
    """Draw later points near given ones.

    Returns
    -------
    source, session : int [follow-ups], position of the point followed, and the session, 1 to
        ``reach`` after it. Their number per point is geometric with this ``mean``.
    """
    count = rng.geometric(1.0 / (1.0 + mean), session.size) - 1
    source = np.repeat(np.arange(session.size), count)
    return source, session[source] + rng.integers(1, reach + 1, source.size)


def distinct(key: IntArray) -> IntArray:
    """Return the distinct keys in rising order; on millions far faster than `numpy.unique`."""
    ordered = np.sort(key)
    is_first = np.ones(ordered.size, dtype=np.bool_)
    is_first[1:] = ordered[1:] != ordered[:-1]
    return ordered[is_first]


@dataclass
class PlantingSlots:
    """Company-sessions far enough apart that nothing planted at one touches another.

    Built by `planting_slots`; `take` hands each slot out once.
    """

    entity: IntArray
    session: IntArray
    is_free: NDArray[np.bool_]

    def take(
        self, rng: np.random.Generator, n_slots: int, is_wanted: NDArray[np.bool_]
    ) -> tuple[IntArray, IntArray]:
        """Return entity and trigger session of ``n_slots`` random free slots that are wanted.

        Raises
        ------
        ValueError
            When fewer are free.
        """
        free = np.flatnonzero(self.is_free & is_wanted)
        if n_slots > free.size:
            raise ValueError(
                f"`take`: `n_slots` must be at most the {free.size} free slots; got {n_slots}. "
                "Plant fewer, or use more entities or sessions."
            )
        chosen = rng.permutation(free)[:n_slots]
        self.is_free[chosen] = False
        return self.entity[chosen], self.session[chosen]


def planting_slots(
    rng: np.random.Generator, start: IntArray, stop: IntArray, lookback: int, horizon: int
) -> PlantingSlots:
    """Return one slot per ``2 * (lookback + horizon)`` sessions of each life, phase random.

    The look-back before a slot's trigger session and the horizon after it lie inside the life.
    """
    spacing = 2 * (lookback + horizon)
    n_rows = int((stop - start).max()) // spacing + 1
    phase = rng.integers(0, spacing, start.size)
    session = start[:, None] + lookback - 1 + phase[:, None] + spacing * np.arange(n_rows)
    entity, row = np.nonzero(session + horizon < stop[:, None])
    return PlantingSlots(entity, session[entity, row], np.ones(entity.size, dtype=np.bool_))


def planted_alert_sessions(
    rng: np.random.Generator, session: IntArray, size: int, lookback: int
) -> IntArray:
    """Return alert sessions [slots, size]: one random type at the slot, the others within reach."""
    lag = rng.integers(0, lookback, (session.size, size))
    lag[np.arange(session.size), rng.integers(0, size, session.size)] = 0
    return session[:, None] - lag


def planted_hits(rng: np.random.Generator, n_slots: int, precision: float) -> NDArray[np.bool_]:
    """Return which slots [slots] are followed by an event: the rounded share, at random places."""
    return rng.permutation(n_slots) < round(precision * n_slots)
