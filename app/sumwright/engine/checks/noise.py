"""Is the output quiet enough over the band?"""

from __future__ import annotations

import math

from sumwright.quantity import format_quantity

from .check import Check, choices, down_figures, judged, unknown

FOLLOWS_VALUES = False
KEY, TITLE = "noise", "Noise"


def checks(analysis) -> tuple[Check, ...]:
    """RMS output noise over `noise_band` against `target.noise`."""
    noise, wanted = analysis.noise, analysis.design.target.noise
    low, high = (format_quantity(f, "Hz", trim=True) for f in noise.band)
    said = f"{format_quantity(noise.rms, 'V')} RMS in {low} to {high}"
    if wanted is None:
        return (
            unknown(KEY, TITLE, "V", f"{said}; no limit is given.", "Type the noise allowed under target.", noise.rms),
        )
    return (
        judged(
            KEY, TITLE, "V", noise.rms, wanted, wanted - noise.rms, wanted,
            f"{said}; allowed {format_quantity(wanted, 'V', trim=True)}.",
            lambda goal: _cure(analysis, wanted - goal),
        ),
    )  # fmt: skip


def _cure(analysis, allowed):
    """What the largest contributor must become; powers add, so the others stay as they are."""
    noise, amp = analysis.noise, analysis.design.op_amp
    power = {"op amp voltage": 0.0, "op amp current": 0.0, "resistor": 0.0}
    for term in noise.terms:
        power["resistor" if term.kind == "source" else term.kind] += term.rms**2
    kind = max(power, key=lambda k: power[k])
    left = allowed**2 - (sum(power.values()) - power[kind])
    ways = []
    if left > 0:
        factor = math.sqrt(left / power[kind])
        if kind == "op amp voltage":
            quieter = format_quantity(down_figures(amp.noise_voltage * factor), "V/√Hz", 2)
            ways.append(f"an op amp of {quieter}")
        elif kind == "op amp current":
            # the current's voltage falls with the resistors, the resistors' own with their root
            ways.append(f"every resistor × {down_figures(factor):g}")
        else:
            ways.append(f"every resistor × {down_figures(factor**2):g}")
    else:
        share = power[kind] / sum(power.values())
        ways.append(f"less of everything, {kind} noise first ({share:.0%} of the power)")
    low, high = noise.band
    # white noise over a flat band: power goes with its width
    narrower = down_figures(low + (high - low) * (allowed / noise.rms) ** 2)
    ways.append(f"a filter after it, to about {format_quantity(narrower, 'Hz', 2)}")
    return choices(*ways)
