"""Bokeh figures in the sheet's hand: hairlines, no frame, no toolbar; zoom and hover by the mouse."""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import BoxZoomTool, CrosshairTool, Range1d, ResetTool, Span, WheelZoomTool
from bokeh.plotting import figure

from .palette import COLOURS

FONT = '"Segoe UI", "Helvetica Neue", "Liberation Sans", Arial, sans-serif'


def ruled_figure(name: str, x_range: Range1d, y_range: Range1d, *, log: bool = False, y_axis: bool = True,
                 grid: bool = True) -> Any:  # fmt: skip
    """A figure of one size, with bottom (and left) axis; the page's script sets its size."""
    f = figure(
        name=name, width=400, height=260, x_range=x_range, y_range=y_range, toolbar_location=None, tools=[],
        x_axis_type="log" if log else "linear", background_fill_alpha=0, border_fill_alpha=0, outline_line_color=None,
        min_border=0, sizing_mode="fixed", y_axis_location="left" if y_axis else None,
    )  # fmt: skip
    f.grid.visible = grid
    f.xgrid.visible = False
    f.add_tools(BoxZoomTool(), ResetTool(), WheelZoomTool(dimensions="width", modifiers="ctrl"))
    f.add_tools(CrosshairTool(overlay=Span(dimension="height", line_width=1)))
    for axis in (*f.xaxis, *f.yaxis):
        axis.axis_label = None
        axis.minor_tick_line_color = None
        axis.major_tick_in, axis.major_tick_out, axis.major_label_standoff = 0, 5, 4
        axis.major_label_text_font = FONT
        axis.major_label_text_font_size = "14px"
    return f


def paint(f: Any, theme: str) -> dict[str, Any]:
    """The paper's colours on axes and grid; returns the palette."""
    ink = COLOURS[theme]
    for axis in (*f.xaxis, *f.yaxis):
        axis.update(axis_line_color=ink["line"], major_tick_line_color=ink["line"], major_label_text_color=ink["ink-2"])
    f.grid.grid_line_color = ink["hair"]
    for tool in f.tools:
        if isinstance(tool, CrosshairTool):
            tool.overlay.line_color = ink["line"]
    return ink


def put(source: Any, data: dict[str, Any]) -> None:
    """Change the columns that changed, and nothing else."""
    changed = {k: v for k, v in data.items() if k not in source.data or not _same(source.data[k], v)}
    if not changed:
        return
    if len({len(v) for v in data.values()}) == 1 and set(data) == set(source.data) and _sizes_kept(source, data):
        source.data.update(changed)
    else:
        source.data = data


def _sizes_kept(source, data):
    return all(len(source.data[k]) == len(v) for k, v in data.items())


def _same(a, b):
    if a is b:
        return True
    if isinstance(a, np.ndarray) and isinstance(b, np.ndarray):
        return np.array_equal(a, b)
    try:
        return len(a) == len(b) and all(
            (x is y) or (x == y if not hasattr(x, "shape") else x.shape == y.shape and (x == y).all())
            for x, y in zip(a, b, strict=True)
        )
    except (TypeError, ValueError):
        return False


def move(r: Range1d, start: float, end: float) -> None:
    """Set a range and where it goes back to, only if it changed."""
    if (r.start, r.end) != (start, end):
        r.update(start=start, end=end, reset_start=start, reset_end=end)
