"""Edits of a design: a frozen design and a wish go in, another frozen design comes out.

When a wanted weight changes, the resistors can follow it three ways, the
person's choice: `nearest` (the changed leg and the ground legs take the nearest
value of the design's series), `exact` (the exact value) or `kept` (the board is
as it is: nothing changes, and the margins say what it makes). Legs whose weight
did not change keep their value, so a set taken from elsewhere survives an edit.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import fields, replace
from typing import Any

import numpy as np

from sumwright.engine.arrangement import able, arrangement_of, exact_cells, wanted_weights
from sumwright.engine.realise.best_set import search
from sumwright.engine.realise.choices import MOST_VALUES, weight_errors
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import REFERENCE, Cell, Design, Leg, Reference, Signal, cell_name
from sumwright.errors import CannotRealise, InvalidDesign, InvalidQuantity
from sumwright.quantity import format_quantity

FOLLOW = ("nearest", "exact", "kept")
SIGNALS_MOST = 64  # as many as a design file holds
NAME_MOST = 64
BEST_WITHIN = 0.5  # s of work that a new sum's resistors may cost before it is drawn
_CELL = re.compile(r"cell \d+")


def check_name(name: str, taken: tuple[str, ...] = ()) -> str:
    """A signal's name, trimmed; refuses what a design file refuses.

    Raises
    ------
    InvalidDesign
        If it is empty, too long, reserved or taken.
    """
    name = " ".join(str(name).split())
    if not name:
        raise InvalidDesign("A signal needs a name.", "name")
    if len(name) > NAME_MOST:
        raise InvalidDesign(f"A signal's name may have {NAME_MOST} characters; this one has {len(name)}.", "name")
    if name in ("reference", "output") or _CELL.fullmatch(name):
        raise InvalidDesign(f"“{name}” is a word of the sheet itself; a signal needs another name.", "name")
    if name in taken:
        raise InvalidDesign(f"There is a signal “{name}” already; names must differ.", "name")
    return name


# ---------------------------------------------------------------- signals


def with_signal(design: Design, name: str, **changes: Any) -> Design:
    """The design with some figures of one signal changed (not its weight or name: those move resistors)."""
    old = design.signal(name)
    new = replace(old, **changes)
    if new.low > new.high:
        raise InvalidQuantity(
            f"{name}: the low end of its range, {new.low:g} V, must not be above the high end, {new.high:g} V."
        )
    if new.source_resistance < 0:
        raise InvalidQuantity(f"{name}: a source resistance is 0 or more, in ohms; it is {new.source_resistance:g}.")
    if new.frequency < 0:
        raise InvalidQuantity(f"{name}: a frequency is 0 or more, in hertz; it is {new.frequency:g}.")
    return replace(design, signals=tuple(new if s.name == name else s for s in design.signals))


def with_value(design: Design, name: str, volts: float) -> Design:
    """The design with one signal at `volts`, nothing else checked: the path of a moving slider."""
    return replace(design, signals=tuple(replace(s, value=volts) if s.name == name else s for s in design.signals))


def with_weight(design: Design, name: str, weight: float, follow: str = "nearest") -> Design:
    """The design with one wanted weight changed, its resistors following as `follow` says.

    Raises
    ------
    CannotRealise
        If the present arrangement cannot make it; `able` names those that can.
    """
    if weight == 0 or not math.isfinite(weight):
        raise InvalidQuantity(f"{name}: a wanted weight is any number but 0; it is {weight:g}.")
    wanted = replace(design, signals=tuple(replace(s, weight=weight) if s.name == name else s for s in design.signals))
    return refit(design, wanted, follow)


def with_offset(design: Design, volts: float, follow: str = "nearest") -> Design:
    """The design with another wanted offset; the reference leg follows."""
    wanted = replace(design, target=replace(design.target, offset=volts))
    if volts and wanted.reference is None:
        wanted = replace(wanted, reference=Reference(2.5))
    return refit(design, wanted, follow)


def with_name(design: Design, name: str, new: str) -> Design:
    """The design with one signal renamed, on its legs too."""
    if new == name:
        return design
    new = check_name(new, tuple(n for n in design.signal_names if n != name))
    signals = tuple(replace(s, name=new) if s.name == name else s for s in design.signals)

    def legs(old):
        return tuple(replace(leg, source=new) if leg.source == name else leg for leg in old)

    cells = tuple(replace(c, minus=legs(c.minus), plus=legs(c.plus)) for c in design.cells)
    return replace(design, signals=signals, cells=cells)


def added(design: Design, follow: str = "nearest", name: str = "") -> Design:
    """The design with one signal more, with a leg: a weight like its neighbours', the last signal's range."""
    if len(design.signals) >= SIGNALS_MOST:
        raise InvalidDesign(f"A sheet holds {SIGNALS_MOST} signals; this one has {len(design.signals)}.", "signals")
    k = len(design.signals) + 1
    while not name:
        name = "" if f"signal {k}" in design.signal_names else f"signal {k}"
        k += 1
    name = check_name(name, design.signal_names)
    last = design.signals[-1] if design.signals else Signal("", 0.1, 0.0, 10.0, 0.0)
    new = replace(last, name=name, value=min(max(0.0, last.low), last.high))
    return refit(design, replace(design, signals=(*design.signals, new)), follow, must=(name,))


def removed(design: Design, name: str, follow: str = "nearest") -> Design:
    """The design without that signal and its leg."""
    if len(design.signals) < 2:
        raise InvalidDesign(f"“{name}” is the only signal; a stage needs at least one.", "signals")
    signals = tuple(s for s in design.signals if s.name != name)
    return refit(design, replace(design, signals=signals), follow)


def moved(design: Design, name: str, places: int) -> Design:
    """The design with that signal moved up (negative) or down its node's rows."""
    order = list(design.signals)
    k = next(i for i, s in enumerate(order) if s.name == name)
    to = min(max(k + places, 0), len(order) - 1)
    order.insert(to, order.pop(k))
    return replace(design, signals=tuple(order))


