"""Two resistors for one, in series or in parallel, where that earns its place.

A pair is added to the leg that errs most, and only while the worst weight error is
past a tenth of the parts' tolerance (closer than that no board shows) and a pair at
least takes a fifth off it. What it costs is on the choice: one part more each.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sumwright.engine.arrangement import Wanted, ideal_weights, wanted_weights, weight_errors
from sumwright.engine.realise.choices import Pair
from sumwright.engine.stage import REFERENCE, Cell, Design

TRIED = 24  # sets of one arrangement that pairs are tried on
EARNS = 0.8  # a pair must bring the worst error under this share of what it was


class Combinations:
    """Every value two resistors make, in series or in parallel, rising."""

    def __init__(self, values):
        values = np.asarray(values, float)
        first, second = np.triu_indices(values.size)
        a, b = values[first], values[second]
        total = np.concatenate([a + b, a * b / (a + b)])
        order = np.argsort(total, kind="stable")
        self.ohm = total[order]
        self.first, self.second = np.tile(a, 2)[order], np.tile(b, 2)[order]
        self.series = order < a.size

    def near(self, ohm: float, number: int = 4) -> list[tuple[float, float, float, str]]:
        """Some pairs about a value: (made, first, second, how), nearest first."""
        at = int(np.searchsorted(self.ohm, ohm))
        some = range(max(0, at - number), min(self.ohm.size, at + number))
        picked = sorted(some, key=lambda k: abs(self.ohm[k] - ohm))
        return [
            (
                float(self.ohm[k]),
                float(self.first[k]),
                float(self.second[k]),
                "series" if self.series[k] else "parallel",
            )
            for k in picked
        ]


def with_pairs(design: Design, found, values, least_input=None) -> dict[tuple[Cell, ...], tuple[Pair, ...]]:
    """Sets with pairs in them, made from sets without.

    Parameters
    ----------
    design : Design
    found : sequence of tuple of Cell
        Sets of single resistors.
    values : (k,) array
        What a pair may be made of [ohm].
    least_input : dict of float, optional
        By signal name, the least its leg may be [ohm].

    Returns
    -------
    dict
        The pairs of each set, by its cells, in which a pair stands as its equivalent resistance.
    """
    stop = 0.1 * design.resistor.tolerance
    wanted = {w.source: w for w in wanted_weights(design)}
    combinations = Combinations(values)
    made: dict[tuple[Cell, ...], tuple[Pair, ...]] = {}
    for cells in _promising(design, found, len(wanted)):
        pairs: dict[str, Pair] = {}
        worst = _worst(design, cells)
        while worst > stop and len(pairs) < len(wanted):
            step = _best_step(design, cells, wanted, combinations, pairs, least_input or {})
            if step is None or step[0] > EARNS * worst:
                break
            worst, cells, pair = step
            pairs = pairs | {pair.place: pair}
            made[cells] = tuple(pairs.values())
    return made


def _promising(design: Design, found, legs: int):
    """The sets to try: for every number of legs that may be replaced, those whose other legs are best."""
    errors = [np.sort(np.abs(list(weight_errors(design, cells).values())))[::-1] for cells in found]
    picked: dict[int, None] = {}
    for k in range(min(legs, 4)):
        order = sorted(range(len(found)), key=lambda i: errors[i][k])
        picked |= dict.fromkeys(order[: TRIED // 4])
    return [found[i] for i in picked]


def _worst(design: Design, cells) -> float:
    return max(abs(e) for e in weight_errors(design, cells).values())


def _best_step(design: Design, cells, wanted, combinations: Combinations, pairs, least_input):
    """The one pair that takes most off the worst error: in the leg that errs most, or in a ground leg."""
    errors = weight_errors(design, cells)
    worst_source = max(errors, key=lambda s: abs(errors[s]))
    place, ohm, put = _leg_place(cells, worst_source)
    options = []
    if place not in pairs:
        options.append((place, put, _wanted_leg(design, cells, wanted, errors, ohm)))
    for k, cell in enumerate(cells):
        for name, ground in (("plus ground", "plus_ground"), ("minus ground", "minus_ground")):
            now = getattr(cell, ground)
            where = f"{name}, cell {k + 1}" if len(cells) > 1 else name
            if now and where not in pairs:
                middle = (max(errors.values()) + min(errors.values())) / 2
                options.append((where, _ground_put(cells, k, ground), _wanted_ground(design, cells, k, ground, middle)))
    best = None
    for where, fit, target in options:
        if target is None or not np.isfinite(target) or target <= 0:
            continue
        for made, first, second, how in combinations.near(target):
            if where == place and made < least_input.get(worst_source, 0.0):
                continue
            new = fit(made)
            worst = _worst(design, new)
            if best is None or worst < best[0]:
                best = (worst, new, Pair(where, first, second, how))
    return best


def _leg_place(cells, source):
    """Name and value of a source's leg, and how to put another value there; the last cell's for a source with several."""
    places = [
        (k, side, i)
        for k, cell in enumerate(cells)
        for side in ("minus", "plus")
        for i, leg in enumerate(getattr(cell, side))
        if leg.source == source
    ]
    k, side, i = places[-1]

    def put(ohm):
        legs = list(getattr(cells[k], side))
        legs[i] = replace(legs[i], resistance=ohm)
        return (*cells[:k], replace(cells[k], **{side: tuple(legs)}), *cells[k + 1 :])

    where = f", cell {k + 1}" if source == REFERENCE and len(cells) > 1 else ""
    return f"{source} leg{where}", getattr(cells[k], side)[i].resistance, put


def _wanted_leg(design: Design, cells, wanted: dict[str, Wanted], errors, ohm: float) -> float:
    """The leg value that would make its weight exact, the scale of its node left where the others have it."""
    source = max(errors, key=lambda s: abs(errors[s]))
    same_sign = [e for s, e in errors.items() if s != source and (wanted[s].weight > 0) == (wanted[source].weight > 0)]
    middle = (max(same_sign) + min(same_sign)) / 2 if same_sign else 0.0
    rs = wanted[source].source_resistance
    return (ohm + rs) * (1.0 + errors[source]) / (1.0 + middle) - rs


def _ground_put(cells, k: int, ground: str):
    return lambda ohm: (*cells[:k], replace(cells[k], **{ground: ohm}), *cells[k + 1 :])


def _wanted_ground(design: Design, cells, k: int, ground: str, middle: float) -> float | None:
    """The ground leg that would move every non-inverting weight by the same ratio, so that their errors centre on 0."""
    now = getattr(cells[k], ground)
    plus = [leg.source for leg in cells[k].plus]
    if not plus:
        return None

    def weight(ohm):
        made, offset = ideal_weights(design, _ground_put(cells, k, ground)(ohm))
        return (made | {REFERENCE: offset})[plus[0]]

    # The weight is a / (b + 1/R) or a + b/R: one step on the conductance from a secant of it is exact or nearly so.
    here, there = weight(now), weight(now * 1.001)
    goal = here / (1.0 + middle)
    siemens = 1.0 / now
    if ground == "plus_ground":
        here, there, goal = 1.0 / here, 1.0 / there, 1.0 / goal
    slope = (there - here) / (1.0 / (now * 1.001) - siemens)
    return (
        None if slope == 0 else 1.0 / (siemens + (goal - here) / slope) if siemens + (goal - here) / slope > 0 else None
    )
