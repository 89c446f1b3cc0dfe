"""How hot the parts get at the worst place of the signals' ranges.

Voltages and currents of the unclipped stage are linear in the signals, so the
worst resistor dissipation is at a corner. An op amp's output stage dissipates
(V+ - v)·i when it sources and (v - V-)·|i| when it sinks, which has no maximum
inside a region of the (i, v) plane: the worst is on the boundary of the zonotope
that the signals' box is mapped to, at a corner or inside an edge.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from . import clipping, nodes
from .budget import network_of
from .stage import Design

FULL_POWER_TO = 70.0  # degC: a resistor's rating holds up to here,
NO_POWER_AT = 155.0  # and falls in a straight line to zero here


class ResistorHeat(NamedTuple):
    name: str
    dissipation_most: float  # W
    rating: float  # W, derated at the hottest ambient


class OpAmpHeat(NamedTuple):
    name: str
    dissipation_most: float  # W
    junction: float | None  # degC; None where the thermal resistance is not given


class Heat(NamedTuple):
    resistors: tuple[ResistorHeat, ...]
    op_amps: tuple[OpAmpHeat, ...]


def resistor_rating(design: Design, ambient: float | None = None) -> float:
    """What a resistor may dissipate [W] at `ambient` [degC], by default the hottest."""
    t = design.ambient.high if ambient is None else ambient
    falling = (NO_POWER_AT - t) / (NO_POWER_AT - FULL_POWER_TO)
    return design.resistor.power * min(1.0, max(0.0, falling))


def heat(stage) -> Heat:
    """Worst dissipation of every resistor and op amp over the signals' whole ranges.

    Rails at their high tolerance, ambient at its hottest, reference at nominal. A
    source's own resistance dissipates in the source and is not counted. Amplifiers
    fill packages in the order of the cells and heat each other; an unused one of a
    package draws its supply current.

    Parameters
    ----------
    stage : Design or Analysis

    Returns
    -------
    Heat
    """
    net = network_of(stage)
    design = net.design
    amp, supply = design.op_amp, design.supply
    n = net.signal_count
    sol = nodes.solve(net, np.eye(n + 1))  # influence of each source on every node

    rows = np.empty((len(net.parts), n + 1))
    scale = np.empty(len(net.parts))
    for i, part in enumerate(net.parts):
        c = net.cells[part.cell]
        r = net.resistances[i]
        node = sol.minus[part.cell] if part.kind in ("minus", "minus_ground", "feedback") else sol.plus[part.cell]
        if part.kind in ("minus", "plus"):
            ids, sources = (c.minus_parts, c.minus_sources) if part.kind == "minus" else (c.plus_parts, c.plus_sources)
            source = int(sources[list(ids).index(i)])
            end = np.eye(n + 1)[source] if source <= n else sol.output[source - n - 1]
            total = r + net._leg_rs[source]
        else:
            end = sol.output[part.cell] if part.kind == "feedback" else np.zeros(n + 1)
            total = r
        rows[i] = end - node
        scale[i] = r / total**2 if np.isfinite(total) and total > 0 else 0.0
    least, most = _range(net, rows)
    worst = np.maximum(np.abs(least), np.abs(most))
    rating = resistor_rating(design)
    resistors = tuple(
        ResistorHeat(p.name, float(w * w * f), rating) for p, w, f in zip(net.parts, worst, scale, strict=True)
    )

    high, low = supply.high * (1 + supply.tolerance), supply.low * (1 + supply.tolerance)
    if supply.low > 0:
        low = supply.low
    idle = amp.supply_current * (high - low)
    own = [idle + _output_stage(net, k, sol, high, low) for k in range(net.cell_count)]
    per = max(1, amp.per_package)
    amps = []
    for k, watts in enumerate(own):
        first = k - k % per
        package = own[first : first + per]
        total = sum(package) + idle * (per - len(package))
        junction = None if amp.thermal_resistance is None else design.ambient.high + amp.thermal_resistance * total
        amps.append(OpAmpHeat(f"cell {k + 1}", float(watts), None if junction is None else float(junction)))
    return Heat(resistors, tuple(amps))


def _range(net, rows):
    """Least and most of `rows @ sources` over the signals' ranges, the reference at nominal."""
    n = net.signal_count
    a, b = rows[..., :n] * net.lows, rows[..., :n] * net.highs
    fixed = rows[..., n] * net.values[n]
    return fixed + np.minimum(a, b).sum(axis=-1), fixed + np.maximum(a, b).sum(axis=-1)