def in_order(design: Design, names: tuple[str, ...]) -> Design:
    """The design with its signals in the given order."""
    if sorted(names) != sorted(design.signal_names):
        raise InvalidDesign("The new order must name every signal once.", "signals")
    return replace(design, signals=tuple(design.signal(n) for n in names))


# ---------------------------------------------------------------- resistors


def part_places(design: Design) -> dict[str, tuple[int, str, int]]:
    """Where each resistor sits, by the key the drawing uses: (cell, field, place in the field)."""
    places = {}
    for c, cell in enumerate(design.cells):
        for node in ("minus", "plus"):
            for j, leg in enumerate(getattr(cell, node)):
                places[f"{c}/{node}/{leg.source}"] = (c, node, j)
        for field in ("minus_ground", "plus_ground", "feedback"):
            if getattr(cell, field) is not None:
                places[f"{c}/{field}"] = (c, field, -1)
    return places


def with_resistance(design: Design, key: str, ohm: float) -> Design:
    """The design with one resistor changed; `key` as `part_places` names it."""
    place = part_places(design).get(key)
    if place is None:
        raise InvalidDesign(f"There is no resistor “{key}” on this sheet.", key)
    if not (math.isfinite(ohm) and ohm > 0):
        raise InvalidQuantity(f"A resistor must be more than 0 Ω; it is {format_quantity(ohm, 'Ω', 4, trim=True)}.")
    c, field, j = place
    cell = design.cells[c]
    if j >= 0:
        legs = list(getattr(cell, field))
        legs[j] = replace(legs[j], resistance=ohm)
        cell = replace(cell, **{field: tuple(legs)})  # type: ignore[arg-type]
    else:
        cell = replace(cell, **{field: ohm})  # type: ignore[arg-type]
    return replace(design, cells=(*design.cells[:c], cell, *design.cells[c + 1 :]))


def with_feedback_capacitance(design: Design, c: int, farad: float) -> Design:
    """The design with the capacitor across the feedback of cell `c` (from 0); 0 = none."""
    if not 0 <= c < len(design.cells):
        raise InvalidDesign(f"There is no cell {c + 1} on this sheet.", "cells")
    if not (math.isfinite(farad) and farad >= 0):
        raise InvalidQuantity(f"A capacitance is 0 or more, in farads; it is {farad:g}.")
    cell = replace(design.cells[c], feedback_capacitance=farad)
    return replace(design, cells=(*design.cells[:c], cell, *design.cells[c + 1 :]))


def with_arrangement(design: Design, arrangement: str, follow: str = "nearest") -> Design:
    """The design realised anew by that arrangement's recipe, in the series' values unless `exact`.

    Raises
    ------
    CannotRealise
        If it cannot make the weights; `able` names those that can.
    """
    cells = exact_cells(design, arrangement)
    return replace(design, cells=cells if follow == "exact" else rounded(design, cells))


