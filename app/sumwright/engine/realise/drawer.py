"""Choices from the resistors on hand, their counts respected, and what to buy to do better."""

from __future__ import annotations

import itertools
from collections import Counter
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np

from sumwright.engine.arrangement import exact_cells, ohms, weight_errors
from sumwright.engine.realise.best_set import Outcome, Pool, Task, _fitted, nearest_value, search
from sumwright.engine.realise.legs import Legs, error_at
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import Cell, Design, Leg, cell_name
from sumwright.errors import CannotRealise
from sumwright.quantity import format_percent

MOST_VALUES = 60  # distinct values up to which every trio of scaling resistors is looked at
MOST_TRIED = 20_000  # scales whose legs are dealt out one by one


@dataclass(frozen=True, slots=True)
class Bin:
    """One kind of resistor on hand."""

    value: float  # ohm
    tolerance: float | None = None  # relative limit; None = not known
    count: int | None = None  # None = as many as wanted
    note: str = ""


@dataclass(frozen=True, slots=True)
class Drawer:
    """What there is to build from."""

    bins: tuple[Bin, ...]

    def counts(self) -> dict[float, float]:
        """How many of each value [ohm]; infinite where no count is given."""
        out: dict[float, float] = {}
        for b in self.bins:
            out[b.value] = out.get(b.value, 0.0) + (np.inf if b.count is None else b.count)
        return {value: count for value, count in sorted(out.items()) if count > 0}


class Purchase(NamedTuple):
    """What to buy, and where it goes."""

    value: float  # ohm
    count: int  # type: ignore[assignment]
    place: str


def usable(drawer: Drawer, least: float, most: float) -> tuple[np.ndarray, list[str]]:
    """The values [ohm] of a drawer within the design's range, rising, and what must be said of the rest.

    Raises
    ------
    CannotRealise
        If none is.
    """
    counts = drawer.counts()
    inside = [v for v in counts if least * (1 - 1e-9) <= v <= most * (1 + 1e-9)]
    if not inside:
        raise CannotRealise(f"The drawer has no resistor from {least:g} to {most:g} ohm, the range the design allows.")
    left = len(counts) - len(inside)
    said = (
        [
            f"{left} value{'s' if left > 1 else ''} of the drawer outside {ohms(least)} to {ohms(most)} {'are' if left > 1 else 'is'} left out."
        ]
        if left
        else []
    )
    return np.array(inside), said


def used(cells) -> Counter:
    """How many of each value [ohm] a set of cells takes."""
    from sumwright.engine.realise.choices import resistors_of

    return Counter(resistors_of(cells))


def in_stock(cells, counts) -> bool:
    """Whether the drawer has enough of every value."""
    return all(n <= counts.get(value, 0) for value, n in used(cells).items())


def search_drawer(
    design: Design, arrangement: str, drawer: Drawer, values, *, least_input=None, seconds=8.0, watch=None
) -> Outcome:
    """As `best_set.search`, from a drawer: no value is used more often than it is there.

    The search without counts gives a bound; where the best of it is in stock it is the
    optimum. Otherwise scales are taken in the order of that bound and the legs dealt out so
    that the worst of them is best (a bottleneck assignment), until the bound passes the best
    found.
    """
    counts = drawer.counts()
    free = search(
        design,
        arrangement,
        values,
        least_input=least_input,
        seconds=0.5 * seconds,
        watch=lambda s: watch(0.5 * s) if watch else None,
    )
    stocked = [cells for cells in free.cells if in_stock(cells, counts)]
    if not stocked:  # a start: the best sets, what is used too often replaced by what is nearest and left
        mended = (_mended(cells, counts) for cells in free.cells)
        stocked = [cells for cells in mended if cells is not None]
    task = Task(
        design,
        arrangement,
        values,
        least_input,
        0.5 * seconds,
        None if watch is None else lambda s: watch(0.5 + 0.5 * s),
    )

    def worst(cells):
        return max(abs(e) for e in weight_errors(design, cells).values())

    best = min((worst(c) for c in stocked), default=np.inf)
    if stocked and free.whole and best <= free.bound + 1e-12:
        return Outcome(stocked, free.bound, True)
    single = arrangement in ("non-inverting", "mixed-sign") and any(w.weight > 0 for w in task.wanted)
    deal = _deal_single if single else _deal
    more, bound, whole = deal(task, arrangement, counts, best)
    found = stocked + [c for c in more if in_stock(c, counts)]
    best = min((worst(c) for c in found), default=np.inf)
    return Outcome(sorted(found, key=worst), best if whole else max(free.bound, min(best, bound)), whole)


