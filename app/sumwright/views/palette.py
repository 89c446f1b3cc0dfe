"""The signals' colours, dashes and markers for Bokeh: the same tokens as `static/tokens.css`."""

from __future__ import annotations

COLOURS = {
    "light": {"paper": "#F4F6F4", "raised": "#E9EDEA", "ink": "#15212B", "ink-2": "#4A5964", "hair": "#B9C3C2",
              "line": "#7A8890", "accent": "#B3122F",
              "signals": ("#0067A3", "#946000", "#00735A", "#9C3F7C", "#2A86BD", "#B24A00", "#6F6A00"),
              "reference": "#56636C"},
    "dark": {"paper": "#11191E", "raised": "#1B252B", "ink": "#E6ECEA", "ink-2": "#A3B1B6", "hair": "#36444B",
             "line": "#77878E", "accent": "#FF7A85",
             "signals": ("#6FA8FF", "#E9A820", "#35C79C", "#E39AC8", "#7AD3F5", "#FF9152", "#F0E442"),
             "reference": "#9AA9AF"},
}  # fmt: skip
DASHES = ((), (9, 3), (3, 3), (12, 3, 3, 3), (6, 3), (2, 2), (12, 3, 2, 3, 2, 3))
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
