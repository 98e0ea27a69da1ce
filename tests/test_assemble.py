"""From tables to the panel: price moves beside logged events, and what is refused."""

import numpy as np
import pytest

from miner import hunt, study_from_dict
from miner.assemble import assemble
from miner.errors import SettingsError

DATES = np.arange("2021-01-01", "2022-06-01", dtype="datetime64[D]")


@pytest.fixture
def tables(tmp_path):
    """Three names with a price each session, alerts now and then, and one kind of event."""
    rng = np.random.default_rng(5)
    prices, alerts = ["entity,date,close"], ["entity,time,type"]
    for name in ("alef", "bet", "gimel"):
        close = 100 * np.exp(np.cumsum(rng.standard_t(4, DATES.size) * 0.01))
        prices += [f"{name},{day},{p:.4f}" for day, p in zip(DATES, close, strict=True)]
        alerts += [
            f"{name},{day}T12:00:00,{kind}" for kind in ("one", "two")
            for day in rng.choice(DATES, 90, replace=False)
        ]  # fmt: skip
    events = ["entity,time,type", *(f"bet,{day}T09:00:00,upset" for day in DATES[20::40])]
    for name, lines in (("prices", prices), ("alerts", alerts), ("events", events)):
        (tmp_path / f"{name}.csv").write_text("\n".join(lines) + "\n")
    return tmp_path


def study_of(folder, **sections):
    settings = {
        "study": {"name": "moves"},
        "alerts": {"source": "alerts.csv"},
        "events": {"source": "events.csv"},
        "prices": {"source": "prices.csv"},
        "sessions": {"calendar": "daily"},
        "testing": {"permutations": 0, "placebo": 0},
        "holdout": {"folds": 0},
    }
    return study_from_dict(settings | sections, folder)


def test_moves_are_targets_beside_the_logged_events(tables):
    inputs = assemble(study_of(tables))
    assert inputs.targets == ("move down", "move up", "upset")
    entity, session = inputs.panel.events["move up"]
    assert entity.size > 10
    assert inputs.counts["prices"]["rows"] == 3 * DATES.size
    assert any(path.endswith("prices.csv") for path in inputs.fingerprints)
    # a panel cut at a session holds only the moves that were over by then
    known = inputs.panel.known["move up"]
    stop = int(session[np.argmax(known - session)]) + 2  # the longest has begun and is not over
    cut_entity, _ = inputs.panel.until(stop).events["move up"]
    assert cut_entity.size == np.sum((session < stop) & (known < stop)) < np.sum(session < stop)
    only = assemble(study_of(tables, prices={"source": "prices.csv", "moves": "off"}))
    assert only.targets == ("upset",)


def test_a_hunt_for_moves_writes_them(tables, tmp_path):
    result = hunt(study_of(tables), tmp_path / "out" / "run")
    assert result.record["moves"]["move up"]["events"] > 10
    assert set(result.candidates["target"]) <= {"move down", "move up", "upset"}
    text = (tmp_path / "out" / "run" / "moves.csv").read_text()
    assert text.startswith("entity,target,start,end,known,sessions,size")


def test_events_may_not_be_named_as_the_moves_are(tables):
    log = tables / "events.csv"
    log.write_text(log.read_text().replace("upset", "move up"))
    with pytest.raises(SettingsError, match="must not be types of the event log too"):
        assemble(study_of(tables))


def test_a_misspelt_target_is_told_the_nearest(tables):
    study = study_of(tables, events={"source": "events.csv", "targets": ["upsett"]})
    with pytest.raises(SettingsError, match='Did you mean "upset"'):
        assemble(study)
