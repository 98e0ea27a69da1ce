"""Single values of the settings: how each is checked, and how it is shown in a message."""

from __future__ import annotations

import datetime as dt
import difflib
import math
import os
import re
import zoneinfo
from collections.abc import Iterable, Mapping
from typing import Annotated, Any
from urllib.parse import parse_qsl, unquote

from pydantic import AfterValidator, BeforeValidator
from pydantic_core import PydanticCustomError

_URL = re.compile(r"[A-Za-z][A-Za-z0-9+.\-]*://")
_SECRET_KEYS = ("user", "password", "sslpassword", "options")


def is_url(source: str) -> bool:
    """Tell whether a source is a database URL rather than a path."""
    return _URL.match(source) is not None


def redact_url(source: str) -> str:
    """Return a database URL without user, password and query string; a path unchanged.

    Everything before the last "@" goes, so that a password with unescaped marks cannot leak.
    """
    if not is_url(source):
        return source
    scheme, _, rest = source.partition("://")
    return f"{scheme}://" + re.split(r"[?#]", rest.rpartition("@")[2])[0]


def mask_credentials(text: str, source: str) -> str:
    """Return another program's text about a database, what `source` holds of secrets blanked out:
    the URL itself, user, password, and what a query string says of either."""
    account = source.partition("://")[2].rpartition("@")[0]
    user, _, password = account.partition(":")
    said = [value for key, value in parse_qsl(source.partition("?")[2]) if key in _SECRET_KEYS]
    for secret in (source, account, password, unquote(password), *said, user):
        if secret:
            text = text.replace(secret, "***")
    return text


def show(value: Any) -> str:
    """Return a value as TOML would write it, short, without credentials."""
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = '"' + redact_url(value) + '"'
    elif isinstance(value, list | tuple):
        text = "[" + ", ".join(show(item) for item in value) + "]"
    elif isinstance(value, Mapping):
        text = "{" + ", ".join(f"{key} = {show(item)}" for key, item in value.items()) + "}"
    else:
        text = str(value)
    return text if len(text) <= 80 else text[:76] + " ..."


def nearest(word: str, known: Iterable[str]) -> str:
    """Return "Did you mean ..." for the known word nearest to `word`, else the known words."""
    known = list(known)
    for spelling in (word, word.casefold(), word.upper()):
        near = difflib.get_close_matches(spelling, known, 1)
        if near:
            return f"Did you mean `{near[0]}`?"
    return "Known: " + ", ".join(known) + "." if len(known) < 20 else ""


def broken(rule: str, advice: str = "") -> PydanticCustomError:
    """Return the error a check of one value raises: "must {rule}", and what to try."""
    return PydanticCustomError("rule", "{rule}", {"rule": rule, "advice": advice})


def whole(low: int, high: int | None = None, *, sane: int = 10**9) -> BeforeValidator:
    """Return the check of a whole number of at least `low` and at most `high`.

    Beyond `sane` no machine would come to an end, so that a slip of the finger is told at once.
    """
    rule = f"be a whole number of at least {low}"
    rule += "" if high is None else f" and at most {high}"

    def check(value: Any) -> int:
        if type(value) is not int:
            is_decimal = type(value) is float and math.isfinite(value)
            advice = "Write it without a decimal point." if is_decimal else _AS_NUMBER
            raise broken(rule, advice)
        if value < low or (high is not None and value > high):
            raise broken(rule)
        if value > sane:
            raise broken(f"be a whole number of at most {sane}")
        return value

    return BeforeValidator(check)


_AS_NUMBER = "Write it as a plain number, without quotes."


def number(low: float, *, is_above: bool = False, high: float = math.inf) -> BeforeValidator:
    """Return the check of a finite number of at least `low`, or with `is_above` above it, and of at
    most `high`."""
    rule = f"be a number {'above' if is_above else 'of at least'} {low:g}"
    rule += f" and at most {high:g}" if math.isfinite(high) else ""

    def check(value: Any) -> float:
        if type(value) not in (int, float):
            raise broken(rule, _AS_NUMBER)
        if not math.isfinite(value) or not low <= value <= high or (is_above and value == low):
            raise broken(rule)
        return float(value)

    return BeforeValidator(check)


def _share(value: Any) -> float:
    rule = "be a number above 0 and below 1"
    if type(value) not in (int, float):
        raise broken(rule, _AS_NUMBER)
    if not (math.isfinite(value) and 0 < value < 1):
        raise broken(rule)
    return float(value)


def _not_blank(text: str) -> str:
    if not text.strip():
        raise broken("not be empty")
    return text


def _path_as_text(value: Any) -> Any:
    return os.fspath(value) if isinstance(value, os.PathLike) else value


def _list_as_tuple(value: Any) -> Any:
    return tuple(value) if isinstance(value, list) else value


def _each_once(names: tuple[str, ...]) -> tuple[str, ...]:
    if not names:
        raise broken("name at least one type", "Leave it out to take every type.")
    if len(set(names)) < len(names):
        raise broken("name every type once", "Delete the repeated one.")
    return names


def _date(value: Any) -> dt.date:
    if isinstance(value, dt.date) and not isinstance(value, dt.datetime):
        return value
    if isinstance(value, str) and re.fullmatch(r"\d{4}-\d{2}-\d{2}", value):
        try:
            return dt.date.fromisoformat(value)
        except ValueError:
            pass
    raise broken("be a date", "Write it as 2019-01-02.")


def _time(value: Any) -> dt.time:
    if isinstance(value, dt.time):
        return value
    if isinstance(value, str) and re.fullmatch(r"\d{2}:\d{2}(:\d{2})?", value):
        try:
            return dt.time.fromisoformat(value)
        except ValueError:
            pass
    raise broken("be a time of day from 00:00 to 23:59:59", 'Write it as "16:00".')


def _timezone(name: str) -> str:
    try:
        zoneinfo.ZoneInfo(name)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        advice = nearest(name, sorted(zoneinfo.available_timezones())) or "Write Europe/London."
        raise broken("be a known timezone such as America/New_York", advice) from None
    return name


Name = Annotated[str, AfterValidator(_not_blank)]
Source = Annotated[Name, BeforeValidator(_path_as_text)]
Names = Annotated[tuple[Name, ...], BeforeValidator(_list_as_tuple), AfterValidator(_each_once)]
Day = Annotated[dt.date, BeforeValidator(_date)]
Clock = Annotated[dt.time, BeforeValidator(_time)]
Zone = Annotated[Name, AfterValidator(_timezone)]
Share = Annotated[float, BeforeValidator(_share)]
