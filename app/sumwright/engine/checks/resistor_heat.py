"""Does every resistor stay inside its derated rating?"""

from __future__ import annotations

from sumwright.quantity import format_quantity

from .check import Check, choices, judged, spoken, unknown, up

FOLLOWS_VALUES = False

# Ratings resistors are sold in [W], at 70 degC: common practice.
RATINGS = (0.0625, 0.1, 0.125, 0.25, 0.5, 1.0, 2.0, 3.0, 5.0, 10.0)


def checks(analysis) -> tuple[Check, ...]:
    """The resistor with least room: worst dissipation over the signals' ranges against its rating when hot."""
    design = analysis.design
    parts = analysis.power.resistors
    if not parts:
        return (unknown("resistor_heat", "Resistor heat", "W", "No resistor is fitted.", "Fit the legs."),)
    hot = max(parts, key=lambda r: r.dissipation_most - r.rating)
    return (
        judged(
            "resistor_heat", "Resistor heat", "W", hot.dissipation_most, hot.rating, hot.rating - hot.dissipation_most,
            hot.rating,
            f"The {spoken(hot.name)} takes {format_quantity(hot.dissipation_most, 'W')} at worst; rated "
            f"{format_quantity(hot.rating, 'W')} at {design.ambient.high:g} °C.",
            lambda goal: _cure(design, hot, goal),
        ),
    )  # fmt: skip


def _cure(design, hot, goal):
    derating = hot.rating / design.resistor.power
    if derating <= 0:
        return f"resistors that stand {design.ambient.high:g} °C, or a cooler place"
    # a tenth of the part's own new rating where the goal is to be clear
    need = hot.dissipation_most / derating / (0.9 if goal else 1.0)
    rating = next((r for r in RATINGS if r >= need), None)
    return choices(
        f"a {rating:g} W part for the {spoken(hot.name)}"
        if rating
        else f"several parts in series for the {spoken(hot.name)}",
        f"every resistor × {up(hot.dissipation_most / (hot.rating - goal)):.2f}",
    )
