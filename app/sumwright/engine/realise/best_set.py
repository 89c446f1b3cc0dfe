"""The set of values with the smallest worst weight error, for each arrangement, and runners-up.

The optimum is proved, not rounded to: at virtual grounds the legs are independent once the
scale is fixed, so every best set is met by a walk over the scale and the nearest scale that
the feedback resistors can make is looked up on both sides (the error is V-shaped in it).
At a non-inverting node the scale depends on the legs themselves and on the ground leg; there
every set whose own bound is under the best found so far is tried with every such set of the
inverting side, and the ground leg is looked up. What is cut short, by number or by time,
leaves a lower bound that is reported.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np

from sumwright.engine.arrangement import USUAL_LEG, Wanted, check_able, weight_errors
from sumwright.engine.realise.legs import Legs, Ratios, Sets, error_at
from sumwright.engine.stage import Cell, Design, Leg, cell_name
from sumwright.errors import CannotRealise, SumwrightError

KEPT = 80  # sets kept beside the best, for the choice between near equals
MOST_LEGS = 2_000_000  # legs of one node's sets made at most before the search is called cut short
BLOCK = 200_000  # combinations looked at in one step


class Cancelled(SumwrightError):
    """The person stopped the search."""


class Outcome(NamedTuple):
    """What a search found: recipes best first, and how good any set could possibly be."""

    cells: Sequence[tuple[Cell, ...]]
    bound: float  # no set of these values is better than this
    whole: bool  # True if the search ended by itself, so that the first is the optimum


Watch = Callable[[float], None]  # told the share done, 0 to 1; raises Cancelled to stop


class Task:
    """One search: what is wanted, from which values, until when, and the best so far."""

    def __init__(
        self,
        design: Design,
        arrangement: str,
        values,
        least_input=None,
        seconds=8.0,
        watch: Watch | None = None,
        proof=True,
    ):
        self.wanted = check_able(design, arrangement)
        self.values = np.asarray(values, float)
        self.least_input = least_input or {}
        self.proof = proof
        self.deadline = time.thread_time() + seconds  # of work, so that a busy machine finds the same
        self.watch = watch or (lambda share: None)
        self.usual = float(np.clip(USUAL_LEG, self.values[0], self.values[-1]))
        self.oddness = np.abs(np.log(self.values / self.usual))

    def legs(self, sign: int) -> Legs:
        """The legs of one sign, each with the values that its source may see."""
        chosen = [w for w in self.wanted if w.weight * sign > 0]
        return Legs(chosen, [self.leg_values(w) for w in chosen])

    def leg_values(self, w: Wanted) -> np.ndarray:
        least = self.least_input.get(w.source, 0.0)
        good = self.values[self.values >= least * (1 - 1e-9)]
        if not good.size:
            raise CannotRealise(
                f"'{w.source}' wants at least {least:g} ohm in its leg, but the largest resistor there is has {self.values[-1]:g} ohm."
            )
        return good

    def late(self) -> bool:
        return time.thread_time() > self.deadline

    def set_oddness(self, legs: Legs, sets: Sets) -> np.ndarray:
        """How far the resistors of each set are from the usual size, in nepers, summed."""
        total = np.zeros(len(sets.index))
        for i, v in enumerate(legs.values):
            total += np.abs(np.log(v / self.usual))[sets.index[:, i]]
        return total


class Pool:
    """The best combinations so far: worst error first, then nearness to the usual size of resistors."""

    def __init__(self, kept=KEPT):
        self.kept = kept
        self.error = np.empty(0)
        self.odd = np.empty(0)
        self.pick = np.empty((0, 3), np.intp)

    @property
    def best(self) -> float:
        return float(self.error[0]) if self.error.size else np.inf

    @property
    def last(self) -> float:
        return float(self.error[-1]) if self.error.size >= self.kept else np.inf

    def add(self, error, odd, *pick) -> None:
        """Offer combinations: arrays that broadcast together, flattened here."""
        error, odd, *pick = np.broadcast_arrays(error, odd, *pick)  # type: ignore[assignment]
        good = np.flatnonzero((error.ravel() <= self.last) & np.isfinite(error.ravel()))
        if good.size > self.kept:
            e = error.ravel()[good]
            good = good[e <= np.partition(e, self.kept)[self.kept]]
        if not good.size:
            return
        pick = tuple(p.ravel()[good] for p in pick)
        rows = np.zeros((good.size, 3), np.intp)
        for k, p in enumerate(pick):
            rows[:, k] = p
        e = np.concatenate([self.error, error.ravel()[good]])
        o = np.concatenate([self.odd, odd.ravel()[good]])
        rows = np.concatenate([self.pick, rows])
        order = np.lexsort((o, np.round(e, 13)))[: self.kept]
        self.error, self.odd, self.pick = e[order], o[order], rows[order]


def search(
    design: Design,
    arrangement: str,
    values,
    *,
    least_input=None,
    seconds=8.0,
    watch: Watch | None = None,
    proof: bool = True,
) -> Outcome:
    """The best sets of values for one arrangement.

    Parameters
    ----------
    design : Design
        Wanted weights, offset and sources.
    arrangement : str
    values : (k,) array
        The resistors there are [ohm], rising.
    least_input : dict of float, optional
        By signal name, the least value of its leg [ohm], so that its source sees no less.
    seconds : float
        Processor time after which what is left is bounded instead of searched.
    watch : callable, optional
        Told the share done; raises `Cancelled` to stop.
    proof : bool
        False: good sets are enough, the search for what could still beat them is left out.

    Returns
    -------
    Outcome

    Raises
    ------
    CannotRealise
        If the arrangement cannot make the signs.
    """
    task = Task(design, arrangement, values, least_input, seconds, watch, proof)
    found = _searched(task, arrangement)
    return found._replace(cells=_ranked(design, found.cells))


def _ranked(design: Design, found) -> list[tuple[Cell, ...]]:
    """Each set once, by its own worst weight error; what is equal to twelve figures stays in the order it came."""

    def worst(cells):
        error = max(abs(e) for e in weight_errors(design, cells).values())
        return float(f"{error:.12g}") if error > 1e-13 else 0.0  # below is rounding of the arithmetic

    return sorted(dict.fromkeys(found), key=worst)


def _searched(task: Task, arrangement: str) -> Outcome:
    if arrangement in ("non-inverting", "mixed-sign") and any(w.weight > 0 for w in task.wanted):
        from sumwright.engine.realise.one_node import search_single

        return search_single(task)
    if arrangement == "inverting-pair" or not any(w.weight < 0 for w in task.wanted):
        return _pair(task)
    if arrangement == "two-stage" and any(w.weight > 0 for w in task.wanted):
        return _two_stage(task)
    return _inverting(task, balanced=arrangement == "mixed-sign")


def _inverting(task: Task, balanced: bool) -> Outcome:
    """One virtual ground: each feedback value fixes the scale, each leg follows by itself."""
    legs = task.legs(-1)
    index, error = legs.nearest(task.values)
    pool = Pool()
    pool.add(error.max(axis=1), task.oddness + task.set_oddness(legs, legs.sets(index)), np.arange(task.values.size))
    cells = []
    for (f, *_), _e in zip(pool.pick, pool.error, strict=True):
        minus = _fitted(legs, index[f])
        feedback = float(task.values[f])
        ground = 0.0
        if balanced:
            siemens = 1.0 / feedback + float(
                (legs.size / np.array([c[i] for c, i in zip(legs.c, index[f], strict=True)])).sum()
            )
            ground = nearest_value(task.values, 1.0 / siemens)
        cells.append((Cell(minus=minus, plus_ground=ground, feedback=feedback),))
    task.watch(1.0)
    return Outcome(cells, pool.best, True)


def _pair(task: Task) -> Outcome:
    """A virtual ground, then an inverter: the scale is Rf1 times the ratio Rf2 / R2."""
    legs = task.legs(+1)
    walk, ratios, pool, equal = legs.walk(), Ratios(task.values, task.usual), Pool(), Pool()
    leg_odd = task.set_oddness(legs, walk)
    ratio_odd = np.abs(np.log(ratios.top / task.usual)) + np.abs(np.log(ratios.bottom / task.usual))
    step = max(1, BLOCK // task.values.size)
    for start in range(0, walk.bound.size, step):
        part = slice(start, start + step)
        if walk.bound[start] > max(pool.last if pool.error.size else np.inf, pool.best):
            break
        row = np.arange(start, min(start + step, walk.bound.size))[:, None]
        for near in ratios.around(walk.scale[part][:, None] / task.values):
            scale = task.values * ratios.ratio[near]
            error = error_at(walk.c_least[part][:, None], walk.c_most[part][:, None], scale)
            pool.add(
                error, leg_odd[part][:, None] + task.oddness + ratio_odd[near], row, np.arange(task.values.size), near
            )
        task.watch(min(1.0, start / walk.bound.size))
    # With the inverter at unity its two resistors are alike: fewer different values for a little error.
    index, error = legs.nearest(task.values)
    equal.add(error.max(axis=1), task.oddness, np.arange(task.values.size))
    cells = [_pair_cells(legs, walk.index[r], task.values[f], ratios.top[q], ratios.bottom[q]) for r, f, q in pool.pick]
    cells += [_pair_cells(legs, index[f], task.values[f], task.values[f], task.values[f]) for f, *_ in equal.pick]
    task.watch(1.0)
    return Outcome(cells, pool.best, True)


def _pair_cells(legs, index, first, last, inner) -> tuple[Cell, ...]:
    return (
        Cell(minus=_fitted(legs, index), plus_ground=0.0, feedback=float(first)),
        Cell(minus=(Leg(cell_name(0), float(inner)),), plus_ground=0.0, feedback=float(last)),
    )


def _two_stage(task: Task) -> Outcome:
    """Two virtual grounds: Rf2 scales the negatives, Rf2 times the ratio Rf1 / R12 the positives."""
    plus, minus = task.legs(+1), task.legs(-1)
    minus_index, minus_error = minus.nearest(task.values)
    minus_error = minus_error.max(axis=1)
    minus_odd = task.oddness + task.set_oddness(minus, minus.sets(minus_index))
    walk, ratios = plus.walk(), Ratios(task.values, task.usual)
    plus_odd = task.set_oddness(plus, walk)
    ratio_odd = np.abs(np.log(ratios.top / task.usual)) + np.abs(np.log(ratios.bottom / task.usual))
    unity = int(np.argmin(np.abs(ratios.ratio - 1.0)))
    pool, equal = Pool(), Pool()
    order = np.argsort(minus_error, kind="stable")
    for done, f in enumerate(order):
        if minus_error[f] > pool.last or (pool.error.size and minus_error[f] > pool.best * 3 + 1e-3):
            break
        some = (
            max(1, int(np.searchsorted(walk.bound, max(pool.last, 0.0), side="right")))
            if pool.error.size >= pool.kept
            else walk.bound.size
        )
        part = slice(0, some)
        for near in ratios.around(walk.scale[part] / task.values[f]):
            error = error_at(walk.c_least[part], walk.c_most[part], task.values[f] * ratios.ratio[near])
            pool.add(
                np.maximum(error, minus_error[f]),
                minus_odd[f] + plus_odd[part] + ratio_odd[near],
                f,
                np.arange(some),
                near,
            )
        error = error_at(walk.c_least, walk.c_most, task.values[f] * ratios.ratio[unity])
        equal.add(np.maximum(error, minus_error[f]), minus_odd[f] + plus_odd, f, np.arange(walk.bound.size), unity)
        task.watch(done / order.size)
    cells = []
    for p in (pool, equal):
        for f, r, q in p.pick:
            top, bottom = (ratios.top[q], ratios.bottom[q]) if p is pool else (task.values[f], task.values[f])
            cells.append(
                (
                    Cell(minus=_fitted(plus, walk.index[r]), plus_ground=0.0, feedback=float(top)),
                    Cell(
                        minus=(*_fitted(minus, minus_index[f]), Leg(cell_name(0), float(bottom))),
                        plus_ground=0.0,
                        feedback=float(task.values[f]),
                    ),
                )
            )
    task.watch(1.0)
    return Outcome(cells, pool.best, True)


def _fitted(legs: Legs, index) -> tuple[Leg, ...]:
    return tuple(Leg(w.source, r) for w, r in zip(legs.wanted, legs.resistors(index), strict=True))


def nearest_value(values, ohm: float) -> float:
    """Of the values [ohm], the one whose ratio to `ohm` is nearest 1."""
    return (
        float(values[np.argmin(np.abs(np.log(np.asarray(values) / ohm)))]) if math.isfinite(ohm) else float(values[-1])
    )
