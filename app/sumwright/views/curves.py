"""The fold Curves: contributions, transfer curves and headroom on one volt scale."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from bokeh.models import BoxZoomTool, ColumnDataSource, HoverTool, Range1d, ResetTool, WheelZoomTool
from bokeh.plotting import figure

from sumwright.engine.stage import REFERENCE

from .fold import Context, Fold
from .palette import COLOURS, colour, dash, marker

# names go through @name, which Bokeh escapes
TOOLTIP = """<div style="font-size: 14px; line-height: 1.3; max-width: 250px">
<b>@name</b><br>in @x{0.000} V<br>out @y{0.000} V</div>"""


class Curves(Fold):
    """Output against each signal, beside what each adds and how far every output goes."""

    title = "Curves"
    slots = ("transfer",)
    plain = True

    def __init__(self, context: Context):
        super().__init__(context)
        self._lines = ColumnDataSource({"x": [], "y": [], "name": [], "colour": [], "dash": [], "width": []})
        self._ideal = ColumnDataSource({"x": [], "y": []})
        self._onsets = ColumnDataSource({"x": [], "y": []})
        self._present = ColumnDataSource({"x": [], "y": [], "name": [], "colour": [], "marker": []})
        self._x_range = Range1d(0.0, 10.0)
        self._y_range = Range1d(0.0, 5.0)
        self._whole = (0.0, 10.0)
        self._looks: Any = None
        self._theme = ""
        self._figure: Any = None

    def figures(self) -> dict[str, Any]:
        """The transfer figure: no border and no y axis of its own, so that the ruler's lines run through it."""
        f = self._figure = figure(
            name="transfer", width=400, height=260, x_range=self._x_range, y_range=self._y_range, toolbar_location=None,
            tools=[], background_fill_alpha=0, border_fill_alpha=0, outline_line_color=None, min_border=0,
            sizing_mode="fixed", y_axis_location=None,
        )  # fmt: skip
        f.grid.visible = False
        f.add_tools(
            BoxZoomTool(dimensions="width"), ResetTool(),
            WheelZoomTool(dimensions="width", modifiers="ctrl"),
        )  # fmt: skip
        f.xaxis.visible = False  # the browser draws it with the ruler, from the range as it is zoomed
        f.multi_line("x", "y", source=self._lines, line_color="colour", line_dash="dash", line_width="width",
                     line_join="round")  # fmt: skip
        self._ideal_line = f.line("x", "y", source=self._ideal, line_width=1.4, line_dash=[1, 4], line_cap="round")
        self._ticks = f.scatter("x", "y", source=self._onsets, marker="dash", angle=math.pi / 2, size=20, line_width=2)
        dots = f.scatter("x", "y", source=self._present, marker="marker", size=11, fill_color="colour", line_width=1.2)
        self._dots = dots
        f.add_tools(HoverTool(renderers=[dots], tooltips=TOOLTIP, point_policy="snap_to_data", limit=1))
        return {"transfer": f}

    def _paint(self, theme: str) -> None:
        """The paper's colours, only when the paper changes."""
        if theme == self._theme or self._figure is None:
            return
        self._theme, ink = theme, COLOURS[theme]
        self._ideal_line.glyph.line_color = ink["ink-2"]
        self._ticks.glyph.line_color = ink["accent"]
        self._dots.glyph.line_color = ink["paper"]

    def show(self) -> dict[str, Any]:
        """Move the figure's data and give the rest of the fold as plain data."""
        bench = self.workbench
        analysis = bench.analysis
        design, dc, head = analysis.design, analysis.dc, analysis.headroom
        low, high, ticks = ruler(design, dc, head)
        self._paint(bench.theme)
        self._move(bench, analysis, low, high)
        return {
            "low": low, "high": high, "ticks": ticks, "output": dc.output, "clipped": dc.clipped,
            "unclipped": dc.unclipped_output, "lines": self._ruler_lines(bench, low, high),
            "contributions": _contributions(bench, design, dc), "clips": _clips(bench, analysis),
            "beams": _beams(design, dc, head), "x": list(self._whole), "on": bench.on,
        }  # fmt: skip

    def _move(self, bench, analysis, low, high) -> None:
        design, dc = analysis.design, analysis.dc
        curves = [c for c in analysis.curves if c.name not in bench.unplugged]
        curves.sort(key=lambda c: c.name == bench.on)  # the one under the hand on top
        looks = (tuple(c.name for c in curves), tuple(bench.style(c.name) for c in curves), bench.on, bench.theme)
        # corners are few: as lists they ride in the one message, where each array would be two more
        xs = [c.x.tolist() for c in curves]
        ys = [c.y.tolist() for c in curves]
        volts = [design.signal(c.name).value for c in curves]
        level = [dc.output] * len(curves)
        if looks == self._looks:
            changed: dict[str, Any] = {"y": ys}
            if xs != self._lines.data["x"]:
                changed["x"] = xs
            self._lines.data.update(changed)
            self._present.data.update({"x": volts, "y": level})
        else:
            self._looks = looks
            names = [c.name for c in curves]
            hues = [colour(bench.theme, bench.style(n)) for n in names]
            self._lines.data = {
                "x": xs, "y": ys, "name": names, "colour": hues, "dash": [list(dash(bench.style(n))) for n in names],
                "width": [3.2 if n == bench.on else 1.7 for n in names],
            }  # fmt: skip
            self._present.data = {
                "x": volts, "y": level, "name": names, "colour": hues, "marker": [marker(bench.style(n)) for n in names],
            }  # fmt: skip
        hand = next((c for c in curves if c.name == bench.on), None)
        self._put(
            self._ideal, [hand.x[0], hand.x[-1]] if hand else [], [hand.ideal_low, hand.ideal_high] if hand else []
        )
        marks = [(o.value, float(np.interp(o.value, c.x, c.y))) for c in curves for o in c.onsets]
        self._put(self._onsets, [m[0] for m in marks], [m[1] for m in marks])
        least = min((float(x[0]) for x in xs), default=0.0)
        most = max((float(x[-1]) for x in xs), default=1.0)
        most = most if most > least else least + 1.0
        if (least, most) != self._whole or self._x_range.start is None:
            self._whole = (least, most)
            self._x_range.update(start=least, end=most, reset_start=least, reset_end=most)
        if (low, high) != (self._y_range.start, self._y_range.end):
            self._y_range.update(start=low, end=high, reset_start=low, reset_end=high)

    @staticmethod
    def _put(source: ColumnDataSource, x: list[float], y: list[float]) -> None:
        """Change a source's points, but only if they changed."""
        if list(source.data["x"]) != x or list(source.data["y"]) != y:
            source.data = {"x": x, "y": y}

    def _ruler_lines(self, bench, low, high) -> list[dict[str, Any]]:
        """The lines that run through all three pictures: rails, window, and where the output clips."""
        design = bench.analysis.design
        rows = [("rail", design.supply.high), ("rail", design.supply.low)]
        rows += [("window", v) for v in (design.target.high, design.target.low) if v is not None]
        rows += [("clips", v) for v in clip_levels(bench.analysis, bench.on) if v is not None]
        return [{"kind": k, "value": v} for k, v in sorted(rows, key=lambda r: -r[1]) if low <= v <= high]

    def handle(self, message: dict) -> None:
        """The whole range again after a zoom."""
        if message.get("do") == "whole":
            self._x_range.update(start=self._whole[0], end=self._whole[1])


