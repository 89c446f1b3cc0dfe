"""Static SVG by hand: a list of elements, every text escaped, colours by token name.

Colours and fonts are written as `var(--ink)`, so that a drawing inside a document
follows the document's tokens; `resolved` puts the values in for a file that must
stand alone.
"""

from __future__ import annotations

import math
import re
from html import escape

from markupsafe import Markup

from sumwright.tokens import tokens

_VARIABLE = re.compile(r"var\(--([\w-]+)\)")
INK, SOFT, LINE, HAIR, RED, PAPER, RAISED = (
    f"var(--{name})" for name in ("ink", "ink-2", "line", "hair", "accent", "paper", "raised")
)
SIZE = 14  # px, the smallest type of the tokens
# Advance widths of a grotesque in thousandths of the em, near enough to keep labels apart.
_NARROW = dict.fromkeys("iljI.,:;|'!ft()[] \u2009\u202f", 0.3) | dict.fromkeys("mwMW@%", 0.86)


def text_width(text: str, size: float = SIZE, bold: bool = False) -> float:
    """About how wide a text is drawn [px]."""
    return sum(_NARROW.get(c, 0.66 if c.isupper() else 0.57) for c in text) * size * (1.05 if bold else 1.0)


def shortened(text: str, room: float, size: float = SIZE, bold: bool = False) -> str:
    """A text that fits into `room` [px], its middle left out if need be: names that belong together differ at their ends."""
    if text_width(text, size, bold) <= room:
        return text
    keep = len(text) - 1
    while keep > 4 and text_width(text[:keep] + "…", size, bold) > room:
        keep -= 1
    tail = keep // 2
    return f"{text[: keep - tail].rstrip()}…{text[-tail:].lstrip()}"


def number(value: float) -> str:
    """A coordinate with two decimals at most."""
    if not math.isfinite(value):
        raise ValueError(f"a coordinate must be finite; it is {value}")
    return f"{value:.2f}".rstrip("0").rstrip(".") if value else "0"


