"""The pictures of a report, each drawn from engine results and nothing else.

Every function returns a `Drawing` whose `alt` holds the numbers that matter, for
those who hear a document rather than see it.
"""

from __future__ import annotations

import math

import numpy as np

from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import REFERENCE
from sumwright.quantity import THIN, format_fixed, format_percent, format_quantity
from sumwright.rows import hands_of

from .axes import Plot, Scale, decimals_of, legend, prefix_of, rounded_out
from .drawing import HAIR, INK, LINE, PAPER, RAISED, RED, SOFT, Drawing, shortened, text_width

WIDTH = 680.0  # px; the text width of an A4 page


def hands(analysis: Analysis):
    """The hand of each signal by name, and of the reference."""
    return hands_of(analysis.design)


def ruler(analysis: Analysis, width: float = WIDTH, height: float = 330.0) -> Drawing:
    """Contributions, transfer curves and headroom on one volt scale."""
    design, dc, room = analysis.design, analysis.dc, analysis.headroom
    last = room.cells[-1]
    alt = (
        f"Contributions, transfer curves and headroom on one scale of volts. Output {format_fixed(dc.output, 'V')}; "
        f"all corners {format_fixed(last.lowest, 'V')} to {format_fixed(last.highest, 'V')}; "
        f"limits {format_fixed(last.limit_low, 'V')} to {format_fixed(last.limit_high, 'V')}."
    )
    d = Drawing(width, height, alt)
    steps = _steps(analysis)
    sums = np.cumsum([0.0, *(v for _, v in steps)])
    ys = [float(v) for c in analysis.curves for v in c.y] + [last.highest, last.lowest, *sums.tolist()]
    target = design.target
    ys += [v for v in (target.low, target.high) if v is not None]
    low, high = rounded_out(min(ys), max(ys))
    top, bottom = 30.0, height - 46.0
    y = Scale(low, high, bottom, top)
    left, right = 44.0, width - 104.0
    inner = right - left
    a1 = left + inner * 0.29
    b0, b1 = a1 + 28, left + inner * 0.70
    c0 = b1 + 30
    if target.low is not None and target.high is not None:
        d.rect(left, y(target.high), right - left, y(target.low) - y(target.high), fill=RAISED)
    ticks = y.ticks()
    large = max(abs(low), abs(high)) >= 1e4  # a comparator's linear extremes: no room for their figures
    for v in ticks:
        d.line(left, y(v), right, y(v), stroke=HAIR, width=1)
        word = format_quantity(v, "", 3, trim=True) if large else format_fixed(v, "", decimals_of(ticks))
        d.text(left - 8, y(v) + 5, word, anchor="end", fill=SOFT)
    _levels(d, design, analysis, y, left, right, width)
    d.text(left, 14, "Contributions", serif=True, size=15)
    d.text(b0, 14, "Output against each signal", serif=True, size=15)
    d.text(c0, 14, "Headroom", serif=True, size=15)
    _waterfall(d, steps, analysis, y, left, a1, bottom)
    _transfer(d, analysis, y, b0, b1, top, bottom)
    _beam(
        d, y, c0 + 12, last.lowest, last.highest, last.limit_low, last.limit_high, dc.unclipped_output, "output", bottom
    )
    point = dc.cells[-1]
    _beam(
        d, y, c0 + (right - c0) * 0.58, last.inputs_lowest, last.inputs_highest, last.common_mode_limit_low,
        last.common_mode_limit_high, point.plus_voltage, "inputs", bottom,
    )  # fmt: skip
    return d


def _steps(analysis):
    """The offset and each signal's contribution, rising ones first, as they add up."""
    design, dc = analysis.design, analysis.dc
    pairs = list(zip(design.signal_names, dc.contributions.tolist(), strict=True))
    pairs = [p for p in pairs if p[1] >= 0] + [p for p in pairs if p[1] < 0]
    return ([(REFERENCE, dc.offset)] if design.reference is not None and dc.offset else []) + pairs


