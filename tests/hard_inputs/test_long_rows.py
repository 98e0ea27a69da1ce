"""Rows longer than a block of reading: read again with a larger one, no row lost or doubled."""

from __future__ import annotations

from pathlib import Path

import pytest

from miner.errors import TableError
from miner.read_tables import Log, read_log
from miner.reading import files
from miner.settings import load_study

from .folder import Folder
from .plain import ALERTS, HEADER


def read(path: Path, notes: dict[int, str]) -> Log:
    """The plain alerts with a note in some rows."""
    folder = Folder(path)
    rows = [(*row, notes.get(k, "")) for k, row in enumerate(ALERTS)]
    folder.rows("alerts.csv", rows, (*HEADER, "note"))
    return read_log(load_study(folder.path / "study.toml"), "alerts")


@pytest.mark.parametrize("at", [0, 1, 200, 428, 429])
@pytest.mark.parametrize("note", ["x" * 5000, "line\n" * 1000, "x" * 100_000])
def test_a_long_row_anywhere_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at: int, note: str
) -> None:
    plain = read(tmp_path / "plain", {})
    monkeypatch.setattr(files, "_CSV_BLOCK_BYTES", 1024)
    found = read(tmp_path / "long", {at: note, 300: "y" * 3000})
    assert len(found) == len(ALERTS)
    assert found.entity_names == plain.entity_names
    for name in ("entity_code", "type_code", "stamp_us"):
        assert (getattr(found, name) == getattr(plain, name)).all()


def test_a_row_beyond_all_measure_is_one_message(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(files, "_CSV_BLOCK_BYTES", 1024)
    monkeypatch.setattr(files, "_LARGEST_BLOCK_BYTES", 1 << 20)
    with pytest.raises(TableError) as caught:
        read(tmp_path / "long", {200: "x" * (3 << 20)})
    message = str(caught.value)
    assert message.startswith("`alerts.csv`: `file` must have no row longer than 1 MB; got one ")
    assert message.endswith("A double quote may never be closed: look at that row.")
    after = int(message.partition("after row ")[2].partition(".")[0])
    assert 0 < after <= 200
