"""The sheet in a real browser: what a person sees follows the hand, and a wrong entry loses nothing."""

import json
import re
import subprocess
import sys

import pytest
from sumwright.engine.operating_point import operating_point
from sumwright.files.design import read_design, write_design
from sumwright.model import demo, edits, sums

from tests.served.serving import settled, wait

pytestmark = pytest.mark.browser

VALUE = '[aria-label="{}, typed value"]'


def number(text):
    return float(text.replace("\u2212", "-").replace("\u202f", "").rstrip("V%"))


def output(page):
    return number(page.locator(".out-volts").text_content())


def strip(page, name):
    return page.locator(f'.sig[data-s="{name}"]')


def type_in(page, selector, text):
    field = page.locator(selector)
    field.fill(text)
    field.press("Enter")
    settled(page)
    return field


def open_design(page, design):
    text = write_design(design) if not isinstance(design, str) else design
    before = page.evaluate("sumwright.line.seq")
    page.locator('#commands input[type="file"]').set_input_files(
        {"name": "a.json", "mimeType": "application/json", "buffer": text.encode()}
    )
    wait(page, f"sumwright.line.seq > {before}")  # the file is read in its own time
    settled(page)


def drag(page, name, share, steps=4):
    """Press on a slider's cursor and move it to `share` of its track, in steps; the hand stays down until the end."""
    slider = strip(page, name).locator("input[type=range]")
    box = slider.bounding_box()
    low, high, now = slider.evaluate("s => [Number(s.min), Number(s.max), s.valueAsNumber]")
    inset, y = 5.5, box["y"] + box["height"] / 2

    def x(part):
        return box["x"] + inset + part * (box["width"] - 2 * inset)

    start = (now - low) / (high - low)
    page.mouse.move(x(start), y)
    page.mouse.down()
    for k in range(1, steps + 1):
        page.mouse.move(x(start + (share - start) * k / steps), y)
    page.mouse.up()
    settled(page)


def test_the_first_paint_is_the_finished_demonstration(fresh):
    assert fresh.title() == "Grain hopper, four corners · Sumwright"
    assert fresh.locator("#title").input_value() == "Grain hopper, four corners"
    assert output(fresh) == pytest.approx(operating_point(demo.design()).output, abs=6e-4)
    assert fresh.locator(".verdict .big").text_content() == "all hold"
    assert fresh.locator("#invented").inner_text() == "an invented demonstration"
    assert [strip(fresh, n).count() for n in ("tare", "north", "east", "south", "west", "reference")] == [1] * 6


def test_everything_on_it_is_the_engines(sheet):
    dc = operating_point(demo.design())
    for k, name in enumerate(demo.design().signal_names):
        assert number(strip(sheet, name).locator(".made").text_content()) == pytest.approx(dc.weights[k], abs=6e-5)
        assert number(strip(sheet, name).locator(".sh text").text_content()) == pytest.approx(
            dc.contributions[k], abs=6e-4
        )


def test_curves_fit_1280_by_720_without_scrolling(sheet):
    assert sheet.evaluate(
        "[document.documentElement.scrollHeight <= 720, document.documentElement.scrollWidth <= 1280]"
    ) == [
        True,
        True,
    ]


def test_the_strip_is_the_wire(sheet):
    heights = sheet.evaluate(
        """[...document.querySelectorAll('.sig')].map(row => { const b = row.getBoundingClientRect(); return b.top + b.height / 2 })"""
    )
    wires = sheet.evaluate(
        """[...document.querySelectorAll('#drawing rect.body')].map(r => { const b = r.getBoundingClientRect(); return b.top + b.height / 2 })"""
    )
    for y in heights:
        assert min(abs(y - w) for w in wires) <= 1.0


