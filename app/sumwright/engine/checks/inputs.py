"""Do the op amp's inputs stay inside its common-mode range?"""

from __future__ import annotations

from .check import Check, choices, down, half_supply, judged, of_cell, rail_for, volts

FOLLOWS_VALUES = False


def checks(analysis) -> tuple[Check, ...]:
    """Both inputs of each cell over all corners against the common-mode limits at the worst rails."""
    found = []
    for k, room in enumerate(analysis.headroom.cells):
        for side in (1, -1):
            found.append(_one(analysis.design, k, room, side))
    return tuple(found)


def _one(design, k, room, side):
    key, where = of_cell(design, k)
    high = side > 0
    reach = room.inputs_highest if high else room.inputs_lowest
    limit = room.common_mode_limit_high if high else room.common_mode_limit_low
    margin = room.common_mode_margin_high if high else room.common_mode_margin_low
    return judged(
        f"inputs_{'high' if high else 'low'}{key}",
        f"Inputs to {'+' if high else '−'} rail{where}",
        "V", reach, limit, margin, half_supply(design),
        f"The inputs ride at {volts(reach)} at the {'highest' if high else 'lowest'} corner; limit {volts(limit)}.",
        lambda goal: _cure(design, k, side, reach, limit, goal),
    )  # fmt: skip


def _cure(design, k, side, reach, limit, goal):
    distance = design.op_amp.common_mode_high if side > 0 else design.op_amp.common_mode_low
    name = "+ rail" if side > 0 else "− rail"
    rail = rail_for(design, side, reach + side * distance, goal)
    left = down(side * (limit - reach) + distance - goal)
    reaching = f"to within {volts(left, 2)} of the {name}" if left >= 0 else f"{volts(-left, 2)} beyond the {name}"
    return choices(
        "" if rail is None else f"{name} to {volts(rail, 2)}",
        f"an op amp whose inputs work {reaching}",
        "the two-stage arrangement, whose inputs stay at 0 V" if design.cells[k].plus else "",
    )
