"""What lies between two designs: which values changed, and what that did to the results.

Values are compared by what they are of (a signal by its name, a leg by its source), not by their place in a list, so
that moving a row is no change of every row under it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

Value = float | int | str | bool | None
_UNITS = {
    "resistance": "Ω", "source_resistance": "Ω", "minus_ground": "Ω", "plus_ground": "Ω", "feedback": "Ω",
    "least": "Ω", "most": "Ω", "input_resistance": "Ω", "output_resistance": "Ω", "dropout_resistance": "Ω",
    "feedback_capacitance": "F", "capacitance": "F", "stray_capacitance": "F", "differential_capacitance": "F",
    "common_mode_capacitance": "F", "frequency": "Hz", "bandwidth": "Hz", "gain_bandwidth": "Hz",
    "second_pole": "Hz", "noise_band": "Hz", "noise_voltage_corner": "Hz", "noise_current_corner": "Hz",
    "value": "V", "low": "V", "high": "V", "offset": "V", "accuracy": "V", "noise": "V", "voltage": "V",
    "offset_voltage": "V", "dropout_high": "V", "dropout_low": "V", "common_mode_high": "V", "common_mode_low": "V",
    "supply_least": "V", "supply_most": "V", "slew_rate": "V/s", "weight": "V/V", "open_loop_gain": "V/V",
    "cmrr": "V/V", "psrr": "V/V", "bias_current": "A", "offset_current": "A", "output_current": "A",
    "supply_current": "A", "power": "W", "junction_most": "°C", "thermal_resistance": "K/W", "offset_drift": "V/K",
    "temperature_coefficient": "1/K", "noise_voltage": "V/√Hz", "noise_current": "A/√Hz",
}  # fmt: skip
_WORDS = {
    "resistor": "resistors", "op_amp": "op amp", "minus_ground": "minus ground", "plus_ground": "plus ground",
    "ambient": "ambient", "noise_band": "noise band",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Change:
    """One difference; None where that side has no such thing. `unit` is empty where there is none."""

    what: str
    before: Value
    after: Value
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Comparison:
    """What changed in the values and in the results, and how many of each stayed the same."""

    values: tuple[Change, ...]
    results: tuple[Change, ...]
    same_values: int
    same_results: int


def compare(before: dict[str, Any], after: dict[str, Any]) -> Comparison:
    """Compare the contents of two frozen entries: their `design`, `unplugged`, `results` and `checks`."""
    values, same_values = _differences(dict(_values(before)), dict(_values(after)))
    results, same_results = _differences(dict(_results(before)), dict(_results(after)))
    return Comparison(values, results, same_values, same_results)


def _differences(
    before: dict[str, tuple[Value, str]], after: dict[str, tuple[Value, str]]
) -> tuple[tuple[Change, ...], int]:
    changes, same = [], 0
    for what in before | after:
        old, unit = before.get(what, (None, ""))
        new, unit_after = after.get(what, (None, unit))
        if (what in before and what in after and _equal(old, new)) or (old is None and new is None):
            same += 1
        else:
            changes.append(Change(what, old, new, unit or unit_after))
    return tuple(changes), same


def _equal(one: Value, other: Value) -> bool:
    """The same value: numbers within what a double keeps through a conversion and back."""
    if isinstance(one, int | float) and isinstance(other, int | float) and not isinstance(one, bool):
        return abs(one - other) <= 1e-12 * max(abs(one), abs(other))
    return one == other


def _values(body: dict[str, Any]) -> Iterator[tuple[str, tuple[Value, str]]]:
    design = body.get("design") or {}
    for key, held in design.items():
        if key == "format":
            continue
        if key == "signals":
            for signal in held or ():
                for name, value in signal.items():
                    if name != "name":
                        yield f"{signal.get('name')}, {_word(name)}", (value, _UNITS.get(name, ""))
        elif key == "cells":
            for number, cell in enumerate(held or (), start=1):
                yield from _cell(number, cell, len(held))
        elif isinstance(held, dict):
            for name, value in held.items():
                unit = "°C" if key == "ambient" else "" if name == "tolerance" else _UNITS.get(name, "")
                yield f"{_word(key)}, {_word(name)}", (value, unit)
        elif isinstance(held, list):
            for place, value in zip(("from", "to"), held, strict=False):
                yield f"{_word(key)}, {place}", (value, _UNITS.get(key, ""))
        else:
            yield _word(key), (held, _UNITS.get(key, ""))
    for name in body.get("unplugged") or ():
        yield f"{name}, cable", ("out", "")


def _cell(number: int, cell: dict[str, Any], count: int) -> Iterator[tuple[str, tuple[Value, str]]]:
    where = f", cell {number}" if count > 1 else ""
    for node in ("minus", "plus"):
        for leg in cell.get(node) or ():
            yield f"{leg.get('from')} leg, {node} node{where}", (leg.get("resistance"), "Ω")
    for name in ("minus_ground", "plus_ground", "feedback", "feedback_capacitance"):
        yield f"{_word(name)}{where}", (cell.get(name), _UNITS[name])


def _results(body: dict[str, Any]) -> Iterator[tuple[str, tuple[Value, str]]]:
    for check in body.get("checks") or ():
        yield f"{check.get('title')}, margin", (check.get("margin"), check.get("unit") or "")
        yield f"{check.get('title')}", (check.get("status"), "")
    results = body.get("results") or {}
    for what, held in results.items():
        if isinstance(held, list) and len(held) == 2:
            yield what, (held[0], str(held[1]))
        else:
            yield what, (held, "")


def _word(key: str) -> str:
    return _WORDS.get(key, key.replace("_", " "))


def key_results(document: dict[str, Any]) -> tuple[dict[str, list[Any]], list[dict[str, Any]]]:
    """The results that a frozen design keeps, `{what: [value, unit]}`, and its checks, from `analyse --json`."""
    kept: dict[str, list[Any]] = {}
    dc = document.get("dc") or {}
    for key, unit in (("output", "V"), ("ideal_output", "V"), ("offset", "V"), ("clipped", "")):
        if key in dc:
            kept[_word(key)] = [dc[key], unit]
    for name, value in (dc.get("weights") or {}).items():
        kept[f"{name}, made weight"] = [value, "V/V"]
    for place in ("present", "highest", "lowest"):
        point = (document.get("errors") or {}).get(place) or {}
        for key in ("worst_case", "expanded_95"):
            if key in point:
                kept[f"error {place}, {_word(key)}"] = [point[key], "V"]
    headroom = (document.get("headroom") or {}).get("cells") or ()
    for number, cell in enumerate(headroom, start=1):
        where = f", cell {number}" if len(headroom) > 1 else ""
        for key, unit in (("highest", "V"), ("lowest", "V"), ("output_current_peak", "A")):
            if key in cell:
                kept[f"{_word(key)}{where}"] = [cell[key], unit]
    ac = document.get("ac") or {}
    for number, cell in enumerate(ac.get("cells") or (), start=1):
        where = f", cell {number}" if len(ac["cells"]) > 1 else ""
        for key, unit in (("noise_gain", "V/V"), ("crossover", "Hz"), ("phase_margin", "°")):
            if key in cell:
                kept[f"{_word(key)}{where}"] = [cell[key], unit]
    for name, signal in (ac.get("signals") or {}).items():
        kept[f"{name}, bandwidth"] = [signal.get("bandwidth_3db"), "Hz"]
    if "full_power_bandwidth" in ac:
        kept["full power bandwidth"] = [ac["full_power_bandwidth"], "Hz"]
    if "rms" in (document.get("noise") or {}):
        kept["noise"] = [document["noise"]["rms"], "V RMS"]
    checks = [
        {key: check.get(key) for key in ("key", "title", "status", "value", "limit", "margin", "unit")}
        for check in document.get("checks") or ()
    ]
    return kept, checks
