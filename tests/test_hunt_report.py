"""A hunt leaves its report in its folder, and the command renders the same page again."""

import html
import json

import pytest
from click.testing import CliRunner
from worlds import Plant, make_world, write_world

from miner import hunt
from miner.cli import main


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    """The folder of a hunt that finds something."""
    folder = tmp_path_factory.mktemp("hunt")
    world = make_world(
        3, n_entities=200, n_sessions=500, alerts_per_type=1500, n_types=6, base_rate=0.04,
        planted=(Plant((0, 1), 0.6, 200),),
    )  # fmt: skip
    study = write_world(
        world, folder / "study", settings={"testing": {"permutations": 100, "placebo": 2}}
    )
    assert hunt(study, folder / "run").record["counts"]["rules"] > 0
    return folder / "run"


def test_the_report_is_in_the_folder_and_can_be_made_again(run):
    names = ("report.html", "candidates.xlsx")
    before = [(run / name).read_bytes() for name in names]
    assert b"k00 + k01" in before[0]
    assert len(before[0]) < 1_500_000
    for name in names:
        (run / name).unlink()
    done = CliRunner().invoke(main, ["report", str(run)])
    assert (done.exit_code, done.stdout.strip()) == (0, f"Written to {run / 'report.html'}")
    assert [(run / name).read_bytes() for name in names] == before


def test_what_the_page_warns_of_is_what_check_says(run):
    told = json.loads((run / "evidence.json").read_text(encoding="utf-8"))["warnings"]
    page = html.unescape((run / "report.html").read_text(encoding="utf-8"))
    assert told
    for warning in told:
        assert warning in page


def test_a_folder_that_is_no_run_is_the_users_mistake(tmp_path):
    done = CliRunner().invoke(main, ["report", str(tmp_path)])
    assert done.exit_code == 2
    assert "no run.json in it" in done.stderr
