"""The design file: JSON to a checked `Design` and back, without losing a bit of a number.

Reading is strict on purpose. A file with a misspelt key or a rail the wrong way
round would otherwise give a plausible sheet of wrong numbers. Each refusal names
the path of the key, what it holds, and what is allowed.
"""

from __future__ import annotations

import json
import math
import os
import re
import unicodedata
from typing import Any, NamedTuple

from sumwright.engine.realise.preferred import SERIES
from sumwright.engine.stage import (
    OUTPUT,
    REFERENCE,
    Ambient,
    Cell,
    Design,
    Leg,
    Load,
    OpAmp,
    Reference,
    ResistorKind,
    Signal,
    Supply,
    Target,
    cell_name,
)
from sumwright.errors import InvalidDesign, InvalidQuantity, shown
from sumwright.files import strict_json
from sumwright.files.text import decode, read_text, write_whole
from sumwright.quantity import parse_quantity

FORMAT = "sumwright-design/1"
MOST_NAME = 64
MOST_TITLE = 200
MOST_SIGNALS = 64
MOST_CELLS = 16
# Wider than any part, narrow enough that squares and products stay finite.
LARGEST = 1e30
SMALLEST = 1e-30
ABSOLUTE_ZERO = -273.15
_CELL_NAME = re.compile(r"cell *[+-]?\d+", re.IGNORECASE)


class _Number(NamedTuple):
    """What a number may be."""

    unit: str = ""
    least: float | None = None
    most: float | None = None
    above: float | None = None
    below: float | None = None
    null: bool = False
    default: float | None = math.nan  # NaN: the key must be there


_VOLTS = _Number("V")
_FRACTION = _Number("", least=0.0, below=1.0)
_OHM_FROM_0 = _Number("Ω", least=0.0)
_FARAD = _Number("F", least=0.0)

_SIGNAL = {
    "weight": _Number("V/V"), "low": _VOLTS, "high": _VOLTS, "value": _VOLTS,
    "source_resistance": _OHM_FROM_0, "frequency": _Number("Hz", least=0.0),
}  # fmt: skip
_TARGET = {
    "offset": _VOLTS,
    "low": _Number("V", null=True, default=None),
    "high": _Number("V", null=True, default=None),
    "accuracy": _Number("V", above=0.0, null=True, default=None),
    "noise": _Number("V", above=0.0, null=True, default=None),
    "bandwidth": _Number("Hz", above=0.0, null=True, default=None),
}
_REFERENCE = {"voltage": _VOLTS, "source_resistance": _OHM_FROM_0, "tolerance": _FRACTION}
_SUPPLY = {"high": _VOLTS, "low": _VOLTS, "tolerance": _FRACTION}
_LOAD = {"resistance": _Number("Ω", above=0.0, null=True), "capacitance": _FARAD}
_AMBIENT = {key: _Number("°C", above=ABSOLUTE_ZERO) for key in ("nominal", "low", "high")}
_RESISTOR = {
    "tolerance": _FRACTION, "temperature_coefficient": _Number("1/K", least=0.0), "power": _Number("W", above=0.0),
    "least": _Number("Ω", above=0.0), "most": _Number("Ω", above=0.0),
}  # fmt: skip
# Bounds keep out what is no op amp at all; towards the ideal there are none but LARGEST.
_OP_AMP = {
    "open_loop_gain": _Number("V/V", least=1.0),
    "gain_bandwidth": _Number("Hz", least=1e-3),
    "second_pole": _Number("Hz", least=1e-3, null=True),
    "slew_rate": _Number("V/s", least=1e-3),
    "input_resistance": _Number("Ω", least=1.0),
    "differential_capacitance": _Number("F", least=0.0, most=1.0),
    "common_mode_capacitance": _Number("F", least=0.0, most=1.0),
    "output_resistance": _Number("Ω", least=0.0, most=1e9),
    "offset_voltage": _Number("V", least=0.0),
    "offset_drift": _Number("V/K", least=0.0),
    "bias_current": _Number("A", least=0.0),
    "offset_current": _Number("A", least=0.0),
    "cmrr": _Number("V/V", least=1.0),
    "psrr": _Number("V/V", least=1.0),
    "noise_voltage": _Number("V/√Hz", least=0.0),
    "noise_voltage_corner": _Number("Hz", least=0.0),
    "noise_current": _Number("A/√Hz", least=0.0),
    "noise_current_corner": _Number("Hz", least=0.0),
    "dropout_high": _Number("V", least=0.0),
    "dropout_low": _Number("V", least=0.0),
    "dropout_resistance": _OHM_FROM_0,
    "common_mode_high": _VOLTS,
    "common_mode_low": _VOLTS,
    "output_current": _Number("A", above=0.0),
    "supply_least": _Number("V", least=0.0),
    "supply_most": _Number("V", above=0.0),
    "supply_current": _Number("A", least=0.0),
    "thermal_resistance": _Number("K/W", above=0.0, null=True),
    "junction_most": _Number("°C", above=ABSOLUTE_ZERO, null=True),
}
_CELL = {
    "minus_ground": _Number("Ω", above=0.0, null=True),
    "plus_ground": _Number("Ω", least=0.0, null=True),
    "feedback": _Number("Ω", above=0.0, null=True),
    "feedback_capacitance": _FARAD,
}
_TOP = {
    "format": True, "title": True, "signals": True, "target": False, "reference": False, "supply": True,
    "load": False, "ambient": True, "resistor": True, "op_amp": True, "stray_capacitance": False,
    "noise_band": False, "cells": False,
}  # fmt: skip


