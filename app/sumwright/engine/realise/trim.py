"""Bringing one weight home on the bench: a trimmer in its leg, or a resistor selected on test.

A trimmer must cover what everything else can do to the weight, and no more: travel that is
not needed is resolution lost. Trimmers are made in steps of 1, 2 and 5, usually within 10 %,
with up to 1 % or 2 ohm left at the end of the travel (common practice).
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from scipy.optimize import brentq

from sumwright.engine.arrangement import ideal_weights
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import REFERENCE, Cell, Design
from sumwright.errors import CannotRealise, InvalidQuantity

TRIMMERS = tuple(float(f"{m}e{k}") for k in range(1, 7) for m in (1, 2, 5))  # 10 ohm to 5 Mohm
TRIMMER_TOLERANCE = 0.10
END_SHARE, END_OHM = 0.01, 2.0
SETTABLE = 0.01  # share of the travel a single-turn trimmer can be set to by hand (common practice)


class Trim(NamedTuple):
    """A leg made of a fixed resistor and a trimmer as a variable resistor in series with it."""

    source: str
    fixed: float  # ohm, a preferred value
    trimmer: float  # ohm, end to end
    needed_low: float  # ohm, least leg that everything else at its limits may ask for
    needed_high: float  # ohm
    covered_low: float  # ohm, least leg that is surely reached, whatever the two parts' tolerances
    covered_high: float  # ohm
    resolution: float  # relative step of the weight for `SETTABLE` of the travel
    setting: float  # share of the travel, 0 to 1, with every part at its nominal value


class Correction(NamedTuple):
    """A resistor that brings a measured weight to the wanted one."""

    how: str  # "parallel" with the leg, "series" with it, or "none"
    exact: float | None  # ohm
    value: float | None  # ohm, the nearest preferred value
    weight: float  # V/V, expected with it fitted


def _leg(cells: tuple[Cell, ...], source: str):
    """Cell, side and place of a source's leg; of several (the reference) the last."""
    found = [
        (k, side, i)
        for k, cell in enumerate(cells)
        for side in ("minus", "plus")
        for i, leg in enumerate(getattr(cell, side))
        if leg.source == source
    ]
    if not found:
        raise CannotRealise(f"'{source}' feeds no leg of the stage, so there is nothing to trim.")
    return found[-1]


def _with_leg(cells, at, ohm: float):
    k, side, i = at
    legs = list(getattr(cells[k], side))
    legs[i] = replace(legs[i], resistance=ohm)
    return (*cells[:k], replace(cells[k], **{side: tuple(legs)}), *cells[k + 1 :])


def _scaled(cells, factors):
    """Every fitted resistor times its factor, in the order of `_every`."""
    factor = iter(factors)

    def times(ohm):
        return ohm * next(factor) if ohm else ohm

    return tuple(
        replace(
            c,
            minus=tuple(replace(x, resistance=times(x.resistance)) for x in c.minus),
            plus=tuple(replace(x, resistance=times(x.resistance)) for x in c.plus),
            minus_ground=times(c.minus_ground),
            plus_ground=times(c.plus_ground),
            feedback=times(c.feedback),
        )
        for c in cells
    )


def _every(cells):
    """(cell, what, place) of every fitted resistor, in the order `_scaled` takes factors."""
    out = []
    for k, c in enumerate(cells):
        out += [(k, side, i) for side in ("minus", "plus") for i, leg in enumerate(getattr(c, side)) if leg.resistance]
        out += [(k, name, 0) for name in ("minus_ground", "plus_ground", "feedback") if getattr(c, name)]
    return out


def _weight(design: Design, cells, source: str) -> float:
    made, offset = ideal_weights(design, cells)
    return offset if source == REFERENCE else made[source]


def _goal(design: Design, source: str) -> float:
    return design.target.offset if source == REFERENCE else design.signal(source).weight


def _leg_for(design: Design, cells, at, source: str, goal: float) -> float:
    """The leg [ohm] that makes the weight, everything else as it is; NaN if none does."""
    now = getattr(cells[at[0]], at[1])[at[2]].resistance

    def off(log_ohm):
        return math.log(abs(_weight(design, _with_leg(cells, at, math.exp(log_ohm)), source) / goal))

    low, high = math.log(now) - 7.0, math.log(now) + 7.0
    if off(low) * off(high) > 0:
        return math.nan
    return math.exp(brentq(off, low, high, xtol=1e-13))


