"""Can the output slew through its whole range at the highest frequency that matters?"""

from __future__ import annotations

import math

from sumwright.engine.response import full_power_bandwidth as full_power_of
from sumwright.quantity import format_quantity

from .check import Check, choices, down, endless, judged, unknown, up_figures
from .wanted_band import wanted_band

FOLLOWS_VALUES = False
KEY, TITLE = "full_power_band", "Full-power band"


def full_power_bandwidth(analysis) -> float | None:
    """Highest sine frequency over the last cell's whole range [Hz]; None where it has no range."""
    room = analysis.headroom.cells[-1]
    return full_power_of(analysis.design, room.highest - room.lowest)


def checks(analysis) -> tuple[Check, ...]:
    need, said = wanted_band(analysis.design)
    band = full_power_bandwidth(analysis)
    room = analysis.headroom.cells[-1]
    span = room.highest - room.lowest
    if band is None:
        return (endless(KEY, TITLE, "Hz", need, "The output does not move over the signals' ranges."),)
    slew = f"{analysis.design.op_amp.slew_rate / 1e6:.3g} V/µs carries {format_quantity(span, 'V')} peak to peak to "
    reached = slew + format_quantity(band, "Hz")
    if need is None:
        return (
            unknown(
                KEY, TITLE, "Hz", f"{reached}; no frequency is asked for.",
                "Type the bandwidth wanted under target, or a signal's highest frequency.", band,
            ),
        )  # fmt: skip
    return (
        judged(
            KEY, TITLE, "Hz", band, need, band - need, band, f"{reached}; {said}.",
            lambda goal: _cure(span, band, need / (1 - 0.1 * (goal > 0))),
        ),
    )  # fmt: skip


def _cure(span, band, need):
    rate = up_figures(math.pi * span * need / 1e6)
    factor = down(band / need)
    return choices(
        f"an op amp that slews at {rate:g} V/µs",
        f"weights × {factor:.2f}" if factor > 0 else "",
    )
