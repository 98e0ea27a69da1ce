"""Hands on the four quarters after the demo's hunt: the same market goes on, its rules fare apart.

One planted rule holds, one decays slowly, one dies at once, and of one an alert is redefined. The
other plantings go on as they were. Companies are delisted and listed, and change bands, as before.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from miner import placing
from miner.columns import JOINER
from miner.demo.cast import (
    ALERT_KINDS,
    BANDS,
    FARES_ALIKE,
    FATES,
    PLANTINGS,
    REDEFINED,
    REDEFINED_FACTOR,
    REDEFINED_FROM,
    SECTORS,
    AlertKind,
    Fate,
    Planting,
)
from miner.demo.files import write_longer_tables
from miner.demo.market import (
    N_EVENTS,
    Companies,
    Market,
    draw_market,
    first_session,
    invent_market,
)
from miner.demo.scenario import study_text
from miner.demo.stamps import weekdays
from miner.demo.world_parts import company_names, name_weights
from miner.seeds import stream

START, END = "2024-01-01", "2024-12-31"
HALF_YEAR = "2024-07-01"
QUARTERS = ("2024Q1", "2024Q2", "2024Q3", "2024Q4")

_QUARTERS_BEFORE = 20
_N_LISTED = 40
_DELISTED_SHARE, _MOVING_SHARE = 0.04, 0.06


@dataclass(frozen=True)
class LaterTruth:
    """What `write_later` wrote: a study of the whole time, and what became of which rule.

    ``fates`` are those of `FATES`, their combinations spelled as the hunt spells them.
    """

    study: Path
    fates: tuple[Fate, ...]
    redefined: str
    redefined_from: str

    def combination(self, fate: Fate) -> str:
        """The combination of a fate."""
        return JOINER.join(sorted(fate.types))


def write_later(demo: Path, seed: int) -> LaterTruth:
    """Write ``later/`` in a demo's folder: its tables with four more quarters, and a study of both.

    Raises
    ------
    OSError
        When the folder cannot be made or written to.
    """
    before = invent_market(stream(seed, "demo"))
    rng = stream(seed, "demo", "later")
    day = weekdays(START, END)
    companies, later = _companies(rng, before.companies, day)
    market = draw_market(
        rng, day, later, list(_plantings(before.day)), list(_kinds(before, later, day)),
        N_EVENTS * _life(later) / _life(before.companies),
    )  # fmt: skip
    folder = demo / "later"
    truth = LaterTruth(folder / "study.toml", FATES, REDEFINED, REDEFINED_FROM)
    record = {"quarters": QUARTERS} | asdict(truth)
    del record["study"]
    whole = np.concatenate([before.day, day])
    folder.mkdir(parents=True, exist_ok=True)
    with placing.aside(folder / "demo") as aside:
        write_longer_tables(rng, demo, market, companies, whole, aside)
        text = study_text(whole, seed, has_prices=False)
        (aside / "study.toml").write_text(text, encoding="utf-8")
        (aside / "truth.json").write_text(json.dumps(record, indent=2) + "\n", encoding="utf-8")
        placing.put_files(aside, folder)
    return truth


def _companies(
    rng: np.random.Generator, before: Companies, day: NDArray[np.datetime64]
) -> tuple[Companies, Companies]:
    """The companies over the whole time, and those listed later with their later sessions alone."""
    n_before, n_old, n = before.band_et.shape[1], before.names.size, day.size
    names = company_names(rng, n_old + _N_LISTED)
    names = np.concatenate([before.names, names[~np.isin(names, before.names)][:_N_LISTED]])
    is_new = np.arange(names.size) >= n_old
    is_listed = np.append(before.stop == n_before, np.ones(_N_LISTED, dtype=np.bool_))
    start = np.where(is_new, rng.integers(10, n // 2, names.size), 0)
    stop = np.full(names.size, n)
    is_gone = rng.random(names.size) < _DELISTED_SHARE
    stop[is_gone] = rng.integers(n // 2 + 5, n - 20, int(is_gone.sum()))

    band = np.append(before.band_et[:, -1], rng.integers(0, len(BANDS), _N_LISTED)).astype(np.int8)
    step = np.where(rng.random(names.size) < _MOVING_SHARE, rng.choice((-1, 1), names.size), 0)
    is_after = day >= np.datetime64(HALF_YEAR)
    band_et = np.clip(band[:, None] + step[:, None] * is_after, 0, len(BANDS) - 1).astype(np.int8)
    bands_before = np.repeat(band[:, None], n_before, axis=1)
    bands_before[:n_old] = before.band_et

    sector = np.append(before.sector, rng.integers(0, len(SECTORS), _N_LISTED))
    weight = np.append(before.weight, name_weights(rng, _N_LISTED, 0.6))
    first, last = np.zeros(names.size, np.int64), np.zeros(names.size, np.int64)
    first[:n_old], last[:n_old] = before.start, before.stop
    whole = Companies(
        names,
        sector,
        np.where(is_new, n_before + start, first),
        np.where(is_listed, n_before + stop, last),
        np.concatenate([bands_before, band_et], axis=1),
        weight,
    )
    kept = np.flatnonzero(is_listed)
    later = Companies(
        names[kept], sector[kept], start[kept], stop[kept], band_et[kept], weight[kept]
    )
    return whole, later


def _life(companies: Companies) -> float:
    """Listed sessions, weighted by busyness."""
    return float((companies.weight * (companies.stop - companies.start)).sum())


def _kinds(
    before: Market, later: Companies, day: NDArray[np.datetime64]
) -> Iterator[tuple[int, AlertKind]]:
    """Alert kinds at the rates they had, and the one that is redefined once more on top."""
    share = _life(later) / _life(before.companies)
    for k, kind in enumerate(ALERT_KINDS):
        published = 1 - first_session(kind, before.day) / before.day.size
        same = replace(kind, n_alerts=round(kind.n_alerts * share / published))
        yield k, same
        if kind.name == REDEFINED:
            after = float((day >= np.datetime64(REDEFINED_FROM)).mean())
            more = round(same.n_alerts * (REDEFINED_FACTOR - 1) * after)
            yield k, replace(same, n_alerts=more, from_date=REDEFINED_FROM)


def _plantings(day: NDArray[np.datetime64]) -> Iterator[Planting]:
    """As many sets a quarter as before, on the sessions ``day``; what follows them is the fates' to
    say."""
    fate_of = {(fate.types, fate.stratum): fate for fate in (*FATES, *FARES_ALIKE)}
    for planting in PLANTINGS:
        stratum = planting.bands[0] if len(planting.bands) == 1 else "all"
        fate = fate_of.get((planting.types, stratum)) if planting.kind != "idle" else None
        is_over = planting.life[1] < 1
        first = max(first_session(kind, day) for kind in ALERT_KINDS if kind.name in planting.types)
        n_before = _QUARTERS_BEFORE * (1 - first / day.size)  # quarters in which they were put in
        for q in range(len(QUARTERS)):
            yield replace(
                planting,
                n_sets=round(planting.n_sets / n_before),
                precision=fate.precisions[q] if fate else 0.0 if is_over else planting.precision,
                life=(0.0, 1.0),
                place=(q / len(QUARTERS), (q + 1) / len(QUARTERS)),
            )
