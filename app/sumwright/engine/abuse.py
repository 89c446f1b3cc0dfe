"""Mishaps: output shorted, rails missing, signals past their range.

What a mishap does is estimated with the op amp's own limits and silicon junctions
of 0.6 V at its inputs (common practice for protection diodes; the data sheet in hand
decides). Not a safety analysis.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from . import clipping
from .budget import network_of

JUNCTION_DROP = 0.6  # V, from an input to a rail: common practice
INPUT_CURRENT_MOST = 10e-3  # A, the usual absolute maximum into an input: common practice


class Short(NamedTuple):
    """Output of the last cell tied to ground."""

    current: float  # A
    dissipation: float  # W in the op amp
    junction: float | None  # degC, alone in its package


class InputCurrent(NamedTuple):
    """Current through an input's protection with rails at 0 V, all signals at their worst."""

    state: str  # unpowered, high rail missing, low rail missing
    cell: int
    pin: str  # minus, plus
    current: float  # A, absolute
    signals: tuple[str, ...]  # the signals that drive it


class Overdrive(NamedTuple):
    """One signal far past its range, the others where they are."""

    name: str
    volts: float
    output: float
    clipped: str
    others: float  # A: most that another signal's source current changes
    node: float  # V: most that a summing node moves off its place


def output_short(stage) -> Short:
    """The last op amp into a short, at its high rail tolerance and the hottest ambient."""
    design = network_of(stage).design
    amp, s = design.op_amp, design.supply
    high, low = s.high * (1 + s.tolerance), s.low * (1 + s.tolerance)
    watts = amp.output_current * max(high, -low) + amp.supply_current * (high - low)
    hot = None if amp.thermal_resistance is None else design.ambient.high + amp.thermal_resistance * watts
    return Short(amp.output_current, watts, hot)


def input_currents(stage) -> tuple[InputCurrent, ...]:
    """What signals push through the inputs of an unpowered stage, or of one with a rail missing.

    Every output and the reference are taken as 0 V. Currents above zero only.
    """
    net = network_of(stage)
    design = net.design
    found = []
    for k, c in enumerate(net.cells):
        for pin, parts, sources, ground in (
            ("minus", c.minus_parts, c.minus_sources, (c.minus_ground, c.feedback)),
            ("plus", c.plus_parts, c.plus_sources, (c.plus_ground,)),
        ):
            if pin == "plus" and c.tied == -2:
                continue
            r = np.array([net.resistances[i] + net._leg_rs[s] for i, s in zip(parts, sources, strict=True)])
            g = 1.0 / np.maximum(r, 1e-3)
            total = g.sum() + sum(1.0 / net.resistances[i] for i in ground if i >= 0)
            ours = [(gi, int(s)) for gi, s in zip(g, sources, strict=True) if s < net.signal_count]
            up = sum(gi * max(net.highs[s], 0.0) for gi, s in ours) - total * JUNCTION_DROP
            down = sum(gi * max(-net.lows[s], 0.0) for gi, s in ours) - total * JUNCTION_DROP
            names = design.signal_names
            rising = tuple(names[s] for _, s in ours if net.highs[s] > 0)
            falling = tuple(names[s] for _, s in ours if net.lows[s] < 0)
            if max(up, down) > 0:
                which = rising if up >= down else falling
                found.append(InputCurrent("unpowered", k, pin, float(max(up, down)), which))
            if up > 0:
                found.append(InputCurrent("high rail missing", k, pin, float(up), rising))
            if down > 0:
                found.append(InputCurrent("low rail missing", k, pin, float(down), falling))
    return tuple(sorted(found, key=lambda x: -x.current))


def overdrive(stage, factor: float = 2.0) -> tuple[Overdrive, ...]:
    """Each signal in turn at `factor` times its range beyond the farther end, limits in force.

    The direction is the one that strains the output more.
    """
    net = network_of(stage)
    n = net.signal_count
    names = net.design.signal_names
    calm = clipping.solve_clipped(net, net.values)
    quiet = _source_currents(net, net.values, calm.solution)
    out = []
    for i in range(n):
        span = net.highs[i] - net.lows[i]
        trials = []
        for v in (net.highs[i] + (factor - 1) * span, net.lows[i] - (factor - 1) * span):
            x = net.values.copy()
            x[i] = v
            found = clipping.solve_clipped(net, x)
            change = np.abs(_source_currents(net, x, found.solution) - quiet)
            change[i] = 0.0
            moved = np.abs(
                (found.solution.minus - found.solution.plus) - (calm.solution.minus - calm.solution.plus)
            ).max()
            state = int(np.sign(found.state[-1]))
            trials.append(
                Overdrive(
                    names[i], float(v), float(found.solution.output[-1, 0]), ("no", "high", "low")[state],
                    float(change.max(initial=0.0)), float(moved),
                )
            )  # fmt: skip
        out.append(max(trials, key=lambda t: (t.clipped != "no", t.node, abs(t.output))))
    return tuple(out)


def _source_currents(net, x, sol):
    """Current out of each signal's source [A], (signals,)."""
    current = np.zeros(net.signal_count)
    for k, c in enumerate(net.cells):
        for parts, sources, node in (
            (c.minus_parts, c.minus_sources, sol.minus),
            (c.plus_parts, c.plus_sources, sol.plus),
        ):
            for i, s in zip(parts, sources, strict=True):
                if s < net.signal_count:
                    total = net.resistances[i] + net._leg_rs[s]
                    if total > 0:
                        current[s] += (x[s] - node[k, 0]) / total
    return current
