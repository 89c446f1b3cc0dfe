"""The frequency both bandwidth checks ask for."""

from __future__ import annotations

from sumwright.engine.stage import Design
from sumwright.quantity import format_quantity


def wanted_band(design: Design) -> tuple[float | None, str]:
    """The highest frequency that matters [Hz] and where it comes from; None if none is given.

    The larger of `target.bandwidth` and the highest frequency of any signal.
    """
    asked = design.target.bandwidth
    fastest = max(design.signals, key=lambda s: s.frequency)
    if fastest.frequency > (asked or 0.0):
        return fastest.frequency, f"'{fastest.name}' goes to {format_quantity(fastest.frequency, 'Hz', trim=True)}"
    return asked, "" if asked is None else f"needs {format_quantity(asked, 'Hz', trim=True)}"
