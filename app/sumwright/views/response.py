"""The fold Response: gain and phase, loop and margins, what a scope shows, noise by term."""

from __future__ import annotations

import csv
import io
import math
from dataclasses import replace
from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, HoverTool, Range1d
from bokeh.models import Span as Line

from sumwright import fields
from sumwright.engine import compensation, noise, response, trace
from sumwright.engine.statespace import poles
from sumwright.engine.waves import Wave
from sumwright.errors import InvalidQuantity, SumwrightError
from sumwright.files.waves import read_wave
from sumwright.model import edits
from sumwright.quantity import format_quantity, parse_quantity

from .figures import move, paint, put, ruled_figure
from .fold import Context, Fold
from .held import held_of, hold, let_go
from .palette import colour, dash

PAGES = ("noise", "signals", "loop", "waves")
KINDS = ("step", "dc", "sine", "square", "triangle", "ramp", "csv")
DASHED = (7, 4)
_DECADES = {10**k: f"{10 ** (k % 3)}{('', 'k', 'M', 'G')[k // 3]}" for k in range(12)}
LOWEST = 1.0  # Hz, left end of the frequency plots
LINE = 18.0  # px from one crossing's words to those of the next


class Response(Fold):
    """Curves over frequency and over time, with the numbers that they lead to."""

    title = "Response"
    slots = ("gain", "phase", "scope")

    def __init__(self, context: Context):
        super().__init__(context)

        def lines():
            return ColumnDataSource({"x": [], "y": [], "name": [], "colour": [], "dash": [], "width": []})

        self._gain, self._phase, self._scope = lines(), lines(), lines()
        self._cross = ColumnDataSource({"x": [], "y": [], "text": [], "align": [], "shift": [], "rise": []})
        self._f = Range1d(LOWEST, 1e8)
        self._db, self._degrees = Range1d(-40.0, 120.0), Range1d(-270.0, 30.0)
        self._t, self._v = Range1d(0.0, 1.0), Range1d(0.0, 1.0)
        self._down = Line(location=1.0, dimension="height", line_width=1)
        self._theme = ""
        self._curves_of: Any = None
        self._stage_facts: tuple[Any, dict[str, Any]] = (None, {})
        self._cures: tuple[Any, Any] = (None, None)
        self.page = "noise"
        self.kind = "step"
        self.waves: dict[str, Wave] = {}
        self.duration: float | None = None
        self.cable = 0.0
        self.frequency = 1e4
        self.record: Any = None

    def figures(self) -> dict[str, Any]:
        """Gain over phase on one frequency axis, and the scope."""
        gain = self._gain_figure = ruled_figure("gain", self._f, self._db, log=True)
        phase = self._phase_figure = ruled_figure("phase", self._f, self._degrees, log=True)
        scope = self._scope_figure = ruled_figure("scope", self._t, self._v)
        for f, source, tip in (
            (gain, self._gain, [("", "@name"), ("", "$x{0.000a} Hz"), ("", "$y{0.0} dB")]),
            (phase, self._phase, [("", "@name"), ("", "$x{0.000a} Hz"), ("", "$y{0.0}°")]),
            (scope, self._scope, [("", "@name"), ("", "$x{0.000}"), ("", "$y{0.0000} V")]),
        ):
            drawn = f.multi_line("x", "y", source=source, line_color="colour", line_dash="dash", line_width="width",
                                 line_join="round")  # fmt: skip
            f.add_tools(HoverTool(renderers=[drawn], tooltips=tip, line_policy="interp", mode="mouse"))
        gain.add_layout(self._down)
        self._ring = gain.scatter("x", "y", source=self._cross, marker="circle", size=10, line_width=2)
        self._label = gain.text("x", "y", "text", source=self._cross, text_align="align", x_offset="shift", y_offset="rise",
                                text_font_size="14px", text_font_style="bold")  # fmt: skip
        gain.yaxis[0].ticker.desired_num_ticks = 7
        for f in (gain, phase):
            f.xaxis[0].major_label_overrides = _DECADES
        phase.yaxis[0].ticker = [-360, -270, -180, -90, 0, 90]
        return {"gain": gain, "phase": phase, "scope": scope}

    # ------------------------------------------------------------ showing

    def show(self) -> dict[str, Any]:
        """Curves, record and the page of numbers that is open."""
        bench = self.workbench
        analysis = bench.analysis
        repainted = self._paint(bench.theme)
        held = held_of(self.context)
        looks = (id(analysis.ac), bench.theme, bench.on, id(held), tuple(bench.style(n) for n in bench.signal_names))
        if looks != self._curves_of or repainted:
            self._curves_of = looks
            self._draw_curves(bench, analysis, held)
        shown: dict[str, Any] = {
            "page": self.page, "kind": self.kind, "on": bench.on, "held": held.design.title if held else None,
            "cells": [c._asdict() for c in analysis.ac.cells], "problem": "",
            "duration": self.duration, "cable": self.cable, "frequency": self.frequency,
        }  # fmt: skip
        try:
            shown["scope"] = self._draw_scope(bench, analysis, held)
        except SumwrightError as error:
            shown["problem"] = str(error)
        shown["more"] = getattr(self, "_page_" + self.page)(analysis)
        return shown

    def _paint(self, theme: str) -> bool:
        if theme == self._theme:
            return False
        self._theme = theme
        ink = {}
        for f in (self._gain_figure, self._phase_figure, self._scope_figure):
            ink = paint(f, theme)
        self._ring.glyph.update(fill_color=ink["paper"], line_color=ink["ink"])
        self._label.glyph.update(text_color=ink["ink"], background_fill_color=ink["paper"], background_fill_alpha=0.85)
        self._down.line_color = ink["line"]
        self._ink = ink
        return True

    def _draw_curves(self, bench, analysis, held) -> None:
        """Gain and phase: open loop, noise gain and loop phase in ink, signals in their own line, the held stage in grey."""
        ac, ink = analysis.ac, self._ink
        top = 10 ** math.ceil(math.log10(10 * analysis.design.op_amp.gain_bandwidth))
        inside = (ac.frequencies >= LOWEST / 2) & (ac.frequencies <= 2 * top)
        f = ac.frequencies[inside].astype(np.float32)
        gain: list[list[Any]] = [[f, _db(ac.open_loop[inside]), "open loop", ink["ink"], [], 2.0]]
        phase: list[list[Any]] = []
        for k, t in enumerate(ac.loop_gains):
            cell = f", cell {k + 1}" if len(ac.loop_gains) > 1 else ""
            gain.append([f, _db(ac.noise_gains[k][inside]), f"noise gain{cell}", ink["ink"], list(DASHED), 2.0])
            turned = np.degrees(np.unwrap(np.angle(t)))
            turned -= 360 * np.round(turned[0] / 360)
            phase.append([f, turned[inside].astype(np.float32), f"loop gain{cell}", ink["ink"], list(DASHED), 2.0])
        if held is not None:
            old = held.ac
            there = (old.frequencies >= LOWEST / 2) & (old.frequencies <= 2 * top)
            x = old.frequencies[there].astype(np.float32)
            for i, name in enumerate(held.design.signal_names):
                row = [f"{name}, held", ink["line"], [2, 3], 1.4]
                gain.append([x, _db(old.gains[i][there]), *row])
                phase.append([x, _phase(old.gains[i], old.signals[i].dc_gain)[there], *row])
        names = bench.design.signal_names
        for i, name in sorted(enumerate(names), key=lambda q: q[1] == bench.on):
            if name in bench.unplugged or not ac.signals[i].dc_gain:
                continue
            style = bench.style(name)
            row = [name, colour(bench.theme, style), list(dash(style)), 3.0 if name == bench.on else 1.6]
            gain.append([f, _db(ac.gains[i][inside]), *row])
            phase.append([f, _phase(ac.gains[i], ac.signals[i].dc_gain)[inside], *row])
        _fill(self._gain, [_from_left(row) for row in gain])
        _fill(self._phase, [_from_left(row) for row in phase])
        highest = 20 * math.ceil(20 * math.log10(analysis.design.op_amp.open_loop_gain) / 20)
        move(self._f, LOWEST, float(top))
        move(self._db, -40.0, float(min(highest, 160)))
        move(self._degrees, -300.0, 40.0)
        marks = [(c, k) for k, c in enumerate(ac.cells) if c.crossover is not None]
        at = [c.crossover for c, _ in marks]
        level = [20 * math.log10(max(abs(_at(ac.frequencies, ac.noise_gains[k], c.crossover)), 1e-9)) for c, k in marks]
        left = [c > math.sqrt(LOWEST * top) for c in at]
        which = [f"cell {k + 1}: " if len(ac.cells) > 1 else "" for _, k in marks]
        put(
            self._cross,
            {
                "x": at, "y": level, "align": ["right" if q else "left" for q in left], "shift": [-9 if q else 9 for q in left],
                # the loops of a chain cross near each other: their words stand above one another
                "rise": [-10.0 - LINE * (len(at) - 1 - i) for i in range(len(at))],
                "text": [
                    f"{cell}{format_quantity(c.crossover, 'Hz')}, phase margin {c.phase_margin:.0f}°".replace("-", "−")
                    for cell, (c, _) in zip(which, marks, strict=True)
                ],
            },
        )  # fmt: skip
        self._down.visible = bool(at)
        if at:
            self._down.location = at[-1]

    def _draw_scope(self, bench, analysis, held) -> dict[str, Any]:
        """The record: a step of the signal under the hand, or the waves chosen."""
        on, ink = bench.on, self._ink
        told: dict[str, Any] = {}
        if self.kind == "step":
            signal = analysis.design.signal(on)
            size = 0.1 * (signal.high - signal.low) or 1.0
            size = -size if signal.value + size > max(signal.high, signal.value) else size
            found = trace.step(analysis, on, size, duration=self.duration)
            record = found.trace
            told = {"signal": on, "size": size, "settled": {f"{b:g}": t for b, t in found.settled.items()},
                    "overshoot": found.overshoot, "rise": found.rise, "at_limit": found.at_limit}  # fmt: skip
        else:
            waves = {n: w for n, w in self.waves.items() if n in bench.design.signal_names and n not in bench.unplugged}
            record = trace.trace(analysis, waves, self._length(waves))
        self.record = record
        unit, scale = _time_unit(float(record.times[-1]) if len(record.times) else 1.0)
        t = (record.times * scale).astype(np.float32)
        rows: list[list[Any]] = []
        moving = [i for i, row in enumerate(record.inputs) if len(row) and np.ptp(row) > 0]
        if self.kind != "step":
            for i in moving:
                style = bench.style(bench.design.signal_names[i])
                rows.append(
                    [t, record.inputs[i].astype(np.float32), bench.design.signal_names[i], colour(bench.theme, style),
                     list(dash(style)), 1.6]
                )  # fmt: skip
        weights = np.array([s.weight for s in analysis.design.signals])
        ideal = weights @ record.inputs + analysis.design.target.offset
        rows.append([t, ideal.astype(np.float32), "ideal output", ink["ink-2"], [1, 4], 1.4])
        if held is not None and self.kind != "step" and held.design.signal_names == analysis.design.signal_names:
            old = trace.trace(held, waves, self._length(waves))
            rows.append(
                [(old.times * scale).astype(np.float32), old.outputs[-1].astype(np.float32), "output, held", ink["line"], [2, 3], 1.6]
            )  # fmt: skip
        elif held is not None and self.kind == "step" and on in held.design.signal_names:
            old = trace.step(
                held, on, told["size"], start=analysis.design.signal(on).value, duration=float(record.times[-1])
            ).trace
            rows.append(
                [(old.times * scale).astype(np.float32), old.outputs[-1].astype(np.float32), "output, held", ink["line"], [2, 3], 1.6]
            )  # fmt: skip
        rows.append([t, record.outputs[-1].astype(np.float32), "output", ink["ink"], [], 2.6])
        _fill(self._scope, rows)
        low = min(float(r[1].min()) for r in rows if len(r[1]))
        high = max(float(r[1].max()) for r in rows if len(r[1]))
        room = 0.08 * (high - low) or 0.01
        move(self._v, _steady(low - room, high - low, down=True), _steady(high + room, high - low, down=False))
        move(self._t, 0.0, float(t[-1]))
        told.update(
            unit=unit, slewing=record.slewing, clipping=record.clipping, complete=record.complete, events=record.events,
            unstable=bool(poles(analysis.net).real.max(initial=-1.0) > 0),
        )  # fmt: skip
        return told

    def _length(self, waves) -> float:
        """Length of the record [s]: as typed, else three periods of the slowest wave."""
        if self.duration is not None:
            return self.duration
        slow = [w.frequency for w in waves.values() if w.frequency > 0]
        ends = [w.times[-1] for w in waves.values() if w.kind == "points"]
        return max([3.0 / min(slow)] if slow else [], default=0.0) or max(ends, default=1e-3)

    def _page_noise(self, analysis) -> dict[str, Any]:
        """Noise terms, their sum, and what that leaves of a full-scale sine."""
        n, target, head = analysis.noise, analysis.design.target, analysis.headroom.cells[-1]
        span = (target.high - target.low) if None not in (target.high, target.low) else head.highest - head.lowest
        return {
            "terms": sorted(n.terms, key=lambda t: -t.rms)[:24], "rms": n.rms, "density": n.density_1khz, "band": n.band,
            "span": span, "to_noise": noise.signal_to_noise(n.rms, span), "wanted": target.noise,
        }  # fmt: skip

    def _facts(self, analysis) -> dict[str, Any]:
        """Numbers that cost something and do not follow the sliders."""
        key = (id(analysis.ac), self.cable, self.frequency)
        if self._stage_facts[0] != key:
            count = len(analysis.design.signals)
            x = np.abs(compensation.crosstalk(analysis, self.frequency))
            worst = np.unravel_index(int(x.argmax()), x.shape) if count else (0, 0)
            self._stage_facts = (key, {
                "at": response.at_signal_frequencies(analysis),
                "peaking": [
                    response.peaking_db(h, s.dc_gain)
                    for h, s in zip(analysis.ac.gains, analysis.ac.signals, strict=False)
                ],
                "crosstalk": [float(x[worst]), analysis.design.signal_names[worst[0]], analysis.design.signal_names[worst[1]]],
                "cabled": compensation.cabled_margins(analysis, [self.cable] * count) if self.cable else None,
            })  # fmt: skip
        return self._stage_facts[1]

    def _page_signals(self, analysis) -> dict[str, Any]:
        """Each signal's gain, −3 dB, and flatness at its own frequency; crosstalk; cables."""
        return {"signals": analysis.ac.signals, **self._facts(analysis)}

    def _page_loop(self, analysis) -> dict[str, Any]:
        """Margins, and the parts that would cure a poor one."""
        key = replace(analysis.design, signals=tuple(replace(s, value=0.0) for s in analysis.design.signals))
        if self._cures[0] != key:
            self._cures = (key, None)

            def got(found):
                if self._cures[0] == key:
                    self._cures = (key, list(found))
                    self.context.refresh()

            try:
                self.context.jobs.start(
                    "cures", compensation.cures, analysis.design, progress=got, done=got,
                    failed=lambda text: self.context.say(text, bad=True),
                )  # fmt: skip
            except RuntimeError:  # no event loop: nobody is watching
                self._cures = (key, [])
        return {"cells": analysis.ac.cells, "cures": self._cures[1], "cabled": self._facts(analysis)["cabled"]}

    def _page_waves(self, analysis) -> dict[str, Any]:
        """What each signal does."""
        rows = []
        for s in analysis.design.signals:
            w = self.waves.get(s.name, Wave(offset=s.value))
            kind = "csv" if w.kind == "points" else w.kind
            rows.append([s.name, self.workbench.style(s.name), kind, w.offset, w.amplitude, w.frequency])
        return {"rows": rows}

    # ------------------------------------------------------------ acts

    def handle(self, message: dict) -> dict | None:
        """Choose a page, a wave, a length, a cable; fit a cure; hold; give a CSV."""
        do = fields.one_of(message, "do", (
            "page", "kind", "wave", "wave file", "duration", "cable", "frequency", "fit", "hold", "let go", "csv",
        ))  # fmt: skip
        if do == "page":
            self.page = fields.one_of(message, "page", PAGES)
        elif do == "kind":
            self.kind = fields.one_of(message, "kind", ("step", "waves"))
            self.page = "waves" if self.kind == "waves" else self.page
            if self.kind == "waves" and not self.waves:
                self.waves[self.workbench.on] = self._usual(self.workbench.on, "sine")
        elif do == "wave":
            self._set_wave(message)
        elif do == "wave file":
            name = self._signal(message)
            self.waves[name] = wave = read_wave(fields.text(message, "text", 2_000_000))
            self.kind = "waves"
            return {"said": f"{name} follows {len(wave.times)} points, to {format_quantity(wave.times[-1], 's')}."}
        elif do == "duration":
            typed = fields.text(message, "text", 40).strip()
            length = parse_quantity(typed, "s", "record length") if typed else None
            if length is not None and not 1e-9 <= length <= 1e4:
                raise InvalidQuantity(f"the record may last 1 ns to 10 000 s; it is {length:g} s.")
            self.duration = length
        elif do == "cable":
            self.cable = _within(fields.text(message, "text", 40), "F", "cable capacitance", 0.0, 1e-3)
        elif do == "frequency":
            self.frequency = _within(fields.text(message, "text", 40), "Hz", "frequency", 0.0, 1e12)
        elif do == "fit":
            self._fit(message)
        elif do == "hold":
            hold(self.context)
        elif do == "let go":
            let_go(self.context)
        elif do == "csv":
            return self._csv(fields.one_of(message, "what", ("gain", "scope", "noise")))
        return None

    def _signal(self, message) -> str:
        return fields.one_of(message, "name", self.workbench.design.signal_names)

    def _usual(self, name: str, kind: str) -> Wave:
        """A wave that fills half the signal's range, at its own frequency."""
        s = self.workbench.design.signal(name)
        return Wave(kind, 0.5 * (s.low + s.high), 0.25 * (s.high - s.low) or 1.0, s.frequency or 1e3)

    def _set_wave(self, message) -> None:
        name = self._signal(message)
        what = fields.one_of(message, "figure", ("kind", "offset", "amplitude", "frequency"))
        self.kind = "waves"
        if what == "kind":
            kind = fields.one_of(message, "kind", KINDS[1:-1])
            if kind == "dc":
                self.waves.pop(name, None)
                return
            old = self.waves.get(name)
            usual = self._usual(name, kind)
            keep = old is not None and old.kind != "points"
            self.waves[name] = replace(old, kind=kind) if keep and old is not None else usual
            return
        now = self.waves.get(name)
        if now is None or now.kind == "points":
            raise InvalidQuantity(f"choose a wave for {name} first.")
        unit = "Hz" if what == "frequency" else "V"
        value = parse_quantity(fields.text(message, "text", 40), unit, f"{what} of {name}")
        self.waves[name] = replace(now, **{what: value})

    def _fit(self, message) -> None:
        self.context.may("capacitor")
        cell = fields.whole(message, "cell", 0, len(self.workbench.design.cells) - 1)
        farad = fields.number(message, "value", 0.0, 1e-3)
        self.workbench.edit(edits.with_feedback_capacitance, cell, farad)

    def _csv(self, what: str) -> dict[str, str]:
        out = io.StringIO()
        w = csv.writer(out, lineterminator="\n")
        analysis = self.workbench.analysis
        if what == "gain":
            ac, names = analysis.ac, (*analysis.design.signal_names, "reference")
            heads = [f"{n}_{part}" for n in names for part in ("gain", "phase_deg")]
            loops = [f"loop_cell_{k + 1}_{part}" for k in range(len(ac.loop_gains)) for part in ("gain", "phase_deg")]
            w.writerow(["frequency_Hz", *heads, *loops, "open_loop_gain"])
            curves = [*ac.gains, *ac.loop_gains]
            columns = [c for h in curves for c in (np.abs(h), np.degrees(np.unwrap(np.angle(h))))]
            w.writerows(
                zip(ac.frequencies.tolist(), *(c.tolist() for c in columns), np.abs(ac.open_loop).tolist(), strict=True)
            )
        elif what == "scope" and self.record is not None:
            r, names = self.record, analysis.design.signal_names
            w.writerow(
                ["time_s", *(f"{n}_V" for n in names), *(f"output_cell_{k + 1}_V" for k in range(len(r.outputs)))]
            )
            w.writerows(np.column_stack([r.times, r.inputs.T, r.outputs.T]).tolist())
        else:
            w.writerow(["term", "kind", "density_1kHz_V_per_sqrtHz", "rms_V"])
            w.writerows(analysis.noise.terms)
        return {"csv": out.getvalue(), "name": f"{what}.csv"}

    def close(self) -> None:
        self.context.jobs.stop("cures")