def ruler(design, dc, head) -> tuple[float, float, list[float]]:
    """Ends and ticks of the volt scale: all that the output can do, its window, and a rail that is near.

    The ends depend on the output's extremes, not on where it is just now, so they
    stand still under a moving hand.
    """
    last = head.cells[-1]
    high, low = [last.highest, dc.output, 0.0], [last.lowest, dc.output, 0.0]
    for c in head.cells[:-1]:
        high.append(c.highest)
        low.append(c.lowest)
    for c in head.cells:
        high.append(c.inputs_highest)
        low.append(c.inputs_lowest)
    if design.target.high is not None:
        high.append(design.target.high)
    if design.target.low is not None:
        low.append(design.target.low)
    top, bottom = max(high), min(low)
    # far overdriven corners must not squeeze the rest: a rail and a half is as far as the scale goes
    top = min(top, 1.5 * max(design.supply.high, 0.1))
    bottom = max(bottom, 1.5 * min(design.supply.low, -0.1))
    span = max(top - bottom, 1e-3)
    # the limits are part of the picture where they are near
    for c in head.cells:
        top = max([top] + [v for v in (c.limit_high, c.common_mode_limit_high) if v <= max(high) + 0.5 * span])
        bottom = min([bottom] + [v for v in (c.limit_low, c.common_mode_limit_low) if v >= min(low) - 0.25 * span])
    span = top - bottom
    if design.supply.high <= top + 0.35 * span:
        top = max(top, design.supply.high)
    if design.supply.low >= bottom - 0.12 * span:
        bottom = min(bottom, design.supply.low)
    if top - bottom < 1e-3:  # every cable out and no window: nothing moves
        top, bottom = top + 0.5, bottom - 0.5
    span = top - bottom
    step = nice_step(span / 6)
    top += 0.055 * span
    bottom -= 0.085 * span
    unit = step / 10  # rounded outward so that they seldom change
    top, bottom = math.ceil(top / unit - 1e-9) * unit, math.floor(bottom / unit + 1e-9) * unit
    ticks = [round(k * step, 9) for k in range(math.ceil(bottom / step), math.floor(top / step) + 1)]
    return bottom, top, ticks


