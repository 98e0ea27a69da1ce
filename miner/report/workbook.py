"""The candidates as a spreadsheet in which nothing can run."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

import xlsxwriter

from miner.columns import CANDIDATE_COLUMNS
from miner.report.read_run import Row, Run

LONGEST = 32_767  # characters in a cell
WIDEST = 60
SHARES = frozenset(name for name in CANDIDATE_COLUMNS if "precision" in name) | {
    "base_rate",
    "holdout_low",
    "holdout_high",
    "holdout_base_rate",
}


def write_workbook(run: Run, path: Path) -> None:
    """Write the foremost candidates and the rules as two sheets; every text stays a text."""
    options = {
        "strings_to_formulas": False,
        "strings_to_urls": False,
        "strings_to_numbers": False,
        "in_memory": True,
    }
    with xlsxwriter.Workbook(str(path), options) as book:
        # the same run gives the same bytes, whenever it is rendered
        book.set_properties({"created": datetime(2000, 1, 1), "title": run.record["study"][:255]})
        formats = {
            "head": book.add_format({"bold": True, "bottom": 1}),
            "share": book.add_format({"num_format": "0.0%"}),
            "number": book.add_format({"num_format": "0.000"}),
            "p": book.add_format({"num_format": "0.0E+00"}),
        }
        for title, rows in (("candidates", run.foremost), ("rules", run.rules)):
            _write_sheet(book.add_worksheet(title), rows, formats)


def _write_sheet(sheet: Any, rows: list[Row], formats: dict[str, Any]) -> None:
    columns = list(CANDIDATE_COLUMNS)
    sheet.freeze_panes(1, 0)
    for j, column in enumerate(columns):
        sheet.write_string(0, j, column, formats["head"])
        kind = CANDIDATE_COLUMNS[column]
        style = None
        if kind == "number":
            style = formats[
                "share"
                if column in SHARES
                else "p"
                if "_value" in column or column == "p_own_timing"
                else "number"
            ]
        width = max([len(column), *(len(str(row[column])) for row in rows if kind == "text")])
        sheet.set_column(j, j, min(WIDEST, width + 2), style)
        for i, row in enumerate(rows, start=1):
            value = row[column]
            if kind == "text":
                if value:
                    sheet.write_string(i, j, value[:LONGEST])
            elif value is not None:
                sheet.write_number(i, j, value)
    if rows:
        sheet.autofilter(0, 0, len(rows), len(columns) - 1)
