"""Transfer curves: the output against each signal, the others held, with exact corners.

Between two changes of state (an output reaching or leaving a limit) the stage is
linear in the signal that moves, so a curve is a polyline. The path is followed
event by event: solve at both ends of the range in the present state, find where
the first condition of that state fails, switch, go on. All curves advance at once.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .clipping import solve_clipped, within_limits
from .nodes import (
    CURRENT,
    LINEAR,
    SWING,
    SWING_IDLE,
    Limits,
    Network,
    Solution,
    _of_cell,
    nominal_limits,
    solve,
)  # fmt: skip
from .operating_point import influence
from .stage import Design

EVENTS_MOST = 24


class Onset(NamedTuple):
    """A signal value at which an output enters or leaves a limit."""

    value: float  # V of the moving signal
    cell: int
    side: str  # "high" or "low"
    entering: bool  # as the signal rises


class Curve(NamedTuple):
    """One polyline: the stage's output against one signal."""

    name: str
    x: np.ndarray  # (points,) V, corners only, rising
    y: np.ndarray  # (points,) V
    onsets: tuple[Onset, ...]
    clip_high: float | None  # V of the signal nearest its present value where the last output clips high
    clip_low: float | None
    ideal_low: float  # V, wanted output at x[0]
    ideal_high: float  # V, wanted output at x[-1]


def transfer_curves(
    design: Design, values=None, *, unplugged=(), net: Network | None = None, linear: Solution | None = None,
    limits: Limits | None = None,
) -> tuple[Curve, ...]:  # fmt: skip
    """The output against each signal over its own range, the others where they are.

    Parameters
    ----------
    design : Design
        Realised, n signals.
    values : (n,) array_like, optional
        Where the signals are [V]; default the design's own values.
    unplugged : iterable of str, optional
        Cables that are out; their curve is flat.
    net, linear : optional
        The compiled network and its `influence`, when the caller has them.
    limits : Limits, optional
        Default: rails at nominal.

    Returns
    -------
    tuple of Curve
        One a signal, in order. Clip onsets are exact roots of linear conditions.
    """
    net = Network(design, unplugged) if net is None else net
    limits = nominal_limits(design) if limits is None else limits
    n = net.signal_count
    base = net.values.copy()
    if values is not None:
        base[:n] = values
    present = base[:n]
    lows = np.minimum(net.lows, present)  # a value outside its range stays on its curve
    highs = np.maximum(net.highs, present)
    ends = np.repeat(base[None, :, None], n, axis=0).repeat(2, axis=2)  # (curve, source, end)
    idx = np.arange(n)
    ends[idx, idx, 0] = lows
    ends[idx, idx, 1] = highs
    linear = influence(net) if linear is None else linear
    straight = Solution(*(w @ ends for w in linear))  # (curve, cell, end)
    fits = within_limits(net, straight, limits).all(axis=-1)  # linear at both ends is linear in between
    xs = [[float(a)] + ([float(b)] if b > a else []) for a, b in zip(lows, highs, strict=True)]
    ys = [list(map(float, straight.output[q, -1, : len(xs[q])])) for q in range(n)]
    events: list[list[Onset]] = [[] for _ in range(n)]
    bent = np.flatnonzero(~fits)
    if bent.size:
        for q, path in zip(bent, _follow(net, ends[bent], lows[bent], highs[bent], limits), strict=True):
            xs[q], ys[q], events[q] = path
    weights = np.array([s.weight for s in design.signals])
    total = present @ weights + design.target.offset
    curves = []
    last = net.cell_count - 1
    for q, s in enumerate(design.signals):  # type: ignore[assignment]
        x, y = _tidy(xs[q], ys[q])
        rest = total - weights[q] * present[q]

        def nearest(side, q=q):
            hits = [e.value for e in events[q] if e.cell == last and e.side == side]
            return min(hits, key=lambda v: abs(v - present[q])) if hits else None

        curves.append(
            Curve(
                s.name,
                x,
                y,
                tuple(events[q]),
                nearest("high"),
                nearest("low"),
                float(rest + weights[q] * lows[q]),
                float(rest + weights[q] * highs[q]),
            )
        )
    return tuple(curves)


