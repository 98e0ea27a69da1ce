"""The report from a run's folder: words, files, hostile names; the page in a browser."""

import re
import shutil
from zipfile import ZipFile

import openpyxl
import pytest
from axe_playwright_python.sync_playwright import Axe
from browser_pages import assert_own_parts_only
from report_fixtures import HOSTILE, RLO, made_up_run, write_json

from miner.columns import CANDIDATE_COLUMNS
from miner.errors import OutputError
from miner.report import render, render_into, words
from miner.report.read_run import read_run
from miner.report.svg import Plot, ticks


def text_of(path):
    return path.read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """The page of a run with everything in it, two targets, two strata."""
    folder = tmp_path_factory.mktemp("plain")
    return render(made_up_run(folder, n_candidates=80, n_rules=8, targets=("upset", "raid")))


@pytest.fixture(scope="module")
def hostile(tmp_path_factory):
    """The page of a run in which every name is out to break it."""
    folder = tmp_path_factory.mktemp("hostile")
    return render(
        made_up_run(
            folder,
            n_candidates=60,
            n_rules=6,
            targets=HOSTILE[:2],
            strata=("all", HOSTILE[2], HOSTILE[3]),
            types=HOSTILE,
            entities=HOSTILE,
            study=HOSTILE[0],
        )
    )


# --- words ---------------------------------------------------------------------------------------


def test_numbers_read_as_people_write_them():
    assert [words.percent(x) for x in (None, 0, 0.0034, 0.034, 0.34, 1)] == [
        "–", "0%", "0.34%", "3.4%", "34%", "100%",
    ]  # fmt: skip
    assert [words.level(x) for x in (0.05, 0.001, 0.055)] == ["5%", "0.1%", "5.5%"]
    assert [words.p_text(p) for p in (None, 1e-300, 1.234e-8, 0.5)] == [
        "–", "< 1e-300", "1.2e-08", "0.5",
    ]  # fmt: skip
    assert words.number(1234.5) == "1,234"
    assert words.number(3.25) == "3.2"
    assert words.short(2.0) == "2"
    assert words.some(0, "rule") == "no rules"
    assert words.some(1, "entity", "entities") == "1 entity"
    assert words.some(1500, "entity", "entities") == "1,500 entities"
    assert words.listed([1]) == "1"
    assert words.listed([1, 2, 3]) == "1, 2 and 3"
    assert words.day("2021-03-05") == "5 Mar 2021"


def test_names_are_escaped_and_kept_from_turning_their_surroundings():
    assert words.combination("a<b + c") == "a&lt;b + c"
    assert words.combination(f"{RLO}x + y") == f"<bdi>{RLO}x</bdi> + y"


def test_ticks_are_round_and_inside():
    assert ticks(0.47) == [0.0, 0.2, 0.4]
    assert ticks(10) == [0.0, 5.0, 10.0]
    assert ticks(0) == [0.0]
    for high in (0.013, 0.99, 7, 55, 1234):
        marks = ticks(high)
        assert 2 <= len(marks) <= 5
        assert marks[-1] <= high * (1 + 1e-9)


def test_a_plot_maps_data_into_its_frame():
    plot = Plot((0, 10), (0, 1), width=100, height=50, margin=(5, 10, 15, 20))
    assert (plot.px(0), plot.px(10)) == (20, 90)
    assert (plot.py(0), plot.py(1)) == (35, 5)
    plot.line([(0, 0), (5, None), (10, 1)], "x")
    image = plot.done('a "label" <b>')
    assert 'd="M20 35M90 5"' in image
    assert 'aria-label="a &#34;label&#34; &lt;b&gt;"' in image


# --- the page's text -----------------------------------------------------------------------------


def flat(page):
    """The page's words without markup."""
    body = re.sub(r"<(style|script)>.*?</\1>", " ", text_of(page), flags=re.S)
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", body))


def test_the_answer_comes_first_and_in_words(plain):
    told = flat(plain)
    assert (
        "Of 320 combinations with at least 20 triggers, 17 beat the null at 5%; 8 explain the "
        "rest; 3 held after 1 Jul 2022."
    ) in told
    assert "finds 0.1 rules on average in your data when there is nothing to find" in told
    assert "Too few clusters for a close interval: rules 2, 4, 6 and 8." in told
    assert "goes from about 0 to 62 a month" in told
    assert "31% by the confirmed rules, 33% by gradient boosting" in told
    order = re.findall(r'<section id="(\w+)"', text_of(plain))
    assert order == [
        "answer", "rules", "cards", "types", "together", "funnel", "candidates", "method",
    ]  # fmt: skip