# Reading ----------------------------------------------------------------------------------------


def read_design(source: os.PathLike | str | bytes | dict) -> Design:
    """A checked design from a file, a JSON text or a parsed document.

    Parameters
    ----------
    source : path, str, bytes or dict
        A `pathlib.Path` is a file; a `str` or `bytes` is the JSON text itself, so that
        a text somebody uploads is never taken for a file name; a `dict` is the document.

    Returns
    -------
    Design
        With every number a float in SI units. Engineering notation (`"4k7"`) is read
        wherever a number may stand.

    Raises
    ------
    InvalidDesign
        With `.key`, the path of the culprit (empty for the file as a whole), and one
        line that names the key, what it holds, and what is allowed.
    """
    if isinstance(source, os.PathLike):
        document = strict_json.load(read_text(source, InvalidDesign), InvalidDesign)
    elif isinstance(source, bytes):
        document = strict_json.load(decode(source, InvalidDesign, "The design"), InvalidDesign)
    elif isinstance(source, str):
        try:
            data = source.encode("utf-8")
        except UnicodeEncodeError:
            raise InvalidDesign(
                "The design text holds half a character (a lone surrogate); it must be UTF-8."
            ) from None
        document = strict_json.load(decode(data, InvalidDesign, "The design"), InvalidDesign)
    else:
        document = source
    return _design(document)


def _design(document: Any) -> Design:
    top = _object(document, "", _TOP, "the design")
    if top["format"] != FORMAT:
        raise _bad("format", top["format"], f'must be "{FORMAT}"')
    title = _text(top["title"], "title", MOST_TITLE, empty=True)
    signals = _signals(top["signals"])
    target = _target(top["target"]) if top.get("target") is not None else Target()
    reference = None
    if top.get("reference") is not None:
        reference = Reference(**_numbers(top["reference"], "reference", _REFERENCE))
    supply = Supply(**_numbers(top["supply"], "supply", _SUPPLY))
    if not supply.low < supply.high:
        raise _bad("supply.high", supply.high, f"must be above supply.low, which holds {supply.low:g}")
    load = Load(**_numbers(top["load"], "load", _LOAD)) if top.get("load") is not None else Load()
    ambient = Ambient(**_numbers(top["ambient"], "ambient", _AMBIENT))
    if not ambient.low <= ambient.high:
        raise _bad("ambient.high", ambient.high, f"must not be below ambient.low, which holds {ambient.low:g}")
    if not ambient.low <= ambient.nominal <= ambient.high:
        raise _bad("ambient.nominal", ambient.nominal, f"must lie within {ambient.low:g} to {ambient.high:g}")
    resistor = _resistor(top["resistor"])
    op_amp = _op_amp(top["op_amp"])
    stray = _number(top.get("stray_capacitance", 0.0), "stray_capacitance", _FARAD)
    band = _band(top["noise_band"]) if top.get("noise_band") is not None else (0.1, 1e5)
    cells = _cells(top["cells"], signals, reference) if top.get("cells") is not None else ()
    return Design(
        title=title, signals=signals, supply=supply, op_amp=op_amp, target=target, reference=reference, load=load,
        ambient=ambient, resistor=resistor, stray_capacitance=stray, noise_band=band, cells=cells,
    )  # fmt: skip


