"""What several tests share: steady property tests, and an invented world as the hunt sees it."""

from collections.abc import Callable

import pytest
from browser_pages import chromium, opened
from hypothesis import settings
from worlds import make_world, write_world

from miner import load_study
from miner.assemble import assemble
from miner.search import cases_of
from miner.time_split import discovery_slice
from miner.units import Case

__all__ = ["case_of", "chromium", "opened"]

settings.register_profile("steady", derandomize=True, deadline=None, max_examples=40)
settings.load_profile("steady")


@pytest.fixture
def case_of(tmp_path_factory: pytest.TempPathFactory) -> Callable[..., Case]:
    """Makes the one case of an invented world, its family included, over the whole calendar."""

    def make(seed: int, max_size: int = 3, min_triggers: int = 20, **options: object) -> Case:
        world = make_world(seed, **options)  # type: ignore[arg-type]
        mining = {"max_size": max_size, "min_triggers": min_triggers}
        folder = tmp_path_factory.mktemp("world")
        study = load_study(write_world(world, folder, settings={"mining": mining}))
        inputs = assemble(study)
        whole = discovery_slice(inputs.panel, inputs.panel.n_sessions - 1)
        (case,) = cases_of(whole, inputs.targets, study)
        return case

    return make
