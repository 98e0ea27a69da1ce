"""From the panel to its earlier and later part; only the hunt holds both."""

from __future__ import annotations

from dataclasses import dataclass

from miner.panel import Panel


@dataclass(frozen=True)
class Segment:
    """A panel with the sessions ``first .. last`` that may be judged.

    A trigger counts when it and its whole horizon lie inside. The panel holds no alert and no
    event after ``last``; alerts before ``first`` are there to be looked back at.
    """

    panel: Panel
    first: int
    last: int


class DiscoverySlice(Segment):
    """The earlier part: nothing in it is later than its last session."""


class HoldoutSlice(Segment):
    """The later part, for judging rules that are already chosen."""


def discovery_slice(panel: Panel, last: int) -> DiscoverySlice:
    """Sessions ``0 .. last``, with everything later cut away."""
    return DiscoverySlice(panel.until(last + 1), 0, last)


def holdout_slice(panel: Panel, first: int, last: int) -> HoldoutSlice:
    """Sessions ``first .. last`` of the panel."""
    return HoldoutSlice(panel.until(last + 1), first, last)
