"""Wanted weights to cells: the five arrangements, each with its exact recipe.

The recipe of every arrangement is the same rule: a leg that shall weigh `w` has
`Rf / |w|` ohm from its source to the node, source resistance included, and in a
single cell with legs on the non-inverting node one ground leg closes
`sum(w+) = 1 + sum(|w-|)`. Source: D. H. Sheingold's rules for resistor values in
adder-subtractor circuits (Analog Dialogue) and "Daisy's theorem" (K. Knollman, EDN).
An offset is one more weight, on the reference.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import ARRANGEMENTS, REFERENCE, Cell, Design, Leg, cell_name
from sumwright.errors import CannotRealise, InvalidDesign
from sumwright.quantity import format_quantity

# Sums closer to balance than this need no ground leg: 0.1 taken ten times is not quite 1 in binary.
BALANCE = 1e-12
# Legs of general summing stages usually lie between 10k and 100k (common practice); their middle.
USUAL_LEG = 30e3
WHAT_IT_MAKES = {
    "inverting": "negative weights only",
    "inverting-pair": "positive weights only",
    "non-inverting": "positive weights only",
    "mixed-sign": "weights of any sign",
    "two-stage": "weights of any sign",
}


class Wanted(NamedTuple):
    """One weight to be made: from which source, how much [V/V], through which source resistance [ohm]."""

    source: str
    weight: float
    source_resistance: float


def wanted_weights(design: Design) -> tuple[Wanted, ...]:
    """Every weight the stage must make: its signals in order, then the reference if an offset is wanted.

    Raises
    ------
    CannotRealise
        If there is no signal, a weight is zero, or an offset is wanted without a reference that has a voltage.
    """
    if not design.signals:
        raise CannotRealise("The design has no signals; a stage needs at least one.")
    out = []
    for s in design.signals:
        if s.weight == 0 or not math.isfinite(s.weight):
            raise CannotRealise(
                f"The wanted weight of '{s.name}' is {s.weight:g}; no leg makes that. Give it a weight other than 0, or remove the signal."
            )
        out.append(Wanted(s.name, s.weight, s.source_resistance))
    offset = design.target.offset
    if offset:
        if design.reference is None:
            raise CannotRealise(
                f"An offset of {offset:g} V is wanted, but the design has no reference to make it from."
            )
        if design.reference.voltage == 0:
            raise CannotRealise(
                f"An offset of {offset:g} V is wanted, but the reference voltage is 0 V; it must not be 0."
            )
        out.append(Wanted(REFERENCE, offset / design.reference.voltage, design.reference.source_resistance))
    return tuple(out)


def _misfit(arrangement: str, wanted: tuple[Wanted, ...], design: Design) -> str:
    """Why the arrangement cannot make these signs, or an empty string."""
    if arrangement in ("mixed-sign", "two-stage"):
        return ""
    sign = -1.0 if arrangement == "inverting" else 1.0
    for w in wanted:
        if w.weight * sign > 0:
            continue
        if w.source == REFERENCE and design.reference is not None:
            need = "negative" if design.reference.voltage > 0 else "positive"
            return (
                f"The {arrangement} arrangement cannot make an offset of {design.target.offset:g} V from a reference of "
                f"{design.reference.voltage:g} V; it would take a {need} reference."
            )
        return f"The {arrangement} arrangement makes {WHAT_IT_MAKES[arrangement]}; '{w.source}' wants {w.weight:g}."
    return ""


def able(design: Design) -> tuple[str, ...]:
    """The arrangements that can make the wanted weights and offset, in the order of `ARRANGEMENTS`; empty if none can."""
    try:
        wanted = wanted_weights(design)
    except CannotRealise:
        return ()
    return tuple(a for a in ARRANGEMENTS if not _misfit(a, wanted, design))


def check_able(design: Design, arrangement: str) -> tuple[Wanted, ...]:
    """The wanted weights, once it is sure that the arrangement can make their signs.

    Raises
    ------
    CannotRealise
        With the reason; its `able` lists the arrangements that can.
    """
    if arrangement not in ARRANGEMENTS:
        raise CannotRealise(f"'{arrangement}' is no arrangement; there are {', '.join(ARRANGEMENTS)}.", able(design))
    wanted = wanted_weights(design)
    reason = _misfit(arrangement, wanted, design)
    if reason:
        others = able(design)
        raise CannotRealise(f"{reason} These can make it: {', '.join(others)}.", others)
    return wanted


def ground_weight(wanted: tuple[Wanted, ...]) -> float:
    """What a ground leg of a single cell must weigh: above 0 on the non-inverting node, below 0 on the inverting one."""
    plus = math.fsum(w.weight for w in wanted if w.weight > 0)
    minus = math.fsum(-w.weight for w in wanted if w.weight < 0)
    weight = math.fsum((1.0, minus, -plus))
    return 0.0 if abs(weight) <= BALANCE * (1.0 + minus + plus) else weight


def _default_feedback(design: Design, wanted: tuple[Wanted, ...], ground: float) -> float:
    """A feedback resistor that keeps every resistor within the design's range, near the usual size."""
    kind = design.resistor
    scales = [(abs(w.weight), w.source_resistance) for w in wanted] + [(1.0, 0.0)]
    if ground:
        scales.append((abs(ground), 0.0))
    low = max(w * (kind.least + rs) for w, rs in scales)
    high = min(w * (kind.most + rs) for w, rs in scales)
    usual = USUAL_LEG * math.exp(sum(math.log(w) for w, _ in scales) / len(scales))
    if low > high:  # no value keeps all of them inside: miss by the same ratio at both ends, with every leg positive
        return max(math.sqrt(low * high), max(w * (rs + 0.1 * kind.least) for w, rs in scales))
    decade = math.floor(math.log10(usual))
    # E24: a default feedback resistor that can be bought
    shop = values_within("E24", 10.0 ** (decade - 2), 9.1 * 10.0 ** (decade + 2))
    inside = [r for r in shop if low <= r <= high] or [min(max(usual, low), high)]
    return float(f"{min(inside, key=lambda r: abs(math.log(r / usual))):.12g}")


