"""The schematic: what it is made of, and the voltages and currents live on it."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from sumwright.engine.arrangement import able, arrangement_of
from sumwright.engine.stage import ARRANGEMENTS, Cell
from sumwright.quantity import format_exact, format_resistor

from .rows import rows


def show(bench: Any) -> dict[str, Any]:
    """The cells with their parts, and what flows in them."""
    analysis = bench.analysis
    design, dc = analysis.design, analysis.dc
    cells = []
    for fixed, point in zip(_fixed(design.cells), dc.cells, strict=True):
        cells.append({
            **fixed, "vm": point.minus_voltage, "vp": point.plus_voltage, "vo": point.output_voltage,
            "io": point.output_current, "ifb": point.feedback_current, "legs": point.leg_currents,
            "img": point.minus_ground_current, "ipg": point.plus_ground_current, "clipped": point.clipped,
            "limited": point.at_current_limit,
        })  # fmt: skip
    return {
        "rows": [list(r) for r in rows(design.cells, design.signal_names)], "cells": cells,
        "output": dc.output, "unclipped": dc.unclipped_output, "clipped": dc.clipped,
        "load": {"fitted": design.load.resistance is not None or design.load.capacitance > 0,
                 "resistance": design.load.resistance is not None, "i": dc.load_current},
        "supply": [design.supply.high, design.supply.low], "symbols": bench.symbols,
        "arrangement": arrangement_of(design.cells), "arrangements": list(ARRANGEMENTS), "able": list(able(design)),
        "unplugged": list(bench.unplugged),
    }  # fmt: skip


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
