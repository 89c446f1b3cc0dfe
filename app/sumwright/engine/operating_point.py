"""The DC operating point: node voltages, every branch current, weights as made."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .clipping import solve_clipped, within_limits
from .nodes import Limits, Network, Solution, nominal_limits, solve
from .stage import Design

CLIP_WORDS = ("no", "high", "low")  # by the sign of a state: 0, 1, -1


class CellPoint(NamedTuple):
    """One cell at the operating point, output limits in force."""

    minus_voltage: float  # V
    plus_voltage: float  # V
    output_voltage: float  # V
    output_current: float  # A, out of the op amp
    feedback_current: float  # A, from the inverting node to the output
    leg_currents: dict[str, float]  # A by source, from the source into the node
    minus_ground_current: float  # A, from the node to ground
    plus_ground_current: float  # A, from the node to ground
    clipped: str  # "no", "high", "low"
    at_current_limit: bool


class OperatingPoint(NamedTuple):
    """The stage at one set of signal values; (n,) arrays run over the signals."""

    values: np.ndarray  # (n,) V
    output: float  # V, limits in force
    unclipped_output: float  # V, of the linear solution
    ideal_output: float  # V, wanted weights and wanted offset
    clipped: str  # of the last cell
    offset: float  # V, output of the linear solution with every signal at 0 V
    weights: np.ndarray  # (n,) V/V, as made
    wanted_weights: np.ndarray  # (n,) V/V
    contributions: np.ndarray  # (n,) V; with `offset` they add up to `unclipped_output`
    source_currents: np.ndarray  # (n,) A out of each source
    reference_current: float  # A out of the reference
    load_current: float  # A
    cells: tuple[CellPoint, ...]


def influence(net: Network, **circuit) -> Solution:
    """What each source does to every node, limits out of play.

    Parameters
    ----------
    net : Network
    **circuit
        As in `nodes.solve` (resistances of many boards, say).

    Returns
    -------
    Solution
        Each (..., cells, n + 1): volts (or amperes) per volt of signal i, then of
        the reference.
    """
    return solve(net, np.eye(net.signal_count + 1), **circuit)


def ideal_output(design: Design, values) -> np.ndarray:
    """Wanted weights times `values` (..., n) [V] plus the wanted offset [V], shape (...)."""
    weights = np.array([s.weight for s in design.signals])
    return np.asarray(values, dtype=float) @ weights + design.target.offset


def operating_point(
    design: Design, values=None, *, unplugged=(), net: Network | None = None, linear: Solution | None = None,
    limits: Limits | None = None,
) -> OperatingPoint:  # fmt: skip
    """The stage at one set of signal values.

    Parameters
    ----------
    design : Design
        Realised.
    values : (n,) array_like, optional
        Signal voltages [V]; default the design's own.
    unplugged : iterable of str, optional
        Signals whose cable is out.
    net, linear : optional
        The compiled network and its `influence`, when the caller has them.
    limits : Limits, optional
        Output limits; default with the rails at nominal.

    Returns
    -------
    OperatingPoint

    Notes
    -----
    Finite open-loop gain, input and output resistance, source resistances and
    load count; offset voltage, bias currents, CMRR and PSRR are zero here.
    """
    net = Network(design, unplugged) if net is None else net
    linear = influence(net) if linear is None else linear
    n = net.signal_count
    v = net.values.copy()
    if values is not None:
        v[:n] = values
    weights = linear.output[-1, :n]
    offset = float(linear.output[-1, n] * v[n])
    contributions = weights * v[:n]
    limits = nominal_limits(design) if limits is None else limits
    sol = Solution(*((x @ v)[:, None] for x in linear))
    state = np.zeros(net.cell_count, dtype=int)
    if not within_limits(net, sol, limits).all():
        sol, state = solve_clipped(net, v, limits=limits)
    minus, plus, out, current = (x[:, 0] for x in sol)
    source_currents = np.zeros(n + 1)
    cells = []
    every = np.concatenate([v, out])
    for k, c in enumerate(net.cells):
        legs = {}
        g = 1.0 / (net.resistances[c.minus_parts] + net._leg_rs[c.minus_sources])
        for part, src, gi in zip(c.minus_parts, c.minus_sources, g, strict=True):
            legs[net.parts[part].source] = _take(source_currents, src, n, gi * (every[src] - minus[k]))
        if c.tied >= 0:
            pin = net.y_in * (plus[k] - minus[k])
            legs[net.parts[c.plus_parts[0]].source] = _take(source_currents, c.tied, n, pin)
        elif c.tied == -1:
            h = 1.0 / (net.resistances[c.plus_parts] + net._leg_rs[c.plus_sources])
            for part, src, hi in zip(c.plus_parts, c.plus_sources, h, strict=True):
                legs[net.parts[part].source] = _take(source_currents, src, n, hi * (every[src] - plus[k]))
        r = net.resistances
        feedback = float((minus[k] - out[k]) / r[c.feedback]) if c.feedback >= 0 else 0.0
        cells.append(
            CellPoint(
                float(minus[k]),
                float(plus[k]),
                float(out[k]),
                float(current[k]),
                feedback,
                legs,
                float(minus[k] / r[c.minus_ground]) if c.minus_ground >= 0 else 0.0,
                float(plus[k] / r[c.plus_ground]) if c.plus_ground >= 0 else 0.0,
                CLIP_WORDS[int(np.sign(state[k]))],
                bool(abs(state[k]) == 3),
            )
        )
    return OperatingPoint(
        values=v[:n],
        output=float(out[-1]),
        unclipped_output=float(contributions.sum() + offset),
        ideal_output=float(ideal_output(design, v[:n])),
        clipped=cells[-1].clipped,
        offset=offset,
        weights=weights,
        wanted_weights=np.array([s.weight for s in design.signals]),
        contributions=contributions,
        source_currents=source_currents[:n],
        reference_current=float(source_currents[n]),
        load_current=float(out[-1] * net.load_conductance),
        cells=tuple(cells),
    )


def _take(source_currents, src, n, current):
    """Book a leg's current to its source (outputs of cells are booked elsewhere) and return it."""
    if src <= n:
        source_currents[src] += current
    return float(current)
