"""Bytes that are no UTF-8, marks before the text, and NULs."""

from __future__ import annotations

from collections.abc import Callable

from .case import Group, answer, unreadable
from .folder import Folder, csv_text
from .plain import ALERTS

GROUP = Group("Encodings")
add = GROUP.add
PLAIN = csv_text(ALERTS)
ACCENTED = csv_text([(entity.replace("firm03", "Société"), *rest) for entity, *rest in ALERTS])


def encoded(encoding: str, text: str = PLAIN) -> Callable[[Folder], None]:
    """Write the alerts in an encoding."""
    return lambda folder: folder.text("alerts.csv", text, encoding)


def accented_twin(folder: Folder) -> None:
    folder.text("alerts.csv", ACCENTED.replace("Société", "zfirm"))


add("a byte order mark", encoded("utf-8-sig"), answer())
add(
    "a byte order mark in the settings",
    lambda f: f.text("study.toml", f.read("study.toml"), "utf-8-sig"),
    answer(),
)
add(
    "CRLF in the settings",
    lambda f: f.text("study.toml", f.read("study.toml").replace("\n", "\r\n")),
    answer(),
)
add("accented names in UTF-8", encoded("utf-8", ACCENTED), answer(entities=13, twin=accented_twin))
add(
    "accented names in Latin-1",
    encoded("latin-1", ACCENTED),
    "`alerts.csv`: `file` must be UTF-8 text; got other bytes in line 15. Save it as UTF-8.",
)
add(
    "UTF-16",
    encoded("utf-16"),
    "`alerts.csv`: `file` must be UTF-8 text; got UTF-16 or UTF-32 text. Save it as UTF-8.",
)
add(
    "UTF-16 without a mark",
    encoded("utf-16-le"),
    "`alerts.csv`: `file` must be text; got NUL characters in the header. Write the file again "
    "as UTF-8 text.",
)
add(
    "UTF-32",
    encoded("utf-32"),
    "`alerts.csv`: `file` must be UTF-8 text; got UTF-16 or UTF-32 text. Save it as UTF-8.",
)
add(
    "settings in Latin-1",
    lambda f: (
        f.raw("study", 'name = "Société"'),
        f.text("study.toml", f.read("study.toml"), "latin-1"),
    ),
    "`{folder}/study.toml`: `file` must be UTF-8 text; got other bytes. Save it as UTF-8.",
)
add(
    "settings in UTF-16",
    lambda f: f.text("study.toml", f.read("study.toml"), "utf-16"),
    "`{folder}/study.toml`: `file` must be UTF-8 text; got other bytes. Save it as UTF-8.",
)
add(
    "a NUL in the header",
    lambda f: f.text("alerts.csv", PLAIN.replace("type", "ty\0pe", 1)),
    "`alerts.csv`: `file` must be text; got NUL characters in the header. Write the file again "
    "as UTF-8 text.",
)
add(
    "a NUL in an entity",
    lambda f: f.text("alerts.csv", PLAIN.replace("firm00", "fi\0rm", 1)),
    unreadable('alerts.csv, row 1, column entity: "fi\\x00rm" holds a NUL character (line 2)'),
)
add(
    "a NUL in a time",
    lambda f: f.text("alerts.csv", PLAIN.replace("10:00:00", "10:00:00\0", 1)),
    unreadable(
        'alerts.csv, row 1, column time: "2021-01-01 10:00:00\\x00" is no time: it holds a NUL '
        "character (line 2)"
    ),
)
add(
    "a tail of NULs, as a crash leaves it",
    lambda f: f.bytes("alerts.csv", PLAIN.encode() + b"\0" * 4096),
    "`alerts.csv`: `file` must have as many fields in every row as in the header; got one other "
    "row. The file holds NULs: was it cut short while written? Put fields that hold a comma in "
    "double quotes. Rows count from 1 below the header.\n"
    "  row 431 (line 432): 1 instead of 3: '...",
)
add(
    "only NULs",
    lambda f: f.bytes("alerts.csv", b"\0" * 4096),
    "`alerts.csv`: `file` must be text; got NUL characters in the header. Write the file again "
    "as UTF-8 text.",
)
add(
    "random bytes",
    lambda f: f.bytes("alerts.csv", bytes((k * k * 7 + 13) % 251 for k in range(999))),
    "`alerts.csv`: `file` must be UTF-8 text; got other bytes in line 1. Save it as UTF-8.",
)
add(
    "half of a character at the end",
    lambda f: f.bytes("alerts.csv", PLAIN.encode() + "firm03,2021-01-09,é".encode()[:-1]),
    "`alerts.csv`: `file` must be UTF-8 text; got other bytes in line 432. Save it as UTF-8.",
)
