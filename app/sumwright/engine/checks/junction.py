"""Does the op amp's chip stay below its highest temperature?"""

from __future__ import annotations

from sumwright.quantity import format_fixed, format_quantity

from .check import Check, choices, down, down_figures, judged, unknown

FOLLOWS_VALUES = False
KEY, TITLE = "junction", "Junction"


def checks(analysis) -> tuple[Check, ...]:
    """Junction temperature of the hottest op amp at the hottest ambient."""
    design, amp = analysis.design, analysis.design.op_amp
    hot = max(analysis.power.op_amps, key=lambda a: a.dissipation_most if a.junction is None else a.junction)
    watts = format_quantity(hot.dissipation_most, "W")
    if amp.thermal_resistance is None or hot.junction is None:
        why = f"Thermal resistance of the package is not given; the op amp takes {watts} at worst."
        return (unknown(KEY, TITLE, "°C", why, "Type the thermal resistance under op amp to know."),)
    at = format_fixed(hot.junction, "°C", 1)
    ambient = design.ambient.high
    package = format_quantity((hot.junction - ambient) / amp.thermal_resistance, "W")
    if amp.junction_most is None:
        why = f"The junction reaches {at} with {package} in the package; its highest temperature is not given."
        return (unknown(KEY, TITLE, "°C", why, "Type the highest junction temperature under op amp.", hot.junction),)
    return (
        judged(
            KEY, TITLE, "°C", hot.junction, amp.junction_most, amp.junction_most - hot.junction,
            max(amp.junction_most - ambient, 0.0) or abs(amp.junction_most),
            f"The junction reaches {at} with {package} in the package at {ambient:g} °C; its limit is {amp.junction_most:g} °C.",
            lambda goal: _cure(design, hot, goal),
        ),
    )  # fmt: skip


def _cure(design, hot, goal):
    amp, ambient = design.op_amp, design.ambient.high
    rise = hot.junction - ambient
    allowed = amp.junction_most - goal - ambient
    cooler = down(amp.junction_most - goal - rise, 0)
    if allowed <= 0 or rise <= 0:
        return f"an ambient below {cooler:g} °C"
    return choices(
        f"a package of {down_figures(amp.thermal_resistance * allowed / rise):g} K/W or less",
        f"an ambient below {cooler:g} °C",
        f"lower rails or a lighter load: {format_quantity(rise / amp.thermal_resistance, 'W')} in the package must "
        f"become {format_quantity(down_figures(allowed / amp.thermal_resistance), 'W')}",
    )