def _signals(value: Any) -> tuple[Signal, ...]:
    rows = _list(value, "signals", 1, MOST_SIGNALS)
    result: list[Signal] = []
    seen: dict[str, int] = {}
    for k, row in enumerate(rows):
        path = f"signals[{k}]"
        row = _object(row, path, {"name": True, **dict.fromkeys(_SIGNAL, True)})
        name = check_name(row["name"], f"{path}.name")
        same = unicodedata.normalize("NFC", name)
        if same in seen:
            raise _bad(f"{path}.name", name, f"is already the name of signals[{seen[same]}]; names must differ")
        seen[same] = k
        numbers = {key: _number(row[key], f"{path}.{key}", rule) for key, rule in _SIGNAL.items()}
        signal = Signal(name=name, **numbers)  # type: ignore[arg-type]
        if not signal.low <= signal.high:
            raise _bad(f"{path}.high", signal.high, f"must not be below {path}.low, which holds {signal.low:g}")
        result.append(signal)
    return tuple(result)


def check_name(value: Any, key: str = "name") -> str:
    """A signal's name, if it can be one.

    A name is 1 to 64 characters on one line, nothing invisible, no space at its
    ends, and none of the names the stage itself uses.

    Raises
    ------
    InvalidDesign
        With `key` as its path.
    """
    name = _text(value, key, MOST_NAME)
    plain = " ".join(name.split()).casefold()
    if name != name.strip():
        raise _bad(key, name, "must not begin or end with a space")
    if plain in (REFERENCE, OUTPUT) or _CELL_NAME.fullmatch(plain):
        raise _bad(key, name, f"is kept for the stage itself; a signal may not be {REFERENCE}, {OUTPUT} or cell N")
    return name


def _target(value: Any) -> Target:
    target = Target(**_numbers(value, "target", _TARGET))
    if target.low is not None and target.high is not None and not target.low <= target.high:
        raise _bad("target.high", target.high, f"must not be below target.low, which holds {target.low:g}")
    return target


def _resistor(value: Any) -> ResistorKind:
    row = _object(value, "resistor", {"series": True, **dict.fromkeys(_RESISTOR, True)})
    if row["series"] not in SERIES or not isinstance(row["series"], str):
        raise _bad("resistor.series", row["series"], f"must be one of {', '.join(SERIES)}")
    numbers = {key: _number(row[key], f"resistor.{key}", rule) for key, rule in _RESISTOR.items()}
    kind = ResistorKind(series=row["series"], **numbers)  # type: ignore[arg-type]
    if not kind.least <= kind.most:
        raise _bad("resistor.most", kind.most, f"must not be below resistor.least, which holds {kind.least:g}")
    return kind


def _op_amp(value: Any) -> OpAmp:
    wanted = {"name": True, **dict.fromkeys(_OP_AMP, True), "per_package": True}
    row = _object(value, "op_amp", wanted)
    name = _text(row["name"], "op_amp.name", MOST_TITLE)
    numbers = {key: _number(row[key], f"op_amp.{key}", rule) for key, rule in _OP_AMP.items()}
    count = _number(row["per_package"], "op_amp.per_package", _Number("", least=1.0, most=64.0))
    if count is None or count != int(count):
        raise _bad("op_amp.per_package", row["per_package"], "must be a whole number from 1 to 64")
    part = OpAmp(name=name, per_package=int(count), **numbers)  # type: ignore[arg-type]
    if not part.supply_least <= part.supply_most:
        raise _bad(
            "op_amp.supply_most", part.supply_most, f"must not be below supply_least, which holds {part.supply_least:g}"
        )
    return part