def test_a_run_that_finds_nothing_says_so(tmp_path):
    told = flat(render(made_up_run(tmp_path, n_candidates=5, n_rules=0)))
    assert "9 beat the null" in told
    assert "Nothing here precedes the events more often than chance" in told
    assert "Rule by rule" not in told
    told = flat(render(made_up_run(tmp_path / "empty", n_candidates=0, n_rules=0)))
    assert "Nothing could be judged: no combination has 20 triggers in discovery." in told


def test_what_explained_a_candidate_is_linked_within_and_across_strata(plain):
    run = read_run(plain.parent)
    explained = [row for row in run.candidates if row["verdict"] == "explained"]
    assert {"[" in row["explained_by"] for row in explained} == {True, False}
    body = re.search(r'<table id="candidates-table">.*?</table>', text_of(plain), re.S).group()
    rows = re.findall(r"<tr>.*?</tr>", body, re.S)[1:]
    assert len(rows) == len(run.candidates)
    linked = [row for row in rows if ">explained</td>" in row]
    assert len(linked) == len(explained) > 5
    assert all('href="#rule-1"' in row for row in linked)


def test_the_policy_lets_only_the_pages_own_style_and_script_pass(plain):
    page = text_of(plain)
    assert_own_parts_only(page)


def test_the_page_is_the_same_each_time_and_small(tmp_path):
    folder = made_up_run(
        tmp_path, n_candidates=1000, n_rules=20, strata=("all", "large", "mid", "small"),
        types=[f"type number {k}" for k in range(40)],
    )  # fmt: skip
    page = render(folder)
    first = page.read_bytes(), (folder / "candidates.xlsx").read_bytes()
    assert len(first[0]) < 1_500_000
    assert page == folder / "report.html"
    assert render_into(folder) == page
    assert (page.read_bytes(), (folder / "candidates.xlsx").read_bytes()) == first


def test_more_candidates_than_the_page_takes_are_counted(tmp_path, monkeypatch):
    monkeypatch.setattr("miner.report.read_run.MOST_ROWS", 10)
    page = text_of(render(made_up_run(tmp_path, n_candidates=40)))
    assert "The 10 with the smallest p are here" in page
    assert page.count('<tr><th scope="row">', page.index("candidates-table")) >= 10


def test_hostile_names_are_text_on_the_page(hostile):
    page = text_of(hostile)
    assert page.count("<script>") == 1
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in page
    assert "<img" not in page
    assert "{{ 7 * 7 }}" in page
    assert not re.search(r">[^<]*‮[^<]*<(?!/bdi)", re.sub(r'="[^"]*"', "", page))


def test_what_is_no_run_is_refused(tmp_path, plain):
    with pytest.raises(OutputError, match=r"no run\.json in it"):
        render(tmp_path)
    copy = tmp_path / "copy"
    shutil.copytree(plain.parent, copy)
    write_json(copy / "evidence.json", {"format": 99})
    with pytest.raises(OutputError, match=r"format 99.*hunt again"):
        render(copy)
    (copy / "evidence.json").write_text("{")
    with pytest.raises(OutputError, match="cannot be read"):
        render(copy)


# --- the workbook --------------------------------------------------------------------------------


def test_the_workbook_holds_every_value_and_nothing_that_runs(hostile):
    book = openpyxl.load_workbook(hostile.parent / "candidates.xlsx")
    run = read_run(hostile.parent)
    assert book.sheetnames == ["candidates", "rules"]
    for sheet, rows in ((book["candidates"], run.foremost), (book["rules"], run.rules)):
        cells = list(sheet.iter_rows())
        assert [cell.value for cell in cells[0]] == list(CANDIDATE_COLUMNS)
        assert len(cells) == len(rows) + 1 > 5
        for line, row in zip(cells[1:], rows, strict=True):
            for cell, (name, value) in zip(line, row.items(), strict=True):
                is_float = isinstance(value, float)
                value = pytest.approx(value, rel=1e-14) if is_float else value
                assert cell.value == (None if value == "" else value), name
                assert cell.data_type in ("s", "n")
                assert cell.hyperlink is None
    assert any(row["stratum"].startswith("=") for row in run.candidates)
    with ZipFile(hostile.parent / "candidates.xlsx") as parts:
        for name in parts.namelist():
            assert b"<f>" not in parts.read(name)
            assert b"<hyperlink" not in parts.read(name)


# --- in a browser --------------------------------------------------------------------------------


def shown(page):
    return page.locator("#candidates-table tbody tr:visible")


def column(page, title):
    heads = page.locator("#candidates-table thead th").all_inner_texts()
    at = next(i for i, head in enumerate(heads) if head.rstrip(" ↑↓") == title)
    return page.evaluate(
        "at => [...document.querySelectorAll('#candidates-table tbody tr')]"
        ".filter(row => !row.hidden).map(row => row.cells[at].textContent.trim())",
        at,
    )