def _within(text: str, unit: str, name: str, low: float, high: float) -> float:
    value = parse_quantity(text, unit, name)
    if not low <= value <= high:
        raise InvalidQuantity(f"{name} must be from {low:g} to {high:g} {unit}; it is {value:g}.")
    return value


def _from_left(row):
    """A line drawn from the left end on: the search for poles may begin above it, where all is flat still."""
    f, y, *rest = row
    if len(f) and f[0] > LOWEST:
        f, y = np.insert(f, 0, np.float32(LOWEST)), np.insert(y, 0, y[0])
    return [f, y, *rest]


def _db(h) -> np.ndarray:
    with np.errstate(divide="ignore"):
        return np.maximum(20 * np.log10(np.abs(h)), -400.0).astype(np.float32)


def _phase(h, dc) -> np.ndarray:
    """Phase against DC [degrees], without jumps."""
    turned = np.degrees(np.unwrap(np.angle(h / dc))) if dc else np.zeros(len(h))
    turned -= 360 * np.round(turned[0] / 360) if len(turned) else 0.0
    return turned.astype(np.float32)


def _at(f, h, x) -> complex:
    return complex(np.interp(math.log(x), np.log(f), h.real), np.interp(math.log(x), np.log(f), h.imag))


def _fill(source: ColumnDataSource, rows: list[list[Any]]) -> None:
    put(
        source,
        dict(zip(("x", "y", "name", "colour", "dash", "width"), map(list, zip(*rows, strict=True)), strict=True)),
    )


def _time_unit(longest: float) -> tuple[str, float]:
    for unit, scale in (("s", 1.0), ("ms", 1e3), ("µs", 1e6)):
        if longest * scale >= 1.0:
            return unit, scale
    return "ns", 1e9


def _steady(value: float, span: float, *, down: bool) -> float:
    """`value` rounded outward to a tenth of the span's decade, so that the axis seldom moves."""
    unit = 10.0 ** math.floor(math.log10(max(span, 1e-6))) / 4
    return (math.floor if down else math.ceil)(value / unit) * unit
