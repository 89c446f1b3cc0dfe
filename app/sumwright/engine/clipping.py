"""Operating points with every output inside its limits: which output sits at which limit.

Each output is in one state: linear, at the voltage limit with its current flowing the
way that costs dropout or the other way, or at the current limit. `nodes.solve` answers
for given states; here they are found, by moving the first output that its state does not
fit, until all fit.
"""

from __future__ import annotations

from itertools import product
from typing import Any, NamedTuple

import numpy as np

from .nodes import CURRENT, LINEAR, SWING, SWING_IDLE, Limits, Network, Solution, _of_cell, nominal_limits, solve

# Chains up to this long have every combination of states tried where moving one at a time finds none: 7^4 of them.
TRIED_CELLS = 4
# Axes behind the leading ones, of what `solve` takes.
_TRAILING = {
    "resistances": 1, "source_resistances": 1, "load_conductance": 0, "common_mode": 1, "error": 2, "into_minus": 2,
    "into_plus": 2, "into_output": 2, "internal": 2,
}  # fmt: skip


def within_limits(net: Network, sol: Solution, limits: Limits) -> np.ndarray:
    """Where a linear solution asks nothing past a limit of any output, shape (..., columns)."""
    o, i = sol.output, sol.current
    high, low = (np.asarray(x)[..., None] if np.ndim(x) else x for x in (limits.high, limits.low))
    tol = 1e-12 * (np.abs(high) + np.abs(low) + 1.0)
    drop = limits.dropout_resistance
    fits = (o <= high - drop * np.maximum(i, 0.0) + tol) & (o >= low - drop * np.minimum(i, 0.0) - tol)
    return (fits & (np.abs(i) <= limits.current * (1 + 1e-12))).all(axis=-2)


class Clipped(NamedTuple):
    """An operating point with the output limits in force."""

    solution: Solution
    state: np.ndarray  # (..., cells) int


def solve_clipped(net: Network, sources, *, limits: Limits | None = None, state=None, gain=None, **circuit) -> Clipped:
    """Operating points with every output inside its limits.

    Parameters
    ----------
    net : Network
    sources : (..., sources) array_like
        Voltage of every signal, then of the reference [V].
    limits : Limits, optional
        Default: `nominal_limits`.
    state : (..., cells) int array_like, optional
        Where to start; a latched stage keeps a start that is consistent.
    gain : (...) array_like, optional
        As in `solve`, as is everything in `circuit`.

    Returns
    -------
    Clipped
        `solution` has one column.

    Notes
    -----
    Output against current is monotone for most stages, so moving the most
    upstream offender to the limit it passes, and back when its drive reverses,
    ends after a few rounds. Where later cells load an earlier one with a negative
    resistance it can go round in circles; those samples start again from the other
    end, and at last have every combination of limits tried.
    """
    limits = nominal_limits(net.design) if limits is None else limits
    amp = net.design.op_amp
    a_ol = amp.open_loop_gain if gain is None else np.asarray(gain)
    v = np.asarray(sources, dtype=float)[..., None]
    st: Any = np.asarray(state) if state is not None else None
    upstream_first = tuple(range(net.cell_count))
    for order in (upstream_first, upstream_first[::-1]):
        for _ in range(10 + 8 * net.cell_count):
            sol = solve(net, v, state=st, limits=limits, gain=gain, **circuit)
            if st is None:
                st = np.zeros(sol.output.shape[:-1], dtype=int)
            nxt = next_state(net, sol, st, limits, a_ol, order)
            moving = (nxt != st).any(axis=-1)
            if not moving.any():
                return Clipped(sol, st)
            st = nxt
        st = np.where(moving[..., None], LINEAR, st)
    if net.cell_count <= TRIED_CELLS:
        st = _tried(net, v, st, moving, limits, a_ol, circuit)
    return Clipped(solve(net, v, state=st, limits=limits, gain=gain, **circuit), st)


def _tried(net, v, st, moving, limits, a_ol, circuit):
    """The states `st` with those of the samples that are `moving` found by trying every one there is."""
    lead = st.shape[:-1]
    trials = np.array(list(product((0, 1, -1, 2, -2, 3, -3), repeat=net.cell_count)))

    def at_sample(x, trailing, index):
        x = np.asarray(x)
        return np.broadcast_to(x, lead + x.shape[x.ndim - trailing :])[index]

    st = np.array(st)
    for index in map(tuple, np.argwhere(moving)):
        own = {name: at_sample(x, _TRAILING[name], index) for name, x in circuit.items() if x is not None}
        bounds = limits._replace(**{side: at_sample(getattr(limits, side), np.ndim(getattr(limits, side)) > 0, index)
                                    for side in ("high", "low")})  # fmt: skip
        gain = at_sample(a_ol, 0, index)
        sol = solve(net, at_sample(v, 2, index), state=trials, limits=bounds, gain=gain, **own)
        good = (next_state(net, sol, trials, bounds, gain) == trials).all(axis=-1)
        if good.any():
            st[index] = trials[good.argmax()]
    return st


def next_state(net, sol, st, limits, a_ol, order=None):
    """Where each output goes from state `st`; only the first offender in `order` (upstream first) of a sample moves."""
    r_out = net.design.op_amp.output_resistance
    out = np.array(np.broadcast_to(st, sol.output.shape[:-1]))
    settled = np.ones(out.shape[:-1], dtype=bool)
    for k in range(net.cell_count) if order is None else order:
        m, p, o, i = (x[..., k, 0] for x in sol)
        now = out[..., k]
        high = _of_cell(limits.high, k) - limits.dropout_resistance * np.maximum(i, 0.0)
        low = _of_cell(limits.low, k) + limits.dropout_resistance * np.maximum(-i, 0.0)
        tol = 1e-12 * (np.abs(_of_cell(limits.high, k)) + np.abs(_of_cell(limits.low, k)) + 1.0)
        i_tol = 1e-12 * limits.current
        if settled.all() and not now.any():
            bad = (o > high + tol) | (o < low - tol) | (np.abs(i) > limits.current + i_tol)
            if not bad.any():
                continue
        drive = a_ol * (p - m) - o - r_out * i
        d_tol = 1e-13 * a_ol + 1e-12
        side = np.sign(now)
        kind = np.abs(now)
        # the mirror image of each quantity, so that both sides share the rules
        flow = side * i
        release = (kind != LINEAR) & (side * drive < -d_tol)
        over_v = np.where(o > high + tol, 1, np.where(o < low - tol, -1, 0))
        over_i = np.where(i > limits.current + i_tol, 1, np.where(i < -limits.current - i_tol, -1, 0))
        from_linear = np.where(
            over_v != 0, over_v * np.where(over_v * i > 0, SWING, SWING_IDLE), over_i * CURRENT
        )  # fmt: skip
        from_swing = np.where(flow > limits.current + i_tol, CURRENT, np.where(flow < -i_tol, SWING_IDLE, SWING))
        from_idle = np.where(flow > i_tol, SWING, SWING_IDLE)
        from_current = np.where(side * (o - np.where(side > 0, high, low)) > tol, SWING, CURRENT)
        held = side * np.select(
            [kind == SWING, kind == SWING_IDLE, kind == CURRENT], [from_swing, from_idle, from_current], 0
        )
        target = np.where(kind == LINEAR, from_linear, np.where(release & (np.abs(held) == kind), LINEAR, held))
        target = np.where(settled, target, now)
        settled &= target == now
        out[..., k] = target
    return out
