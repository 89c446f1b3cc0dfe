"""The fold Budget: what every term adds, the boards drawn, what to tighten, which op amp, what gets hot."""

from __future__ import annotations

import asyncio
import csv
import io
import math
from dataclasses import replace
from typing import Any

import numpy as np
from bokeh.models import BoxAnnotation, ColumnDataSource, HoverTool, Range1d
from bokeh.models import Span as Line

from sumwright import fields
from sumwright.engine import abuse, boards, catalogue, tighten, which_op_amp
from sumwright.engine.budget import POINTS, sensitivities
from sumwright.engine.budget import Budget as ErrorBudget
from sumwright.errors import InvalidQuantity, SumwrightError
from sumwright.files.op_amps import read_op_amps, write_op_amps

from .figures import move, paint, put, ruled_figure
from .fold import Context, Fold
from .held import held_differences, held_of, hold, let_go

SEED = 1
BINS = 72
COARSE = boards.BLOCK  # boards drawn while the hand moves
REST = 0.35  # s without a change before the boards are refined
SIZES = (20_000, 200_000, 1_000_000)
PAGES = ("terms", "tighten", "op amps", "heat", "compare")


def try_op_amps(design, own):
    """A job: every op amp of the catalogue and of the person's own list tried in the stage."""
    entries = listed(own)
    rows = []
    for trial in which_op_amp.try_all(design, entries):
        rows.append(trial)
        yield rows
    return rows


def listed(own) -> tuple[catalogue.Entry, ...]:
    """The catalogue with the person's own op amps; their figures stand for one of the same name."""
    taken = {e.name.casefold() for e in own}
    return (*(e for e in catalogue.catalogue() if e.name.casefold() not in taken), *own)


