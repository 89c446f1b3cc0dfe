"""What a person can do to a sheet: each act takes a message apart, checks it and lets the workbench do it.

An act is `act(workbench, message) -> reply or None`. It raises a SumwrightError
to refuse; the sheet is then as it was. Typed numbers come as the text that was
typed and are read here, on the server, by the one reader of quantities.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from sumwright import fields
from sumwright.engine.arrangement import arrangement_of
from sumwright.engine.catalogue import catalogue
from sumwright.engine.stage import ARRANGEMENTS, Design
from sumwright.errors import CannotRealise
from sumwright.files.design import design_document, read_design, write_design
from sumwright.files.examples import NAMES as EXAMPLES
from sumwright.files.examples import example
from sumwright.model import edits, sums
from sumwright.model.typed import in_span
from sumwright.model.workbench import SYMBOLS, THEMES, Workbench, renamed
from sumwright.quantity import parse_quantity

FILE_MOST = 2_000_000  # characters of a design file
TYPED_MOST = 120

# Units of every figure a person can type, by group; None after a unit = the field may be left empty.
SIGNAL_UNITS = {"value": "V", "low": "V", "high": "V", "source_resistance": "Ω", "frequency": "Hz"}
UNITS: dict[str, dict[str, str]] = {
    "supply": {"high": "V", "low": "V", "tolerance": ""},
    "load": {"resistance": "Ω", "capacitance": "F"},
    "ambient": {"nominal": "°C", "low": "°C", "high": "°C"},
    "resistor": {"tolerance": "", "temperature_coefficient": "1/K", "power": "W", "least": "Ω", "most": "Ω"},
    "target": {"low": "V", "high": "V", "accuracy": "V", "noise": "V", "bandwidth": "Hz"},
    "reference": {"voltage": "V", "source_resistance": "Ω", "tolerance": ""},
    "op_amp": {
        "open_loop_gain": "V/V", "gain_bandwidth": "Hz", "second_pole": "Hz", "slew_rate": "V/s",
        "input_resistance": "Ω", "differential_capacitance": "F", "common_mode_capacitance": "F",
        "output_resistance": "Ω", "offset_voltage": "V", "offset_drift": "V/K", "bias_current": "A",
        "offset_current": "A", "cmrr": "V/V", "psrr": "V/V", "noise_voltage": "V/√Hz", "noise_voltage_corner": "Hz",
        "noise_current": "A/√Hz", "noise_current_corner": "Hz", "dropout_high": "V", "dropout_low": "V",
        "dropout_resistance": "Ω", "common_mode_high": "V", "common_mode_low": "V", "output_current": "A",
        "supply_least": "V", "supply_most": "V", "supply_current": "A", "thermal_resistance": "K/W",
        "junction_most": "°C", "per_package": "",
    },
}  # fmt: skip
EMPTY_ALLOWED = {
    ("load", "resistance"), ("op_amp", "second_pole"), ("op_amp", "thermal_resistance"), ("op_amp", "junction_most"),
    *(("target", f) for f in UNITS["target"]),
}  # fmt: skip


def checked(design: Design) -> Design:
    """The design, if a design file may hold it: the same rules for the sheet as for the file.

    Raises
    ------
    InvalidDesign
        Naming the key, what it holds and what is allowed.
    """
    read_design(design_document(design))
    return design


def _typed(message: dict, unit: str, name: str) -> float:
    return parse_quantity(fields.text(message, "text", TYPED_MOST), unit, name)


def _signal(bench: Workbench, message: dict) -> str:
    return fields.one_of(message, "signal", bench.design.signal_names)


# ---------------------------------------------------------------- signals


def value(bench: Workbench, message: dict) -> None:
    """A slider moves; everything until `let_go` is one undo step."""
    name = _signal(bench, message)
    bench.on = name
    bench.edit(edits.with_value, name, fields.number(message, "value", -1e6, 1e6), hand=f"value {name}")


def let_go(bench: Workbench, message: dict) -> None:
    """The hand lets go of a slider."""
    bench.history.let_go()


def signal(bench: Workbench, message: dict) -> None:
    """A figure of a signal is typed."""
    name = _signal(bench, message)
    figure = fields.one_of(message, "figure", SIGNAL_UNITS)
    bench.on = name
    typed = in_span("signal", figure, _typed(message, SIGNAL_UNITS[figure], ""), SIGNAL_UNITS[figure])
    bench.edit(lambda d: checked(_with_source(d, name, figure, typed, bench.follow)))


def _with_source(design: Design, name: str, figure: str, typed: float, follow: str) -> Design:
    changed = edits.with_signal(design, name, **{figure: typed})
    return edits.refit(design, changed, follow) if figure == "source_resistance" and design.cells else changed


def weight(bench: Workbench, message: dict) -> None:
    """A wanted weight is typed; the resistors follow as the sheet says."""
    name = _signal(bench, message)
    typed = in_span("signal", "weight", _typed(message, "", ""), "")
    bench.on = name
    _wish(bench, message, lambda d: edits.with_weight(d, name, typed, bench.follow))


def offset(bench: Workbench, message: dict) -> None:
    """The wanted offset is typed."""
    typed = in_span("target", "offset", _typed(message, "V", ""), "V")
    _wish(bench, message, lambda d: edits.with_offset(d, typed, bench.follow))


def name(bench: Workbench, message: dict) -> None:
    """A signal is renamed."""
    old = _signal(bench, message)
    new = fields.text(message, "text", TYPED_MOST)
    bench.edit(lambda d: checked(edits.with_name(d, old, new)))


def add(bench: Workbench, message: dict) -> dict:
    """One signal more, with a leg."""
    before = set(bench.design.signal_names)
    _wish(bench, message, lambda d: edits.added(d, bench.follow))
    (new,) = set(bench.design.signal_names) - before
    bench.on = new
    return {"signal": new}


def remove(bench: Workbench, message: dict) -> None:
    """One signal less, with its leg."""
    gone = _signal(bench, message)
    _wish(bench, message, lambda d: edits.removed(d, gone, bench.follow))


def move(bench: Workbench, message: dict) -> None:
    """A signal moves up or down among the rows of its node."""
    bench.edit(edits.moved, _signal(bench, message), fields.whole(message, "places", -64, 64))


def order(bench: Workbench, message: dict) -> None:
    """The signals in another order."""
    bench.edit(edits.in_order, fields.texts(message, "names"))


def plug(bench: Workbench, message: dict) -> None:
    """A cable is pulled out or put in."""
    bench.plug(_signal(bench, message), fields.truth(message, "out"))


def on(bench: Workbench, message: dict) -> None:
    """A signal comes under the hand."""
    bench.on = _signal(bench, message)


# ---------------------------------------------------------------- resistors and arrangement


def _wish(bench: Workbench, message: dict, change: Callable[[Design], Design]) -> None:
    """Do `change`; with an `arrangement` in the message, realised anew by that one."""
    if message.get("arrangement") is None:
        shown = bench.arrangement or ""
        try:
            bench.edit(lambda d: checked(change(d)))
            return
        except CannotRealise as refused:
            # the arrangement that was chosen may make what the legs it has just now cannot
            if shown == arrangement_of(bench.cells) or shown not in refused.able:
                raise
            way = shown
    else:
        way = fields.one_of(message, "arrangement", ARRANGEMENTS)
    bench.arrange(lambda d: checked(edits.with_arrangement(change(replace(d, cells=())), way, bench.follow)), way)


def part(bench: Workbench, message: dict) -> None:
    """A resistor's value is typed on the drawing."""
    key = fields.text(message, "part", 120)
    typed = in_span("part", "resistor", _typed(message, "Ω", ""), "Ω")
    bench.edit(lambda d: checked(edits.with_resistance(d, key, typed)))


