"""The tokens stand once: page, plots, schematic and documents read the same file, and it holds WCAG 2.2 contrast."""

import re
from pathlib import Path

import pytest
from sumwright.files.examples import NAMES, example
from sumwright.model.workbench import Workbench
from sumwright.rows import hands_of
from sumwright.tokens import MARKERS, hand, tokens, tokens_css
from sumwright.views import signals
from sumwright.views.palette import COLOURS, colour, dash, marker

ROOT = Path(__file__).parents[2]
SIGNALS = [f"s{i}" for i in range(1, 8)]


def luminance(colour):
    # WCAG 2.2, relative luminance
    linear = [
        c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4
        for c in (int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5))
    ]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(a, b):
    light, dark = sorted((luminance(a), luminance(b)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_text_and_lines_hold_their_contrast(theme):
    # WCAG 2.2, 1.4.3: text 4.5 to 1; 1.4.11: graphics and controls 3 to 1
    t = tokens(theme)
    for paper in ("paper", "raised"):
        for name in ("ink", "ink-2", "accent"):
            assert contrast(t[name], t[paper]) >= 4.5, (name, paper)
        for name in ("line", "s-ref", *SIGNALS):
            assert contrast(t[name], t[paper]) >= 3.0, (name, paper)


def test_the_package_and_the_browser_read_one_file():
    served = (ROOT / "app/static/tokens.css").read_text(encoding="utf-8")
    assert (ROOT / "app/sumwright/tokens.css").read_text(encoding="utf-8") == served
    assert "--paper" in tokens_css() and "/*" not in tokens_css()


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_bokeh_gets_the_tokens_colours(theme):
    t = tokens(theme)
    assert COLOURS[theme]["accent"] == t["accent"]
    assert [colour(theme, i) for i in range(9)] == [t[s] for s in (*SIGNALS, "s1", "s2")]


def test_drawings_bokeh_and_browser_give_a_signal_the_same_hand():
    bokeh = dict(
        zip(("circle", "square", "diamond", "triangle", "inverted_triangle", "x", "circle_dot"), MARKERS, strict=True)
    )
    for i in range(32):
        assert bokeh[marker(i)] == hand(i).marker
        assert " ".join(map(str, dash(i))) == hand(i).dash
    script = (ROOT / "app/static/marks.js").read_text(encoding="utf-8")
    dashes = re.search(r"DASHES = \[(.*?)\]", script)[1]
    assert [d.strip(" '") for d in dashes.split(",")] == [hand(i).dash for i in range(7)]
    assert re.search(r"MARKERS = \[(.*?)\]", script)[1].replace("'", "").split(", ") == list(MARKERS)


def test_sixteen_signals_all_look_different():
    assert len({hand(i) for i in range(16)}) == 16


def test_a_document_gives_a_signal_the_hand_that_the_sheet_gives_it():
    for name in NAMES:
        bench = Workbench(example(name))
        shown = [row for row in signals.show(bench)["rows"] if not row.get("reference")]
        hands = hands_of(bench.design)
        assert shown and all(hands[row["name"]] == hand(row["style"]) for row in shown), name
