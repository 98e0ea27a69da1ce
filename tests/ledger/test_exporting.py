"""Exports: exact as JSON, harmless as csv, whole or not there."""

import csv
import io
import json

import pytest

from miner.errors import OutputError
from miner.ledger import Entry, chain, open_ledger
from miner.ledger.exporting import export_lines, write_export

EVIL = ['=cmd|"/c calc"!A1', "+1", "-1+1", "@SUM(A1)", "\t=1", "\r=1", "\n=1", "＝1"]
HARD = 'é " , ; \n\r\n \x00 \u2028 </script> 0.1'


@pytest.fixture
def entries(tmp_path, decision):
    with open_ledger(tmp_path / "x.db") as ledger:
        for text in EVIL:
            ledger.append([decision(text.strip() + "rule")], who=text, why=f"{text} why")
        ledger.append([decision("r", None, text=HARD, numbers=[0.1, 1e-300, -0.0, 2**70, None])],
                      who="Zoë", why=HARD.replace("\0", ""))  # fmt: skip
        yield list(ledger.entries())


def test_json_holds_every_field_exactly(entries):
    text = "".join(export_lines(entries, "json"))
    read = json.loads(text)
    assert read["format"] == 1
    assert [Entry(**fields) for fields in read["entries"]] == entries
    found = (chain.Stored(e["number"], Entry(**e)) for e in read["entries"])
    assert chain.verify(found).count == len(entries)


def test_csv_holds_every_field_and_no_formula(entries):
    text = "".join(export_lines(entries, "csv"))
    header, *rows = csv.reader(io.StringIO(text, newline=""))
    assert header == ["number", "stamp", "kind", "rule", "quarter", "who", "why", "body",
                      "previous", "hash"]  # fmt: skip
    assert len(rows) == len(entries)
    for row, entry in zip(rows, entries, strict=True):
        assert not any(cell.lstrip().startswith(("=", "+", "-", "@", "＝")) for cell in row)
        fields = {**vars(entry), "body": chain.canonical(entry.body)}
        expected = ["" if fields[name] is None else str(fields[name]) for name in header]
        assert [cell.removeprefix("'") for cell in row] == expected
    assert any(cell.startswith("'") for cell in rows[0])
    assert not any(cell.startswith("'") for cell in rows[-1])


@pytest.mark.parametrize("form", ["csv", "json"])
def test_a_file_appears_whole_and_is_not_written_over(form, entries, tmp_path):
    path = tmp_path / "out" / f"ledger.{form}"
    write_export(entries, form, path)
    content = path.read_bytes()
    assert content.decode() == "".join(export_lines(entries, form))
    with pytest.raises(OutputError, match="--replace"):
        write_export([], form, path)
    assert path.read_bytes() == content

    def broken():
        yield entries[0]
        raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        write_export(broken(), form, path, replace=True)
    assert path.read_bytes() == content
    assert [p.name for p in path.parent.iterdir()] == [path.name]
    write_export(entries[:1], form, path, replace=True)
    assert path.read_bytes() != content


def test_an_empty_ledger_can_be_exported():
    assert json.loads("".join(export_lines([], "json"))) == {"format": 1, "entries": []}
    assert len("".join(export_lines([], "csv")).splitlines()) == 1
