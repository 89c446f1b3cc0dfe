"""Is every loop far enough from oscillating?"""

from __future__ import annotations

from functools import partial

from sumwright.engine.compensation import ISOLATING, both_parts, isolated_margin
from sumwright.engine.stage import replace
from sumwright.quantity import format_quantity

from .check import Check, choices, endless, judged, of_cell, up_figures
from .what_if import response_of

FOLLOWS_VALUES = False
# Degrees; below it a step overshoots by more than a quarter. Common practice.
WANTED = 45.0


def checks(analysis) -> tuple[Check, ...]:
    """Phase margin of each cell against 45°."""
    found = []
    for k, cell in enumerate(analysis.ac.cells):
        key, where = of_cell(analysis.design, k)
        key, title = f"phase_margin{key}", f"Phase margin{where}"
        if cell.phase_margin is None:
            found.append(endless(key, title, "°", WANTED, "The loop gain never falls through 1; nothing can ring."))
            continue
        found.append(
            judged(
                key, title, "°", cell.phase_margin, WANTED, cell.phase_margin - WANTED, WANTED,
                f"{_degrees(cell.phase_margin)} at {format_quantity(cell.crossover, 'Hz')}; wanted {WANTED:.0f}°.",
                partial(_cure, analysis, k),
            )
        )  # fmt: skip
    return tuple(found)


def _degrees(margin):
    return f"{margin:.0f}°".replace("-", "−")


def _cure(analysis, k, goal):
    """A feedback capacitor, a resistor before the load, or both: each tried out on the stage."""
    design = analysis.design
    ways = []
    if size := _capacitor(analysis, k, WANTED + goal):
        capacitance, margin = size
        ways.append(f"{_farads(capacitance)} across the feedback of cell {k + 1}: {_degrees(margin)}")
    if design.load.capacitance and k == len(design.cells) - 1:
        load = f"between the output and its {format_quantity(design.load.capacitance, 'F')} load"
        tried = ((r, isolated_margin(design, r)[0]) for r in ISOLATING)
        if found := next(((r, m) for r, m in tried if m is not None and m >= WANTED + goal), None):
            ways.append(f"{format_quantity(found[0], 'Ω', 2, trim=True)} {load}: {_degrees(found[1])}")
        elif not ways and (both := both_parts(design, WANTED + goal)):
            ohms = format_quantity(both.resistor, "Ω", 2, trim=True)
            ways.append(
                f"{_farads(both.value)} across the feedback of cell {k + 1} and {ohms} {load}: {_degrees(both.phase_margin)}"
            )
    return choices(*ways) or "smaller resistors at the inverting node, or an op amp of less gain-bandwidth"


def _farads(capacitance):
    return format_quantity(capacitance, "F", 2, trim=True)


def _capacitor(analysis, k, wanted):
    """The smallest tried feedback capacitance [F] that brings the margin, and that margin [°]."""
    design, cell = analysis.design, analysis.design.cells[k]
    if not cell.feedback:
        return None
    amp = design.op_amp
    input_capacitance = amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance
    # Equal time constants to both sides of the node cancel: C_f = C_in (R_1 ‖ ...) / R_f (flat noise gain).
    noise_gain = analysis.ac.cells[k].noise_gain
    neutral = input_capacitance / max(noise_gain - 1.0, 1e-3)
    for share in (0.25, 0.5, 1.0, 2.0, 4.0, 8.0):
        capacitance = up_figures(max(neutral * share, cell.feedback_capacitance * (1 + share), 1e-13))
        cells = (*design.cells[:k], replace(cell, feedback_capacitance=capacitance), *design.cells[k + 1 :])
        margin = response_of(replace(design, cells=cells)).cells[k].phase_margin
        if margin is not None and margin >= wanted:
            return capacitance, margin
    return None
