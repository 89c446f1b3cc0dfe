"""Op amps to choose from: classes with representative figures, and well-known types.

Every figure carries where it comes from. The classes are invented; the types are
industry standards made by several firms, whose sheets differ: a figure here starts
a design, the data sheet in hand finishes it.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, fields
from functools import cache
from importlib.resources import files

from .stage import OpAmp

OWN_LIST = "from your own list"


@dataclass(frozen=True)
class Entry:
    """One op amp of a list: its figures, and the source of each by name."""

    op_amp: OpAmp
    kind: str  # class, type, own
    note: str
    sources: dict[str, str]

    @property
    def name(self) -> str:
        return self.op_amp.name


UNITS = {
    "open_loop_gain": "V/V", "gain_bandwidth": "Hz", "second_pole": "Hz", "slew_rate": "V/s", "input_resistance": "Ω",
    "differential_capacitance": "F", "common_mode_capacitance": "F", "output_resistance": "Ω", "offset_voltage": "V",
    "offset_drift": "V/K", "bias_current": "A", "offset_current": "A", "cmrr": "V/V", "psrr": "V/V",
    "noise_voltage": "V/√Hz", "noise_voltage_corner": "Hz", "noise_current": "A/√Hz", "noise_current_corner": "Hz",
    "dropout_high": "V", "dropout_low": "V", "dropout_resistance": "Ω", "common_mode_high": "V", "common_mode_low": "V",
    "output_current": "A", "supply_least": "V", "supply_most": "V", "supply_current": "A", "thermal_resistance": "K/W",
    "junction_most": "°C", "per_package": "",
}  # fmt: skip
FIGURES = tuple(f.name for f in fields(OpAmp) if f.name != "name")


@cache
def catalogue() -> tuple[Entry, ...]:
    """The list that comes with the project, classes first."""
    text = files(__package__).joinpath("op_amps.json").read_text(encoding="utf-8")
    data = json.loads(text)
    sources = data["sources"]
    entries = []
    for part in data["parts"]:
        figures = {key: value for key, (value, _) in part["figures"].items()}
        marks = {key: sources[mark] for key, (_, mark) in part["figures"].items()}
        entries.append(Entry(OpAmp(name=part["name"], **figures), part["kind"], part["note"], marks))
    return tuple(entries)


def own(op_amp: OpAmp) -> Entry:
    """An entry for an op amp of the person's own list."""
    return Entry(op_amp, "own", "", dict.fromkeys(FIGURES, OWN_LIST))


def find(name: str, entries: tuple[Entry, ...] | None = None) -> Entry | None:
    """The entry of that name, capitals aside; None if there is none."""
    wanted = name.strip().casefold()
    return next((e for e in entries or catalogue() if e.name.casefold() == wanted), None)
