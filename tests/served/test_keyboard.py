"""The whole job by keyboard alone: no pointer is touched from the first look to the report in hand."""

import re

import pytest

from .serving import settled, wait

pytestmark = pytest.mark.browser


class Hands:
    """Ten fingers: Tab to a thing by what it says, then type or press."""

    def __init__(self, page):
        self.page = page

    def where(self):
        """What has the focus: tag, name, whether its focus can be seen."""
        return self.page.evaluate(
            """() => {
                 const e = document.activeElement
                 const name = e.getAttribute('aria-label') || e.labels?.[0]?.textContent || e.textContent || ''
                 const s = getComputedStyle(e)
                 const seen = s.outlineStyle !== 'none' || parseFloat(s.borderBottomWidth) >= 2 || e.type === 'range'
                 return [e.tagName, name.trim().replace(/\\s+/g, ' '), seen]
               }"""
        )

    def tab_to(self, name, tag=None, most=260):
        """Press Tab until what has the focus is called `name` (a pattern)."""
        been = []
        for _ in range(most):
            self.page.keyboard.press("Tab")
            found, said, seen = self.where()
            been.append(said[:30])
            if re.fullmatch(name, said) and (tag is None or tag == found):
                assert seen, f"the focus on {said!r} cannot be seen"
                return said
        raise AssertionError(f"Tab never reached {name!r}; it went past {been[:80]}")

    def press(self, *keys):
        for key in keys:
            self.page.keyboard.press(key)
        settled(self.page)

    def type(self, text, then="Enter"):
        self.page.keyboard.type(text)
        self.press(then)

    def turn(self, fold):
        self.tab_to(fold, "A")
        self.press("Enter")
        wait(self.page, f"sumwright.state.open === '{fold.lower()}'")
        settled(self.page)
        self.page.wait_for_timeout(200)


@pytest.fixture
def hands(server, browser):
    context = browser.new_context(viewport={"width": 1280, "height": 720}, accept_downloads=True)
    page = context.new_page()
    page.goto(f"{server[1]}/app")
    settled(page)
    yield Hands(page)
    context.close()


def test_from_a_sum_to_a_proven_board_and_its_report(hands):
    page = hands.page
    # a new sum
    hands.tab_to("New")
    hands.press("Enter")
    wait(page, "sumwright.state.open === 'new'")
    wait(page, "document.activeElement.getAttribute('aria-label') === 'The sum'")
    page.keyboard.type("out = 0.2 left + 0.3 right - 0.1 zero + 0.5 V")
    hands.tab_to("window of the output, from")
    page.keyboard.type("-2")
    hands.tab_to("window of the output, to")
    hands.type("8")
    wait(
        page,
        "sumwright.state.open === 'curves' && sumwright.state.signals.order.length === 3 && sumwright.state.plate.target.high === '8'",
    )
    # move a signal, type a value, pull and plug a cable
    hands.tab_to("left(, volts.*)?", "INPUT")
    before = page.evaluate("sumwright.state.stage.output")
    hands.press("ArrowRight", "ArrowRight")
    assert page.evaluate("sumwright.state.stage.output") > before
    hands.tab_to("left, typed value")
    hands.type("4.5")
    rows = "sumwright.state.signals.rows.find(r => r.name === 'left')"
    assert page.evaluate(f"{rows}.value") == pytest.approx(4.5)
    hands.tab_to("pull the left cable out")
    hands.press("Space")
    assert page.evaluate("sumwright.state.stage.unplugged") == ["left"]
    hands.press("Space")
    assert page.evaluate("sumwright.state.stage.unplugged") == []
    # a margin opened for its reason
    hands.tab_to("(Swing to|Phase margin|Supply|Inputs to).*", "BUTTON")
    hands.press("Enter")
    assert page.evaluate("document.activeElement.getAttribute('aria-expanded')") == "true"
    # a set of values taken
    hands.turn("Choices")
    wait(
        page,
        "(sumwright.state.shown.choices?.shown?.rows ?? []).length > 1 && sumwright.state.shown.choices.shown.share === null",
        60,
    )
    cells = page.evaluate("JSON.stringify(sumwright.state.stage.cells.map(c => [c.minus, c.plus, c.feedback]))")
    hands.tab_to(".*(mixed-sign|two-stage).*", "BUTTON")
    hands.press("Enter")
    hands.tab_to("Take this set")
    hands.press("Enter")
    wait(page, f"JSON.stringify(sumwright.state.stage.cells.map(c => [c.minus, c.plus, c.feedback])) !== {cells!r}")
    # budget and response can be read
    hands.turn("Budget")
    hands.turn("Response")
    # two readings on the bench
    hands.turn("Bench")
    shown = "sumwright.state.shown?.bench?.shown"
    wait(page, f"!!({shown})")
    for text in ("12k", "11.9k"):
        hands.tab_to("Reading, .*")
        hands.type(text)
    assert page.evaluate(f"{shown}.taken") >= 1
    # a decision in the log
    hands.turn("Log")
    hands.tab_to("Text of the entry.*")
    page.keyboard.type("Take these values: the window holds.")
    hands.press("Control+Enter")
    wait(page, "document.querySelectorAll('.log li').length >= 1", 20)
    # the report in hand
    hands.turn("Report")
    hands.tab_to("Keep: Design report")
    with page.expect_download(timeout=60_000) as got:
        page.keyboard.press("Enter")
    assert got.value.suggested_filename.endswith(".html")


def test_the_focus_is_never_trapped_and_never_lost(hands):
    """Tab comes round again, through every part of the sheet, and Shift+Tab goes back the same way."""
    seen = []
    for _ in range(160):
        hands.page.keyboard.press("Tab")
        tag, name, _ = hands.where()
        if tag == "BODY":
            break
        seen.append(name)
    else:
        pytest.fail("Tab does not come round")
    words = " ".join(seen)
    for part in ("Title of the sheet", "New", "typed value", "Curves", "Log"):
        assert part in words
    hands.page.keyboard.press("Shift+Tab")
    assert hands.where()[1] == seen[-1]
