"""Budget and Response in a real browser: live under the slider, refined at rest, taken away as files."""

import pytest

from .serving import settled, wait

pytestmark = pytest.mark.browser


def turn(sheet, fold):
    sheet.evaluate(f"location.hash = '{fold}'")
    wait(sheet, f"!!document.querySelector('#f-{fold}:not([hidden]) .{fold}')")
    settled(sheet)


def press(sheet, fold, text):
    sheet.locator(f"#f-{fold}").get_by_role("button", name=text, exact=True).click()
    settled(sheet)


def text(sheet, selector):
    return sheet.evaluate(f"document.querySelector({selector!r}).textContent")


def test_boards_are_refined_once_the_hand_rests(sheet):
    turn(sheet, "budget")
    wait(sheet, "document.querySelector('.budget .cap').textContent.replace(/\\s/g, '').includes('200000boards')", 30)
    assert text(sheet, ".budget tbody td") == "offset voltage"
    assert "100" in sheet.evaluate("document.querySelector('.budget .prog').getAttribute('aria-valuenow')")


def test_the_present_point_follows_the_slider(sheet):
    turn(sheet, "budget")
    press(sheet, "budget", "present")
    before = text(sheet, ".budget .sum-line")
    sheet.locator("#mini input[type=range], .mini input[type=range]").nth(1).press("Home")
    settled(sheet)
    assert text(sheet, ".budget .sum-line") != before


def test_an_op_amp_is_taken_in_one_act_and_given_back(sheet):
    turn(sheet, "budget")
    press(sheet, "budget", "Which op amp")
    wait(sheet, "document.querySelectorAll('.budget .op-amps tbody tr').length >= 20", 30)
    sheet.get_by_role("button", name="take OPA2277").click()
    settled(sheet)
    assert "OPA2277" in sheet.evaluate(
        "[...document.querySelectorAll('.op-amps td.now')].map(d => d.textContent).join()"
    )
    sheet.keyboard.press("Control+z")
    settled(sheet)
    assert "OPA2277" not in sheet.evaluate(
        "[...document.querySelectorAll('.op-amps td.now')].map(d => d.textContent).join()"
    )
    press(sheet, "budget", "Terms")


def test_the_scope_shows_waves_and_says_when_it_clips(sheet):
    turn(sheet, "response")
    sheet.locator("#f-response").get_by_role("button", name="Waves", exact=True).first.click()
    settled(sheet)
    wait(sheet, "!!document.querySelector('.response select')")
    name = sheet.evaluate(
        "document.querySelector('.response select').getAttribute('aria-label').replace('wave of ', '')"
    )
    sheet.get_by_label(f"wave of {name}", exact=True).select_option("sine")
    settled(sheet)
    field = sheet.get_by_label(f"amplitude of {name}", exact=True)
    field.fill("400")
    field.press("Enter")
    settled(sheet)
    wait(sheet, "document.querySelector('.response .told').textContent.includes('at a limit')")
    field.fill("lots")
    field.press("Enter")
    settled(sheet)
    assert "lots" in sheet.locator("#note").inner_text()
    sheet.locator("#f-response").get_by_role("button", name="Step", exact=True).click()
    settled(sheet)
    assert "settles to" in text(sheet, ".response .told")


def test_figures_and_curves_can_be_taken_away(sheet):
    turn(sheet, "response")
    for label, start in (
        ("Gain as CSV", b"frequency_Hz,"),
        ("Gain as SVG", b"<svg"),
        ("Record as PNG", b"\x89PNG"),
        ("Noise as CSV", b"term,"),
    ):
        if label == "Noise as CSV":
            press(sheet, "response", "Noise")
        with sheet.expect_download() as waiting:
            sheet.get_by_label(label, exact=True).first.click()
        assert waiting.value.path().read_bytes().startswith(start)


def test_a_frozen_design_is_held_beside_the_sheet(sheet):
    sheet.evaluate("location.hash = 'log'")
    wait(sheet, "!!document.querySelector('#f-log .writing')")
    settled(sheet)
    sheet.get_by_role("button", name="Freeze now").click()
    hold = sheet.get_by_role("button", name="Hold frozen A beside the sheet in Budget and Response")
    hold.wait_for(timeout=20000)
    hold.click()
    wait(sheet, "document.querySelector('#note').textContent.includes('held beside')")
    turn(sheet, "budget")
    press(sheet, "budget", "Compare")
    wait(sheet, "document.querySelectorAll('.budget .page tbody tr').length > 8")
    differences = sheet.evaluate(
        "[...document.querySelectorAll('.budget .page tbody td:last-child')].map(d => d.textContent)"
    )
    assert all(d == "–" or float(d.replace("−", "-").split("\u202f")[0].rstrip("°%")) == 0 for d in differences)