def trim_for(design: Design, cells: tuple[Cell, ...], source: str, *, settable: float = SETTABLE) -> Trim:
    """A fixed resistor and a trimmer for one leg that surely bring its weight home.

    Parameters
    ----------
    design : Design
        Tolerance and series of the resistors; with `source` the reference, its tolerance counts too.
    cells : tuple of Cell
        The stage as it is; the leg's own value does not matter, everything else's does.
    source : str
        A signal, or `reference` (for the offset).
    settable : float, optional
        Share of the travel to which the trimmer can be set.

    Raises
    ------
    CannotRealise
        If no leg can make the weight, or no trimmer of the usual values covers what is needed.

    Notes
    -----
    A weight moves one way with each resistor, so what the leg must reach is found with every other part at
    the limit that drives it farthest: corners, not first order. The smallest trimmer is taken that
    covers the range with the largest fixed resistor that still lets it reach the low end.
    """
    at = _leg(cells, source)
    goal = _goal(design, source)
    if not goal:
        raise CannotRealise(
            f"The wanted {'offset' if source == REFERENCE else f'weight of {source!r}'} is 0; no trimmer sets that."
        )
    tolerance = design.resistor.tolerance
    nominal = _leg_for(design, cells, at, source, goal)
    if not math.isfinite(nominal):
        raise CannotRealise(f"No leg from '{source}' makes {goal:g} with the other resistors as they are.")
    centred = _with_leg(cells, at, nominal)
    every = _every(centred)
    mine = every.index(at)
    base = abs(_weight(design, centred, source))
    pull = np.zeros(len(every))
    for k in range(len(every)):
        if k != mine:
            factors = np.ones(len(every))
            factors[k] = 1.0 + 1e-6
            pull[k] = np.sign(abs(_weight(design, _scaled(centred, factors), source)) - base)
    reference = design.reference.tolerance if source == REFERENCE and design.reference is not None else 0.0
    needed = []
    for way in (-1.0, 1.0):  # everything else makes the weight small, then large
        corner = _scaled(centred, 1.0 + way * tolerance * pull)
        needed.append(_leg_for(design, corner, at, source, goal / (1.0 + way * reference)))
    low, high = min(needed), max(needed)
    if not (math.isfinite(low) and math.isfinite(high)):
        raise CannotRealise(
            f"With the others at their limits no leg from '{source}' makes {goal:g}; use closer resistors."
        )
    kind = design.resistor
    values = values_within(kind.series, min(kind.least, low) / 10, max(kind.most, high))
    for travel in TRIMMERS:
        end = max(END_SHARE * travel, END_OHM)
        fitting = values[values * (1.0 + tolerance) + end <= low]
        fixed = float(fitting[-1]) if fitting.size else 0.0
        reach = fixed * (1.0 - tolerance) + travel * (1.0 - TRIMMER_TOLERANCE)
        if reach < high or (fixed == 0.0 and end > low):
            continue
        step = abs(_weight(design, _with_leg(centred, at, nominal + settable * travel), source) / goal - 1.0)
        return Trim(
            source, fixed, travel, low, high, fixed * (1.0 + tolerance) + end, reach, step, (nominal - fixed) / travel
        )
    raise CannotRealise(f"No usual trimmer covers {low:g} to {high:g} ohm in the leg of '{source}'.")


def select_on_test(design: Design, cells: tuple[Cell, ...], source: str, measured: float) -> Correction:
    """The resistor that brings a measured weight (or offset, V) to the wanted one: in parallel with the leg, or in series.

    What is off is laid to the node's scale (feedback, ground legs), so that the leg itself is taken at its fitted
    value: to first order it does not matter which of them it is.

    Raises
    ------
    InvalidQuantity
        If the measured weight is zero, not finite, or of the wrong sign.
    CannotRealise
        If no value of the leg can bring it home.
    """
    goal = _goal(design, source)
    if not math.isfinite(measured) or measured == 0 or (goal and measured * goal < 0):
        raise InvalidQuantity(
            f"The measured weight of '{source}' is {measured:g}; it must be finite, not 0, and of the sign of the wanted {goal:g}."
        )
    at = _leg(cells, source)
    fitted = getattr(cells[at[0]], at[1])[at[2]].resistance
    scale = measured / _weight(design, cells, source)
    wanted_leg = _leg_for(design, cells, at, source, goal / scale)
    if not math.isfinite(wanted_leg):
        raise CannotRealise(
            f"No resistor at the leg of '{source}' brings {measured:g} to {goal:g}; something else is wrong."
        )
    if abs(wanted_leg / fitted - 1.0) < 1e-9:
        return Correction("none", None, None, measured)
    parallel = wanted_leg < fitted
    exact = 1.0 / (1.0 / wanted_leg - 1.0 / fitted) if parallel else wanted_leg - fitted
    if exact < 0.1 or exact > 1e8:
        return Correction("none", exact, None, measured)
    shop = values_within(design.resistor.series, exact / 3, exact * 3)

    def made(value):
        leg = 1.0 / (1.0 / fitted + 1.0 / value) if parallel else fitted + value
        return scale * _weight(design, _with_leg(cells, at, leg), source)

    value = min((float(v) for v in shop), key=lambda v: abs(made(v) - goal))
    if abs(made(value) - goal) >= abs(measured - goal):
        return Correction("none", exact, None, measured)
    return Correction("parallel" if parallel else "series", exact, value, made(value))
