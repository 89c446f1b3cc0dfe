"""The picture of the fold Choices: worst weight error against parts, noise or bandwidth."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

from bokeh.models import AdaptiveTicker, ColumnDataSource, FixedTicker, HoverTool, Range1d, TapTool
from bokeh.plotting import figure

from sumwright.engine.realise.choices import Choice

from .palette import COLOURS

FONT = '"Segoe UI", "Helvetica Neue", "Liberation Sans", Arial, sans-serif'
SHAPES = {
    "inverting": "inverted_triangle", "inverting-pair": "diamond", "non-inverting": "triangle", "mixed-sign": "circle",
    "two-stage": "square", "own": "cross",
}  # fmt: skip
LEAST = 1e-6  # relative; smaller errors, none among them, stand at the foot
AXES = {"parts": "resistors", "noise": "noise, nV/√Hz", "band": "bandwidth about, kHz"}
# A person's text (@name, @values) is filled in as text, never as markup.
TOOLTIP = """<div style="max-width: 250px; white-space: normal; font-size: 14px; line-height: 1.3">
<b>@name</b><br>worst weight @error<br>@values</div>"""


class Map:
    """Owns the figure; `update` moves its data and ranges only."""

    def __init__(self, tapped: Callable[[int], None]):
        self._tapped: Callable[[int], None] | None = tapped
        self._points = ColumnDataSource(
            {k: [] for k in ("x", "y", "shape", "size", "fill", "line", "name", "error", "values")}
        )
        self._front = ColumnDataSource({"x": [], "y": []})
        self._words = ColumnDataSource({"x": [], "y": [], "text": [], "dx": [], "dy": [], "align": []})
        self._x_range, self._y_range = Range1d(6.0, 12.0), Range1d(-4.0, -1.0)
        self._theme = ""
        self._quiet = False
        f = self.figure = figure(
            name="choices map", width=250, height=300, x_range=self._x_range, y_range=self._y_range, toolbar_location=None, tools=[],
            background_fill_alpha=0, border_fill_alpha=0, outline_line_color=None, sizing_mode="fixed",
            min_border_left=58, min_border_right=14, min_border_top=8, min_border_bottom=44,
        )  # fmt: skip
        f.xgrid.visible = False
        for axis in (f.xaxis[0], f.yaxis[0]):
            axis.axis_label_standoff, axis.minor_tick_line_color = 2, None
            axis.major_label_text_font, axis.axis_label_text_font, axis.axis_label_text_font_style = (
                FONT,
                FONT,
                "normal",
            )
            axis.major_label_text_font_size = axis.axis_label_text_font_size = "14px"
            axis.major_tick_in, axis.major_tick_out = 0, 4
        self._ticks = f.xaxis[0].ticker = AdaptiveTicker(
            mantissas=[1, 2, 5], min_interval=1.0, desired_num_ticks=6, num_minor_ticks=0
        )
        f.yaxis[0].ticker = FixedTicker(ticks=[-6, -5, -4, -3, -2, -1, 0, 1])
        f.yaxis[0].major_label_overrides = {
            -6: "≤ 0.0001 %", -5: "0.001 %", -4: "0.01 %", -3: "0.1 %", -2: "1 %", -1: "10 %", 0: "100 %", 1: "1000 %",
        }  # fmt: skip
        self._line = f.line("x", "y", source=self._front, line_dash=[7, 4], line_width=1)
        dots = self._dots = f.scatter(
            "x", "y", source=self._points, marker="shape", size="size", fill_color="fill", line_color="line", line_width=1.5,
        )  # fmt: skip
        dots.nonselection_glyph = dots.selection_glyph = None
        self._labels = f.text(
            "x", "y", text="text", source=self._words, x_offset="dx", y_offset="dy", text_align="align", text_font_size="14px",
            text_font={"value": FONT}, text_font_style="bold",
        )  # fmt: skip
        f.add_tools(
            HoverTool(renderers=[dots], tooltips=TOOLTIP, point_policy="snap_to_data", limit=1),
            TapTool(renderers=[dots]),
        )
        self._points.selected.on_change("indices", self._on_tap)

    def _on_tap(self, attribute: str, old: Any, new: list[int]) -> None:
        if new and not self._quiet and self._tapped is not None:
            k = new[0] - 1  # the present stage is the first point
            self._quiet = True
            self._points.selected.indices = []
            self._quiet = False
            if k >= 0:
                self._tapped(k)

    def close(self) -> None:
        self._tapped = None

    def _paint(self, theme: str) -> None:
        if theme == self._theme:
            return
        self._theme, ink = theme, COLOURS[theme]
        for axis in (self.figure.xaxis[0], self.figure.yaxis[0]):
            axis.update(
                axis_line_color=ink["line"], major_tick_line_color=ink["line"], major_label_text_color=ink["ink-2"],
                axis_label_text_color=ink["ink-2"],
            )  # fmt: skip
        self.figure.ygrid.grid_line_color = ink["hair"]
        self._line.glyph.line_color = ink["ink"]
        self._labels.glyph.text_color = ink["ink"]

    def update(
        self, theme: str, axis: str, rows: Sequence[Choice], now: Choice | None, picked: int | None, gain_bandwidth: float,
        said: Callable[[Choice], str],
    ) -> None:  # fmt: skip
        """Show the choices, the present stage and the one picked."""
        self._paint(theme)
        ink = COLOURS[theme]

        def x(c: Choice) -> float:
            if axis == "noise":
                return c.noise_density * 1e9
            return gain_bandwidth / c.slowest_gain / 1e3 if axis == "band" else float(c.resistor_count)

        def y(c: Choice) -> float:
            return math.log10(max(c.worst_weight_error, LEAST))

        every = [now, *rows]
        shown = [c for c in every if c is not None]
        # The present stage is always the first point; where it makes no weights it stands outside.
        xs = [x(c) if c is not None else -1e9 for c in every]
        ys = [y(c) if c is not None else -1e9 for c in every]
        self._put(self._points, {
            "x": xs, "y": ys,
            "shape": [SHAPES.get(c.arrangement, "cross") if c else "cross" for c in every],
            "size": [14 if k == 0 else 17 if k - 1 == picked else 11 for k in range(len(every))],
            "fill": [ink["paper"] if c is not None and c.parts else ink["ink"] for c in every],
            "line": [ink["ink"]] * len(every),
            "name": [("now, " if k == 0 else "") + (c.arrangement + (", paired" if c.parts else "") if c else "") for k, c in enumerate(every)],
            "error": [_percent(c.worst_weight_error) if c else "" for c in every],
            "values": [said(c) if c else "" for c in every],
        })  # fmt: skip
        words = [(xs[0], ys[0], "now")] if now is not None else []
        if picked is not None:
            words.append((xs[picked + 1], ys[picked + 1], "preview"))
        middle = (min(map(x, shown)) + max(map(x, shown))) / 2 if shown else 0.0
        right = [w[0] > middle for w in words]
        self._put(self._words, {
            "x": [w[0] for w in words], "y": [w[1] for w in words], "text": [w[2] for w in words],
            "dx": [-13 if r else 13 for r in right], "dy": [-6 if w[2] == "now" else 20 for w in words],
            "align": ["right" if r else "left" for r in right],
        })  # fmt: skip
        sign = -1.0 if axis == "band" else 1.0  # bandwidth is better when it is more
        front, best = [], math.inf
        for a, b in sorted((sign * x(c), y(c)) for c in rows):
            if b < best:
                front.append((sign * a, b))
                best = b
        self._put(self._front, {"x": [p[0] for p in front], "y": [p[1] for p in front]})
        self._ranges(axis, [x(c) for c in shown], [y(c) for c in shown])
        whole = 1.0 if axis == "parts" else 0.0
        if self._ticks.min_interval != whole:
            self._ticks.min_interval = whole
        label = AXES[axis]
        if self.figure.xaxis[0].axis_label != label:
            self.figure.xaxis[0].axis_label = label

    def _ranges(self, axis: str, xs: list[float], ys: list[float]) -> None:
        if not xs:
            return
        low, high = min(xs), max(xs)
        pad = 0.6 if axis == "parts" else max(0.08 * (high - low), 0.02 * high)
        bottom, top = math.floor(min(ys) * 2 - 0.3) / 2, math.ceil(max(ys) * 2 + 0.3) / 2
        for r, start, end in ((self._x_range, low - pad, high + pad), (self._y_range, bottom, top)):
            if (r.start, r.end) != (start, end):
                r.update(start=start, end=end)

    @staticmethod
    def _put(source: ColumnDataSource, data: dict[str, list]) -> None:
        """Change a source, but only if something changed."""
        if any(list(source.data[k]) != v for k, v in data.items()):
            source.data = data


def _percent(error: float) -> str:
    return "none" if error == 0 else f"{error * 100:.3g} %"
