"""A sum as a person writes it, or a list of weights, to signals: the start of a new sheet.

`out = 0.14 north + 1/3 east - 0.18 tare + 500 mV` is a sum; a name of several words
stands in quotes; a term without a number weighs 1. A list has one signal a line:
`name weight`, or `name, weight, low, high, source resistance`; a line `offset 0.5`
gives the offset; a lone weight gets a name. With either may stand what is asked of the
output and what feeds it, a line each: `window 0 5`, `accuracy 20m`, `rails 12 -12`.
"""

from __future__ import annotations

import re
from typing import Any, NamedTuple

from sumwright.engine.stage import (
    Ambient,
    Design,
    Load,
    OpAmp,
    Reference,
    ResistorKind,
    Signal,
    Supply,
    Target,
)
from sumwright.errors import InvalidDesign, InvalidQuantity
from sumwright.model.edits import SIGNALS_MOST, check_name
from sumwright.model.typed import in_span
from sumwright.quantity import parse_quantity

TEXT_MOST = 10_000
UNTITLED = "Untitled sum"  # until the person says otherwise
USUAL_RANGE = (0.0, 10.0)  # V, until the person says otherwise
USUAL_RAILS = (12.0, -12.0)  # V
_TERM = re.compile(
    r"""\s*(?P<sign>[+-])?\s*
        (?P<number>(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?(?:\s*/\s*\d+(?:\.\d*)?)?)?\s*
        (?:[*·×]\s*)?
        (?P<name>"[^"]*"|“[^”]*”|[^\W\d][\w.]*)?""",
    re.VERBOSE,
)
_ASKED = re.compile(r"(window|accuracy|rails)\b[\s:=,;]*(.*)", re.IGNORECASE)
_VOLT = re.compile(r"[munµ]?V")
_SPAN_OF = {"window": ("target", "low"), "accuracy": ("target", "accuracy"), "rails": ("supply", "high")}
_WEIGHT_FIRST = re.compile(r"([+-]?)\s*(\.?\d\S*)\s*[ *×]\s*(\D.*)")  # a line of a list written as a term is
_SAME = str.maketrans({"\u2212": "-", "\u2013": "-", "\u2009": " ", "\u00a0": " ", "\u202f": " "})


class Sum(NamedTuple):
    """What a text asks for."""

    signals: tuple[Signal, ...]
    offset: float  # V
    window: tuple[float | None, float | None] = (None, None)  # V
    accuracy: float | None = None  # V
    rails: tuple[float, float] = USUAL_RAILS  # V


def read_sum(text: str) -> Sum:
    """The signals and the offset a text asks for.

    Raises
    ------
    InvalidDesign
        If it cannot be read; the sentence quotes the place.
    """
    if len(text) > TEXT_MOST:
        raise InvalidDesign(f"A sum may have {TEXT_MOST} characters; this one has {len(text)}.", "sum")
    plain = text.translate(_SAME).strip()
    if not plain:
        raise InvalidDesign("There is no sum yet: write for example out = 0.5 left + 0.5 right.", "sum")
    lines, asked = _apart([line.strip() for line in plain.splitlines() if line.strip()])
    plain = "\n".join(lines)
    wanted = _sum(plain) if "=" in plain or (len(lines) == 1 and _is_sum(lines[0])) else _list(lines)
    return wanted._replace(**asked)


def _apart(lines: list[str]) -> tuple[list[str], dict[str, Any]]:
    """The lines that name signals, and what the others ask: a window, an accuracy, rails."""
    kept: list[str] = []
    asked: dict[str, Any] = {}
    for line in lines:
        found = _ASKED.fullmatch(line)
        numbers = re.split(r"\s+to\s+|\s*[,;]\s*|(?<=[\dV])\s+(?=[+\-.\d])", found[2].strip()) if found else []
        numbers = [n for n in numbers if n]
        word = found[1].lower() if found else ""
        # a signal may be called so: then it has its weight, or its weight, range and source
        if not found or len(numbers) != (1 if word == "accuracy" else 2):
            kept.append(line)
            continue
        values = [in_span(*_SPAN_OF[word], parse_quantity(n, "V", word), "V") for n in numbers]
        if word == "accuracy":
            if values[0] <= 0:
                raise InvalidDesign(f"accuracy must be more than 0 V; it is {numbers[0]}.", "sum")
            asked[word] = values[0]
        elif word == "window":
            if values[0] >= values[1]:
                raise InvalidDesign(
                    f"window: its bottom, {values[0]:g} V, must be below its top, {values[1]:g} V.", "sum"
                )
            asked[word] = (values[0], values[1])
        else:
            if values[0] == values[1]:
                raise InvalidDesign(f"rails: two different voltages are wanted; both are {values[0]:g} V.", "sum")
            asked[word] = (max(values), min(values))
    return kept, asked


def _is_sum(line: str) -> bool:
    return bool(re.search(r'[\w"”]\s*[+-]\s*[\w."“]', line)) or len(re.split(r"[,;\t]", line)) == 1