class Drawing:
    """One SVG picture; `alt` says in words, with its numbers, what it shows."""

    def __init__(self, width: float, height: float, alt: str, background: bool = False):
        self.width, self.height, self.alt = width, height, alt
        self.origin = (0.0, 0.0)
        self.items: list[str] = []
        if background:
            self.rect(0, 0, width, height, fill=PAPER)

    def add(self, tag: str, content: str | None = None, **attributes) -> None:
        """One element; underscores in attribute names are hyphens, None leaves an attribute out, `content` is escaped."""
        written = []
        for key, value in attributes.items():
            if value is None:
                continue
            shown = number(float(value)) if isinstance(value, int | float) else str(value)
            written.append(f' {key.rstrip("_").replace("_", "-")}="{escape(shown)}"')
        self.items.append(f"<{tag}{''.join(written)}" + ("/>" if content is None else f">{escape(content)}</{tag}>"))

    def path(
        self, d: str, *, stroke: str = INK, width: float = 1.5, fill: str = "none", dash: str | None = None, **more
    ):
        self.add(
            "path", d=d, fill=fill, stroke=stroke, stroke_width=width,
            stroke_dasharray=dash or None, **more,
        )  # fmt: skip

    def line(self, x1: float, y1: float, x2: float, y2: float, **how):
        self.path(f"M{number(x1)} {number(y1)}L{number(x2)} {number(y2)}", **how)

    def polyline(self, xs, ys, **how):
        points = [f"{number(x)} {number(y)}" for x, y in zip(xs, ys, strict=True)]
        if points:
            self.path("M" + "L".join(points), stroke_linejoin="round", **how)

    def rect(self, x: float, y: float, w: float, h: float, *, fill: str = "none", stroke: str | None = None, width=1.5):
        self.add("rect", x=x, y=y, width=w, height=h, fill=fill, stroke=stroke, stroke_width=width if stroke else None)

    def dot(self, x: float, y: float, r: float = 3.2, *, fill: str = INK, stroke: str | None = None, width=1.5):
        self.add("circle", cx=x, cy=y, r=r, fill=fill, stroke=stroke, stroke_width=width if stroke else None)

    def text(
        self, x: float, y: float, text: str, *, anchor: str = "start", fill: str = INK, size: float = SIZE,
        bold: bool = False, serif: bool = False, halo: bool = False, italic: bool = False, turn: float | None = None,
    ):  # fmt: skip
        """A text with its baseline at `y`; `halo` keeps it readable over lines."""
        self.add(
            "text", text, x=x, y=y, fill=fill, font_size=size, text_anchor=None if anchor == "start" else anchor,
            font_weight=600 if bold else None, font_family="var(--serif)" if serif else None,
            font_style="italic" if italic else None,
            stroke=PAPER if halo else None, stroke_width=4 if halo else None,
            paint_order="stroke" if halo else None, stroke_linejoin="round" if halo else None,
            transform=None if turn is None else f"rotate({number(turn)} {number(x)} {number(y)})",
        )  # fmt: skip

    def marker(self, kind: str, x: float, y: float, colour: str, r: float = 5.0) -> None:
        """A data marker of one of `tokens.MARKERS`, rimmed with paper so that it stands on lines."""
        p = {
            "square": f"M{number(x - r)} {number(y - r)}h{number(2 * r)}v{number(2 * r)}h{number(-2 * r)}z",
            "diamond": _closed([(x, y - 1.35 * r), (x + 1.35 * r, y), (x, y + 1.35 * r), (x - 1.35 * r, y)]),
            "up": _closed([(x, y - 1.25 * r), (x + 1.2 * r, y + r), (x - 1.2 * r, y + r)]),
            "down": _closed([(x, y + 1.25 * r), (x + 1.2 * r, y - r), (x - 1.2 * r, y - r)]),
        }.get(kind)
        if p:
            self.path(p, fill=colour, stroke=PAPER, width=1)
        elif kind == "cross":
            cross = f"M{number(x - r)} {number(y - r)}l{number(2 * r)} {number(2 * r)}m0 {number(-2 * r)}l{number(-2 * r)} {number(2 * r)}"
            self.path(cross, stroke=colour, width=2.4)
        elif kind == "ring":
            self.dot(x, y, r - 0.6, fill=PAPER, stroke=colour, width=2.2)
        else:
            self.dot(x, y, r, fill=colour, stroke=PAPER, width=1)

    def svg(self) -> Markup:
        """The picture as an element of a document."""
        x, y = self.origin
        head = (
            f'<svg xmlns="http://www.w3.org/2000/svg" role="img" aria-label="{escape(self.alt)}"'
            f' viewBox="{number(x)} {number(y)} {number(self.width)} {number(self.height)}"'
            f' width="{number(self.width)}" height="{number(self.height)}"'
            f' font-family="var(--sans)" font-size="{SIZE}" fill="{INK}">'
        )
        return Markup(head + "".join(self.items) + "</svg>")

    def file(self, theme: str = "light") -> str:
        """The picture as a file of its own, on paper, with every token's value in it."""
        x, y = self.origin
        sheet = f'<rect x="{number(x)}" y="{number(y)}" width="100%" height="100%" fill="{PAPER}"/>'
        text = str(self.svg())
        at = text.index(">") + 1
        titled = text[:at] + f"<title>{escape(self.alt)}</title>" + sheet + text[at:]
        return '<?xml version="1.0" encoding="UTF-8"?>\n' + resolved(titled, theme) + "\n"


def resolved(svg: str, theme: str = "light") -> str:
    """`svg` with every token's value in place of its name."""
    values = tokens(theme)
    return _VARIABLE.sub(lambda m: escape(values[m[1]].replace('"', "'")), svg)


def _closed(points) -> str:
    return "M" + "L".join(f"{number(x)} {number(y)}" for x, y in points) + "Z"


__all__ = [
    "HAIR",
    "INK",
    "LINE",
    "PAPER",
    "RAISED",
    "RED",
    "SIZE",
    "SOFT",
    "Drawing",
    "number",
    "resolved",
    "text_width",
]