def same_legs(design: Design, chosen: str, made: str | None) -> bool:
    """Whether `chosen` has its legs, for these weights, where `made` has them."""
    if not chosen or made is None or chosen == made:
        return chosen == made
    try:
        return arrangement_of(exact_cells(design, chosen)) == made
    except CannotRealise:
        return False


def realised(design: Design, follow: str = "nearest") -> Design:
    """The design with cells: as it is, or by the first arrangement that can make the weights."""
    if design.cells:
        return design
    ways = able(design)
    if not ways:
        exact_cells(design, "mixed-sign")  # raises with the reason
        raise CannotRealise("No arrangement can make these weights.")
    prefer = [a for a in ("inverting", "non-inverting", "mixed-sign") if a in ways]
    return with_arrangement(design, (prefer or ways)[0], follow)


def realised_best(design: Design, seconds: float = BEST_WITHIN) -> Design:
    """The design with the set of its series that errs least, as far as a short search finds it.

    The arrangement is the one `realised` takes; without a better set its nearest values stay.
    """
    near = realised(design)
    arrangement = arrangement_of(near.cells)
    kind = design.resistor
    values = values_within(kind.series, kind.least, kind.most)
    if arrangement is None or not 0 < values.size <= MOST_VALUES:
        return near
    try:
        found = search(design, arrangement, values, seconds=seconds, proof=False).cells
    except CannotRealise:
        return near
    best = min((near.cells, *found), key=lambda cells: _worst(design, cells))
    return replace(near, cells=best)


def _worst(design: Design, cells: tuple[Cell, ...]) -> float:
    return max(abs(error) for error in weight_errors(design, cells).values())


def nearest_in_series(design: Design) -> Callable[[float], float]:
    """Rounds a resistance to the design's series, nearest by ratio."""
    values = np.log(values_within(design.resistor.series, 0.1, 1e9))

    def near(ohm: float) -> float:
        return float(f"{math.exp(values[np.abs(values - math.log(ohm)).argmin()]):.6g}")

    return near


def rounded(design: Design, cells: tuple[Cell, ...]) -> tuple[Cell, ...]:
    """The cells with every resistor at the nearest value of the design's series."""
    near = nearest_in_series(design)

    def one(ohm):
        return ohm if not ohm else near(ohm)

    def legs(old):
        return tuple(replace(leg, resistance=one(leg.resistance)) for leg in old)

    return tuple(
        replace(c, minus=legs(c.minus), plus=legs(c.plus), minus_ground=one(c.minus_ground),
                plus_ground=one(c.plus_ground), feedback=one(c.feedback))
        for c in cells
    )  # fmt: skip


def refit(old: Design, new: Design, follow: str, must: tuple[str, ...] = ()) -> Design:
    """`new` (its wishes changed, its cells those of `old`) with cells that follow its wishes.

    Legs of sources whose wanted weight is the same keep their value; so do the
    feedbacks. With `kept` only what must be there or gone (`must`, removed
    signals) changes.
    """
    if not old.cells:
        return new
    gone = set(old.signal_names) - set(new.signal_names)
    arrangement = arrangement_of(old.cells)
    if follow == "kept" and not must:
        return replace(new, cells=_without(old.cells, gone))
    if arrangement is None:
        if must:
            return replace(new, cells=_with_leg(old, new, must[0]))
        return replace(new, cells=_without(old.cells, gone))
    recipe = exact_cells(new, arrangement, feedback=old.cells[-1].feedback)
    if follow == "exact":
        return replace(new, cells=_with_capacitors(recipe, old.cells))
    keep = set(old.signal_names) | {REFERENCE} if follow == "kept" else _unchanged(old, new)
    if len(recipe) == 1 and len(old.cells) == 1 and recipe[0].plus:
        cell = _single(old, new, keep, follow)
        return replace(new, cells=(cell,))
    fitted = rounded(new, _scaled(recipe, old.cells, new))
    return replace(new, cells=tuple(_merged(a, b, keep, follow) for a, b in _paired(old.cells, fitted)))


