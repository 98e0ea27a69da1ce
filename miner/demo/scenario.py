"""Hands on the demo in a folder: an invented market as a study, and the truth of what is in it.

A reporting season, market and sector shocks and busy names drive alerts and events alike. A few
combinations of alerts are planted on top; a decoy pair looks good only through the drivers.
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from miner import placing
from miner.columns import JOINER, POOLED
from miner.demo.cast import DECOY, PLANTINGS, TARGET, Planting
from miner.demo.files import write_tables
from miner.demo.market import HORIZON, LOOKBACK, Market, invent_market
from miner.demo.prices import write_prices
from miner.demo.stamps import CLOSE_SECONDS, TIMEZONE
from miner.seeds import stream

DEFAULT_SEED = 7
HOLDOUT_START = "2022-07-01"
PRICES_TEXT = """
[prices]
source = "prices.parquet"     # daily bars: what would trades on the rules have earned?
jumps = "keep"                # an approach can lift a price by that much
"""


@dataclass(frozen=True)
class PlantedTruth:
    """One planted combination, spelled as the hunt spells it.

    ``sets`` is the number of times it was put in over the whole calendar, ``precision`` the share
    of those inside ``first`` .. ``last`` (dates, both included) that were given an event. A common
    pair's sets include those of the triple that sharpens it.
    """

    combination: str
    target: str
    stratum: str
    kind: str
    first: str
    last: str
    sets: int
    precision: float


@dataclass(frozen=True)
class Truth:
    """What `write_demo` wrote: the study to hunt in, what is planted in it, and the decoy."""

    study: Path
    seed: int
    target: str
    planted: tuple[PlantedTruth, ...]
    decoy: str


def write_demo(folder: Path, seed: int = DEFAULT_SEED) -> Truth:
    """Write the invented scenario into ``folder`` (made if missing) and return its truth.

    Files: ``study.toml``, ``alerts.parquet``, ``events.csv``, ``groups.csv``, ``coverage.csv``,
    ``prices.parquet`` and ``truth.json``, which no study reads. The same seed writes the same rows.

    Raises
    ------
    OSError
        When the folder cannot be made or written to.
    """
    rng = stream(seed, "demo")
    market = invent_market(rng)
    study = folder / "study.toml"
    truth = Truth(study, seed, TARGET, _planted_truth(market), JOINER.join(sorted(DECOY)))
    record = {key: value for key, value in asdict(truth).items() if key != "study"}
    with placing.aside(folder / "demo") as aside:
        write_tables(rng, market, aside)
        write_prices(stream(seed, "demo", "prices"), market, aside)
        (aside / study.name).write_text(study_text(market.day, seed), encoding="utf-8")
        (aside / "truth.json").write_text(json.dumps(record, indent=2) + "\n", encoding="utf-8")
        placing.put_files(aside, folder)
    return truth


def _planted_truth(market: Market) -> tuple[PlantedTruth, ...]:
    rows = []
    for planting in PLANTINGS:
        if planting.kind == "idle":
            continue
        # Sets of a superset are sets of this one too, with the superset's precision.
        same = [p for p in PLANTINGS if set(p.types) >= set(planting.types) and p.kind != "idle"]
        n_sets = sum(p.n_sets for p in same)
        first, last = _life_dates(market, planting)
        rows.append(
            PlantedTruth(
                combination=JOINER.join(sorted(planting.types)),
                target=TARGET,
                stratum=planting.bands[0] if len(planting.bands) == 1 else POOLED,
                kind=planting.kind,
                first=first,
                last=last,
                sets=n_sets,
                precision=round(sum(p.n_sets * p.precision for p in same) / n_sets, 4),
            )
        )
    return tuple(rows)


def _life_dates(market: Market, planting: Planting) -> tuple[str, str]:
    """First and last date on which a set of this planting is followed by more than chance."""
    first, last = (share * market.day.size for share in planting.life)
    return str(market.day[int(np.ceil(first))]), str(market.day[int(np.ceil(last)) - 1])


def study_text(day: NDArray[np.datetime64], seed: int, *, has_prices: bool = True) -> str:
    """The settings of a study of the market over the sessions ``day``."""
    prices = PRICES_TEXT if has_prices else ""
    close = f"{CLOSE_SECONDS // 3600:02d}:{CLOSE_SECONDS // 60 % 60:02d}"
    return f'''\
# An invented market. No company, sector or alert type in it exists.
# truth.json says what was planted; no setting here knows of it.

[study]
name = "invented approaches"

[alerts]
source = "alerts.parquet"     # entity, time, type: some stamps carry an offset, some do not

[events]
source = "events.csv"
targets = ["{TARGET}"]        # the other event type in the file is not hunted

[groups]
source = "groups.csv"         # point-in-time: companies move between size bands
strata = "size_band"          # hunt inside each band ...
pooled = true                 # ... and over all companies together
peers = "sector"              # the null holds each sector's calendar of events fixed

[coverage]
source = "coverage.csv"       # who is listed when, and which alert types exist for it
{prices}
[sessions]
calendar = "weekdays"
close = "{close}"               # later stamps belong to the next session
timezone = "{TIMEZONE}"    # of the close and of stamps without an offset
start = "{day[0]}"
end = "{day[-1]}"

[windows]
lookback = {LOOKBACK}                  # sessions within which a combination has to be complete
horizon = {HORIZON}                   # sessions within which the event has to follow

[mining]
max_size = 3
min_triggers = 30             # the rarest planted combination has about sixty before the holdout
min_hits = 3

[testing]
adjust = "bh"
fdr = 0.05
seed = {seed}

[holdout]
start = "{HOLDOUT_START}"          # the last three tenths of the calendar
alpha = 0.05
'''