def _levels(d, design, analysis, y, left, right, width):
    lines = []
    limit = analysis.headroom.cells[-1]
    for value, word, how in (
        (design.supply.high, "rail", {"stroke": LINE, "width": 3}),
        (design.target.high, "window", {"stroke": INK, "width": 1.2}),
        (limit.limit_high, "limit", {"stroke": INK, "width": 1.2, "dash": "7 4"}),
        (limit.limit_low, "limit", {"stroke": INK, "width": 1.2, "dash": "7 4"}),
        (design.target.low, "window", {"stroke": INK, "width": 1.2}),
        (design.supply.low, "rail", {"stroke": LINE, "width": 3}),
    ):
        if value is not None and y.low - 1e-12 <= value <= y.high + 1e-12:
            lines.append((value, word, how))
    lines.sort(key=lambda each: -each[0])
    floor = -math.inf
    for value, word, how in lines:
        d.line(left, y(value), right + 5, y(value), **how)
        at = max(y(value) + 5, floor + 15)
        floor = at
        d.text(right + 9, at, word, fill=SOFT, size=13)
        d.text(width, at, format_fixed(value, "", 2), anchor="end", size=13)


def _waterfall(d, steps, analysis, y, left, right, bottom):
    if not steps:
        return
    of = hands(analysis)
    wide = (right - left - 8) / len(steps)
    total = 0.0
    named = wide > 34
    for i, (name, value) in enumerate(steps):
        x = left + 6 + i * wide
        a, b = y(total), y(total + value)
        d.rect(x + wide * 0.14, min(a, b), wide * 0.72, max(1.5, abs(a - b)), fill=f"var(--{of[name].colour})")
        d.line(x + wide * 0.14, b, x + wide * (1.86 if i < len(steps) - 1 else 1.0), b, width=1)
        if wide > 36:
            d.text(
                x + wide / 2, max(a, b) + 15, format_fixed(value, "", 2, sign=True), anchor="middle", size=13, halo=True
            )
        word = "ref" if name == REFERENCE else name
        if named and text_width(word, 13) < wide + 6:
            d.text(x + wide / 2, bottom + 18, word, anchor="middle", fill=SOFT, size=13)
        else:
            d.marker(of[name].marker, x + wide / 2, bottom + 13, f"var(--{of[name].colour})", 4.2)
        total += value


def _transfer(d, analysis, y, left, right, top, bottom):
    curves = analysis.curves
    lows = [float(c.x[0]) for c in curves]
    highs = [float(c.x[-1]) for c in curves]
    x = Scale(min(lows), max(highs), left, right)
    plot = Plot(d, x, y)
    of = hands(analysis)
    ticks = x.ticks(4)
    for v in ticks:
        d.line(x(v), bottom, x(v), bottom + 5, stroke=LINE, width=1)
        d.text(x(v), bottom + 19, format_fixed(v, "", decimals_of(ticks)), anchor="middle", fill=SOFT, size=13)
    d.text(right, bottom + 36, "signal, V", anchor="end", fill=SOFT, size=13)
    d.path(f"M{left:g} {top:g}V{bottom:g}H{right:g}", stroke=LINE, width=1)
    for c in curves:
        plot.curve(c.x, c.y, of[c.name])
        for onset in (c.clip_high, c.clip_low):
            if onset is not None:
                at = float(np.interp(onset, c.x, c.y))
                d.line(x(onset), y(at) - 8, x(onset), y(at) + 8, stroke=RED, width=2)
    now = analysis.dc.output
    for s in analysis.design.signals:
        if x.low <= s.value <= x.high and y.low <= now <= y.high:
            plot.mark(s.value, now, of[s.name], 4.6)