def _single(old: Design, new: Design, keep: set[str], follow: str) -> Cell:
    """One op amp with legs on its + node, refitted so that legs that may stay do, and still weigh what they did.

    A + leg of conductance g weighs `scale * g`, where scale = noise gain / (conductance
    of the whole + node). The scale is kept at what the fitted legs have, and the ground
    leg, which side it is on included, takes up the difference. Source: the node
    equations of `nodes`, ideal op amp.
    """
    was = old.cells[0]
    feedback = was.feedback or 1.0
    series = {s.name: s.source_resistance for s in new.signals}
    series[REFERENCE] = new.reference.source_resistance if new.reference else 0.0

    def siemens(legs):
        return sum(1.0 / (leg.resistance + series.get(leg.source, 0.0)) for leg in legs)

    def ground(ohm):
        return 1.0 / ohm if ohm else 0.0

    node = siemens(was.plus) + ground(was.plus_ground)
    gain = 1.0 + feedback * (siemens(was.minus) + ground(was.minus_ground))
    scale = gain / node if was.plus and node > 0 else feedback
    near = nearest_in_series(new)
    kept = {leg.source: leg for leg in (*was.minus, *was.plus)}
    minus: list[Leg] = []
    plus: list[Leg] = []
    for source, weight in wishes(new):
        side, before = (minus, was.minus) if weight < 0 else (plus, was.plus)
        if source in keep and any(leg.source == source for leg in before):
            side.append(kept[source])
            continue
        per_weight = feedback if weight < 0 else scale
        ohm = per_weight / abs(weight) - series[source]
        if ohm <= 0:
            raise CannotRealise(
                f"The leg of '{source}' would need {ohm:.3g} Ω besides its source's {series[source]:g} Ω; "
                "a larger feedback resistor makes room for it."
            )
        side.append(Leg(source, near(ohm)))
    if follow == "kept":
        return replace(was, minus=tuple(minus), plus=tuple(plus))
    legs = siemens(plus)
    bare = 1.0 + feedback * siemens(minus)  # noise gain without a ground leg on the - node
    short = bare / scale - legs  # conductance that the + node lacks
    limit = 1e-3 * legs
    return replace(
        was, minus=tuple(minus), plus=tuple(plus), plus_ground=near(1.0 / short) if short > limit else None,
        minus_ground=near(feedback / (scale * legs - bare)) if short < -limit else None,
    )  # fmt: skip


def wishes(design: Design) -> list[tuple[str, float]]:
    """Every weight to be made: the signals in order, then the reference's if an offset is wanted."""
    return [(w.source, w.weight) for w in wanted_weights(design)]


def _with_capacitors(recipe: tuple[Cell, ...], old: tuple[Cell, ...]) -> tuple[Cell, ...]:
    """The recipe's cells with the capacitors that are fitted."""
    return tuple(replace(b, feedback_capacitance=a.feedback_capacitance) for a, b in _paired(old, recipe))


def _scaled(recipe: tuple[Cell, ...], old: tuple[Cell, ...], design: Design) -> tuple[Cell, ...]:
    """The recipe's legs for the feedbacks and links that stay fitted, where those are not the recipe's own."""
    if len(recipe) != 2 or len(old) != 2:
        return recipe
    link = next((leg.resistance for leg in old[1].minus if leg.source == cell_name(0)), None)
    if not (link and old[0].feedback and old[1].feedback and recipe[0].feedback):
        return recipe
    series = {s.name: s.source_resistance for s in design.signals}
    if design.reference:
        series[REFERENCE] = design.reference.source_resistance
    factor = old[0].feedback * old[1].feedback / link / recipe[0].feedback

    def leg(one):
        rs = series.get(one.source, 0.0)
        ohm = factor * (one.resistance + rs) - rs
        return replace(one, resistance=ohm) if ohm > 0 else one

    return (replace(recipe[0], minus=tuple(leg(one) for one in recipe[0].minus)), *recipe[1:])


def _unchanged(old: Design, new: Design) -> set[str]:
    """Sources whose leg may stay: wanted weight and source resistance as before."""
    before = {s.name: (s.weight, s.source_resistance) for s in old.signals}
    same = {s.name for s in new.signals if before.get(s.name) == (s.weight, s.source_resistance)}
    if (old.target.offset, old.reference) == (new.target.offset, new.reference):
        same.add(REFERENCE)
    return same | {cell_name(k) for k in range(len(old.cells))}


def _paired(old: tuple[Cell, ...], new: tuple[Cell, ...]):
    return zip((*old, *(Cell() for _ in range(len(new) - len(old)))), new, strict=False)