def _mended(cells: tuple[Cell, ...], counts) -> tuple[Cell, ...] | None:
    """The cells from what the drawer has, each resistor in turn taking the nearest value left; None if it runs out."""
    left = dict(counts)

    def take(ohm):
        if not ohm:
            return ohm
        there = [v for v, c in left.items() if c > 0]
        if not there:
            raise LookupError
        value = nearest_value(np.array(there), ohm)
        left[value] -= 1
        return value

    def taken(legs):
        return tuple(replace(leg, resistance=take(leg.resistance)) for leg in legs)

    try:
        return tuple(
            replace(
                c, minus=taken(c.minus), plus=taken(c.plus), minus_ground=take(c.minus_ground), plus_ground=take(c.plus_ground),
                feedback=take(c.feedback),
            )
            for c in cells
        )  # fmt: skip
    except LookupError:
        return None


# Virtual grounds: the scale is set by one or three resistors, the legs are dealt out at it --------------


def _deal(task: Task, arrangement: str, counts, best: float):
    """Every trio (or single) of scaling resistors in the order of its bound, legs assigned within the counts."""
    plus, minus = task.legs(+1), task.legs(-1)
    values = task.values
    two_cells = len(plus) > 0
    n = values.size
    whole = True
    if not two_cells:
        trios = np.arange(n)[:, None]
        scales = (None, values)
    else:
        if n <= MOST_VALUES:
            f, t, b = (g.ravel() for g in np.meshgrid(np.arange(n), np.arange(n), np.arange(n), indexing="ij"))
        else:  # too many: the walk's sets with their nearest scales, best first; then the bound is not reached
            f, t, b = _near_trios(task, plus)
            whole = False
        trios = np.stack([f, t, b], axis=1)
        scales = (values[f] * values[t] / values[b], values[f])
    bound = np.zeros(len(trios))
    for legs, scale in zip((plus, minus), scales, strict=True):
        if len(legs):
            unique, back = np.unique(scale, return_inverse=True)
            bound = np.maximum(bound, legs.nearest(unique)[1].max(axis=1)[back])
    odd = task.oddness[trios].sum(axis=1)
    found: list = []
    order = np.lexsort((odd, np.round(bound, 13)))
    for tried, k in enumerate(order):
        if bound[k] >= best:
            return found, best, whole
        if tried >= MOST_TRIED or task.late():
            return found, float(bound[k]), False
        left = Counter({float(v): c for v, c in counts.items()})
        fixed = [float(values[i]) for i in trios[k]]
        left.subtract(fixed)
        if min(left[v] for v in fixed) < 0:
            continue
        dealt = _assign(
            [
                (legs, None if scale is None else float(scale[k]))
                for legs, scale in zip((plus, minus), scales, strict=True)
            ],
            left,
            best,
        )
        if dealt is None:
            continue
        best, (plus_ohm, minus_ohm) = dealt
        found.append(_virtual_cells(plus, minus, plus_ohm, minus_ohm, fixed, arrangement, left))
        if tried % 64 == 0:
            task.watch(min(1.0, tried / MOST_TRIED))
    return found, best, whole


def _near_trios(task: Task, plus: Legs):
    from sumwright.engine.realise.legs import Ratios

    walk, ratios, pool = plus.walk(), Ratios(task.values, task.usual), Pool(kept=5000)
    for f in range(task.values.size):
        for near in ratios.around(walk.scale / task.values[f]):
            pool.add(error_at(walk.c_least, walk.c_most, task.values[f] * ratios.ratio[near]), 0.0, f, near, 0)
    f, q, _ = pool.pick.T
    return f, np.searchsorted(task.values, ratios.top[q]), np.searchsorted(task.values, ratios.bottom[q])


def _assign(sides, left, limit: float):
    """Deal values to legs so that the worst error is least and under `limit`: threshold by threshold, augmenting paths."""
    rows = []  # of each leg: its values by error
    for legs, scale in sides:
        for i in range(len(legs)):
            error = np.abs(scale / legs.c[i] - 1.0)
            order = [
                k for k in np.argsort(error, kind="stable") if error[k] < limit and left[float(legs.values[i][k])] > 0
            ]
            rows.append([(float(error[k]), float(legs.values[i][k])) for k in order])
    if any(not row for row in rows):
        return None
    thresholds = sorted({e for row in rows for e, _ in row if e >= max(r[0][0] for r in rows)})
    low, high, dealt = 0, len(thresholds) - 1, None
    while low <= high:
        middle = (low + high) // 2
        tried = _match([[v for e, v in row if e <= thresholds[middle]] for row in rows], left)
        if tried is None:
            low = middle + 1
        else:
            dealt, high = (thresholds[middle], tried), middle - 1
    if dealt is None:
        return None
    first = len(sides[0][0])
    return dealt[0], (dealt[1][:first], dealt[1][first:])


