"""How fast the stage is and whether it is stable: gains over frequency, loop gains.

Curves are evaluated from the modes of the stage's state equations, crossings are
found on a grid that reaches far below the lowest and far above the highest pole
and refined on the equations themselves; the lowest crossing counts. What does not
exist is None. `source_gains` and `loop_gains` answer the same questions from the
node equations at complex frequency: slower, the check on the modes, and used where
those would have to stand for an output or a source without resistance.

Source: loop gain as the return ratio of the op amp's controlled source (Bode,
Network Analysis and Feedback Amplifier Design, 1945), phase margin as
180° + arg T at the first |T| = 1.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from . import nodes
from .budget import network_of
from .stage import Design
from .statespace import StateSpace, Transfer, each_modes, is_exact, linear_modes, linear_space, poles

_PER_DECADE = 20
_HALF_POWER = 1.0 / math.sqrt(2.0)
_SAME_SHAPE = 1e-9  # in ln of a gain around its crossing: two legs into one node differ by rounding


class SignalResponse(NamedTuple):
    name: str
    dc_gain: float  # V/V, sign kept
    bandwidth_3db: float | None  # Hz


class CellResponse(NamedTuple):
    noise_gain: float  # V/V, ideal, DC
    crossover: float | None  # Hz
    phase_margin: float | None  # degrees
    gain_margin_db: float | None


class Response(NamedTuple):
    """Frequency response of a stage.

    Curves share `frequencies` (f,) [Hz]: `gains` (sources, f) complex from each
    signal and then the reference; `loop_gains` (cells, f) complex, positive at
    DC; `open_loop` (f,) complex A; `noise_gains` (cells, f) complex A / T.
    """

    signals: tuple[SignalResponse, ...]
    cells: tuple[CellResponse, ...]
    frequencies: np.ndarray
    gains: np.ndarray
    loop_gains: np.ndarray
    open_loop: np.ndarray
    noise_gains: np.ndarray


def source_gains(net: nodes.Network, frequencies) -> np.ndarray:
    """Complex gain from every signal and the reference to the output, (sources, f)."""
    s = 2j * np.pi * np.asarray(frequencies, dtype=float)
    return nodes.solve(net, np.eye(net.signal_count + 1), s=s).output[..., -1, :].T


def loop_gains(net: nodes.Network, frequencies) -> np.ndarray:
    """Loop gain of each cell, cut at its controlled source with the other loops closed, (cells, f)."""
    s = 2j * np.pi * np.asarray(frequencies, dtype=float)
    a = nodes.open_loop_gain(net.design, s)
    zero = np.zeros((net.signal_count + 1, 1))
    rows = []
    for k in range(net.cell_count):
        unit = np.zeros((net.cell_count, 1))
        unit[k] = 1.0
        sol = nodes.solve(net, zero, s=s, internal=unit, opened=k)
        rows.append(a * (sol.minus[..., k, 0] - sol.plus[..., k, 0]))
    return np.array(rows)


def _cuts(ss: StateSpace):
    """The chain with each cell's first op amp state made an input: what reaches its pins, plus minus minus."""
    rows = ss.c[ss.plus] - ss.c[ss.minus]
    every = np.arange(len(ss.a))
    kept = [every[every != v] for v in ss.first]
    inner = np.array([ss.a[np.ix_(keep, keep)] for keep in kept])
    modes = each_modes(inner) if inner.shape[1] else [None] * len(inner)
    return [
        Transfer(a, ss.a[keep, v][:, None], row[None, keep], row[v].reshape(1, 1), m)
        for a, keep, v, row, m in zip(inner, kept, ss.first, rows, modes, strict=True)
    ]


def _by_modes(net):
    """Gains and loop gains over frequency, and each as a function of one frequency, from the modes."""
    amp, ss = net.design.op_amp, linear_space(net)
    last, n = ss.output[-1:], net.signal_count
    through = Transfer(ss.a, ss.b[:, : n + 1], ss.c[last], ss.d[last, : n + 1], linear_modes(net))
    cuts = _cuts(ss)
    w1 = 2 * math.pi * amp.gain_bandwidth / amp.open_loop_gain

    def first_stage(x):
        return amp.open_loop_gain / (1.0 + 2j * math.pi * x / w1)

    def curves(x):
        return through.curves(x)[0], np.array([-first_stage(x) * cut.curves(x)[0, 0] for cut in cuts])

    def loop_of(k):
        pins = cuts[k].of(0)
        return lambda x: -first_stage(x) * pins(x)

    return curves, through.of, loop_of


def _by_nodes(net):
    """The same from the node equations, where the state equations are not quite the stage's own."""

    def curves(x):
        return source_gains(net, x), loop_gains(net, x)

    return (
        curves,
        lambda i: lambda x: complex(source_gains(net, [x])[i, 0]),
        lambda k: lambda x: complex(loop_gains(net, [x])[k, 0]),
    )