def _beam(d, y, x, low, high, limit_low, limit_high, now, name, bottom):
    """What a node goes through over all corners, as a beam between its limits; red where it goes past them."""

    def at(v):
        return min(max(y(v), y.end - 6), y.start + 6)

    inside_low, inside_high = max(low, min(limit_low, high)), min(high, max(limit_high, low))
    d.line(x, at(inside_low), x, at(inside_high), width=3)
    for end, limit, over in ((high, limit_high, high > limit_high), (low, limit_low, low < limit_low)):
        d.line(x - 7, at(end), x + 7, at(end), stroke=RED if over else INK, width=3)
        if over:
            d.line(x, at(limit), x, at(end), stroke=RED, width=7, dash="3 1.5")
        if y.low <= limit <= y.high:
            d.line(x - 16, y(limit), x + 16, y(limit), dash="5 3")
    if y.low <= now <= y.high:
        d.dot(x, y(now), 4.2, fill=PAPER, stroke=INK)
    d.text(
        x + 11,
        at(high) + 5,
        format_fixed(high, "", 3),
        size=13,
        halo=True,
        bold=high > limit_high,
        fill=RED if high > limit_high else INK,
    )
    d.text(
        x + 11,
        at(low) + 5,
        format_fixed(low, "", 3),
        size=13,
        halo=True,
        bold=low < limit_low,
        fill=RED if low < limit_low else INK,
    )
    d.text(x + 8, bottom + 18, name, anchor="middle", fill=SOFT, size=13)


def curve_key(analysis: Analysis, width: float = WIDTH) -> Drawing:
    """Which signal has which line and marker."""
    of = hands(analysis)
    d = Drawing(width, 40, "Key: " + ", ".join(analysis.design.signal_names))
    d.height = legend(d, 0, 14, [(s.name, of[s.name]) for s in analysis.design.signals], width)
    return d


def shares(analysis: Analysis, point: str = "present", width: float = WIDTH, most: int = 12) -> Drawing:
    """Which terms the uncertainty comes from, largest first, as shares of the variance."""
    budget = analysis.errors[point]
    share = budget.shares
    order = [int(i) for i in np.argsort(-share) if share[i] > 0]
    shown, rest = order[:most], order[most:]
    rows = [(budget.terms[i].name, budget.terms[i].standard_uncertainty, float(share[i])) for i in shown]
    if rest:
        u = math.sqrt(sum(budget.terms[i].standard_uncertainty ** 2 for i in rest))
        rows.append((f"{len(rest)} more together", u, float(share[rest].sum())))
    alt = "Shares of the variance: " + "; ".join(f"{n} {format_percent(s)}" for n, _, s in rows[:6]) + "."
    d = Drawing(width, max(1, len(rows)) * 21 + 8, alt)
    label, figures = 250.0, 150.0
    room = width - label - figures - 12
    for i, (name, u, s) in enumerate(rows):
        base = i * 21 + 15
        d.text(label - 10, base, shortened(name, label - 12), anchor="end")
        d.rect(label, base - 11, max(1.0, room * s), 12, fill=INK if i < len(shown) else LINE)
        d.text(width - 58, base, format_quantity(u, "V"), anchor="end")
        d.text(width, base, format_percent(s) if s >= 1e-4 else f"< 0.01{THIN}%", anchor="end", fill=SOFT)
    if not rows:
        d.text(0, 16, "No term has an uncertainty.", fill=SOFT)
    d.line(label, 2, label, d.height - 4, stroke=LINE, width=1)
    return d


