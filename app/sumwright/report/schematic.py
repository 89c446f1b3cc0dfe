"""The schematic of any chain of cells as a static drawing, values and currents on it.

One row a leg: minus legs above, plus legs below, as at the op amp. A cell stands
left of the one it feeds, so that the wire between them runs straight; two cells
go side by side while they fit, further ones below. What has no straight wire is joined by name.

Symbols: resistor as a rectangle (IEC 60617) or as a zigzag (IEEE 315); op amp as
a triangle, which both accept.
"""

from __future__ import annotations

from dataclasses import dataclass

from sumwright.engine.designators import Designators, designators
from sumwright.engine.nodes import Network
from sumwright.engine.operating_point import CellPoint, OperatingPoint
from sumwright.engine.stage import REFERENCE, Cell, Design, cell_name
from sumwright.quantity import THIN, format_fixed, format_quantity, format_resistor
from sumwright.rows import hands_of

from .drawing import INK, PAPER, RED, SOFT, Drawing, number, shortened, text_width

SYMBOLS = {"iec": "IEC 60617", "ieee": "IEEE 315"}
ROW = 40.0
_WIDEST = 760.0  # px; wider than this would be too small to read on paper, so cells go below each other
_NAME_ROOM = 200.0  # px for a source's name
_RES, _BUS, _AMP, _WIDE, _OUT = 46.0, 150.0, 72.0, 74.0, 26.0  # along a leg: resistor, bus; op amp, its width, output


@dataclass
class _Row:
    """One leg as drawn: what it comes from and through which part."""

    kind: str  # leg, wire (0 ohm), ground, tied, none
    source: str = ""
    part: int = -1  # index into Network.parts
    straight: bool = False  # fed by the wire from the cell on the left


@dataclass
class _Block:
    """One cell and where it stands."""

    k: int
    minus: list[_Row]
    plus: list[_Row]
    label: float = 0.0  # width of the source labels
    x: float = 0.0
    y: float = 0.0  # of the first row

    @property
    def rows(self) -> list[_Row]:
        return self.minus + self.plus

    def row_y(self, i: int) -> float:
        return self.y + i * ROW

    @property
    def pins(self) -> tuple[float, float]:
        return self.row_y(len(self.minus) - 1), self.row_y(len(self.minus))

    @property
    def middle(self) -> float:
        return sum(self.pins) / 2

    @property
    def plug(self) -> float:
        return self.x + self.label

    @property
    def bus(self) -> float:
        return self.plug + _BUS

    @property
    def amp(self) -> float:
        return self.bus + _AMP

    @property
    def out(self) -> float:
        return self.amp + _WIDE + _OUT

    def top(self, cell: Cell) -> float:
        """The uppermost ink: the first row's text, or the feedback over the op amp."""
        return min(self.y - 26.0, self.pins[0] - (98.0 if cell.feedback_capacitance else 68.0))


def schematic(
    design: Design, point: OperatingPoint | None = None, *, symbols: str = "iec", unplugged=(),
) -> Drawing:  # fmt: skip
    """The stage as a drawing.

    Parameters
    ----------
    design : Design
        Realised.
    point : OperatingPoint, optional
        Puts node voltages [V] and branch currents [A] on it.
    symbols : {"iec", "ieee"}
        Resistor symbol: IEC 60617 or IEEE 315.
    unplugged : iterable of str, optional
        Signals whose cable is out; drawn broken at the plug.

    Returns
    -------
    Drawing
    """
    if symbols not in SYMBOLS:
        raise ValueError(f"symbols must be one of {', '.join(SYMBOLS)}; it is {symbols!r}")
    return _Sheet(design, point, symbols, frozenset(unplugged)).draw()