def _output_stage(net, k, sol, high, low):
    """Most that a cell's output stage dissipates [W] over the signals' box, its output within its limits."""
    n, amp = net.signal_count, net.design.op_amp
    current, output = sol.current[k], sol.output[k]
    start = np.array([row[:n] @ net.lows + row[n] * net.values[n] for row in (current, output)])
    sides = np.stack([current[:n], output[:n]], axis=-1) * (net.highs - net.lows)[:, None]
    polygon = zonotope(start, sides)
    drop, top, bottom = amp.dropout_resistance, high - amp.dropout_high, low + amp.dropout_low
    for normal, bound in (
        ((0.0, 1.0), top), ((drop, 1.0), top), ((0.0, -1.0), -bottom), ((-drop, -1.0), -bottom),
        ((1.0, 0.0), amp.output_current), ((-1.0, 0.0), amp.output_current),
    ):  # fmt: skip
        polygon = _clip(polygon, np.array(normal), bound)
        if not len(polygon):  # it never leaves a limit: where it sits there
            up = output[:n] >= 0
            ends = [np.append(np.where(up == side, net.highs, net.lows), net.values[n:]) for side in (True, False)]
            limits = nodes.Limits(top, bottom, drop, amp.output_current)
            held = clipping.solve_clipped(net, np.array(ends), limits=limits).solution
            polygon = np.stack([held.current[:, k, 0], held.output[:, k, 0]], axis=-1)
            break

    def watts(i, v):
        return np.where(i > 0, (high - v) * i, (low - v) * i)

    most = watts(polygon[:, 0], polygon[:, 1]).max()
    a = polygon
    b = np.roll(polygon, -1, axis=0)
    # along an edge i and v are linear, so each branch is a parabola in t; its top is at -p1 / (2 p2)
    for rail in (high, low):
        di, dv = b[:, 0] - a[:, 0], b[:, 1] - a[:, 1]
        p2, p1 = -di * dv, (rail - a[:, 1]) * di - dv * a[:, 0]
        with np.errstate(divide="ignore", invalid="ignore"):
            t = np.clip(np.nan_to_num(-p1 / (2 * p2), nan=0.0, posinf=0.0, neginf=0.0), 0.0, 1.0)
        most = max(most, watts(a[:, 0] + t * di, a[:, 1] + t * dv).max())
    return float(max(most, 0.0))


def zonotope(start, sides):
    """Corners, in order, of the region `start + Σ t sides`, every t in 0..1.

    Parameters
    ----------
    start : (2,) array_like
    sides : (n, 2) array_like

    Returns
    -------
    (2 n, 2) ndarray
        Fewer distinct corners where sides are parallel or zero.
    """
    sides = np.asarray(sides, dtype=float)
    flip = (sides[:, 1] < 0) | ((sides[:, 1] == 0) & (sides[:, 0] < 0))
    lowest = np.asarray(start, dtype=float) + sides[flip].sum(axis=0)
    up = np.where(flip[:, None], -sides, sides)
    up = up[np.argsort(np.arctan2(up[:, 1], up[:, 0]))]
    if len(up) == 0:
        return lowest[None]
    return lowest + np.cumsum(np.concatenate([np.zeros((1, 2)), up, -up[:-1]]), axis=0)


def _clip(polygon, normal, bound):
    """The part of a convex polygon with normal · x <= bound; (0, 2) if there is none."""
    room = bound - polygon @ normal
    inside = room >= 0
    if inside.all():
        return polygon
    out = []
    for i in range(len(polygon)):
        j = (i + 1) % len(polygon)
        if inside[i]:
            out.append(polygon[i])
        if inside[i] != inside[j]:
            out.append(polygon[i] + room[i] / (room[i] - room[j]) * (polygon[j] - polygon[i]))
    return np.array(out).reshape(-1, 2)