def test_a_drag_moves_curves_margins_and_schematic(sheet):
    def seen():
        return sheet.evaluate(
            """[document.querySelector('.out-volts').textContent, document.querySelector('.verdict').textContent,
                JSON.stringify(Bokeh.documents[0].get_model_by_name('transfer').renderers[0].data_source.data.get?.('y')
                  ?? Bokeh.documents[0].get_model_by_name('transfer').renderers[0].data_source.data.y),
                [...document.querySelectorAll('#drawing text')].map(t => t.textContent).join()]"""
        )

    type_in(sheet, '[aria-label="plus rail"]', "5.5")
    before = seen()
    drag(sheet, "north", 0.1)
    after = seen()
    assert after[0] != before[0]
    assert after[2] != before[2]
    assert after[3] != before[3]
    value = number(sheet.locator(VALUE.format("north")).input_value())
    moved = edits.with_value(edits.with_figure(demo.design(), "supply", "high", 5.5), "north", value)
    assert value < 2.5
    assert output(sheet) == pytest.approx(operating_point(moved).output, abs=1.5e-3)


def test_a_drag_is_one_undo_step_by_the_keyboard_too(sheet):
    before = output(sheet)
    drag(sheet, "north", 0.2, steps=8)
    assert output(sheet) != before
    sheet.keyboard.press("Control+z")
    settled(sheet)
    assert output(sheet) == before
    sheet.keyboard.press("Control+Shift+z")
    settled(sheet)
    assert output(sheet) != before


def test_a_value_typed_as_4k7_is_fitted(sheet):
    field = type_in(sheet, '[aria-label="resistor, feedback"]', "4k7")
    assert field.input_value() == "4.7k"
    cell = demo.design().cells[0]
    fitted = edits.with_resistance(demo.design(), "0/feedback", 4700.0)
    assert cell.feedback != 4700.0
    assert output(sheet) == pytest.approx(operating_point(fitted).output, abs=6e-4)


def test_a_wrong_entry_stays_as_typed_with_one_sentence_and_the_sheet_keeps_what_it_had(sheet):
    before = output(sheet)
    field = type_in(sheet, VALUE.format("east"), "8.5.1")
    assert field.input_value() == "8.5.1"
    assert field.get_attribute("aria-invalid") == "true"
    note = sheet.locator("#note")
    assert note.get_attribute("role") == "alert"
    assert re.search(r"8\.5\.1.*the sheet keeps 8\.500\u202fV", note.text_content())
    assert output(sheet) == before
    field.press("Escape")
    assert field.input_value() == "8.500"
    assert field.get_attribute("aria-invalid") is None
    assert note.text_content() == ""


def test_a_value_past_its_range_is_taken_and_flagged_in_words(sheet):
    field = type_in(sheet, VALUE.format("east"), "12")
    assert field.input_value() == "12.000"
    row = strip(sheet, "east")
    assert row.locator(".past").text_content() == "past 0 to 10\u202fV"
    assert row.locator(".past").is_visible()
    assert "margins do not cover it" in field.get_attribute("title")
    type_in(sheet, VALUE.format("east"), "10")
    assert row.locator(".past").text_content() == ""
    # far outside anything that is built: refused with what is allowed
    field = type_in(sheet, '[aria-label="resistor, feedback"]', "1e30")
    assert field.input_value() == "1e30"
    assert re.search(r"10\u202fmΩ to 1\u202fTΩ; the sheet keeps 12\.3k", sheet.locator("#note").text_content())


def test_a_wrong_entry_put_right_is_taken(sheet):
    type_in(sheet, VALUE.format("east"), "8.5.1")
    field = type_in(sheet, VALUE.format("east"), "8.25")
    assert field.get_attribute("aria-invalid") is None
    assert field.input_value() == "8.250"


def test_undo_and_redo_by_their_buttons(fresh):
    undo, redo = (fresh.locator("#commands button", has_text=t) for t in ("Undo", "Redo"))
    assert undo.is_disabled()
    type_in(fresh, VALUE.format("north"), "1")
    undo.click()
    settled(fresh)
    assert fresh.locator(VALUE.format("north")).input_value() == "7.600"
    redo.click()
    settled(fresh)
    assert fresh.locator(VALUE.format("north")).input_value() == "1.000"


def test_a_weight_of_0_33_is_made_and_the_rail_it_runs_into_is_told(sheet):
    type_in(sheet, '[aria-label="north, wanted weight"]', "0.33")
    assert number(strip(sheet, "north").locator(".made").text_content()) == pytest.approx(0.33, rel=0.01)
    drag(sheet, "north", 0.999)
    assert sheet.locator("#drawing .red", has_text="clipped high").count() == 1
    assert re.search(r"at \d\.\d\d", sheet.locator(".clips .on").text_content())
    assert "short" in sheet.locator(".verdict .big").text_content()
    assert "+ rail" in sheet.locator('[data-c="swing_high"]').text_content()


