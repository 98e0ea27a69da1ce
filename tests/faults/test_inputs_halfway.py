"""Inputs that break off, or change, while they are being read."""

from __future__ import annotations

import gzip
import os
from pathlib import Path

import pyarrow.parquet as pq
import pytest

from miner import InputError, hunt, load_study
from miner.reading import files
from tests.faults.studies import small_study


@pytest.fixture
def study(tmp_path: Path) -> Path:
    return small_study(tmp_path / "study")


def as_csv(study: Path) -> Path:
    """The alerts as a csv in the place of the parquet file."""
    import pandas as pd

    path = study.parent / "alerts.csv"
    pd.read_parquet(study.parent / "alerts.parquet").to_csv(path, index=False)
    point_to(study, path.name)
    return path


def point_to(study: Path, name: str) -> None:
    text = study.read_text(encoding="utf-8")
    study.write_text(text.replace('"alerts.parquet"', f'"{name}"'), encoding="utf-8")


def refusal(study: Path) -> str:
    with pytest.raises(InputError) as raised:
        hunt(load_study(study), study.parent / "run")
    assert not (study.parent / "run").exists()
    assert not [path for path in study.parent.iterdir() if path.name.startswith(".")]
    return str(raised.value)


def test_a_row_group_that_is_damaged(study: Path):
    path = study.parent / "alerts.parquet"
    table = pq.read_table(path)
    pq.write_table(table, path, row_group_size=table.num_rows // 4, compression="snappy")
    size = path.stat().st_size
    with path.open("r+b") as file:
        file.seek(size // 2)
        file.write(bytes(range(256)) * 4)
    assert "alerts.parquet" in refusal(study)


def test_a_parquet_file_that_breaks_off(study: Path):
    path = study.parent / "alerts.parquet"
    os.truncate(path, path.stat().st_size // 2)
    assert "cut short or damaged" in refusal(study)


def test_a_compressed_file_that_breaks_off(study: Path):
    path = as_csv(study)
    packed = gzip.compress(path.read_bytes())
    (study.parent / "alerts.csv.gz").write_bytes(packed[: len(packed) * 2 // 3])
    text = study.read_text(encoding="utf-8")
    study.write_text(text.replace('"alerts.csv"', '"alerts.csv.gz"'), encoding="utf-8")
    assert "alerts.csv.gz" in refusal(study)


def test_a_csv_that_breaks_off_in_the_middle_of_a_row(study: Path):
    path = as_csv(study)
    text = path.read_text(encoding="utf-8").rstrip("\n")
    path.write_text(text[: text.rindex(",")], encoding="utf-8")
    assert "alerts.csv" in refusal(study)


def test_a_pipe_is_refused_and_not_waited_for(study: Path):
    (study.parent / "alerts.parquet").unlink()
    os.mkfifo(study.parent / "alerts.parquet")
    assert "be a file that exists" in refusal(study)


@pytest.mark.parametrize("change", ["shrinks", "grows", "is replaced"])
def test_a_file_that_changes_while_it_is_read(change, study: Path, monkeypatch):
    path = as_csv(study)
    whole = path.read_bytes()
    read_csv = files._read_csv

    def meanwhile(place: Path, *rest: object):
        yield from read_csv(place, *rest)
        if place == path:
            if change == "shrinks":
                os.truncate(path, len(whole) // 2)
            elif change == "grows":
                path.write_bytes(whole + whole.splitlines(keepends=True)[-1])
            else:
                other = path.with_suffix(".new")
                other.write_bytes(whole)
                other.replace(path)

    monkeypatch.setattr(files, "_read_csv", meanwhile)
    assert "another program has written to" in refusal(study)


def test_rows_beyond_what_memory_holds_are_refused_while_reading(study: Path, monkeypatch):
    """A small file can unpack to any number of rows."""
    monkeypatch.setenv("MINER_MEMORY", "0.001")
    assert "rows` must fit into" in refusal(study)