def capacitor(bench: Workbench, message: dict) -> None:
    """The capacitor across a feedback is typed; empty or 0 takes it out."""
    cell = fields.whole(message, "cell", 0, 15)
    text = fields.text(message, "text", TYPED_MOST).strip()
    typed = in_span("part", "capacitor", parse_quantity(text, "F"), "F") if text else 0.0
    bench.edit(lambda d: checked(edits.with_feedback_capacitance(d, cell, typed)))


def arrange(bench: Workbench, message: dict) -> None:
    """The stage is realised by another arrangement."""
    way = fields.one_of(message, "arrangement", ARRANGEMENTS)
    bench.arrange(lambda d: checked(edits.with_arrangement(d, way, bench.follow)), way)


def follow(bench: Workbench, message: dict) -> None:
    """How resistors follow a weight from now on."""
    bench.follow_weights(fields.one_of(message, "follow", edits.FOLLOW))


# ---------------------------------------------------------------- the plate


def figure(bench: Workbench, message: dict) -> None:
    """A figure of the supply, load, ambient, resistors, op amp, target or reference is typed."""
    group = fields.one_of(message, "group", UNITS)
    what = fields.one_of(message, "figure", UNITS[group])
    text = fields.text(message, "text", TYPED_MOST).strip()
    if not text and (group, what) in EMPTY_ALLOWED:
        typed: Any = None
    else:
        typed = parse_quantity(text, UNITS[group][what])
        if group in ("supply", "resistor", "reference") and what == "tolerance" and re.fullmatch(r"[\d.,]+", text):
            typed /= 100.0  # a bare number of a tolerance is in per cent, as it is shown
        if what == "temperature_coefficient" and re.fullmatch(r"[\d.,]+", text):
            typed *= 1e-6  # ppm/K, as it is shown
        in_span(group, what, typed, UNITS[group][what])
        if what == "per_package":
            typed = int(typed)
    bench.edit(lambda d: checked(edits.with_figure(d, group, what, typed)))


