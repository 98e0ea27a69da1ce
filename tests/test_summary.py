"""The terminal's screens: never wider than 100 columns, aligned, and no name can steer them."""

import copy

import pytest
from click.testing import CliRunner
from worlds import Plant, make_world, write_world

from miner import check, hunt
from miner.cli import main
from miner.summary import WIDTH, aligned, check_lines, cut, hunt_lines, plain

LONG = "an alert type whose name goes on and on " * 8
STEER = "red\x1b[31m alarm"


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    """A study in which something is found, in strata too."""
    world = make_world(
        3, n_entities=200, n_sessions=500, alerts_per_type=1500, n_types=6, base_rate=0.04,
        planted=(Plant((0, 1), 0.6, 200), Plant((2, 3, 4), 0.6, 200)),
    )  # fmt: skip
    return write_world(
        world, tmp_path_factory.mktemp("study"), strata=True,
        settings={"testing": {"permutations": 0, "placebo": 2}},
    )  # fmt: skip


@pytest.fixture(scope="module")
def result(study):
    """Its hunt, written nowhere."""
    return hunt(study)


def test_rules_stand_in_columns(result):
    lines = list(hunt_lines(result))
    head = next(line for line in lines if line.lstrip().startswith("stratum"))
    rows = [line for line in lines if line[5:].startswith(("all ", "small ", "mid ", "large "))]
    assert len(rows) == len(result.rules) > 3
    for title in ("holdout", "95% interval", "expected", "discovery"):
        end = head.index(title) + len(title)
        assert {line[end - 1] for line in rows} <= set("0123456789%-")
        assert {line[end : end + 1] for line in rows} == {" "}


def test_no_line_is_wider_than_the_screen_whatever_the_names(result, study):
    rules = result.rules.copy()
    for column in ("combination", "target", "stratum", "sharpens"):
        rules[column] = [LONG] * len(rules)
    record = copy.deepcopy(result.record)
    record["study"] = LONG
    lines = "\n".join(hunt_lines(type(result)(**vars(result) | {"rules": rules, "record": record})))
    assert max(map(len, lines.split("\n"))) <= WIDTH
    checked = check(study)
    for table, column in ((checked.types, "type"), (checked.targets, "target")):
        table[column] = LONG
    checked.power["target"] = LONG
    told = "\n".join(check_lines(checked)).split("\n")
    assert max(map(len, told)) <= WIDTH
    assert sum("..." in line for line in told) > 5


def test_names_cannot_steer_a_terminal(result):
    rules = result.rules.copy()
    rules["combination"] = STEER
    text = "\n".join(hunt_lines(type(result)(**vars(result) | {"rules": rules})))
    assert "\x1b" not in text
    assert "red\ufffd[31m alarm" in text
    assert plain("a\u202eb\tc") == "a\ufffdb\ufffdc"


def test_the_first_column_gives_way():
    lines = list(aligned(("type", "n"), [("x" * 300, "1"), ("y", "12,345")]))
    assert {len(line) for line in lines} == {WIDTH}
    assert lines[1].startswith("  xxx")
    assert "...       1" in lines[1]
    assert cut("abcdef", 5) == "ab..."


@pytest.mark.parametrize("environment", [{}, {"NO_COLOR": "1"}, {"TERM": "dumb"}])
def test_nothing_but_text_where_there_is_no_terminal(study, environment):
    done = CliRunner().invoke(main, ["check", str(study)], env=environment)
    assert done.exit_code == 0
    assert "\x1b" not in done.output
