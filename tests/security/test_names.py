"""Names from inputs are names: no path, no markup, no formula."""

from __future__ import annotations

import csv
import io
import tempfile
from pathlib import Path

import openpyxl
import pytest

from miner import hunt
from miner.errors import OutputError
from miner.run_folder import check_free
from tests.faults.studies import small_study

EVIL = (
    "../../escaped",
    f"{tempfile.gettempdir()}/escaped",
    '<script>alert("x")</script>',
    '=HYPERLINK("http://x","y")',
    "</style><img src=x onerror=alert(1)>",
)


@pytest.fixture(scope="module")
def run_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run on tables whose types, target, sectors and entities are such names."""
    import pandas as pd

    folder = tmp_path_factory.mktemp("evil") / "deep" / "study"
    study = small_study(folder)
    alerts = pd.read_parquet(folder / "alerts.parquet")
    kinds = sorted(alerts["type"].unique())
    renamed = alerts.assign(type=alerts["type"].map(dict(zip(kinds, EVIL, strict=True))))
    renamed.to_csv(folder / "alerts.csv", index=False)
    events = pd.read_parquet(folder / "events.parquet")
    events.assign(type=EVIL[2]).to_csv(folder / "events.csv", index=False)
    text = study.read_text(encoding="utf-8").replace(".parquet", ".csv")
    text = text.replace('["upset"]', "['" + EVIL[2] + "']")
    text = text.replace('name = "world 1"', 'name = "../../../escaped <b>"')
    coverage = pd.read_csv(folder / "coverage.csv")
    for column in ("entity", "type"):
        if column in coverage:
            coverage[column] = coverage[column].replace(dict(zip(kinds, EVIL, strict=True)))
    coverage.to_csv(folder / "coverage.csv", index=False)
    study.write_text(text, encoding="utf-8")
    before = tree(folder.parents[1])
    result = hunt(study, folder.parent / "run")
    assert len(result.rules)
    added = tree(folder.parents[1]) - before
    assert {path.split("/")[1] for path in added} == {"run"}
    return folder.parent / "run"


def tree(folder: Path) -> set[str]:
    return {str(path.relative_to(folder)) for path in folder.rglob("*")}


def test_nothing_is_written_outside_the_output_folder(run_folder: Path):
    assert all("escaped" not in path.name for path in run_folder.rglob("*"))
    assert not Path(EVIL[1]).exists()
    assert len(list(run_folder.iterdir())) >= 9


def test_the_page_shows_markup_as_text(run_folder: Path):
    page = (run_folder / "report.html").read_text(encoding="utf-8")
    assert "escaped &lt;b&gt;" in page
    for markup in ("<script>alert(", "<img src=x", "</style><img", "escaped <b>"):
        assert markup not in page


def test_the_workbook_holds_no_formula(run_folder: Path):
    book = openpyxl.load_workbook(run_folder / "candidates.xlsx")
    cells = [cell for sheet in book for row in sheet for cell in row]
    assert any("=HYPERLINK" in str(cell.value) for cell in cells)
    assert all(cell.data_type != "f" and cell.hyperlink is None for cell in cells)


def test_csv_files_give_names_back_as_they_were(run_folder: Path):
    text = (run_folder / "candidates.csv").read_text(encoding="utf-8")
    combinations = {row["combination"] for row in csv.DictReader(io.StringIO(text))}
    assert set(EVIL) <= combinations


@pytest.mark.parametrize("name", ["a\0b", "x" * 300, "\ud800"])
def test_an_output_that_no_system_takes_is_told(name, tmp_path: Path):
    with pytest.raises(OutputError, match="must be"):
        check_free(tmp_path / name, False)
    assert list(tmp_path.iterdir()) == []
