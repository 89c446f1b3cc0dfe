"""Stages for the bench tests: invented numbers, one for each arrangement, in preferred values."""

from __future__ import annotations

import math
from dataclasses import replace

from sumwright.engine.arrangement import exact_cells
from sumwright.engine.stage import Design, Load, OpAmp, Reference, ResistorKind, Signal, Supply, Target

AMP = OpAmp(
    name="general purpose", open_loop_gain=200e3, gain_bandwidth=1e6, second_pole=3e6, slew_rate=0.5e6,
    input_resistance=2e6, differential_capacitance=2e-12, common_mode_capacitance=2e-12, output_resistance=75.0,
    offset_voltage=2e-3, offset_drift=7e-6, bias_current=50e-9, offset_current=5e-9, cmrr=3e4, psrr=3e4,
    noise_voltage=20e-9, noise_voltage_corner=10.0, noise_current=0.5e-12, noise_current_corner=100.0,
    dropout_high=1.5, dropout_low=1.5, dropout_resistance=20.0, common_mode_high=1.5, common_mode_low=1.5,
    output_current=20e-3, supply_least=6.0, supply_most=36.0, supply_current=1e-3, thermal_resistance=120.0,
    junction_most=150.0, per_package=1,
)  # fmt: skip


def rounded(ohm: float, steps: int = 96) -> float:
    """The nearest value of 10**(k/steps), three figures: preferred-like, with no table needed."""
    if not ohm or math.isinf(ohm):
        return ohm
    k = round(steps * math.log10(ohm))
    decade = 10.0 ** math.floor(k / steps)
    return round(10 ** (k / steps) / decade, 2) * decade


def in_preferred(cells, steps=96):
    def cell(c):
        def one(x):
            return None if x is None else rounded(x, steps)

        return replace(
            c,
            minus=tuple(replace(leg, resistance=rounded(leg.resistance, steps)) for leg in c.minus),
            plus=tuple(replace(leg, resistance=rounded(leg.resistance, steps)) for leg in c.plus),
            minus_ground=one(c.minus_ground),
            plus_ground=one(c.plus_ground),
            feedback=one(c.feedback),
        )

    return tuple(cell(c) for c in cells)


def stage(
    arrangement="mixed-sign", weights=(0.14, 0.1, 0.09, 0.11, -0.18), *, offset=0.5, tolerance=0.01, span=(0.0, 10.0),
    source=50.0, rails=12.0, load=10e3, feedback=20e3, steps=96, amp=AMP,
) -> Design:  # fmt: skip
    """A realised design of that arrangement with these weights."""
    names = ("north", "east", "south", "west", "tare", "wind", "drum", "lid", "a", "b", "c", "d", "e", "f", "g", "h")
    signals = tuple(
        Signal(names[i], w, *span, 0.5 * sum(span), source_resistance=source, frequency=10.0)
        for i, w in enumerate(weights)
    )
    design = Design(
        title="bench stage",
        signals=signals,
        supply=Supply(rails, -rails, 0.05),
        op_amp=amp,
        target=Target(offset=offset),
        reference=Reference(2.5, 0.0, 0.002) if offset else None,
        load=Load(load),
        resistor=ResistorKind(series="E96" if steps == 96 else "E24", tolerance=tolerance),
    )
    return replace(design, cells=in_preferred(exact_cells(design, arrangement, feedback=feedback), steps))


def every_arrangement():
    """One stage of each arrangement, with its name."""
    return {
        "inverting": stage("inverting", (-0.5, -0.25, -1.0, -0.4), offset=0.0, feedback=20e3),
        "inverting-pair": stage("inverting-pair", (0.5, 0.25, 0.2), offset=0.3),
        "non-inverting": stage("non-inverting", (0.3, 0.2, 0.25, 0.4), offset=0.0),
        "mixed-sign": stage(),
        "two-stage": stage("two-stage", (0.5, 0.25, -0.3, -0.2), offset=0.4),
    }