class Budget(Fold):
    """Error terms with their share, a histogram of boards, and what can be done about them."""

    title = "Budget"
    slots = ("boards",)

    def __init__(self, context: Context):
        super().__init__(context)
        self._bins = ColumnDataSource({"left": [], "right": [], "top": [], "share": []})
        self._x, self._y = Range1d(-1.0, 1.0), Range1d(0.0, 1.0)
        self._band = BoxAnnotation(left=0, right=0, fill_alpha=1.0, line_color=None, level="image")
        self._limits = [Line(location=0, dimension="height", line_dash=[7, 4], line_width=1.4) for _ in range(2)]
        self._spread = ColumnDataSource({"x": [], "y": []})
        self._held = ColumnDataSource({"x": [], "y": []})
        self._held_of: tuple[Any, Any, Any] = (None, None, None)
        self._theme = self._unit = ""
        self._scale = 1.0  # volts to the histogram's unit
        self.point = "highest"
        self.page = "terms"
        self.size = SIZES[1]
        self._own: tuple[catalogue.Entry, ...] = ()
        self._entry = ""
        self._trials: tuple[Any, list[which_op_amp.Trial]] = (None, [])
        self._drawn: tuple[Any, Any] = (None, None)  # what was drawn for, and the boards.Progress
        self._for: Any = None
        self._timer: Any = None
        self._stopped = False
        self._advice: tuple[Any, dict[str, Any]] = (None, {})

    def figures(self) -> dict[str, Any]:
        """The histogram: share of the boards in each bin, the allowed band behind it."""
        f = self._figure = ruled_figure("boards", self._x, self._y, y_axis=False, grid=False)
        f.add_layout(self._band)
        for line in self._limits:
            f.add_layout(line)
        self._bars = f.quad("left", "right", "top", 0, source=self._bins, line_color=None)
        self._outline = f.step("x", "y", source=self._held, mode="before", line_width=2, line_dash=[2, 3])
        self._bracket = f.line("x", "y", source=self._spread, line_width=2)
        self._hover = HoverTool(renderers=[self._bars])
        f.add_tools(self._hover)
        return {"boards": f}

    # ------------------------------------------------------------ showing

    def show(self) -> dict[str, Any]:
        """Terms of the point chosen, the boards so far, and the page of advice that is open."""
        bench = self.workbench
        analysis, design = bench.analysis, bench.analysis.design
        budget = analysis.errors[self.point]
        key = (analysis.design if self.point == "present" else _still(analysis.design), analysis.unplugged, self.point)
        half = _reach(budget, design.target.accuracy)
        edges = np.linspace(-half, half, BINS + 1)
        if key != self._for:
            self._for, self._stopped = key, False
            drawn = boards.draw_boards(analysis, COARSE, SEED, points=(self.point,)).errors[0]
            coarse = boards.Progress(
                boards.statistics(drawn, SEED, design.target.accuracy),
                np.histogram(drawn, BINS, (-half, half))[0], self.size,
            )  # fmt: skip
            self._drawn = (key, coarse)
            self.context.jobs.stop("budget boards")
            self._soon()
        progress = self._drawn[1]
        unit, self._scale = _volt_unit(half)
        if unit != self._unit:
            self._unit = unit
            self._hover.tooltips = [("", f"@left{{+0.0}} to @right{{+0.0}} {unit}"), ("", "@share{0.00} %")]
        self._paint(bench.theme)
        self._draw(budget, progress, edges, design.target.accuracy)
        self._draw_held(edges)
        shown = {
            "point": self.point, "page": self.page, "budget": _summary(budget), "accuracy": design.target.accuracy,
            "terms": _rows(budget), "boards": _told(progress), "running": self.context.jobs.running("budget boards"),
            "sizes": list(SIZES), "size": self.size, "points": _three(analysis.errors),
            "holds": boards.first_order_holds(budget, progress.statistics), "unit": unit,
        }  # fmt: skip
        shown["more"] = getattr(self, "_page_" + self.page.replace(" ", "_"))(analysis)
        return shown

    def _paint(self, theme: str) -> None:
        if theme == self._theme:
            return
        self._theme = theme
        ink = paint(self._figure, theme)
        self._band.fill_color = ink["raised"]
        for line in self._limits:
            line.line_color = ink["ink"]
        self._bars.glyph.fill_color = ink["ink"]
        self._bracket.glyph.line_color = ink["ink"]
        self._outline.glyph.line_color = ink["line"]

    def _draw(self, budget: ErrorBudget, progress, edges, accuracy) -> None:
        share = 100.0 * progress.counts / max(progress.statistics.draws, 1)
        top = max(share.max(initial=0.0), 1e-9)
        put(
            self._bins,
            {
                "left": (self._scale * edges[:-1]).astype(np.float32), "right": (self._scale * edges[1:]).astype(np.float32),
                "top": (share / top).astype(np.float32), "share": share.astype(np.float32),
            },
        )  # fmt: skip
        move(self._x, self._scale * float(edges[0]), self._scale * float(edges[-1]))
        move(self._y, 0.0, 1.16)
        allowed = accuracy is not None
        self._band.visible = allowed
        for line in self._limits:
            line.visible = allowed
        if allowed:
            self._band.update(left=-self._scale * accuracy, right=self._scale * accuracy)
            for line, sign in zip(self._limits, (-1, 1), strict=True):
                line.location = sign * self._scale * accuracy
        a, b = self._scale * progress.statistics.low_95, self._scale * progress.statistics.high_95
        put(self._spread, {"x": [a, a, a, b, b, b], "y": [1.05, 1.13, 1.09, 1.09, 1.05, 1.13]})

    def _draw_held(self, edges) -> None:
        """The boards of the stage held, as an outline over the present ones."""
        held = held_of(self.context)
        if held is None:
            put(self._held, {"x": [], "y": []})
            return
        key = (id(held), self.point, float(edges[-1]))
        if self._held_of[0] != key:
            drawn = boards.draw_boards(held, COARSE, SEED, points=(self.point,)).errors[0]
            counts = np.histogram(drawn, BINS, (edges[0], edges[-1]))[0] / max(len(drawn), 1)
            x = (self._scale * edges).astype(np.float32)
            y = np.concatenate([[0.0], counts / max(counts.max(), 1e-12)]).astype(np.float32)
            self._held_of = (key, x, y)
        put(self._held, {"x": self._held_of[1], "y": self._held_of[2]})

    def _page_terms(self, analysis) -> dict[str, Any]:
        return {}

    def _page_tighten(self, analysis) -> dict[str, Any]:
        """The cheapest grades that meet the accuracy, and what trimming would leave."""
        accuracy = analysis.design.target.accuracy
        left = tighten.after_trim(analysis)
        out: dict[str, Any] = {
            "trim": left, "accuracy": accuracy, "plan": None, "problem": "",
            "slopes": sensitivities(analysis, self.point),
        }  # fmt: skip
        key = (analysis.design, analysis.unplugged)
        if accuracy is None:
            out["problem"] = "Type the accuracy wanted under target, and the least that meets it stands here."
            return out
        if self._advice[0] != key:
            try:
                self._advice = (key, {"plan": tighten.tighten(analysis)})
            except SumwrightError as error:
                self._advice = (key, {"problem": str(error)})
        out.update(self._advice[1])
        return out

    def _page_op_amps(self, analysis) -> dict[str, Any]:
        """The catalogue, tried; filled by a job."""
        # whichever op amp is in now, the table is the same
        design = replace(_still(analysis.design), op_amp=catalogue.catalogue()[0].op_amp, title="")
        if self._trials[0] != (design, self._own):
            self._trials = ((design, self._own), [])
            self._try(design)
        rows = which_op_amp.ranked(self._trials[1])
        keys = list(dict.fromkeys(k for t in rows for k in t.checks))
        titles = {k: t.checks[k][0] for t in rows for k in t.checks}
        every = len(listed(self._own))
        return {
            "rows": rows, "columns": [[k, titles[k]] for k in keys], "now": analysis.design.op_amp.name,
            "tried": len(rows), "of": every, "own": len(self._own),
            "sources": {e.name: _sources(e) for e in listed(self._own)}, "entry": self._figures(),
        }  # fmt: skip

    def _figures(self) -> dict[str, Any] | None:
        """Every figure of the op amp looked at, with its source."""
        entry = catalogue.find(self._entry, listed(self._own)) if self._entry else None
        if entry is None:
            return None
        rows = [
            [name.replace("_", " "), getattr(entry.op_amp, name), catalogue.UNITS[name], entry.sources[name]]
            for name in catalogue.FIGURES
        ]
        return {"name": entry.name, "note": entry.note, "rows": rows}

    def _try(self, design) -> None:
        def got(rows):
            self._trials = (self._trials[0], rows)
            self.context.refresh()

        self._job("op amps", try_op_amps, design, self._own, progress=got, done=got, failed=self._failed)

    def _page_heat(self, analysis) -> dict[str, Any]:
        """What gets hot, and mishaps."""
        return {
            "heat": analysis.power, "short": abuse.output_short(analysis), "inputs": abuse.input_currents(analysis),
            "past": abuse.overdrive(analysis), "junction_most": analysis.design.op_amp.junction_most,
        }  # fmt: skip

    def _page_compare(self, analysis) -> dict[str, Any]:
        """The margins beside those of the stage held."""
        return held_differences(self.context, analysis)

    # ------------------------------------------------------------ boards

    def _soon(self) -> None:
        """Refine once the hand has been still for a while."""
        if self._timer is not None:
            self._timer.cancel()
            self._timer = None
        try:
            loop = asyncio.get_running_loop()
        except RuntimeError:
            return
        self._timer = loop.call_later(REST, self._refine)

    def _refine(self) -> None:
        self._timer = None
        key, coarse = self._drawn
        if coarse is None or self._stopped:
            return
        analysis = self.workbench.analysis
        half = _reach(analysis.errors[self.point], analysis.design.target.accuracy)

        def got(progress):
            if self._for == key:
                self._drawn = (key, progress)
                self.context.refresh()

        self._job(
            "budget boards", boards.in_steps, analysis.design, tuple(analysis.unplugged), self.point, self.size, SEED,
            np.linspace(-half, half, BINS + 1), progress=got, done=got, failed=self._failed,
        )  # fmt: skip
        self.context.refresh()

    def _job(self, name, function, *args, **calls):
        try:
            asyncio.get_running_loop()
        except RuntimeError:
            return
        self.context.jobs.start(name, function, *args, **calls)

    def _failed(self, text: str) -> None:
        self.context.say(text, bad=True)

    # ------------------------------------------------------------ acts

    def handle(self, message: dict) -> dict | None:
        """Choose a point, a page or a number of boards; stop; take an op amp or a plan; hold; give a CSV."""
        do = fields.one_of(message, "do", (
            "point", "page", "size", "stop", "take", "entry", "own", "tolerance", "hold", "let go", "csv",
        ))  # fmt: skip
        if do == "point":
            self.point = fields.one_of(message, "point", POINTS)
        elif do == "page":
            self.page = fields.one_of(message, "page", PAGES)
        elif do == "size":
            self.size = fields.one_of(message, "size", SIZES)
            self._for = None
        elif do == "stop":
            self._stopped = True
            if self._timer is not None:
                self._timer.cancel()
            self.context.jobs.stop("budget boards")
        elif do == "take":
            self._take(fields.text(message, "name"))
        elif do == "entry":
            name = fields.text(message, "name")
            self._entry = "" if name == self._entry else name
        elif do == "own":
            self._own = read_op_amps(fields.text(message, "text", 1_000_000))
            self.page = "op amps"
            count = len(self._own)
            return {"said": f"{count} op amp{'s' if count != 1 else ''} of your own in the table."}
        elif do == "tolerance":
            self._all_resistors(fields.number(message, "tolerance", 1e-6, 0.5))
        elif do == "hold":
            hold(self.context)
        elif do == "let go":
            let_go(self.context)
        elif do == "csv":
            return self._csv(fields.one_of(message, "what", ("terms", "boards", "op amps", "list")))
        return None

    def _take(self, name: str) -> None:
        entry = catalogue.find(name, listed(self._own))
        if entry is None:
            raise InvalidQuantity(f"{name!r} is in neither list of op amps.")
        self.context.may("figure")
        self.workbench.edit(lambda design: replace(design, op_amp=entry.op_amp))

    def _all_resistors(self, tolerance: float) -> None:
        self.context.may("figure")
        grade = next((g for g in tighten.GRADES if math.isclose(g[0], tolerance)), None)
        kind = self.workbench.design.resistor
        coefficient = min(kind.temperature_coefficient, grade[1]) if grade else kind.temperature_coefficient
        new = replace(kind, tolerance=tolerance, temperature_coefficient=coefficient)
        self.workbench.edit(lambda design: replace(design, resistor=new))

    def _csv(self, what: str) -> dict[str, str]:
        out = io.StringIO()
        w = csv.writer(out, lineterminator="\n")
        analysis = self.workbench.analysis
        if what == "list":  # the person's own, or the op amp on the sheet as a line to copy
            return {"csv": write_op_amps(self._own or (analysis.design.op_amp,)), "name": "my-op-amps.csv"}
        if what == "terms":
            budget = analysis.errors[self.point]
            w.writerow(
                ["point", "term", "part", "kind", "limit_effect_V", "standard_uncertainty_V", "shift_V", "share"]
            )
            for t, s in zip(budget.terms, budget.shares, strict=True):
                w.writerow([self.point, t.name, t.source, t.kind, t.limit_effect, t.standard_uncertainty, t.shift, s])
        elif what == "boards":
            w.writerow(["from_mV", "to_mV", "share_percent"])
            d = self._bins.data
            w.writerows(zip(*(np.asarray(d[k]).tolist() for k in ("left", "right", "share")), strict=True))
        else:
            rows = which_op_amp.ranked(self._trials[1])
            keys = list(dict.fromkeys(k for t in rows for k in t.checks))
            w.writerow(
                ["name", "kind", "short", "tight", *(f"{k}_{part}" for k in keys for part in ("status", "margin"))]
            )
            for t in rows:
                cells = [t.checks.get(k, ("", "", "", "")) for k in keys]
                w.writerow([t.name, t.kind, t.short, t.tight, *(x for c in cells for x in (c[1], c[2]))])
        return {"csv": out.getvalue(), "name": f"{what.replace(' ', '-')}.csv"}

    def close(self) -> None:
        if self._timer is not None:
            self._timer.cancel()
            self._timer = None
        self.context.jobs.stop("budget boards")
        self.context.jobs.stop("op amps")


