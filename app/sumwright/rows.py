"""The rows of the drawing: one a leg, ordered as the wires meet the op amps.

A later cell's rows stand above an earlier one's, and at each op amp the minus legs
above the plus legs, as its inputs are drawn. A strip at the left of a row is the
wire that runs into that leg.
"""

from __future__ import annotations

from functools import lru_cache
from typing import NamedTuple

from sumwright.engine.stage import REFERENCE, Cell, Design
from sumwright.tokens import REFERENCE_HAND, Hand, hand


class Row(NamedTuple):
    """One wire from a strip into a leg."""

    source: str  # a signal, or `reference`
    cell: int
    node: str  # "minus" or "plus"


@lru_cache(maxsize=256)
def rows(cells: tuple[Cell, ...], names: tuple[str, ...]) -> tuple[Row, ...]:
    """The rows of a chain of cells whose signals, in the person's order, are `names`."""
    places = {name: k for k, name in enumerate((*names, REFERENCE))}
    found = []
    for c in reversed(range(len(cells))):
        for node in ("minus", "plus"):
            legs = [leg.source for leg in getattr(cells[c], node) if leg.source in places]
            found += [Row(source, c, node) for source in sorted(legs, key=places.__getitem__)]
    return tuple(found)


def hands_of(design: Design) -> dict[str, Hand]:
    """The hand of each signal by name, and of the reference: those a sheet gives, row by row, when it opens the design."""
    names = design.signal_names
    drawn = [row.source for row in rows(design.cells, names) if row.source != REFERENCE]
    order = dict.fromkeys((*drawn, *names))  # a signal without a leg comes last
    return {name: hand(i) for i, name in enumerate(order)} | {REFERENCE: REFERENCE_HAND}
