"""``python -m tests.fuzz.twin --studies 3000``: whole hunts against the slow twin.

Every study is a seed: a third are the everyday tiny worlds, the rest edge worlds; half of all lie
on calendars with holes. Counts, texts and verdicts must be equal, numbers to nine digits.
"""

from __future__ import annotations

import argparse
import math
import sys
import traceback
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import naive
import numpy as np
from tiny_worlds import random_world, write_study

from miner import hunt, load_study
from miner.columns import CANDIDATE_COLUMNS
from miner.errors import InputError
from tests.fuzz.edge_worlds import edge_world, on_holidays, with_law

LEVELS = (0.05, 0.05, 0.2)
RELATIVE = 1e-9
KEY = ("target", "stratum", "combination")


def study_of(seed: int) -> tuple[naive.World, float, str]:
    """The world, the level of its tests and the adjustment of a seed."""
    rng = np.random.default_rng([seed, 0])
    if seed % 3:
        world = edge_world(seed)
    else:
        world = with_law(random_world(seed), str(rng.choice(["odds", "hazard"])))
    return world, float(rng.choice(LEVELS)), str(rng.choice(["bh", "bh", "by"]))


def mine(world: naive.World, level: float, adjust: str, seed: int) -> list[dict[str, Any]]:
    """The program's candidates on the world written to disk."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        path = write_study(
            world, folder, fdr=level, alpha=level, adjust=adjust, permutations=0, placebo=0
        )
        if seed % 2:
            on_holidays(folder, world.n_sessions, seed)
        study = load_study(path)
        study = replace(
            study,
            holdout=study.holdout.model_copy(update={"folds": 0}),
            testing=study.testing.model_copy(update={"margins": world.law}),
        )
        return hunt(study, n_workers=1).candidates.to_dict("records")


def differences(ours: list[dict[str, Any]], twins: list[dict[str, Any]]) -> Iterator[str]:
    """What differs between the program's rows and the twin's, in words."""
    a, b = ({tuple(row[k] for k in KEY): row for row in rows} for rows in (ours, twins))
    if a.keys() != b.keys():
        yield f"combinations: {len(a)} and {len(b)}, not shared {sorted(a.keys() ^ b.keys())[:3]}"
        return
    for key, twin in b.items():
        for name, kind in CANDIDATE_COLUMNS.items():
            one, two = a[key][name], twin[name]
            if kind == "number":
                x, y = (math.nan if v is None else float(v) for v in (one, two))
                same = (x != x and y != y) or abs(x - y) <= RELATIVE * max(abs(x), abs(y), 1e-290)
            elif kind == "integer":
                same = (
                    None if one is None or one != one or str(one) == "<NA>" else int(one)
                ) == two
            else:
                same = str(one).split(" [")[0] == ("" if two is None else two)
            if not same:
                yield f"{' / '.join(key)}: {name} {one!r}, twin {two!r}"


def compare(seed: int, seen: Counter[str]) -> list[str]:
    """Differences of one study; ``seen`` is told what was in it."""
    world, level, adjust = study_of(seed)
    try:
        ours = mine(world, level, adjust, seed)
    except InputError as error:
        return [f"refused: {error}"]
    except Exception:
        return [traceback.format_exc()]
    twins = naive.hunt(world, level, level, adjust)
    seen["studies"] += 1
    seen["on holidays"] += seed % 2
    seen[world.law] += 1
    seen["with coverage"] += world.coverage is not None
    seen["with groups"] += world.strata is not None or world.peers is not None
    seen["rows"] += len(twins)
    seen.update(row["verdict"] for row in twins)
    seen["sharpening"] += sum(row["sharpens"] is not None for row in twins)
    for module in [m for name, m in sys.modules.items() if name.startswith("naive.")]:
        for definition in vars(module).values():
            if hasattr(definition, "cache_clear"):  # or every world would be kept
                definition.cache_clear()
    return list(differences(ours, twins))


def run(seeds: range, say: Any = print) -> tuple[Counter[str], dict[int, list[str]]]:
    """Compare the studies of the seeds: what was in them, and the differences by seed."""
    seen: Counter[str] = Counter()
    wrong: dict[int, list[str]] = {}
    for n, seed in enumerate(seeds, start=1):
        found = compare(seed, seen)
        if found:
            wrong[seed] = found
            say(f"seed {seed}: {len(found)} differences\n  " + "\n  ".join(found[:4]))
        if n % 100 == 0:
            say(f"{n} studies, {len(wrong)} with differences")
    return seen, wrong


def main() -> None:
    """Run the comparison from the command line; fails if anything differs."""
    parser = argparse.ArgumentParser(prog="python -m tests.fuzz.twin", description=__doc__)
    parser.add_argument("--studies", type=int, default=300)
    parser.add_argument("--from-seed", type=int, default=0)
    asked = parser.parse_args()

    def say(text: str) -> None:
        print(text, flush=True)

    seen, wrong = run(range(asked.from_seed, asked.from_seed + asked.studies), say)
    say(", ".join(f"{name} {count:,}" for name, count in seen.items()))
    say(f"differences in {len(wrong)} studies: {sorted(wrong)}")
    if wrong or not seen["studies"]:
        raise SystemExit(1)


if __name__ == "__main__":
    main()
