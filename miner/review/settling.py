"""What accepting a review changes, and what it leaves: a quarter's decision stands, and an older
quarter's evidence does not undo what a later quarter decided."""

from __future__ import annotations

from dataclasses import replace

from miner.review.history import RuleHistory
from miner.review.proposals import BOOK_STATUS
from miner.review.records import RuleReview

MEANWHILE = "its status was changed meanwhile: left as it is"


def status_then(mine: RuleHistory, quarter: str, now: str) -> str:
    """A rule's status before what was decided on the quarter and on later ones.

    Parameters
    ----------
    now : its status in the book; one that people gave it since stands
    """
    since = [one for one in mine.decisions if one.quarter >= quarter]
    return since[0].before if since and since[-1].after == now else now


def settled(
    one: RuleReview, mine: RuleHistory, quarter: str, seen: str, now: str, accept: bool
) -> RuleReview:
    """A rule's review with the status it has once the review is over.

    Parameters
    ----------
    seen, now : its status in the book when the review began, and now that the ledger is held
    accept : carry the proposal out
    """
    proposed = BOOK_STATUS.get(one.status)
    later = [d for d in mine.decisions if d.quarter > quarter]
    own = [d for d in mine.decisions if d.quarter == quarter]
    if later:
        if proposed in (None, one.status_before):
            return one
        return replace(one, settled=f"decided on {later[-1].quarter} already: left as it is")
    if own and own[-1].after == now and proposed in (None, now):
        words = f"already decided by {own[-1].who} on {own[-1].date}"
        return replace(one, status_after=now, settled=words)
    if now != seen:
        return replace(one, status_before=now, status_after=now, settled=MEANWHILE)
    after = proposed if accept and proposed is not None else now
    return replace(one, status_before=now, status_after=after)
