"""Readings as they come off the bench, and what the meter's data sheet says of them."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from sumwright.errors import InvalidQuantity, shown
from sumwright.quantity import parse_quantity


@dataclass(frozen=True)
class Readings:
    """What was applied and what was read.

    Attributes
    ----------
    names : tuple of str
        Every signal of the design, in its order.
    volts : (R, n) ndarray
        Applied signal values [V]; 0 for a signal the file does not mention.
    output : (R,) ndarray
        Read [V].
    uncertainty : (R,) ndarray or None
        Standard uncertainty of each reading [V]; None where nobody stated it.
    lines : (R,) tuple of int
        Line of each in the file, or its number in the grid.
    unnamed : tuple of str
        Signals the readings do not mention.
    """

    names: tuple[str, ...]
    volts: np.ndarray
    output: np.ndarray
    uncertainty: np.ndarray | None = None
    lines: tuple[int, ...] = ()
    unnamed: tuple[str, ...] = ()

    @property
    def count(self) -> int:
        return len(self.output)


def no_readings(design) -> Readings:
    """None taken yet."""
    n = len(design.signals)
    return Readings(design.signal_names, np.zeros((0, n)), np.zeros(0), None, (), ())


class Meter(NamedTuple):
    """A meter's accuracy as its data sheet states it: ± (of the reading + of the range or digits).

    The statement is a limit, so the standard uncertainty is limit/√3 (rectangular,
    JCGM 100:2008, 4.3.7).
    """

    of_reading: float = 5e-4  # relative
    constant: float = 5e-4  # V: share of the range, or digits times the resolution
    text: str = "0.05 % + 0.5 mV"

    def standard_uncertainty(self, volts) -> np.ndarray:
        """Of readings (...) [V], shape (...) [V]."""
        return (self.of_reading * np.abs(np.asarray(volts, dtype=float)) + self.constant) / np.sqrt(3)


_EXAMPLE = "write for example '0.05 % + 0.5 mV', '0.05 % + 0.01 % of 20 V' or '0.05 % + 3 digits of 1 mV'"
_OF = re.compile(r"(.+?)\s+(?:of|von|de)\s+(?:range\s+)?(.+)", re.IGNORECASE)
_DIGITS = re.compile(r"(\d+(?:[.,]\d+)?)\s*(?:digits?|counts?|dgts?|d)\s+(?:of|at|x|×|\*)\s+(.+)", re.IGNORECASE)


def parse_meter(text: str) -> Meter:
    """A meter's statement as it is printed.

    Parameters
    ----------
    text : str
        Parts joined by `+`: `0.05 %` (of the reading), `0.01 % of 20 V` (of the
        range), `3 digits of 1 mV`, or plain volts. A leading ± is allowed.

    Raises
    ------
    InvalidQuantity
        If a part is not understood, negative, or the whole is zero.
    """
    share = constant = 0.0
    stripped = text.strip().lstrip("±").strip().strip("()").replace("of reading", "").replace("reading", "")
    parts = [p.strip() for p in stripped.split("+")]
    if not stripped or not all(parts):
        raise InvalidQuantity(f"The meter's statement is {shown(text)}; {_EXAMPLE}.")
    for part in parts:
        try:
            if digits := _DIGITS.fullmatch(part):
                constant += _positive(digits[1], "", text) * _positive(digits[2], "V", text)
            elif of := _OF.fullmatch(part):
                constant += _positive(of[1], "", text) * _positive(of[2], "V", text)
            elif part.endswith(("%", "ppm")):
                share += _positive(part, "", text)
            else:
                constant += _positive(part, "V", text)
        except InvalidQuantity as problem:
            raise InvalidQuantity(
                f"The meter's statement is {shown(text)}: {problem} {_EXAMPLE[0].upper()}{_EXAMPLE[1:]}."
            ) from None
    if share + constant <= 0:
        raise InvalidQuantity(f"The meter's statement is {shown(text)}, which is zero; no meter is exact.")
    if share >= 1:
        raise InvalidQuantity(f"The meter's statement is {shown(text)}; its share of the reading must be under 100 %.")
    return Meter(share, constant, " ".join(text.split()))


def parse_limits(text: str, wanted: float, name: str) -> tuple[float, float]:
    """Limits of a weight (or of the offset [V]) as a person states them: `0.24 to 0.26` or `0.24..0.26`, `±0.01` or `±2 %` of what is wanted.

    Raises
    ------
    InvalidQuantity
        If the text is neither, or its limits are the wrong way round.
    """
    where = f"The limits of {name}"
    stripped = text.strip().replace("+/-", "±").replace("+-", "±")
    if stripped.startswith("±"):
        share = stripped.endswith(("%", "ppm"))
        half = parse_quantity(stripped[1:].strip(), "", where) * (abs(wanted) if share else 1.0)
        ends = (wanted - half, wanted + half)
        if half <= 0:
            raise InvalidQuantity(f"{where} are {shown(text)}, which leaves no room; write more than ±0.")
        return ends
    low, dots, high = re.sub(r"…|\s+to\s+", "..", stripped).partition("..")
    if not dots:
        raise InvalidQuantity(f"{where} are {shown(text)}; write 0.24 to 0.26, or ±0.01, or ±2 %.")
    ends = parse_quantity(low, "", where), parse_quantity(high, "", where)
    if ends[0] >= ends[1]:
        raise InvalidQuantity(f"{where} run from {ends[0]:g} to {ends[1]:g}; the first must be the lower.")
    return ends


def _positive(text: str, unit: str, whole: str) -> float:
    number = parse_quantity(text, unit)
    if number < 0:
        raise InvalidQuantity(f"{shown(text)} is below zero.")
    return number