def test_a_pulled_cable_is_drawn_pulled_and_moves_the_others(sheet):
    before = strip(sheet, "north").locator(".made").text_content()
    sheet.get_by_label("pull the south cable out").click()
    settled(sheet)
    assert strip(sheet, "south").locator(".made").text_content() == "cable out"
    assert sheet.locator("#drawing text", has_text="open").count() == 1
    assert strip(sheet, "north").locator(".made").text_content() != before
    sheet.get_by_label("plug the south cable in").click()
    settled(sheet)
    assert strip(sheet, "north").locator(".made").text_content() == before


def test_a_margin_opens_into_why_and_what_cures_it(sheet):
    type_in(sheet, '[aria-label="plus rail"]', "6")
    check = sheet.locator('[data-c="swing_high"]')
    check.click()
    assert check.get_attribute("aria-expanded") == "true"
    why = sheet.locator("#why-swing_high")
    assert "Cure." in why.text_content()
    assert re.search(r"\+ rail to \d", why.text_content())


def test_an_arrangement_that_cannot_is_refused_with_one_that_can_to_take(sheet):
    open_design(sheet, drawn("out = - 0.5 a - 0.25 b", "inverting"))
    type_in(sheet, '[aria-label="a, wanted weight"]', "0.5")
    note = sheet.locator("#note")
    assert "two-stage" in note.text_content()
    note.get_by_role("button", name="take two-stage").click()
    settled(sheet)
    assert sheet.locator('[aria-label="Arrangement"]').input_value() == "two-stage"
    assert number(strip(sheet, "a").locator(".made").text_content()) == pytest.approx(0.5, rel=0.02)


def test_an_arrangement_chosen_that_cannot_is_put_back(sheet):
    sheet.locator('[aria-label="Arrangement"]').select_option("inverting")
    settled(sheet)
    assert sheet.locator('[aria-label="Arrangement"]').input_value() == "mixed-sign"
    assert "positive" in sheet.locator("#note").text_content() or "negative" in sheet.locator("#note").text_content()
    sheet.locator("#note").get_by_role("button", name="take two-stage").click()
    settled(sheet)
    assert sheet.locator('[aria-label="Arrangement"]').input_value() == "two-stage"
    # chosen, but with the legs of another: the choice stays, what the legs are stands beside it
    open_design(sheet, drawn("out = - 0.5 a - 0.25 b", "inverting"))
    sheet.locator('[aria-label="Arrangement"]').select_option("mixed-sign")
    settled(sheet)
    assert sheet.locator('[aria-label="Arrangement"]').input_value() == "mixed-sign"
    assert sheet.locator("#plate .made").text_content() == "as inverting"
    sheet.keyboard.press("Control+z")
    settled(sheet)
    assert sheet.locator('[aria-label="Arrangement"]').input_value() == "inverting"


# Pairs of texts of the drawing, or of the curves, whose letters lie on each other.
OVERLAPS = """() => { const hits = []
  for (const root of ['.stage', '.curves']) { const boxes = []
    const add = (text, b) => boxes.push({text, left: b.left + 1, right: b.right - 1, top: b.top + b.height * .24, bottom: b.bottom - b.height * .2})
    for (const t of document.querySelectorAll(root + ' text')) if (t.textContent.trim()) add(t.textContent, t.getBoundingClientRect())
    for (const i of document.querySelectorAll(root + ' .rv')) if (i.value) {
      const b = i.getBoundingClientRect(), wide = Math.min(b.width, i.value.length * 8), left = i.classList.contains('cap') ? b.left : b.left + (b.width - wide) / 2
      add(i.value, {left, right: left + wide, top: b.top, bottom: b.bottom, height: b.height}) }
    boxes.forEach((p, k) => boxes.slice(k + 1).forEach(q => {
      if (p.left < q.right && p.right > q.left && p.top < q.bottom && p.bottom > q.top) hits.push(p.text + ' × ' + q.text) })) }
  return hits }"""


