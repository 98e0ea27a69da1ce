"""The page of a review in a browser: offline, on a phone and a desk, by keyboard, on paper."""

import re

import pytest
from axe_playwright_python.sync_playwright import Axe
from report_fixtures import HOSTILE
from review_fixtures import made_up_review, nothing_to_say

from miner.report import review_page
from miner.review.folder import write

pytestmark = pytest.mark.browser

REVIEWS = {
    "plain": lambda: made_up_review(8),
    "many": lambda: made_up_review(200, statuses=("keep", "keep", "watch", "retire")),
    "quiet": nothing_to_say,
    "hostile": lambda: made_up_review(
        14, types=HOSTILE, target=HOSTILE[1], strata=HOSTILE[:4], entities=HOSTILE, study=HOSTILE[0]
    ),
}


@pytest.fixture(scope="module")
def page_of(tmp_path_factory):
    """Paths of the pages, each written once."""
    made = {}

    def path(which):
        if which not in made:
            folder = tmp_path_factory.mktemp(which) / "review"
            write(REVIEWS[which](), folder)
            made[which] = review_page.render(folder)
        return made[which]

    return path


def shown(page):
    return page.locator("#rules tbody tr:visible")


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [390, 1440])
@pytest.mark.parametrize("which", ["plain", "quiet", "hostile"])
def test_no_sideways_scroll_and_no_fault_for_who_cannot_see(which, width, scheme, page_of, opened):
    axe = Axe()
    page = opened(page_of(which), width, scheme)
    assert page.evaluate("document.documentElement.scrollWidth") == width
    found = axe.run(page)
    assert found.violations_count == 0, found.generate_report()
    assert page.locator("svg[role=img]").count() > (0 if which == "quiet" else 40) - 1


def test_a_book_of_many_rules_is_found_through_by_words_and_proposal(page_of, opened):
    page = opened(page_of("many"))
    assert page.evaluate("document.documentElement.scrollWidth") == 1440
    assert page.locator("#shown").inner_text() == "200 of 200 shown"
    page.locator("#filters select").select_option("watch")
    assert shown(page).count() == 50
    page.get_by_label("Find").fill("dune changed")
    assert 0 < shown(page).count() < 50
    assert "alerts changed" in shown(page).first.inner_text()


def test_the_book_sorts_by_its_numbers(page_of, opened):
    page = opened(page_of("many"))
    for title in ("Promise broken", "Since adoption", "This quarter"):
        page.locator("#rules").get_by_role("button", name=title, exact=True).click()
        heads = page.locator("#rules thead th").all_inner_texts()
        at = next(i for i, head in enumerate(heads) if head.rstrip(" ↑↓") == title)
        cells = page.evaluate(
            "at => [...document.querySelectorAll('#rules tbody tr')]"
            ".map(row => row.cells[at].textContent.trim())",
            at,
        )
        values = [float(re.split("[% ]", cell)[0]) for cell in cells if not cell.startswith("–")]
        assert len(set(values)) > 2
        assert values == sorted(values)


def test_it_is_used_with_the_keyboard_alone(page_of, opened):
    page = opened(page_of("many"))
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.textContent") == "Skip to the answer"
    page.keyboard.press("Enter")
    assert page.url.endswith("#answer")
    folded = page.locator("details.folded summary").first
    folded.focus()
    page.keyboard.press("Enter")
    assert page.locator("details.folded article.card").first.is_visible()


def test_a_link_to_a_folded_rule_opens_it(page_of, opened):
    page = opened(page_of("many"))
    link = page.locator("#rules tbody tr").last.locator("a").first
    place = link.get_attribute("href")
    link.click()
    assert page.locator(place).is_visible()


def test_it_prints_on_white_whatever_the_screen(page_of, opened, tmp_path):
    page = opened(page_of("plain"), scheme="dark")
    page.emulate_media(media="print", color_scheme="dark")
    colours = page.evaluate("getComputedStyle(document.documentElement).backgroundColor")
    assert colours == "rgb(255, 255, 255)"
    assert page.locator("nav").is_hidden()
    assert shown(page).count() == 8
    pdf = page.pdf(path=str(tmp_path / "review.pdf"), format="A4", print_background=True)
    assert pdf.startswith(b"%PDF-")
    assert 5 < len(re.findall(rb"/Type\s*/Page\b", pdf)) < 30


def test_hostile_names_stay_text_and_in_their_place(page_of, opened):
    page = opened(page_of("hostile"))
    told = " ".join(page.evaluate("document.body.textContent").split())
    for name in HOSTILE:
        assert " ".join(name.split()) in told
    assert page.locator("h1").inner_text() == f"{HOSTILE[0]}: 2025Q3"
    assert page.locator("main script, img, iframe").count() == 0
    turned = page.locator("bdi", has_text="drawkcab").first
    assert turned.evaluate("x => getComputedStyle(x).unicodeBidi") == "isolate"


def test_it_reads_without_its_script(page_of, chromium):
    context = chromium.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto(page_of("plain").as_uri())
    assert page.locator("#filters").is_hidden()
    assert shown(page).count() == 8
    context.close()
