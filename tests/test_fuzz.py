"""Fuzzing in its short form: studies against the twin, odd settings and logs, broken bytes."""

from collections import Counter

import pytest

from miner.columns import HAZARD
from tests.fuzz import readers, running, studies, twin
from tests.fuzz.edge_worlds import edge_world


def test_a_few_edge_studies_are_the_twins():
    seen, wrong = twin.run(range(1, 12), lambda text: None)
    assert wrong == {}
    assert seen["studies"] == 11
    assert min(seen["on holidays"], seen[HAZARD], seen["with coverage"], seen["confirmed"]) > 0


def test_the_comparison_sees_a_difference(monkeypatch):
    right = twin.mine

    def wrong(*arguments):
        rows = right(*arguments)
        rows[-1]["p_value"] *= 1 + 1e-8
        return rows

    monkeypatch.setattr(twin, "mine", wrong)
    assert any("p_value" in text for text in twin.compare(1, Counter()))


def test_edge_worlds_are_at_the_edges():
    worlds = [edge_world(seed) for seed in range(200)]
    needed = [w.lookback + w.horizon for w in worlds]
    assert any(w.discovery_end + 1 == n for w, n in zip(worlds, needed, strict=True))
    assert any(w.n_sessions - w.holdout_start == n for w, n in zip(worlds, needed, strict=True))
    assert any(w.rest < w.horizon for w in worlds)
    assert any(len(w.known) == 1 for w in worlds)
    assert all(any(t == w.n_sessions - 1 for _, _, t in w.events) for w in worlds)


def test_every_reader_takes_a_good_input_and_refuses_a_broken_one():
    take = readers.reader()
    for raw in readers.seeds():
        assert take(raw), raw[:60]
        assert not take(raw[:1] + b"\xff\xfe\x00" + raw[4:40]), raw[:60]


def test_text_of_a_damaged_parquet_file_is_shown_as_it_can_be():
    """Found by fuzzing: bytes that are no UTF-8 in a column of times."""
    import io

    import pyarrow as pa
    import pyarrow.parquet as pq

    time = pa.array([b"2021-01-01 12:00:\xff0"], pa.binary()).view(pa.string())
    names = pa.array(["n0"])
    out = io.BytesIO()
    pq.write_table(pa.table({"entity": names, "time": time, "type": names}), out)
    assert readers.reader()(b"\x02" + out.getvalue()) is False


def test_a_scan_of_sessions_on_which_nobody_had_an_alert_is_empty(tmp_path):
    """Found by fuzzing: the log goes back further than what the scan reads."""
    rows = b"entity,time,type\na,2021-01-03 12:00:00,one\nb,2021-01-03 12:00:00,two\n"
    book = b'format = 1\n[sessions]\ncalendar = "daily"\nstart = "2021-01-01"\nclose = "16:00"\n'
    book += b'timezone = "UTC"\n[[rule]]\ntarget = "upset"\ncombination = ["one"]\n'
    book += b"lookback = 1\nhorizon = 1\nrest = 0\n"
    studies.write(tmp_path, {"alerts.csv": rows, "book.toml": book})
    arguments = ["scan", str(tmp_path / "book.toml"), "--alerts", str(tmp_path / "alerts.csv")]
    assert running.run([*arguments, "--as-of", "2021-03-10"], tmp_path) == 0


def test_a_run_that_breaks_is_a_fault(tmp_path, monkeypatch):
    def breaks(*_, **__):
        raise ZeroDivisionError("by nought")

    monkeypatch.setattr("miner.checking.assemble", breaks)
    studies.write(tmp_path, {"alerts.csv": b"", "events.csv": b""})
    text = '[alerts]\nsource = "alerts.csv"\n[events]\nsource = "events.csv"\n'
    (tmp_path / "study.toml").write_text(text)
    with pytest.raises(running.FaultError, match="ZeroDivisionError"):
        running.run(["check", str(tmp_path / "study.toml")], tmp_path)
    assert running.run(["hunt", str(tmp_path / "study.toml")], tmp_path) == 2


@pytest.mark.slow
def test_odd_settings_and_logs_end_in_a_result_or_one_message():
    running.warm_up()
    seen: Counter[str] = Counter()
    studies.trial(120, 1, seen)()
    assert min(seen["hunt, exit 0"], seen["hunt, exit 2"], seen["scan, exit 0"]) > 0


@pytest.mark.slow
def test_broken_bytes_are_read_or_refused():
    seen = readers.blind(15, 1)
    assert min(seen["read"], seen["refused"]) > 20


@pytest.mark.slow
def test_many_edge_studies_are_the_twins():
    seen, wrong = twin.run(range(3000, 3060), lambda text: None)
    assert wrong == {}
    assert seen["studies"] == 60
