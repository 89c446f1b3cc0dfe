"""Preferred resistor values: the E series of IEC 60063, and what of them lies within a range."""

from __future__ import annotations

import math

import numpy as np

from sumwright.errors import CannotRealise, InvalidQuantity

SERIES = ("E3", "E6", "E12", "E24", "E48", "E96", "E192")

# IEC 60063:2015. E24 is older than the rule: eight of its values differ from round(10 ** (k / 24), 1).
_E24 = ["1.0", "1.1", "1.2", "1.3", "1.5", "1.6", "1.8", "2.0", "2.2", "2.4", "2.7", "3.0", "3.3", "3.6", "3.9", "4.3", "4.7", "5.1", "5.6", "6.2", "6.8", "7.5", "8.2", "9.1"]  # fmt: skip


def _mantissas(series: str) -> list[str]:
    """One decade as decimal texts, so that every value made from them is the nearest double."""
    if series in ("E3", "E6", "E12", "E24"):
        return _E24[:: 24 // int(series[1:])]
    # E192 follows the rule but for 9.20 (the rule gives 9.19); E96 and E48 are every second and every fourth.
    full = [f"{10 ** (k / 192):.2f}" for k in range(192)]
    full[full.index("9.19")] = "9.20"
    return full[:: 192 // int(series[1:])]


def preferred_values(series: str) -> np.ndarray:
    """One decade of a series, 1 to under 10.

    Raises
    ------
    InvalidQuantity
        If the series is none of `SERIES`.
    """
    if series not in SERIES:
        raise InvalidQuantity(f"series is '{series}'; it must be one of {', '.join(SERIES)}.")
    return np.array([float(m) for m in _mantissas(series)])


def values_within(series: str, least: float, most: float) -> np.ndarray:
    """Every value of a series from `least` to `most` ohm, both included, rising.

    Raises
    ------
    InvalidQuantity
        If the series is unknown, or the range is not positive, finite and in order.
    CannotRealise
        If the series has no value there.
    """
    preferred_values(series)
    if not (0 < least <= most < math.inf):
        raise InvalidQuantity(
            f"The range of resistors is {least:g} to {most:g} ohm; it must be positive, finite and rising."
        )
    first, last = math.floor(math.log10(least)) - 1, math.ceil(math.log10(most)) + 1
    every = np.array([float(f"{m}e{k}") for k in range(first, last + 1) for m in _mantissas(series)])
    inside = every[(every >= least * (1 - 1e-9)) & (every <= most * (1 + 1e-9))]
    if not inside.size:
        raise CannotRealise(f"No {series} value lies between {least:g} and {most:g} ohm; widen the range of resistors.")
    return inside