def _match(rows, left) -> list[float] | None:
    """One value for each leg, none more often than there is of it; None if that cannot be (Kuhn's augmenting paths)."""
    holders: dict[float, list[int]] = {}
    dealt: list[float | None] = [None] * len(rows)

    def place(leg: int, seen: set[float]) -> bool:
        for value in rows[leg]:
            if value in seen:
                continue
            seen.add(value)
            held = holders.setdefault(value, [])
            if len(held) < left[value]:
                held.append(leg)
                dealt[leg] = value
                return True
            for other in list(held):
                if place(other, seen):
                    held.remove(other)
                    held.append(leg)
                    dealt[leg] = value
                    return True
        return False

    return dealt if all(place(leg, set()) for leg in range(len(rows))) else None


def _virtual_cells(plus: Legs, minus: Legs, plus_ohm, minus_ohm, fixed, arrangement, left) -> tuple[Cell, ...]:
    minus_legs = tuple(Leg(w.source, r) for w, r in zip(minus.wanted, minus_ohm, strict=True))
    if not len(plus):
        ground = 0.0
        if arrangement == "mixed-sign":
            rest = left.copy()
            rest.subtract(minus_ohm)
            spare = [v for v, c in rest.items() if c > 0]
            siemens = 1.0 / fixed[0] + sum(
                1.0 / (r + w.source_resistance) for w, r in zip(minus.wanted, minus_ohm, strict=True)
            )
            ground = nearest_value(spare, 1.0 / siemens) if spare else 0.0
        return (Cell(minus=minus_legs, plus_ground=ground, feedback=fixed[0]),)
    last, first, inner = fixed
    return (
        Cell(
            minus=tuple(Leg(w.source, r) for w, r in zip(plus.wanted, plus_ohm, strict=True)),
            plus_ground=0.0,
            feedback=first,
        ),
        Cell(minus=(*minus_legs, Leg(cell_name(0), inner)), plus_ground=0.0, feedback=last),
    )


# One op amp with legs on its non-inverting node ---------------------------------------------------------


def _deal_single(task: Task, arrangement: str, counts, best: float):
    """Every set of plus legs with every set of minus legs and every ground leg under a limit that is raised until one is in stock."""
    plus, minus = task.legs(+1), task.legs(-1)
    limit = best if np.isfinite(best) else 0.02
    while True:
        found, at, whole = _single_below(task, plus, minus, counts, limit)
        if found or np.isfinite(best) or limit > 64 or task.late():
            return found, min(at, best), whole and (bool(found) or np.isfinite(best))
        limit *= 3.0