def drawn(text, arrangement, title="A test stage"):
    design = sums.new_design(sums.read_sum(text), demo.op_amp(), title)
    return edits.with_arrangement(design, arrangement)


@pytest.mark.parametrize(
    ("text", "arrangement", "cells"),
    [
        ("out = - 0.5 a - 0.25 b", "inverting", 1),
        ("out = 0.5 a + 0.25 b", "inverting-pair", 2),
        ("out = 0.5 a + 0.25 b + 0.5 V", "non-inverting", 1),
        ("out = 2.5 a + 2 b - 0.5 c", "mixed-sign", 1),
        ("out = 0.5 a + 0.25 b - 0.3 c + 0.5 V", "two-stage", 2),
        ("out = 1.5 a + 1.25 b - 0.3 c - 0.1 d - 0.1 e", "two-stage", 2),
        ("out = 0.5 a + 0.25 b - 0.3 c - 0.2 d + 0.5 V", "mixed-sign", 1),
        ("out = 1.5 a + 1.25 b", "inverting-pair", 2),
    ],
)
@pytest.mark.parametrize("symbols", ["IEC 60617", "IEEE 315"])
def test_each_arrangement_is_drawn_with_all_its_resistors(sheet, text, arrangement, cells, symbols):
    design = drawn(text, arrangement)
    open_design(sheet, design)
    if symbols == "IEEE 315":
        sheet.get_by_role("button", name=symbols).click()
        settled(sheet)
    assert sheet.locator("#drawing path.body.heavy").count() == cells
    shown = {k: sheet.locator(f".rv >> nth={k}").input_value() for k in range(sheet.locator(".rv").count())}
    fitted = [leg.resistance for c in design.cells for leg in c.minus + c.plus]
    fitted += [r for c in design.cells for r in (c.minus_ground, c.plus_ground, c.feedback) if r]
    assert len([v for v in shown.values() if v]) == len(fitted)
    bodies = sheet.locator("#drawing rect.body").count()
    assert bodies == (len(fitted) + 1 if symbols == "IEC 60617" else 0)  # and the load
    assert output(sheet) == pytest.approx(operating_point(design).output, abs=6e-4)
    # drawing and plate fit, whatever the arrangement, and no two texts lie on each other
    assert sheet.locator(".plate.flat").count() == 0
    assert sheet.evaluate("document.documentElement.scrollHeight") <= 720
    assert sheet.evaluate(OVERLAPS) == []


@pytest.mark.parametrize("count", [1, 16])
def test_one_signal_and_sixteen_are_drawn_a_row_each(sheet, count):
    terms = " ".join(f"{'-' if k % 2 else '+'} {0.02 * (k + 1):.2f} s{k + 1}" for k in range(count))
    open_design(sheet, drawn(f"out = {terms}", "mixed-sign"))
    assert sheet.locator(".sig").count() == count
    assert sheet.evaluate("document.documentElement.scrollWidth <= 1280")
    styles = sheet.evaluate("[...document.querySelectorAll('.sig .swatch')].map(s => s.innerHTML)")
    assert len(set(styles)) == count  # colour, dash and marker tell all of them apart


def test_a_design_file_is_opened_and_saved_whole(sheet):
    design = edits.with_value(drawn("out = 0.5 left + 0.25 right - 0.1 zero", "two-stage", "Opened"), "left", 1.234)
    open_design(sheet, design)
    assert sheet.locator("#title").input_value() == "Opened"
    with sheet.expect_download() as download:
        sheet.get_by_role("button", name="Save", exact=True).click()
    assert read_design(download.value.path()) == design


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ('{"format": "sumwright-design/1"', "JSON"),
        ("", "empty"),
        ('{"format": "sumwright-design/1", "title": "x"}', "signals"),
        ("not json at all <b>", "JSON"),
    ],
)
def test_a_file_that_is_none_is_refused_in_one_line_and_the_sheet_keeps_what_it_had(sheet, text, says):
    before = output(sheet)
    open_design(sheet, text)
    note = sheet.locator("#note").text_content()
    assert says.lower() in note.lower()
    assert "\n" not in note
    assert output(sheet) == before
    assert sheet.locator("#title").input_value() == "Grain hopper, four corners"


