"""Frequent itemsets by several libraries on the same tables; the same itemsets asked of each.

``python -m tests.benchmarks.miners NAME TABLE.npz REPEATS`` runs one and prints json: each in a
process of its own, so that a slow one can be ended and memory be told. Every miner gets the table
in the form that it takes, made beforehand; told is the processor time of the call alone (none of
them uses a second core).
"""

from __future__ import annotations

import hashlib
import importlib.util
import json
import math
import sys
import time
import warnings
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from statistics import median
from typing import Any

import numpy as np

from tests.benchmarks.measure import run
from tests.benchmarks.tables import gigabytes, seconds, table

MOST_COUNTED = 2_000_000

Itemsets = Iterable[tuple[Iterable[int], int]]


@dataclass(frozen=True)
class Table:
    """Rows by items, with the fewest rows of a set and the largest size of one."""

    name: str
    is_in_vk: np.ndarray
    fewest: int
    max_size: int

    @property
    def words(self) -> str:
        """What the table is."""
        n_rows, n_items = self.is_in_vk.shape
        return (
            f"{self.name}: {n_rows:,} x {n_items:,}, {self.is_in_vk.mean():.1%} full, sets of up "
            f"to {self.max_size} in {self.fewest:,} rows or more"
        )


Call = Callable[[], Any]
Reader = Callable[[Any], Itemsets]


def _ours(given: Table) -> tuple[Call, Reader]:
    from miner.proposals import propose

    return lambda: propose(
        given.is_in_vk, given.fewest, given.max_size
    ), lambda found: found.items()


def _counting(given: Table) -> tuple[Call, Reader]:
    """What drawn worlds use, where the family is known: every set counted on packed bits."""
    from miner.proposals import count_windows

    n_items = given.is_in_vk.shape[1]
    sizes = range(1, given.max_size + 1)
    n_sets = sum(math.comb(n_items, size) for size in sizes)
    if n_sets > MOST_COUNTED:
        raise SystemExit(f"{n_sets:,} sets are too many to count each")
    combo_ck = np.full((n_sets, given.max_size), -1, dtype=np.int64)
    start = 0
    for size in sizes:
        chosen = np.array(list(combinations(range(n_items), size)))
        combo_ck[start : start + len(chosen), :size] = chosen
        start += len(chosen)

    def read(count_c: np.ndarray) -> Itemsets:
        frequent = count_c >= given.fewest
        return (
            ([k for k in combo if k >= 0], count)
            for combo, count in zip(combo_ck[frequent], count_c[frequent], strict=True)
        )

    return lambda: count_windows(given.is_in_vk, combo_ck), read


def _mlxtend(name: str, **options: Any) -> Callable[[Table], tuple[Call, Reader]]:
    def make(given: Table) -> tuple[Call, Reader]:
        import pandas as pd
        from mlxtend import frequent_patterns

        n_rows = given.is_in_vk.shape[0]
        frame = pd.DataFrame(given.is_in_vk, columns=range(given.is_in_vk.shape[1]))
        share = (given.fewest - 0.5) / n_rows
        mine = getattr(frequent_patterns, name)

        def call() -> Any:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                return mine(frame, min_support=share, max_len=given.max_size, **options)

        return call, lambda found: zip(
            found["itemsets"], (found["support"] * n_rows).round().astype(int), strict=True
        )

    return make


def _pyfim(name: str) -> Callable[[Table], tuple[Call, Reader]]:
    def make(given: Table) -> tuple[Call, Reader]:
        import fim

        rows = [np.flatnonzero(row).tolist() for row in given.is_in_vk]
        mine = getattr(fim, name)
        options = {"target": "s", "supp": -given.fewest, "zmin": 1, "zmax": given.max_size}
        return lambda: mine(rows, **options, report="a"), lambda found: (
            (itemset[0], itemset[1]) for itemset in found
        )

    return make


MINERS: dict[str, Callable[[Table], tuple[Call, Reader]]] = {
    "ours, proposals": _ours,
    "ours, every set counted (drawn worlds)": _counting,
    "mlxtend hmine": _mlxtend("hmine"),
    "mlxtend fpgrowth": _mlxtend("fpgrowth"),
    "mlxtend apriori, low_memory": _mlxtend("apriori", low_memory=True),
    "pyfim fpgrowth (C)": _pyfim("fpgrowth"),
    "pyfim eclat (C)": _pyfim("eclat"),
    "pyfim apriori (C)": _pyfim("apriori"),
}