def _still(design):
    """The design without where its signals are just now: what the corners depend on."""
    return replace(design, signals=tuple(replace(s, value=0.0) for s in design.signals))


def _reach(budget: ErrorBudget, accuracy: float | None) -> float:
    """Half the histogram's width [V]: all boards and the allowed band, rounded up so that it seldom changes."""
    need = max(abs(budget.shift) + 1.9 * budget.expanded_95, 1.2 * (accuracy or 0.0), 1e-9)
    power = 10.0 ** math.floor(math.log10(need))
    return next(m * power for m in (1, 1.25, 1.6, 2, 2.5, 3.2, 4, 5, 6.3, 8, 10) if m * power >= need * (1 - 1e-9))


def _volt_unit(most: float) -> tuple[str, float]:
    """The unit in which errors up to `most` [V] are drawn, and what a volt is in it."""
    for unit, scale, least in (("kV", 1e-3, 2e3), ("V", 1.0, 2.0), ("mV", 1e3, 2e-3), ("µV", 1e6, 2e-6)):
        if most >= least:
            return unit, scale
    return "nV", 1e9


def _summary(b: ErrorBudget) -> dict[str, float]:
    return {
        "shift": b.shift, "expanded": b.expanded_95, "worst": b.worst_case, "output": b.output, "ideal": b.ideal_output,
    }  # fmt: skip


