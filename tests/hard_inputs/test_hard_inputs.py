"""Every case of the table: the right answer, or one clear message and nothing else."""

from __future__ import annotations

import random
from pathlib import Path

import pytest

import miner

from . import spans
from .case import Answer, Case, Refused
from .page import page
from .plain import ALERTS, EVENTS
from .running import (
    ROOT,
    assert_refused,
    in_process,
    in_subprocess,
    message_of,
    results_of,
    run_case,
)
from .table import CASES

IN_A_PROCESS_OF_ITS_OWN = (
    "Files: a packed csv, cut short",
    "Times: a time that would steer a terminal",
    "Names: right-to-left names and types",
    "Settings: six things wrong at once",
)
MARKS = {True: [pytest.mark.slow], False: []}


def of_cases(cases: list[Case]) -> pytest.MarkDecorator:
    """One test a case, slow ones marked."""
    values = [pytest.param(case, id=case.key, marks=MARKS[case.is_slow]) for case in cases]
    return pytest.mark.parametrize("case", values)


@of_cases(list(CASES))
def test_a_hard_input(case: Case, tmp_path: Path) -> None:
    run_case(case, tmp_path.resolve())


@pytest.mark.slow
@of_cases([case for case in CASES if case.key in IN_A_PROCESS_OF_ITS_OWN])
def test_a_hard_input_in_a_process_of_its_own(case: Case, tmp_path: Path) -> None:
    run_case(case, tmp_path.resolve(), in_subprocess)


def test_the_table_is_whole() -> None:
    keys = [case.key for case in CASES]
    assert len(keys) >= 120
    assert len(set(keys)) == len(keys)
    assert set(IN_A_PROCESS_OF_ITS_OWN) <= set(keys)
    assert sum(isinstance(case.outcome, Answer) for case in CASES) > 100
    # no message is so full of holes that anything fits
    for case in CASES:
        if isinstance(case.outcome, Refused):
            assert len(case.outcome.message.replace("...", "")) > 60, case.key


def test_the_page_is_up_to_date() -> None:
    written = (ROOT / "reports" / "hard-inputs.md").read_text(encoding="utf-8")
    assert written == page(CASES), "run python -m tests.hard_inputs --report reports/hard-inputs.md"


def test_the_plain_study_is_not_trivial() -> None:
    assert (len(ALERTS), len(EVENTS)) == (430, 120)
    assert len(set(ALERTS)) == 430
    assert len(set(EVENTS)) == 120


def test_groups_that_change_make_a_difference(tmp_path: Path) -> None:
    found = [
        results_of(write, tmp_path / f"{k}")["candidates.csv"]
        for k, write in enumerate((spans.groups(spans.ALWAYS), spans.SWITCH))
    ]
    assert found[0] != found[1]


def test_the_checks_can_fail(tmp_path: Path) -> None:
    """A wrong count, a wrong message, a twin that differs and a file left behind are noticed."""
    by_key = {case.key: case for case in CASES}
    plain = by_key["Files: the plain study itself"]
    refused = by_key["Files: an empty file"]

    def outcome(case: Case, **changed: object) -> Case:
        return Case(**{**case.__dict__, **changed})

    def more_counts(case: Case) -> Answer:
        assert isinstance(case.outcome, Answer)
        counts = {name: {**count, "used": 1} for name, count in case.outcome.counts.items()}
        return Answer(counts, case.outcome.entities, case.outcome.types)

    def shifted(folder: object) -> None:
        folder.rows("events.csv", EVENTS[:60])  # type: ignore[attr-defined]

    wrong = [
        outcome(plain, outcome=more_counts(plain)),
        outcome(plain, outcome=Answer(plain.outcome.counts, 12, 3, ("nonsense",))),  # type: ignore[union-attr]
        outcome(plain, outcome=Answer(plain.outcome.counts, 12, 3, (), shifted)),  # type: ignore[union-attr]
        outcome(plain, outcome=refused.outcome),
        outcome(refused, outcome=plain.outcome),
        outcome(refused, outcome=Refused("`alerts.csv`: `file` must be another; got it. Try.")),
        outcome(plain, write=lambda folder: folder.text("study.toml", "")),
    ]
    for k, case in enumerate(wrong):
        with pytest.raises(AssertionError):
            run_case(case, tmp_path.resolve() / f"{k}" / _made(tmp_path / f"{k}"))

    def littering(command: str, study: Path) -> object:
        (study.parent / "litter").write_text("x")
        return in_process(command, study)

    (tmp_path / "litter").mkdir()
    with pytest.raises(AssertionError, match="written or changed"):
        run_case(refused, (tmp_path / "litter").resolve(), littering)


def _made(folder: Path) -> str:
    (folder / "root").mkdir(parents=True)
    return "root"


def test_a_message_lacks_a_part_or_has_them_all(tmp_path: Path) -> None:
    from .running import Ran

    whole = "`a`: `b` must be c; got d. Try e."
    for text in ("`a`: `b` must be c; got d.", "`a` must be c; got d. Try e.", "no"):
        with pytest.raises(AssertionError):
            assert_refused(Ran(2, "", f"error: {text}\n"), Refused(text), tmp_path, "here")
    assert_refused(Ran(2, "", f"error: {whole}\n"), Refused(whole), tmp_path, "here")
    assert message_of(Ran(2, "", f"reading ...\nerror: {whole}\n")) == whole


def test_results_have_a_short_repr(tmp_path: Path) -> None:
    from .folder import Folder

    folder = Folder(tmp_path / "desk")
    checked = repr(miner.check(folder.path / "study.toml", n_workers=1))
    hunted = repr(miner.hunt(folder.path / "study.toml", n_workers=1))
    assert checked.startswith("Check('study', 2021-01-01 to 2021-05-30: 12 entities, 3 alert types")
    assert hunted.startswith("Hunt('study': 6 candidates, 1 rule, 1 confirmed, folder None")
    assert max(len(checked), len(hunted)) < 200


def test_rows_in_any_order_give_the_same_message(tmp_path: Path) -> None:
    """What is wrong is told in the order of the file, and the count does not depend on it."""
    from .folder import Folder

    rows = [*ALERTS[:50], *(("e", "never", "x") for _ in range(30))]
    counts = set()
    for seed in range(3):
        random.Random(seed).shuffle(rows)
        folder = Folder(tmp_path / f"{seed}")
        folder.rows("alerts.csv", rows)
        message = message_of(in_process("check", folder.path / "study.toml"))
        lines = [int(line.rpartition("(line ")[2][:-1]) for line in message.splitlines()[1:-1]]
        assert lines == sorted(lines)
        assert all(rows[line - 2][1] == "never" for line in lines)
        counts.add(message.splitlines()[0])
    assert len(counts) == 1
