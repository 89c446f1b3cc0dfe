"""Plotting on paper: a scale, an axis, lines with the signals' own dashes and markers. No more than documents need."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np

from sumwright.quantity import format_fixed, format_quantity
from sumwright.tokens import Hand

from .drawing import HAIR, INK, LINE, SOFT, Drawing, shortened, text_width

_STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)


class Scale:
    """Where a value stands between `start` and `end` [px]; linear or logarithmic."""

    def __init__(self, low: float, high: float, start: float, end: float, log: bool = False):
        if not (math.isfinite(low) and math.isfinite(high)):
            raise ValueError("a scale needs finite ends")
        if log and low <= 0:
            raise ValueError("a logarithmic scale begins above zero")
        if high <= low:
            high = low * 10 if log else low + (abs(low) or 1.0)
        self.low, self.high, self.start, self.end, self.log = low, high, start, end, log

    def __call__(self, value):
        """Pixel of a value or an array; values past the ends go past them."""
        v = np.asarray(value, dtype=float)
        if self.log:
            with np.errstate(divide="ignore", invalid="ignore"):
                t = (np.log10(v) - math.log10(self.low)) / (math.log10(self.high) - math.log10(self.low))
        else:
            t = (v - self.low) / (self.high - self.low)
        at = self.start + t * (self.end - self.start)
        return float(at) if at.ndim == 0 else at

    def ticks(self, most: int = 6) -> list[float]:
        """Round values inside the scale, at most about `most` of them."""
        if self.log:
            first, last = math.ceil(math.log10(self.low) - 1e-9), math.floor(math.log10(self.high) + 1e-9)
            every = max(1, math.ceil((last - first + 1) / most))
            return [10.0**k for k in range(first, last + 1, every)]
        raw = (self.high - self.low) / most
        power = 10.0 ** math.floor(math.log10(raw))
        step = next(s for s in _STEPS if s * power >= raw * (1 - 1e-9)) * power
        first = math.ceil(self.low / step - 1e-9)
        last = math.floor(self.high / step + 1e-9)
        return [0.0 if k == 0 else k * step for k in range(first, last + 1)]


def rounded_out(low: float, high: float, most: int = 6) -> tuple[float, float]:
    """Ends at round values that hold `low` to `high`; what differs by a computer's rounding alone is one value."""
    if high - low <= 1e-9 * max(abs(low), abs(high)):
        high = low + (abs(low) or 1.0)
    s = Scale(low, high, 0, 1)
    ticks = s.ticks(most)
    step = ticks[1] - ticks[0] if len(ticks) > 1 else (high - low) / 2
    return math.floor(low / step + 1e-9) * step, math.ceil(high / step - 1e-9) * step


def decimals_of(ticks: Sequence[float]) -> int:
    """Decimals that tell the ticks apart."""
    if len(ticks) < 2:
        return 2
    step = abs(ticks[1] - ticks[0])
    for d in range(7):
        if abs(round(step, d) - step) < 1e-9 * step:
            return d
    return 6