def dense_table(n_rows: int = 3_000, n_items: int = 70, seed: int = 1) -> Table:
    """Rows half full, in which items hang together: few rows, many long sets."""
    rng = np.random.default_rng(seed)
    share = rng.beta(1.2, 1.2, n_items)
    kind = rng.normal(size=(n_rows, 4)) @ rng.normal(size=(4, n_items)) * 0.5
    is_in_vk = rng.random((n_rows, n_items)) < 1 / (1 + np.exp(-np.log(share / (1 - share)) - kind))
    return Table("dense", is_in_vk, n_rows // 2, 4)


def sparse_table(n_rows: int = 40_000, n_items: int = 1_500, seed: int = 2) -> Table:
    """Ten items a row of many, a few common and most rare, as in shopping baskets."""
    rng = np.random.default_rng(seed)
    weight = 1 / np.arange(1, n_items + 1)
    row = np.repeat(np.arange(n_rows), rng.poisson(10, n_rows))
    is_in_vk = np.zeros((n_rows, n_items), dtype=bool)
    is_in_vk[row, rng.choice(n_items, row.size, p=weight / weight.sum())] = True
    return Table("sparse", is_in_vk, n_rows // 1000, 3)


def window_table(study: Path) -> Table:
    """The pre-event windows of a study's discovery, as a hunt mines them."""
    from miner import load_study
    from miner.assemble import assemble
    from miner.event_windows import types_before_events
    from miner.hunting import split_sessions
    from miner.search import codes_of
    from miner.time_split import discovery_slice
    from miner.units import bare_cases

    inputs = assemble(load_study(study))
    segment = discovery_slice(inputs.panel, split_sessions(inputs)[0])
    windows, mining = inputs.study.windows, inputs.study.mining
    case, *_ = bare_cases(
        segment, inputs.targets, codes_of(inputs.panel, inputs.study), **windows.model_dump()
    )
    seen = types_before_events(case)
    return Table("windows before events", seen, mining.min_hits, mining.max_size)


def digest(found: Itemsets) -> tuple[int, str]:
    """Number of itemsets, and what names them all with their counts."""
    lines = sorted((tuple(sorted(map(int, itemset))), int(count)) for itemset, count in found)
    return len(lines), hashlib.sha256(repr(lines).encode()).hexdigest()


def has(name: str) -> bool:
    """Whether what a miner needs is installed."""
    return not name.startswith("pyfim") or importlib.util.find_spec("fim") is not None


def report(given: Table, folder: Path, *, repeats: int, limit: float) -> tuple[str, bool]:
    """Text on every miner on one table, and whether any found other itemsets (then no times)."""
    path = folder / "table.npz"
    np.savez(path, is_in_vk=given.is_in_vk, fewest=given.fewest, max_size=given.max_size)
    rows, digests = [], {}
    for name in MINERS:
        if not has(name):
            rows.append([name, "not installed", "", ""])
            continue
        command = [sys.executable, "-m", "tests.benchmarks.miners", name, str(path), str(repeats)]
        use = run(command, limit=limit)
        if use.is_cut or use.status != 0:
            # a miner that never ends, or eats all memory, is a result; what it said is at hand
            why = f"not in {limit:g} s" if use.is_cut else f"none: {use.log.strip()[-120:]}"
            rows.append([name, why, "", gigabytes(use.peak)])
            continue
        said = json.loads(use.log.strip().splitlines()[-1])
        digests[name] = (said["itemsets"], said["digest"])
        spent = said["seconds"]
        rows.append([name, seconds3(min(spent)), seconds3(median(spent)), gigabytes(use.peak)])
    head = f"{given.words}."
    if len(set(digests.values())) > 1:
        found = ", ".join(f"{name}: {n:,} ({d[:8]})" for name, (n, d) in digests.items())
        return f"{head} void: itemsets differ: {found}", True
    n_itemsets = next(iter(digests.values()))[0] if digests else 0
    columns = ["processor seconds", "least", "middle", "peak memory of the process, GB"]
    return f"{head} {n_itemsets:,} itemsets, the same of each.\n\n{table(columns, rows)}", False


def seconds3(value: float) -> str:
    """Seconds, to the millisecond where few."""
    return f"{value:.3f}" if value < 1 else seconds(value)


def main() -> None:
    """Run one miner on a table and print seconds and what was found."""
    name, path, repeats = sys.argv[1], sys.argv[2], int(sys.argv[3])
    with np.load(path) as kept:
        given = Table("", kept["is_in_vk"], int(kept["fewest"]), int(kept["max_size"]))
    call, read = MINERS[name](given)
    spent, found = [], None
    for _ in range(repeats + 1):
        start = time.process_time()
        found = call()
        spent.append(time.process_time() - start)
        if spent[0] > 20:
            break
    # the first call loads and compiles; of a slow miner there is no other
    n_itemsets, name_of_all = digest(read(found))
    print(
        json.dumps({"seconds": spent[1:] or spent, "itemsets": n_itemsets, "digest": name_of_all})
    )


if __name__ == "__main__":
    main()
