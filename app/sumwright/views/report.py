"""The fold Report: documents and files made from the sheet as it stands.

They are made in a process of their own. What is ready waits under a token until
the browser takes it, so that no file travels with the frames of a drag.
"""

from __future__ import annotations

import base64
from collections.abc import Generator
from datetime import UTC, datetime
from typing import Any

from sumwright import fields
from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import Design
from sumwright.errors import InvalidQuantity, SumwrightError
from sumwright.model.bench_run import BenchRun
from sumwright.notebook.entries import decisions_of
from sumwright.report.document import DRAWS, Decision
from sumwright.report.schematic import SYMBOLS

from .fold import Context, Fold

KINDS = ("report", "bring-up", "record", "bundle", "summary", "table", "picture")
DRAWS_MOST = 1_000_000
_SYMBOLS = {words: key for key, words in SYMBOLS.items()}
# Every table and picture there is, with the word a person reads.
TABLES = (
    ("signals", "Signals"), ("requirements", "Requirements"), ("parts", "Values"), ("bill", "Bill of materials"), ("weights", "Weights"),
    ("formulas", "How each weight follows"), ("margins", "Margins"), ("headroom", "Headroom"), ("corners", "Where the extremes lie"),
    ("nodes", "Nodes"), ("branches", "Currents"), ("errors", "Error of the output"), ("terms", "Error budget by term"),
    ("bands", "Bandwidth of each signal"), ("loops", "Stability"), ("noise", "Noise by term"), ("heat", "Heat"), ("op_amp", "Op amp"),
    ("cables", "With a cable out"),
)  # fmt: skip
PICTURES = (
    ("schematic", "Schematic"), ("curves", "Curves and headroom"), ("error-shares", "Error by term"), ("boards", "Drawn boards"),
    ("gain-and-phase", "Gain and phase"), ("loop", "Loop gain"), ("step", "Step"), ("noise", "Noise density"), ("key", "Key of the signals"),
)  # fmt: skip


class Report(Fold):
    """What leaves the sheet."""

    title = "Report"

    def __init__(self, context: Context):
        super().__init__(context)
        self._ready: dict[str, Any] | None = None
        self._making = ""
        self._refused = ""
        self._seen: Any = None
        self._stamp = 0  # changes with the stage, so that a picture that is looked at can be drawn anew

    def show(self) -> dict[str, Any]:
        design = self.workbench.analysis.design
        if self._seen != (self.workbench.analysis, self.workbench.symbols, self.workbench.theme):
            self._seen = (self.workbench.analysis, self.workbench.symbols, self.workbench.theme)
            self._stamp += 1
        return {
            "stamp": self._stamp,
            "making": self._making, "ready": None if self._ready is None else self._ready["token"], "refused": self._refused,
            "tables": [t for t in TABLES if t[0] != "cables" or len(design.signals) > 1], "pictures": PICTURES,
            "symbols": self.workbench.symbols, "draws": DRAWS, "readings": 0 if self._readings is None else self._readings.count,
        }  # fmt: skip

    @property
    def _readings(self) -> Any:
        """What was read on the bench, if anything."""
        extras, held = self.context.extras, self.workbench.readings
        if "readings" not in extras and held:  # the sheet was opened again, and Bench not yet
            run = BenchRun(self.workbench.analysis.design)
            try:
                run.take_up(held)
            except SumwrightError:
                return None  # the Bench says why
            extras["readings"] = run.readings()
        return extras.get("readings")

    def handle(self, message: dict) -> dict | None:
        if message.get("ask") == "take":
            return self._take(fields.text(message, "token", 40))
        if message.get("ask") == "look":
            return self._look(fields.one_of(message, "which", [key for key, _ in PICTURES]))
        if message.get("ask") == "stop":
            self.context.jobs.stop("report")
            self._making = ""
            return None
        if message.get("ask") != "make":
            raise InvalidQuantity("The report was asked for something it does not know.")
        self._make(message)
        return None

    def _look(self, which: str) -> dict[str, Any]:
        """A picture to look at, at once: each takes milliseconds."""
        from sumwright.engine.boards import draw_boards
        from sumwright.report.export import drawing

        analysis = self.workbench.analysis
        errors = draw_boards(analysis, DRAWS, points=("present",)).errors[0] if which == "boards" else None
        found = drawing(analysis, which, symbols=_SYMBOLS[self.workbench.symbols], errors=errors)
        return {"look": which, "stamp": self._stamp, "svg": "" if found is None else str(found.svg())}

    def _make(self, message: dict) -> None:
        kind = fields.one_of(message, "kind", KINDS)
        token = fields.text(message, "token", 40)
        which = ""
        if kind in ("table", "picture"):
            which = fields.one_of(message, "which", [key for key, _ in (TABLES if kind == "table" else PICTURES)])
        draws = fields.whole(message, "draws", 0, DRAWS_MOST)
        readings = self._readings if kind == "record" else None
        unfit = ""
        if kind == "record" and (readings is None or readings.count == 0):
            unfit = "There are no readings yet: take some under Bench, then make the record."
        elif readings is not None and readings.names != self.workbench.analysis.design.signal_names:
            unfit = "The signals are not those of the readings any more; take the readings of this stage under Bench."
        if unfit:  # said as of any file that could not be made, so that the browser closes the tab it opened for it
            self._making, self._ready = token, None
            self._failed(token, unfit)
            return
        order = {
            "kind": kind, "which": which, "draws": draws, "symbols": _SYMBOLS[self.workbench.symbols], "theme": self.workbench.theme,
            "made": datetime.now(UTC).isoformat(), "author": None, "decisions": [], "readings": readings,
            "meter": self.workbench.readings.get("meter", ""),
        }  # fmt: skip
        self._making, self._refused, self._ready = token, "", None
        sitting = self.context.extras.get("sitting")
        if sitting is None:
            self._start(token, order)
            return
        order["author"] = sitting.desk.person.name or None
        key, desk = sitting.key, sitting.desk

        def read() -> list[tuple[str, str, str, str]]:
            return decisions_of(desk.entries(key)) if key else []

        def begin(decisions: list[tuple[str, str, str, str]]) -> None:
            self._start(token, {**order, "decisions": decisions})

        sitting.aside(read, begin, lambda sentence: self._failed(token, sentence))

    def _start(self, token: str, order: dict[str, Any]) -> None:
        analysis = self.workbench.analysis

        def done(made: tuple[str, str, bytes]) -> None:
            if self._making == token:
                name, kind, data = made
                self._ready = {"token": token, "name": name, "type": kind, "data": data}
                self._making = ""
                self.context.refresh()

        self.context.jobs.start(
            "report", make, analysis.design, tuple(analysis.unplugged), order, done=done,
            failed=lambda sentence: self._failed(token, sentence),
        )  # fmt: skip

    def _failed(self, token: str, sentence: str) -> None:
        if self._making == token:
            self._making, self._refused = "", sentence
            self.context.refresh()

    def _take(self, token: str) -> dict[str, Any]:
        if self._ready is None or self._ready["token"] != token:
            raise InvalidQuantity("That file is no longer waiting; ask for it again.")
        ready, self._ready = self._ready, None
        return {**ready, "data": base64.b64encode(ready["data"]).decode("ascii")}