def _follow(net, ends, lows, highs, limits):
    """Corners and onsets of curves that meet a limit; `ends` is (curve, source, 2)."""
    n = len(ends)
    span = np.where(highs > lows, highs - lows, 1.0)
    state = solve_clipped(net, ends[:, :, 0], limits=limits).state
    state = np.array(np.broadcast_to(state, (n, net.cell_count)))
    at = np.zeros(n)  # where each curve stands, as a fraction of its range
    live = highs > lows
    xs = [[float(lo)] for lo in lows]
    ys: list[list[float]] = [[] for _ in range(n)]
    events: list[list[Onset]] = [[] for _ in range(n)]
    for _ in range(EVENTS_MOST):
        sol = solve(net, ends, state=state, limits=limits)
        first = sol.output[:, -1, 0]
        slope = sol.output[:, -1, 1] - first
        for q in range(n):
            if not ys[q]:
                ys[q].append(float(first[q]))
        when, cell, after = _next_event(net, sol, state, limits, at)
        when = np.where(live, when, np.inf)
        done = when >= 1.0 - 1e-12
        for q in np.flatnonzero(live):
            t = 1.0 if done[q] else float(when[q])
            xs[q].append(float(highs[q] if done[q] else lows[q] + t * span[q]))
            ys[q].append(float(first[q] + t * slope[q]))
            if not done[q]:
                was, now = int(state[q, cell[q]]), int(after[q])
                if (was == 0) != (now == 0):
                    side = "high" if was + now > 0 else "low"
                    events[q].append(Onset(xs[q][-1], int(cell[q]), side, now != 0))
                state[q, cell[q]] = now
                at[q] = t
        live = live & ~done
        if not live.any():
            break
    return list(zip(xs, ys, events, strict=True))


def _next_event(net, sol, state, limits, at):
    """For each curve the nearest place past `at` where a condition of its state fails.

    Returns the fraction (inf if none), the cell, and the state after.
    """
    amp = net.design.op_amp
    n = state.shape[0]
    best = np.full(n, np.inf)
    which = np.zeros(n, dtype=int)
    after = np.zeros(n, dtype=int)
    for k in range(net.cell_count):
        m, p, o, i = (x[:, k, :] for x in sol)  # (curve, end)
        high, low = _of_cell(limits.high, k), _of_cell(limits.low, k)
        r_d, i_most = limits.dropout_resistance, limits.current
        drive = amp.open_loop_gain * (p - m) - o - amp.output_resistance * i
        now = state[:, k]
        side, kind = np.sign(now), np.abs(now)
        flow = side[:, None] * i
        level = np.where(side > 0, high, low)[:, None]
        # each rule: the states it speaks for, a quantity that must stay >= 0 (at both ends), and the state it leads to
        rules = [
            (kind == LINEAR, high - o - r_d * i, SWING), (kind == LINEAR, high - o, SWING_IDLE),
            (kind == LINEAR, i_most - i, CURRENT), (kind == LINEAR, o - low - r_d * -i, -SWING),
            (kind == LINEAR, o - low, -SWING_IDLE), (kind == LINEAR, i_most + i, -CURRENT),
            (kind != LINEAR, side[:, None] * drive, LINEAR),
            (kind == SWING, flow, side * SWING_IDLE), (kind == SWING, i_most - flow, side * CURRENT),
            (kind == SWING_IDLE, -flow, side * SWING),
            (kind == CURRENT, side[:, None] * (level - o) - r_d * flow, side * SWING),
        ]  # fmt: skip
        for j, (applies, q, target) in enumerate(rules):
            if not applies.any():
                continue
            a, b = q[:, 0], q[:, 1]
            fall = b < a
            with np.errstate(divide="ignore", invalid="ignore"):
                t = np.where(fall, a / (a - b), np.inf)
            if j in (0, 1, 3, 4):  # dropout counts only while current flows the costly way
                i_t = i[:, 0] + np.where(np.isfinite(t), t, 0.0) * (i[:, 1] - i[:, 0])
                sign = 1 if j < 3 else -1
                costly = sign * i_t > 0
                t = np.where(costly if j in (0, 3) else ~costly, t, np.inf)
            # a condition already past its root at the start is the event itself
            t = np.where(fall & (t < at), np.where(a + at * (b - a) < -1e-9 * (np.abs(a) + np.abs(b)), at, np.inf), t)
            hit = applies & (t < best) & (t >= at)
            best = np.where(hit, t, best)
            which = np.where(hit, k, which)
            after = np.where(hit, np.broadcast_to(target, n), after)
    return best, which, after


def _tidy(x, y):
    """The polyline without points that repeat a place; the end of the range stays."""
    xs, ys = [x[0]], [y[0]]
    for a, b in zip(x[1:], y[1:], strict=True):
        if a > xs[-1]:
            xs.append(a)
            ys.append(b)
        else:
            ys[-1] = b
    return np.array(xs), np.array(ys)