def exact_cells(design: Design, arrangement: str, *, feedback: float | None = None) -> tuple[Cell, ...]:
    """The cells that make the wanted weights and offset exactly, with an ideal op amp and sources as they are.

    Parameters
    ----------
    design : Design
        Wanted weights, offset, reference, source resistances and the range of resistors.
    arrangement : str
        One of `ARRANGEMENTS`.
    feedback : float, optional
        Feedback resistor of every cell [ohm]. Left out, one is chosen that keeps every resistor within
        `design.resistor.least` to `most` if any can; `out_of_range` says which are outside.

    Returns
    -------
    tuple of Cell
        Values are as the recipe gives them, not preferred values. `two-stage` without positive weights, or
        without negative ones, needs no more cells than `inverting` or `inverting-pair`, and has those.

    Raises
    ------
    CannotRealise
        With the reason, and in `able` the arrangements that can.
    """
    wanted = check_able(design, arrangement)
    single = arrangement in ("non-inverting", "mixed-sign")
    ground = ground_weight(wanted) if single else 0.0
    if feedback is None:
        feedback = _default_feedback(design, wanted, ground)
    elif not (math.isfinite(feedback) and feedback > 0):
        raise CannotRealise(
            f"The feedback resistor must be positive and finite, in ohm; it is {feedback:g}.", able(design)
        )
    legs = {w.source: Leg(w.source, _leg(design, w, feedback)) for w in wanted}
    plus = tuple(legs[w.source] for w in wanted if w.weight > 0)
    minus = tuple(legs[w.source] for w in wanted if w.weight < 0)

    if single:
        return (
            Cell(
                minus=minus,
                plus=plus,
                minus_ground=feedback / -ground if ground < 0 else None,
                plus_ground=feedback / ground if ground > 0 else None,
                feedback=feedback,
            ),
        )
    if not plus:
        return (Cell(minus=minus, plus_ground=0.0, feedback=feedback),)
    return (
        Cell(minus=plus, plus_ground=0.0, feedback=feedback),
        Cell(minus=(*minus, Leg(cell_name(0), feedback)), plus_ground=0.0, feedback=feedback),
    )


def _leg(design: Design, w: Wanted, feedback: float) -> float:
    """The fitted resistor of a leg: its share of the recipe less what the source already has."""
    resistance = feedback / abs(w.weight) - w.source_resistance
    if resistance <= 0:
        whose = "the reference" if w.source == REFERENCE else f"'{w.source}'"
        raise CannotRealise(
            f"The leg of {whose} would be {ohms(resistance)}: its source resistance of {ohms(w.source_resistance)} is already too much "
            f"for a weight of {w.weight:g}. Raise the feedback resistor, {ohms(feedback)}, above {ohms(abs(w.weight) * w.source_resistance)}, "
            f"or buffer the source.",
            able(design),
        )
    return resistance


def ohms(value: float) -> str:
    """A resistance in a sentence: `1 MΩ`, `4.75 kΩ`."""
    return format_quantity(float(value), "Ω", 4, trim=True)


def out_of_range(design: Design, cells: tuple[Cell, ...]) -> tuple[str, ...]:
    """One sentence for each resistor outside the design's least and most; empty if all can be bought."""
    kind = design.resistor
    said = []

    def look(name: str, ohm: float | None) -> None:
        if ohm is None or ohm == 0 or kind.least * (1 - 1e-9) <= ohm <= kind.most * (1 + 1e-9):
            return
        side = f"below the least, {ohms(kind.least)}" if ohm < kind.least else f"above the most, {ohms(kind.most)}"
        said.append(f"The {name} would be {ohms(ohm)}, {side}.")

    for k, cell in enumerate(cells):
        where = f", {cell_name(k)}" if len(cells) > 1 else ""
        for leg in (*cell.minus, *cell.plus):
            look(f"{leg.source} leg{where}", leg.resistance)
        look(f"ground leg of the inverting node{where}", cell.minus_ground)
        look(f"ground leg of the non-inverting node{where}", cell.plus_ground)
        look(f"feedback resistor{where}", cell.feedback)
    return tuple(said)


