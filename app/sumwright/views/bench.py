"""The fold Bench: the run step by step, readings with their verdict, fitted weights, suspects, the next reading, captures."""

from __future__ import annotations

import asyncio
import math
from typing import Any

from sumwright import fields
from sumwright.engine.bench.board import Bench as BoardBench
from sumwright.engine.bench.diagnose import diagnose, near_clipping, weight_bands
from sumwright.engine.bench.fit import headline, least_squares
from sumwright.engine.bench.home import as_built, bring_home, software_correction
from sumwright.engine.bench.readings import parse_meter
from sumwright.engine.stage import replace
from sumwright.errors import InvalidQuantity, InvalidReadings, SumwrightError
from sumwright.files.readings import MOST_BYTES, parse_readings
from sumwright.model.bench_jobs import told, weigh
from sumwright.model.bench_run import BenchRun, Row

from .bench_capture import CapturePart
from .fold import Context, Fold

TEXT_MOST = 400_000


class Bench(Fold):
    """The run, the grid of readings, and what follows from them."""

    title = "Bench"
    slots = ("capture",)

    def __init__(self, context: Context):
        super().__init__(context)
        self._run = BenchRun(self.workbench.analysis.design)
        self._now = 0
        self._told: dict[str, Any] | None = None
        self._told_for: Any = None
        self._fit: tuple[Any, dict[str, Any]] = (None, {})
        self._kept = ""
        self._serial = 0  # of the readings; a changed reading makes what was told old
        self._on_sheet: dict = {}  # the readings that the sheet holds, as this fold has taken them up
        self.capture = CapturePart(self)
        self._follow_sheet()
        self._take_up()

    def figures(self) -> dict[str, Any]:
        return {"capture": self.capture.figure()}

    # ------------------------------------------------------------ showing

    def show(self) -> dict[str, Any]:
        """The run as it stands; the suspects come when they have been weighed."""
        design = self.workbench.analysis.design
        self._follow_sheet()
        if self._run.follow(design):
            self._serial += 1
        rows = self._run.rows()
        self._now = min(self._now, len(rows) - 1)
        key = (self._serial, self._run.meter)
        if self._told_for != key:
            self._told_for = key
            self._weigh(key)
        if self._fit[0] != key:
            self._fit = (key, self._fitted())
        taken = sum(r.taken is not None for r in rows)
        fit = dict(self._fit[1])
        if self._told and self._told["cure"]:  # one fault explains it: nothing for each weight by itself
            fit["home"] = []
        return {
            "names": design.signal_names, "styles": [self.workbench.style(n) for n in design.signal_names],
            "rows": [_row(r) for r in rows], "now": self._now, "taken": taken, "waiting": len(self._run.taken) - taken, "meter": self._run.meter.text, **fit,
            "told": self._told, "busy": self.context.jobs.running("bench"), "kept": self._kept, "gone": bool(self.workbench.cleared),
            "log": self.context.extras.get("sitting") is not None, "capture": self.capture.show(),
        }  # fmt: skip

    def _fitted(self) -> dict[str, Any]:
        """Weights with their bands and verdicts, and what would bring home those that are out."""
        design = self._run.design
        readings = self._run.readings()
        report = diagnose_fit(design, readings, self._run.bench, self._run.stated_limits())
        rows, home = [], []
        for name, value, u, band, verdict, known in report["rows"]:
            rows.append(
                {
                    "name": name, "value": _leaf(value), "wide": _leaf(2 * u), "nominal": band.nominal, "low": verdict.low,
                    "high": verdict.high, "word": verdict.word if readings.count else "", "more": verdict.more, "known": bool(known),
                    "stated": self._run.limits.get(name, ""),
                }
            )  # fmt: skip
            if verdict.word == "out" and known and len(home) < 6:
                try:
                    home.append(bring_home(design, name, float(value)))
                except (SumwrightError, KeyError):
                    continue
        fit = report["fit"]
        return {
            "fit": rows, "home": [h._asdict() for h in home],
            "software": [c._asdict() for c in software_correction(design, fit)] if home else [],
            "chi": {"value": _leaf(fit.chi_squared), "freedom": fit.degrees_of_freedom, "p": _leaf(fit.p_value)},
            "left_out": [x._asdict() for x in report["left_out"]],
        }  # fmt: skip

    def _weigh(self, key) -> None:
        readings = self._run.readings()

        def done(result):
            if self._told_for == key:
                self._told = result
            else:
                self._weigh(self._told_for)
            self.context.refresh()

        try:
            asyncio.get_running_loop()
        except RuntimeError:  # no server: a test, or a script
            self._told = told(diagnose(self._run.design, readings, meter=self._run.meter))
            return
        if self.context.jobs.running("bench"):
            return  # what is under way ends, then the newest readings are weighed: a worker is not thrown away
        self.context.jobs.start(
            "bench", weigh, self._run.design, readings, self._run.meter, done=done,
            failed=lambda sentence: self.context.say(sentence, bad=True),
        )  # fmt: skip

    # ------------------------------------------------------------ acts

    def handle(self, message: dict) -> dict | None:
        """Type, paste or open readings; go to a step; state the meter; keep, clear; take up the next reading."""
        do = fields.one_of(message, "do", tuple(_ACTS))
        return _ACTS[do](self, message)

    def _changed(self) -> None:
        """The readings are others: the sheet holds them, so they are saved with it."""
        self._serial += 1
        self.context.extras["readings"] = self._run.readings()
        self._on_sheet = self._run.document()
        self.workbench.read(self._on_sheet)

    def _follow_sheet(self) -> None:
        """Take up what the sheet holds, when that is not what is here: it was opened again, or somebody else changed it."""
        held = self.workbench.readings
        if held is self._on_sheet:
            return
        self._on_sheet = held
        try:
            self._run.take_up(held)
        except SumwrightError as error:
            self.context.say(f"{error} The readings stored with this sheet are not shown.", bad=True)
            return
        self._serial += 1
        self.context.extras["readings"] = self._run.readings()

    def _reading(self, message):
        self._run.put(fields.whole(message, "row", 0, 10_000), fields.text(message, "text", 60))
        self._kept = ""
        self._changed()

    def _go(self, message):
        self._now = fields.whole(message, "row", 0, max(0, len(self._run.rows()) - 1))

    def _paste(self, message):
        count = self._run.paste(fields.whole(message, "row", 0, 10_000), fields.text(message, "text", TEXT_MOST))
        self._changed()
        self.context.say(f"{count} readings pasted.")

    def _file(self, message):
        text = fields.text(message, "text", MOST_BYTES)
        readings = parse_readings(text, self._run.design, "The readings file")
        count = self._run.take(readings)
        self._changed()
        repeats = readings.count - count
        mean = f" {repeats} repeat a setting; the mean counts." if repeats else ""
        self.context.say(f"{readings.count} readings opened.{mean}")

    def _meter(self, message):
        self._run.restate(parse_meter(fields.text(message, "text", 120)))
        self._changed()

    def _limit(self, message):
        names = (*self._run.design.signal_names, "offset")
        self._run.state(fields.one_of(message, "name", names), fields.text(message, "text", 60))
        self._changed()

    def _next(self, message):
        if not self._told or not self._told["next"]:
            raise InvalidQuantity("The next reading is not known yet.")
        self._now = self._run.ask(self._told["next"])
        self._changed()
        return {"focus": self._now}

    def _clear(self, message):
        self._run.clear()
        self.workbench.clear_readings(self._run.document())
        self._follow_sheet()
        self.context.say("The readings are cleared; Bring back, or Undo, gives them back.")

    def _bring_back(self, message):
        self.workbench.bring_back_readings()
        self._follow_sheet()

    def _csv(self, message):
        return {"csv": self._run.to_csv(), "name": "readings.csv"}

    def _as_built(self, message):
        """Resistor values as the readings have them, onto the sheet."""
        readings = self._run.readings()
        report = diagnose(self._run.design, readings, meter=self._run.meter, foresee=False)
        cells = as_built(report.diagnosis)
        self.workbench.put(replace(self.workbench.design, cells=cells))
        self.context.say("Every fold now shows the board as built; Undo gives the drawing back.")

    # ------------------------------------------------------------ the log

    def _keep(self, message):
        """The readings and what was made of them, as an entry of the log."""
        sitting = self.context.extras.get("sitting")
        if sitting is None:
            raise InvalidQuantity("This sheet has no notebook.")
        sitting.desk.require("write")
        if not self._run.readings().count:
            raise InvalidReadings("There are no readings of the output to keep yet.")
        words = [r["word"] for r in self._fit[1]["fit"]]
        title = f"{self._run.readings().count} readings: {headline(words[:-1], words[-1])}"
        body = {
            "title": title, "csv": self._run.to_csv(),
            "fit": {"weights": self._fit[1]["fit"], "chi": self._fit[1]["chi"], "meter": self._run.meter.text,
                    "suspects": (self._told or {}).get("suspects", [])[:3]},
        }  # fmt: skip

        def append():
            if not sitting.key:
                sitting.begin_notebook()
            return sitting.desk.append(sitting.key, "readings", body, sheet=sitting.number)

        def done(entry):
            self._kept = f"kept as entry {entry.number}"
            sitting._fold_news()  # the log, if it is open in another fold, reads again
            self.context.refresh()

        sitting.aside(append, done, lambda sentence: self.context.say(sentence, bad=True))

    def _take_up(self) -> None:
        """The readings last kept of this sheet, when it is opened again."""
        sitting = self.context.extras.get("sitting")
        if sitting is None or not sitting.key or self.workbench.readings:
            return
        key, number, desk = sitting.key, sitting.number, sitting.desk

        def read():
            found = [e for e in desk.entries(key, kind="readings") if e.sheet == number]
            return found[-1] if found else None

        def put(entry):
            if entry is None or self._run.taken:
                return
            try:
                count = self._run.restore(entry.body["csv"])
            except SumwrightError:
                return  # the signals have other names by now; the entry stays in the log
            self._serial += 1  # nothing is new to the sheet: looking at it saves nothing
            self.context.extras["readings"] = self._run.readings()
            self._kept = f"{count} readings taken up from entry {entry.number}"
            self.context.refresh()

        sitting.aside(read, put, lambda sentence: None)

    def close(self) -> None:
        self.context.jobs.stop("bench")
        self.capture.close()


