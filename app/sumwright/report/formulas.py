"""How each weight follows from the resistors: the formula, the numbers in it, the result.

With an ideal op amp both inputs of a cell are at one voltage, so (Kirchhoff's
current law at each node):

    NG = 1 + Rf·Σ1/R of everything at the inverting node, ground leg included
    a minus leg weighs  -Rf/R
    a plus leg weighs   NG·(1/R)/S,  S = Σ1/R of everything at the non-inverting node

R is the leg's resistor and its source's resistance together. What a cell's output
does to the stage's output, H, is 1 for the last cell and otherwise the weight of
its own legs further on, times their H.
"""

from __future__ import annotations

from typing import NamedTuple

from sumwright.engine.designators import designators
from sumwright.engine.nodes import Network
from sumwright.engine.stage import REFERENCE, Design, cell_name
from sumwright.quantity import MINUS, format_fixed, format_quantity, format_resistor

_LOW = str.maketrans("0123456789", "₀₁₂₃₄₅₆₇₈₉")


class Line(NamedTuple):
    """One step: what it is of, the formula in designators, the same in numbers, the result."""

    name: str  # NG, S, H, or a weight
    of: str  # signal, `reference`, or a cell
    formula: str
    numbers: str
    value: float | None
    unit: str

    @property
    def result(self) -> str:
        if self.unit:
            return format_quantity(self.value, self.unit, 5)
        return format_fixed(self.value, "", 5, sign=self.name.startswith("w"))


def derivation(design: Design) -> tuple[Line, ...]:
    """Every step from the resistors to the weights and the offset, last cell first where one needs another.

    Parameters
    ----------
    design : Design
        Realised; every cell with a feedback resistor, else its gains do not exist and are left out.

    Returns
    -------
    tuple of Line
        Constants of the cells, then the signals in order, then the reference.
    """
    return _Derivation(design).lines()


class _Derivation:
    def __init__(self, design: Design):
        self.design, self.net = design, Network(design)
        self.names = designators(design, self.net).resistors
        self.own = {s.name: s.source_resistance for s in design.signals}
        self.own[REFERENCE] = design.reference.source_resistance if design.reference else 0.0
        self.count = len(design.cells)

    def _at(self, k: int) -> str:
        return str(k + 1).translate(_LOW) if self.count > 1 else ""

    def _leg(self, i: int) -> tuple[str, str, float]:
        """A leg's resistance: in designators, in numbers, in ohm."""
        part = self.net.parts[i]
        rs = self.own.get(part.source, 0.0)
        name = self.names[i]
        value = format_resistor(part.resistance, 6)
        if not rs:
            return name or "0", value, part.resistance
        if not name:
            return format_quantity(rs, "Ω", 3, trim=True), format_resistor(rs, 6), rs
        return (
            f"({name} + {format_quantity(rs, 'Ω', 3, trim=True)})",
            f"({value} + {format_resistor(rs, 6)})",
            part.resistance + rs,
        )

    def _sum(self, parts) -> tuple[str, str, float]:
        """Σ1/R over parts."""
        legs = [self._leg(int(i)) for i in parts]
        return (
            " + ".join(f"1/{a}" for a, _, _ in legs),
            " + ".join(f"1/{b}" for _, b, _ in legs),
            sum(1.0 / r if r else float("inf") for _, _, r in legs),
        )

    def lines(self) -> tuple[Line, ...]:
        out: list[Line] = []
        self.ng: dict[int, float | None] = {}
        self.s: dict[int, float] = {}
        for k, c in enumerate(self.net.cells):
            where = cell_name(k)
            minus = [*c.minus_parts, *([c.minus_ground] if c.minus_ground >= 0 else [])]
            if c.feedback < 0:
                self.ng[k] = None
                continue
            rf, value = self.names[c.feedback], self.net.resistances[c.feedback]
            if minus:
                a, b, total = self._sum(minus)
                self.ng[k] = 1.0 + value * total
                out.append(
                    Line(
                        f"NG{self._at(k)}",
                        where,
                        f"1 + {rf}·({a})",
                        f"1 + {format_resistor(value, 6)}·({b})",
                        self.ng[k],
                        "",
                    )
                )
            else:
                self.ng[k] = 1.0
                out.append(
                    Line(f"NG{self._at(k)}", where, "1", "nothing at the inverting node but the feedback", 1.0, "")
                )
            plus = [*c.plus_parts, *([c.plus_ground] if c.plus_ground >= 0 else [])]
            if c.tied == -1 and plus:
                a, b, total = self._sum(plus)
                self.s[k] = total
                out.append(Line(f"S{self._at(k)}", where, a, b, total, "S"))
        self.h: dict[int, float | None] = {self.count - 1: 1.0}
        for k in range(self.count - 2, -1, -1):
            paths = self._paths(cell_name(k))
            self.h[k] = _total([p for _, _, p in paths])
            out.append(
                Line(
                    f"H{self._at(k)}", cell_name(k), " + ".join(a for a, _, _ in paths) or "0",
                    " + ".join(b for _, b, _ in paths) or "feeds nothing", self.h[k], "",
                )
            )  # fmt: skip
        for source in (*self.design.signal_names, REFERENCE):
            paths = self._paths(source)
            if not paths:
                if source != REFERENCE:
                    out.append(Line("w", source, "0", "feeds no leg", 0.0, ""))
                continue
            whole = _total([p for _, _, p in paths])
            out.append(
                Line("w", source, " + ".join(a for a, _, _ in paths), " + ".join(b for _, b, _ in paths), whole, "")
            )
        return tuple(out)

    def _paths(self, source: str) -> list[tuple[str, str, float | None]]:
        """The ways of a source to the output, each as formula, numbers and value."""
        found = []
        for k, c in enumerate(self.net.cells):
            for side, parts in (("minus", c.minus_parts), ("plus", c.plus_parts)):
                for i in parts:
                    if self.net.parts[int(i)].source == source:
                        found.append(self._path(k, c, side, int(i)))
        return found

    def _path(self, k, c, side, i):
        name, value, r = self._leg(i)
        h = self.h.get(k)
        further, further_numbers = "", ""
        if k < self.count - 1:
            further, further_numbers = f"·H{self._at(k)}", f"·({format_fixed(h, '', 5)})"
        if c.feedback < 0 or h is None:
            return "open loop", "no weight", None
        if side == "minus":
            rf = self.net.resistances[c.feedback]
            local = -rf / r
            return (
                f"{MINUS}{self.names[c.feedback]}/{name}{further}",
                f"{MINUS}{format_resistor(rf, 6)}/{value}{further_numbers}",
                local * h,
            )
        ng = self.ng[k]
        if c.tied >= 0:
            return f"NG{self._at(k)}{further}", f"{format_fixed(ng, '', 5)}{further_numbers}", ng * h
        return (
            f"NG{self._at(k)}·(1/{name})/S{self._at(k)}{further}",
            f"{format_fixed(ng, '', 5)}·(1/{value})/{format_quantity(self.s[k], 'S', 5)}{further_numbers}",
            ng / r / self.s[k] * h,
        )


def _total(values: list[float | None]) -> float | None:
    """Their sum, or None where one does not exist."""
    known = [v for v in values if v is not None]
    return sum(known) if len(known) == len(values) else None


__all__ = ["Line", "derivation"]
