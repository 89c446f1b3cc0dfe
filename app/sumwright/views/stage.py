"""The schematic: what it is made of, and the voltages and currents live on it."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, NamedTuple

from sumwright.engine.arrangement import able, arrangement_of
from sumwright.engine.stage import ARRANGEMENTS, Cell
from sumwright.quantity import format_exact, format_resistor
from sumwright.rows import rows


def show(bench: Any) -> dict[str, Any]:
    """The cells with their parts; what flows in them is in `live`."""
    design = bench.analysis.design
    return {
        "rows": [list(r) for r in rows(design.cells, design.signal_names)], "cells": _fixed(design.cells),
        "load": {"fitted": design.load.resistance is not None or design.load.capacitance > 0,
                 "resistance": design.load.resistance is not None},
        "supply": [design.supply.high, design.supply.low], "symbols": bench.symbols,
        "arrangement": bench.arrangement, "made": arrangement_of(design.cells), "arrangements": list(ARRANGEMENTS),
        "able": list(_able(_Wishes(tuple((s.name, s.weight, s.source_resistance) for s in design.signals),
                                   design.target.offset, design.reference), design)),
        "unplugged": list(bench.unplugged),
    }  # fmt: skip


def live(bench: Any) -> dict[str, Any]:
    """The voltages and currents, cell by cell."""
    dc = bench.analysis.dc
    return {
        "output": dc.output, "over": abs(dc.unclipped_output - dc.output), "clipped": dc.clipped, "load": dc.load_current,
        "cells": [
            {
                "vm": p.minus_voltage, "vp": p.plus_voltage, "vo": p.output_voltage, "ifb": p.feedback_current,
                "legs": p.leg_currents, "img": p.minus_ground_current, "ipg": p.plus_ground_current,
                "clipped": p.clipped, "limited": p.at_current_limit,
            }
            for p in dc.cells
        ],
    }  # fmt: skip


class _Wishes(NamedTuple):
    """What decides which arrangements can make the weights."""

    weights: tuple
    offset: float
    reference: Any


_known: dict[_Wishes, tuple[str, ...]] = {}


def _able(wishes: _Wishes, design: Any) -> tuple[str, ...]:
    """The arrangements that can; remembered, for a drag asks again and again."""
    if wishes not in _known:
        if len(_known) > 500:
            _known.clear()
        _known[wishes] = able(design)
    return _known[wishes]


@lru_cache(maxsize=256)
def _fixed(cells: tuple[Cell, ...]) -> tuple[dict[str, Any], ...]:
    """What a move of a slider does not change."""

    def legs(old):
        return [[leg.source, format_resistor(leg.resistance), leg.resistance == 0] for leg in old]

    def one(ohm):
        return None if ohm is None else "0" if ohm == 0 else format_resistor(ohm)

    return tuple(
        {
            "minus": legs(c.minus), "plus": legs(c.plus), "minus_ground": one(c.minus_ground),
            "plus_ground": one(c.plus_ground), "feedback": one(c.feedback),
            "cf": format_exact(c.feedback_capacitance) if c.feedback_capacitance else "",
        }
        for c in cells
    )  # fmt: skip