def _single_below(task: Task, plus: Legs, minus: Legs, counts, limit: float):
    from sumwright.engine.realise.one_node import MOST_LEGS, _every_row_below

    values = task.values
    sets, left_out = plus.every_set_below(limit, MOST_LEGS // 8 // len(plus))
    rows, rows_left_out = _every_row_below(task, minus, limit)
    keep = [i for i, index in enumerate(sets.index) if _enough(plus.resistors(index), counts)]
    sets = sets.take(np.array(keep, np.intp))
    whole = not (np.isfinite(left_out) or np.isfinite(rows_left_out))
    found: list[tuple[Cell, ...]] = []
    best = limit
    grounds = [(None, None), *((v, None) for v in values), *((None, v) for v in values)]
    for r, s in itertools.product(range(rows.error.size), range(sets.bound.size)):
        if max(rows.error[r], sets.bound[s]) >= best:
            if rows.error[r] >= best:
                break
            continue
        if task.late():
            return found, float(rows.error[r]), False
        minus_ohm = minus.resistors(rows.index[r])
        plus_ohm = plus.resistors(sets.index[s])
        for feedback in (values[rows.feedback[r]],) if len(minus) else values:
            gain = 1.0 + feedback * rows.siemens[r]
            plus_siemens = np.array([0.0 if p is None else 1.0 / p for p, _ in grounds])
            minus_siemens = np.array([0.0 if m is None else 1.0 / m for _, m in grounds])
            error = error_at(
                sets.c_least[s], sets.c_most[s], (gain + feedback * minus_siemens) / (sets.siemens[s] + plus_siemens)
            )
            error = np.maximum(error, rows.error[r])
            for k in np.argsort(error, kind="stable"):
                if error[k] >= best:
                    break
                taken = [*minus_ohm, *plus_ohm, float(feedback), *(float(g) for g in grounds[k] if g is not None)]
                if _enough(taken, counts):
                    best = float(error[k])
                    plus_ground, minus_ground = (None if g is None else float(g) for g in grounds[k])
                    found.append(
                        (
                            Cell(
                                minus=_fitted(minus, rows.index[r]), plus=_fitted(plus, sets.index[s]), minus_ground=minus_ground,
                                plus_ground=plus_ground, feedback=float(feedback),
                            ),
                        )
                    )  # fmt: skip
                    break
    return found, best, whole


def _enough(taken, counts) -> bool:
    return all(n <= counts.get(v, 0) for v, n in Counter(taken).items())


# What to buy ---------------------------------------------------------------------------------------------


def to_buy(design: Design, result, drawer: Drawer, goal: float) -> list[Purchase]:
    """What to buy so that the worst weight error is at most `goal`: as few resistors as were found to do.

    Parameters
    ----------
    design : Design
    result : Realisation
        Choices from the drawer.
    drawer : Drawer
    goal : float
        Worst weight error, relative.

    Returns
    -------
    list of Purchase
        Empty if a choice from the drawer is good enough.

    Raises
    ------
    CannotRealise
        If no set from the design's series is good enough either.
    """
    from sumwright.engine.realise.choices import places, realise

    if result.choices[0].worst_weight_error <= goal:
        return []
    kind = design.resistor
    shop = values_within(kind.series, kind.least, kind.most)
    counts = drawer.counts()
    names = tuple(dict.fromkeys(c.arrangement for c in result.choices))
    options = [cells for name in names for cells in _mixtures(design, name, counts, shop, goal)]
    bought = realise(design, arrangement=names[0] if len(names) == 1 else None)
    options += [c.cells for c in bought.choices if c.worst_weight_error <= goal]
    if not options:
        raise CannotRealise(
            f"No set from {kind.series} within {ohms(kind.least)} to {ohms(kind.most)} errs less than {format_percent(bought.choices[0].worst_weight_error, 3)}; {format_percent(goal, 3)} was wanted."
        )

    def missing(cells):
        left = dict(counts)
        out = []
        for place, ohm in places(cells):
            if ohm <= 0:
                continue
            if left.get(ohm, 0) > 0:
                left[ohm] -= 1
            else:
                out.append((ohm, place))
        return out

    lacking = min((missing(cells) for cells in options), key=len)
    return [Purchase(ohm, len(where), ", ".join(where)) for ohm, where in _grouped(lacking)]


def _grouped(pairs):
    out: dict[float, list[str]] = {}
    for ohm, place in pairs:
        out.setdefault(ohm, []).append(place)
    return sorted(out.items())


def _mixtures(design: Design, arrangement: str, counts, shop, goal: float):
    """The recipe at every scale there is, each resistor from the drawer where one is near enough and from the shop where not."""
    from sumwright.engine.realise.choices import resistors_of

    stock = np.array(list(counts))
    stock = stock[(stock >= design.resistor.least * (1 - 1e-9)) & (stock <= design.resistor.most * (1 + 1e-9))]
    firsts = stock if stock.size <= 40 else stock[:: stock.size // 40 + 1]
    for feedback in np.union1d(stock, shop):
        try:
            exact = exact_cells(design, arrangement, feedback=float(feedback))
        except CannotRealise:  # a source's own resistance is too much at this scale
            continue
        scaled = [exact]
        if len(exact) == 2:  # the first cell may run at a scale of its own
            scaled += [(_at_scale(design, exact[0], float(f) / feedback), exact[1]) for f in firsts]
        for cells in scaled:
            for near in (0.9 * goal, 0.4 * goal):
                tried = tuple(_fill(cell, stock, shop, near) for cell in cells)
                if min(resistors_of(tried)) > 0 and max(abs(e) for e in weight_errors(design, tried).values()) <= goal:
                    yield tried
                    break


def _at_scale(design: Design, cell: Cell, ratio: float) -> Cell:
    """An inverting cell with all its resistances times a ratio, source resistances in them, and the same weights."""
    series = {s.name: s.source_resistance for s in design.signals}
    legs = []
    for leg in cell.minus:
        rs = series.get(leg.source, design.reference.source_resistance if design.reference else 0.0)
        legs.append(replace(leg, resistance=(leg.resistance + rs) * ratio - rs))
    return replace(cell, minus=tuple(legs), feedback=cell.feedback * ratio)


def _fill(cell: Cell, stock, shop, near: float) -> Cell:
    """Every resistor of a cell from the drawer if one is within `near` of it, else from the shop."""

    def pick(ohm):
        if not ohm or ohm < 0:
            return ohm
        held = nearest_value(stock, ohm)
        return held if abs(held / ohm - 1.0) <= near else nearest_value(shop, ohm)

    return replace(
        cell,
        minus=tuple(replace(leg, resistance=pick(leg.resistance)) for leg in cell.minus),
        plus=tuple(replace(leg, resistance=pick(leg.resistance)) for leg in cell.plus),
        minus_ground=pick(cell.minus_ground),
        plus_ground=pick(cell.plus_ground),
        feedback=pick(cell.feedback),
    )
