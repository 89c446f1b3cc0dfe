"""The bill of materials of a realised design: grouped by value, designators as on the schematic, as CSV.

A resistor that is no preferred value but that two of them make in series or in parallel
is listed as the two, `R3a` and `R3b`.
"""

from __future__ import annotations

import csv
import io
from typing import NamedTuple

from sumwright.engine.designators import designators
from sumwright.engine.nodes import Network
from sumwright.engine.realise.pairs import Combinations
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import Design
from sumwright.errors import SumwrightError
from sumwright.quantity import format_exact, format_quantity

HEADING = ("designators", "count", "part", "value", "rating", "use", "note")
# A spreadsheet runs a cell that begins with one of these as a formula, or breaks the row at it (OWASP, CSV injection).
_RISKY = ("=", "+", "-", "@", "\t", "\r", "\n")
_SAME = 1e-9


class BillLine(NamedTuple):
    """One line: parts that are bought under one value."""

    designators: tuple[str, ...]
    part: str  # "resistor", "capacitor", "op amp"
    value: str
    rating: str
    use: tuple[str, ...]  # where each designator sits, in the same order
    note: str = ""

    @property
    def count(self) -> int:  # type: ignore[override]
        return len(self.designators)


def bill(design: Design) -> tuple[BillLine, ...]:
    """Every part to buy: resistors rising by value, then capacitors, then op amp packages.

    Raises
    ------
    SumwrightError
        If the design is not realised.
    """
    if not design.cells:
        raise SumwrightError("The design is not realised, so there are no parts to list; take a choice first.")
    net = Network(design)
    marks = designators(design, net)
    return (*_resistors(design, net, marks), *_capacitors(design, marks), *_op_amps(design, marks))


def _resistors(design: Design, net: Network, marks) -> list[BillLine]:
    kind = design.resistor
    real = [(p, mark) for p, mark in zip(net.parts, marks.resistors, strict=True) if mark]
    values = [p.resistance for p, _ in real]
    series = values_within(kind.series, min([kind.least, *values]) / 10, max([kind.most, *values]) * 10)
    combinations: Combinations | None = None
    groups: dict[float, list[tuple[str, str, str]]] = {}
    for part, mark in real:
        near = float(series[abs(series - part.resistance).argmin()])
        if abs(near / part.resistance - 1) <= _SAME:
            groups.setdefault(near, []).append((mark, part.name, ""))
            continue
        if combinations is None:
            inside = series[(series >= kind.least * (1 - _SAME)) & (series <= kind.most * (1 + _SAME))]
            combinations = Combinations(inside) if inside.size else Combinations(series)
        made, first, second, how = combinations.near(part.resistance, 1)[0]
        if abs(made / part.resistance - 1) <= _SAME:
            note = f"{mark}a and {mark}b in {how} make {format_exact(part.resistance)}"
            groups.setdefault(first, []).append((f"{mark}a", part.name, note))
            groups.setdefault(second, []).append((f"{mark}b", part.name, note))
        else:
            groups.setdefault(part.resistance, []).append((mark, part.name, f"not a value of {kind.series}"))
    rating = f"{kind.tolerance * 100:g} %, {kind.power:g} W, {kind.temperature_coefficient * 1e6:g} ppm/K"
    lines = []
    for ohm in sorted(groups):
        rows = groups[ohm]
        notes = "; ".join(dict.fromkeys(note for _, _, note in rows if note))
        lines.append(
            BillLine(tuple(r[0] for r in rows), "resistor", _ohms(ohm), rating, tuple(r[1] for r in rows), notes)
        )
    return lines


def _ohms(ohm: float) -> str:
    text = format_exact(float(f"{ohm:.12g}"))
    return text if text[-1:].isalpha() else text + "R"


def _capacitors(design: Design, marks) -> list[BillLine]:
    groups: dict[float, list[tuple[str, str]]] = {}
    for k, (cell, mark) in enumerate(zip(design.cells, marks.capacitors, strict=True)):
        if mark:
            where = f", cell {k + 1}" if len(design.cells) > 1 else ""
            groups.setdefault(cell.feedback_capacitance, []).append((mark, "across feedback" + where))
    return [
        BillLine(
            tuple(m for m, _ in rows),
            "capacitor",
            format_quantity(farad, "F", 4, trim=True),
            "",
            tuple(u for _, u in rows),
        )
        for farad, rows in sorted(groups.items())
    ]


def _op_amps(design: Design, marks) -> list[BillLine]:
    per = max(1, design.op_amp.per_package)
    packages: dict[str, list[str]] = {}
    for k, mark in enumerate(marks.op_amps):
        packages.setdefault(f"U{k // per + 1}", []).append(f"cell {k + 1} ({mark})" if per > 1 else f"cell {k + 1}")
    spare = len(packages) * per - len(design.cells)
    notes = []
    if spare:
        notes.append(f"{spare} amplifier{'s' if spare > 1 else ''} unused: wire as a follower within the inputs' range")
    notes.append("0.1 µF ceramic at each supply pin (common practice)")
    rating = f"{per} in a package" if per > 1 else ""
    return [
        BillLine(
            tuple(packages),
            "op amp",
            design.op_amp.name,
            rating,
            tuple(", ".join(v) for v in packages.values()),
            "; ".join(notes),
        )
    ]


def safe_cell(text: object) -> str:
    """A cell that no spreadsheet runs as a formula: what would start one gets an apostrophe in front."""
    cell = str(text)
    return "'" + cell if cell.lstrip(" ").startswith(_RISKY) else cell


def bill_csv(design: Design) -> str:
    """The bill as CSV (RFC 4180: commas, quotes where needed, CRLF), every cell safe to open in a spreadsheet."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\r\n")
    writer.writerow(HEADING)
    for line in bill(design):
        cells = (
            " ".join(line.designators),
            line.count,
            line.part,
            line.value,
            line.rating,
            "; ".join(line.use),
            line.note,
        )
        writer.writerow([safe_cell(c) for c in cells])
    return stream.getvalue()