def _band(value: Any) -> tuple[float, float]:
    low, high = _list(value, "noise_band", 2, 2)
    rule = _Number("Hz", above=0.0)
    band = (_number(low, "noise_band[0]", rule), _number(high, "noise_band[1]", rule))
    if not band[0] < band[1]:
        raise _bad("noise_band[1]", band[1], f"must be above noise_band[0], which holds {band[0]:g}")
    return band


# The chain of cells -----------------------------------------------------------------------------


def _cells(value: Any, signals: tuple[Signal, ...], reference: Reference | None) -> tuple[Cell, ...]:
    rows = _list(value, "cells", 0, MOST_CELLS)
    if not rows:
        return ()
    names = [s.name for s in signals]
    fed: dict[str, str] = {}
    cells: list[Cell] = []
    for k, row in enumerate(rows):
        path = f"cells[{k}]"
        row = _object(row, path, {"minus": True, "plus": True, **dict.fromkeys(_CELL, True)})
        here: dict[str, str] = {}
        legs = {
            node: _legs(row[node], f"{path}.{node}", node == "plus", k, len(rows), names, reference, fed, here)
            for node in ("minus", "plus")
        }
        numbers = {key: _number(row[key], f"{path}.{key}", rule) for key, rule in _CELL.items()}
        cell = Cell(minus=legs["minus"], plus=legs["plus"], **numbers)  # type: ignore[arg-type]
        _check_nodes(cell, path)
        cells.append(cell)
    for k, name in enumerate(names):
        if name not in fed:
            raise InvalidDesign(
                f"signals[{k}].name is {shown(name)}, but no leg of any cell takes it; "
                "every signal must feed one leg, or leave out cells.",
                f"signals[{k}].name",
            )
    return tuple(cells)


def _legs(
    value: Any, path: str, zero: bool, k: int, count: int, names: list[str], reference: Reference | None,
    fed: dict[str, str], here: dict[str, str],
) -> tuple[Leg, ...]:  # fmt: skip
    """The legs into one node; `fed` and `here` remember who took a source, in the stage and in this cell."""
    rows = _list(value, path, 0, MOST_SIGNALS + MOST_CELLS)
    rule = _Number("Ω", least=0.0) if zero else _Number("Ω", above=0.0)
    legs = []
    for j, row in enumerate(rows):
        at = f"{path}[{j}]"
        row = _object(row, at, {"from": True, "resistance": True})
        source = row["from"]
        _check_source(source, f"{at}.from", k, count, names, reference)
        taken = here.get(source) or (fed.get(source) if source in names else None)
        if taken:
            where = "leg of the stage" if source in names else "leg of a cell"
            raise _bad(f"{at}.from", source, f"already feeds {taken}; it may feed one {where}")
        here[source] = fed[source] = at
        legs.append(Leg(source=source, resistance=_number(row["resistance"], f"{at}.resistance", rule)))
    return tuple(legs)


def _check_source(source: Any, key: str, k: int, count: int, names: list[str], reference: Reference | None) -> None:
    earlier = [cell_name(j) for j in range(k)]
    if isinstance(source, str):
        if source in names or source in earlier:
            return
        if source == REFERENCE:
            if reference is None:
                raise _bad(key, source, 'needs the key "reference" with its voltage, which the design does not have')
            return
        if source in [cell_name(j) for j in range(k, count)]:
            raise _bad(key, source, f"is not an earlier cell; cells[{k}] may take cells before it only")
    known = [shown(n) for n in names[:8]] + (["…"] if len(names) > 8 else [])
    allowed = ", ".join([*known, f'"{REFERENCE}"', *(f'"{n}"' for n in earlier)])
    raise _bad(key, source, f"is not a source; it must be one of {allowed}")


