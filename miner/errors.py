"""Every error the tool raises on purpose, as one tree, and the one shape their messages have.

    MinerError
    └── InputError             the user's input or settings are wrong (exit status 2)
        ├── SettingsError      study.toml, or the dictionary given in its place
        ├── TableError         a table: alerts, events, groups, coverage, prices
        ├── CalendarError      the sessions
        ├── OutputError        the place results are written to
        └── LedgerError        the ledger, or what is to be entered in it

Anything else that reaches the command line is a fault of the tool (exit status 1).
"""

from __future__ import annotations


class MinerError(Exception):
    """Root of every error raised on purpose."""


class InputError(MinerError):
    """The user's input or settings are wrong; the message says how to put it right."""


class SettingsError(InputError):
    """The settings are wrong. One line per problem, all problems at once."""


class TableError(InputError):
    """A table cannot be read, lacks a column, or holds rows that cannot be used."""


class CalendarError(InputError):
    """The session calendar cannot be built."""


class OutputError(InputError):
    """Results cannot be written where they were asked to go."""


class LedgerError(InputError):
    """The ledger cannot be opened, read or written, or an entry is not what its kind must be."""


def explain(where: str, what: str, rule: str, found: str, advice: str = "") -> str:
    """Return the message every error uses: where, which rule, what was found, what to try.

    `rule` completes "must ...", `found` completes "got ...", `advice` is whole sentences or "".
    The message is one line, whatever stands in the names and values it tells of.
    """
    message = f"`{where}`: `{what}` must {rule}; got {found}."
    return printable(f"{message} {advice}" if advice else message)


def printable(text: str) -> str:
    """Return a text from a file with everything that could steer a terminal spelled out."""
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)