def arrangement_of(cells: tuple[Cell, ...]) -> str | None:
    """Which arrangement the cells are, by where their legs go; None if they are none of the five."""
    if len(cells) == 1:
        minus, plus = bool(cells[0].minus), bool(cells[0].plus)
        return {(True, False): "inverting", (False, True): "non-inverting", (True, True): "mixed-sign"}.get(
            (minus, plus)
        )
    if len(cells) != 2:
        return None
    first, last = cells
    # The reference may lift the non-inverting nodes (single supply); a signal there makes it another stage.
    if any(leg.source != REFERENCE for leg in (*first.plus, *last.plus)) or not first.minus:
        return None
    inner = [leg for leg in last.minus if leg.source == cell_name(0)]
    if len(inner) != 1:
        return None
    return "inverting-pair" if len(last.minus) == 1 else "two-stage"


def ideal_weights(design: Design, cells: tuple[Cell, ...]) -> tuple[dict[str, float], float]:
    """What the cells make of every signal, and the offset, with ideal op amps and the sources as they are.

    Parameters
    ----------
    design : Design
        Signals, their source resistances, and the reference; its own `cells` are not looked at.
    cells : tuple of Cell

    Returns
    -------
    weights : dict of float
        By signal name [V/V]; 0 for a signal that feeds no leg.
    offset : float
        Output with every signal at 0 V [V].

    Raises
    ------
    InvalidDesign
        If a cell has no feedback, nothing on its non-inverting node, or a leg from an unknown source.

    Notes
    -----
    Source: Kirchhoff's current law at both nodes of each cell, which an ideal op amp keeps at one voltage.
    """
    names = [*design.signal_names, REFERENCE]
    column = {name: i for i, name in enumerate(names)}
    series = dict.fromkeys(names, 0.0) | {s.name: s.source_resistance for s in design.signals}
    if design.reference is not None:
        series[REFERENCE] = design.reference.source_resistance
    outputs: dict[str, np.ndarray] = {}

    def voltage(source: str, where: str) -> np.ndarray:
        if source in column:
            unit = np.zeros(len(names))
            unit[column[source]] = 1.0
            return unit
        if source in outputs:
            return outputs[source]
        raise InvalidDesign(
            f"{where} has a leg from '{source}', which is no signal, no earlier cell and not the reference."
        )

    for k, cell in enumerate(cells):
        where = cell_name(k)
        if cell.feedback is None:
            raise InvalidDesign(f"{where} has no feedback resistor; an open loop makes no weights.")
        minus_current, minus_siemens = _gathered(cell.minus, cell.minus_ground, voltage, series, where, len(names))
        v_plus = _plus_voltage(cell, voltage, series, where, len(names))
        noise_gain = 1.0 + cell.feedback * minus_siemens
        outputs[where] = noise_gain * v_plus - cell.feedback * minus_current

    made = outputs[cell_name(len(cells) - 1)] if cells else np.zeros(len(names))
    offset = float(made[-1]) * design.reference.voltage if design.reference is not None else 0.0
    return {name: float(made[column[name]]) for name in design.signal_names}, offset


def _gathered(legs, ground, voltage, series, where, n):
    """Short-circuit current per volt of each source into a node, and the node's conductance."""
    current, siemens = np.zeros(n), 0.0
    for leg in legs:
        ohm = leg.resistance + series.get(leg.source, 0.0)
        if ohm <= 0:
            raise InvalidDesign(f"{where} has a leg from '{leg.source}' of {ohm:g} ohm; it must be positive.")
        current += voltage(leg.source, where) / ohm
        siemens += 1.0 / ohm
    if ground is not None:
        siemens += 1.0 / ground
    return current, siemens


def _plus_voltage(cell, voltage, series, where, n):
    """Voltage of the non-inverting node per volt of each source."""
    if cell.plus_ground == 0:
        return np.zeros(n)
    for leg in cell.plus:
        if leg.resistance + series.get(leg.source, 0.0) == 0:
            if len(cell.plus) > 1 or cell.plus_ground is not None:
                raise InvalidDesign(
                    f"{where} has a leg of 0 ohm from '{leg.source}' beside others; it may be 0 only when it is alone."
                )
            return voltage(leg.source, where)
    current, siemens = _gathered(cell.plus, cell.plus_ground, voltage, series, where, n)
    if siemens == 0:
        raise InvalidDesign(f"The non-inverting node of {where} is connected to nothing.")
    return current / siemens


def weight_errors(design: Design, cells: tuple[Cell, ...]) -> dict[str, float]:
    """made / wanted - 1 of every signal, and of the offset under the name `reference`, with ideal op amps."""
    made, offset = ideal_weights(design, cells)
    goal = {w.source: w.weight for w in wanted_weights(design)}
    if REFERENCE in goal:
        goal[REFERENCE] = design.target.offset
    values = made | {REFERENCE: offset}
    return {source: values[source] / w - 1.0 for source, w in goal.items()}
