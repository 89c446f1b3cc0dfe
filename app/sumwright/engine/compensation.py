"""Cures for a poor phase margin, and what wires do: cables on the inputs, crosstalk at the summing node.

Sources: return ratio with the load behind an isolating resistor, node equations at
complex frequency; the equal-time-constant capacitor as a start (Analog Devices
MT-050, p. 1).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial
from typing import NamedTuple

import numpy as np

from . import nodes
from .budget import network_of
from .response import _bandwidths, _margins, _refine, response
from .stage import Design, replace

WANTED_MARGIN = 60.0  # degrees: under a tenth of overshoot, common practice


class Cure(NamedTuple):
    """One part that brings a cell's phase margin up.

    `value` in F or ohm. `bandwidth` is the lowest −3 dB frequency of any signal
    with it, `bandwidth_before` without [Hz]. `gain_loss`: relative, at DC, of an
    isolating resistor into a resistive load. Where it takes both parts, `value` is the
    capacitor's and `resistor` the other's.
    """

    kind: str  # feedback capacitor, isolating resistor, capacitor and resistor
    cell: int
    value: float
    phase_margin: float
    bandwidth: float | None
    bandwidth_before: float | None
    gain_loss: float
    resistor: float = 0.0  # ohm


def with_capacitor(design: Design, cell: int, capacitance: float) -> Design:
    """The design with another feedback capacitance [F] in one cell."""
    cells = list(design.cells)
    cells[cell] = replace(cells[cell], feedback_capacitance=capacitance)
    return replace(design, cells=tuple(cells))


def _slowest(signals):
    bands = [s.bandwidth_3db for s in signals if s.bandwidth_3db is not None]
    return min(bands, default=None)


def feedback_capacitor(stage, cell: int, wanted: float = WANTED_MARGIN) -> Cure | None:
    """The smallest feedback capacitor that gives one cell the wanted phase margin [degrees].

    None where no capacitor up to a hundred times the neutral one does (or the margin
    holds already). Searched on a grid of twelve a decade, then halved down.
    """
    net = network_of(stage)
    design = net.design
    base = response(design)
    now = base.cells[cell].phase_margin
    if now is None or now >= wanted or design.cells[cell].feedback is None:
        return None
    amp = design.op_amp
    c_in = amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance
    present = design.cells[cell].feedback_capacitance
    neutral = max(c_in / max(base.cells[cell].noise_gain - 1.0, 1e-3), 1e-13)

    def margin(c):
        found = response(with_capacitor(design, cell, c)).cells[cell].phase_margin
        return 180.0 if found is None else found

    low = present
    for c in np.geomspace(neutral / 100, neutral * 100, 49):
        if c <= present:
            continue
        if margin(c) >= wanted:
            high = float(c)
            break
        low = float(c)
    else:
        return None
    for _ in range(12):
        mid = 0.5 * (low + high)
        if margin(mid) >= wanted:
            high = mid
        else:
            low = mid
    after = response(with_capacitor(design, cell, high))
    return Cure(
        "feedback capacitor", cell, high, float(after.cells[cell].phase_margin or 180.0), _slowest(after.signals),
        _slowest(base.signals), 0.0,
    )  # fmt: skip


def _behind(design, s, r_iso):
    """Admittance [S] the output sees with the load behind `r_iso` [ohm], and the share that reaches the load."""
    y = s * design.load.capacitance + (1.0 / design.load.resistance if design.load.resistance else 0.0)
    return y / (1.0 + r_iso * y), 1.0 / (1.0 + r_iso * y)


def isolated_margin(stage, r_iso: float) -> tuple[float | None, float | None]:
    """Phase margin [degrees] and crossover [Hz] of the last cell with its load behind `r_iso` [ohm]."""
    design = network_of(stage).design
    bare = replace(design, load=replace(design.load, resistance=None, capacitance=0.0))
    net = nodes.Network(bare)
    k = net.cell_count - 1
    unit = np.zeros((net.cell_count, 1))
    unit[k] = 1.0
    zero = np.zeros((net.signal_count + 1, 1))

    def loop(f):
        s = 2j * np.pi * np.atleast_1d(np.asarray(f, dtype=float))
        y, _ = _behind(design, s, r_iso)
        sol = nodes.solve(net, zero, s=s, internal=unit, opened=k, load_conductance=y)
        return nodes.open_loop_gain(design, s) * (sol.minus[:, k, 0] - sol.plus[:, k, 0])

    amp = design.op_amp
    f = np.geomspace(amp.gain_bandwidth / amp.open_loop_gain / 10, amp.gain_bandwidth * 100, 400)
    t = loop(f)
    y = np.log(np.abs(t))
    down = np.flatnonzero((y[:-1] > 0) & (y[1:] <= 0))
    if not len(down):
        return None, None
    crossover = _refine(f, y, down[0], lambda x: math.log(abs(loop(x)[0])))
    phase = np.unwrap(np.angle(t))
    phase -= 2 * np.pi * np.round(phase[0] / (2 * np.pi))
    raw = float(np.angle(loop(crossover)[0]))
    expect = float(np.interp(math.log(crossover), np.log(f), phase))
    raw += 2 * math.pi * round((expect - raw) / (2 * math.pi))
    return 180.0 + math.degrees(raw), crossover


def isolating_resistor(stage, wanted: float = WANTED_MARGIN) -> Cure | None:
    """The smallest resistor between the last output and its load that gives the wanted margin.

    The feedback is taken before it. None without a load capacitance, where the margin
    holds already, or where a kilohm does not do.
    """
    net = network_of(stage)
    design = net.design
    k = len(design.cells) - 1
    if not design.load.capacitance:
        return None
    base = response(design)
    now = base.cells[k].phase_margin
    if now is None or now >= wanted:
        return None

    def margin(r):
        found, _ = isolated_margin(design, r)
        return 180.0 if found is None else found

    low = 0.0
    for r in np.geomspace(1.0, 1e3, 25):
        if margin(r) >= wanted:
            high = float(r)
            break
        low = float(r)
    else:
        return None
    for _ in range(10):
        mid = 0.5 * (low + high)
        if margin(mid) >= wanted:
            high = mid
        else:
            low = mid
    before = _slowest(base.signals)
    loss = high / (high + design.load.resistance) if design.load.resistance else 0.0
    return Cure("isolating resistor", k, high, margin(high), _isolated_bandwidth(design, high), before, loss)


ISOLATING = (10.0, 22.0, 47.0, 100.0, 220.0, 470.0)  # ohm: usual values tried beside a capacitor


def both_parts(stage, wanted: float = WANTED_MARGIN) -> Cure | None:
    """A feedback capacitor in the last cell with an isolating resistor, of those tried the pair that keeps most bandwidth.

    For a load that leaves too little margin for either alone: the capacitor cancels what
    the inverting node loses, the resistor parts the output from its load.
    """
    net = network_of(stage)
    design = net.design
    k = len(design.cells) - 1
    cell = design.cells[k]
    base = response(design)
    now = base.cells[k].phase_margin
    if not design.load.capacitance or cell.feedback is None or now is None or now >= wanted:
        return None
    amp = design.op_amp
    c_in = amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance
    neutral = max(c_in / max(base.cells[k].noise_gain - 1.0, 1e-3), 1e-13)
    best: Cure | None = None
    for share in (0.25, 0.5, 1.0, 2.0, 4.0, 8.0):
        capacitance = float(f"{cell.feedback_capacitance + neutral * share:.2g}")
        fitted = with_capacitor(design, k, capacitance)
        for r in ISOLATING:
            margin, _ = isolated_margin(fitted, r)
            if margin is None or margin < wanted:
                continue
            band = _isolated_bandwidth(fitted, r)
            if best is None or (band or math.inf) > (best.bandwidth or math.inf):
                loss = r / (r + design.load.resistance) if design.load.resistance else 0.0
                before = _slowest(base.signals)
                best = Cure("capacitor and resistor", k, capacitance, margin, band, before, loss, r)
            break  # a larger resistor costs more and does no better
    return best


def _isolated_bandwidth(design, r_iso):
    """Lowest −3 dB frequency [Hz] at the load behind the resistor."""
    bare = nodes.Network(replace(design, load=replace(design.load, resistance=None, capacitance=0.0)))
    f = np.geomspace(1.0, design.op_amp.gain_bandwidth * 100, 800)
    s = 2j * np.pi * f
    y, share = _behind(design, s, r_iso)
    h = nodes.solve(bare, np.eye(bare.signal_count + 1), s=s, load_conductance=y).output[:, -1, : bare.signal_count]
    h = np.abs(h * share[:, None])
    bands = []
    for i in range(h.shape[1]):
        below = np.flatnonzero(h[:, i] < h[0, i] / math.sqrt(2))
        if len(below) and below[0]:
            j = below[0]
            a, b = (math.log(h[q, i] / h[0, i] * math.sqrt(2)) for q in (j - 1, j))
            bands.append(float(np.exp(np.interp(0.0, [b, a], [math.log(f[j]), math.log(f[j - 1])]))))
    return min(bands, default=None)


class Cabled(NamedTuple):
    """The stage with cables on its inputs: complex gains (signals, f), loop gains (cells, f)."""

    gains: np.ndarray
    loop_gains: np.ndarray


def with_cables(stage, frequencies, capacitances) -> Cabled:
    """Gains and loop gains with a capacitance [F] to ground at each signal's plug.

    Parameters
    ----------
    stage : Design or Analysis
    frequencies : (f,) array_like
        [Hz]
    capacitances : (signals,) array_like
        Of each cable [F], between its source's resistance and its leg.

    Notes
    -----
    A cable turns a source of V behind R_s into V/(1 + s R_s C) behind R_s/(1 + s R_s C) (Thévenin).
    """
    net = network_of(stage)
    s = 2j * np.pi * np.asarray(frequencies, dtype=float)
    c = np.append(np.asarray(capacitances, dtype=float), 0.0)
    slow = 1.0 + s[:, None] * net.source_resistances * c
    rs = net.source_resistances / slow
    drive = np.eye(net.signal_count + 1)[None] / slow[:, :, None]
    h = nodes.solve(net, drive, s=s, source_resistances=rs).output[:, -1, : net.signal_count]
    loops = []
    zero = np.zeros((net.signal_count + 1, 1))
    for k in range(net.cell_count):
        unit = np.zeros((net.cell_count, 1))
        unit[k] = 1.0
        sol = nodes.solve(net, zero, s=s, internal=unit, opened=k, source_resistances=rs)
        loops.append(nodes.open_loop_gain(net.design, s) * (sol.minus[:, k, 0] - sol.plus[:, k, 0]))
    return Cabled(h.T, np.array(loops))


class CabledMargins(NamedTuple):
    """Per signal −3 dB [Hz], per cell phase margin [degrees]; None where there is none."""

    bandwidths: tuple[float | None, ...]
    phase_margins: tuple[float | None, ...]


def cabled_margins(stage, capacitances) -> CabledMargins:
    """What cables of the given capacitances [F] (signals,) leave of bandwidth and stability."""
    net = network_of(stage)
    amp = net.design.op_amp
    f = np.geomspace(amp.gain_bandwidth / amp.open_loop_gain / 100, amp.gain_bandwidth * 100, 500)
    cabled = with_cables(stage, f, capacitances)
    dc = nodes.solve(net, np.eye(net.signal_count + 1)).output[-1, : net.signal_count]
    bands = _bandwidths(f, cabled.gains, dc, lambda i: lambda x: with_cables(stage, [x], capacitances).gains[i, 0])
    margins = []
    for k in range(net.cell_count):
        found = _margins(f, cabled.loop_gains[k], lambda x, k=k: with_cables(stage, [x], capacitances).loop_gains[k, 0])
        margins.append(found[1])
    return CabledMargins(tuple(bands), tuple(margins))


def cures(design: Design, wanted: tuple[float, ...] = (WANTED_MARGIN, 52.0, 45.0)):
    """Parts that help, one or, where none does alone, two together: a generator of the list so far, returning it.

    Of the margins `wanted` [degrees], best first, each part is tried for the best it reaches.
    """
    found: list[Cure] = []
    last = len(design.cells) - 1
    for k in range(len(design.cells)):
        tries: list[Callable[[float], Cure | None]] = [partial(feedback_capacitor, design, k)]
        if k == last:
            tries.append(partial(isolating_resistor, design))
        for look in tries:
            cure = next((c for c in map(look, wanted) if c is not None), None)
            if cure is not None:
                found.append(cure)
                yield found
    if not any(c.cell == last for c in found):
        cure = next((c for c in map(partial(both_parts, design), wanted) if c is not None), None)
        if cure is not None:
            found.append(cure)
            yield found
    return found


def crosstalk(stage, frequency: float) -> np.ndarray:
    """What one signal leaves on another's terminals, through the summing node, (to, from) complex [V/V].

    The node a leg ends on is not quite still: a volt of signal j moves it, and the
    current through leg i puts a share of that across source i's own resistance. Zero on the
    diagonal, and where source i has no resistance.
    """
    net = network_of(stage)
    n = net.signal_count
    s = 2j * np.pi * np.array([float(frequency)]) if frequency > 0 else None
    sol = nodes.solve(net, np.eye(n + 1), s=s)
    minus, plus = (x[0] if s is not None else x for x in (sol.minus, sol.plus))
    out = np.zeros((n, n), dtype=complex)
    for part, r in zip(net.parts, net.resistances, strict=True):
        if part.source not in net.design.signal_names or not np.isfinite(r):
            continue
        i = net.design.signal_names.index(part.source)
        node = (minus if part.kind == "minus" else plus)[part.cell, :n]
        rs = net.source_resistances[i]
        if r + rs > 0:
            out[i] = node * rs / (r + rs)
    np.fill_diagonal(out, 0.0)
    return out
