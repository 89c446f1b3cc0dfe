"""Designs by their wanted weights, and what trying every set of values finds."""

import itertools
from collections import Counter

import numpy as np
from sumwright.engine.stage import Cell, Design, Leg, Reference, ResistorKind, Signal, Supply, Target

from support.stages import op_amp


def design_for(
    weights, *, offset=0.0, reference=2.5, sources=None, reference_source=0.0, amp=None, low=-15.0, **resistor
):
    """A design with signals s0, s1, ... of these weights; `resistor` are fields of `ResistorKind`."""
    sources = sources or [0.0] * len(weights)
    return Design(
        title="wanted weights",
        signals=tuple(
            Signal(f"s{i}", float(w), -1.0, 1.0, 0.0, float(r))
            for i, (w, r) in enumerate(zip(weights, sources, strict=True))
        ),
        supply=Supply(15.0, low),
        op_amp=amp or op_amp(),
        target=Target(offset=offset),
        reference=None if reference is None else Reference(reference, reference_source),
        resistor=ResistorKind(**resistor),
    )


def _wanted(design):
    """Size, sign and source resistance of every weight, the reference last."""
    rows = [(abs(s.weight), s.weight > 0, s.source_resistance) for s in design.signals]
    if design.target.offset:
        w = design.target.offset / design.reference.voltage
        rows.append((abs(w), w > 0, design.reference.source_resistance))
    size, up, rs = (np.array(x) for x in zip(*rows, strict=True))
    return size, up.astype(bool), rs


def least_error_by_trying_all(design, arrangement, values):
    """The least worst weight error, by computing every set of values there is.

    Written from the weights' formulas alone: a leg at a virtual ground weighs Rf / R, one at a
    non-inverting node NG g / sum(g).
    """
    size, up, rs = _wanted(design)
    n = len(size)
    ohms = [g.ravel() for g in np.meshgrid(*[values] * n, indexing="ij")]
    g = [1.0 / (ohms[i] + rs[i]) for i in range(n)]

    def worst(scales):
        return np.max([np.abs(scales[i] * g[i] / size[i] - 1.0) for i in range(n)], axis=0).min()

    if arrangement == "inverting":
        return min(worst([f] * n) for f in values)
    if arrangement == "inverting-pair":
        every = np.unique(values[:, None, None] * values[None, :, None] / values[None, None, :])
        return min(worst([a] * n) for a in every)
    if arrangement == "two-stage":
        ratios = np.unique(values[:, None] / values[None, :])
        return min(worst([f * q if u else f for u in up]) for f in values for q in ratios)
    plus = sum(g[i] for i in range(n) if up[i])
    minus = sum((g[i] for i in range(n) if not up[i]), np.zeros_like(g[0]))
    grounds = [(0.0, 0.0), *((1 / v, 0.0) for v in values), *((0.0, 1 / v) for v in values)]
    best = np.inf
    for f, (to_plus, to_minus) in itertools.product(values, grounds):
        gain = 1.0 + f * (minus + to_minus)
        best = min(best, worst([gain / (plus + to_plus) if u else f for u in up]))
    return best


def least_error_from_counts(design, arrangement, counts):
    """The same from a drawer, by building every stage its counts allow and asking `made` of each. Small drawers only."""
    size, up, rs = _wanted(design)
    names = [*design.signal_names, "reference"][: len(size)]
    values = list(counts)
    best = np.inf

    def error(scale):
        return max(abs(scale[i] / ((ohms[i] + rs[i]) * size[i]) - 1.0) for i in range(len(size)))

    for ohms in itertools.product(values, repeat=len(size)):
        if any(c > counts[v] for v, c in Counter(ohms).items()):
            continue
        g = [1.0 / (r + s) for r, s in zip(ohms, rs, strict=True)]
        plus = sum(x for x, u in zip(g, up, strict=True) if u)
        minus = sum(x for x, u in zip(g, up, strict=True) if not u)
        if arrangement == "inverting":
            more = (((f,), [f] * len(size)) for f in values)
        elif arrangement in ("inverting-pair", "two-stage"):
            more = (((f, t, b), [f * t / b if u else f for u in up]) for f, t, b in itertools.product(values, repeat=3))
        else:
            grounds = [(None, None), *((v, None) for v in values), *((None, v) for v in values)]
            more = (
                (
                    (f, *(x for x in (p, m) if x)),
                    [(1 + f * (minus + (1 / m if m else 0))) / (plus + (1 / p if p else 0)) if u else f for u in up],
                )
                for f, (p, m) in itertools.product(values, grounds)
            )
        for taken, scale in more:
            if all(c <= counts[v] for v, c in Counter((*ohms, *taken)).items()):
                best = min(best, error(scale))
    del names
    return best


def rounded_cells(design, cells, values):
    """What rounding the recipe's values to the nearest on a ratio scale gives."""

    def near(ohm):
        return None if ohm is None else 0.0 if ohm == 0 else float(values[np.argmin(np.abs(np.log(values / ohm)))])

    return tuple(
        Cell(
            minus=tuple(Leg(x.source, near(x.resistance)) for x in c.minus),
            plus=tuple(Leg(x.source, near(x.resistance)) for x in c.plus),
            minus_ground=near(c.minus_ground), plus_ground=near(c.plus_ground), feedback=near(c.feedback),
        )
        for c in cells
    )  # fmt: skip
