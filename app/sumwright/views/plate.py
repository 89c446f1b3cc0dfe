"""The plate: rails, load, op amp, resistors, ambient, target and reference, every figure as it can be typed."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from sumwright.engine.catalogue import catalogue, find
from sumwright.files.design import SERIES
from sumwright.quantity import format_exact, format_fixed, format_percent

# The op amp's figures in the drawer: what it is called there, and its unit.
OP_AMP = (
    ("gain", (("open_loop_gain", "open-loop gain", "V/V"), ("gain_bandwidth", "gain-bandwidth", "Hz"),
              ("second_pole", "second pole", "Hz"), ("slew_rate", "slew rate", "V/s"))),
    ("output", (("dropout_high", "dropout, + rail", "V"), ("dropout_low", "dropout, − rail", "V"),
                ("dropout_resistance", "dropout per ampere", "Ω"), ("output_current", "output current", "A"),
                ("output_resistance", "output resistance", "Ω"))),
    ("inputs", (("common_mode_high", "inputs to + rail", "V"), ("common_mode_low", "inputs to − rail", "V"),
                ("input_resistance", "input resistance", "Ω"),
                ("differential_capacitance", "capacitance, between", "F"),
                ("common_mode_capacitance", "capacitance, to ground", "F"))),
    ("errors", (("offset_voltage", "offset voltage ±", "V"), ("offset_drift", "offset drift ±", "V/K"),
                ("bias_current", "bias current ±", "A"), ("offset_current", "offset current ±", "A"),
                ("cmrr", "CMRR", "V/V"), ("psrr", "PSRR", "V/V"))),
    ("noise", (("noise_voltage", "noise voltage", "V/√Hz"), ("noise_voltage_corner", "its corner", "Hz"),
               ("noise_current", "noise current", "A/√Hz"), ("noise_current_corner", "its corner", "Hz"))),
    ("supply and heat", (("supply_least", "least supply", "V"), ("supply_most", "most supply", "V"),
                         ("supply_current", "supply current", "A"), ("thermal_resistance", "to ambient", "K/W"),
                         ("junction_most", "junction, most", "°C"), ("per_package", "in one package", ""))),
)  # fmt: skip


def show(bench: Any) -> dict[str, Any]:
    """Every figure of the plate as text."""
    d = bench.design
    return _shown(
        d.supply, d.load, d.op_amp, d.resistor, d.ambient, d.target, d.reference, d.stray_capacitance, d.noise_band
    )


@lru_cache(maxsize=64)
def _shown(supply, load, op_amp, resistor, ambient, target, reference, stray, band):
    return {
        "supply": {"high": format_fixed(supply.high, "", 2, sign=True), "low": format_fixed(supply.low, "", 2),
                   "tolerance": format_percent(supply.tolerance, 3)},
        "load": {"resistance": _exact(load.resistance), "capacitance": _exact(load.capacitance)},
        "ambient": {f: _exact(getattr(ambient, f)) for f in ("low", "nominal", "high")},
        "resistor": {"series": resistor.series, "tolerance": format_percent(resistor.tolerance, 3),
                     "temperature_coefficient": f"{resistor.temperature_coefficient * 1e6:.6g}",
                     "power": _exact(resistor.power), "least": _exact(resistor.least), "most": _exact(resistor.most)},
        "target": {f: _exact(getattr(target, f)) for f in ("low", "high", "accuracy", "noise", "bandwidth")},
        "reference": None if reference is None else
        {"voltage": format_fixed(reference.voltage), "source_resistance": _exact(reference.source_resistance),
         "tolerance": format_percent(reference.tolerance, 3)},
        "op_amp": {"name": op_amp.name, "dropout": format_fixed(op_amp.dropout_high, "", 2), "classes": _classes(), "note": _note(op_amp.name), "groups": [
            [group, [[figure, word, unit, _exact(getattr(op_amp, figure))] for figure, word, unit in rows]]
            for group, rows in OP_AMP]},
        "stray": _exact(stray), "band": [_exact(band[0]), _exact(band[1])], "series": list(SERIES),
    }  # fmt: skip


@lru_cache(maxsize=1)
def _classes() -> list[list[str]]:
    """The op amps there are to choose from, by name, and what each is: a class or a type."""
    return [[e.name, f"{e.name}, {e.kind}" if e.kind != "own" else e.name] for e in catalogue()]


def _note(name: str) -> str:
    """Where its figures are from, in a few words."""
    entry = find(name)
    return entry.note if entry else "Figures of your own."


def _exact(value) -> str:
    return "" if value is None else format_exact(float(value)).replace("u", "µ").replace("-", "\u2212")
