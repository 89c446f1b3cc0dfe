"""The fold Choices: sets of real resistors, as a picture and a table; preview one, take it.

The search starts by itself when what it depends on has changed, and runs in a process
of its own. What goes with a choice stands beside it: the parts list, the drawer,
trimmers, bias balance, and weights from spans.
"""

from __future__ import annotations

import asyncio
import math
import zlib
from dataclasses import replace
from typing import Any

from sumwright import fields
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import able, arrangement_of
from sumwright.engine.checks import Check
from sumwright.engine.realise.balance import bias_balance
from sumwright.engine.realise.choices import Choice, Realisation, assess, places
from sumwright.engine.realise.drawer import Drawer, to_buy
from sumwright.engine.realise.span import into_window, with_spans
from sumwright.engine.realise.steps import search_steps, with_cells
from sumwright.engine.realise.trim import select_on_test, trim_for
from sumwright.engine.stage import REFERENCE, Design
from sumwright.errors import InvalidQuantity, SumwrightError
from sumwright.files.bill import HEADING, bill, bill_csv
from sumwright.files.drawer import read_drawer
from sumwright.quantity import format_resistor, parse_quantity

from .choices_map import AXES, Map
from .fold import Context, Fold

PANES = ("preview", "parts", "drawer", "trim", "spans")
DRAWER_MOST = 8_000_000  # characters of a drawer file
SETTLE = 0.25  # s without a change before a search starts


def search_key(design: Design) -> tuple:
    """What the search and its checks depend on; while it is equal the choices still hold."""
    signals = tuple(replace(s, value=0.0) for s in design.signals)
    capacitor = design.cells[-1].feedback_capacitance if design.cells else 0.0
    return (replace(design, title="", signals=signals, cells=()), capacitor)


def tag(c: Choice) -> str:
    """A choice's name on the wire: the same as long as its resistors are, wherever it stands in the table."""
    return f"{zlib.crc32(repr((c.arrangement, c.cells, c.parts)).encode()):08x}"


