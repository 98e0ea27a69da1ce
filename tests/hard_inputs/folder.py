"""A study's folder on disk: what cases write with."""

from __future__ import annotations

import csv
import gzip
import io
from collections.abc import Iterable, Sequence
from copy import deepcopy
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from .plain import ALERTS, EVENTS, HEADER, SETTINGS


def csv_text(rows: Iterable[Sequence[str]], header: Sequence[str] = HEADER, end: str = "\n") -> str:
    """Rows under a header, quoted where they must be."""
    out = io.StringIO()
    csv.writer(out, lineterminator=end).writerows([header, *rows])
    return out.getvalue()


def toml_value(value: object) -> str:
    """A value as TOML writes it."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return '"' + value.replace("\\", "\\\\").replace('"', '\\"') + '"'
    if isinstance(value, list):
        return "[" + ", ".join(toml_value(item) for item in value) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {toml_value(item)}" for key, item in value.items()) + "}"
    return str(value)


class Folder:
    """The plain study at first; a case then changes what it is about."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.settings: dict[str, dict[str, Any]] = deepcopy(SETTINGS)  # type: ignore[arg-type]
        path.mkdir(parents=True)
        self.rows("alerts.csv", ALERTS)
        self.rows("events.csv", EVENTS)
        self.set()

    def text(self, name: str, content: str, encoding: str = "utf-8") -> None:
        """Write a file of text."""
        self.bytes(name, content.encode(encoding))

    def bytes(self, name: str, content: bytes) -> None:
        """Write a file."""
        (self.path / name).parent.mkdir(parents=True, exist_ok=True)
        (self.path / name).write_bytes(content)

    def rows(
        self, name: str, rows: Iterable[Sequence[str]], header: Sequence[str] = HEADER
    ) -> None:
        """Write a csv."""
        self.text(name, csv_text(rows, header))

    def gzip(self, name: str, content: bytes, keep: float = 1.0) -> None:
        """Write a packed file, or the first part of one."""
        packed = gzip.compress(content, mtime=0)
        self.bytes(name, packed[: int(keep * len(packed))])

    def parquet(self, name: str, **columns: Any) -> None:
        """Write a parquet file."""
        (self.path / name).parent.mkdir(parents=True, exist_ok=True)
        pq.write_table(pa.table(columns), self.path / name)

    def drop(self, name: str) -> None:
        """Delete a file."""
        (self.path / name).unlink()

    def read(self, name: str) -> str:
        """A file's text."""
        return (self.path / name).read_text(encoding="utf-8")

    def set(self, section: str | None = None, /, **keys: Any) -> None:
        """Change keys of a section, None leaving one out, and write the settings."""
        if section is not None:
            self.settings.setdefault(section, {}).update(keys)
        lines: list[str] = []
        for name, section_keys in self.settings.items():
            lines.append(f"[{name}]")
            lines += [f"{k} = {toml_value(v)}" for k, v in section_keys.items() if v is not None]
        self.text("study.toml", "\n".join(lines) + "\n")

    def raw(self, section: str, line: str) -> None:
        """Write the settings with one more line below a heading."""
        heading = f"[{section}]\n"
        text = self.read("study.toml")
        if heading not in text:
            text += heading
        self.text("study.toml", text.replace(heading, f"{heading}{line}\n"))