def _check_nodes(cell: Cell, path: str) -> None:
    """No node may float or be shorted, and a plain wire must be the one thing on its node."""
    if not cell.plus and cell.plus_ground is None:
        raise InvalidDesign(
            f"{path}.plus is empty and {path}.plus_ground is null, so the non-inverting node floats; "
            "give it a leg or a ground (0 ties it).",
            f"{path}.plus_ground",
        )
    if not cell.minus and cell.minus_ground is None and cell.feedback is None:
        raise InvalidDesign(
            f"{path}.minus is empty and {path}.minus_ground and {path}.feedback are null, so the inverting node "
            "floats; give it a leg or a feedback.",
            f"{path}.minus",
        )
    if cell.plus and cell.plus_ground == 0:
        raise _bad(f"{path}.plus_ground", 0, "ties the node to ground and kills its legs; it must be above 0 or null")
    alone = len(cell.plus) == 1 and cell.plus_ground is None
    for j, leg in enumerate(cell.plus):
        if leg.resistance == 0 and not alone:
            raise _bad(
                f"{path}.plus[{j}].resistance", 0, "must be above 0, as the leg is not the one thing on that node"
            )


# Values -----------------------------------------------------------------------------------------


def _bad(key: str, value: Any, why: str) -> InvalidDesign:
    return InvalidDesign(f"{key} holds {shown(value)}, which {why}.".replace("which must", "but it must"), key)


def _object(value: Any, path: str, keys: dict[str, bool], what: str = "") -> dict:
    """`value` as an object with these keys; those marked True must be there."""
    what = what or path
    if not isinstance(value, dict):
        raise InvalidDesign(
            f"{path or what[0].upper() + what[1:]} holds {shown(value)}, but it must be an object with keys.",
            path,
        )
    prefix = f"{path}." if path else ""
    for key in getattr(value, "twice", ()):
        raise InvalidDesign(
            f"{prefix}{_path_part(key)} stands twice in {what}; it may stand once.", prefix + _path_part(key)
        )
    for key in value:
        if key not in keys:
            raise InvalidDesign(
                f"{prefix}{_path_part(key)} is not a key of {what}, and it holds {shown(value[key])}; "
                f"the keys are {', '.join(keys)}.",
                prefix + _path_part(key),
            )
    for key, needed in keys.items():
        if needed and key not in value:
            raise InvalidDesign(f"{prefix}{key} is missing; {what} must have it.", f"{prefix}{key}")
    return value


def _path_part(key: Any) -> str:
    return key if isinstance(key, str) and re.fullmatch(r"\w{1,48}", key) else shown(key)


def _numbers(value: Any, path: str, rules: dict[str, _Number]) -> dict[str, Any]:
    """Every number of an object, by key."""
    row = _object(value, path, {key: rule.default != rule.default for key, rule in rules.items()})
    return {
        key: _number(row[key], f"{path}.{key}", rule) if key in row else rule.default for key, rule in rules.items()
    }


def _number(value: Any, key: str, rule: _Number) -> Any:
    if value is None and rule.null:
        return None
    try:
        number = parse_quantity(value, rule.unit)
    except InvalidQuantity:
        example = "" if isinstance(value, int | float) and not isinstance(value, bool) else ' (as 4700 or "4k7")'
        raise _bad(key, value, _allowed(rule) + example) from None
    if (
        (rule.least is not None and number < rule.least)
        or (rule.above is not None and number <= rule.above)
        or (rule.most is not None and number > rule.most)
        or (rule.below is not None and number >= rule.below)
    ):
        raise _bad(key, value, _allowed(rule))
    if number and not SMALLEST <= abs(number) <= LARGEST:
        raise _bad(key, value, f"must be 0 or of {SMALLEST:g} to {LARGEST:g} in size")
    return number


