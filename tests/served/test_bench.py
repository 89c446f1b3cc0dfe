"""The Bench in a real browser: readings typed down the grid, pasted, judged, weighed; a phone's width; a capture."""

import numpy as np
import pytest
from sumwright.engine.bench.plan import plan
from sumwright.engine.operating_point import operating_point
from sumwright.model import demo
from support.bench_stages import broken

from tests.served.serving import settled, wait

pytestmark = pytest.mark.browser

DESIGN = demo.design()
STEPS = plan(DESIGN)
OUTPUT = [i for i, s in enumerate(STEPS) if s.probe == "output" and s.unit == "V"]
GRID = ".bench .grid-box input"


def reading(board, i):
    return f"{operating_point(board, [STEPS[i].apply[n] for n in DESIGN.signal_names]).output:.4f}"


def open_bench(page):
    page.click("text=Bench")
    page.wait_for_selector(".bench .ask")
    settled(page)


def weighed(page):
    settled(page)
    wait(page, "!document.querySelector('.bench').innerText.includes('weighing')", 60)
    return page.inner_text(".bench .suspects")


def test_readings_typed_with_enter_find_the_wrong_leg(fresh):
    page = fresh
    open_bench(page)
    board = broken(DESIGN, "leg wrong value", "east", 1.3)
    page.locator(GRID).nth(OUTPUT[0]).click()
    for i in OUTPUT:
        page.keyboard.type(reading(board, i))
        page.keyboard.press("Enter")
        settled(page)
    suspects = weighed(page)
    assert "east" in suspects.splitlines()[1]
    row = page.locator(".bench .fits tr", has_text="east")
    assert "out" in row.inner_text()
    assert page.locator(".bench tr.now td").first.inner_text() == str(OUTPUT[-1] + 2)
    # a person's own limits, beside the weight they are of; where the page is narrow too
    page.set_viewport_size({"width": 1024, "height": 768})
    limits = row.locator("input")
    limits.click()
    page.keyboard.type("±40 %")
    page.keyboard.press("Enter")
    settled(page)
    assert row.locator("td").last.inner_text() == "in"
    assert page.evaluate(
        "document.querySelector('.bench .fits table').getBoundingClientRect().right <= document.querySelector('.bench .suspects').getBoundingClientRect().left"
    )
    limits.fill("wide")
    limits.press("Enter")
    settled(page)
    assert "write 0.24 to 0.26" in page.inner_text("#note").replace("\u202f", " ")
    assert limits.input_value() == "wide"


def test_a_column_pasted_fills_downward(fresh):
    page = fresh
    open_bench(page)
    board = broken(DESIGN, "none", "")
    text = "\n".join(reading(board, i).replace(".", ",") for i in OUTPUT)
    page.locator(GRID).nth(OUTPUT[0]).click()
    page.evaluate(
        """text => {
            const data = new DataTransfer(); data.setData('text', text)
            document.activeElement.dispatchEvent(new ClipboardEvent('paste', {clipboardData: data, bubbles: true, cancelable: true}))
        }""",
        text,
    )
    settled(page)
    assert [page.locator(GRID).nth(i).input_value() for i in OUTPUT] == text.split("\n")
    assert "nothing wrong" in weighed(page).splitlines()[1]


def test_a_reading_that_is_none_stays_as_typed_and_is_marked(fresh):
    page = fresh
    open_bench(page)
    cell = page.locator(GRID).nth(OUTPUT[0])
    cell.click()
    page.keyboard.type("0..91")
    page.keyboard.press("Enter")
    settled(page)
    assert cell.input_value() == "0..91"
    assert cell.get_attribute("aria-invalid") == "true"
    cell.click()
    page.keyboard.press("Escape")
    settled(page)
    assert cell.input_value() == ""
    # what is typed over is one undo away, and back again
    for text in ("0.91", "0.52"):
        cell.fill(text)
        cell.press("Enter")
        settled(page)
    for button, text in (("Undo", "0.91"), ("Undo", ""), ("Redo", "0.91"), ("Redo", "0.52")):
        page.get_by_role("button", name=button, exact=True).click()
        settled(page)
        assert cell.input_value() == text


def test_a_phone_shows_step_reading_fit_and_suspects_without_the_grid(fresh):
    page = fresh
    page.set_viewport_size({"width": 390, "height": 844})
    page.evaluate("() => sumwright.open('bench')")
    page.wait_for_selector(".bench .ask")
    settled(page)
    for shown in (".verdict .big", ".bench .ask", ".bench .read input", ".bench .fits", ".bench .suspects"):
        assert page.locator(shown).is_visible()
    assert not page.locator(".bench .grid-box").is_visible()
    assert page.evaluate("document.documentElement.scrollWidth <= innerWidth")
    first = page.inner_text(".bench .ask")
    page.click("text=Next step")
    settled(page)
    assert page.inner_text(".bench .ask") != first


def test_a_record_is_opened_mapped_and_laid_over(fresh):
    page = fresh
    open_bench(page)
    t = np.arange(3000) * 1e-5
    first = DESIGN.signal_names[0]
    s = DESIGN.signal(first)
    x = (s.low + s.high) / 2 + (s.high - s.low) / 4 * np.sin(2 * np.pi * 100 * t)
    point = operating_point(DESIGN)
    y = point.offset + point.contributions[1:].sum() + point.weights[0] * x
    rows = [f"t (s),{first},output", *(f"{a:.5f},{b:.5f},{c:.5f}" for a, b, c in zip(t, x, y, strict=True))]
    page.click("summary:has-text('Capture')")
    page.set_input_files(
        "[aria-label='Capture file']", {"name": "r.csv", "mimeType": "text/csv", "buffer": "\n".join(rows).encode()}
    )
    wait(
        page,
        "document.querySelector('.bench').innerText.includes('3 000 rows') || document.querySelector('.bench').innerText.includes('3\\u202f000 rows')",
        60,
    )
    page.click("text=Lay it over the prediction")
    wait(page, "document.querySelector('.bench').innerText.includes('bandwidth')", 60)
    settled(page)
    found = page.locator("[aria-label='Weights from the record'] tr", has_text=first).inner_text()
    assert f"{abs(point.weights[0]):.3f}" in found
