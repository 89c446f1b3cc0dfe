"""The sheet for everybody: WCAG 2.2 by axe-core on every fold and state, names for what moves, words for figures.

axe-core is Deque's open rule engine; its findings `serious` and `critical` are
held at none, on light and dark paper.
"""

import re

import pytest
from axe_playwright_python.sync_playwright import Axe

from .serving import settled, wait

pytestmark = pytest.mark.browser
RULES = {
    "runOnly": {"type": "tag", "values": ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]}
}
# What the other paper can change: colours, and nothing of names, roles and order.
RULES_OF_PAPER = {"runOnly": {"type": "rule", "values": ["color-contrast", "link-in-text-block"]}}


@pytest.fixture(scope="module")
def place(server, browser):
    return browser, server[1]


@pytest.fixture
def sheet(place):
    browser, url = place
    page = browser.new_page(viewport={"width": 1280, "height": 720})
    page.goto(f"{url}/app")
    settled(page)
    yield page
    page.close()


def turn(page, fold):
    page.evaluate("f => { location.hash = f }", fold)
    wait(page, f"sumwright.state.open === '{fold}' && !!document.querySelector('#f-{fold}')")
    page.wait_for_timeout(300)
    settled(page)


def folds(page):
    return [h.lstrip("#") for h in page.eval_on_selector_all("#crease a", "links => links.map(a => a.hash)")]


def findings(page, rules=RULES):
    """Serious and critical findings, each with the first places."""
    found = Axe().run(page, options=rules).response["violations"]
    return [
        (v["impact"], v["id"], [n["target"] for n in v["nodes"][:3]])
        for v in found
        if v["impact"] in ("serious", "critical")
    ]


SMALL_TYPE = """() => [...document.querySelectorAll('body *')]
  .filter(e => e.checkVisibility?.() && !e.closest('.vh') && [...e.childNodes].some(n => n.nodeType === 3 && n.data.trim()))
  .filter(e => parseFloat(getComputedStyle(e).fontSize) < 13.5 && e.getBoundingClientRect().width > 1)
  .map(e => e.tagName + ' ' + e.className + ' ' + e.textContent.slice(0, 20))"""
SLIDERS = """() => [...document.querySelectorAll('input[type=range], [role=slider]')].filter(e => e.checkVisibility())
  .map(e => [e.getAttribute('aria-label') || e.labels?.[0]?.textContent || '', e.min, e.max])"""


def test_every_fold_on_either_paper(place):
    """No serious finding; every figure told in words with its numbers; no type under 14 px; every slider named.

    One test, so that one worker walks through the folds once.
    """
    browser, url = place
    page = browser.new_page(viewport={"width": 1280, "height": 720})
    page.goto(f"{url}/app")
    settled(page)
    wrong, figures, sliders = [], 0, 0
    for theme in ("light", "dark"):
        page.evaluate("t => sumwright.act({do: 'theme', theme: t})", theme)
        settled(page)
        for fold in [*folds(page), "new"]:
            turn(page, fold)
            wrong += [(fold, theme, *f) for f in findings(page, RULES if theme == "light" else RULES_OF_PAPER)]
            wrong += [(fold, "small type", s) for s in page.evaluate(SMALL_TYPE)]
            for name, low, high in page.evaluate(SLIDERS):
                sliders += 1
                if not name.strip() or low == "" or high == "":
                    wrong.append((fold, "slider without name or range", name))
            # Bokeh draws on a canvas; what it shows must be there as text
            shown = page.eval_on_selector_all(
                f"#f-{fold} [data-slot]",
                "s => s.map(e => [e.dataset.slot, e.getAttribute('role'), e.getAttribute('aria-label') ?? ''])",
            )
            for slot, role, words in shown:
                figures += 1
                if role != "img" or len(words) < 30 or not re.search(r"\d", words):
                    wrong.append((fold, "figure without words", slot, words))
            drawings = page.eval_on_selector_all(
                f"#f-{fold} svg[role=img]", "s => s.map(e => e.getAttribute('aria-label'))"
            )
            wrong += [(fold, "drawing without words") for words in drawings if not words]
    page.close()
    assert wrong == []
    assert figures >= 10 and sliders >= 20


def test_states_have_no_serious_finding(sheet):
    """A wrong entry, a pulled cable, an open margin, an open drawer, a clipped output."""
    turn(sheet, "curves")
    field = sheet.locator(".sig .val input").first
    field.fill("7 bananas")
    field.press("Enter")
    wait(sheet, "!!document.querySelector('.sig [aria-invalid=true]')")
    assert sheet.locator("[role=alert]").filter(has_text="bananas").count() == 1
    sheet.locator(".plug[aria-pressed]").nth(1).click()
    sheet.locator(".chk").first.click()
    settled(sheet)
    assert findings(sheet) == []
    sheet.locator(".plate .act").first.click()
    settled(sheet)
    assert sheet.locator("#drawer").is_visible()
    assert findings(sheet) == []
    for field in sheet.locator("#drawer input.blank, .plate input.blank, .sig .val input.blank").all():
        field.focus()
        said = field.get_attribute("title") or ""
        assert " In " in said and "From " in said, field.get_attribute("aria-label")


def test_two_cells_and_sixteen_signals_have_no_serious_finding(sheet):
    weights = " ".join(f"{'+' if i % 3 else '-'} 0.0{i % 9 + 1} ch{i + 1}" for i in range(16))
    sheet.evaluate("t => sumwright.act({do: 'draw_sum', text: t})", f"out = {weights} + 0.2 V")
    settled(sheet)
    sheet.evaluate("sumwright.act({do: 'arrange', arrangement: 'two-stage'})")
    settled(sheet)
    turn(sheet, "curves")
    assert sheet.locator(".sig").count() >= 16
    assert findings(sheet) == []


def test_words_follow_the_hand(sheet):
    turn(sheet, "curves")
    words = "document.querySelector('[data-slot=curves_transfer]').getAttribute('aria-label')"
    before = sheet.evaluate(words)
    slider = sheet.locator(".sig input[type=range]").nth(1)
    slider.focus()
    slider.press("Home")
    wait(sheet, f"{words} !== {before!r}" if '"' not in before else f"{words}.length > 0")
    settled(sheet)
    assert sheet.evaluate(words) != before


def test_reduced_motion_is_respected(place):
    browser, url = place
    for wish, moving in (("no-preference", True), ("reduce", False)):
        page = browser.new_page(viewport={"width": 1280, "height": 720}, reduced_motion=wish)
        page.goto(f"{url}/app")
        settled(page)
        longest = page.evaluate(
            """() => Math.max(...[...document.querySelectorAll('*')].map(e => {
                 const s = getComputedStyle(e)
                 return Math.max(...[s.transitionDuration, s.animationDuration].flatMap(d => d.split(',').map(parseFloat)))
               }))"""
        )
        assert (longest > 0) is moving
        page.close()