def response(stage, *, frequencies=None) -> Response:
    """Gain and phase of every signal, loop gain and margins of every cell.

    Parameters
    ----------
    stage : Design or Analysis
    frequencies : (f,) array_like, optional
        Where the curves are wanted [Hz]; by default the search grid.

    Returns
    -------
    Response
    """
    net = network_of(stage)
    design, n = net.design, net.signal_count
    f = _grid(net)
    curves, gain_of, loop_of = (_by_modes if is_exact(net) else _by_nodes)(net)
    gains, loops = curves(f)
    linear = getattr(stage, "linear", None)  # an analysis knows the influences already
    dc = (nodes.solve(net, np.eye(n + 1)) if linear is None else linear).output[-1]
    bandwidths = _bandwidths(f, gains[:n], dc[:n], gain_of)
    signals = tuple(
        SignalResponse(s.name, float(g), b) for s, g, b in zip(design.signals, dc, bandwidths, strict=False)
    )
    cells = []
    log_f = np.log(f)
    phases = np.unwrap(np.angle(loops))
    for k, ng in enumerate(net.noise_gains()):
        margins = _margins(f, loops[k], loop_of(k), log_f, phases[k])
        cells.append(CellResponse(float(ng), *margins))
    if frequencies is not None:
        f = np.asarray(frequencies, dtype=float)
        gains, loops = curves(f)
    a = nodes.open_loop_gain(design, 2j * np.pi * f)
    with np.errstate(divide="ignore", invalid="ignore"):
        noise_gains = a / loops
    return Response(signals, tuple(cells), f, gains, loops, a, noise_gains)


def full_power_bandwidth(design: Design, span: float) -> float | None:
    """Highest sine [Hz] of peak-to-peak `span` [V] that does not slew: slew rate / (2π · span / 2)."""
    return design.op_amp.slew_rate / (math.pi * span) if span > 0 else None


def _grid(net):
    """Search frequencies [Hz], denser around resonances."""
    p = poles(net)
    size = np.abs(p) / (2 * np.pi)
    amp = net.design.op_amp
    open_pole = amp.gain_bandwidth / amp.open_loop_gain
    top = max(size.max(initial=1.0), amp.gain_bandwidth, amp.second_pole or 0.0)
    low = min(open_pole, size[size > 0].min(initial=open_pole)) / 100.0
    # poles of nanosecond output nodes lie far above anything the loop does; two decades past the op amp are enough
    high = min(top, 1e4 * amp.gain_bandwidth) * 100.0
    count = int(math.log10(high / low) * _PER_DECADE) + 2
    grid = np.geomspace(low, high, count)
    resonant = p[(p.imag > 0) & (np.abs(p.real) < 0.5 * np.abs(p))]
    if len(resonant):
        f0 = np.abs(resonant) / (2 * np.pi)
        z = np.clip(np.abs(resonant.real) / np.abs(resonant), 1e-5, 1.0)
        spread = np.array([-6, -4, -3, -2, -1.5, -1, -0.5, 0, 0.5, 1, 1.5, 2, 3, 4, 6])
        grid = np.unique(np.concatenate([grid, (f0[:, None] * np.exp(spread * z[:, None])).ravel()]))
    return grid


def _start(xs, ys):
    """Where a smooth monotone curve through four points crosses zero: Lagrange, x as a function of y."""
    guess = 0.0
    for i, yi in enumerate(ys):
        weight = 1.0
        for j, yj in enumerate(ys):
            if j != i:
                if yi == yj:
                    return math.nan
                weight *= yj / (yj - yi)
        guess += xs[i] * weight
    return guess


def _refine(f, y, at, exact):
    """Zero of a smooth curve between samples `at` and `at + 1`, by a guarded secant in log f."""
    x0, x1 = math.log(f[at]), math.log(f[at + 1])
    y0, y1 = float(y[at]), float(y[at + 1])
    lo = max(0, min(at - 1, len(f) - 4))
    x = _start([math.log(v) for v in f[lo : lo + 4]], y[lo : lo + 4].tolist())
    if not x0 < x < x1:
        x = x0 + (x1 - x0) * y0 / (y0 - y1) if y0 != y1 else 0.5 * (x0 + x1)
    slope = (y1 - y0) / (x1 - x0)
    before = None
    for _ in range(60):
        v = exact(math.exp(x))
        if v == 0.0:
            break
        if (v > 0) == (y0 > 0):
            x0, y0 = x, v
        else:
            x1, y1 = x, v
        if before is not None and x != before[0] and v != before[1]:
            slope = (v - before[1]) / (x - before[0])
        before = (x, v)
        step = -v / slope
        if abs(step) < 1e-11:
            x += step
            break
        x = x + step if x0 < x + step < x1 else 0.5 * (x0 + x1)
        if x1 - x0 < 1e-13:
            break
    return math.exp(x)