class Choices(Fold):
    """Preferred-value sets of every arrangement that can make the weights."""

    title = "Choices"
    slots = ("map",)

    def __init__(self, context: Context):
        super().__init__(context)
        self._arrangement: str | None = None
        self._pairs = False
        self._axis = "parts"
        self._pane = "preview"
        self._drawer: Drawer | None = None
        self._drawer_name = ""
        self._use_drawer = False
        self._key: tuple = ()
        self._waiting: asyncio.TimerHandle | None = None
        self._share: float | None = None  # of a search under way
        self._looking_at = ""
        self._stopped = False
        self._problem = ""
        self._found: Realisation | None = None
        self._rows: tuple[Choice, ...] = ()
        self._picked: Choice | None = None
        self._previews: tuple[Any, Any, Analysis] | None = None
        self._pane_key: tuple = ()
        self._pane_shown: dict[str, Any] = {}
        self._goal = 0.005
        self._least_leg: float | None = None
        self._measured: dict[str, float] = {}
        self._window: dict[str, float | None] = {"low": None, "high": None}
        self._map = Map(self._tapped)

    def figures(self) -> dict[str, Any]:
        """Worst weight error against parts, noise or bandwidth."""
        return {"map": self._map.figure}

    def close(self) -> None:
        if self._waiting is not None:
            self._waiting.cancel()
        self.context.jobs.stop("choices")
        self._map.close()

    # ------------------------------------------------------------ the search

    def _wish(self) -> tuple:
        drawer = self._drawer if self._use_drawer else None
        return (
            *search_key(self.workbench.design),
            self._arrangement,
            self._pairs and drawer is None,
            drawer,
            self._least_leg,
        )

    def _follow(self) -> None:
        """Start a search if what it depends on has changed and stands still."""
        key = self._wish()
        if key == self._key:
            return
        self._key = key
        self._stopped, self._problem, self._found, self._rows, self._picked = False, "", None, (), None
        self.context.jobs.stop("choices")
        if self._waiting is not None:
            self._waiting.cancel()
            self._waiting = None
        self._share = 0.0
        try:
            self._waiting = asyncio.get_running_loop().call_later(SETTLE, self._start)
        except RuntimeError:  # no server is running (a document being exported): nothing to search for
            self._share = None

    def _start(self) -> None:
        self._waiting = None
        design = self.workbench.design
        drawer = self._drawer if self._use_drawer else None
        self.context.jobs.start(
            "choices", search_steps, design, self._arrangement, self._pairs and drawer is None, drawer, self._least_leg,
            progress=self._progress, done=self._done, failed=self._failed,
        )  # fmt: skip

    def _progress(self, told: dict[str, Any]) -> None:
        self._share, self._looking_at = told["share"], told["arrangement"]
        if told["choices"]:
            self._rows = told["choices"]
        self.context.refresh()

    def _done(self, found: Realisation) -> None:
        self._share, self._found, self._rows = None, found, found.choices
        self.context.refresh()

    def _failed(self, sentence: str) -> None:
        self._share, self._problem = None, sentence
        self.context.refresh()

    # ------------------------------------------------------------ what is shown

    def show(self) -> dict[str, Any]:
        """The rows, where the search stands, and the open pane."""
        self._follow()
        design = self.workbench.design
        now = self._present()
        picked = self._index()
        self._map.update(
            self.workbench.theme, self._axis, self._rows, now, picked, design.op_amp.gain_bandwidth, self._said
        )
        return {
            "rows": [self._row(c) for c in self._rows],
            "now": None if now is None else self._row(now),
            "picked": picked,
            "share": self._share, "looking": self._looking_at, "stopped": self._stopped, "problem": self._problem,
            "proof": self._proof(), "notes": list(self._found.notes) if self._found else [],
            "able": list(able(design)), "arrangement": self._arrangement, "pairs": self._pairs,
            "least_leg": "" if self._least_leg is None else format_resistor(self._least_leg),
            "axis": self._axis, "axes": list(AXES), "pane": self._pane, "panes": list(PANES),
            "drawer": self._drawer_name if self._drawer else None, "use_drawer": self._use_drawer,
            "open": self._open_pane(design, now),
        }  # fmt: skip

    def _present(self) -> Choice | None:
        """The stage on the sheet, assessed like a choice; None if it is none (an open loop, say)."""
        design = self.workbench.design
        try:
            return assess(design, arrangement_of(design.cells) or "own", design.cells)
        except (SumwrightError, ZeroDivisionError):
            return None

    def _index(self) -> int | None:
        for k, c in enumerate(self._rows):
            if self._picked is not None and c.cells == self._picked.cells and c.arrangement == self._picked.arrangement:
                return k
        return None

    def _row(self, c: Choice) -> dict[str, Any]:
        design = self.workbench.design
        offset = None
        if design.target.offset:
            offset = c.offset / design.target.offset - 1.0
        return {
            "id": tag(c),
            "arrangement": c.arrangement, "merits": list(c.merits), "error": c.worst_weight_error, "worst": c.worst_weight,
            "offset": offset, "resistors": c.resistor_count, "op_amps": c.op_amp_count, "values": c.different_values,
            "noise_gain": c.noise_gain, "noise": c.noise_density,
            "sees": c.least_input_resistance if math.isfinite(c.least_input_resistance) else None,
            "feedback": ", ".join(format_resistor(cell.feedback) for cell in c.cells),
            "short": list(c.short), "paired": bool(c.parts), "same": c.cells == self._kept(self.workbench.design.cells),
        }  # fmt: skip

    def _proof(self) -> list[dict[str, Any]]:
        if self._found is None:
            return []
        return [
            {"arrangement": name, "bound": bound, "proved": self._found.proved[name]}
            for name, bound in self._found.bounds.items()
        ]

    def _said(self, c: Choice) -> str:
        """A choice's values in one line, for the hover."""
        paired = {
            p.place: f"{format_resistor(p.first)} {'+' if p.how == 'series' else '∥'} {format_resistor(p.second)}"
            for p in c.parts
        }
        return " · ".join(
            f"{name.replace(' leg', '', 1)} {paired.get(name, format_resistor(ohm))}"
            for name, ohm in places(c.cells)
            if ohm > 0
        )

    def _open_pane(self, design: Design, now: Choice | None) -> dict[str, Any]:
        # Only the preview follows the signals' values; the other panes are kept while a slider moves.
        key = (
            self._pane, search_key(design), design.cells, self._picked and self._picked.cells, self._goal, tuple(self._measured.items()),
            tuple(self._window.values()), id(self._drawer), self._use_drawer, id(self._found),
        )  # fmt: skip
        if self._pane == "preview" or key != self._pane_key:
            self._pane_key, self._pane_shown = key, self._made_pane(design, now)
        return self._pane_shown

    def _made_pane(self, design: Design, now: Choice | None) -> dict[str, Any]:
        try:
            return {
                "preview": self._preview, "parts": self._parts, "drawer": self._drawer_pane,
                "trim": self._trim, "spans": self._spans,
            }[self._pane](design, now)  # fmt: skip
        except SumwrightError as problem:
            return {"problem": str(problem)}

    # ------------------------------------------------------------ preview

    @staticmethod
    def _kept(cells):
        """Cells without their feedback capacitors, which a choice does not have."""
        return tuple(replace(c, feedback_capacitance=0.0) for c in cells)

    def _taken(self, c: Choice) -> Design:
        """The design with a choice's cells."""
        return with_cells(self.workbench.design, c.cells)

    def _preview(self, design: Design, now: Choice | None) -> dict[str, Any]:
        c = self._picked
        if c is None:
            return {"picked": False}
        taken = self._taken(c)
        key = (taken, self.workbench.unplugged)
        if self._previews is None or self._previews[:2] != key:
            forerunner = self._previews[2] if self._previews is not None else None
            self._previews = (*key, Analysis(taken, self.workbench.unplugged, forerunner))
        margins = _margins(self.workbench.analysis.checks, self._previews[2].checks)
        made = dict(now.weights) if now is not None else {}
        had = {leg.source: leg.resistance for cell in design.cells for leg in (*cell.minus, *cell.plus)}
        paired = {p.place: [format_resistor(p.first), format_resistor(p.second), p.how] for p in c.parts}
        legs = [
            {
                "name": s.name, "wanted": s.weight, "now": format_resistor(had[s.name]) if s.name in had else "–",
                "made": made.get(s.name), "then": self._leg_text(c, f"{s.name} leg", s.name, paired), "made_then": c.weights[s.name],
            }
            for s in design.signals
        ]  # fmt: skip
        others = [
            {"name": name, "then": self._pair_text(paired.get(name)) or format_resistor(ohm)}
            for name, ohm in places(c.cells)
            if name.removesuffix(" leg") not in design.signal_names and ohm > 0
        ]
        return {
            "picked": True, "same": c.cells == self._kept(design.cells), "legs": legs, "others": others, "margins": margins,
            "before": self._row(now) if now is not None else None, "after": self._row(c),
        }  # fmt: skip

    def _leg_text(self, c: Choice, place: str, source: str, paired) -> str:
        if place in paired:
            return self._pair_text(paired[place])
        ohm = next(x.resistance for cell in c.cells for x in (*cell.minus, *cell.plus) if x.source == source)
        return format_resistor(ohm)

    @staticmethod
    def _pair_text(pair) -> str:
        return "" if not pair else f"{pair[0]} {'+' if pair[2] == 'series' else '∥'} {pair[1]}"

    # ------------------------------------------------------------ the other panes

    def _parts(self, design: Design, now: Choice | None) -> dict[str, Any]:
        shown = design if self._picked is None else self._taken(self._picked)
        return {
            "of": "now" if self._picked is None else "preview",
            "heading": list(HEADING),
            "lines": [
                [" ".join(x.designators), x.count, x.part, x.value, x.rating, "; ".join(x.use), x.note] for x in bill(shown)
            ],
            "balance": [b._asdict() for b in bias_balance(shown)],
        }  # fmt: skip

    def _drawer_pane(self, design: Design, now: Choice | None) -> dict[str, Any]:
        if self._drawer is None:
            return {"bins": 0, "goal": self._goal}
        counts = self._drawer.counts()
        kind = design.resistor
        inside = [v for v in counts if kind.least <= v <= kind.most]
        shown = {"bins": len(counts), "inside": len(inside), "least": kind.least, "most": kind.most, "goal": self._goal}
        if self._use_drawer and self._found is not None and self._rows:
            try:
                bought = to_buy(design, self._found, self._drawer, self._goal)
            except SumwrightError as problem:
                shown["refused"] = str(problem)
            else:
                shown["buy"] = [{"value": format_resistor(p.value), "count": p.count, "place": p.place} for p in bought]
        return shown

    def _trim(self, design: Design, now: Choice | None) -> dict[str, Any]:
        shown = design if self._picked is None else self._taken(self._picked)
        names = [*design.signal_names, *([REFERENCE] if design.target.offset else [])]
        return {"of": "now" if self._picked is None else "preview", "rows": [self._trim_row(shown, n) for n in names]}

    def _trim_row(self, design: Design, name: str) -> dict[str, Any]:
        row: dict[str, Any] = {"name": name}
        try:
            t = trim_for(design, design.cells, name)
        except SumwrightError as problem:
            row["problem"] = str(problem)
        else:
            row |= {
                "fixed": format_resistor(t.fixed) if t.fixed else "none", "trimmer": format_resistor(t.trimmer),
                "needed": [format_resistor(t.needed_low), format_resistor(t.needed_high)], "resolution": t.resolution,
                "setting": t.setting,
            }  # fmt: skip
        if name in self._measured:
            row["measured"] = self._measured[name]
            try:
                c = select_on_test(design, design.cells, name, self._measured[name])
            except SumwrightError as problem:
                row["refused"] = str(problem)
            else:
                row |= {"how": c.how, "value": None if c.value is None else format_resistor(c.value), "after": c.weight}
        return row

    def _spans(self, design: Design, now: Choice | None) -> dict[str, Any]:
        low, high = self._ends(design)
        shown: dict[str, Any] = {"low": low, "high": high, "names": list(design.signal_names)}
        spans = into_window(design.signals, low, high)
        shown |= {
            "weights": list(spans.weights), "offset": spans.offset,
            "ranges": [[s.low, s.high] for s in design.signals],
            "reference": None if design.reference is None else design.reference.voltage,
            "same": list(spans.weights) == [s.weight for s in design.signals] and spans.offset == design.target.offset,
        }  # fmt: skip
        try:
            shown["able"] = list(able(with_spans(design, spans)))
        except SumwrightError as problem:
            shown["able"], shown["refused"] = [], str(problem)
        return shown

    def _ends(self, design: Design) -> tuple[float, float]:
        low = self._window["low"]
        high = self._window["high"]
        if low is None:
            low = design.target.low if design.target.low is not None else 0.0
        if high is None:
            high = design.target.high if design.target.high is not None else max(design.supply.high / 2, low + 1.0)
        return low, high

    # ------------------------------------------------------------ what a person does

    def handle(self, message: dict) -> dict | None:
        """One act of the fold's module."""
        acts = {
            "options": self._options, "pick": self._pick, "take": self._take, "stop": self._stop, "again": self._again,
            "axis": self._turn_axis, "pane": self._turn_pane, "drawer": self._take_drawer, "drawer_use": self._drawer_use,
            "goal": self._set_goal, "csv": self._csv, "measured": self._set_measured, "window": self._set_window,
            "span_take": self._span_take, "least": self._set_least, "balance": self._balance,
        }  # fmt: skip
        return acts[fields.one_of(message, "do", tuple(acts))](message)

    def _options(self, message: dict) -> None:
        name = fields.one_of(message, "arrangement", ("", *able(self.workbench.design)))
        self._arrangement, self._pairs = name or None, fields.truth(message, "pairs")

    def _choice(self, message: dict) -> Choice:
        wanted = fields.text(message, "id", 20)
        for c in self._rows:
            if tag(c) == wanted:
                return c
        raise InvalidQuantity("That set is not among the choices any more.")

    def _pick(self, message: dict) -> None:
        c = self._choice(message)
        self._picked = None if self._picked is c else c
        self._pane = "preview" if self._picked is not None and self._pane in ("drawer", "spans") else self._pane

    def _tapped(self, index: int) -> None:
        """A point of the picture was tapped."""
        if 0 <= index < len(self._rows):
            self._picked, self._pane = self._rows[index], "preview"
            self.context.refresh()

    def _take(self, message: dict) -> None:
        c = self._choice(message)
        if self._key != self._wish():
            raise InvalidQuantity("The sheet has changed since this was found; the search is starting anew.")
        taken = self._taken(c)
        self.workbench.edit(lambda design: taken)
        self._picked = None

    def _stop(self, message: dict) -> None:
        if self._waiting is not None:
            self._waiting.cancel()
            self._waiting = None
        self.context.jobs.stop("choices")
        self._stopped, self._share = self._share is not None, None

    def _again(self, message: dict) -> None:
        self._key = ()

    def _turn_axis(self, message: dict) -> None:
        self._axis = fields.one_of(message, "axis", tuple(AXES))

    def _turn_pane(self, message: dict) -> None:
        self._pane = fields.one_of(message, "pane", PANES)

    def _take_drawer(self, message: dict) -> dict:
        text = fields.text(message, "text", DRAWER_MOST)
        drawer = read_drawer(text.encode("utf-8"))
        self._drawer, self._drawer_name, self._use_drawer = drawer, fields.text(message, "name", 200), True
        return {"drawer": len(drawer.bins)}

    def _drawer_use(self, message: dict) -> None:
        self._use_drawer = fields.truth(message, "on") and self._drawer is not None

    def _set_goal(self, message: dict) -> None:
        goal = parse_quantity(fields.text(message, "text", 40), "")
        if not 0 < goal < 1:
            raise InvalidQuantity(f"A wanted error is over 0 and under 1, as 0.5 % or 0.005; this is {goal:g}.")
        self._goal = goal

    def _set_least(self, message: dict) -> None:
        text = fields.text(message, "text", 40)
        ohm = parse_quantity(text, "Ω") if text else None
        if ohm is not None and not 0 < ohm <= self.workbench.design.resistor.most:
            most = format_resistor(self.workbench.design.resistor.most)
            raise InvalidQuantity(
                f"The least leg is over 0 and at most {most}, the largest resistor; this is {ohm:g} Ω."
            )
        self._least_leg = ohm

    def _balance(self, message: dict) -> None:
        """Fit the resistor that balances one op amp's bias currents on the sheet."""
        design = self.workbench.design
        k = fields.whole(message, "cell", 0, len(design.cells) - 1)
        ohm = bias_balance(design)[k].resistor
        if ohm is None:
            raise InvalidQuantity(f"Cell {k + 1} needs no balancing resistor.")
        cells = (*design.cells[:k], replace(design.cells[k], plus_ground=ohm), *design.cells[k + 1 :])
        self.workbench.edit(lambda d: replace(d, cells=cells))

    def _csv(self, message: dict) -> dict:
        design = self.workbench.design if self._picked is None else self._taken(self._picked)
        return {"csv": bill_csv(design), "name": "parts.csv"}

    def _set_measured(self, message: dict) -> None:
        names = (*self.workbench.design.signal_names, REFERENCE)
        name = fields.one_of(message, "signal", names)
        text = fields.text(message, "text", 40)
        if not text:
            self._measured.pop(name, None)
            return
        self._measured[name] = parse_quantity(text, "")

    def _set_window(self, message: dict) -> None:
        end = fields.one_of(message, "end", ("low", "high"))
        volts = parse_quantity(fields.text(message, "text", 40), "V")
        low, high = self._ends(self.workbench.design)
        low, high = (volts, high) if end == "low" else (low, volts)
        if not low < high:
            raise InvalidQuantity(f"The window must be rising; this would be {low:g} V to {high:g} V.")
        self._window[end] = volts

    def _span_take(self, message: dict) -> None:
        design = self.workbench.design
        low, high = self._ends(design)
        wanted = with_spans(design, into_window(design.signals, low, high))
        self.workbench.put(replace(wanted, target=replace(wanted.target, low=low, high=high)))


def _margins(now: tuple[Check, ...], then: tuple[Check, ...]) -> list[dict[str, Any]]:
    """Every check of either stage, side by side; None where the other stage has no such check.

    A stage with more op amps has checks of its own (a swing for each cell): what would
    fall short then is told whether or not it can be asked today.
    """
    ahead = {x.key: x for x in then}
    old = {x.key for x in now}
    pairs = [(x, ahead.get(x.key)) for x in now] + [(None, x) for x in then if x.key not in old]
    shown = []
    for before, after in pairs:
        named = before if before is not None else after
        if named is None:
            continue
        shown.append({
            "key": named.key, "title": named.title, "unit": named.unit,
            "status": before and before.status, "margin": before and before.margin,
            "status_then": after and after.status, "margin_then": after and after.margin,
        })  # fmt: skip
    return shown