def _allowed(rule: _Number) -> str:
    """`must be a finite number in V, at least 0, or null`."""
    parts = ["must be a finite number" + (f" in {rule.unit}" if rule.unit else "")]
    for bound, word in ((rule.least, "at least"), (rule.above, "above"), (rule.most, "at most"), (rule.below, "below")):
        if bound is not None:
            parts.append(f"{word} {bound:g}")
    if rule.null:
        parts.append("or null")
    return ", ".join(parts)


def _text(value: Any, key: str, most: int, empty: bool = False) -> str:
    allowed = f"must be a text of {0 if empty else 1} to {most} characters"
    if not isinstance(value, str):
        raise _bad(key, value, allowed)
    if len(value) > most or not (value.strip() or empty):
        raise InvalidDesign(f"{key} holds {shown(value)} of {len(value)} characters, but it {allowed}.", key)
    for character in value:
        # Control, format (direction marks, zero width), surrogate and line separators: none can be seen on the sheet.
        if unicodedata.category(character) in ("Cc", "Cf", "Cs", "Zl", "Zp"):
            raise _bad(key, value, f"{allowed}, without the invisible character U+{ord(character):04X}")
    return value


def _list(value: Any, key: str, least: int, most: int) -> list:
    if not isinstance(value, list | tuple) or not least <= len(value) <= most:
        count = str(least) if least == most else f"{least} to {most}"
        raise _bad(key, value, f"must be a list of {count}")
    return list(value)


# Writing ----------------------------------------------------------------------------------------


def design_document(design: Design) -> dict[str, Any]:
    """The design as the object its file holds; every number a number, none rounded.

    Whole numbers are written without a decimal point, as a person would. Optional
    parts that are not given are left out.
    """
    document: dict[str, Any] = {"format": FORMAT, "title": design.title, "signals": []}
    for signal in design.signals:
        document["signals"].append({"name": signal.name, **_pick(signal, _SIGNAL)})
    document["target"] = {k: v for k, v in _pick(design.target, _TARGET).items() if v is not None}
    if design.reference is not None:
        document["reference"] = _pick(design.reference, _REFERENCE)
    document["supply"] = _pick(design.supply, _SUPPLY)
    document["load"] = _pick(design.load, _LOAD)
    document["ambient"] = _pick(design.ambient, _AMBIENT)
    document["resistor"] = {"series": design.resistor.series, **_pick(design.resistor, _RESISTOR)}
    document["op_amp"] = {
        "name": design.op_amp.name, **_pick(design.op_amp, _OP_AMP), "per_package": design.op_amp.per_package
    }  # fmt: skip
    document["stray_capacitance"] = _plain(design.stray_capacitance)
    document["noise_band"] = [_plain(f) for f in design.noise_band]
    if design.cells:
        document["cells"] = [
            {
                "minus": [{"from": leg.source, "resistance": _plain(leg.resistance)} for leg in cell.minus],
                "plus": [{"from": leg.source, "resistance": _plain(leg.resistance)} for leg in cell.plus],
                **_pick(cell, _CELL),
            }
            for cell in design.cells
        ]
    return document


def _pick(record: Any, keys: Any) -> dict[str, Any]:
    return {key: _plain(getattr(record, key)) for key in keys}


def _plain(number: float | None) -> float | int | None:
    """A whole float as an int; `read_design` makes it the same float again."""
    if number is None:
        return None
    number = float(number)  # also a NumPy scalar
    return int(number) if number.is_integer() and abs(number) < 1e15 else number


def write_design(design: Design, path: str | os.PathLike | None = None) -> str:
    """The design file's text; with `path`, also written there, whole or not at all.

    `read_design(write_design(d)) == d` for every design that `read_design` returns.

    Raises
    ------
    InvalidDesign
        If the design could not be read again (a number that is not finite, say);
        nothing is written then.
    SumwrightError
        If the file cannot be written.
    """
    document = design_document(design)
    _design(document)
    text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    if path is not None:
        write_whole(path, text)
    return text


__all__ = ["FORMAT", "SERIES", "check_name", "design_document", "read_design", "write_design"]