_ACTS = {
    "reading": Bench._reading, "go": Bench._go, "paste": Bench._paste, "file": Bench._file, "meter": Bench._meter, "limit": Bench._limit,
    "next": Bench._next, "clear": Bench._clear, "bring back": Bench._bring_back, "csv": Bench._csv, "as built": Bench._as_built,
    "keep": Bench._keep, "capture": lambda self, message: self.capture.handle(message),
}  # fmt: skip


def diagnose_fit(
    design, readings, bench: BoardBench, limits: dict[str, tuple[float, float]] | None = None
) -> dict[str, Any]:
    """The linear part of a diagnosis alone, fast enough for every keystroke."""
    import numpy as np

    from sumwright.engine.bench.fit import verdict

    left_out = near_clipping(design, readings, bench) if readings.count else []
    keep = np.setdiff1d(np.arange(readings.count), [x.row for x in left_out])
    matrix = np.column_stack([readings.volts[keep], np.ones(len(keep))])
    fit = least_squares(matrix, readings.output[keep], readings.uncertainty[keep])
    bands = weight_bands(design, bench)
    rows = [
        (
            name,
            value,
            u,
            band,
            verdict(value, u, *(limits or {}).get(name, (band.low, band.high)), readings=max(1, len(keep))),
            known,
        )
        for name, value, u, band, known in zip(
            (*bench.names, "offset"), fit.value, fit.standard_uncertainty, bands, fit.determined, strict=True
        )
    ]
    return {"fit": fit, "rows": rows, "left_out": left_out}


def _row(r: Row) -> dict[str, Any]:
    s = r.step
    return {
        "title": s.title, "setup": s.setup, "apply": list(s.apply.values()) if s.apply else None, "probe": s.probe,
        "expect": s.expect, "low": s.low, "high": s.high, "unit": s.unit, "why": s.why, "miss": s.miss, "caution": s.caution,
        "text": r.taken.text if r.taken else "", "value": r.taken.value if r.taken else None, "word": r.word, "planned": r.planned,
    }  # fmt: skip


def _leaf(x):
    return None if x is None or not math.isfinite(x) else float(x)
