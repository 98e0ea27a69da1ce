"""``python -m tests.audits.leak_rates --worlds 20``: how often alarms about leaks ring.

False alarms over every kind of world of the calibration study, with and without true precursors,
labels that move at random and labels that follow events; and the share of planted leaks seen.
"""

from __future__ import annotations

import argparse

import numpy as np

from miner.leaks import leaks
from miner.panel import Labels, Panel
from tests.audits.planted_leaks import HORIZON, PLANTS, clean
from tests.calibration.in_memory import panel_of
from tests.calibration.table import BY_NAME, WORLDS, NamedWorld
from tests.worlds import Plant

TRUE = (Plant((0, 1), 0.7, 100), Plant((2,), 0.4, 100))
POWER_WORLDS = ("quiet", "rare", "all held", "all held, rare")


def alarms(panel: Panel, labels: dict[str, Labels]) -> list[str]:
    """The alarms about a panel."""
    return list(leaks(panel, labels, lookback=5, horizon=HORIZON))


def rng_of(seed: int) -> np.random.Generator:
    """What plants are drawn by."""
    return np.random.default_rng([seed, 5])


def false_alarms(world: NamedWorld, seeds: range) -> list[list[str]]:
    """Alarms of clean panels, half of them with true precursors."""
    found = []
    for seed in seeds:
        planted = TRUE if seed % 2 else ()
        found.append(alarms(*clean(panel_of(world.make(seed, planted)), rng_of(seed))))
    return found


def power(plant: str, world: NamedWorld, seeds: range) -> float:
    """Share of worlds in which a planted leak raises an alarm."""
    rings = [
        bool(alarms(*PLANTS[plant](panel_of(world.make(seed)), rng_of(seed)))) for seed in seeds
    ]
    return sum(rings) / len(rings)


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(prog="python -m tests.audits.leak_rates", description=__doc__)
    parser.add_argument("--worlds", type=int, default=20)
    seeds = range(7000, 7000 + parser.parse_args().worlds)
    print("| kind of world | worlds with an alarm |\n|---|---|")
    for world in WORLDS:
        found = false_alarms(world, seeds)
        print(f"| {world.name} | {sum(map(bool, found))} of {len(found)} |", flush=True)
        for told in {line for lines in found for line in lines}:
            print(f"    {told}")
    names = " | ".join(POWER_WORLDS)
    print(f"\n| planted | {names} |\n|---|{'---|' * len(POWER_WORLDS)}")
    for plant in PLANTS:
        shares = [f"{power(plant, BY_NAME[name], seeds):.0%}" for name in POWER_WORLDS]
        print(f"| {plant} | {' | '.join(shares)} |", flush=True)


if __name__ == "__main__":
    main()
