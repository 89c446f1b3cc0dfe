"""Does every output stay clear of its rails at the extreme corners?"""

from __future__ import annotations

from .check import Check, choices, down, half_supply, judged, of_cell, rail_for, volts

FOLLOWS_VALUES = False


def checks(analysis) -> tuple[Check, ...]:
    """Swing to both rails, each cell: extremes over all corners against the limits of the output."""
    found = []
    for k, room in enumerate(analysis.headroom.cells):
        for side in (1, -1):
            found.append(_one(analysis, k, room, side))
    return tuple(found)


def _one(analysis, k, room, side):
    design = analysis.design
    key, where = of_cell(design, k)
    high = side > 0
    reach = room.highest if high else room.lowest
    limit = room.limit_high if high else room.limit_low
    margin = room.margin_high if high else room.margin_low
    return judged(
        f"swing_{'high' if high else 'low'}{key}",
        f"Swing to {'+' if high else '−'} rail{where}",
        "V", reach, limit, margin, half_supply(design),
        f"{'Highest' if high else 'Lowest'} corner {volts(reach)}; limit {volts(limit)}.",
        lambda goal: _cure(analysis, k, room, side, reach, limit, goal),
    )  # fmt: skip


def _cure(analysis, k, room, side, reach, limit, goal):
    design, amp = analysis.design, analysis.design.op_amp
    rail_name = "+ rail" if side > 0 else "− rail"
    current = max(room.current_high, 0.0) if side > 0 else max(-room.current_low, 0.0)
    dropout = amp.dropout_high if side > 0 else amp.dropout_low
    lost = dropout + amp.dropout_resistance * current
    rail = rail_for(design, side, reach + side * lost, goal)
    # what is left between the output's extreme and the rail at its worst, for the op amp to lose
    left = down(side * (limit - reach) + dropout - goal)
    return choices(
        "" if rail is None else f"{rail_name} to {volts(rail, 2)}",
        f"an op amp that swings within {volts(left, 2)} of it" if left > 0 else "",
        _smaller(analysis, k, reach, limit - side * goal),
    )


def _smaller(analysis, k, reach, allowed):
    """By how much the signals' part of this output must shrink, the offset left alone."""
    cells = analysis.net.cell_count
    n = analysis.net.signal_count
    still = float(analysis.linear.output[k, n] * analysis.net.values[n])
    if reach == still or (allowed - still) / (reach - still) <= 0:
        # taking away more offset than there is would only move the trouble to the other rail
        enough = still * (reach - allowed) > 0 and abs(reach - allowed) <= abs(still)
        return f"less offset by {volts(abs(reach - allowed), 2)}" if k == cells - 1 and enough else ""
    factor = down((allowed - still) / (reach - still))
    if factor <= 0:
        return ""
    if k == cells - 1:
        return f"weights × {factor:.2f}"
    return f"feedback of cell {k + 1} × {factor:.2f} with the legs from it × {factor:.2f}, which keeps the weights"