def prefix_of(values) -> tuple[float, str]:
    """A factor and its SI prefix under which the largest of `values` has one to three figures before the point."""
    most = max((abs(float(v)) for v in np.ravel(values) if np.isfinite(v)), default=0.0)
    if most == 0.0:
        return 1.0, ""
    power = max(-15, min(12, math.floor(math.log10(most) + 1e-9) // 3 * 3))
    sign = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}[power]
    return 10.0**power, sign


class Plot:
    """One set of axes in a drawing."""

    def __init__(self, d: Drawing, x: Scale, y: Scale):
        self.d, self.x, self.y = d, x, y

    @property
    def right(self) -> float:
        return self.x.end

    def grid(
        self, *, x_label: str = "", y_label: str = "", x_text: Callable[[float], str] | None = None,
        y_text: Callable[[float], str] | None = None, x_most: int = 6, y_most: int = 5, x_ticks=None, y_ticks=None,
    ) -> None:  # fmt: skip
        """Hairlines, ticks and their numbers; the unit stands once, at the end of each axis."""
        d, x, y = self.d, self.x, self.y
        xs = x.ticks(x_most) if x_ticks is None else x_ticks
        ys = y.ticks(y_most) if y_ticks is None else y_ticks
        x_text = x_text or _writer(xs, x.log)
        y_text = y_text or _writer(ys, y.log)
        for v in ys:
            d.line(x.start, y(v), x.end, y(v), stroke=HAIR, width=1)
            d.text(x.start - 7, y(v) + 5, y_text(v), anchor="end", fill=SOFT)
        for v in xs:
            d.line(x(v), y.start, x(v), y.start + 5, stroke=LINE, width=1)
            if x.log:
                d.line(x(v), y.start, x(v), y.end, stroke=HAIR, width=1)
            d.text(x(v), y.start + 19, x_text(v), anchor="middle", fill=SOFT)
        d.path(f"M{x.start:g} {y.end:g}V{y.start:g}H{x.end:g}", stroke=LINE, width=1)
        if x_label:
            d.text(x.end, y.start + 36, x_label, anchor="end", fill=SOFT)
        if y_label:
            d.text(x.start, y.end - 9, y_label, anchor="start", fill=SOFT)

    def curve(self, xs, ys, hand: Hand | None = None, *, colour: str = INK, width: float = 1.7, dash: str = "") -> None:
        """A line through points; what is not finite is left out, what lies outside the axes is cut off."""
        if hand is not None:
            colour, dash = f"var(--{hand.colour})", hand.dash
        for px, py in self._inside(np.asarray(xs, float), np.asarray(ys, float)):
            if len(px) > 1:
                self.d.polyline(px, py, stroke=colour, width=width, dash=dash)

    def _inside(self, xs, ys):
        """Pixel runs within the axes, cut at the upper and lower edge."""
        px, py = np.atleast_1d(self.x(xs)), np.atleast_1d(self.y(ys))
        top, bottom = min(self.y.start, self.y.end), max(self.y.start, self.y.end)
        runs, run = [], []
        last = None
        for a, b in zip(px, py, strict=True):
            here = (float(a), float(b)) if math.isfinite(a) and math.isfinite(b) else None
            if last is not None and here is not None:
                piece = _cut(last, here, top, bottom)
                if piece is None:
                    if run:
                        runs.append(run)
                    run = []
                else:
                    p, q = piece
                    if not run or run[-1] != p:
                        if run:
                            runs.append(run)
                        run = [p]
                    run.append(q)
            last = here
        if run:
            runs.append(run)
        return [tuple(zip(*r, strict=True)) for r in runs]

    def mark(self, x: float, y: float, hand: Hand, r: float = 5.0) -> None:
        self.d.marker(hand.marker, self.x(x), self.y(y), f"var(--{hand.colour})", r)


def _cut(p, q, top, bottom):
    """The part of the line p-q between two heights, or None."""
    (x0, y0), (x1, y1) = p, q
    lo, hi = 0.0, 1.0
    dy = y1 - y0
    for edge, sign in ((top, 1.0), (bottom, -1.0)):
        a, b = sign * (y0 - edge), sign * dy  # inside where a + t b >= 0
        if b == 0:
            if a < 0:
                return None
        elif b > 0:
            lo = max(lo, -a / b)
        else:
            hi = min(hi, -a / b)
    if lo > hi:
        return None
    return (x0 + lo * (x1 - x0), y0 + lo * dy), (x0 + hi * (x1 - x0), y0 + hi * dy)


def _writer(ticks, log):
    if log:
        return lambda v: format_quantity(v, "", 1, trim=True)
    places = decimals_of(ticks)
    return lambda v: format_fixed(v, "", places)


def legend(d: Drawing, x: float, y: float, entries: Sequence[tuple[str, Hand]], width: float) -> float:
    """A row (or rows) of swatches with names; returns the height used."""
    at_x, at_y = x, y
    for name, hand in entries:
        name = shortened(name, width - 60)
        wide = 30 + text_width(name) + 22
        if at_x > x and at_x + wide > x + width:
            at_x, at_y = x, at_y + 19
        colour = f"var(--{hand.colour})"
        d.line(at_x, at_y - 5, at_x + 24, at_y - 5, stroke=colour, width=2.2, dash=hand.dash)
        d.marker(hand.marker, at_x + 12, at_y - 5, colour, 4.2)
        d.text(at_x + 30, at_y, name)
        at_x += wide
    return at_y - y + 19


__all__ = ["Plot", "Scale", "decimals_of", "legend", "prefix_of", "rounded_out"]
