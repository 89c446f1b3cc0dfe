"""What a weighted-sum stage is: frozen descriptions, no arithmetic.

Every field is in SI base units. A stage is a chain of cells, a cell one op amp
with its resistors. The classes trust their values: `files.design` checks what
comes from outside, `model` checks what comes from a person.
"""

from __future__ import annotations

from dataclasses import dataclass, field, fields, replace

REFERENCE = "reference"
OUTPUT = "output"
ARRANGEMENTS = ("inverting", "inverting-pair", "non-inverting", "mixed-sign", "two-stage")


def cell_name(k: int) -> str:
    """The source name of the k-th cell's output, k from 0: `cell 1`, `cell 2`."""
    return f"cell {k + 1}"


@dataclass(frozen=True, slots=True)
class Signal:
    """One input: the wanted weight [V/V], its range and present value [V], its source."""

    name: str
    weight: float
    low: float
    high: float
    value: float
    source_resistance: float = 0.0  # ohm, in series with its leg
    frequency: float = 0.0  # Hz, highest that matters for it


@dataclass(frozen=True, slots=True)
class Leg:
    """A resistor [ohm] from a source into a node; `source` is a signal, `reference` or `cell N`."""

    source: str
    resistance: float


@dataclass(frozen=True, slots=True)
class Cell:
    """One op amp and its resistors [ohm]; None means not fitted."""

    minus: tuple[Leg, ...] = ()
    plus: tuple[Leg, ...] = ()
    minus_ground: float | None = None
    plus_ground: float | None = None  # 0 = tied to ground
    feedback: float | None = None  # None = open loop: a comparator
    feedback_capacitance: float = 0.0  # F


@dataclass(frozen=True, slots=True)
class Target:
    """What is asked of the output; None = not asked."""

    offset: float = 0.0  # V
    low: float | None = None  # V
    high: float | None = None  # V
    accuracy: float | None = None  # V
    noise: float | None = None  # V RMS
    bandwidth: float | None = None  # Hz


@dataclass(frozen=True, slots=True)
class Reference:
    voltage: float  # V
    source_resistance: float = 0.0  # ohm
    tolerance: float = 0.0  # relative limit


@dataclass(frozen=True, slots=True)
class Supply:
    high: float  # V
    low: float  # V
    tolerance: float = 0.0  # relative limit, of each rail


@dataclass(frozen=True, slots=True)
class Load:
    resistance: float | None = None  # ohm, None = none
    capacitance: float = 0.0  # F


@dataclass(frozen=True, slots=True)
class Ambient:
    """Degrees Celsius."""

    nominal: float = 25.0
    low: float = 25.0
    high: float = 25.0


@dataclass(frozen=True, slots=True)
class ResistorKind:
    """The resistors the stage is built from."""

    series: str = "E96"
    tolerance: float = 0.01  # relative limit
    temperature_coefficient: float = 1e-4  # 1/K, limit
    power: float = 0.125  # W at 70 degC, falling to zero at 155 degC
    least: float = 1e3  # ohm
    most: float = 1e6  # ohm


@dataclass(frozen=True, slots=True)
class OpAmp:
    """Figures of the op amp; limits are plus or minus."""

    name: str
    open_loop_gain: float  # V/V
    gain_bandwidth: float  # Hz
    second_pole: float | None  # Hz
    slew_rate: float  # V/s
    input_resistance: float  # ohm
    differential_capacitance: float  # F
    common_mode_capacitance: float  # F
    output_resistance: float  # ohm
    offset_voltage: float  # V
    offset_drift: float  # V/K
    bias_current: float  # A
    offset_current: float  # A
    cmrr: float  # V/V
    psrr: float  # V/V
    noise_voltage: float  # V/sqrt(Hz)
    noise_voltage_corner: float  # Hz
    noise_current: float  # A/sqrt(Hz)
    noise_current_corner: float  # Hz
    dropout_high: float  # V
    dropout_low: float  # V
    dropout_resistance: float  # ohm
    common_mode_high: float  # V
    common_mode_low: float  # V
    output_current: float  # A
    supply_least: float  # V
    supply_most: float  # V
    supply_current: float  # A per amplifier
    thermal_resistance: float | None  # K/W
    junction_most: float | None  # degC
    per_package: int = 1


@dataclass(frozen=True, slots=True)
class Design:
    """A whole design: what a design file holds, and what every analysis is asked about."""

    title: str
    signals: tuple[Signal, ...]
    supply: Supply
    op_amp: OpAmp
    target: Target = field(default_factory=Target)
    reference: Reference | None = None
    load: Load = field(default_factory=Load)
    ambient: Ambient = field(default_factory=Ambient)
    resistor: ResistorKind = field(default_factory=ResistorKind)
    stray_capacitance: float = 0.0  # F, at each inverting node
    noise_band: tuple[float, float] = (0.1, 1e5)  # Hz
    cells: tuple[Cell, ...] = ()  # empty = not yet realised

    @property
    def signal_names(self) -> tuple[str, ...]:
        return tuple(s.name for s in self.signals)

    def signal(self, name: str) -> Signal:
        """The signal of that name; KeyError if there is none."""
        for s in self.signals:
            if s.name == name:
                return s
        raise KeyError(name)


__all__ = [
    "ARRANGEMENTS", "OUTPUT", "REFERENCE", "Ambient", "Cell", "Design", "Leg", "Load", "OpAmp", "Reference",
    "ResistorKind", "Signal", "Supply", "Target", "cell_name", "fields", "replace",
]  # fmt: skip
