"""The page of a review, from its folder: words, numbers, hostile names, books of any size."""

import csv
import json
import re
from dataclasses import replace

import pytest
from browser_pages import assert_own_parts_only
from report_fixtures import HOSTILE
from review_fixtures import made_up_review, nothing_to_say

from miner.errors import OutputError
from miner.report import review_page, review_words
from miner.report.words import percent
from miner.review.folder import write


def page_of(review, folder):
    """The page of a review whose folder is written as the command writes it."""
    write(review, folder / "review")
    return review_page.render(folder / "review")


def text_of(path):
    return path.read_text(encoding="utf-8")


def flat(page):
    """The page's words without markup."""
    body = re.sub(r"<(style|script)>.*?</\1>", " ", text_of(page), flags=re.S)
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", body))


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return page_of(made_up_review(12), tmp_path_factory.mktemp("plain"))


@pytest.fixture(scope="module")
def hostile(tmp_path_factory):
    review = made_up_review(
        14, types=HOSTILE, target=HOSTILE[1], strata=HOSTILE[:4], entities=HOSTILE, study=HOSTILE[0]
    )
    return page_of(review, tmp_path_factory.mktemp("hostile"))


def test_evidence_is_told_with_no_more_digits_than_it_deserves():
    told = [review_words.evidence_text(e) for e in (None, 0, 2.1e-10, 0.0123, 1, 7.25, 214.3, 2e12)]
    assert told == ["–", "0", "2e-10", "0.012", "1", "7.2", "214", "over 1,000"]


def test_decisions_come_first_with_all_their_reasons(plain):
    told = flat(plain)
    assert (
        "Of 12 rules reviewed: retire 3, watch 3, too early to say for 3 and keep 3. Alerts of 2 "
        "of them are not what they were. 1 of 2 new rules found in the window was taken for real."
    ) in told
    assert told.index("Retire: 3 rules") < told.index("Watch: 3 rules") < told.index("Keep: 3")
    assert "the log was revised" in told
    assert "live → would be retired" in told
    assert "the book is as it was" in told
    order = re.findall(r'<section id="(\w+)"', text_of(plain))
    assert order == ["answer", "rules", "cards", "new", "inputs", "workload", "method"]


def test_what_was_carried_out_is_told_as_done(tmp_path):
    rules = made_up_review(4).rules
    after = tuple(replace(rule, status_after="watch") for rule in rules)
    told = flat(page_of(made_up_review(4, is_accepted=True, rules=after), tmp_path))
    assert told.count("live → watch") == 4
    assert "accepted and carried out" in told
    assert "→ would be" not in told


def test_every_rule_has_its_row_and_its_card_and_links_lead_somewhere(plain):
    page = text_of(plain)
    table = re.search(r"<table class=\"stack\".*?</table>", page, re.S).group()
    assert table.count("<tr") == 13
    assert page.count('<article class="card"') == 12
    places = set(re.findall(r'id="([^"]+)"', page))
    linked = set(re.findall(r'href="#([^"]+)"', page))
    assert linked <= places
    assert len(linked) > 15
    files = set(re.findall(r'href="([^"#]+)"', page))
    assert files == {path.name for path in plain.parent.iterdir()} - {"review.html"}


def test_numbers_of_the_page_are_those_of_the_files(plain):
    page = text_of(plain)
    with (plain.parent / "rules.csv").open(encoding="utf-8", newline="") as lines:
        rows = {row["rule"]: row for row in csv.DictReader(lines)}
    cards = re.findall(r'<article class="card".*?</article>', page, re.S)
    assert len(cards) == len(rows) == 12
    checked = 0
    for card in cards:
        row = rows[re.search(r"Id (\w+)\.", card).group(1)]
        if not row["since_triggers"]:
            continue
        words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", card))
        hits, triggers = row["since_hits"], row["since_triggers"]
        share = percent(float(row["since_precision"]))
        words = words.replace("since adoption too few clusters", "since adoption")
        assert f"since adoption {hits} of {triggers} {share}" in words
        assert (
            f"now {review_words.evidence_text(float(row['broken_e'] or row['works_e']))}" in words
        )
        checked += 1
    assert checked >= 10
    with (plain.parent / "quarters.csv").open(encoding="utf-8", newline="") as lines:
        for row in csv.DictReader(lines):
            if row["precision"]:
                told = f"{row['quarter']} {percent(float(row['precision']))} of {row['triggers']}"
                assert told in page, told


