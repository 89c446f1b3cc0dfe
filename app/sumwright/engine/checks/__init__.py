"""The checks that make the margins: a file each, and a line here.

A module has `checks(analysis)`, which returns one `Check` or more, and
`FOLLOWS_VALUES`: whether its answer depends on where the signals are just now. What
does not is kept while a slider moves.
"""

from __future__ import annotations

from . import (
    accuracy,
    bandwidth,
    full_power_band,
    inputs,
    junction,
    noise,
    output_current,
    phase_margin,
    resistor_heat,
    supply,
    swing,
    weights,
    window,
)
from .check import Check

MODULES = (
    swing,
    window,
    inputs,
    output_current,
    supply,
    weights,
    accuracy,
    noise,
    bandwidth,
    full_power_band,
    phase_margin,
    resistor_heat,
    junction,
)


def run_checks(analysis) -> tuple[Check, ...]:
    """Every check of a realised design, least margin first, unknown ones last.

    Parameters
    ----------
    analysis : Analysis

    Returns
    -------
    tuple of Check
    """
    found = list(analysis.stage_checks)
    for module in MODULES:
        if module.FOLLOWS_VALUES:
            found.extend(module.checks(analysis))
    return tuple(sorted(found, key=lambda check: check.room))


def stage_checks(analysis) -> tuple[Check, ...]:
    """The checks that stay as they are while signals move within their ranges."""
    return tuple(c for module in MODULES if not module.FOLLOWS_VALUES for c in module.checks(analysis))


# What a stage cannot work without, by the start of the check's key; the others are targets that it misses.
VITAL = ("swing", "inputs", "output_current", "supply", "resistor_heat", "junction")


def headline(checks: tuple[Check, ...]) -> Check:
    """The check to put first: among those that fall short, what cannot work comes before what misses a target.

    Parameters
    ----------
    checks : tuple of Check
        Least margin first, as `run_checks` gives them; not empty.

    Returns
    -------
    Check
    """
    return next((c for c in checks if c.status == "short" and c.key.startswith(VITAL)), checks[0])


__all__ = ["MODULES", "Check", "headline", "run_checks", "stage_checks"]