def test_a_design_file_can_be_dropped_on_the_sheet(sheet):
    design = drawn("out = 0.5 left + 0.25 right", "non-inverting", "Dropped")
    sheet.evaluate(
        """text => { const data = new DataTransfer()
             data.items.add(new File([text], 'dropped.json', {type: 'application/json'}))
             document.body.dispatchEvent(new DragEvent('drop', {dataTransfer: data, bubbles: true, cancelable: true})) }""",
        write_design(design),
    )
    wait(sheet, "document.getElementById('title').value === 'Dropped'")


def test_a_file_of_megabytes_is_refused_before_it_is_sent(sheet):
    before = sheet.evaluate("sumwright.line.seq")
    sheet.locator('#commands input[type="file"]').set_input_files(
        {"name": "huge.json", "mimeType": "application/json", "buffer": b" " * 2_500_000}
    )
    wait(sheet, "document.getElementById('note').textContent.includes('at most 2 MB')")
    assert sheet.evaluate("sumwright.line.seq") == before


def hover(page, name):
    """Put the pointer on a signal's marker among the transfer curves, and wait for what Bokeh says of it."""
    x, y = page.evaluate(
        """name => { const f = Bokeh.documents[0].get_model_by_name('transfer'), d = f.renderers.at(-1).data_source.data
             const column = key => [...(d.get ? d.get(key) : d[key])], k = column('name').indexOf(name)
             const box = document.querySelector('.curves .slot').getBoundingClientRect(), pad = f.min_border_left
             const share = (v, r) => (v - r.start) / (r.end - r.start)
             return [box.left + pad + share(column('x')[k], f.x_range) * f.frame_width,
                     box.top + (1 - share(column('y')[k], f.y_range)) * f.frame_height] }""",
        name,
    )
    page.mouse.move(x - 3, y)
    page.mouse.move(x, y)
    page.wait_for_timeout(300)
    said = page.evaluate(
        """() => { const found = []; const walk = root => { for (const e of root.querySelectorAll('*')) {
             if (e.classList.contains('bk-Tooltip')) found.push(e.shadowRoot?.textContent ?? e.textContent)
             if (e.shadowRoot) walk(e.shadowRoot) } }; walk(document); return found.join() }"""
    )
    assert name in said


def test_a_marker_says_its_signal(sheet):
    hover(sheet, "north")


def test_markup_in_a_name_is_a_name(sheet):
    hostile = "<img src=x onerror=window.ran=1>"
    document = json.loads(write_design(demo.design()))
    document["title"] = f"<script>window.ran=1</script>{hostile}"
    document["signals"][1]["name"] = hostile
    document["cells"][0]["plus"][0]["from"] = hostile
    document["op_amp"]["name"] = hostile
    open_design(sheet, json.dumps(document))
    assert strip(sheet, hostile).locator("b").text_content() == hostile
    assert hostile in sheet.locator("#sum").text_content()
    hover(sheet, hostile)
    for fold in sheet.evaluate("[...document.querySelectorAll('#crease a')].map(a => a.hash)"):
        sheet.evaluate(f"location.hash = {fold!r}")
        sheet.wait_for_timeout(300)
        settled(sheet)
    assert sheet.evaluate("window.ran") is None
    assert sheet.locator("main img, main script").count() == 0
    sheet.watch.said.clear()  # other folds may warn of a name they cannot print


def test_a_new_sum_is_read_as_it_is_written_and_drawn(sheet):
    sheet.get_by_role("button", name="New", exact=True).click()
    text = sheet.get_by_label("The sum")
    text.fill("out = 0.2 top + 0.3 bottom - 0.1 drift + 0.5 V")
    wait(sheet, "document.querySelector('.new .told.soft').textContent.includes('3 signals')")
    sheet.get_by_role("button", name="Draw it").click()
    wait(sheet, "location.hash === '#curves'")
    settled(sheet)
    assert sheet.locator(".sig").count() == 4
    assert sheet.locator("#invented").is_hidden()
    assert number(strip(sheet, "drift").locator(".made").text_content()) == pytest.approx(-0.1, rel=0.02)
    sheet.keyboard.press("Control+z")
    settled(sheet)
    assert strip(sheet, "north").count() == 1


