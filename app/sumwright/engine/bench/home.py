"""Bringing a board home: the resistor, the trimmer or the correction that mends a weight, and the board as it is built."""

from __future__ import annotations

from dataclasses import fields
from typing import NamedTuple

import numpy as np

from sumwright.engine.realise.preferred import values_within
from sumwright.engine.realise.trim import Correction, Trim, select_on_test, trim_for
from sumwright.engine.stage import REFERENCE, Cell, Design, replace
from sumwright.errors import SumwrightError
from sumwright.quantity import format_resistor

from .board import MINUS
from .fit import Fit
from .suspects import Diagnosis, wire


class Coefficient(NamedTuple):
    """One coefficient of the software correction."""

    name: str  # a signal, or "offset"
    value: float  # V/V, or V
    standard_uncertainty: float


class Home(NamedTuple):
    """What brings one weight home; None with the reason where nothing does."""

    name: str
    wanted: float
    measured: float
    fitted: float | None  # ohm, the leg's value on the drawing
    resistor: Correction | None
    trimmer: Trim | None
    turn: float | None  # V/V that the weight still has to move
    why_not: str


def software_correction(design: Design, fit: Fit) -> tuple[Coefficient, ...]:
    """Coefficients c to put in the logger: corrected output = output + Σ c·signal + c of the offset.

    Returns
    -------
    tuple of Coefficient
        One a signal whose weight the readings determine, then the offset; wanted minus
        made, with the uncertainty of what was made (NaN where nothing tells it).
    """
    wanted = [*(s.weight for s in design.signals), design.target.offset]
    names = [*design.signal_names, "offset"]
    return tuple(
        Coefficient(name, want - value, u)
        for name, want, value, u, known in zip(
            names, wanted, fit.value, fit.standard_uncertainty, fit.determined, strict=True
        )
        if known
    )


def bring_home(design: Design, name: str, measured: float) -> Home:
    """For a board without a fault (see `cure`): the parts that bring one measured weight (or the offset, by the name `offset`) to the wanted one.

    Parameters
    ----------
    design : Design
    name : str
        A signal, or `offset`.
    measured : float
        V/V, or V for the offset.
    """
    source = REFERENCE if name == "offset" else name
    wanted = design.target.offset if name == "offset" else design.signal(name).weight
    fitted = next(
        (leg.resistance for c in reversed(design.cells) for leg in (*c.minus, *c.plus) if leg.source == source), None
    )
    resistor, trimmer, why = None, None, ""
    try:
        resistor = select_on_test(design, design.cells, source, measured)
    except SumwrightError as problem:
        why = str(problem)
    try:
        trimmer = trim_for(design, design.cells, source)
    except SumwrightError as problem:
        why = why or str(problem)
    return Home(name, wanted, measured, fitted, resistor, trimmer, wanted - measured, why)


class Cure(NamedTuple):
    """What mends the one fault that explains every reading."""

    fault: str
    part: str
    resistor: Correction | None  # beside the part that is fitted, where one resistor holds a wrong value; weight in ohm
    says: str


_WRONG_VALUES = {"leg wrong value": "{part} leg", "feedback wrong value": "feedback of {part}"}


def cure(diagnosis: Diagnosis) -> Cure | None:
    """The mend of the likeliest suspect, when that one fault may well give all these readings.

    Weights that share a node move together, so a single wrong resistor puts several out; a part chosen for each of
    them would leave the fault in and add others. `bring_home` is for boards with nothing but tolerance in them.

    Returns
    -------
    Cure or None
        None without readings, on a healthy board, and where no single fault explains the readings.
    """
    lead = int(diagnosis.order[0])
    case = diagnosis.cases[lead]
    if case.fault is None or not len(diagnosis.readings) or not diagnosis.fits()[lead]:
        return None
    fault, part = case.key
    fitted, belongs = diagnosis.estimate(lead), case.place.nominal
    if fault not in _WRONG_VALUES or fitted is None or not belongs:
        says = f"One fault explains the readings: {', '.join(x for x in (part, fault) if x)}. Mend that, then read again; no other part needs a change."
        return Cure(fault, part, None, says)
    what = _WRONG_VALUES[fault].format(part=part)
    says = f"Replace the {what} by {format_resistor(belongs)}: it holds about {format_resistor(fitted, 3)}."
    beside = _beside(diagnosis.bench.design.resistor.series, fitted, belongs)
    if beside is not None:
        where = "in parallel with" if beside.how == "parallel" else "in series with"
        says += f" Or put {format_resistor(beside.value)} {where} it, {format_resistor(beside.weight, 3)} together."
    return Cure(fault, part, beside, says + " That brings every weight home; no other part needs a change.")


