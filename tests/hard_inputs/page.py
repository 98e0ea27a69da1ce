"""The table of cases as a page for people, written from the table that the tests hold."""

from __future__ import annotations

from collections.abc import Iterator

from .case import PLAIN_COUNTS as PLAIN
from .case import Answer, Case, Refused
from .plain import ENTITIES, TYPES

HEAD = """# Hard inputs: what happens to each

Written by `python -m tests.hard_inputs --report reports/hard-inputs.md` from the table of cases in
`tests/hard_inputs/`, which the tests run through the real commands (`miner check` and `miner hunt`
unless another is named). All cases alter one small invented study: {alerts} alerts of {types} types
and {events} events on {entities} entities over 150 days, in which one pair of alerts precedes the
events and is found and confirmed.

- **Answered** means: exit 0; the numbers of rows read, used, repeated and set aside are exactly as
  they should be; where it says *as the plain study*, `candidates.csv` and `rules.csv` are the same
  bytes as without the oddity, and where it says *as its twin*, the same as those of the study
  written plainly. What `check` tells is quoted.
- **Refused** means: exit 2, this one message on standard error (where, rule, what was found, what
  to try; `...` stands for another program's words or a long text), no traceback, nothing on
  standard output, no run folder, and no file made or changed anywhere near.

{n} cases: {answered} answered, {refused} refused. Cases marked *(slow)* run with the slow studies.
"""


def page(cases: tuple[Case, ...]) -> str:
    """The whole page."""
    answered = sum(isinstance(case.outcome, Answer) for case in cases)
    lines = [
        HEAD.format(
            alerts=PLAIN["alerts"]["rows"],
            events=PLAIN["events"]["rows"],
            types=len(TYPES),
            entities=len(ENTITIES),
            n=len(cases),
            answered=answered,
            refused=len(cases) - answered,
        )
    ]
    for group in dict.fromkeys(case.group for case in cases):
        lines += [f"## {group}", "", "| input | what happens |", "|---|---|"]
        lines += [_row(case) for case in cases if case.group == group]
        lines.append("")
    return "\n".join(lines)


def _row(case: Case) -> str:
    slow = " *(slow)*" if case.is_slow else ""
    if isinstance(case.outcome, Refused):
        text = case.outcome.message.replace("{folder}/", "").replace(
            "{folder}", "the study's folder"
        )
        return f"| {_cell(case.name)}{slow} | **Refused.** {_cell(text)} |"
    return f"| {_cell(case.name)}{slow} | **Answered**{_cell('; '.join(_answer(case.outcome)))} |"


def _answer(answer: Answer) -> Iterator[str]:
    if answer.twin is not None:
        yield ", as the plain study" if answer.twin.__name__ == "plainly" else ", as its twin"
    else:
        yield ""
    for name, count in answer.counts.items():
        plain = PLAIN.get(name, {})
        changed = [f"{n:,} {key}" for key, n in count.items() if n != plain.get(key, 0)]
        if changed:
            yield f"{name}: {', '.join(changed)}"
    if answer.entities != len(ENTITIES):
        yield f"{answer.entities:,} {'entity' if answer.entities == 1 else 'entities'}"
    if answer.types != len(TYPES):
        yield f"{answer.types:,} alert {'type' if answer.types == 1 else 'types'}"
    for path, value in answer.expect.items():
        yield f"{path.rpartition('.')[2]} {value}"
    for text in answer.told:
        yield f"told: \u201c{text}\u201d"


def _cell(text: str) -> str:
    """Text as one cell of a table."""
    shown = "".join(c if c.isprintable() or c == "\n" else ascii(c)[1:-1] for c in text)
    for mark in "|<*":
        shown = shown.replace(mark, f"\\{mark}")
    return shown.replace("\n  ", "<br>").replace("\n", "<br>")