def _merged(old: Cell, new: Cell, keep: set[str], follow: str) -> Cell:
    """The recipe's cell with the values that may stay taken from the old one."""

    def legs(field):
        was = {leg.source: leg.resistance for leg in getattr(old, field)}
        return tuple(
            replace(leg, resistance=was[leg.source]) if leg.source in keep and leg.source in was else leg
            for leg in getattr(new, field)
        )

    def ground(field):
        mine, theirs = getattr(old, field), getattr(new, field)
        same_legs = [leg.source for leg in old.minus + old.plus] == [leg.source for leg in new.minus + new.plus]
        stay = follow == "kept" or (same_legs and all(leg.source in keep for leg in new.minus + new.plus))
        return mine if stay and mine is not None and theirs is not None else theirs

    keeps_feedback = follow != "exact" and old.feedback is not None
    return replace(
        new, minus=legs("minus"), plus=legs("plus"), minus_ground=ground("minus_ground"),
        plus_ground=ground("plus_ground"), feedback=old.feedback if keeps_feedback else new.feedback,
        feedback_capacitance=old.feedback_capacitance,
    )  # fmt: skip


def _without(cells: tuple[Cell, ...], gone: set[str]) -> tuple[Cell, ...]:
    if not gone:
        return cells

    def legs(old):
        return tuple(leg for leg in old if leg.source not in gone)

    return tuple(replace(c, minus=legs(c.minus), plus=legs(c.plus)) for c in cells)


def _with_leg(old: Design, new: Design, name: str) -> tuple[Cell, ...]:
    """Cells of no known arrangement with one leg more, where legs of that sign are."""
    last = old.cells[-1]
    feedback = last.feedback or old.cells[0].feedback or new.resistor.least
    leg = Leg(name, max(feedback / abs(new.signal(name).weight), new.resistor.least))
    node = "minus" if new.signal(name).weight < 0 or not last.plus else "plus"
    return (*old.cells[:-1], replace(last, **{node: (*getattr(last, node), leg)}))  # type: ignore[arg-type]


# ---------------------------------------------------------------- everything else

# Groups of figures a person edits in a drawer: the design's field, and what each figure must be.
ABOVE_ZERO = {
    "open_loop_gain", "gain_bandwidth", "second_pole", "slew_rate", "input_resistance", "cmrr", "psrr", "resistance",
    "least", "most", "power", "thermal_resistance", "noise", "accuracy", "bandwidth", "output_current",
}  # fmt: skip
ANY_SIGN = {"voltage", "high", "low", "offset", "nominal", "common_mode_high", "common_mode_low", "junction_most"}


def with_figure(design: Design, group: str, figure: str, value: Any) -> Design:
    """The design with one figure of `supply`, `load`, `ambient`, `resistor`, `op_amp`, `target` or `reference`.

    Raises
    ------
    InvalidQuantity
        If the value is not allowed there; the sentence says what is.
    """
    part = getattr(design, group)
    if part is None:
        part = Reference(2.5)
    known = {f.name for f in fields(part)}
    if figure not in known:
        raise InvalidDesign(f"{group} has no figure “{figure}”.", f"{group}.{figure}")
    words = ("load " if group == "load" else "") + figure.replace("_", " ")
    words = words[0].upper() + words[1:]
    if isinstance(value, float):
        said = format_quantity(value, "", 4, trim=True)
        if figure in ABOVE_ZERO and value <= 0:
            raise InvalidQuantity(f"{words} must be more than 0; it is {said}.")
        if figure not in ABOVE_ZERO | ANY_SIGN and value < 0:
            raise InvalidQuantity(f"{words} must be 0 or more; it is {said}.")
    new = replace(part, **{figure: value})
    _check_order(group, new)
    return replace(design, **{group: new})


def _true_minus(value: float) -> str:
    return f"{value:g}".replace("-", "\u2212", 1) if value < 0 else f"{value:g}"


def _check_order(group: str, part: Any) -> None:
    pairs = {
        "supply": ("low", "high", "The − rail", "the + rail", "V"),
        "ambient": ("low", "high", "The lowest ambient", "the highest ambient", "°C"),
        "resistor": ("least", "most", "The least resistance", "the most resistance", "Ω"),
        "target": ("low", "high", "The window's bottom", "the window's top", "V"),
        "op_amp": ("supply_least", "supply_most", "The least supply", "the most supply", "V"),
    }
    if group not in pairs:
        return
    low, high, what_low, what_high, unit = pairs[group]
    a, b = getattr(part, low), getattr(part, high)
    if a is not None and b is not None and (a > b or (a == b and group in ("supply", "target"))):
        raise InvalidQuantity(
            f"{what_low}, {_true_minus(a)} {unit}, must be below {what_high}, {_true_minus(b)} {unit}."
        )