def test_the_sheet_works_from_the_keyboard(sheet):
    slider = strip(sheet, "north").locator("input[type=range]")
    slider.focus()
    field = sheet.locator(VALUE.format("north"))
    at = number(field.input_value())
    sheet.keyboard.press("ArrowRight")
    settled(sheet)
    assert number(field.input_value()) == pytest.approx(at + 10 / 500, abs=1e-3)
    sheet.keyboard.press("Shift+ArrowLeft")
    settled(sheet)
    assert number(field.input_value()) == pytest.approx(at - 9 * 10 / 500, abs=1e-3)
    sheet.keyboard.press("End")
    settled(sheet)
    assert field.input_value() == "10.000"
    sheet.keyboard.press("Tab")
    assert sheet.evaluate("document.activeElement.getAttribute('aria-label')") == "north, typed value"
    sheet.keyboard.press("Tab")
    assert sheet.evaluate("document.activeElement.getAttribute('aria-label')") == "north, wanted weight"
    sheet.keyboard.press("Tab")
    sheet.keyboard.press("Space")
    settled(sheet)
    assert strip(sheet, "north").locator(".made").text_content() == "cable out"
    outline = sheet.evaluate("getComputedStyle(document.activeElement).outlineStyle")
    assert outline == "solid"


def test_everything_that_can_be_used_has_a_name_and_size(sheet):
    nameless = sheet.evaluate(
        """[...document.querySelectorAll('button, input, select, a')].filter(e => e.offsetParent && !(e.getAttribute('aria-label')
             || e.textContent.trim() || e.labels?.length || e.title)).map(e => e.outerHTML.slice(0, 120))"""
    )
    assert nameless == []
    # WCAG 2.2, 2.5.8: at least 24 px, or spaced as if they were; a small word's target reaches past its letters
    small = sheet.evaluate(
        """[...document.querySelectorAll('.sig input[type=range], .sig .plug, .chk, .sig .val input')].filter(e => {
             const b = e.getBoundingClientRect(); return b.width && (b.width < 22 || b.height < 24) }).map(e => e.outerHTML.slice(0, 90))"""
    )
    assert small == []


def test_light_and_dark_paper(sheet):
    light = sheet.evaluate("getComputedStyle(document.documentElement).backgroundColor")
    sheet.get_by_role("button", name="Dark", exact=True).click()
    settled(sheet)
    dark = sheet.evaluate("getComputedStyle(document.documentElement).backgroundColor")
    assert (light, dark) == ("rgb(244, 246, 244)", "rgb(17, 25, 30)")


def test_a_signal_is_added_moved_and_removed(sheet):
    sheet.get_by_role("button", name="Add a signal").click()
    settled(sheet)
    assert strip(sheet, "signal 6").count() == 1
    sheet.get_by_role("button", name="Reorder").click()
    sheet.get_by_label("signal 6 up").click()
    settled(sheet)
    names = sheet.evaluate("[...document.querySelectorAll('.sig')].map(s => s.dataset.s)")
    assert names.index("signal 6") == names.index("west") - 1
    sheet.get_by_label("remove signal 6").click()
    settled(sheet)
    assert strip(sheet, "signal 6").count() == 0


def test_every_figure_of_the_op_amp_can_be_typed(sheet):
    sheet.get_by_label("op amp, every figure").click()
    drawer = sheet.locator("#drawer")
    assert drawer.locator("input").count() == 30
    type_in(sheet, '[aria-label="op amp, dropout, + rail"]', "0.05")
    assert "short" not in sheet.locator('[data-c="swing_high"] .w').text_content()
    drawer.get_by_role("button", name="Close").click()
    assert drawer.is_hidden()


def test_the_word_saved_stands_beside_the_title(fresh):
    type_in(fresh, VALUE.format("north"), "2")
    assert re.match(
        r"saved \d\d:\d\d:\d\d",
        wait(
            fresh,
            "/^saved/.test(document.getElementById('saved').textContent) && document.getElementById('saved').textContent",
        ),
    )


