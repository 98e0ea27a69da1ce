"""Sizes of benchmark worlds, the presets, and studies of a size kept on disk."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import tempfile
from dataclasses import asdict, dataclass, replace
from pathlib import Path

import miner.demo.world_parts
from tests import worlds

SEED = 3
FEWEST_TRIGGERS = 10


@dataclass(frozen=True)
class Size:
    """A study's size; the defaults are the reference. ``alert_rate`` is per entity, session, type.

    Alerts and events share a season, market and sector shocks and busy names at half strength.
    """

    n_entities: int = 8000
    n_sessions: int = 1250
    n_types: int = 40
    alert_rate: float = 0.0085
    base_rate: float = 0.025
    max_size: int = 3
    min_triggers: int = 50
    permutations: int = 2000
    placebo: int = 20
    n_planted: int = 0

    def times(self, share: float) -> Size:
        """So many times the entities, with triggers to ask for in proportion (ten at least)."""
        return replace(
            self,
            n_entities=max(1, round(share * self.n_entities)),
            min_triggers=max(FEWEST_TRIGGERS, round(share * self.min_triggers)),
        )

    @property
    def words(self) -> str:
        """The size in a line."""
        return (
            f"{self.n_entities:,} entities x {self.n_sessions:,} sessions x {self.n_types} types, "
            f"combinations of up to {self.max_size} with {self.min_triggers} triggers or more, "
            f"{self.permutations:,} exchanges, {self.placebo} placebo worlds, "
            f"{self.n_planted or 'nothing'} planted"
        )


REFERENCE = Size()
PRESETS = {
    # with rules to find, so that a comparison of answers has something to compare
    "quick": replace(REFERENCE.times(1 / 30), n_planted=4),
    "reference": REFERENCE,
    "large": REFERENCE.times(4),
}


def cache_folder() -> Path:
    """Where worlds are kept between runs, one place a user."""
    return Path(tempfile.gettempdir()) / f"miner-benchmarks-{os.getuid()}"


def study_of(size: Size, cache: Path | None = None) -> Path:
    """Settings file of a study of the size, drawn now or kept from before.

    The folder is named after the size and the sources that draw it, and appears whole.
    """
    digest = hashlib.sha256(json.dumps(asdict(size)).encode())
    for module in (worlds, miner.demo.world_parts):
        digest.update(Path(module.__file__).read_bytes())
    folder = (cache or cache_folder()) / digest.hexdigest()[:16]
    if not folder.exists():
        folder.parent.mkdir(parents=True, exist_ok=True)
        aside = Path(tempfile.mkdtemp(dir=folder.parent))
        world = worlds.make_world(
            SEED,
            n_entities=size.n_entities,
            n_sessions=size.n_sessions,
            n_types=size.n_types,
            base_rate=size.base_rate,
            alerts_per_type=round(size.alert_rate * size.n_entities * size.n_sessions),
            season=0.5,
            market_shocks=0.5,
            sector_shocks=0.5,
            n_sectors=12,
            busy_names=0.5,
            planted=_plants(size),
        )
        settings = {
            "mining": {"max_size": size.max_size, "min_triggers": size.min_triggers},
            "testing": {"permutations": size.permutations, "placebo": size.placebo},
        }
        worlds.write_world(world, aside, settings=settings)
        try:
            aside.rename(folder)
        except OSError:  # someone else was quicker
            shutil.rmtree(aside)
    return folder / "study.toml"


def _plants(size: Size) -> list[worlds.Plant]:
    """Pairs and triples in turn, of types of their own, about one trigger for eight entities."""
    n_triggers = 50 + size.n_entities // 8
    return [
        worlds.Plant(tuple(range(3 * i, 3 * i + 2 + i % 2)), 0.4, n_triggers)
        for i in range(size.n_planted)
    ]
