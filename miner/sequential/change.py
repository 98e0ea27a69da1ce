"""Hands on which alert types came more often, or less often, from some recent week on.

Weekly counts are taken as Poisson around exposure x season x level x a factor that wanders around
1 (more variable than chance alone, and like the week before). All of it is estimated on the weeks
before any change that is looked for; the largest standardised change over the weeks at which it may
have begun is then held against the same statistic in series drawn from that estimate.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from miner.adjust import holm

AFTER = 4  # weeks that must have passed since a change
FEWEST_BEFORE = 26  # weeks, and
FEWEST_ALERTS = 26  # alerts, before any change that is looked for
SEASON_PRIOR = 0.25  # weeks at the overall rate added to each week of the season
MOST_LIKE = 0.95  # autocorrelation of the wandering factor is held at most here
LEAST_VARIANCE = 1e-4  # of that factor, where its autocorrelation is asked
PILOT = 200  # series from which the bias of estimates is taken
HALF = 0.5  # added to counts under a logarithm


@dataclass(frozen=True)
class Changes:
    """Lasting changes of how often alert types come, arrays [types].

    Attributes
    ----------
    p_k, adjusted_k : float64, of no change; adjusted by Holm over all types, 1 where not tested
    is_changed_k : bool, adjusted at most alpha
    week_k : int64, index of the first week after the likeliest change; -1 where not tested
    ratio_k : float64, alerts since that week over those expected; NaN where not tested
    is_tested_k : bool, false where weeks or alerts are too few
    """

    p_k: np.ndarray
    adjusted_k: np.ndarray
    is_changed_k: np.ndarray
    week_k: np.ndarray
    ratio_k: np.ndarray
    is_tested_k: np.ndarray


def change_points(
    count_kw: np.ndarray,
    exposure_w: np.ndarray,
    random: np.random.Generator,
    n_recent: int = 13,
    season: int = 13,
    draws: int = 999,
    alpha: float = 0.05,
) -> Changes:
    """Look in every type for a lasting change that showed in the last ``n_recent`` weeks.

    Parameters
    ----------
    count_kw : int [types, weeks], alerts, best 104 weeks; the last may be looked at still
    exposure_w : float [weeks], above 0: sessions in the week, or covered entity-sessions
    n_recent : weeks; a change needs four weeks to show, so its first week is one of the
        ``n_recent`` that end with the fourth last
    season : weeks after which a pattern comes again; 1 = no season
    draws : at least; as many are drawn as Holm over all types needs
    alpha : chance of one false alarm or more over all types of one call

    Raises
    ------
    ValueError : exposures that are not positive, or not one a week
    """
    count_kw, exposure_w = np.asarray(count_kw), np.asarray(exposure_w, dtype=float)
    n_types, n_weeks = count_kw.shape
    if exposure_w.shape != (n_weeks,) or not (exposure_w > 0).all():
        raise ValueError("`exposure_w` must be positive, one a week")
    n_before = n_weeks - n_recent - AFTER + 1
    p_k, week_k = np.ones(n_types), np.full(n_types, -1)
    ratio_k = np.full(n_types, np.nan)
    is_tested_k = np.zeros(n_types, dtype=bool)
    if n_before >= max(FEWEST_BEFORE, 2 * season):
        is_tested_k = count_kw[:, :n_before].sum(axis=1) >= FEWEST_ALERTS
    n_draws = max(draws, int(np.ceil(max(n_types, 1) / alpha)))
    starts = np.arange(n_before, n_weeks - AFTER + 1)
    for k, own in enumerate(random.spawn(n_types)):
        if not is_tested_k[k]:
            continue
        seen = count_kw[k][None]
        expected_w = _expected(seen, exposure_w, season, n_before)[0]
        drawn_dw = _draw(seen[0], expected_w, exposure_w, season, n_before, own, n_draws)
        log_s = _log_ratios(seen, expected_w[None], starts)[0]
        log_ds = _log_ratios(drawn_dw, _expected(drawn_dw, exposure_w, season, n_before), starts)
        middle, spread = log_ds.mean(axis=0), log_ds.std(axis=0)
        size_s = np.abs(log_s - middle) / spread
        largest_d = (np.abs(log_ds - middle) / spread).max(axis=1)
        p_k[k] = (1 + np.count_nonzero(largest_d >= size_s.max())) / (1 + n_draws)
        week_k[k] = starts[size_s.argmax()]
        ratio_k[k] = seen[0, week_k[k] :].sum() / expected_w[week_k[k] :].sum()
    adjusted_k = holm(p_k)
    return Changes(p_k, adjusted_k, adjusted_k <= alpha, week_k, ratio_k, is_tested_k)


def _expected(
    count_dw: np.ndarray, exposure_w: np.ndarray, season: int, n_before: int
) -> np.ndarray:
    """Counts expected in every week from the season and level of the weeks before."""
    before, exposure = count_dw[:, :n_before], exposure_w[:n_before]
    overall_d = np.maximum(before.sum(axis=1), HALF) / exposure.sum()
    prior = SEASON_PRIOR * exposure.mean()
    rate_ds = np.empty((len(count_dw), season))
    for s in range(season):
        total_d = before[:, s::season].sum(axis=1) + prior * overall_d
        rate_ds[:, s] = total_d / (exposure[s::season].sum() + prior)
    return exposure_w * rate_ds[:, np.arange(exposure_w.size) % season]


def _log_ratios(count_dw: np.ndarray, expected_dw: np.ndarray, starts: np.ndarray) -> np.ndarray:
    """Log of counts over expected counts, from each of the starts to the end."""
    since_d, due_d = (a[:, ::-1].cumsum(axis=1)[:, ::-1] for a in (count_dw, expected_dw))
    return np.log((since_d[:, starts] + HALF) / (due_d[:, starts] + HALF))


def _wander(count_dw: np.ndarray, expected_dw: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Variance and autocorrelation of the wandering factor in the weeks given, by moments.

    Weeks weigh by what they can tell of the variance, in a second round with that of the first.
    """
    rest_dw = count_dw / expected_dw - 1
    above_dw = rest_dw**2 - 1 / expected_dw
    next_dw = rest_dw[:, 1:] * rest_dw[:, :-1]
    variance_d = np.zeros(len(count_dw))
    for _ in range(2):
        weight_dw = 1 / (1 / expected_dw + np.maximum(variance_d, 0.0)[:, None])
        variance_d = (weight_dw**2 * above_dw).sum(axis=1) / (weight_dw**2).sum(axis=1)
    pair_dw = weight_dw[:, 1:] * weight_dw[:, :-1]
    covariance_d = (pair_dw * next_dw).sum(axis=1) / pair_dw.sum(axis=1)
    like_d = covariance_d / np.maximum(variance_d, LEAST_VARIANCE)
    return np.maximum(variance_d, 0.0), np.clip(like_d, -MOST_LIKE, MOST_LIKE)