def test_a_lost_answer_does_not_freeze_the_sheet(fresh):
    fresh.evaluate(
        """() => { const line = sumwright.line, heard = line.heard
             line.heard = frame => { if (frame.seq) { line.heard = heard; window.lost = frame.seq } else heard.call(line, frame) } }"""
    )
    fresh.locator(VALUE.format("north")).fill("1")
    fresh.keyboard.press("Enter")
    fresh.wait_for_timeout(300)
    fresh.locator(VALUE.format("east")).fill("2")
    fresh.keyboard.press("Enter")
    wait(fresh, "sumwright.line.shown > window.lost", 10)
    settled(fresh)
    assert fresh.locator(VALUE.format("east")).input_value() == "2.000"
    assert fresh.locator(VALUE.format("north")).input_value() == "1.000"


def test_a_session_that_ended_is_said_at_once_and_the_page_opens_itself_anew(fresh):
    fresh.evaluate(
        """() => { window.before = true
             sumwright.line.end() }"""
    )
    assert "not kept" in fresh.locator("#note").text_content()
    assert fresh.locator("#saved").text_content().endswith("not kept")
    fresh.wait_for_event("load")
    settled(fresh)
    assert not fresh.evaluate("window.before")
    assert "opened itself anew" in fresh.locator("#note").text_content()


@pytest.mark.parametrize(("width", "height"), [(1024, 768), (1600, 900), (1920, 1080)])
def test_it_fits_beside_a_scope_and_uses_a_large_screen(server, browser, width, height):
    page = browser.new_page(viewport={"width": width, "height": height})
    page.goto(f"{server[1]}/app")
    settled(page)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.evaluate("document.querySelector('.curves').getBoundingClientRect().bottom") <= height
    assert page.locator(".plate.flat").count() == 0
    assert page.evaluate(OVERLAPS) == []
    page.close()


def test_messages_that_are_none_are_ignored(sheet):
    before = output(sheet)
    for text in ("", "[]", "{", '{"acts": 3}', '{"acts": [null, {"do": "nothing"}, {"do": "value"}]}', "x" * 1000):
        sheet.evaluate("t => window.sumwrightWire.send(t)", text)
    type_in(sheet, VALUE.format("tare"), "0.42")
    assert output(sheet) == before


def test_the_job_from_a_file_to_the_same_numbers_on_the_command_line(fresh, tmp_path):
    """A file is opened, a weight changed, a signal driven into the rail, a cable pulled; all is undone and done again, saved, analysed."""
    page = fresh
    open_design(
        page, edits.with_value(drawn("out = 0.25 front + 0.2 rear - 0.1 zero", "mixed-sign", "Two beams"), "zero", 0.5)
    )
    type_in(page, '[aria-label="front, wanted weight"]', "0.33")
    type_in(page, '[aria-label="plus rail"]', "5")
    drag(page, "front", 0.99)
    assert page.locator("#drawing .red", has_text="clipped high").count() == 1
    assert re.match(r"by \d\.\d{3}\u202fV", page.locator("#drawing .red", has_text="by ").text_content())
    assert re.search(r"at \d\.\d\d\u202fV", page.locator(".clips .on").text_content())
    page.get_by_label("pull the rear cable out").click()
    settled(page)
    undo, redo = (page.locator("#commands button", has_text=t) for t in ("Undo", "Redo"))
    for _ in range(4):
        undo.click()
        settled(page)
    assert number(strip(page, "front").locator(".made").text_content()) == pytest.approx(0.25, rel=0.01)
    for _ in range(4):
        redo.click()
        settled(page)
    page.get_by_label("plug the rear cable in").click()
    settled(page)
    with page.expect_download() as download:
        page.get_by_role("button", name="Save", exact=True).click()
    path = tmp_path / "saved.json"
    download.value.save_as(path)
    done = subprocess.run(
        [sys.executable, "-m", "sumwright.command", "analyse", str(path), "--json"],
        capture_output=True,
        text=True,
        check=True,
    )
    dc = json.loads(done.stdout)["dc"]
    assert output(page) == pytest.approx(dc["output"], abs=6e-4)
    assert dc["clipped"] == "high"
    for name in ("front", "rear", "zero"):
        made = number(strip(page, name).locator(".made").text_content())
        assert made == pytest.approx(dc["weights"][name], abs=6e-5)
