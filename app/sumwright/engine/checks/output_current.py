"""Can the op amp source and sink what its load and its own network take?"""

from __future__ import annotations

from functools import partial

import numpy as np

from sumwright.quantity import format_quantity, format_resistor

from .check import Check, choices, judged, of_cell, up, up_figures

FOLLOWS_VALUES = False


def checks(analysis) -> tuple[Check, ...]:
    """Largest output current of each cell over all corners against what the op amp gives."""
    most = analysis.design.op_amp.output_current
    found = []
    for k, room in enumerate(analysis.headroom.cells):
        key, where = of_cell(analysis.design, k)
        peak = room.output_current_peak
        found.append(
            judged(
                f"output_current{key}", f"Output current{where}", "A", peak, most, most - peak, most,
                f"Peak {format_quantity(peak, 'A')} of {format_quantity(most, 'A')}.",
                partial(_cure, analysis, k),
            )
        )  # fmt: skip
    return tuple(found)


def _cure(analysis, k, goal):
    """Load and network currents at the worst corner, and which of them can give way."""
    net, linear = analysis.net, analysis.linear
    n = net.signal_count
    row, fixed = linear.current[k, :n], linear.current[k, n] * net.values[n]
    corners = (np.where(row >= 0, net.highs, net.lows), np.where(row >= 0, net.lows, net.highs))
    corner = max(corners, key=lambda v: abs(row @ v + fixed))
    total = float(row @ corner + fixed)
    out = float(linear.output[k, :n] @ corner + linear.output[k, n] * net.values[n])
    allowed = np.copysign(analysis.design.op_amp.output_current - goal, total)
    load = out * net.load_conductance if k == net.cell_count - 1 else 0.0
    network = total - load
    ways = []
    if load and (allowed - network) * out > 0:
        ways.append(f"a load of {format_resistor(up_figures(out / (allowed - network), 3))} or more")
    if network * total > 0 and (allowed - load) * network > 0:
        ways.append(f"the resistors of cell {k + 1} and the legs it drives × {up(network / (allowed - load)):.2f}")
    ways.append(f"an op amp that gives {format_quantity(up_figures(abs(total) + goal, 2), 'A', 2)}")
    return choices(*ways)