def series(bench: Workbench, message: dict) -> None:
    """The series resistors are rounded to from now on."""
    chosen = fields.text(message, "series", 8)
    bench.edit(lambda d: checked(edits.with_figure(d, "resistor", "series", chosen)))


def stray(bench: Workbench, message: dict) -> None:
    """The board's capacitance at the inverting nodes is typed."""
    typed = in_span("board", "stray", _typed(message, "F", ""), "F")
    bench.edit(lambda d: checked(replace(d, stray_capacitance=typed)))


def band(bench: Workbench, message: dict) -> None:
    """An end of the noise band is typed."""
    end = fields.whole(message, "end", 0, 1)
    typed = in_span("board", "band", _typed(message, "Hz", ""), "Hz")
    low, high = (typed, bench.noise_band[1]) if end == 0 else (bench.noise_band[0], typed)
    bench.edit(lambda d: checked(replace(d, noise_band=(low, high))))


def amplifier(bench: Workbench, message: dict) -> None:
    """An op amp is taken from the list of generic classes."""
    known = {e.op_amp.name: e.op_amp for e in catalogue()}
    chosen = fields.one_of(message, "op_amp", known)
    bench.edit(lambda d: checked(replace(d, op_amp=known[chosen])))


# ---------------------------------------------------------------- the sheet


def title(bench: Workbench, message: dict) -> None:
    """The sheet gets a title."""
    bench.edit(renamed, fields.text(message, "text", 1000))


def symbols(bench: Workbench, message: dict) -> None:
    """Resistor symbols of one standard or the other."""
    bench.symbols = fields.one_of(message, "symbols", SYMBOLS)


def theme(bench: Workbench, message: dict) -> None:
    """Light or dark paper."""
    bench.theme = fields.one_of(message, "theme", THEMES)


def undo(bench: Workbench, message: dict) -> None:
    """One step back."""
    bench.undo()


def redo(bench: Workbench, message: dict) -> None:
    """One step forward again."""
    bench.redo()


def open_file(bench: Workbench, message: dict) -> dict:
    """A design file takes the sheet's place; undo gives back what was there."""
    text = fields.text(message, "text", FILE_MOST)
    design = read_design(text)
    bench.put(design)
    drawn = "" if design.cells else "The file has no cells: drawn with the nearest values of its series."
    return {"opened": design.title, "note": drawn}


def open_example(bench: Workbench, message: dict) -> dict:
    """One of the package's example designs takes the sheet's place; undo gives back what was there."""
    design = example(fields.one_of(message, "example", EXAMPLES))
    bench.put(design)
    return {"opened": design.title, "note": f"{design.title}. Undo gives back the sheet you had."}


def save_file(bench: Workbench, message: dict) -> dict:
    """The design as a file to keep."""
    safe = re.sub(r"[^\w\- ]+", "", bench.title).strip().replace(" ", "-").lower()[:60] or "design"
    return {"download": {"name": f"{safe}.json", "text": write_design(bench.design), "type": "application/json"}}


def read_sum(bench: Workbench, message: dict) -> dict:
    """What a typed sum would draw, without drawing it."""
    wanted = sums.read_sum(fields.text(message, "text", sums.TEXT_MOST * 2))
    design = sums.new_design(wanted, bench.op_amp)
    return {
        "sum": {
            "signals": [[s.name, s.weight, s.low, s.high] for s in wanted.signals],
            "offset": wanted.offset,
            "able": list(edits.able(design)),
            "window": list(wanted.window),
            "accuracy": wanted.accuracy,
            "rails": list(wanted.rails),
        }
    }


def draw_sum(bench: Workbench, message: dict) -> dict:
    """A typed sum takes the sheet's place; undo gives back what was there."""
    wanted = sums.read_sum(fields.text(message, "text", sums.TEXT_MOST * 2))
    bench.put(checked(edits.realised_best(sums.new_design(wanted, bench.op_amp))))
    return {"drawn": True}


ACTS: dict[str, Callable[[Workbench, dict], dict | None]] = {
    "value": value, "let_go": let_go, "signal": signal, "weight": weight, "offset": offset, "name": name, "add": add,
    "remove": remove, "move": move, "order": order, "plug": plug, "on": on, "part": part, "capacitor": capacitor, "arrange": arrange,
    "follow": follow, "figure": figure, "series": series, "stray": stray, "band": band, "amplifier": amplifier,
    "title": title, "symbols": symbols, "theme": theme, "undo": undo, "redo": redo, "open": open_file, "example": open_example,
    "save": save_file, "read_sum": read_sum, "draw_sum": draw_sum,
}  # fmt: skip
# What anybody who can see the sheet may do: it changes nothing that is kept.
FREE = {"let_go", "on", "symbols", "theme", "save", "read_sum"}
# Acts that can be done again with another arrangement when the present one cannot make the weights.
RETAKEN = {"weight", "offset", "add", "remove", "arrange"}

__all__ = ["ACTS", "FREE", "RETAKEN", "checked"]
