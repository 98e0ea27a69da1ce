"""Hands on the plot of growth as SVG."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from matplotlib import pyplot as plt

from tests.benchmarks.growth import WHOLE, Point

plt.switch_backend("Agg")
plt.rcParams.update({"svg.hashsalt": "benchmarks", "font.size": 9, "axes.spines.right": False})
plt.rcParams.update({"axes.spines.top": False})

MARKS = "os^xDv"


def plot(points: Mapping[str, Sequence[Point]], path: Path) -> None:
    """Time and peak memory against each count, doubled from step to step; both axes log."""
    fig, axes = plt.subplots(1, 2, figsize=(9, 3.6))
    for ax, what, value in (
        (axes[0], "whole run, seconds", lambda p: p.seconds[WHOLE]),
        (axes[1], "peak memory, GB", lambda p: p.peak / 1e9),
    ):
        for (name, mine), mark in zip(points.items(), MARKS, strict=False):
            label = "max_size, 1 to 5" if name == "max_size" else name
            step = [2**n for n in range(len(mine))]
            ax.plot(step, [value(p) for p in mine], mark + "-", label=label, ms=4, lw=1)
        least = min(value(mine[0]) for mine in points.values())
        ax.plot([1, 16], [least, 16 * least], color="grey", lw=0.8, ls=":", label="in proportion")
        ax.set_xscale("log", base=2)
        ax.set_yscale("log")
        ax.set_xticks([1, 2, 4, 8, 16], ["1", "2", "4", "8", "16"])
        ax.set_xlabel("times the smallest size")
        ax.set_ylabel(what)
    axes[0].legend(frameon=False, fontsize=8)
    path.parent.mkdir(parents=True, exist_ok=True)
    fig.savefig(path, format="svg", metadata={"Date": None}, bbox_inches="tight")
    plt.close(fig)
