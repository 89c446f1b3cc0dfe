"""The fold Choices in a real browser: found, previewed, taken, undone; the drawer, the parts list, the picture."""

import csv
import io

import pytest

from tests.support.browser import chromium

from .serving import served, settled, wait

pytestmark = pytest.mark.browser

SHOWN = "window.sumwright?.state?.shown?.choices?.shown"
FOUND = f"{SHOWN} && {SHOWN}.share === null && {SHOWN}.rows.length"


@pytest.fixture(scope="module")
def address():
    with served() as (_, url):
        yield url


@pytest.fixture(scope="module")
def browser():
    with chromium() as opened:
        yield opened


@pytest.fixture
def page(browser, address):
    tab = browser.new_page(viewport={"width": 1280, "height": 720})
    wrong = []
    tab.on("pageerror", lambda e: wrong.append(str(e)))
    tab.on("console", lambda m: wrong.append(m.text) if m.type == "error" else None)
    tab.goto(f"{address}/app#choices")
    wait(tab, FOUND, 90)
    settled(tab)
    yield tab
    tab.close()
    assert wrong == []


def shown(page, path):
    return page.evaluate(f"{SHOWN}.{path}")


def test_preview_take_and_undo(page):
    cells = page.evaluate("JSON.stringify(sumwright.state.stage)")
    page.locator(".choices .rows .pick").first.click()
    wait(page, f"{SHOWN}.picked === 0 && {SHOWN}.open.picked")
    assert "Worst weight error" in page.locator(".choices .pane .note").first.inner_text()
    assert page.locator(".choices .pane table").nth(1).locator("tbody tr").count() >= 5
    assert page.evaluate("JSON.stringify(sumwright.state.stage)") == cells  # nothing is taken yet
    page.get_by_role("button", name="Take this set").click()
    wait(page, f"{SHOWN}.rows.some(r => r.same)")
    settled(page)
    assert page.evaluate("JSON.stringify(sumwright.state.stage)") != cells
    page.keyboard.press("Control+z")
    wait(page, f"!{SHOWN}.rows.some(r => r.same)")
    settled(page)
    assert page.evaluate("JSON.stringify(sumwright.state.stage)") == cells


def test_a_row_is_picked_by_keyboard_alone(page):
    page.locator(".choices .rows .pick").nth(2).focus()
    page.keyboard.press("Enter")
    wait(page, f"{SHOWN}.picked === 2")
    assert page.locator(".choices .rows .pick").nth(2).get_attribute("aria-pressed") == "true"


def test_a_point_of_the_picture_is_picked_and_told_by_hovering(page):
    at = page.evaluate("""() => {
      const f = Bokeh.documents.map(d => d.get_model_by_name('choices map')).find(Boolean)
      const view = Bokeh.index.find_one_by_id(f.id), data = f.renderers.find(r => r.glyph.type === 'Scatter').data_source.data
      const k = data.x.length - 1
      return [view.frame.x_scale.compute(data.x[k]), view.frame.y_scale.compute(data.y[k])]
    }""")
    box = page.locator(".choices .slot").bounding_box()
    page.mouse.move(box["x"] + at[0], box["y"] + at[1])
    page.wait_for_timeout(400)
    told = page.evaluate("""() => {
      const deep = n => [...n.querySelectorAll('*')].flatMap(c => [c, ...(c.shadowRoot ? deep(c.shadowRoot) : [])])
      return deep(document).filter(n => n.className?.includes?.('bk-Tooltip')).map(n => n.shadowRoot.textContent).join('')
    }""")
    assert "worst weight" in told and "north" in told
    page.mouse.click(box["x"] + at[0], box["y"] + at[1])
    wait(page, f"{SHOWN}.picked !== null")


def test_a_drawer_is_read_searched_and_refused(page):
    page.get_by_role("tab", name="Drawer").click()
    field = page.locator(".choices input[type=file]")
    field.set_input_files({"name": "bad.csv", "mimeType": "text/csv", "buffer": b"value,count\n4k7,-3\n"})
    wait(page, "document.getElementById('note').textContent.includes('Line 2 of the drawer, count')")
    good = "\ufeffvalue;count\n" + "".join(f"{v};4\n" for v in ("10k", "22k", "47k", "68k", "100k", "150k", "220k"))
    field.set_input_files({"name": "mine.csv", "mimeType": "text/csv", "buffer": good.encode()})
    wait(page, f"{SHOWN}.use_drawer")
    wait(page, FOUND, 90)
    settled(page)
    assert "mine.csv: 7 values" in page.locator(".choices .pane").inner_text()
    page.get_by_role("button", name="from the drawer").click()
    wait(page, f"!{SHOWN}.use_drawer")


def test_the_parts_list_is_saved(page):
    page.get_by_role("tab", name="Parts list").click()
    wait(page, f"{SHOWN}.pane === 'parts'")
    with page.expect_download() as got:
        page.get_by_role("button", name="Save as CSV").click()
    rows = list(csv.DictReader(io.StringIO(got.value.path().read_text())))
    assert sum(int(r["count"]) for r in rows if r["part"] == "resistor") == shown(page, "now.resistors")


def test_a_measured_weight_and_a_span_are_typed(page):
    page.get_by_role("tab", name="Trim").click()
    field = page.get_by_label("Measured weight of").first
    field.fill("-0.17")
    field.press("Enter")
    wait(page, f"{SHOWN}.open.rows?.some(r => r.how === 'parallel')")
    field.fill("much")
    field.press("Enter")
    wait(page, "document.activeElement.getAttribute('aria-invalid') === 'true'")
    assert field.input_value() == "much"
    field.press("Escape")
    page.get_by_role("tab", name="Spans").click()
    high = page.get_by_label("Highest output, volts")
    high.fill("4V5")
    high.press("Enter")
    wait(page, f"{SHOWN}.open.high === 4.5 || document.getElementById('note').textContent")


def test_the_sheet_stays_live_while_it_searches_and_stop_stops(page):
    page.get_by_role("button", name="pairs").click()
    wait(page, f"{SHOWN}.pairs && {SHOWN}.share !== null")
    page.locator(".mini input[type=range]").first.focus()
    page.keyboard.press("ArrowRight")
    settled(page)  # answered while the search runs
    if shown(page, "share") is not None:
        page.get_by_role("button", name="Stop").click()
        wait(page, f"{SHOWN}.share === null")
        page.get_by_role("button", name="Search again").click()
    wait(page, FOUND, 90)
    page.get_by_role("button", name="pairs").click()
    wait(page, f"!{SHOWN}.pairs")


@pytest.mark.parametrize("size", [(1280, 720), (1920, 1080), (1024, 768)])
def test_it_fits(browser, address, size):
    tab = browser.new_page(viewport={"width": size[0], "height": size[1]})
    tab.goto(f"{address}/app#choices")
    wait(tab, FOUND, 90)
    tab.locator(".choices .rows .pick").nth(1).click()
    wait(tab, f"{SHOWN}.picked === 1")
    settled(tab)
    assert tab.evaluate("document.documentElement.scrollWidth") <= size[0]
    right, table = (tab.locator(s).first.bounding_box() for s in (".choices .right", ".choices .rows table"))
    assert table["width"] <= right["width"] + 1
    tab.close()
