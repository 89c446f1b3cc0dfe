"""The best set for one op amp with legs on its non-inverting node, which the ground leg and the legs tie together."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sumwright.engine.realise.best_set import BLOCK, MOST_LEGS, Outcome, Pool, Task, _fitted, nearest_value
from sumwright.engine.realise.legs import Legs, Ratios, Sets, error_at
from sumwright.engine.stage import Cell

NO_GROUND, PLUS_GROUND, MINUS_GROUND = range(3)
LIMITS = (1.001, 1.01, 1.05, 1.2, 1.5, 2.0, 4.0)
EXACT = 1e-13  # an error of rounding in the arithmetic, not of the values


class Rows(NamedTuple):
    """Feedback resistors with the legs of the inverting node, one combination a row."""

    feedback: np.ndarray  # (r,) index into the values
    index: np.ndarray  # type: ignore[assignment]  # (r, n) values of the legs
    siemens: np.ndarray  # (r,) sum of the legs' conductances
    error: np.ndarray  # (r,) worst error of these legs
    odd: np.ndarray  # (r,)

    def take(self, which) -> Rows:
        return Rows(*(a[which] for a in self))


def search_single(task: Task) -> Outcome:
    """Every combination that can be the best: first the nearest sets for a good start, then all that could beat it."""
    plus, minus = task.legs(+1), task.legs(-1)
    pools = {g: Pool() for g in (NO_GROUND, PLUS_GROUND, MINUS_GROUND)}
    found: list[tuple[Cell, ...]] = []
    ratios = None if len(minus) else Ratios(task.values, task.usual)

    sets = plus.walk()
    rows = _nearest_rows(task, minus)
    _combine(task, rows, plus, sets, ratios, pools, first=True)
    for ground, pool in pools.items():
        found += [_cells(task, plus, minus, sets, rows, ratios, ground, *p) for p in pool.pick]
    best = min(p.best for p in pools.values())

    bound = max(float(rows.error.min()), float(sets.bound.min()))
    if best <= EXACT or not task.proof:
        return Outcome(found, min(best, bound), best <= bound + EXACT)
    # Whatever errs less than a limit has both its sides' own bounds under it: make them all, for a limit that rises
    # from what is surely out of reach to the best found. The first limit that something is found under ends it.
    rows_least, sets_least, cut = float(rows.error.min()), float(sets.bound.min()), False
    least = bound
    for limit in (*(least * f for f in LIMITS if best / 4.0 < least * f < best), best):
        sets, left_out = plus.every_set_below(limit, MOST_LEGS // len(plus))
        rows, rows_left_out = _every_row_below(task, minus, limit)
        pools = {g: Pool(kept=8) for g in pools}
        unsearched = _combine(task, rows, plus, sets, ratios, pools, first=False, best=limit)
        for ground, pool in pools.items():
            found += [_cells(task, plus, minus, sets, rows, ratios, ground, *p) for p in pool.pick]
        best = min(best, *(p.best for p in pools.values()))
        # A combination is no better than either of its sides, whichever was left out.
        missed = min(max(left_out, rows_least), max(rows_left_out, sets_least), max(unsearched, sets_least))
        if not cut:
            bound = max(bound, min(best, limit, missed))
        cut = cut or missed < min(best, limit)
        if best <= limit or task.late():
            break
    whole = bound >= best
    task.watch(1.0)
    return Outcome(found, bound, whole)


def _nearest_rows(task: Task, minus: Legs) -> Rows:
    """For each feedback value, the nearest legs of the inverting node; one row without feedback value if it has none."""
    if not len(minus):
        none = np.zeros(1)
        return Rows(np.zeros(1, np.intp), np.zeros((1, 0), np.intp), none, none, none)
    index, _ = minus.nearest(task.values)
    return _rows(task, minus, np.arange(task.values.size), index)


def _rows(task: Task, minus: Legs, feedback, index) -> Rows:
    sets = minus.sets(index)
    error = error_at(sets.c_least, sets.c_most, task.values[feedback])
    rows = Rows(feedback, index, sets.siemens, error, task.oddness[feedback] + task.set_oddness(minus, sets))
    return rows.take(np.argsort(error, kind="stable"))


def _every_row_below(task: Task, minus: Legs, error: float) -> tuple[Rows, float]:
    """Every row with an error of its own under `error`, and a bound of those left out for number."""
    if not len(minus):
        return _nearest_rows(task, minus), np.inf
    feedback, index, left_out, room = [], [], np.inf, MOST_LEGS // len(minus)
    _, nearest = minus.nearest(task.values)
    own = nearest.max(axis=1)
    for f in np.argsort(own, kind="stable"):
        if own[f] >= error:
            break
        made, whole = minus.every_set_at(task.values[f], error, max(room, 1))
        if not whole:
            left_out = min(left_out, float(own[f]))
        room -= len(made)
        feedback.append(np.full(len(made), f))
        index.append(made)
    if not feedback:
        return _nearest_rows(task, minus).take(slice(0, 0)), left_out
    return _rows(task, minus, np.concatenate(feedback), np.concatenate(index)), left_out


def _combine(
    task: Task, rows: Rows, plus: Legs, sets: Sets, ratios: Ratios | None, pools, *, first: bool, best=np.inf
) -> float:
    """Try rows with sets and look the ground leg up; returns a bound of what time did not allow, infinite if nothing."""
    odd = task.set_oddness(plus, sets)
    if ratios is not None and sets.bound.size:
        _free_gain(task, sets, odd, ratios, pools[MINUS_GROUND])
    start, width = 0, max(1, min(64, rows.error.size))
    while start < rows.error.size:
        reach = min(best, *(p.best for p in pools.values())) if not first else max(p.last for p in pools.values())
        if rows.error[start] > reach or (not first and rows.error[start] >= reach):
            break
        if task.late() and not (first and start == 0):
            return float(rows.error[start])
        count = int(np.searchsorted(sets.bound, reach, side="right" if first else "left"))
        step = max(1, BLOCK // max(count, 1))
        part = slice(start, min(start + min(width, step), rows.error.size))
        for at in range(0, count, BLOCK):
            some = slice(at, min(at + BLOCK, count))
            _block(task, rows, part, sets, some, odd, pools, gain_free=ratios is not None)
            if task.late() and at + BLOCK < count:
                return float(max(rows.error[start], sets.bound[some.stop - 1]) if start == 0 else rows.error[start])
        start = part.stop
        width = min(width * 2, 4096)
        task.watch(0.5 * start / rows.error.size + (0.0 if first else 0.5))
    return np.inf


def _block(task: Task, rows: Rows, part: slice, sets: Sets, some: slice, odd, pools, gain_free: bool) -> None:
    """Rows against sets: no ground leg, the nearest ones on the non-inverting node, the nearest ones on the inverting node."""
    values = task.values
    feedback = values[rows.feedback[part]][:, None]
    gain = 1.0 + feedback * rows.siemens[part][:, None] if not gain_free else np.ones((1, 1))
    own = rows.error[part][:, None]
    low, high, siemens, scale = sets.c_least[some], sets.c_most[some], sets.siemens[some], sets.scale[some]
    both_odd = rows.odd[part][:, None] + odd[some]
    r, s = np.arange(part.start, part.stop)[:, None], np.arange(some.start, some.stop)

    error = np.maximum(own, error_at(low, high, gain / siemens))
    pools[NO_GROUND].add(error, both_odd, r, s, -1)

    # The wanted ground conductance on either node; where it is not positive no ground leg is better than any.
    with np.errstate(divide="ignore", invalid="ignore"):
        want = gain / scale - siemens
        above = np.searchsorted(values, np.where(want > 0, 1.0 / want, np.inf))
        for k in (above - 1, above):
            k = np.clip(k, 0, values.size - 1)
            error = np.maximum(own, error_at(low, high, gain / (siemens + 1.0 / values[k])))
            pools[PLUS_GROUND].add(np.where(want > 0, error, np.inf), both_odd + task.oddness[k], r, s, k)
        if gain_free:
            return
        want = (scale * siemens - gain) / feedback
        above = np.searchsorted(values, np.where(want > 0, 1.0 / want, np.inf))
        for k in (above - 1, above):
            k = np.clip(k, 0, values.size - 1)
            error = np.maximum(own, error_at(low, high, (gain + feedback / values[k]) / siemens))
            pools[MINUS_GROUND].add(np.where(want > 0, error, np.inf), both_odd + task.oddness[k], r, s, k)


def _free_gain(task: Task, sets: Sets, odd, ratios: Ratios, pool: Pool) -> None:
    """No legs on the inverting node: the gain is 1 + Rf / Rg, any ratio of two values."""
    want = sets.scale * sets.siemens - 1.0
    ratio_odd = np.abs(np.log(ratios.top / task.usual)) + np.abs(np.log(ratios.bottom / task.usual))
    for near in ratios.around(np.maximum(want, 0.0)):
        error = error_at(sets.c_least, sets.c_most, (1.0 + ratios.ratio[near]) / sets.siemens)
        pool.add(np.where(want > 0, error, np.inf), odd + ratio_odd[near], 0, np.arange(want.size), near)


def _cells(
    task: Task, plus: Legs, minus: Legs, sets: Sets, rows: Rows, ratios, ground: int, row, which, pick
) -> tuple[Cell, ...]:
    """The cell of one combination."""
    plus_ground = float(task.values[pick]) if ground == PLUS_GROUND else None
    if len(minus):
        feedback = float(task.values[rows.feedback[row]])
        minus_ground = float(task.values[pick]) if ground == MINUS_GROUND else None
    elif ground == MINUS_GROUND:
        feedback, minus_ground = float(ratios.top[pick]), float(ratios.bottom[pick])
    else:
        # A follower: any feedback makes the weight; the one that balances the bias current costs nothing.
        siemens = sets.siemens[which] + (1.0 / plus_ground if plus_ground else 0.0)
        feedback, minus_ground = nearest_value(task.values, 1.0 / siemens), None
    return (
        Cell(
            minus=_fitted(minus, rows.index[row]),
            plus=_fitted(plus, sets.index[which]),
            minus_ground=minus_ground,
            plus_ground=plus_ground,
            feedback=feedback,
        ),
    )
