"""A wave from a CSV text: time in seconds, volts; one header line is allowed."""

from __future__ import annotations

import math

from sumwright.engine.waves import MOST_PIECES, Wave
from sumwright.errors import InvalidQuantity
from sumwright.quantity import parse_quantity


def read_wave(text: str, *, repeat: bool = False) -> Wave:
    """The wave of two columns, separated by comma, semicolon or tab.

    Raises
    ------
    InvalidQuantity
        Naming the line of the first thing wrong.
    """
    times: list[float] = []
    volts: list[float] = []
    seen = False
    for number, line in enumerate(text.lstrip("\ufeff").splitlines(), 1):
        if not line.strip():
            continue
        mark = next((m for m in (";", "\t", ",") if m in line), ",")
        fields = [f.strip() for f in line.split(mark)]
        if len(fields) != 2:
            raise InvalidQuantity(
                f"line {number} has {len(fields)} field{'s' if len(fields) > 1 else ''}; a wave has two, time in seconds and volts."
            )
        try:
            t, v = parse_quantity(fields[0], "s"), parse_quantity(fields[1], "V")
        except InvalidQuantity as error:
            if not seen:  # a header
                seen = True
                continue
            raise InvalidQuantity(f"line {number}: {error}") from error
        seen = True
        if times and t < times[-1]:
            raise InvalidQuantity(f"line {number}: the time {t:g} s is before the line above, {times[-1]:g} s.")
        if not (math.isfinite(t) and math.isfinite(v)):
            raise InvalidQuantity(f"line {number} must hold finite numbers.")
        times.append(t)
        volts.append(v)
        if len(times) > MOST_PIECES:
            raise InvalidQuantity(f"the wave has more than {MOST_PIECES} points; thin it out.")
    if not times:
        raise InvalidQuantity("the file holds no points; each line needs a time in seconds and volts.")
    return Wave("points", times=tuple(times), volts=tuple(volts), repeat=repeat)
