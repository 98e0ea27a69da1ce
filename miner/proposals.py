"""Proposals: combinations frequent among pre-event windows. The only importer of mlxtend."""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd

from miner.kernels import bits, windows
from miner.triggers import Combo


def propose(is_seen_vk: np.ndarray, min_hits: int, max_size: int) -> dict[Combo, int]:
    """Combinations seen in at least ``min_hits`` windows, with their number of windows.

    Parameters
    ----------
    is_seen_vk : bool [windows, types]

    The miner turns a share back into a count and loses sets that lie exactly on it; half a window
    less keeps them all.
    """
    n_windows = is_seen_vk.shape[0]
    if n_windows < min_hits:
        return {}
    # of the library's miners by far the fastest on windows: 35,000 x 40 with 10,700 sets up to size
    # three took it 0.6 s and fpgrowth 92 s
    from mlxtend.frequent_patterns import hmine

    # rare types cannot be part of a frequent set and only slow the search
    kept = np.flatnonzero(is_seen_vk.sum(axis=0) >= min_hits)
    if kept.size == 0:
        return {}
    frame = pd.DataFrame(is_seen_vk[:, kept], columns=kept)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = hmine(
            frame, min_support=(min_hits - 0.5) / n_windows, max_len=max_size, use_colnames=True
        )
    counts = np.rint(found["support"].to_numpy(dtype=np.float64) * n_windows).astype(np.int64)
    return {
        tuple(sorted(int(k) for k in itemset)): int(count)
        for itemset, count in zip(found["itemsets"], counts, strict=True)
    }


def count_windows(is_seen_vk: np.ndarray, combo_ck: np.ndarray) -> np.ndarray:
    """Number of windows that hold each combination (``TriggerTable.combo_ck``): int64.

    The same counts as ``propose`` for combinations known beforehand, on packed bits; drawn worlds
    use it, where only members of the family can matter.
    """
    seen_kw = bits.pack_flags(np.ascontiguousarray(is_seen_vk.T))
    return windows.count_together(seen_kw, combo_ck)
