"""The report on paper: A4 and Letter, nothing wider than the page, long tables with their heads."""

import dataclasses
import re
from datetime import UTC, datetime

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.stage import Signal
from sumwright.files.examples import example
from sumwright.report.document import design_report
from support.browser import chromium

pytestmark = pytest.mark.browser
# ISO 216 and ANSI Y14.1, in points of 1/72 inch; what is left between the side margins of 16 mm, in CSS pixels.
PAPER = {"A4": ((595, 842), 672), "Letter": ((612, 792), 695)}


def many():
    """Sixteen signals with long names, both signs, on two op amps."""
    d = example()
    signals = tuple(
        Signal(f"load cell under corner {i}", 0.06 if i % 3 else -0.05, -10.0, 10.0, 1.0, 350.0, 10.0)
        for i in range(16)
    )
    signals = (dataclasses.replace(signals[0], name="W" * 64), *signals[1:])  # no word of it ends
    d = dataclasses.replace(d, signals=signals, cells=())
    return dataclasses.replace(d, cells=exact_cells(d, "two-stage"))


@pytest.fixture(scope="module")
def reports(tmp_path_factory):
    now = datetime(2026, 12, 1, tzinfo=UTC)
    designs = {"demo": example(), "many": many()}
    return {k: design_report(Analysis(d), draws=500, author="R. Okafor", now=now) for k, d in designs.items()}


@pytest.fixture(scope="module")
def browser():
    with chromium() as it:
        yield it


@pytest.mark.parametrize("paper", PAPER)
@pytest.mark.parametrize("which", ["demo", "many"])
def test_it_prints_with_nothing_cut_off(reports, browser, paper, which):
    size, width = PAPER[paper]
    page = browser.new_page(viewport={"width": width, "height": 900})
    asked = []
    page.on("request", lambda r: asked.append(r.url))
    page.set_content(reports[which])
    page.emulate_media(media="print")
    wide = page.evaluate(
        """() => [...document.querySelectorAll('table, svg, pre, p, li, h1, h2, dd')]
                 .filter(e => e.getBoundingClientRect().right > document.documentElement.clientWidth + 1)
                 .map(e => e.tagName + ' ' + (e.id || e.textContent.slice(0, 30)))"""
    )
    assert wide == []
    assert page.evaluate(
        "() => [...document.querySelectorAll('thead')].every(e => getComputedStyle(e).display === 'table-header-group')"
    )
    pdf = page.pdf(format=paper)
    boxes = {
        tuple(round(float(x)) for x in m.split()[2:])
        for m in re.findall(r"/MediaBox \[([^\]]+)\]", pdf.decode("latin-1"))
    }
    assert all(abs(got - asked) < 1.5 for box in boxes for got, asked in zip(box, size, strict=True)) and boxes
    pages = len(re.findall(rb"/Type /Page\b", pdf))
    assert 6 <= pages <= (18 if which == "demo" else 30)
    assert [u for u in asked if not u.startswith(("about:", "data:"))] == []
    page.close()


def test_red_is_still_told_apart_in_grey(reports, browser):
    """What falls short is said in a word, not in colour alone."""
    page = browser.new_page()
    page.set_content(reports["many"])
    rows = page.eval_on_selector_all(
        "table.margins tr.short", "rows => rows.map(r => r.querySelector('.word').textContent)"
    )
    assert rows and set(rows) == {"short"}
    page.close()