def _three(errors) -> list[dict[str, Any]]:
    return [{"point": p, **_summary(errors[p])} for p in POINTS]


def _rows(b: ErrorBudget) -> list[list[Any]]:
    """name, kind, limit [V], u [V], share, shift [V]: largest variance first, temperature of all resistors as one row."""
    shares = b.shares
    rows, hot = [], [0.0, 0.0, 0.0]
    for t, s in zip(b.terms, shares.tolist(), strict=True):
        if t.kind == "temperature":
            hot = [hot[0] + t.limit_effect, hot[1] + t.standard_uncertainty**2, hot[2] + s]
        else:
            rows.append([t.name, t.kind, t.limit_effect, t.standard_uncertainty, s, t.shift])
    rows.append(["temperature, all resistors", "temperature", hot[0], math.sqrt(hot[1]), hot[2], 0.0])
    return sorted(rows, key=lambda r: (-r[4], -abs(r[5])))


def _told(p: boards.Progress) -> dict[str, Any]:
    s = p.statistics
    return {
        "draws": s.draws, "wanted": p.wanted, "mean": s.mean, "sd": s.standard_deviation, "low": s.low_95,
        "high": s.high_95, "yield": s.yield_,
    }  # fmt: skip


def _sources(entry: catalogue.Entry) -> str:
    """Where an entry's figures come from, in one line, the most frequent first."""
    count: dict[str, int] = {}
    for source in entry.sources.values():
        count[source] = count.get(source, 0) + 1
    return "; ".join(f"{n} figures {s}" for s, n in sorted(count.items(), key=lambda q: -q[1]))


__all__ = ["Budget", "held_of", "try_op_amps"]
