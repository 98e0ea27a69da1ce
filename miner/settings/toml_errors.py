"""What to try with a settings file that is no TOML, from the parser's message and the line."""

from __future__ import annotations

import re

TOO_DEEP = "lists or tables inside one another too deep to read"
_QUOTES = "‘’“”„«»"


def toml_advice(text: str, message: str) -> str:
    """Return whole sentences. Nothing of the file is repeated: it may hold a password."""
    where = re.search(r"at line (\d+), column (\d+)", message)
    lines = text.splitlines()
    number = int(where[1]) if where else len(lines)
    line = lines[number - 1].strip() if 0 < number <= len(lines) else ""
    value = line.partition("=")[2].strip()
    if TOO_DEEP in message:
        return "Write lists and tables inside one another a few levels deep at most."
    if "Unclosed" in message:
        return "Close the list or table with a bracket, there or on the line before."
    if not line.replace("\t", " ").isprintable():
        return "Delete what cannot be seen on that line: a control character."
    if any(quote in line for quote in _QUOTES):
        return 'Put plain double quotes in place of the curly ones: name = "text".'
    if "\\" in value and ("Unescaped" in message or "hex" in message or "escape" in message):
        return "Write paths with forward slashes, or between single quotes: 'C:\\data\\a.csv'."
    if "declare" in message and "twice" in message:
        return "Move the keys of both under one heading."
    if "overwrite" in message:
        return "Keep one of the two lines that set this key."
    if value in ("True", "False", "TRUE", "FALSE", "yes", "no"):
        return "Write true or false in lower case."
    if value in ("None", "null", "nil", "NaN"):
        return "To leave a key out, delete its line."
    if re.fullmatch(r"\.\d+.*", value):
        return f"Write a digit before the point: 0{value}"[:60] + "."
    if re.fullmatch(r"-?\d+,\d+", value):
        return "Write decimals with a point."
    if re.fullmatch(r"-?0\d+", value):
        return "Write whole numbers without zeros before them."
    if re.fullmatch(r"\d{1,2}[./]\d{1,2}[./]\d{2,4}|\d{4}[./]\d{1,2}[./]\d{1,2}", value):
        return "Write dates as 2019-01-31."
    if line.startswith("[") and not line.endswith("]") and "=" not in line:
        return "Close the heading with a bracket: [name]."
    if re.match(r"[\w-]+\s*:", line):
        return 'Put an equals sign, not a colon, after the key: name = "text".'
    if line and not line.startswith("[") and "=" not in line:
        return 'Write settings as name = "text" and headings as [alerts].'
    if value.count('"') % 2 or value.count("'") % 2:
        return 'Close the quotes: name = "text".'
    return 'Text goes in quotes: name = "text".'
