"""The design a first visit lands on: an invented scenario, finished and alive."""

from __future__ import annotations

from sumwright.engine.catalogue import find
from sumwright.engine.stage import (
    Ambient,
    Cell,
    Design,
    Leg,
    Load,
    OpAmp,
    Reference,
    ResistorKind,
    Signal,
    Supply,
    Target,
)

TITLE = "Grain hopper, four corners"


def is_demo(design: Design) -> bool:
    """Whether this is still the invented hopper: the sheet says so until it gets a title of its own."""
    return design.title == TITLE


def op_amp() -> OpAmp:
    """The generic JFET-input class of the list that comes with the project."""
    entry = find("JFET input, 3 MHz")
    assert entry is not None, "the list of op amps has lost the demonstration's class"
    return entry.op_amp


def design() -> Design:
    """Four load cells under the corners of a grain hopper and a tare wheel, summed for a 0 to 5 V logger.

    Invented: there is no such hopper, and its weights, ranges and readings are nobody's data.
    """
    return Design(
        title=TITLE,
        signals=(
            Signal("tare", -0.18, 0.0, 2.5, 0.42, 100.0, 10.0),
            Signal("north", 0.14, 0.0, 10.0, 7.6, 100.0, 10.0),
            Signal("east", 0.10, 0.0, 10.0, 8.5, 100.0, 10.0),
            Signal("south", 0.09, 0.0, 10.0, 9.9, 100.0, 10.0),
            Signal("west", 0.11, 0.0, 10.0, 9.7, 100.0, 10.0),
        ),
        target=Target(offset=0.5, low=0.0, high=5.0, accuracy=0.04, noise=1e-3, bandwidth=100.0),
        reference=Reference(2.5, 0.0, 0.002),
        supply=Supply(7.5, -7.5, 0.05),
        load=Load(1e4, 1e-10),
        ambient=Ambient(25.0, -10.0, 50.0),
        resistor=ResistorKind("E192", 0.001, 25e-6, 0.125, 1e3, 1e6),
        op_amp=op_amp(),
        stray_capacitance=5e-12,
        noise_band=(0.1, 1e5),
        cells=(
            Cell(
                minus=(Leg("tare", 68.1e3),),
                plus=(
                    Leg("north", 68.1e3),
                    Leg("east", 95.3e3),
                    Leg("south", 106e3),
                    Leg("west", 86.6e3),
                    Leg("reference", 47.5e3),
                ),
                plus_ground=17.6e3,
                feedback=12.3e3,
                feedback_capacitance=22e-12,
            ),
        ),
    )
