"""95 % intervals for a share: Wilson, Clopper-Pearson, and the two-way clustered one.

The clustered variance is that of Cameron, Gelbach & Miller 2011; the effective n is that of
Rao & Scott 1992 and Korn & Graubard 1998.
"""

from collections.abc import Hashable, Sequence
from math import sqrt

from scipy.stats import beta, norm, t

from .world import Cell


def wilson(share: float, n: float, quantile: float | None = None) -> tuple[float, float]:
    """Wilson's score interval; quantile None is the normal .975 one."""
    z = float(norm.ppf(0.975)) if quantile is None else quantile
    middle = (share + z * z / (2 * n)) / (1 + z * z / n)
    half = z * sqrt(share * (1 - share) / n + z * z / (4 * n * n)) / (1 + z * z / n)
    return max(0.0, middle - half), min(1.0, middle + half)


def clopper_pearson(x: float, n: float) -> tuple[float, float]:
    """The exact interval; x may be a fraction of an observation."""
    low = 0.0 if x <= 0 else float(beta.ppf(0.025, x, n - x + 1))
    high = 1.0 if x >= n else float(beta.ppf(0.975, x + 1, n - x))
    return low, high


def cluster_variance(y: Sequence[int], cluster: Sequence[Hashable]) -> float:
    """Variance of the mean of y when observations of a cluster go together; 0 for one cluster."""
    n, names = len(y), set(cluster)
    if len(names) == 1:
        return 0.0
    share = sum(y) / n
    total = 0.0
    for name in names:
        excess = sum(v - share for v, c in zip(y, cluster, strict=True) if c == name)
        total += excess**2
    return len(names) / (len(names) - 1) * total / n**2


def precision_interval(
    cells: Sequence[Cell], hits: Sequence[int], horizon: int
) -> tuple[float, float, bool]:
    """(low, high, too few clusters) for the precision of triggers at cells, hits 0 or 1 each.

    Clusters are entities and blocks of `horizon` sessions. NaN without triggers.
    """
    n = len(cells)
    if n == 0:
        return float("nan"), float("nan"), True
    entities = [entity for entity, _ in cells]
    blocks = [session // horizon for _, session in cells]
    both = list(zip(entities, blocks, strict=True))
    share = sum(hits) / n
    fewest = min(len(set(entities)), len(set(blocks)))
    if fewest < 10 or sum(hits) in (0, n):
        n_cells = len(set(both))
        low, high = clopper_pearson(share * n_cells, n_cells)
        return low, high, fewest < 10
    v_e, v_d, v_c = (cluster_variance(hits, c) for c in (entities, blocks, both))
    variance = max(v_e + v_d - v_c, v_e, v_d)
    deff = max(1.0, variance * n / (share * (1 - share)))
    low, high = wilson(share, n / deff, float(t.ppf(0.975, fewest - 1)))
    return low, high, False
