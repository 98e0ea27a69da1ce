"""Hands on weekly counts of an alert type without a change, or with one. Imports no package."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Series:
    """Poisson counts around ``mean`` x season x a factor of lognormal noise.

    ``season``: peak of a quarterly pattern over its mean, less 1; ``yearly``: amplitude of a yearly
    wave; ``noise``: squared coefficient of variation of the factor; ``like``: its autocorrelation.
    """

    mean: float = 20.0
    season: float = 0.0
    yearly: float = 0.0
    noise: float = 0.0
    like: float = 0.0


SERIES = {
    "constant, 2 a week": Series(2.0),
    "constant, 20 a week": Series(),
    "constant, 200 a week": Series(200.0),
    "quarterly season": Series(season=2.0),
    "overdispersed": Series(noise=0.1),
    "autocorrelated .5": Series(noise=0.1, like=0.5),
    "autocorrelated .8": Series(noise=0.1, like=0.8),
    "season, overdispersed, autocorrelated .5": Series(season=2.0, noise=0.1, like=0.5),
    "yearly wave of 20 %": Series(yearly=0.2),
}


def draw(
    random: np.random.Generator, kind: Series, n: int, n_weeks: int, ratio: float, since: int
) -> np.ndarray:
    """Counts int64 [n, weeks]; from week ``since`` on, ``ratio`` times as many are due."""
    week = np.arange(n_weeks)
    in_season = np.where(np.isin(week % 13, (3, 4, 5)), 1 + kind.season, 1.0)
    mean_w = kind.mean * in_season / in_season[:13].mean()
    phase = random.random((n, 1))
    mean_nw = mean_w * (1 + kind.yearly * np.sin(2 * np.pi * (week / 52 + phase)))
    noise = random.standard_normal((n, n_weeks))
    for w in range(1, n_weeks):
        noise[:, w] = kind.like * noise[:, w - 1] + np.sqrt(1 - kind.like**2) * noise[:, w]
    sd = np.sqrt(np.log1p(kind.noise))
    factor = np.exp(sd * noise - sd**2 / 2)
    return random.poisson(mean_nw * factor * np.where(week >= since, ratio, 1.0))
