"""The letter and number each part carries on the drawing, the board and the parts list.

Class letters R, C and U as IEEE 315-1975, clause 22, gives them for resistors,
capacitors and integrated circuits (from memory). One numbering for every document,
so that R3 in the report is R3 in the parts list.
"""

from __future__ import annotations

from typing import NamedTuple

from .nodes import Network
from .stage import Design

_LETTERS = "ABCDEFGHIJKLMNOP"


class Designators(NamedTuple):
    """Names of the fitted parts; "" where there is none."""

    resistors: tuple[str, ...]  # by `Network.parts`; "" for a leg of 0 ohm, which is a wire
    capacitors: tuple[str, ...]  # by cell, across the feedback resistor
    op_amps: tuple[str, ...]  # by cell; `U1A`, `U1B` where a package holds several


def designators(design: Design, net: Network | None = None) -> Designators:
    """Designators of a realised design: resistors in the order of `Network.parts`, the rest cell by cell."""
    net = Network(design) if net is None else net
    resistors, count = [], 0
    for part in net.parts:
        if part.resistance > 0:
            count += 1
        resistors.append(f"R{count}" if part.resistance > 0 else "")
    capacitors, count = [], 0
    for cell in design.cells:
        fitted = cell.feedback_capacitance > 0
        count += fitted
        capacitors.append(f"C{count}" if fitted else "")
    per = max(1, design.op_amp.per_package)
    op_amps = [
        f"U{k // per + 1}" + (_LETTERS[k % per] if 1 < per <= len(_LETTERS) else "") for k in range(len(design.cells))
    ]
    return Designators(tuple(resistors), tuple(capacitors), tuple(op_amps))


__all__ = ["Designators", "designators"]
