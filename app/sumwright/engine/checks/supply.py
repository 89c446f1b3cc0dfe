"""Does the op amp work on the supply at both ends of its tolerance?"""

from __future__ import annotations

from .check import Check, judged, up, volts

FOLLOWS_VALUES = False


def checks(analysis) -> tuple[Check, ...]:
    """Total supply at its least and at its most against the op amp's range."""
    supply, amp = analysis.design.supply, analysis.design.op_amp
    spread = supply.tolerance * (abs(supply.high) + abs(supply.low))
    total = supply.high - supply.low
    most, least = total + spread, total - spread
    over, under = amp.supply_most - most, least - amp.supply_least
    allowance = amp.supply_most - amp.supply_least or amp.supply_most
    at_top = over <= under
    return (
        judged(
            "supply", "Supply", "V", most if at_top else least, amp.supply_most if at_top else amp.supply_least,
            min(over, under), allowance,
            f"Total supply {volts(least, 2)} to {volts(most, 2)}; the op amp works on {volts(amp.supply_least, 2)} to "
            f"{volts(amp.supply_most, 2)}.",
            lambda goal: _cure(supply, amp, at_top, most, least, goal),
        ),
    )  # fmt: skip


def _cure(supply, amp, at_top, most, least, goal):
    wanted = amp.supply_most - goal if at_top else amp.supply_least + goal
    factor = wanted / (most if at_top else least) if (most if at_top else least) > 0 else 0.0
    if factor <= 0:
        return f"an op amp that works on {volts(least, 2)} to {volts(most, 2)}"

    def rail(volt):
        # toward the middle of the range, whichever side that is
        return volts((up(volt * factor) if (volt > 0) != at_top else -up(-volt * factor)), 2)

    rails = " and ".join(
        f"{sign} rail to {rail(volt)}" for sign, volt in (("+", supply.high), ("−", supply.low)) if volt
    )
    return f"{rails}; or an op amp that works on {volts(least, 2)} to {volts(most, 2)}"
