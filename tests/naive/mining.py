"""Pre-event windows, proposals and the family, by looking at every combination there is."""

from collections.abc import Collection, Iterable
from itertools import combinations

from .world import (
    Cell,
    Combination,
    Unit,
    World,
    alert_types,
    discovery,
    eligible_triggers,
    is_open,
)


def all_combinations(types: Iterable[str], max_size: int) -> list[Combination]:
    """Every combination of 1 .. max_size types, each sorted; small before large."""
    ordered = sorted(types)
    return [c for size in range(1, max_size + 1) for c in combinations(ordered, size)]


def frequent_itemsets(
    transactions: Collection[Collection[str]], min_count: int, max_size: int
) -> dict[Combination, int]:
    """Itemsets in at least min_count transactions, with their counts."""
    items = {item for transaction in transactions for item in transaction}
    counts = {
        itemset: sum(set(itemset) <= set(transaction) for transaction in transactions)
        for itemset in all_combinations(items, max_size)
    }
    return {itemset: count for itemset, count in counts.items() if count >= min_count}


def pre_event_windows(world: World, unit: Unit) -> list[frozenset[str]]:
    """The types seen before each event of discovery that some open cell could have foreseen."""
    segment = discovery(world)
    windows = []
    for entity, target, s in sorted(world.events):
        if entity not in world.known or target != unit[0] or s > world.discovery_end:
            continue
        before = range(s - world.horizon, s)
        if not any(is_open(world, unit, segment, (entity, t)) for t in before):
            continue
        reach = range(max(0, s - world.horizon - world.lookback + 1), s)
        windows.append(frozenset(k for e, k, t in world.alerts if e == entity and t in reach))
    return windows


def family(world: World, unit: Unit) -> dict[Combination, tuple[Cell, ...]]:
    """Every combination with enough eligible triggers in discovery, and those triggers."""
    found = {}
    for combination in all_combinations(alert_types(world), world.max_size):
        cells = eligible_triggers(world, unit, discovery(world), combination)
        if len(cells) >= world.min_triggers:
            found[combination] = cells
    return found


def candidates(world: World, unit: Unit) -> list[Combination]:
    """Members of the family that are in at least min_hits pre-event windows."""
    windows = pre_event_windows(world, unit)
    proposed = frequent_itemsets(windows, world.min_hits, world.max_size)
    return [combination for combination in family(world, unit) if combination in proposed]
