"""The signals' colours, dashes and markers for Bokeh, read from the design tokens."""

from __future__ import annotations

from typing import Any

from sumwright.tokens import hand, tokens

_NAMES = ("paper", "raised", "ink", "ink-2", "hair", "line", "accent")


def _theme(theme: str) -> dict[str, Any]:
    found = tokens(theme)
    return {
        **{name: found[name] for name in _NAMES},
        "signals": tuple(found[f"s{i}"] for i in range(1, 8)),
        "reference": found["s-ref"],
    }


COLOURS = {theme: _theme(theme) for theme in ("light", "dark")}
DASHES = tuple(tuple(int(n) for n in hand(i).dash.split()) for i in range(7))
MARKERS = ("circle", "square", "diamond", "triangle", "inverted_triangle", "x", "circle_dot")


def colour(theme: str, style: int) -> str:
    """The colour of the `style`-th signal on that paper."""
    return COLOURS[theme]["signals"][style % 7]


def dash(style: int) -> tuple[int, ...]:
    """Its dash; from the eighth signal on, the same colour has another dash."""
    return DASHES[(style + style // 7) % 7]


def marker(style: int) -> str:
    """Its marker; from the eighth signal on, the same colour has another marker."""
    return MARKERS[(style + 2 * (style // 7)) % 7]
