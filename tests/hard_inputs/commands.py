"""The other commands, given what they cannot use, and outputs that may not be written."""

from __future__ import annotations

from .case import Group, Write
from .folder import Folder

GROUP = Group("Other commands")
SCAN = "scan {folder}/book.toml --alerts {folder}/alerts.csv"
TRADES = "trades {folder}/book.toml {study}"


def add(name: str, command: str, outcome: str, write: Write = lambda folder: None) -> None:
    GROUP.add(name, write, outcome, commands=(command,))


def book(text: str) -> Write:
    """A file where the rule book should be."""
    return lambda folder: folder.text("book.toml", text)


def other_json(folder: Folder) -> None:
    folder.text("run/run.json", '{"study": "x"}\n')


add(
    "hunt, output a file",
    "hunt {study} --output {folder}/alerts.csv",
    "`output`: `{folder}/alerts.csv` must not exist yet; got a file that does. Name another "
    "folder.",
)
add(
    "hunt, output a folder that is no run",
    "hunt {study} --output {folder}",
    "`output`: `{folder}` must not exist yet; got a folder that does. Name another folder.",
)
add(
    "hunt, replacing a folder that is no run",
    "hunt {study} --output {folder} --replace",
    "`output`: `{folder}` must be the folder of a run to be replaced; got something else. Name "
    "another folder.",
)
add(
    "report of a folder that is no run",
    "report {folder}",
    "`report`: `{folder}` must be the folder of a whole run of this version; got no run.json in "
    "it. Name the folder a hunt has written, or hunt again.",
)
add(
    "report of nothing",
    "report {folder}/nowhere",
    "`report`: `{folder}/nowhere` must be the folder of a whole run of this version; got no "
    "run.json in it. Name the folder a hunt has written, or hunt again.",
)
add(
    "report of a run.json that is none of ours",
    "report {folder}/run",
    "`report`: `{folder}/run` must be the folder of a whole run of this version; got no "
    "evidence.json in it. Name the folder a hunt has written, or hunt again.",
    other_json,
)
add(
    "rules of a folder that is no run",
    "rules {folder}",
    "`{folder}`: `folder` must be that of a run; got No such file or directory. Name what `miner "
    "hunt` wrote.",
)
add(
    "rules of a run.json that is none of ours",
    "rules {folder}/run",
    "`{folder}/run`: `folder` must be that of a run; got No such file or directory. Name what "
    "`miner hunt` wrote.",
    other_json,
)
add(
    "rules show, no book",
    "rules show {folder}/book.toml",
    "`{folder}/book.toml`: `file` must be a rule book; got No such file or directory. Check the "
    "path.",
)
add(
    "rules show, a folder",
    "rules show {folder}",
    "`{folder}`: `file` must be a rule book; got Is a directory. Check the path.",
)
add(
    "rules show, an empty book",
    "rules show {folder}/book.toml",
    "`{folder}/book.toml`: `file` must be a rule book; got an empty file. Name what `miner "
    "rules` wrote.",
    book(""),
)
add(
    "rules show, no TOML",
    "rules show {folder}/book.toml",
    "`{folder}/book.toml`: `file` must be valid TOML; got an error: ... (at line 1, column 6). "
    "Close the heading with a bracket: [name].",
    book("[rule\n"),
)
add(
    "rules show, settings in its place",
    "rules show {study}",
    "`{folder}/study.toml`: `file` must be a rule book; got a file with neither format nor "
    "rules. Name what `miner rules` wrote.",
)
add(
    "rules diff, one book missing",
    "rules diff {study} {folder}/book.toml",
    "`{folder}/study.toml`: `file` must be a rule book; got a file with neither format nor "
    "rules. Name what `miner rules` wrote.",
)
add(
    "scan, no book",
    SCAN,
    "`{folder}/book.toml`: `file` must be a rule book; got No such file or directory. Check the "
    "path.",
)
add(
    "scan, settings in place of a book",
    SCAN.replace("book", "study"),
    "`{folder}/study.toml`: `file` must be a rule book; got a file with neither format nor "
    "rules. Name what `miner rules` wrote.",
)
add(
    "trades, no book",
    TRADES,
    "`{folder}/book.toml`: `file` must be a rule book; got No such file or directory. Check the "
    "path.",
)
add(
    "check, nothing there",
    "check {folder}/nowhere.toml",
    "`{folder}/nowhere.toml`: `file` must be a settings file; got No such file or directory. "
    "Check the path; the folder it starts from is ....",
)