@pytest.mark.browser
def test_the_table_sorts_both_ways_with_numbers_as_numbers(plain, opened):
    page = opened(plain)
    for title, of in (("Triggers", int), ("Precision", float), ("p", float), ("Combination", str)):
        button = page.get_by_role("button", name=title, exact=True)
        button.click()

        def values(of=of, title=title):
            return [
                x if of is str else of(x.replace(",", "").rstrip("%")) for x in column(page, title)
            ]

        up = values()
        assert up == sorted(up)
        assert len(set(up)) > 10
        head = page.locator("#candidates-table th[aria-sort]")
        assert head.get_attribute("aria-sort") == "ascending"
        button.press("Enter")
        assert values() == sorted(up, reverse=True)
        assert head.get_attribute("aria-sort") == "descending"


@pytest.mark.browser
def test_the_table_filters_by_words_and_choices(plain, opened):
    page = opened(plain)
    run = read_run(plain.parent)
    n = len(run.candidates)
    assert page.locator("#shown").inner_text() == f"{n} of {n} shown"
    page.get_by_label("Find").fill("amber CEDAR")
    wanted = [r for r in run.candidates if {"amber", "cedar"} <= set(r["combination"].split(" + "))]
    assert 0 < len(wanted) < n
    assert shown(page).count() == len(wanted)
    assert page.locator("#shown").inner_text() == f"{len(wanted)} of {n} shown"
    page.get_by_label("Find").fill("")
    page.locator("#by-verdict").select_option("explained")
    page.locator("#filters").get_by_label("Target").select_option("raid")
    wanted = [r for r in run.candidates if (r["verdict"], r["target"]) == ("explained", "raid")]
    assert shown(page).count() == len(wanted) > 0
    page.get_by_label("Find").fill("no such thing")
    assert shown(page).count() == 0
    page.locator("#rule-1 a[data-rule]").click()
    explained = [r for r in run.candidates if r["verdict"] == "explained"]
    assert shown(page).count() == len(explained) + 1
    assert set(column(page, "Rule")) == {"1"}


@pytest.mark.browser
@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [390, 1440])
@pytest.mark.parametrize("which", ["plain", "hostile"])
def test_no_sideways_scroll_and_no_fault_for_who_cannot_see(which, width, scheme, opened, request):
    axe = Axe()
    page = opened(request.getfixturevalue(which), width, scheme)
    assert page.evaluate("document.documentElement.scrollWidth") == width
    found = axe.run(page)
    assert found.violations_count == 0, found.generate_report()
    assert page.locator("svg[role=img]").count() > 20


@pytest.mark.browser
def test_it_is_used_with_the_keyboard_alone(plain, opened):
    page = opened(plain)
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.textContent") == "Skip to the answer"
    page.keyboard.press("Enter")
    assert page.url.endswith("#answer")
    page.locator("#find").focus()
    page.keyboard.type("amber")
    assert 0 < shown(page).count() < 80
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.id") == "by-verdict"


@pytest.mark.browser
def test_it_prints_whole_on_white_whatever_the_screen(plain, opened, tmp_path):
    page = opened(plain, scheme="dark")
    page.emulate_media(media="print", color_scheme="dark")
    colours = page.evaluate("getComputedStyle(document.documentElement).backgroundColor")
    assert colours == "rgb(255, 255, 255)"
    assert page.locator("nav").is_hidden()
    assert shown(page).count() == 50
    assert page.locator("article.card").count() == 8
    pdf = page.pdf(path=str(tmp_path / "report.pdf"), format="A4", print_background=True)
    assert pdf.startswith(b"%PDF-")
    assert 8 < len(re.findall(rb"/Type\s*/Page\b", pdf)) < 30


@pytest.mark.browser
def test_hostile_names_stay_text_and_in_their_place(hostile, opened):
    page = opened(hostile)
    told = page.inner_text("body")
    for name in HOSTILE:
        assert " ".join(name.split()) in " ".join(told.split())
    assert page.locator("h1").inner_text() == HOSTILE[0]
    assert page.title().startswith(HOSTILE[0])
    assert page.locator("main script, img, iframe").count() == 0
    turned = page.locator("bdi", has_text="drawkcab").first
    assert turned.evaluate("x => getComputedStyle(x).unicodeBidi") == "isolate"
    page.locator("#candidates select").nth(1).select_option(HOSTILE[1])
    assert 0 < shown(page).count() < 60


@pytest.mark.browser
def test_it_reads_without_its_script(plain, chromium):
    context = chromium.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto(plain.as_uri())
    assert page.locator("#filters").is_hidden()
    assert shown(page).count() == 80
    context.close()