def _sum(text: str) -> Sum:
    left, equals, right = text.partition("=")
    if not equals:
        right = left
    elif "=" in right:
        raise InvalidDesign(
            "A sum has one “=”; in a list write a name and its weight on each line, without “=”.", "sum"
        )
    right = " ".join(right.split())
    signals: list[Signal] = []
    offset, at = 0.0, 0
    while at < len(right):
        term = _TERM.match(right, at)
        if term is None or term.end() == at or not (term["number"] or term["name"]):
            raise InvalidDesign(f"“{right[at : at + 20].strip()}” is not a term: write a weight and a name.", "sum")
        if at and not term["sign"]:
            raise InvalidDesign(f"There is no + or − before “{right[at : at + 20].strip()}”.", "sum")
        at = term.end()
        sign = -1.0 if term["sign"] == "-" else 1.0
        name = (term["name"] or "").strip('"“”')
        if not name or _VOLT.fullmatch(term["name"] or ""):
            offset += sign * parse_quantity(f"{term['number'] or 1} {name}".strip(), "V", "the offset")
            continue
        weight = sign * _number(term["number"])
        _add(signals, name, weight)
    return _made(signals, offset)


def _number(text: str | None) -> float:
    if not text:
        return 1.0
    top, _, bottom = text.partition("/")
    below = float(bottom) if bottom else 1.0
    if below == 0:
        raise InvalidDesign(f"“{text}” divides by 0.", "sum")
    return float(top) / below


def _is_number(text: str) -> bool:
    try:
        parse_quantity(text)
    except InvalidQuantity:
        return False
    return True


def _list(lines: list[str]) -> Sum:
    signals: list[Signal] = []
    offset = 0.0
    for k, line in enumerate(lines, 1):
        cells = [c.strip().strip('"“”') for c in re.split(r"[,;\t]", line)]
        if len(cells) == 1 and (first := _WEIGHT_FIRST.fullmatch(line)) and not _is_number(line):
            cells = [first[3], first[1] + first[2]]
        elif len(cells) == 1:
            cells = re.split(r"\s+(?=[+-]?[\d.])", line, maxsplit=1)
        cells = [c for c in cells if c]
        if len(cells) == 1:
            cells = [f"signal {len(signals) + 1}", cells[0]]
        if k == 1 and len(cells) > 1 and not re.search(r"\d", "".join(cells[1:])):
            continue  # a line of headings
        try:
            numbers = [parse_quantity(c, unit) for c, unit in zip(cells[1:5], ("", "V", "V", "Ω"), strict=False)]
        except InvalidQuantity as error:
            raise InvalidDesign(f"Line {k}: {error}", "sum") from error
        if cells[0].lower() == "offset":
            offset += numbers[0]
            continue
        low, high = numbers[1:3] if len(numbers) >= 3 else USUAL_RANGE
        if low > high:
            raise InvalidDesign(f"Line {k}: the range's low end, {low:g} V, is above its high end, {high:g} V.", "sum")
        _add(signals, cells[0], numbers[0], low, high, numbers[3] if len(numbers) > 3 else 0.0)
    return _made(signals, offset)


def _add(signals, name, weight, low=USUAL_RANGE[0], high=USUAL_RANGE[1], resistance=0.0):
    name = check_name(name, tuple(s.name for s in signals))
    if weight == 0:
        raise InvalidDesign(f"“{name}” weighs 0; leave it out or give it a weight.", "sum")
    if resistance < 0:
        raise InvalidDesign(f"“{name}”: a source resistance is 0 or more; it is {resistance:g} Ω.", "sum")
    for figure, typed, unit in (
        ("weight", weight, ""),
        ("low", low, "V"),
        ("high", high, "V"),
        ("source_resistance", resistance, "Ω"),
    ):
        in_span("signal", figure, typed, unit)
    signals.append(Signal(name, weight, low, high, min(max(low, (low + high) / 2), high), resistance))


def _made(signals: list[Signal], offset: float) -> Sum:
    if not signals:
        raise InvalidDesign("The sum names no signal; a stage needs at least one.", "sum")
    if len(signals) > SIGNALS_MOST:
        raise InvalidDesign(f"A sheet holds {SIGNALS_MOST} signals; this sum has {len(signals)}.", "sum")
    return Sum(tuple(signals), in_span("target", "offset", offset, "V"))


def new_design(wanted: Sum, op_amp: OpAmp, title: str = UNTITLED) -> Design:
    """A design for that sum in usual surroundings, where it says nothing else: 12 V rails, 10 kΩ load, E96 1 % resistors, 10 to 40 °C."""
    return Design(
        title=title,
        signals=wanted.signals,
        target=Target(wanted.offset, *wanted.window, wanted.accuracy),
        reference=Reference(2.5, 0.0, 0.002) if wanted.offset else None,
        supply=Supply(*wanted.rails, 0.05),
        load=Load(1e4, 1e-10),
        ambient=Ambient(25.0, 10.0, 40.0),
        resistor=ResistorKind(),
        op_amp=op_amp,
        stray_capacitance=5e-12,
    )
