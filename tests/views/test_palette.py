"""Bokeh's colours are the sheet's: one set of tokens."""

import re
from pathlib import Path

import pytest
from sumwright.views.palette import COLOURS, colour, dash, marker

TOKENS = (Path(__file__).parents[2] / "app/static/tokens.css").read_text(encoding="utf-8")


def tokens(theme):
    block = re.search(r'\[data-theme="' + theme + r'"\] \{(.*?)\}', TOKENS, re.DOTALL).group(1)
    return dict(re.findall(r"--([\w-]+): (#[0-9A-F]{6})", block))


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_every_colour_is_the_token(theme):
    found, mine = tokens(theme), COLOURS[theme]
    for name in ("paper", "raised", "ink", "ink-2", "hair", "line", "accent"):
        assert mine[name] == found[name]
    assert mine["signals"] == tuple(found[f"s{k}"] for k in range(1, 8))
    assert mine["reference"] == found["s-ref"]


def luminance(hue):
    """Relative luminance of an sRGB colour. Source: WCAG 2.2, definition of relative luminance."""
    parts = [int(hue[k : k + 2], 16) / 255 for k in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return sum(w * c for w, c in zip((0.2126, 0.7152, 0.0722), linear, strict=True))


def contrast(a, b):
    bright, dim = sorted((luminance(a), luminance(b)), reverse=True)
    return (bright + 0.05) / (dim + 0.05)


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_text_holds_4_5_and_lines_3_on_both_papers(theme):
    # WCAG 2.2: 1.4.3 (text, 4.5 to 1) and 1.4.11 (graphics and controls, 3 to 1)
    c = COLOURS[theme]
    for paper in (c["paper"], c["raised"]):
        for text in ("ink", "ink-2", "accent"):
            assert contrast(c[text], paper) >= 4.5
        for line in (c["line"], c["reference"], *c["signals"]):
            assert contrast(line, paper) >= 3.0


def test_forty_nine_signals_look_different():
    for theme in ("light", "dark"):
        assert len({(colour(theme, k), dash(k), marker(k)) for k in range(49)}) == 49
