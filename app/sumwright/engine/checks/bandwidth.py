"""Do small signals get through at the highest frequency that matters?"""

from __future__ import annotations

import math

from sumwright.engine.stage import replace
from sumwright.quantity import format_quantity

from .check import Check, choices, down_figures, endless, judged, unknown, up_figures
from .wanted_band import wanted_band
from .what_if import slowest

FOLLOWS_VALUES = False
KEY, TITLE = "bandwidth", "Bandwidth"


def checks(analysis) -> tuple[Check, ...]:
    """The lowest -3 dB frequency of any signal against the frequency wanted."""
    need, said = wanted_band(analysis.design)
    known = [s for s in analysis.ac.signals if s.bandwidth_3db is not None and s.name not in analysis.unplugged]
    if not known:
        why = "No signal falls by 3 dB" + (f"; {said}." if said else ".")
        return (endless(KEY, TITLE, "Hz", need, why),)
    worst = min(known, key=lambda s: s.bandwidth_3db)
    band = worst.bandwidth_3db
    reached = f"'{worst.name}' is 3 dB down at {format_quantity(band, 'Hz')}"
    if need is None:
        return (
            unknown(
                KEY, TITLE, "Hz", f"{reached}; no frequency is asked for.", "Type the bandwidth wanted under target, or "
                "a signal's highest frequency.", band,
            ),
        )  # fmt: skip
    return (
        judged(
            KEY, TITLE, "Hz", band, need, band - need, band, f"{reached}; {said}.",
            lambda goal: _cure(analysis, band, need / (1 - 0.1 * (goal > 0))),
        ),
    )  # fmt: skip


def _cure(analysis, band, need):
    """A faster op amp or a smaller capacitor, each tried out on the stage before it is named."""
    design = analysis.design
    ways = []
    gbw = design.op_amp.gain_bandwidth
    for _ in range(4):
        gbw = up_figures(gbw * min(max(need / band, 1.02), 100.0))
        faster = replace(design, op_amp=replace(design.op_amp, gain_bandwidth=gbw))
        band = slowest(faster)
        if band is None or band >= need:
            ways.append(f"an op amp of {format_quantity(gbw, 'Hz', 2)} gain-bandwidth")
            break
    for k, cell in enumerate(design.cells):
        if cell.feedback and cell.feedback_capacitance:
            most = down_figures(1.0 / (2 * math.pi * cell.feedback * need))
            if most < cell.feedback_capacitance:
                where = f" of cell {k + 1}" if len(design.cells) > 1 else ""
                ways.append(f"the feedback capacitor{where} below {format_quantity(most, 'F', 2)}")
    return choices(*ways) or "a faster op amp together with a smaller feedback capacitor"
