"""The capture on the Bench fold: a record brought in parts, mapped, fitted beside the server, drawn over the prediction."""

from __future__ import annotations

import asyncio
import base64
import binascii
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, Range1d

from sumwright import fields
from sumwright.errors import InvalidReadings
from sumwright.model.bench_jobs import OUTPUT, columns_file, fit_record, look

from .figures import move, paint, put, ruled_figure

UPLOAD_MOST = 128 * 1024 * 1024
PART_MOST = 3_000_000  # characters of one part, base64


class CapturePart:
    """State of one session's record, and its figure."""

    def __init__(self, fold: Any):
        self._fold = fold
        self._file: Any = None
        self._name = "The capture"  # what its errors call it
        self._size = 0
        self._about: dict[str, Any] | None = None
        self._fit: Any = None
        self._problem = ""
        self._theme = ""
        self._fresh = False
        self._measured = ColumnDataSource({"x": [], "low": [], "high": []})
        self._lines = ColumnDataSource({"x": [], "predicted": [], "fitted": []})
        self._x, self._y = Range1d(0.0, 1.0), Range1d(-1.0, 1.0)

    def figure(self) -> Any:
        """Measured as a band, the prediction dashed, the fit drawn through."""
        f = self._figure = ruled_figure("capture", self._x, self._y)
        self._band = f.segment("x", "low", "x", "high", source=self._measured, line_width=2)
        self._predicted = f.line("x", "predicted", source=self._lines, line_width=1.6, line_dash=[7, 4])
        self._through = f.line("x", "fitted", source=self._lines, line_width=1.6)
        return f

    def show(self) -> dict[str, Any]:
        if getattr(self, "_figure", None) is not None and self._theme != self._fold.workbench.theme:
            self._theme = self._fold.workbench.theme
            ink = paint(self._figure, self._theme)
            self._band.glyph.line_color = ink["line"]
            self._predicted.glyph.line_color = ink["ink-2"]
            self._through.glyph.line_color = ink["ink"]
        r = self._fit
        if r is not None and self._fresh:
            self._fresh = False
            self._draw(r)
        return {
            "about": self._about, "problem": self._problem, "coming": self._size if self._file and not self._about else 0,
            "busy": self._fold.context.jobs.running("capture"),
            "fit": None if r is None else {
                "names": r.names, "value": [_leaf(v) for v in r.fit.value], "u": [_leaf(v) for v in r.fit.standard_uncertainty],
                "predicted": [*map(float, r.predicted_weights), float(r.predicted_offset)], "delay": r.delay,
                "bandwidth": r.bandwidth, "noise": r.noise, "used": r.used, "findings": [f.text for f in r.findings],
            },
        }  # fmt: skip

    def handle(self, message: dict) -> dict | None:
        step = fields.one_of(message, "step", ("part", "fit", "forget"))
        if step == "forget":
            self._forget()
        elif step == "part":
            return self._part(message)
        else:
            self._start_fit(message)
        return None

    def _part(self, message):
        """One part of the file, in order; the last one starts the reading."""
        text = fields.text(message, "data", PART_MOST)
        if fields.truth(message, "first"):
            self._forget()
            given = fields.text(message, "name", 200) if "name" in message else ""
            self._name = f"“{given}”" if given else "The capture"
            self._file = tempfile.NamedTemporaryFile(prefix="capture-", suffix=".csv")  # noqa: SIM115 - lives with the fold
        if self._file is None:
            raise InvalidReadings("A part of a capture came without its beginning; open the file again.")
        try:
            data = base64.b64decode(text, validate=True)
        except (binascii.Error, ValueError):
            self._forget()
            raise InvalidReadings("A part of the capture arrived damaged; open the file again.") from None
        self._size += len(data)
        if self._size > UPLOAD_MOST:
            self._forget()
            raise InvalidReadings(f"The capture is over {UPLOAD_MOST // 2**20} MB, the most that is taken here.")
        self._file.write(data)
        if fields.truth(message, "last"):
            self._file.flush()
            self._job(
                look, self._file.name, self._fold.workbench.analysis.design.signal_names, self._name, done=self._looked
            )
        return {"part": self._size}

    def _looked(self, about):
        self._about, self._problem = about, ""
        self._fold.context.refresh()

    def _start_fit(self, message):
        if self._about is None or self._file is None:
            raise InvalidReadings("No capture is open.")
        given = message.get("map")
        names = set(self._fold.workbench.analysis.design.signal_names)
        if not isinstance(given, dict) or not set(given) <= set(self._about["channels"]):
            raise InvalidReadings("The map names a channel that the capture does not have.")
        mapping = {c: str(w) for c, w in given.items() if w}
        if any(w not in names | {OUTPUT} for w in mapping.values()):
            raise InvalidReadings("A channel is mapped to something that is neither a signal nor the output.")
        if list(mapping.values()).count(OUTPUT) != 1:
            raise InvalidReadings("Map exactly one channel to the output.")
        if len(set(mapping.values())) < len(mapping):
            raise InvalidReadings("Two channels are mapped to the same signal.")
        if len(mapping) < 2:
            raise InvalidReadings("Map at least one channel to a signal.")
        self._about = {**self._about, "map": {c: mapping.get(c, "") for c in self._about["channels"]}}
        design = self._fold.workbench.analysis.design
        self._job(fit_record, self._file.name, design, self._about["map"], done=self._fitted)

    def _fitted(self, result):
        self._fit, self._problem, self._fresh = result, "", True
        self._fold.context.refresh()

    def _draw(self, result):
        """Only while a frame is made: the figure belongs to the page's document."""
        scale = 1e3 if result.time[-1] - result.time[0] < 1 else 1.0  # ms, or s
        x = scale * (result.time - result.time[0])
        put(self._measured, {
            "x": x.astype(np.float32), "low": result.measured[:, 0].astype(np.float32), "high": result.measured[:, 1].astype(np.float32),
        })  # fmt: skip
        put(self._lines, {
            "x": x.astype(np.float32), "predicted": result.predicted.astype(np.float32), "fitted": result.fitted.astype(np.float32),
        })  # fmt: skip
        lowest = min(float(result.measured.min()), float(result.predicted.min()))
        highest = max(float(result.measured.max()), float(result.predicted.max()))
        room = 0.06 * max(highest - lowest, 1e-3)
        move(self._x, 0.0, float(x[-1]))
        move(self._y, lowest - room, highest + room)

    def _job(self, function, *args, done):
        def failed(sentence):
            self._problem = sentence
            self._fold.context.refresh()

        self._problem, self._fit = "", None
        try:
            asyncio.get_running_loop()
        except RuntimeError:  # no server: a test, or a script
            steps = function(*args)
            while True:
                try:
                    next(steps)
                except StopIteration as stop:
                    done(stop.value)
                    return
        self._fold.context.jobs.start("capture", function, *args, done=done, failed=failed)

    def _forget(self):
        self._fold.context.jobs.stop("capture")
        if self._file is not None:
            Path(columns_file(self._file.name)).unlink(missing_ok=True)
            self._file.close()
        self._file, self._size, self._about, self._fit, self._problem = None, 0, None, None, ""

    def close(self):
        self._forget()


def _leaf(x):
    return float(x) if np.isfinite(x) else None
