"""Bias-current balance: what equal resistance at both inputs saves, and when it is pointless.

Source: superposition of bias and offset current at the two nodes of an op amp. That a resistor at the
non-inverting input cancels bias current, that parts with internal bias cancellation gain nothing from
it (Texas Instruments SBOS079, OPA277 data sheet, text on input bias current cancellation), and that FET
inputs need none, is what the data sheets say.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import REFERENCE, Design, cell_name
from sumwright.errors import InvalidDesign
from sumwright.quantity import format_quantity

CANCELLED = 0.5  # an offset current past this share of the bias current: the part cancels its own bias
WORTH = 0.1  # below this share of the offset-voltage error the saving does not show
BOLTZMANN = 1.380649e-23  # J/K


class Balance(NamedTuple):
    """One op amp's inputs; voltages are limits at that op amp's output."""

    cell: int
    minus_resistance: float  # ohm seen from the inverting input
    plus_resistance: float  # ohm seen from the non-inverting input
    offset_error: float  # V, from the offset voltage
    bias_error: float  # V, from bias current as the stage is
    current_error: float  # V, from offset current as the stage is
    resistor: float | None  # ohm, the preferred value that would balance; None where none can or none is needed
    balanced_error: float  # V, bias and offset current together once balanced
    noise_cost: float  # V/sqrt(Hz), what the resistor adds at the output, root-sum-square
    verdict: str  # "balanced", "worth it", "pointless", "harmful", "not by one resistor"
    why: str  # one sentence


def bias_balance(design: Design) -> tuple[Balance, ...]:
    """For every op amp of a realised design, what bias currents do and what one resistor would save.

    Parameters
    ----------
    design : Design
        With cells.

    Returns
    -------
    tuple of Balance
    """
    series = {s.name: s.source_resistance for s in design.signals}
    series[REFERENCE] = design.reference.source_resistance if design.reference is not None else 0.0
    return tuple(_cell(design, k, cell, series) for k, cell in enumerate(design.cells))


def _cell(design: Design, k: int, cell, series) -> Balance:
    op_amp = design.op_amp
    legs = [leg.resistance + series.get(leg.source, 0.0) for leg in cell.minus]
    to_ground = sum(1.0 / r for r in legs) + (1.0 / cell.minus_ground if cell.minus_ground else 0.0)
    if cell.feedback is None:
        raise InvalidDesign(
            f"{cell_name(k)} has no feedback resistor; an open loop has no bias balance.", f"cells[{k}].feedback"
        )
    gain = 1.0 + cell.feedback * to_ground
    minus = cell.feedback / gain
    plus_legs = [leg.resistance + series.get(leg.source, 0.0) for leg in cell.plus]
    tied = cell.plus_ground == 0 or any(r == 0 for r in plus_legs)
    siemens = 0.0 if tied else sum(1.0 / r for r in plus_legs) + (1.0 / cell.plus_ground if cell.plus_ground else 0.0)
    plus = 1.0 / siemens if siemens else 0.0

    offset_error = gain * op_amp.offset_voltage
    bias_error = gain * abs(plus - minus) * op_amp.bias_current
    current_error = gain * (plus + minus) / 2.0 * op_amp.offset_current
    balanced = gain * minus * op_amp.offset_current
    saved = bias_error + current_error - balanced
    kelvin = design.ambient.nominal + 273.15
    extra = max(minus - plus, 0.0)
    noise = gain * math.sqrt(4.0 * BOLTZMANN * kelvin * extra + (op_amp.noise_current * extra) ** 2)

    def result(resistor, verdict, why):
        return Balance(k, minus, plus, offset_error, bias_error, current_error, resistor, balanced, noise, verdict, why)

    close = abs(plus - minus) <= max(0.1, 2.0 * design.resistor.tolerance) * minus
    if close:
        return result(None, "balanced", "Both inputs see nearly the same resistance, so bias current cancels already.")
    if bias_error < WORTH * offset_error:
        return result(
            None, "pointless",
            f"Bias current makes {_volts(bias_error)} beside {_volts(offset_error)} of offset voltage; balancing would not show, "
            "as with FET inputs.",
        )  # fmt: skip
    if op_amp.offset_current >= CANCELLED * op_amp.bias_current:
        return result(
            None, "harmful",
            "The offset current is about as large as the bias current: the op amp cancels its own bias, and a resistor would only add "
            "error and noise.",
        )  # fmt: skip
    if plus > minus or not tied or cell.plus:
        return result(
            None, "not by one resistor",
            "The non-inverting node carries legs; equal resistance at both nodes is had by scaling one side's resistors.",
        )  # fmt: skip
    value = _nearest(design, minus)
    if saved <= 0 or value is None:
        return result(None, "pointless", "A balancing resistor would save nothing here.")
    return result(
        value, "worth it",
        f"{format_quantity(value, 'Ω', 4, trim=True)} from the non-inverting input to ground brings the currents' error from "
        f"{_volts(bias_error + current_error)} to {_volts(balanced)}; bypass it with a capacitor against its noise.",
    )  # fmt: skip


def _volts(value: float) -> str:
    return format_quantity(value, "V", 3)


def _nearest(design: Design, ohm: float) -> float | None:
    shop = values_within(design.resistor.series, ohm / 3, ohm * 3)
    return min((float(v) for v in shop), key=lambda v: abs(math.log(v / ohm)))