def nice_step(least: float) -> float:
    """The smallest of 1, 2, 5 times a power of ten not under `least`."""
    power = 10.0 ** math.floor(math.log10(least))
    return next(m * power for m in (1, 2, 5, 10) if m * power >= least * (1 - 1e-9))


def clip_levels(analysis, name: str) -> tuple[float | None, float | None]:
    """Output at which the last op amp would clip, driven there by one signal, rails at nominal.

    Linear up to that point, so the onset is where `output + dropout_resistance *
    current` meets the rail less its dropout; None where that signal cannot drive it.
    """
    design, dc, linear = analysis.design, analysis.dc, analysis.linear
    names = design.signal_names
    if name not in names:
        return None, None
    q = names.index(name)
    amp, weight, per_volt = design.op_amp, float(linear.output[-1, q]), float(linear.current[-1, q])
    if abs(weight) < 1e-9:
        return None, None
    drive = np.append(dc.values, design.reference.voltage if design.reference else 0.0)
    output, current = float(linear.output[-1] @ drive), float(linear.current[-1] @ drive)
    levels: list[float | None] = []
    for side, limit in ((1, design.supply.high - amp.dropout_high), (-1, design.supply.low + amp.dropout_low)):
        level = limit
        slope = per_volt / weight  # amperes per volt of output
        at_limit = current + slope * (limit - output)
        if side * at_limit > 0:
            share = 1 + amp.dropout_resistance * slope
            if share > 0:
                level = (limit - amp.dropout_resistance * (current - slope * output)) / share
        levels.append(level)
    return levels[0], levels[1]


def _contributions(bench, design, dc) -> list[dict[str, Any]]:
    """What each source adds, in an order that climbs first: reference, then what adds, then what takes away."""
    parts = [
        {
            "name": s.name,
            "style": bench.style(s.name),
            "volts": float(dc.contributions[k]),
            "out": s.name in bench.unplugged,
        }
        for k, s in enumerate(design.signals)
    ]
    ups = [p for p in parts if p["volts"] >= 0]
    downs = [p for p in parts if p["volts"] < 0]
    reference = []
    if design.reference is not None and (dc.offset or design.target.offset):
        reference = [{"name": REFERENCE, "style": None, "volts": dc.offset, "out": False}]
    shown = reference + ups + downs
    cut = dc.output - dc.unclipped_output
    if abs(cut) > 5e-4:  # so that the bars end where the output is
        shown.append({"name": "cut off", "style": None, "volts": cut, "out": False, "cut": True})
    return shown


def _clips(bench, analysis) -> list[dict[str, Any]]:
    """Where, along its own range, each signal drives an output into a limit: the onset nearest its present value."""
    shown = []
    last = len(analysis.design.cells) - 1
    for c in analysis.curves:
        out = c.name in bench.unplugged
        value = analysis.design.signal(c.name).value
        onset = min(c.onsets, key=lambda o: abs(o.value - value)) if c.onsets and not out else None
        shown.append({
            "name": c.name, "style": bench.style(c.name), "out": out, "at": onset.value if onset else None,
            "side": onset.side if onset else None, "cell": onset.cell if onset and onset.cell != last else None,
            "y": float(np.interp(onset.value, c.x, c.y)) if onset else None,
        })  # fmt: skip
    return shown


def _beams(design, dc, head) -> list[dict[str, Any]]:
    """How far each output and each pair of inputs goes over all corners, and how far it may."""
    many = len(head.cells) > 1
    beams = []
    for k, (c, point) in enumerate(zip(head.cells, dc.cells, strict=True)):
        beams.append({
            "label": f"output {k + 1}" if many else "output", "low": c.lowest, "high": c.highest,
            "limit_low": c.limit_low, "limit_high": c.limit_high, "now": point.output_voltage,
        })  # fmt: skip
    for k, (c, point) in enumerate(zip(head.cells, dc.cells, strict=True)):
        beams.append({
            "label": f"inputs {k + 1}" if many else "inputs", "low": c.inputs_lowest, "high": c.inputs_highest,
            "limit_low": c.common_mode_limit_low, "limit_high": c.common_mode_limit_high, "now": point.plus_voltage,
        })  # fmt: skip
    return beams


__all__ = ["Curves", "clip_levels", "nice_step", "ruler"]