def histogram(errors, accuracy: float | None, interval, width: float = WIDTH, height: float = 220.0) -> Drawing:
    """Errors of the drawn boards [V], the allowed band and the shortest 95 % interval."""
    errors = np.asarray(errors, dtype=float)
    factor, prefix = prefix_of([errors.min(), errors.max(), accuracy or 0.0])
    e = errors / factor
    low, high = float(e.min()), float(e.max())
    if accuracy is not None:
        low, high = min(low, -accuracy / factor * 1.08), max(high, accuracy / factor * 1.08)
    counts, edges = np.histogram(e, bins=96, range=(low, high))
    unit = f"{prefix}V"
    alt = (
        f"Histogram of {len(e)} drawn boards: errors {format_fixed(float(e.min()), unit)} to {format_fixed(float(e.max()), unit)}, "
        f"95 % within {format_fixed(interval[0] / factor, unit)} to {format_fixed(interval[1] / factor, unit)}"
        + (f"; allowed ±{format_fixed(accuracy / factor, unit)}." if accuracy is not None else ".")
    )
    d = Drawing(width, height, alt)
    x, y = Scale(low, high, 50, width - 34), Scale(0, float(counts.max()) or 1.0, height - 44, 48)
    if accuracy is not None:
        a = accuracy / factor
        d.rect(x(-a), y.end, x(a) - x(-a), y.start - y.end, fill=RAISED)
        for v in (-a, a):
            d.line(x(v), y.end, x(v), y.start, width=1.2)
        narrow = x(a) - x(-a) < text_width("allowed") + 12
        d.text(x(a) + (6 if narrow else -6), y.end + 13, "allowed", anchor="start" if narrow else "end", fill=SOFT)
    for n, p, q in zip(counts, edges[:-1], edges[1:], strict=True):
        if n:
            middle = (p + q) / 2
            out = accuracy is not None and abs(middle) > accuracy / factor
            d.rect(x(p) + 0.5, y(n), max(1.0, x(q) - x(p) - 1), y(0) - y(n), fill=RED if out else LINE)
    Plot(d, x, y).grid(x_label=f"error, {unit}")
    d.text(x.start, 14, "boards", fill=SOFT)
    base = y.end - 12
    p, q = x(interval[0] / factor), x(interval[1] / factor)
    d.path(f"M{p:.2f} {base - 4:.2f}v8M{p:.2f} {base:.2f}H{q:.2f}m0 -4v8", width=3)
    beside = q + 8 + text_width("95 %", 13) < width
    d.text(q + 8 if beside else p - 8, base + 5, f"95{THIN}%", anchor="start" if beside else "end", size=13)
    return d


