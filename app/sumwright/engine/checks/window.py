"""Does the output stay inside the window that what follows can read?"""

from __future__ import annotations

from functools import partial

from .check import Check, down, half_supply, judged, unknown, up, volts

FOLLOWS_VALUES = False


def checks(analysis) -> tuple[Check, ...]:
    """Extremes of the stage's output over all corners against `target.low` and `target.high`."""
    target = analysis.design.target
    room = analysis.headroom.cells[-1]
    both = target.low is not None and target.high is not None and target.high > target.low
    allowance = target.high - target.low if both else half_supply(analysis.design)
    top = None if target.high is None else target.high - room.highest
    bottom = None if target.low is None else room.lowest - target.low
    found = []
    for name, end, reach, limit, margin in (
        ("top", "highest", room.highest, target.high, top),
        ("bottom", "lowest", room.lowest, target.low, bottom),
    ):
        key, title = f"window_{name}", f"Window, {name}"
        if limit is None or margin is None:
            found.append(
                unknown(
                    key, title, "V", f"{end.capitalize()} corner {volts(reach)}; no {name} of the window is given.",
                    f"Type the {end} output that what follows can read.", float(reach),
                )
            )  # fmt: skip
            continue
        found.append(
            judged(
                key, title, "V", reach, limit, margin, allowance,
                f"{end.capitalize()} corner {volts(reach)}; the window {'ends' if name == 'top' else 'begins'} at "
                f"{volts(limit)}.",
                partial(_cure, analysis, name),
            )
        )  # fmt: skip
    return tuple(found)


def _cure(analysis, name, goal):
    """Shift the offset where the other end has room for it; where it has not, shrink the weights too."""
    target, room = analysis.design.target, analysis.headroom.cells[-1]
    top = name == "top"
    verb = "lower" if top else "raise"
    if target.low is None or target.high is None:
        moved = goal - (target.high - room.highest if top else room.lowest - target.low)
        return f"{verb} the offset by {volts(up(moved, 3))}"
    above, below = target.high - room.highest, room.lowest - target.low
    even = 0.5 * abs(above - below)
    if above + below >= 2 * goal:
        return f"{verb} the offset by {volts(even)}: both ends then keep {volts(0.5 * (above + below))}"
    window, span = target.high - target.low, room.highest - room.lowest
    if window <= 2 * goal or span <= 0:
        return f"{verb} the offset by {volts(even)}"
    factor = down((window - 2 * goal) / span)
    # the signals' part shrinks about the offset as made; what is left over is shared by both ends
    made = float(analysis.dc.offset)
    offset = 0.5 * (target.low + target.high) - factor * (0.5 * (room.highest + room.lowest) - made)
    return f"weights × {factor:.2f} with the offset at {volts(target.offset + offset - made)}"
