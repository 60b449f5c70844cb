"""Every page that a rehearsal writes, judged in a real browser: headless Chromium with axe-core.

Skipped with the reason where no browser or axe-core is installed; fails there with SHEDWRIGHT_BROWSER_REQUIRED=1.
"""

import io
import sys
from collections.abc import Iterator
from pathlib import Path

import pypdf
import pytest
from conftest import Practice
from made_record import SITE_FACTS, made_call

sys.path.insert(0, str(Path(__file__).parent / "browser"))
from chrome import Chrome, axe_source, chrome

from fleet.called import called_sites
from fleet.orders import orders
from fleet.pages.order_sheet import sheet_page
from fleet.pages.sheet import Link

PHONE, DESK = 360, 1200
NASTY = '<script>window.hit=1</script>=cmd()\u202e\u200f"\U0001f9ca' + "n" * 200


@pytest.fixture(scope="module")
def browser() -> Iterator[Chrome]:
    with chrome() as session:
        yield session


def pages(practice: Practice) -> list[Path]:
    return sorted((practice.fleet / "pages").rglob("*.html"))


def kinds(practice: Practice) -> list[Path]:
    """One page of each kind: sheets and site statements are many of a kind."""
    found = {
        (page.parent.name, "" if page.stem[:3].isdigit() else page.stem): page for page in pages(practice)
    }
    return sorted(found.values())


def test_no_page_complains_asks_the_network_or_is_wider_than_a_phone(practice: Practice, browser: Chrome):
    seen = 0
    for page in pages(practice):
        browser.see(page, PHONE)
        width, inner = browser.run("return [document.documentElement.scrollWidth, window.innerWidth]")
        assert width <= inner == PHONE, f"{page.name} scrolls sideways: {width}"
        seen += 1
    assert not [url for url in browser.requests() if not url.startswith("file:")]
    assert browser.complaints() == []
    assert seen == len(pages(practice)) >= 40


def test_axe_finds_no_fault_of_labels_or_contrast_on_any_page(practice: Practice, browser: Chrome):
    source, judged = axe_source(), 0
    for page in pages(practice):
        browser.see(page, DESK)
        assert browser.faults(source) == [], page.name
        judged += 1
    assert judged == len(pages(practice)) >= 40


def test_axe_finds_none_in_the_dark_with_all_numbers_open(practice: Practice, browser: Chrome):
    source = axe_source()
    for page in kinds(practice):
        browser.see(page, PHONE, dark=True)
        browser.run("document.querySelectorAll('details').forEach(one => { one.open = true; })")
        assert browser.faults(source) == [], page.name
    assert len(kinds(practice)) >= 8


@pytest.mark.parametrize("paper", ["A4", "Letter"])
def test_every_order_prints_on_one_page(practice: Practice, browser: Chrome, paper: str):
    sheets = [page for page in pages(practice) if page.parent.name == "orders"]
    assert len(sheets) >= 10
    for page in sheets:
        browser.see(page)
        assert len(pypdf.PdfReader(io.BytesIO(browser.pdf(paper))).pages) == 1, page.name


@pytest.mark.parametrize("paper", ["A4", "Letter"])
def test_nothing_is_cut_off_on_paper(practice: Practice, browser: Chrome, paper: str):
    for page in kinds(practice):
        assert browser.on_paper(page, paper) == [], page.name


def test_a_crowded_hostile_order_still_prints_on_one_page_and_does_nothing(tmp_path: Path, browser: Chrome):
    facts = ({"site_id": "harbour-court", "site_words": f"units=us; contact={NASTY}; {NASTY}"}, SITE_FACTS[1])
    record = made_call(facts=facts, purpose="test")
    page = tmp_path / "sheet.html"
    page.write_text(
        sheet_page(orders(record)[0], [Link("x", "x.html")], called_sites(record)[0]), encoding="utf-8"
    )
    source = axe_source()
    browser.see(page, PHONE)
    assert browser.run("return window.hit") is None
    assert browser.run("return document.documentElement.scrollWidth") == PHONE
    assert "<script>window.hit=1</script>=cmd()" in browser.run("return document.body.innerText")
    assert browser.faults(source) == []
    for paper in ("A4", "Letter"):
        assert len(pypdf.PdfReader(io.BytesIO(browser.pdf(paper))).pages) == 1


def test_a_page_can_be_used_with_the_keyboard_alone(practice: Practice, browser: Chrome):
    """Tab reaches the skip link, every link and every summary; Enter opens a chart's numbers."""
    from selenium.webdriver.common.keys import Keys

    browser.see(practice.fleet / "pages" / "practice" / "event.html")
    reached = []
    for _ in range(12):
        browser.driver.switch_to.active_element.send_keys(Keys.TAB)
        reached.append(browser.run("return document.activeElement.textContent.trim()"))
        if reached[-1].startswith("Numbers of"):
            break
    assert reached[0] == "To the page"
    assert "Orders" in reached
    assert reached[-1].startswith("Numbers of")
    browser.driver.switch_to.active_element.send_keys(Keys.ENTER)
    assert browser.run("return document.activeElement.parentElement.open") is True
