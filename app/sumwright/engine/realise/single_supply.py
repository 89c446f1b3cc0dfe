"""Two op amps on one supply: the reference lifts both non-inverting nodes.

With a single supply an inverting first cell would have to swing below 0 V. Fed from the
reference through a divider, its non-inverting node sits at a bias that centres its output
between the rails, and the second cell's bias makes the wanted offset of the whole stage. The
weights do not see the dividers, so the proved best set for the signals alone stands, and
the two dividers are looked up so that the offset is met as well as their ratios allow.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sumwright.engine.arrangement import USUAL_LEG
from sumwright.engine.realise.best_set import search
from sumwright.engine.realise.legs import Ratios
from sumwright.engine.stage import REFERENCE, Cell, Design, Leg

KEPT = 12
FILLED = 0.9  # share of the supply that the first cell's output may swing through


def is_single(design: Design) -> bool:
    """Whether one rail is 0 V or on the same side as the other."""
    return design.supply.low >= 0 or design.supply.high <= 0


def biased_cells(design: Design, arrangement: str, values) -> list[tuple[Cell, ...]]:
    """Sets for a two-cell arrangement whose cells are biased from the reference; empty where that is not possible.

    Parameters
    ----------
    design : Design
        With a reference between the rails.
    arrangement : str
        `inverting-pair` or `two-stage`.
    values : (k,) array
        Resistors there are [ohm].
    """
    reference = design.reference
    if arrangement not in ("inverting-pair", "two-stage") or reference is None or not reference.voltage:
        return []
    bare = replace(design, target=replace(design.target, offset=0.0))
    outcome = search(bare, arrangement, values, seconds=2.0)
    ratios = Ratios(values, USUAL_LEG)
    found = []
    for cells in outcome.cells:
        lifted = _lifted(design, cells, ratios) if len(cells) == 2 else None
        if lifted is not None:
            found.append(lifted)
        if len(found) == KEPT:
            break
    return found


def _lifted(design: Design, cells, ratios: Ratios) -> tuple[Cell, ...] | None:
    """The cells with a divider from the reference on each non-inverting node, or None if the reference cannot lift them so far."""
    first, last = cells
    series = {s.name: s.source_resistance for s in design.signals}
    first_g = sum(1.0 / (x.resistance + series.get(x.source, 0.0)) for x in first.minus)
    last_g = sum(1.0 / (x.resistance + series.get(x.source, 0.0)) for x in last.minus)
    inner = next(x.resistance for x in last.minus if x.source not in series)
    first_gain, last_gain = 1.0 + first.feedback * first_g, 1.0 + last.feedback * last_g
    carried = last.feedback / inner  # of the first cell's output to the stage's
    volts, rs = design.reference.voltage, design.reference.source_resistance
    ranges = {s.name: (s.low, s.high) for s in design.signals}
    swing = [
        sorted(-first.feedback / (x.resistance + series[x.source]) * v for v in ranges[x.source]) for x in first.minus
    ]
    lowest, highest = sum(s[0] for s in swing), sum(s[1] for s in swing)
    middle = (design.supply.high + design.supply.low) / 2.0
    if highest - lowest > FILLED * (design.supply.high - design.supply.low):
        return None  # the first cell takes too much of the gain: its own output would not fit
    best = None
    # Bias the first output to the middle, or as near as lets the second divider reach the offset.
    for share in np.linspace(0.02, 0.98, 49):
        output = share * volts * first_gain
        want = (design.target.offset + carried * output) / (last_gain * volts)
        if not 0.0 < want < 1.0:
            continue
        miss = abs(output + (lowest + highest) / 2.0 - middle)
        if best is None or miss < best[0]:
            best = (miss, share)
    if best is None or best[0] + (highest - lowest) / 2.0 > 0.5 * (design.supply.high - design.supply.low):
        return None
    # Of the first dividers near that bias, the one whose second divider meets the offset best.
    made = ratios.bottom / (ratios.top + rs + ratios.bottom)
    order = np.argsort(made, kind="stable")
    options = []
    for k in np.argsort(np.abs(made - best[1]), kind="stable")[:200]:
        want = (design.target.offset + carried * made[k] * volts * first_gain) / (last_gain * volts)
        if want >= 1.0 or want <= 0.0:
            continue
        at = int(np.clip(np.searchsorted(made[order], want), 1, order.size - 1))
        for j in (order[at - 1], order[at]):
            options.append((abs(made[j] - want), int(k), int(j)))
    if not options:
        return None
    _, k, j = min(options)
    return (_biased(first, (ratios.top[k], ratios.bottom[k])), _biased(last, (ratios.top[j], ratios.bottom[j])))


def _biased(cell: Cell, divider) -> Cell:
    upper, lower = divider
    return replace(cell, plus=(Leg(REFERENCE, float(upper)),), plus_ground=float(lower))