class _Sheet:
    def __init__(self, design, point, symbols, unplugged):
        self.design, self.point, self.symbols, self.unplugged = design, point, symbols, unplugged
        self.net = Network(design)
        self.names: Designators = designators(design, self.net)
        self.hands = hands_of(design)

    # ------------------------------------------------------------ what stands where

    def blocks(self, per_line: int) -> list[_Block]:
        blocks = []
        for k, cell in enumerate(self.design.cells):
            c = self.net.cells[k]
            left = cell_name(k - 1) if k % per_line else ""
            minus = self._legs(c.minus_parts, left)
            if c.minus_ground >= 0:
                minus.insert(0, _Row("ground", part=c.minus_ground))
            minus.sort(key=lambda row: row.straight)  # the wire from the left ends at the pin's own row
            plus = self._legs(c.plus_parts, left)
            plus.sort(key=lambda row: not row.straight)
            if c.plus_ground >= 0:
                plus.append(_Row("ground", part=c.plus_ground))
            if cell.plus_ground == 0:
                plus = [_Row("tied")]
            blocks.append(_Block(k, minus or [_Row("none")], plus or [_Row("none")]))
        return blocks

    def _legs(self, parts, left) -> list[_Row]:
        rows = []
        for i in parts:
            p = self.net.parts[i]
            rows.append(_Row("leg" if p.resistance > 0 else "wire", p.source, int(i), p.source == left))
        if sum(row.straight for row in rows) > 1:  # one wire only; the others are joined by name
            for row in rows[1:]:
                row.straight = False
        return rows

    def place(self, blocks: list[_Block], per_line: int) -> tuple[float, float]:
        """Give every block its place; returns the drawing's width and height."""
        bottom, width = 0.0, 0.0
        for start in range(0, len(blocks), per_line):
            line = blocks[start : start + per_line]
            x = 0.0
            for b in line:
                b.label = max((self._label_width(row, b.k) for row in b.rows), default=0.0)
                # the feedback current of the cell on the left stands between it and these labels
                b.x = x + (44.0 if x and any(not row.straight for row in b.rows if row.source) else 0.0)
                straight = next((i for i, row in enumerate(b.rows) if row.straight), None)
                if straight is not None:
                    b.y = blocks[b.k - 1].middle - straight * ROW
                x = b.out + 14.0
            top = min(b.top(self.design.cells[b.k]) for b in line)
            for b in line:
                b.y += bottom - top
            bottom = max(b.row_y(len(b.rows) - 1) for b in line) + 34.0
            last = line[-1]
            bottom = max(bottom, last.middle + 84.0)
            width = max(width, last.out + (156.0 if last.k == len(blocks) - 1 else 96.0))
        return width, bottom

    def _label_width(self, row: _Row, k: int) -> float:
        if row.straight:
            return 74.0
        if row.kind in ("leg", "wire"):
            return max(text_width(_short(row.source), bold=True), text_width(self._under(row.source), 13)) + 18.0
        return 12.0

    def _under(self, source: str) -> str:
        """The small line under a source's name: its voltage and its own resistance."""
        parts = []
        if self.point is not None:
            parts.append(f"{format_fixed(self._volts(source), 'V')}")
        rs = self._source_resistance(source)
        if rs:
            parts.append(format_quantity(rs, "Ω", 3, trim=True))
        return ", ".join(parts)

    def _volts(self, source: str) -> float:
        if source == REFERENCE:
            return self.design.reference.voltage if self.design.reference else 0.0
        if source in self.design.signal_names:
            return self.design.signal(source).value
        return self.point.cells[int(source.split()[1]) - 1].output_voltage

    def _source_resistance(self, source: str) -> float:
        if source == REFERENCE:
            return self.design.reference.source_resistance if self.design.reference else 0.0
        return self.design.signal(source).source_resistance if source in self.design.signal_names else 0.0

    # ------------------------------------------------------------ drawing it

    def draw(self) -> Drawing:
        for per_line in (2, 1):
            blocks = self.blocks(per_line)
            width, height = self.place(blocks, per_line)
            if width <= _WIDEST:
                break
        self.d = Drawing(width, height, self._alt())
        for b in blocks:
            self._left_end = blocks[b.k - 1].out if b.k else 0.0
            self._cell(b, blocks)
        return self.d

    def _alt(self) -> str:
        cells = len(self.design.cells)
        alt = f"Schematic: {cells} op amp{'s' if cells > 1 else ''}, {sum(1 for n in self.names.resistors if n)} resistors"
        if self.point is not None:
            alt += f", output {format_fixed(self.point.output, 'V')}"
            if self.point.clipped != "no":
                alt += f", clipped {self.point.clipped}"
        return alt + "; every part is in the bill of materials"

    def _cell(self, b: _Block, blocks: list[_Block]) -> None:
        d, cell = self.d, self.design.cells[b.k]
        at: CellPoint | None = self.point.cells[b.k] if self.point is not None else None
        y_minus, y_plus = b.pins
        xn = b.bus + 16.0
        for i, row in enumerate(b.rows):
            self._row(b, row, b.row_y(i), at, minus=i < len(b.minus))
        # the two buses, and the wires from them to the pins
        for rows, first, pin in ((b.minus, 0, y_minus), (b.plus, len(b.minus), y_plus)):
            if rows[0].kind in ("none", "tied"):
                continue
            ys = [b.row_y(first + i) for i in range(len(rows))]
            if len(ys) > 1:
                d.line(b.bus, ys[0], b.bus, ys[-1])
                for y in ys:
                    if y == pin or y not in (ys[0], ys[-1]):  # a corner is no junction
                        d.dot(b.bus, y)
            d.line(b.bus, pin, b.amp, pin)
        if b.plus[0].kind == "tied":
            d.path(f"M{number(b.amp)} {number(y_plus)}H{number(b.amp - 30)}v10")
            self._ground(b.amp - 30, y_plus + 10)
        if b.minus[0].kind == "none":
            d.line(xn, y_minus, b.amp, y_minus)
        self._feedback(b, cell, at, xn, y_minus)
        self._op_amp(b, at)
        if at is not None:
            wrong = RED if at.clipped != "no" else INK
            d.text(xn + 6, y_minus - 6, format_fixed(at.minus_voltage, "V"), bold=True, fill=wrong, size=13, halo=True)
            if b.plus[0].kind == "tied":
                if at.clipped == "no" and cell.feedback is not None:
                    d.text(b.amp - 5, y_minus + 15, "virtual ground", anchor="end", fill=SOFT, size=13, halo=True)
            elif b.plus[0].kind != "none":
                d.text(
                    b.amp - 8,
                    y_plus + 17,
                    format_fixed(at.plus_voltage, "V"),
                    anchor="end",
                    bold=True,
                    size=13,
                    halo=True,
                )
        self._output(b, blocks, at)

    def _row(self, b: _Block, row: _Row, y: float, at: CellPoint | None, minus: bool) -> None:
        d = self.d
        if row.kind in ("none", "tied"):
            return
        xr = b.plug + _RES
        out = row.source in self.unplugged
        if row.kind == "ground":
            current = None if at is None else -(at.minus_ground_current if minus else at.plus_ground_current)
            d.path(f"M{number(b.plug + 4)} {number(y + 8)}V{number(y)}H{number(b.bus)}")
            self._ground(b.plug + 4, y + 8)
        else:
            current = None if at is None else at.leg_currents.get(row.source)
            if row.straight:
                d.line(self._left_end, y, b.bus, y)
            else:
                self._source(b, row, y, out)
                d.line(b.plug + (10.0 if out else 0.0), y, b.bus, y)
        if row.kind == "wire":
            d.text(xr, y - 8, "wire", anchor="middle", fill=SOFT, size=13)
        else:
            self._resistor(xr, y)
            self._value(xr, y - 11, row.part)
        if out:
            d.text(b.bus - 38, y - 6, "open", anchor="middle", fill=SOFT, size=13)
        elif current is not None:
            d.text(b.bus - 36, y - 6, format_quantity(abs(current), "A"), anchor="middle", fill=SOFT, size=13)
            if abs(current) > 1e-12:
                self._arrow(b.bus - 14, y, 1 if current > 0 else -1)

    def _source(self, b: _Block, row: _Row, y: float, out: bool) -> None:
        """A source's name, what it is at, and its plug."""
        d, x = self.d, b.plug
        under = self._under(row.source)
        d.text(x - 12, y - 2 if under else y + 5, _short(row.source), anchor="end", bold=True)
        if under:
            d.text(x - 12, y + 13, under, anchor="end", fill=SOFT, size=13)
        mark = self.hands.get(row.source)
        if out:
            d.dot(x - 2, y, 4.6, fill=PAPER, stroke=f"var(--{mark.colour})" if mark else INK, width=2)
            d.path(f"M{number(x + 10)} {number(y - 7)}q7 7 0 14")
        elif mark is not None:
            d.marker(mark.marker, x, y, f"var(--{mark.colour})", 5.2)
        else:
            d.path(f"M{number(x - 6)} {number(y - 5)}l6 5l-6 5")  # from an output elsewhere on the drawing

    def _value(self, x: float, y: float, part: int) -> None:
        name, value = self.names.resistors[part], format_resistor(self.net.parts[part].resistance)
        wide = text_width(name, 13) + 5 + text_width(value, bold=True)
        self.d.text(x - wide / 2, y, name, fill=SOFT, size=13, halo=True)
        self.d.text(x + wide / 2, y, value, anchor="end", bold=True, halo=True)

    def _feedback(self, b: _Block, cell: Cell, at: CellPoint | None, xn: float, y_minus: float) -> None:
        d, c = self.d, self.net.cells[b.k]
        if cell.feedback is None and not cell.feedback_capacitance:
            return
        yf = y_minus - 54.0
        middle = (xn + b.out) / 2
        yc = yf - 27.0 if cell.feedback is not None else yf
        d.path(f"M{number(xn)} {number(y_minus)}V{number(yf)}H{number(b.out)}V{number(b.middle)}")
        d.dot(xn, y_minus)
        d.dot(b.out, b.middle)
        if cell.feedback is not None:
            self._resistor(middle, yf)
            self._value(middle, yf + 22, c.feedback)
            if at is not None and abs(at.feedback_current) > 1e-12:
                down = at.feedback_current > 0
                tip = b.middle - 42 + (5 if down else -5)
                d.path(f"M{number(b.out)} {number(tip)}l-4.2 {-10 if down else 10}h8.4z", fill=INK, width=0.5)
                d.text(b.out + 9, b.middle - 38, format_quantity(abs(at.feedback_current), "A"), fill=SOFT, size=13)
        if cell.feedback_capacitance:
            if cell.feedback is not None:
                d.path(
                    f"M{number(xn + 20)} {number(yf)}V{number(yc)}H{number(middle - 3)}"
                    f"M{number(middle + 3)} {number(yc)}H{number(b.out - 20)}V{number(yf)}"
                )  # fmt: skip
                d.dot(xn + 20, yf)
                d.dot(b.out - 20, yf)
            d.path(
                f"M{number(middle - 3)} {number(yc - 8)}v16M{number(middle + 3)} {number(yc - 8)}v16", width=2
            )  # fmt: skip
            d.text(middle + 12, yc - 5, self.names.capacitors[b.k], fill=SOFT, size=13)
            d.text(middle + 34, yc - 5, format_quantity(cell.feedback_capacitance, "", 3, trim=True), bold=True)

    def _op_amp(self, b: _Block, at: CellPoint | None) -> None:
        d, m = self.d, b.middle
        y_minus, y_plus = b.pins
        t0, t1, half = b.amp, b.amp + _WIDE, 42.0
        d.path(
            f"M{number(t0)} {number(m - half)}V{number(m + half)}L{number(t1)} {number(m)}Z", fill=PAPER, width=2,
            stroke_linejoin="miter",
        )  # fmt: skip
        d.path(f"M{number(t0 + 7)} {number(y_minus)}h10M{number(t0 + 7)} {number(y_plus)}h10m-5 -5v10")
        d.text(t0 + 35, m + 5, self.names.op_amps[b.k], anchor="middle", fill=SOFT, size=13)
        rx = t0 + 26.0
        ry = half * (1 - 26.0 / _WIDE)
        up, down = m - half - 1, m + half + 4
        d.path(
            f"M{number(rx)} {number(m - ry)}V{number(up)}m-7 0h14M{number(rx)} {number(m + ry)}V{number(down)}m-7 0h14"
        )
        s = self.design.supply
        d.text(rx + 12, m - half + 6, format_fixed(s.high, "V", 2, sign=True), size=13)
        d.text(rx + 12, m + half + 8, format_fixed(s.low, "V", 2, sign=True) if s.low else f"0{THIN}V", size=13)

    def _output(self, b: _Block, blocks: list[_Block], at: CellPoint | None) -> None:
        d, m = self.d, b.middle
        d.line(b.amp + _WIDE, m, b.out, m)
        last = b.k == len(blocks) - 1
        after = blocks[b.k + 1] if not last else None
        if after is not None and any(row.straight for row in after.rows):
            if at is not None:
                self._volts_out(b.out + 20, m - 8, at, "start", 14)
            return
        if not last:
            d.line(b.out, m, b.out + 30, m)
            d.dot(b.out + 34, m, 4, fill=PAPER, stroke=INK)
            d.text(b.out + 44, m + 5, cell_name(b.k), bold=True)
            if at is not None:
                self._volts_out(b.out + 12, m - 10, at, "start", 14)
            return
        end = b.out + 150
        d.line(b.out, m, end - 4, m)
        self._load(b)
        d.dot(end - 4, m, 4, fill=PAPER, stroke=INK)
        if at is not None:
            self._volts_out(end, m - 11, at, "end", 25)
            if self.point.clipped != "no":
                d.text(end, m - 38, f"clipped {self.point.clipped}", anchor="end", bold=True, fill=RED)

    def _volts_out(self, x: float, y: float, at: CellPoint, anchor: str, size: float) -> None:
        fill = RED if at.clipped != "no" else INK
        self.d.text(x, y, format_fixed(at.output_voltage, "V"), anchor=anchor, size=size, bold=True, fill=fill)

    def _load(self, b: _Block) -> None:
        load, d, m = self.design.load, self.d, b.middle
        if not load.resistance and not load.capacitance:
            return
        x, top = b.out + 32.0, m + 14.0
        d.dot(x, m)
        d.line(x, m, x, top)
        if load.resistance:
            self._resistor_down(x, top)
        else:
            d.path(f"M{number(x)} {number(top)}v14m-8 0h16m-16 6h16m-8 0v14")
        d.line(x, top + 34, x, top + 43)
        self._ground(x, top + 43)
        words = [format_quantity(load.resistance, "Ω", 3, trim=True)] if load.resistance else []
        if load.capacitance:
            words.append(format_quantity(load.capacitance, "F", 3, trim=True))
        d.text(x + 14, top + 10, "load", size=13)
        d.text(x + 14, top + 26, " ∥ ".join(words), size=13)
        if self.point is not None and load.resistance:
            d.text(x + 14, top + 42, format_quantity(self.point.load_current, "A"), fill=SOFT, size=13)

    # ------------------------------------------------------------ symbols

    def _resistor(self, x: float, y: float) -> None:
        if self.symbols == "iec":
            self.d.rect(x - 24, y - 6.5, 48, 13, fill=PAPER, stroke=INK)
            return
        self.d.line(x - 24, y, x + 24, y, stroke=PAPER, width=3)
        zigzag = "l4 -7l8 14l8 -14l8 14l8 -14l8 14l4 -7"
        self.d.path(f"M{number(x - 24)} {number(y)}{zigzag}", stroke_linejoin="miter")

    def _resistor_down(self, x: float, y: float) -> None:
        if self.symbols == "iec":
            self.d.rect(x - 6.5, y, 13, 34, fill=PAPER, stroke=INK)
            return
        zigzag = "l7 3l-14 5.6l14 5.6l-14 5.6l14 5.6l-14 5.6l7 3"
        self.d.path(f"M{number(x)} {number(y)}{zigzag}", stroke_linejoin="miter")

    def _ground(self, x: float, y: float) -> None:
        self.d.path(f"M{number(x - 9)} {number(y)}h18m-14.5 4h11m-7.5 4h4")

    def _arrow(self, x: float, y: float, direction: int) -> None:
        tip = x + 5 * direction
        self.d.path(f"M{number(tip)} {number(y)}l{-10 * direction} -4.2v8.4z", fill=INK, width=0.5)


def _short(name: str) -> str:
    return shortened(name, _NAME_ROOM, bold=True)


__all__ = ["SYMBOLS", "schematic"]