def _bandwidths(f, gains, dc, gain_of):
    """Lowest frequency at which each gain is 3 dB under its DC value, or None.

    `gain_of(i)` is gain i as a function of one frequency.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        y = np.log(np.abs(gains) / (np.abs(dc)[:, None] * _HALF_POWER))
    below = y <= 0
    first = below.argmax(axis=1)
    exists = below[np.arange(len(y)), first] & (first > 0) & np.isfinite(y).all(axis=1) & (dc != 0)
    # legs into one node share their shape over frequency, so its crossing is found once
    found: list[tuple[int, np.ndarray, float]] = []
    out: list[float | None] = []
    for i in range(len(dc)):
        if not exists[i]:
            out.append(None)
            continue
        shape = y[i, max(first[i] - 4, 0) : first[i] + 3]
        known = (x for at, other, x in found if at == first[i] and np.abs(other - shape).max() < _SAME_SHAPE)
        crossing = next(known, None)
        if crossing is None:
            level, at = math.log(abs(dc[i]) * _HALF_POWER), gain_of(i)
            crossing = _refine(f, y[i], first[i] - 1, lambda x, at=at, z=level: math.log(abs(at(x))) - z)
            found.append((int(first[i]), shape, crossing))
        out.append(crossing)
    return out


def _margins(f, loop, at, log_f=None, phase=None):
    """Crossover [Hz], phase margin [degrees], gain margin [dB] of one cell.

    `at` is the loop gain at one frequency; `log_f` and the unwrapped `phase` are for a caller who has them.
    """
    size = np.abs(loop)
    with np.errstate(divide="ignore"):
        y = np.log(size)
    log_f = np.log(f) if log_f is None else log_f
    phase = np.unwrap(np.angle(loop)) if phase is None else phase
    phase = phase - 2 * np.pi * np.round(phase[0] / (2 * np.pi))

    def near(x, t):
        """Phase of t at x, on the branch that the samples are on."""
        expect = np.interp(math.log(x), log_f, phase)
        raw = math.atan2(t.imag, t.real)
        return raw + 2 * math.pi * round((expect - raw) / (2 * math.pi))

    crossover = phase_margin = gain_margin = None
    down = np.flatnonzero((y[:-1] > 0) & (y[1:] <= 0))
    if len(down):
        crossover = _refine(f, y, down[0], lambda x: math.log(abs(at(x))))
        phase_margin = 180.0 + math.degrees(near(crossover, at(crossover)))
    turn = np.flatnonzero((phase[:-1] > -math.pi) & (phase[1:] <= -math.pi))
    if len(turn):
        x = _refine(f, phase + math.pi, turn[0], lambda x: near(x, at(x)) + math.pi)
        gain_margin = -20.0 * math.log10(abs(at(x)))
    return crossover, phase_margin, gain_margin


def peaking_db(gains, dc) -> float:
    """How far a gain rises over its DC value [dB], 0 where it does not; `gains` (f,), `dc` V/V."""
    top = float(np.abs(gains).max()) / abs(dc) if dc else 1.0
    return max(0.0, 20.0 * math.log10(top))


class AtFrequency(NamedTuple):
    """One signal at the highest frequency that matters for it."""

    name: str
    frequency: float  # Hz
    loss_db: float  # gain there against DC, negative = down
    amplitude_error: float  # |H(f)/H(0)| - 1
    phase: float  # degrees against DC
    error_while_moving: float  # V: |H(f) - H(0)| times half the signal's range


def at_signal_frequencies(stage) -> tuple[AtFrequency, ...]:
    """Flatness of each signal at its own `frequency`; 0 Hz gives no loss."""
    net = network_of(stage)
    design = net.design
    dc = nodes.solve(net, np.eye(net.signal_count + 1)).output[-1]
    f = np.array([s.frequency for s in design.signals])
    h = np.array([source_gains(net, [x])[i, 0] if x > 0 else dc[i] for i, x in enumerate(f)])
    out = []
    for i, s in enumerate(design.signals):
        if dc[i] == 0:
            out.append(AtFrequency(s.name, s.frequency, 0.0, 0.0, 0.0, 0.0))
            continue
        q = complex(h[i] / dc[i])
        out.append(
            AtFrequency(
                s.name, s.frequency, 20 * math.log10(abs(q)), abs(q) - 1.0, math.degrees(math.atan2(q.imag, q.real)),
                float(abs(h[i] - dc[i]) * 0.5 * (s.high - s.low)),
            )
        )  # fmt: skip
    return tuple(out)