def gain_and_phase(analysis: Analysis, width: float = WIDTH, height: float = 400.0) -> Drawing:
    """Gain relative to DC and phase of each signal over frequency."""
    ac = analysis.ac
    n = len(analysis.design.signals)
    f = ac.frequencies
    of = hands(analysis)
    dc = np.array([s.dc_gain for s in ac.signals])
    live = [i for i in range(n) if dc[i] != 0]
    bands = [s.bandwidth_3db for s in ac.signals if s.bandwidth_3db]
    alt = "Gain and phase of each signal. Down 3 dB at " + (
        ", ".join(f"{s.name} {format_quantity(s.bandwidth_3db, 'Hz')}" for s in ac.signals) or "nowhere"
    )
    d = Drawing(width, height, alt + ".")
    corner = min(bands) if bands else float(f[len(f) // 2])
    low, high = _decades(f, corner / 3e3, corner * 30)
    keep = (f >= low) & (f <= high)
    x = Scale(low, high, 50, width - 34, log=True)
    with np.errstate(divide="ignore"):
        db = 20 * np.log10(np.abs(ac.gains[:n]) / np.where(dc == 0, 1, np.abs(dc))[:, None])
    peak = max([float(db[i][keep].max()) for i in live], default=0.0)
    half = (height - 120) / 2
    gain = Plot(d, x, Scale(-40, max(10.0, math.ceil((peak + 1) / 10) * 10), 28 + half, 28))
    gain.grid(y_label="gain against DC, dB", x_text=lambda v: "", y_most=5)
    d.line(x.start, gain.y(-3.0103), x.end, gain.y(-3.0103), width=1, dash="7 4")
    d.text(x.start + 6, gain.y(-3.0103) + 14, f"−3{THIN}dB", fill=SOFT, size=13, halo=True)
    turn = np.degrees(np.unwrap(np.angle(ac.gains[:n] * np.sign(np.where(dc == 0, 1, dc))[:, None]), axis=1))
    bottom = height - 62
    phase = Plot(d, x, Scale(-270, 45, bottom, bottom - half))
    phase.grid(
        y_label="phase against DC, °", x_text=lambda v: format_quantity(v, "Hz", 1, trim=True), y_ticks=[0, -90, -180, -270]
    )  # fmt: skip
    for i in live:
        name = ac.signals[i].name
        gain.curve(f[keep], db[i][keep], of[name])
        phase.curve(f[keep], turn[i][keep], of[name])
        if ac.signals[i].bandwidth_3db and low <= ac.signals[i].bandwidth_3db <= high:
            gain.mark(ac.signals[i].bandwidth_3db, -3.0103, of[name], 4.2)
    used = legend(d, x.start, height - 20, [(s.name, of[s.name]) for s in analysis.design.signals], x.end - x.start)
    d.height = height - 20 + used
    return d


def _decades(f, low, high):
    """Whole decades around `low` to `high`, within what was computed."""
    low, high = max(low, float(f[0])), min(high, float(f[-1]))
    return 10.0 ** math.floor(math.log10(low) + 1e-9), 10.0 ** math.ceil(math.log10(high) - 1e-9)


def loops(analysis: Analysis, width: float = WIDTH, height: float = 250.0) -> Drawing:
    """Open-loop gain against the noise gain of each cell, the crossing marked."""
    ac = analysis.ac
    f = ac.frequencies
    said = [
        f"cell {k + 1}: crossing at {format_quantity(c.crossover, 'Hz')}, phase margin {format_fixed(c.phase_margin, '', 1)}°"
        for k, c in enumerate(ac.cells)
    ]
    d = Drawing(width, height, "Open-loop gain and noise gain. " + "; ".join(said) + ".")
    crossings = [c.crossover for c in ac.cells if c.crossover]
    top = max(crossings, default=float(f[-1]) / 100) * 30
    low, high = _decades(f, 1.0, top)
    keep = (f >= low) & (f <= high)
    x = Scale(low, high, 50, width - 140, log=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        a = 20 * np.log10(np.abs(ac.open_loop))
        ng = 20 * np.log10(np.abs(ac.noise_gains))
    most = rounded_out(-20, float(a[keep].max()) + 3)[1]
    plot = Plot(d, x, Scale(-20, most, height - 48, 28))
    plot.grid(y_label="gain, dB", x_text=lambda v: format_quantity(v, "Hz", 1, trim=True), y_most=6)
    plot.curve(f[keep], a[keep], width=1.7)
    at = float(np.interp(math.log(low * 3), np.log(f), a))
    d.text(x(low * 3) + 8, plot.y(at) - 8, "open loop", fill=SOFT, halo=True)
    spot = height - 48
    for k, c in enumerate(ac.cells):
        plot.curve(f[keep], ng[k][keep], width=2.6, dash=("", "9 3", "3 3", "12 3 3 3")[k % 4])
        if c.crossover and low <= c.crossover <= high:
            level = float(np.interp(math.log(c.crossover), np.log(f), ng[k]))
            d.dot(x(c.crossover), plot.y(level), 5, fill=PAPER, stroke=INK, width=2)
        y0 = 42 + k * 62
        if y0 + 40 < spot + 40:
            title = "noise gain" if len(ac.cells) == 1 else f"cell {k + 1}"
            d.text(width - 128, y0, title, bold=True)
            d.text(width - 128, y0 + 18, format_quantity(c.crossover, "Hz"), fill=SOFT)
            d.text(
                width - 128,
                y0 + 36,
                f"margin {format_fixed(c.phase_margin, '', 1)}°" if c.phase_margin is not None else "no crossing",
                fill=SOFT,
            )
    return d


def noise_density(analysis: Analysis, width: float = WIDTH, height: float = 250.0, most: int = 4) -> Drawing:
    """Output noise density, the whole and its largest terms."""
    from sumwright.engine.noise import spectrum

    low, high = analysis.noise.band
    f = np.geomspace(low, high, 160)
    s = spectrum(analysis, f)
    noise = analysis.noise
    alt = (
        f"Output noise density: {format_quantity(noise.density_1khz, 'V/√Hz')} at 1 kHz; "
        f"{format_quantity(noise.rms, 'V')} RMS from {format_quantity(low, 'Hz', trim=True)} to {format_quantity(high, 'Hz', trim=True)}."
    )
    d = Drawing(width, height, alt)
    order = np.argsort(-np.array([t.rms for t in noise.terms]))[:most]
    factor, prefix = 1e-9, "n"
    top = float(s.total.max()) / factor
    floor = max(float(s.terms[order].min()) / factor, top / 1e4, 1e-6)
    x = Scale(low, high, 56, width - 190, log=True)
    y = Scale(10.0 ** math.floor(math.log10(floor)), 10.0 ** math.ceil(math.log10(top)), height - 48, 28, log=True)
    plot = Plot(d, x, y)
    plot.grid(y_label=f"{prefix}V/√Hz at the output", x_text=lambda v: format_quantity(v, "Hz", 1, trim=True))
    plot.curve(f, s.total / factor, width=3)
    ends = [(float(s.total[-1]) / factor, "whole", True)]
    for j, i in enumerate(order):
        dash = ("9 3", "3 3", "12 3 3 3", "6 3")[j % 4]
        plot.curve(f, s.terms[i] / factor, width=1.5, dash=dash)
        ends.append((float(s.terms[i][-1]) / factor, s.names[i], False))
    floor_y = -math.inf
    for value, name, bold in sorted(ends, key=lambda e: -e[0]):
        at = max(y(max(value, y.low)) + 5, floor_y + 17)
        floor_y = at
        d.line(x.end + 2, y(max(value, y.low)), x.end + 10, at - 5, stroke=LINE, width=1)
        d.text(x.end + 14, at, shortened(name, width - x.end - 16, 13, bold), bold=bold, size=13)
    return d


def busiest(analysis: Analysis) -> int:
    """The signal that moves the output most over its range: the one to step."""
    spans = [abs(w) * (s.high - s.low) for w, s in zip(analysis.dc.weights, analysis.design.signals, strict=True)]
    return int(np.argmax(spans))


def step_answer(analysis: Analysis, result, name: str, width: float = WIDTH, height: float = 240.0) -> Drawing:
    """The output after a step of one signal, with the ideal dotted; `result` is of `trace.step`."""
    t, v = result.trace.times, result.trace.outputs[-1]
    timed = ", ".join(f"within {format_percent(b)} after {format_quantity(s, 's')}" for b, s in result.settled.items())
    alt = f"Step of {name}: output from {format_fixed(result.initial, 'V')} to {format_fixed(result.final, 'V')}, " + (
        "at its limit; there is no step to measure."
        if result.at_limit
        else f"overshoot {format_percent(result.overshoot)}, rise {format_quantity(result.rise, 's')}, {timed}."
    )
    d = Drawing(width, height, alt)
    ends = (result.initial, result.final)
    _record(d, t, [(v, "", INK, 2.6), (np.full(len(t), result.final), "1 4", SOFT, 1.4)], width, height, ends)
    return d


def sine_answer(analysis: Analysis, record, ideal, name: str, width: float = WIDTH, height: float = 240.0) -> Drawing:
    """The output while one signal is a sine over its whole range, with the ideal dotted; `record` is of `trace.trace`."""
    v = record.outputs[-1]
    alt = (
        f"{name} as a sine over its whole range: output {format_fixed(float(v.min()), 'V')} to {format_fixed(float(v.max()), 'V')}; "
        f"slewing {format_percent(record.slewing)} and clipping {format_percent(record.clipping)} of the time."
    )
    d = Drawing(width, height, alt)
    _record(d, record.times, [(v, "", INK, 2.6), (ideal, "1 4", SOFT, 1.4)], width, height, ())
    return d


def _record(d, t, lines, width, height, more):
    values = [float(x) for v, *_ in lines for x in (v.min(), v.max())] + list(more)
    span = max(values) - min(values)
    pad = 0.06 * span if span > 1e-9 * max(map(abs, values)) else 1.0  # an output that stays: a volt on either side
    low, high = rounded_out(min(values) - pad, max(values) + pad)
    factor, prefix = prefix_of(t)
    plot = Plot(d, Scale(0, float(t[-1]) / factor, 56, width - 34), Scale(low, high, height - 44, 28))
    plot.grid(x_label=f"time, {prefix}s", y_label="output, V")
    for v, dash, colour, wide in lines:
        plot.curve(t / factor, v, colour=colour, width=wide, dash=dash)


__all__ = [
    "WIDTH", "busiest", "curve_key", "gain_and_phase", "hands", "histogram", "loops", "noise_density", "ruler", "shares", "sine_answer",
    "step_answer",
]  # fmt: skip
