"""The design tokens, read from the one file that page, plots and documents share.

`tokens.css` beside this module is a link to `app/static/tokens.css`, which the
browser fetches; a built wheel holds a copy of it.
"""

from __future__ import annotations

import re
from functools import cache
from importlib.resources import files
from typing import NamedTuple

_PROPERTY = re.compile(r"--([\w-]+)\s*:\s*([^;]+);")
_COMMENT = re.compile(r"/\*.*?\*/", re.DOTALL)
_HUES = 7  # signal colours in the tokens: s1 to s7

MARKERS = ("disc", "square", "diamond", "up", "down", "cross", "ring")  # in the order the tokens name them


@cache
def tokens_css() -> str:
    """The text of tokens.css without its comments."""
    return _COMMENT.sub("", files("sumwright").joinpath("tokens.css").read_text(encoding="utf-8")).strip()


@cache
def tokens(theme: str = "light") -> dict[str, str]:
    """Token values by name, without the leading dashes; `theme` is `light` or `dark`."""
    found: dict[str, str] = {}
    for selector, body in re.findall(r"([^{}]+)\{([^{}]*)\}", tokens_css()):
        if selector.strip() in (":root", f'[data-theme="{theme}"]', f':root, [data-theme="{theme}"]'):
            for key, value in _PROPERTY.findall(body):
                found.setdefault(key, " ".join(value.split()))
    return found


class Hand(NamedTuple):
    """How one signal is drawn: its colour token, its dash and its marker."""

    colour: str  # name of a token: `s1` to `s7`, or `s-ref`
    dash: str  # stroke-dasharray, "" = solid
    marker: str  # one of MARKERS


REFERENCE_HAND = Hand("s-ref", "2 2", "ring")


def hand(index: int) -> Hand:
    """The hand of the signal at `index`; past the seventh the hues come back with another dash and marker."""
    turn, hue = divmod(index, _HUES)
    dash = tokens()[f"d{(index + turn) % _HUES + 1}"]
    return Hand(f"s{hue + 1}", "" if dash == "none" else dash, MARKERS[(index + 2 * turn) % len(MARKERS)])


__all__ = ["MARKERS", "REFERENCE_HAND", "Hand", "hand", "tokens", "tokens_css"]
