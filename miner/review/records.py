"""What a review hands on, as frozen records: everything a page, a table or a screen tells of it.

Dates are "2025-09-30", quarters "2025Q3", shares 0 to 1; None is "cannot be said".
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any, Literal, NamedTuple

FORMAT = 1

Status = Literal["retire", "watch", "keep", "too early"]
Fate = Literal["new", "persisting", "explained", "gone"]


@dataclass(frozen=True)
class Span:
    """A rule's closed triggers over a stretch of time.

    Attributes
    ----------
    first_quarter, last_quarter : of the stretch; the same for a single quarter
    expected_hits : under the margins null, refitted quarter by quarter
    low, high : interval at the review's level: since adoption the confidence sequence, which holds
        however often one looks, else one that allows for triggers hanging together
    is_few : under ten clusters: do not lean on the interval
    """

    first_quarter: str
    last_quarter: str
    triggers: int
    hits: int
    expected_hits: float
    precision: float | None
    low: float | None
    high: float | None
    is_few: bool


@dataclass(frozen=True)
class QuarterLine:
    """One quarter of one rule, and the evidence as it stood when the quarter had ended.

    Attributes
    ----------
    e_works : evidence that it hits more often than expected, since adoption
    e_broken : evidence that its precision is below the promise, since adoption
    source : "ledger" where the ledger's record stands, "now" where this review computed it
    """

    quarter: str
    triggers: int
    hits: int
    expected_hits: float
    precision: float | None
    e_works: float
    e_broken: float | None
    source: Literal["ledger", "now"]


class Trigger(NamedTuple):
    """A closed trigger: its horizon is over, and what came of it is known."""

    quarter: str
    entity: str
    session: str
    close: str
    hit: bool
    expected: float
    peer: str


@dataclass(frozen=True)
class EvidencePoint:
    """Evidence after one more cluster of triggers; ``date`` is the close of its last trigger."""

    date: str
    quarter: str
    triggers: int
    e_works: float
    e_broken: float | None


@dataclass(frozen=True)
class Revision:
    """A quarter whose triggers, computed now, are not those the ledger holds: the log changed.

    ``changed``: triggers with another outcome; ``rates``: triggers whose expected rate moved by
    more than a hundredth. The ledger's record stands.
    """

    quarter: str
    appeared: int
    vanished: int
    changed: int
    rates: int


@dataclass(frozen=True)
class Evidence:
    """An e-process by the end of the quarter: 1 is no evidence, 20 and more is strong.

    Attributes
    ----------
    e : the whole: since adoption and restarted, mixed with weights fixed in advance
    e_highest, highest_quarter : the highest it stood at a quarter's end, and when
    e_since, e_restarted : its parts on their own; the restarted one that says most
    restarted_quarter : first quarter of that part, None before the first restart
    in_book : whether it still stands when all rules of the book are looked at at once (e-BH at the
        review's alpha); ``least_alpha``: the smallest level at which it would
    """

    e: float
    e_highest: float
    highest_quarter: str | None
    e_since: float
    e_restarted: float
    restarted_quarter: str | None
    in_book: bool
    least_alpha: float


@dataclass(frozen=True)
class RuleReview:
    """What a review says of one rule.

    Attributes
    ----------
    status_before, status_after : in the rule book; the same unless the proposal was accepted
    adopted : first date from which its triggers count
    promise, keep_above : precision the book promises, and that times ``keep_share``
    expected_then : what the book says would be expected if alerts said nothing
    this_quarter, last_year, since : None before adoption; ``last_year``: the last four quarters
    works : evidence that it hits more often than expected
    broken : evidence that its precision is below ``keep_above``; None without a promise
    clusters, in_evidence, waiting : groups of triggers that hang together, triggers in them, and
        closed triggers whose group could still grow and is not in the evidence yet
    status, reasons : the proposal, with its reasons in words, the deciding one first
    marks : how alerts of the rule are not what they were, in words; empty if they are
    settled : why the proposal is not carried out, accepted or not, in words; empty if it can be
    """

    id: str
    name: str
    target: str
    stratum: str
    combination: tuple[str, ...]
    lookback: int
    horizon: int
    status_before: str
    status_after: str
    note: str
    adopted: str
    promise: float | None
    keep_above: float | None
    expected_then: float | None
    this_quarter: Span | None
    last_year: Span | None
    since: Span | None
    works: Evidence
    broken: Evidence | None
    clusters: int
    in_evidence: int
    waiting: int
    status: Status
    reasons: tuple[str, ...]
    marks: tuple[str, ...]
    quarters: tuple[QuarterLine, ...]
    evidence: tuple[EvidencePoint, ...]
    triggers: tuple[Trigger, ...]
    revisions: tuple[Revision, ...]
    settled: str = ""


@dataclass(frozen=True)
class ListedRule:
    """A retired rule: in the book, not tested."""

    id: str
    name: str
    target: str
    stratum: str
    note: str


@dataclass(frozen=True)
class NewRule:
    """A rule of the window's hunt, or one of the book that it no longer finds.

    Attributes
    ----------
    fate : "new", "persisting" (in the book), "explained" (by ``like``, a rule of the book) or
        "gone" (in the book, not found)
    overlap : share of its triggers with one of the book's rule ``like`` within the horizon
    p_holdout : of the window's hunt, not adjusted
    level, is_rejected, procedure : the online procedure's; None where the rule was not put to it
    is_tested_before : an earlier review put it to the procedure
    reason : in words
    """

    id: str
    name: str
    target: str
    stratum: str
    combination: tuple[str, ...]
    fate: Fate
    like: str | None
    overlap: float | None
    verdict: str | None
    triggers: int | None
    hits: int | None
    precision: float | None
    holdout_triggers: int | None
    holdout_hits: int | None
    holdout_precision: float | None
    holdout_low: float | None
    holdout_high: float | None
    holdout_expected_hits: float | None
    p_holdout: float | None
    level: float | None
    is_rejected: bool | None
    procedure: str | None
    is_tested_before: bool
    reason: str


@dataclass(frozen=True)
class WindowHunt:
    """The hunt on the window that ends with the quarter, against the book.

    ``tests_so_far``, ``found_so_far``: hypotheses the procedure has seen over the ledger's whole
    history, this review's included, and those it took for real.
    """

    first: str
    last: str
    discovery_last: str
    holdout_first: str
    family: int
    passed: int
    procedure: str
    alpha: float
    tests_so_far: int
    found_so_far: int
    rules: tuple[NewRule, ...]


@dataclass(frozen=True)
class TypeQuarter:
    """One alert type in one quarter.

    Attributes
    ----------
    alerts : distinct entity-sessions with an alert
    covered : mean number of entities covered for it, over the quarter's sessions
    entities_with : share of the entities covered in the quarter that had one
    rate : alerts per covered entity and quarter of sessions
    hour : median local hour of day, None for bare dates; ``hour_spread``: quartiles
    hour_shift : share of its alerts that would have to move to another hour to look like the
        quarters before
    companion : the type it came most often together with on one entity and session
    companion_share : share of its alerts that did; ``companion_before``: in the quarters before
    """

    type: str
    quarter: str
    alerts: int
    covered: float
    entities_with: float | None
    rate: float | None
    hour: float | None
    hour_spread: tuple[float, float] | None
    hour_shift: float | None
    companion: str | None
    companion_share: float | None
    companion_before: float | None


@dataclass(frozen=True)
class TypeChange:
    """What moved of one alert type.

    Attributes
    ----------
    kind : "level" (change point in weekly counts), "new", "vanished", "hour", "companions",
        "coverage"
    since : date from which it looks different
    p_value, p_adjusted : of the change point test; None for other kinds
    ratio : after over before
    """

    type: str
    kind: Literal["level", "new", "vanished", "hour", "companions", "coverage"]
    since: str
    p_value: float | None
    p_adjusted: float | None
    ratio: float | None
    words: str


@dataclass(frozen=True)
class EntityChange:
    """An entity that joined or left; ``basis``: "coverage" where there is a table, else "log"."""

    entity: str
    change: Literal["joined", "left"]
    date: str
    basis: Literal["coverage", "log"]
    alerts: int


@dataclass(frozen=True)
class TypeWeeks:
    """Distinct entity-sessions with an alert of one type, week by week."""

    type: str
    alerts: tuple[int, ...]


@dataclass(frozen=True)
class MovedInputs:
    """The inputs, type by type and quarter by quarter, and what changed in them.

    ``weeks``: first session of each week of ``weekly``, which is what is tested for a change.
    ``false_alarm_rate``: chance that a review of unchanged inputs reports any "level" change.
    """

    quarters: tuple[str, ...]
    types: tuple[TypeQuarter, ...]
    changes: tuple[TypeChange, ...]
    entities: tuple[EntityChange, ...]
    false_alarm_rate: float
    types_tested: int
    weeks: tuple[str, ...]
    weekly: tuple[TypeWeeks, ...]


@dataclass(frozen=True)
class Workload:
    """The book's calls by quarter: distinct entity-sessions, and events they came before."""

    quarter: str
    rules: int
    triggers: int
    calls: int
    hits: int
    expected_hits: float


@dataclass(frozen=True)
class Review:
    """A whole review.

    Attributes
    ----------
    first, last : sessions of the quarter; nothing later was looked at
    counts : proposals by status
    entries : numbers of the first and last ledger entry this review wrote, None if none
    is_accepted : proposals were carried out
    unrecorded : why nothing was entered in the ledger, in words; empty where it has all of this
    """

    study: str
    book: str
    ledger: str
    quarter: str
    first: str
    last: str
    sessions: int
    program: str
    who: str
    why: str
    alpha: float
    keep_share: float
    watch_at: float
    min_triggers: int
    restart_quarters: int
    hang_together: str
    counts: dict[str, int]
    rules: tuple[RuleReview, ...]
    retired: tuple[ListedRule, ...]
    workload: tuple[Workload, ...]
    hunt: WindowHunt | None
    inputs: MovedInputs
    warnings: tuple[str, ...]
    entries: tuple[int, int] | None
    is_accepted: bool
    unrecorded: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Everything, ready for JSON: what ``review.json`` holds."""
        return {"format": FORMAT, **_plain(self)}

    def __repr__(self) -> str:
        """A line: a review is too long to print."""
        return f"<Review of {self.book}, {self.quarter}: {len(self.rules)} rules>"


def _plain(value: Any) -> Any:
    if isinstance(value, str | int | None):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Trigger):
        return value._asdict()
    if dataclasses.is_dataclass(value):
        return {key: _plain(item) for key, item in vars(value).items()}
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    return [_plain(item) for item in value]
