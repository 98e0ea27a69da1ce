"""Proposals against the textbooks' frequent itemsets, brute force, and the library's lost ones."""

import naive
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mlxtend.frequent_patterns import fpgrowth, hmine

from miner.proposals import count_windows, propose


def padded(combos):
    """Combinations as rows of types, the shorter filled up with -1."""
    size = max(len(combo) for combo in combos)
    return np.array([(*combo, *[-1] * (size - len(combo))) for combo in combos])


def as_rows(transactions: list[set[str]]) -> tuple[np.ndarray, list[str]]:
    """Bool [transactions, items] and the items' names, sorted."""
    items = sorted(set().union(*transactions))
    return np.array([[item in t for item in items] for t in transactions]), items


def named(found: dict[tuple[int, ...], int], items: list[str]) -> dict[str, int]:
    return {" ".join(items[k] for k in combo): count for combo, count in found.items()}


# Han, Kamber & Pei, 3rd edition, table 6.1.
HAN_KAMBER_PEI = ["125", "24", "23", "124", "13", "23", "13", "1235", "123"]
# Agrawal & Srikant 1994, figure 3.
AGRAWAL_SRIKANT = ["134", "235", "1235", "25"]
# Zaki & Meira 2014, figure 8.1.
ZAKI_MEIRA = ["ABDE", "BCE", "ABDE", "ABCE", "ABCDE", "BCD"]
# Han, Pei & Yin 2000, table 1.
HAN_PEI_YIN = ["facdgimp", "abcflmo", "bfhjo", "bcksp", "afcelpmn"]
# Tan, Steinbach & Kumar, chapter 6: bread, milk and diapers are together twice, not thrice.
BASKETS = ["bread milk", "bread diapers beer eggs", "milk diapers beer cola",
           "bread milk diapers beer", "bread milk diapers cola"]  # fmt: skip


@pytest.mark.parametrize(
    ("transactions", "min_count", "n_sets", "some"),
    [
        (HAN_KAMBER_PEI, 2, 13, {"1": 6, "2": 7, "1 2": 4, "1 5": 2, "1 2 3": 2, "1 2 5": 2}),
        (AGRAWAL_SRIKANT, 2, 9, {"1": 2, "1 3": 2, "2 5": 3, "3 5": 2, "2 3 5": 2}),
        (ZAKI_MEIRA, 3, 19, {"B": 6, "B E": 5, "A B E": 4, "B C E": 3, "A B D E": 3}),
        (HAN_PEI_YIN, 3, 18, {"c p": 3, "b": 3, "a c f m": 3}),
        ([b.split() for b in BASKETS], 3, 8, {"beer diapers": 3, "bread": 4}),
        ([b.split() for b in BASKETS], 2, 17, {"bread diapers milk": 2}),
    ],
    ids=["Han Kamber Pei", "Agrawal Srikant", "Zaki Meira", "Han Pei Yin", "Tan 3", "Tan 2"],
)
def test_textbook_itemsets(transactions, min_count, n_sets, some):
    is_seen, items = as_rows([set(t) for t in transactions])
    found = propose(is_seen, min_count, 5)
    assert len(found) == n_sets
    assert named(found, items).items() >= some.items()
    combos = tuple(found)
    assert count_windows(is_seen, padded(combos)).tolist() == [found[c] for c in combos]


@given(st.integers(0, 2**32 - 1), st.integers(0, 60), st.integers(1, 9), st.integers(1, 4))
def test_proposals_are_all_sets_in_enough_windows(seed, n_windows, min_hits, max_size):
    rng = np.random.default_rng(seed)
    is_seen = rng.random((n_windows, 5)) < rng.choice([0.05, 0.3, 0.8], 5)
    found = propose(is_seen, min_hits, max_size)
    windows = [frozenset(np.flatnonzero(row).tolist()) for row in is_seen]
    expected = naive.frequent_itemsets(windows, min_hits, max_size)
    assert found == expected
    family = tuple(naive.all_combinations(range(5), max_size))
    counts = dict(zip(family, count_windows(is_seen, padded(family)).tolist(), strict=True))
    assert {combo: n for combo, n in counts.items() if n >= min_hits} == expected


def test_nothing_is_lost_at_the_threshold():
    """The library turns the share 7 / 25 back into a count of 8."""
    is_seen = np.zeros((25, 2), dtype=bool)
    is_seen[:7] = True
    assert hmine(pd.DataFrame(is_seen), min_support=7 / 25).empty
    assert propose(is_seen, 7, 2) == {(0,): 7, (1,): 7, (0, 1): 7}
    for n in range(1, 120):
        for k in range(1, n + 1, max(1, n // 7)):
            is_seen = np.arange(n)[:, None] < np.array([k, k - 1])
            assert propose(is_seen, k, 1) == {(0,): k}


def test_another_algorithm_of_the_library_finds_the_same():
    is_seen = np.random.default_rng(2).random((300, 6)) < 0.4
    other = fpgrowth(pd.DataFrame(is_seen), min_support=11.5 / 300, max_len=3)
    found = propose(is_seen, 12, 3)
    assert {frozenset(combo) for combo in found} == set(other["itemsets"])
    assert len(found) > 20