def _series(
    expected_w: np.ndarray,
    variance_d: np.ndarray,
    like_d: np.ndarray,
    random: np.random.Generator,
) -> np.ndarray:
    """Counts [draws, weeks]: the factor is the exponential of an autoregression of order one."""
    sd_d = np.sqrt(np.log1p(variance_d))
    noise_wd = random.standard_normal((expected_w.size, variance_d.size))
    for w in range(1, expected_w.size):
        noise_wd[w] = like_d * noise_wd[w - 1] + np.sqrt(1 - like_d**2) * noise_wd[w]
    return random.poisson(expected_w * np.exp(sd_d * noise_wd - sd_d**2 / 2).T)


def _draw(
    count_w: np.ndarray,
    expected_w: np.ndarray,
    exposure_w: np.ndarray,
    season: int,
    n_before: int,
    random: np.random.Generator,
    n_draws: int,
) -> np.ndarray:
    """Series without a change, as variable and as like the week before as the weeks before.

    Estimates are put right by their own bias in series drawn from them, and every series is drawn
    from estimates that miss as those of the drawn series did.
    """
    variance, like = (
        float(a[0]) for a in _wander(count_w[None, :n_before], expected_w[None, :n_before])
    )
    flat_d = np.full(PILOT, 1.0)
    pilot_dw = _series(expected_w, variance * flat_d, max(like, 0.0) * flat_d, random)
    again_dw = _expected(pilot_dw, exposure_w, season, n_before)
    variance_d, like_d = _wander(pilot_dw[:, :n_before], again_dw[:, :n_before])
    variance = max(2 * variance - float(variance_d.mean()), variance)
    like = max(2 * like - float(like_d.mean()), like)
    missed = random.integers(0, PILOT, n_draws)
    variance_d = np.maximum(variance + (variance_d - variance_d.mean())[missed], 0.0)
    like_d = np.clip(like + (like_d - like_d.mean())[missed], 0.0, MOST_LIKE)
    return _series(expected_w, variance_d, like_d, random)
