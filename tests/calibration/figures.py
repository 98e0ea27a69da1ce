"""Hands on the study's figures as SVG."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from matplotlib import pyplot as plt

from tests.calibration.summarise import Mean, Row

plt.switch_backend("Agg")
plt.rcParams.update({"svg.hashsalt": "calibration", "font.size": 9, "axes.spines.right": False})
plt.rcParams.update({"axes.spines.top": False})

SAVE = {"format": "svg", "metadata": {"Date": None}, "bbox_inches": "tight"}


def recovery(
    plants: Sequence[Row], lifts: Sequence[float], triggers: Sequence[int], path: Path
) -> None:
    """Share of planted combinations of two or three types that become rules."""
    fig, axes = plt.subplots(1, 2, figsize=(9, 3.4), sharey=True)
    for ax, outcome, title in (
        (axes[0], lambda p: p["rule"], "found as planted"),
        (axes[1], lambda p: p["rule"] or p["near"] > 0, "found, or a part or superset of it"),
    ):
        grid = np.full((len(lifts), len(triggers)), np.nan)
        for i, lift in enumerate(lifts):
            for j, n in enumerate(triggers):
                mine = [
                    outcome(p)
                    for p in plants
                    if p["size"] > 1 and p["lift"] == lift and p["planted"] == n
                ]
                if mine:
                    grid[i, j] = np.mean(mine)
        image = ax.imshow(grid, origin="lower", vmin=0, vmax=1, cmap="cividis", aspect="auto")
        for (i, j), share in np.ndenumerate(grid):
            if np.isfinite(share):
                ink = "black" if share > 0.6 else "white"
                ax.text(j, i, f"{share:.2f}", ha="center", va="center", color=ink, fontsize=8)
        ax.set_xticks(range(len(triggers)), [str(n) for n in triggers])
        ax.set_yticks(range(len(lifts)), [f"{lift:g} x" for lift in lifts])
        ax.set_xlabel("planted triggers (70 % of them in discovery)")
        ax.set_title(title)
    axes[0].set_ylabel("precision of what is planted,\ntimes the base rate")
    fig.colorbar(image, ax=axes, label="share of plants")
    fig.savefig(path, **SAVE)
    plt.close(fig)


def levels(shares: Mapping[str, Mapping[str, Mean]], nominal: float, path: Path) -> None:
    """Share of null combinations at or below ``nominal``, by world and null."""
    worlds = list(shares)
    fig, ax = plt.subplots(figsize=(8, 0.27 * len(worlds) + 1.0))
    place = np.arange(len(worlds))[::-1]
    marks = {"margins": "o", "exchanges": "s", "own timing": "^", "plain shuffle": "x"}
    for null, mark in marks.items():
        x = [shares[world][null].value for world in worlds]
        ax.plot(np.maximum(x, 5e-4), place, mark, label=null, ms=5, alpha=0.85)
    ax.axvline(nominal, color="grey", lw=0.8)
    ax.axvline(1.2 * nominal, color="grey", lw=0.8, ls=":")
    ax.set_xscale("log")
    ax.set_xlim(4e-4, 1.3)
    ax.set_yticks(place, worlds)
    ax.set_xlabel(f"share of combinations with p at most {nominal:g}, nothing planted (log scale)")
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, 1.12), ncols=4, frameon=False)
    fig.savefig(path, **SAVE)
    plt.close(fig)
