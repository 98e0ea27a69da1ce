"""What each kind of entry is and must say: the contracts of their bodies.

A body may say more than its contract asks for. Each keeps the version of the contract it was
written under as ``contract``; when a contract changes, its old version stays readable here.
"""

from __future__ import annotations

import datetime as dt
import json
import re
from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from miner.errors import LedgerError, explain
from miner.rule_book.records import Count, Rate, Status
from miner.settings.values import Name, broken, nearest, show, whole

from .chain import canonical
from .records import Item, Json

CONTRACT = 1
QUARTER = re.compile(r"\d{4}Q[1-4]")


def _a_day(text: str) -> str:
    try:
        if dt.date.fromisoformat(text).isoformat() == text:
            return text
    except ValueError:
        pass
    raise broken("be a date", "Write it as 2025-09-30.")


def _a_chance(value: Any) -> Any:
    if type(value) not in (int, float) or not 0 <= value <= 1:
        raise broken("be a number from 0 to 1")
    return value


Day = Annotated[str, AfterValidator(_a_day)]
Chance = Annotated[float, BeforeValidator(_a_chance)]
Positive = Annotated[int, whole(1)]


class Body(BaseModel):
    """What every body shares: strict types, room for more."""

    model_config = ConfigDict(strict=True, frozen=True, extra="allow")

    contract: Literal[1]


class HuntBody(Body):
    """A hunt that was made, with the size of the family it searched.

    ``settings_sha256`` is that of the settings in canonical JSON; ``program`` the version of this
    program; ``proposed`` and ``passed`` how many of the family were judged and passed at ``fdr``
    by ``adjust``; ``rules`` the ids of the rules it found.
    """

    study: Name
    settings_sha256: Name
    program: Name
    targets: list[Name]
    family: Count
    proposed: Count
    passed: Count
    fdr: Chance
    adjust: Name
    rules: list[Name]


class RuleBody(Body):
    """A rule that was taken up: what it says and what it promises.

    ``promise`` is the share of triggers that the event is to follow, ``expected`` that which
    triggers would show if alerts said nothing; ``adopted`` the first date that counts.
    """

    target: Name
    stratum: Name
    combination: Annotated[list[Name], Field(min_length=1)]
    lookback: Positive
    horizon: Positive
    rest: Count
    status: Status
    promise: Chance | None
    expected: Chance | None
    adopted: Day | None


class OutcomeBody(Body):
    """One trigger whose horizon has closed: dates of its session and of the horizon's last, whether
    the event followed, and the chance of that if alerts said nothing."""

    entity: Name
    session: Day
    close: Day
    hit: bool
    expected: Chance


class HypothesisBody(Body):
    """A new rule's test in the online procedure: its p, the level spent on it, the decision."""

    p: Chance
    level: Chance
    rejected: bool
    procedure: Name


class ReviewBody(Body):
    """What a quarterly review says of a rule: the proposal with its reasons, the evidence against
    "no better than expected" (``e_works``) and against its promise (``e_promise``), None where
    there is none yet, what its triggers showed, and the interval of its precision."""

    proposed: Name
    reasons: list[str]
    e_works: Rate | None
    e_promise: Rate | None
    triggers: Count
    hits: Count
    expected_hits: Rate
    interval: Annotated[list[Chance], Field(min_length=2, max_length=2)] | None


class DecisionBody(Body):
    """A status that people gave a rule, and the one it had."""

    before: Status
    after: Status


BODIES: dict[str, type[Body]] = {
    "hunt": HuntBody,
    "rule": RuleBody,
    "outcome": OutcomeBody,
    "hypothesis": HypothesisBody,
    "review": ReviewBody,
    "decision": DecisionBody,
}
KINDS = tuple(BODIES)
OF_A_QUARTER = ("outcome", "hypothesis", "review")

_TYPE_RULES = {
    "string_type": "be text",
    "bool_type": "be true or false",
    "list_type": "be a list",
    "missing": "be given",
}


def checked(item: Item, where: str) -> dict[str, Json]:
    """What an item says, ready to be entered: kind, rule, quarter and body.

    Parameters
    ----------
    where : the item, as an error names it

    Raises
    ------
    LedgerError : it is not what its kind must be
    """
    if item.kind not in BODIES:
        rule = "be one of " + ", ".join(KINDS)
        raise LedgerError(explain(where, "kind", rule, show(item.kind), nearest(item.kind, KINDS)))
    where = f"{where} ({item.kind})"
    if item.kind == "hunt":
        if item.rule is not None:
            raise LedgerError(explain(where, "rule", "be left out of a hunt", show(item.rule)))
    else:
        check_text(item.rule, where, "rule")
    if item.quarter is None and item.kind in OF_A_QUARTER:
        raise LedgerError(explain(where, "quarter", "be given", "nothing", "Write it as 2025Q3."))
    if item.quarter is not None and not QUARTER.fullmatch(item.quarter):
        found = show(item.quarter)
        raise LedgerError(explain(where, "quarter", "be a quarter", found, "Write it as 2025Q3."))
    try:
        body = json.loads(canonical({"contract": CONTRACT, **item.body}))
    except (ValueError, TypeError) as error:
        raise LedgerError(explain(where, "body", "be plain JSON", str(error))) from error
    _check_body(item.kind, body, where)
    return {"kind": item.kind, "rule": item.rule, "quarter": item.quarter, "body": body}


def _check_body(kind: str, body: Mapping[str, Json], where: str) -> None:
    try:
        BODIES[kind].model_validate(body)
    except ValidationError as error:
        issue = error.errors(include_url=False)[0]
        key = ".".join(str(step) for step in issue["loc"])
        if issue["type"] == "rule":
            rule, advice = issue["ctx"]["rule"], issue["ctx"]["advice"]
        else:
            rule, advice = _TYPE_RULES.get(issue["type"], f"be right ({issue['msg']})"), ""
        found = "nothing" if issue["type"] == "missing" else show(issue["input"])
        raise LedgerError(explain(where, f"body.{key}", rule, found, advice)) from error


def check_text(text: str | None, where: str, what: str) -> str:
    """A field that must say something; returns it.

    Raises
    ------
    LedgerError : it is empty, no text, or holds what a database cannot keep
    """
    advice = "" if what == "rule" else f"Say {what} (--{what})."
    if not isinstance(text, str) or not text.strip():
        found = "nothing" if text is None else repr(text)
        raise LedgerError(explain(where, what, "not be empty", found, advice))
    if "\0" in text:
        raise LedgerError(explain(where, what, "be text without NUL characters", repr(text)))
    try:
        text.encode("utf-8")
    except UnicodeEncodeError:
        raise LedgerError(explain(where, what, "be Unicode text", ascii(text))) from None
    return text