def make(
    design: Design, unplugged: tuple[str, ...], order: dict[str, Any]
) -> Generator[None, None, tuple[str, str, bytes]]:
    """A job: name, media type and bytes of what was ordered."""
    from sumwright.engine.boards import draw_boards
    from sumwright.report.contents import all_tables
    from sumwright.report.document import design_report
    from sumwright.report.export import bundle, drawings, summary
    from sumwright.report.tables import csv_text

    yield None
    analysis = Analysis(design, unplugged)
    now = datetime.fromisoformat(order["made"])
    kind, which = order["kind"], order["which"]
    stem = file_stem(design.title)
    how = {
        "symbols": order["symbols"], "draws": order["draws"], "author": order["author"], "now": now,
        "decisions": [Decision(*d) for d in order["decisions"]],
    }  # fmt: skip
    if kind == "report":
        return f"{stem}.html", "text/html", design_report(analysis, **how).encode()
    if kind == "bring-up":
        from sumwright.engine.bench.plan import plan
        from sumwright.report.bench_papers import bring_up_sheet

        steps = [s._asdict() for s in plan(design)]
        text = bring_up_sheet(analysis, steps, symbols=order["symbols"], author=order["author"], now=now)
        return f"{stem}-bring-up.html", "text/html", text.encode()
    if kind == "record":
        from sumwright.engine.bench.diagnose import diagnose
        from sumwright.report.bench_papers import calibration_record, readings_rows
        from sumwright.verbs.diagnose import to_json

        readings = order["readings"]
        found = to_json(diagnose(design, readings))
        text = calibration_record(
            design, found, readings_rows(readings), meter=order["meter"], author=order["author"], now=now
        )
        return f"{stem}-calibration.html", "text/html", text.encode()
    if kind == "bundle":
        return f"{stem}.zip", "application/zip", bundle(analysis, theme="light", **how)
    if kind == "summary":
        return f"{stem}.md", "text/markdown", summary(analysis, order["author"], now).encode()
    if kind == "table":
        found = {t.key: t for t in all_tables(analysis)}
        if which not in found:
            raise SumwrightError("That table does not exist for this stage.")
        return f"{stem}-{which.replace('_', '-')}.csv", "text/csv", ("\ufeff" + csv_text(found[which])).encode()
    errors = draw_boards(analysis, max(order["draws"], 1), points=("present",)).errors[0] if which == "boards" else None
    pictures = drawings(analysis, symbols=order["symbols"], errors=errors)
    if which not in pictures:
        raise SumwrightError("That picture does not exist for this stage.")
    return f"{stem}-{which}.svg", "image/svg+xml", pictures[which].file(order["theme"]).encode()


def file_stem(title: str) -> str:
    """A title as the beginning of a file's name."""
    words = "".join(c if c.isalnum() else " " for c in title).split()
    return "-".join(words)[:60] or "sheet"
