"""What may be typed on the sheet: wide enough for any part that is sold, narrow enough to catch a slip of the keyboard.

The design file is not judged by this: what the format allows is opened as it is, and
stays until somebody types another value. The ends are round figures just beyond
what catalogues hold (common practice): resistors from milliohm shunts to teraohm
glass types, op amps up to about 1 kV of supply.
"""

from __future__ import annotations

from collections.abc import Callable

from sumwright.errors import InvalidQuantity
from sumwright.quantity import MINUS, THIN, format_percent, format_quantity

_VOLTS = (-1e4, 1e4)
_RESISTOR = (0.01, 1e12)
_SOURCE = (0.0, 1e9)
_HERTZ = (1e-6, 1e12)
_TOLERANCE = (0.0, 0.5)
_GAIN = (1.0, 1e12)
_AMPERE = (0.0, 1.0)

# Least and most by group and figure, in SI units; a weight and a rail are judged without their sign.
SPANS: dict[tuple[str, str], tuple[float, float]] = {
    ("signal", "value"): _VOLTS, ("signal", "low"): _VOLTS, ("signal", "high"): _VOLTS,
    ("signal", "source_resistance"): _SOURCE, ("signal", "frequency"): (0.0, 1e12),
    ("signal", "weight"): (1e-5, 1e5), ("target", "offset"): _VOLTS,
    ("part", "resistor"): _RESISTOR, ("part", "capacitor"): (1e-15, 1e-3),
    ("supply", "high"): (-1e3, 1e3), ("supply", "low"): (-1e3, 1e3), ("supply", "tolerance"): _TOLERANCE,
    ("load", "resistance"): (1e-3, 1e12), ("load", "capacitance"): (0.0, 1.0),
    ("ambient", "low"): (-100.0, 300.0), ("ambient", "nominal"): (-100.0, 300.0), ("ambient", "high"): (-100.0, 300.0),
    ("resistor", "least"): _RESISTOR, ("resistor", "most"): _RESISTOR, ("resistor", "tolerance"): _TOLERANCE,
    ("resistor", "temperature_coefficient"): (0.0, 0.01), ("resistor", "power"): (1e-3, 1e3),
    ("target", "low"): _VOLTS, ("target", "high"): _VOLTS, ("target", "accuracy"): (1e-9, 1e4),
    ("target", "noise"): (1e-12, 1e3), ("target", "bandwidth"): _HERTZ,
    ("reference", "voltage"): (-1e3, 1e3), ("reference", "source_resistance"): _SOURCE,
    ("reference", "tolerance"): _TOLERANCE,
    ("op_amp", "open_loop_gain"): _GAIN, ("op_amp", "gain_bandwidth"): (1.0, 1e12), ("op_amp", "second_pole"): (1.0, 1e13),
    ("op_amp", "slew_rate"): (1.0, 1e12), ("op_amp", "input_resistance"): (1.0, 1e18),
    ("op_amp", "differential_capacitance"): (0.0, 1e-6), ("op_amp", "common_mode_capacitance"): (0.0, 1e-6),
    ("op_amp", "output_resistance"): (0.0, 1e6), ("op_amp", "offset_voltage"): (0.0, 10.0),
    ("op_amp", "offset_drift"): (0.0, 0.1), ("op_amp", "bias_current"): _AMPERE, ("op_amp", "offset_current"): _AMPERE,
    ("op_amp", "cmrr"): _GAIN, ("op_amp", "psrr"): _GAIN, ("op_amp", "noise_voltage"): (0.0, 1e-3),
    ("op_amp", "noise_voltage_corner"): (0.0, 1e9), ("op_amp", "noise_current"): (0.0, 1e-6),
    ("op_amp", "noise_current_corner"): (0.0, 1e9), ("op_amp", "dropout_high"): (0.0, 1e3),
    ("op_amp", "dropout_low"): (0.0, 1e3), ("op_amp", "dropout_resistance"): (0.0, 1e6),
    ("op_amp", "common_mode_high"): (-1e3, 1e3), ("op_amp", "common_mode_low"): (-1e3, 1e3),
    ("op_amp", "output_current"): (1e-9, 1e3), ("op_amp", "supply_least"): (0.0, 2e3),
    ("op_amp", "supply_most"): (0.0, 2e3), ("op_amp", "supply_current"): (0.0, 100.0),
    ("op_amp", "thermal_resistance"): (1e-3, 1e5), ("op_amp", "junction_most"): (-100.0, 1000.0),
    ("op_amp", "per_package"): (1.0, 64.0),
    ("board", "stray"): (0.0, 1e-6), ("board", "band"): _HERTZ,
}  # fmt: skip
_WORDS = {
    ("part", "resistor"): "a resistor", ("part", "capacitor"): "a capacitor across a feedback",
    ("signal", "value"): "a signal", ("signal", "low"): "a signal's range", ("signal", "high"): "a signal's range",
    ("signal", "weight"): "a weight, either sign", ("target", "offset"): "an offset", ("board", "stray"): "stray capacitance",
    ("board", "band"): "the noise band", ("supply", "high"): "a rail", ("supply", "low"): "a rail",
    ("target", "low"): "the window", ("target", "high"): "the window",
}  # fmt: skip


def in_span(group: str, figure: str, value: float, unit: str) -> float:
    """`value`, if a sheet takes it for that figure. A wrong sign is left to those who know what the figure means.

    Raises
    ------
    InvalidQuantity
        With the value and both ends of what is allowed.
    """
    low, high = SPANS[group, figure]
    size = abs(value) if (group, figure) == ("signal", "weight") else value
    if low <= size <= high or (low >= 0 and size <= 0):
        return value
    what = _WORDS.get((group, figure)) or f"{group.replace('_', ' ')}, {figure.replace('_', ' ')}"
    write = _percent if figure == "tolerance" else _ppm if figure == "temperature_coefficient" else _plain(unit)
    raise InvalidQuantity(f"{write(value)} is outside what the sheet takes for {what}: {write(low)} to {write(high)}.")


def _percent(value: float) -> str:
    return format_percent(value, 3)


def _ppm(value: float) -> str:
    return f"{value * 1e6:g}{THIN}ppm/K"


def _plain(unit: str) -> Callable[[float], str]:
    if unit not in ("", "V/V", "°C", "K/W", "V/s"):
        return lambda value: format_quantity(value, unit, trim=True)
    tail = THIN + unit if unit else ""
    return lambda value: _digits(value).replace("-", MINUS) + tail


def _digits(value: float) -> str:
    """Digits as they would be typed: what has no prefix of its own does not get one."""
    if value and not 1e-6 <= abs(value) < 1e7:
        return f"{value:g}".replace("e+", "e")
    return f"{value:.6f}".rstrip("0").rstrip(".")


__all__ = ["SPANS", "in_span"]
