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


def broken(design: Design, fault: str, part: str, value: float = 10.0) -> Design:
    """The design with one fault, by editing the drawing alone: no code of the bench is used.

    `value` multiplies the resistor of a wrong value, and is ohms for the others that take one. Faults that
    cannot be drawn (a dead op amp, inputs exchanged) raise KeyError.
    """

    def cells(change):
        return replace(design, cells=tuple(change(k, c) for k, c in enumerate(design.cells)))

    def legs(change):
        return cells(
            lambda k, c: replace(
                c,
                minus=tuple(x for leg in c.minus for x in change(k, leg)),
                plus=tuple(x for leg in c.plus for x in change(k, leg)),
            )
        )

    def one_cell(**fields):
        at = int(part[5:]) - 1
        return cells(lambda k, c: replace(c, **{n: f(c) for n, f in fields.items()}) if k == at else c)

    if fault == "none":
        return design
    if fault == "leg open":
        return legs(lambda k, x: () if x.source == part else (x,))
    if fault == "leg shorted":
        return legs(lambda k, x: (replace(x, resistance=1e-6),) if x.source == part else (x,))
    if fault == "leg wrong value":
        return legs(lambda k, x: (replace(x, resistance=x.resistance * value),) if x.source == part else (x,))
    if fault == "wrong input":

        def moved(k, c):
            minus, plus = list(c.minus), list(c.plus)
            for mine, other in ((minus, plus), (plus, minus)):
                for x in [x for x in mine if x.source == part]:
                    mine.remove(x)
                    if other is not plus or c.plus_ground != 0:  # a leg to the tied node goes to ground
                        other.append(x)
                    return replace(c, minus=tuple(minus), plus=tuple(plus))
            return c

        return cells(moved)
    if fault == "source resistance high":
        return replace(
            design, signals=tuple(replace(s, source_resistance=value) if s.name == part else s for s in design.signals)
        )
    if fault == "legs swapped":
        a, b = part.split(", ")
        ohm = {x.source: x.resistance for c in design.cells for x in (*c.minus, *c.plus)}
        ohm[a], ohm[b] = ohm[b], ohm[a]
        return legs(lambda k, x: (replace(x, resistance=ohm[x.source]),))
    if fault == "feedback open":
        return one_cell(feedback=lambda c: None)
    if fault == "feedback shorted":
        return one_cell(feedback=lambda c: 1e-6)
    if fault == "feedback wrong value":
        return one_cell(feedback=lambda c: c.feedback * value)
    if fault == "minus ground missing":
        return one_cell(minus_ground=lambda c: None)
    if fault == "plus ground missing":
        return one_cell(plus_ground=lambda c: None)
    if fault == "reference missing":
        return replace(design, reference=replace(design.reference, voltage=0.0))
    if fault == "rail missing":
        return replace(design, supply=replace(design.supply, **{part: 0.0}))
    if fault == "output overloaded":
        return replace(design, load=replace(design.load, resistance=value))
    raise KeyError(fault)


def drawn_board(design: Design, rng) -> Design:
    """A board of the design with every resistor somewhere within its tolerance."""
    t = design.resistor.tolerance

    def off(x):
        return x * (1 + rng.uniform(-t, t)) if x else x

    def cell(c):
        return replace(
            c,
            minus=tuple(replace(leg, resistance=off(leg.resistance)) for leg in c.minus),
            plus=tuple(replace(leg, resistance=off(leg.resistance)) for leg in c.plus),
            minus_ground=off(c.minus_ground),
            plus_ground=off(c.plus_ground),
            feedback=off(c.feedback),
        )

    return replace(design, cells=tuple(cell(c) for c in design.cells))