def _beside(series: str, fitted: float, belongs: float) -> Correction | None:
    """The preferred value in parallel or in series with a wrong resistor that makes the right one; None if none does."""
    parallel = belongs < fitted
    exact = 1.0 / (1.0 / belongs - 1.0 / fitted) if parallel else belongs - fitted
    if not 0.1 <= exact <= 1e8:
        return None
    value = min(map(float, values_within(series, exact / 3, exact * 3)), key=lambda v: abs(v - exact))
    made = 1.0 / (1.0 / fitted + 1.0 / value) if parallel else fitted + value
    return Correction("parallel" if parallel else "series", exact, value, made)


def as_built(diagnosis: Diagnosis) -> tuple[Cell, ...]:
    """The cells with the resistor values that these readings make likeliest.

    The board of the likeliest suspect that is a matter of resistors is taken (a wrong value at its estimate), and every
    resistor moved within its tolerance to where the readings put it: the mean of a
    normal posterior, first order. Readings alone cannot tell a common factor of all
    resistors on a node, so such a factor stays where tolerance makes it likeliest.

    Raises
    ------
    SumwrightError
        If there are no readings, or the likeliest board is none whose resistors say anything (an op amp dead, say).
    """
    if not len(diagnosis.readings):
        raise SumwrightError("There are no readings yet, so the board cannot be taken as built.")
    bench, groups = diagnosis.bench, diagnosis.groups()
    board = None
    for case in (int(c) for c in diagnosis.order if groups[c] == groups[diagnosis.order[0]]):
        trial = diagnosis.evidence.trials[diagnosis.best_trial[case]]
        board = wire(bench, diagnosis.cases, [trial])
        if _only_resistors(bench.healthy, board):
            break
    else:
        key = diagnosis.cases[int(diagnosis.order[0])].key
        raise SumwrightError(
            f"The likeliest suspect is '{' '.join(x for x in key if x)}'; mend that first, then take the board as built."
        )
    p = bench.predict(board, diagnosis.volts, diagnosis.readings)
    columns = p.columns[0]  # (P, R)
    covariance = columns.T @ columns + np.diag(p.own[0] + diagnosis.meter**2)
    moved = columns @ np.linalg.solve(covariance, diagnosis.readings - p.mean[0])  # standard deviations
    legs, grounds, feedback = board.leg_ohm[0].copy(), board.ground_ohm[0].copy(), board.feedback_ohm[0].copy()
    for i, (what, at) in enumerate(bench.quantities):
        if what == "leg":
            legs[at] *= 1 + bench.d_leg[i + 1, at] * moved[i]
        elif what == "ground":
            grounds[at] *= 1 + bench.d_ground[(i + 1, *at)] * moved[i]
        elif what == "feedback":
            feedback[at] *= 1 + bench.d_feedback[i + 1, at] * moved[i]
    return _cells(bench, legs, grounds, feedback)


def _only_resistors(healthy, board) -> bool:
    """Whether the board differs from the healthy one in resistor values alone."""
    resistors = ("leg_ohm", "ground_ohm", "feedback_ohm", "leg_cell")
    return all(
        np.array_equal(getattr(board, f.name), getattr(healthy, f.name), equal_nan=True)
        for f in fields(board)
        if f.name not in resistors
    )


def _cells(bench, legs, grounds, feedback):
    """Design cells with these values; an open part is left out."""
    out = []
    for k, cell in enumerate(bench.design.cells):
        sides: dict[str, list] = {"minus": [], "plus": []}
        taken = {"minus": iter(cell.minus), "plus": iter(cell.plus)}
        for i, leg in enumerate(bench.legs):
            if leg.cell != k:
                continue
            side = "minus" if leg.node == MINUS else "plus"
            old = next(taken[side])
            if np.isfinite(legs[i]):
                sides[side].append(replace(old, resistance=_figures(legs[i])))
        ground = [None if g is None or not np.isfinite(v) else _figures(v) if g else 0.0
                  for g, v in zip((cell.minus_ground, cell.plus_ground), grounds[k], strict=True)]  # fmt: skip
        out.append(
            replace(
                cell, minus=tuple(sides["minus"]), plus=tuple(sides["plus"]), minus_ground=ground[0], plus_ground=ground[1],
                feedback=None if cell.feedback is None or not np.isfinite(feedback[k]) else _figures(feedback[k]),
            )
        )  # fmt: skip
    return tuple(out)


def _figures(ohm: float) -> float:
    """Six figures: far finer than readings tell, and still a number a person can read."""
    return float(f"{ohm:.6g}")
