"""Legs that share one scale, and every set of values for them that can matter.

A leg of total resistance R (source resistance included) weighs `a / R`, where the
scale `a` is common to its node: Rf at a virtual ground, noise gain over node
conductance at a non-inverting node. With `c = |w| R` the relative error of a leg is
`a / c - 1`, so a set of values is worth `max(a / min c - 1, 1 - a / max c)`: V-shaped in
`a`, never better than `(max c - min c) / (max c + min c)`. At a given scale the legs are
independent of each other, and the best value of each is one of the two neighbours of
`a / |w|`; the best set therefore changes only at breakpoints of the scale, and a walk
over the stretches between them meets every best set.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from sumwright.engine.arrangement import Wanted


class Sets(NamedTuple):
    """Sets of values for the legs of one node, one a row; `m` sets of `n` legs."""

    index: np.ndarray  # type: ignore[assignment]  # (m, n) into each leg's own values
    c_least: np.ndarray  # (m,) ohm, smallest |w| R of the set
    c_most: np.ndarray  # (m,) ohm
    siemens: np.ndarray  # (m,) sum of the legs' conductances
    scale: np.ndarray  # (m,) ohm, the scale that suits the set best
    bound: np.ndarray  # (m,) its error there: no scale does better

    def take(self, which) -> Sets:
        return Sets(*(a[which] for a in self))


def error_at(c_least, c_most, scale):
    """Worst relative error of a set whose |w| R run from `c_least` to `c_most`, at a scale."""
    return np.maximum(scale / c_least - 1.0, 1.0 - scale / c_most)


class Legs:
    """The legs of one node: wanted sizes, source resistances, and the values each may take.

    Parameters
    ----------
    wanted : sequence of Wanted
        Their signs are dropped: all legs of a node have one sign.
    values : sequence of (k_i,) arrays
        Candidate resistors of each leg [ohm], rising.
    """

    def __init__(self, wanted, values):
        self.wanted: tuple[Wanted, ...] = tuple(wanted)
        self.values = [np.asarray(v, float) for v in values]
        self.size = np.array([abs(w.weight) for w in self.wanted])
        self.c = [s * (v + w.source_resistance) for s, v, w in zip(self.size, self.values, self.wanted, strict=True)]

    def __len__(self) -> int:
        return len(self.wanted)

    def resistors(self, index) -> list[float]:
        """The values [ohm] of one set."""
        return [float(v[i]) for v, i in zip(self.values, index, strict=True)]

    def nearest(self, scale) -> tuple[np.ndarray, np.ndarray]:
        """The best value of each leg at each scale, and its error.

        Parameters
        ----------
        scale : (m,) array_like

        Returns
        -------
        index, error : (m, n) arrays
        """
        scale = np.asarray(scale, float)
        index = np.empty((scale.size, len(self)), np.intp)
        error = np.empty((scale.size, len(self)))
        for i, c in enumerate(self.c):
            above = np.clip(np.searchsorted(c, scale), 0, c.size - 1)
            below = np.maximum(above - 1, 0)
            e_above, e_below = np.abs(scale / c[above] - 1.0), np.abs(scale / c[below] - 1.0)
            index[:, i] = np.where(e_below < e_above, below, above)
            error[:, i] = np.minimum(e_above, e_below)
        return index, error

    def sets(self, index) -> Sets:
        """What matters of sets of values given by their indices, (m, n)."""
        index = np.asarray(index, np.intp).reshape(-1, len(self))
        if not len(self):
            none = np.zeros(len(index))
            return Sets(index, none, none, none, none, none)
        c = np.stack([ci[index[:, i]] for i, ci in enumerate(self.c)], axis=1)
        least, most = c.min(axis=1), c.max(axis=1)
        return Sets(
            index,
            least,
            most,
            (self.size / c).sum(axis=1),
            2.0 * least * most / (least + most),
            (most - least) / (most + least),
        )

    def walk(self) -> Sets:
        """The best set of every stretch of the scale between breakpoints, best bound first.

        Two neighbours c1 < c2 of a leg are equally good at the scale `2 c1 c2 / (c1 + c2)`.
        A set may suit a scale outside its own stretch best; its bound is then lower than
        what it is worth within, which costs time and never the optimum.
        """
        breaks = np.unique(np.concatenate([2.0 * c[:-1] * c[1:] / (c[:-1] + c[1:]) for c in self.c]))
        if not breaks.size:
            return self.sets(np.zeros((1, len(self)), np.intp))
        inner = np.sqrt(breaks[:-1] * breaks[1:])
        index, _ = self.nearest(np.concatenate([breaks[:1] * 0.5, inner, breaks[-1:] * 2.0]))
        found = self.sets(np.unique(index, axis=0))
        return found.take(np.argsort(found.bound, kind="stable"))

    def every_set_below(self, error: float, most: int) -> tuple[Sets, float]:
        """Every set whose bound is under `error`, not only the best of each scale.

        Needed where the scale depends on the set itself, as at a non-inverting node.

        Parameters
        ----------
        error : float
        most : int
            How many sets to make at most.

        Returns
        -------
        sets : Sets
            Best bound first.
        left_out : float
            A lower bound of what the sets left out for number could be worth; infinite if none was.
        """
        ratio = (1.0 + error) / (1.0 - error) * (1.0 + 1e-12) if error < 1.0 else np.inf
        leg = np.concatenate([np.full(c.size, i) for i, c in enumerate(self.c)])
        rank = np.concatenate([np.arange(c.size) for c in self.c])
        c_all = np.concatenate(self.c)
        order = np.lexsort((leg, c_all))
        leg, c_all, rank = leg[order], c_all[order], rank[order]
        # Each value in turn is the set's smallest (ties go to the lower leg); the others lie in a window above it.
        first, last, reach = (
            np.empty((len(self), c_all.size), np.intp),
            np.empty((len(self), c_all.size), np.intp),
            c_all.copy(),
        )
        for i, c in enumerate(self.c):
            own = leg == i
            first[i] = np.where(i > leg, np.searchsorted(c, c_all, "left"), np.searchsorted(c, c_all, "right"))
            last[i] = np.searchsorted(c, c_all * ratio, "right")
            first[i][own], last[i][own] = rank[own], rank[own] + 1
            reach = np.maximum(reach, c[np.minimum(first[i], c.size - 1)])
        number = np.prod(np.maximum(last - first, 0).astype(float), axis=0)
        bounds = (reach - c_all) / (reach + c_all)
        left_out, made, total = np.inf, [], 0.0
        for a in np.argsort(bounds, kind="stable"):
            if not number[a]:
                continue
            if total + number[a] > most:
                left_out = min(left_out, bounds[a])
                continue
            total += number[a]
            made.append(product([np.arange(f, t) for f, t in zip(first[:, a], last[:, a], strict=True)]))
        found = self.sets(np.concatenate(made) if made else np.empty((0, len(self)), np.intp))
        found = found.take(found.bound < error)
        return found.take(np.argsort(found.bound, kind="stable")), float(left_out)

    def every_set_at(self, scale: float, error: float, most: int) -> tuple[np.ndarray, bool]:
        """Every set whose worst error at one scale is under `error`, as (m, n) indices, and whether all were made."""
        lists, number = [], 1
        for c in self.c:
            good = np.flatnonzero(np.abs(scale / c - 1.0) < error)
            number *= good.size
            if not number:
                return np.empty((0, len(self)), np.intp), True
            lists.append(good[np.argsort(np.abs(scale / c[good] - 1.0), kind="stable")])
        whole = number <= most
        longest = max(part.size for part in lists)
        while number > most:  # keep the nearest of the longest lists
            longest -= 1
            lists = [part[:longest] for part in lists]
            number = math.prod(part.size for part in lists)
        return product(lists), whole


def product(lists) -> np.ndarray:
    """Every combination of one item from each list, a row each."""
    if not lists:
        return np.zeros((1, 0), np.intp)
    # By hand: meshgrid stops at 32 lists, a sheet may have 64 signals.
    sizes = [len(part) for part in lists]
    out = np.empty((math.prod(sizes), len(lists)), np.intp)
    each = len(out)
    for k, part in enumerate(lists):
        each = each // max(sizes[k], 1)
        out[:, k] = np.tile(np.repeat(part, each), len(out) // max(sizes[k] * each, 1))
    return out


class Ratios:
    """Every ratio of two of the values, rising, each once, by the pair nearest the usual size.

    Parameters
    ----------
    values : (k,) array
        Resistors [ohm].
    usual : float
        Of several pairs with one ratio, the one whose geometric mean is nearest this is kept [ohm].
    """

    def __init__(self, values, usual: float):
        values = np.asarray(values, float)
        top, bottom = (g.ravel() for g in np.meshgrid(values, values, indexing="ij"))
        ratio = top / bottom
        odd = np.abs(np.log(top * bottom / usual**2))
        # Ratios that differ by rounding alone are one: compare at 12 digits.
        key = np.round(np.log(ratio) * 1e12)
        order = np.lexsort((odd, key))
        first = np.ones(order.size, bool)
        first[1:] = key[order][1:] != key[order][:-1]
        keep = order[first]
        self.ratio, self.top, self.bottom = ratio[keep], top[keep], bottom[keep]

    def around(self, target) -> tuple[np.ndarray, np.ndarray]:
        """Indices of the nearest ratio not above, and not below, each target; the end ones where there is none."""
        above = np.searchsorted(self.ratio, target)
        return np.clip(above - 1, 0, self.ratio.size - 1), np.clip(above, 0, self.ratio.size - 1)