def test_new_rules_tell_their_fate_and_what_was_spent(plain):
    told = flat(plain)
    assert "2 new, 1 explained by a rule of the book, 1 persisting, 1 gone" in told
    assert "2 new rules had to pass the online procedure (lord++ at 5%)" in told
    assert "1 did, with a level of 0.0052 spent" in told
    assert "17 new rules were tested and 4 taken for real" in told
    assert "83% near" in told


def test_moved_inputs_name_the_rules_they_mark(plain):
    page = text_of(plain)
    moved = re.search(r'<section id="inputs".*?</section>', page, re.S).group()
    assert "amber came more often" in moved
    using = re.search(r"amber came more often.*?</li>", moved, re.S).group()
    rules = json.loads((plain.parent / "review.json").read_text())["rules"]
    assert using.count('href="#rule-') == sum("amber" in r["combination"] for r in rules) > 0
    assert "drone pass is new</b>; no rule of the book uses it" in moved
    assert moved.count("a lasting change from 2025-07-21 on") == 1
    assert moved.count("<figure") == 5


def test_a_review_with_nothing_to_say_says_so(tmp_path):
    told = flat(page_of(nothing_to_say(), tmp_path))
    assert "The book holds no rule to review." in told
    assert "Nothing calls for a decision: no promise is in doubt and no input moved." in told
    assert "was not hunted in this review" in told
    assert "No trigger has closed yet." in told


def test_all_rules_kept_and_no_move_is_a_quiet_review(tmp_path):
    base = nothing_to_say()
    review = made_up_review(3, statuses=("keep",), hunt=None, inputs=base.inputs)
    told = flat(page_of(review, tmp_path))
    assert "Of 3 rules reviewed: keep 3." in told
    assert "Nothing calls for a decision" in told


def test_a_book_of_many_rules_opens_the_urgent_ones_only(tmp_path):
    page = page_of(made_up_review(200, statuses=("keep", "keep", "keep", "retire")), tmp_path)
    text = text_of(page)
    assert text.count('<article class="card"') == 200
    assert 150 < text.count('<details class="folded">') == 200 - review_page.MOST_URGENT
    assert "42 more" in text
    assert len(text) < 4_000_000


def test_the_page_is_the_same_each_time(plain):
    first = plain.read_bytes()
    assert review_page.render_into(plain.parent) == plain
    assert plain.read_bytes() == first


def test_the_policy_lets_only_the_pages_own_style_and_script_pass(plain):
    page = text_of(plain)
    assert_own_parts_only(page)


def test_hostile_names_are_text_on_the_page(hostile):
    page = text_of(hostile)
    assert page.count("<script>") == 1
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in page
    assert "<img" not in page
    assert "{{ 7 * 7 }}" in page
    assert not re.search(r">[^<]*‮[^<]*<(?!/bdi)", re.sub(r'="[^"]*"', "", page))


def test_what_is_no_review_is_refused(tmp_path):
    with pytest.raises(OutputError, match=r"no review\.json in it"):
        review_page.render(tmp_path)
    (tmp_path / "review.json").write_text('{"format": 99}')
    with pytest.raises(OutputError, match=r"format 99.*review again"):
        review_page.render(tmp_path)
    (tmp_path / "review.json").write_text("{")
    with pytest.raises(OutputError, match="cannot be read"):
        review_page.render(tmp_path)
