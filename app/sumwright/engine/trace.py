"""What a scope will show: records over time with slewing, clipping and recovery.

Between events the stage is a linear system driven by straight lines and sines, so
its course is known in closed form: a particular solution plus decaying modes. It
is evaluated where the record wants it and watched for the next event: an op amp
starts or stops slewing, an output meets a limit or leaves it, a source turns a
corner. A record of milliseconds with a fast op amp so costs its events and its
samples, not its nanoseconds; once its state comes back after the sources' common
period, the rest is that period over again.

The op amp's first pole is the stage that slews, and is held while the output is
at a limit, so recovery starts from there. Sources: variation of constants for
linear systems; slew limit as a bound on the current into the compensation capacitor
(Solomon, IEEE J. Solid-State Circuits 9 (1974) 314, cited from memory).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from . import nodes
from .budget import network_of
from .clipping import solve_clipped
from .events import FRACTIONS, Course
from .statespace import poles
from .waves import Wave, common_period, pieces, sample


class Trace(NamedTuple):
    """A time record.

    `times` (t,) [s]; `inputs` (signals, t) and `outputs` (cells, t) [V]. `slewing`,
    `clipping`: share of the record that some op amp slews, or sits at a limit.
    `events` counts the changes on the way (periods that repeat as their like). `complete` is False where there were too
    many (a stage that oscillates): the record then ends early.
    """

    times: np.ndarray
    inputs: np.ndarray
    outputs: np.ndarray
    slewing: float
    clipping: float
    events: int
    complete: bool


def trace(stage, waves: dict[str, Wave], duration: float, *, samples: int = 1501) -> Trace:
    """What a scope shows on every signal and output.

    Parameters
    ----------
    stage : Design or Analysis
    waves : dict of str to Wave
        What each signal does; a signal not named stays at its present value.
    duration : float
        Length of the record [s].
    samples : int, optional
        Evenly spaced samples, ends included.

    Returns
    -------
    Trace

    Raises
    ------
    InvalidQuantity
        For a duration or a number of samples that is not positive, an unknown
        signal, or a wave with too many corners for one record.
    """
    run, times = _start(stage, waves, duration, samples)
    out, upto, slewing, clipping, events, complete = run.run(times)
    inputs = np.array([sample(p, times) for p in run.sources[: run.n]])
    if not complete:
        times, out, inputs = times[:upto], out[:, :upto], inputs[:, :upto]
    return Trace(times, inputs, out, slewing / duration, clipping / duration, events, complete)


def _start(stage, waves, duration, samples):
    from ..errors import InvalidQuantity

    net = network_of(stage)
    names = net.design.signal_names
    if not duration > 0 or not math.isfinite(duration):
        raise InvalidQuantity(f"duration must be above 0 s; it is {duration}.")
    if samples < 2:
        raise InvalidQuantity(f"samples must be at least 2; it is {samples}.")
    for name in waves:
        if name not in names:
            raise InvalidQuantity(f"{name!r} is not a signal of this stage; it has {', '.join(names)}.")
    sources = [pieces(waves.get(n, Wave(offset=float(net.values[i]))), duration) for i, n in enumerate(names)]
    sources.append(pieces(Wave(offset=float(net.values[-1])), duration))
    run = Course(net, sources, duration, nodes.nominal_limits(net.design), common_period(waves.values()))
    return run, np.linspace(0.0, duration, samples)


class Step(NamedTuple):
    """How the output follows a step of one signal.

    `settled`: time [s] after which the output stays within 1 %, 0.1 % and 0.01 % of
    its change around the final value, None where it does not within the record.
    `at_limit`: a limit takes (nearly) the whole step away, so there is none to measure;
    overshoot, rise and settling are then empty.
    """

    trace: Trace
    initial: float  # V
    final: float  # V
    overshoot: float  # share of the change, 0 where there is none
    rise: float | None  # s, 10 % to 90 %
    settled: dict[float, float | None]
    at_limit: bool = False


# An output at its limit still creeps with its current; below this share of the linear change it is no step.
LEAST_CHANGE = 1e-2
SETTLING_BANDS = (0.01, 0.001, 0.0001)


def step(stage, signal: str, size: float, *, start: float | None = None, duration: float | None = None,
         samples: int = 801) -> Step:  # fmt: skip
    """Step one signal and time how the output settles.

    Parameters
    ----------
    stage : Design or Analysis
    signal : str
    size : float
        Height of the step [V], not zero.
    start : float, optional
        Where the signal starts [V]; by default its present value.
    duration : float, optional
        Length of the record [s]; by default long enough to settle.

    Returns
    -------
    Step
    """
    from ..errors import InvalidQuantity

    net = network_of(stage)
    if signal not in net.design.signal_names:
        raise InvalidQuantity(f"{signal!r} is not a signal of this stage; it has {', '.join(net.design.signal_names)}.")
    if size == 0 or not math.isfinite(size):
        raise InvalidQuantity(f"size of the step must be finite and not 0 V; it is {size}.")
    i = net.design.signal_names.index(signal)
    at = float(net.values[i]) if start is None else float(start)
    low, high = net.values.copy(), net.values.copy()
    low[i], high[i] = at, at + size
    limits = nodes.nominal_limits(net.design)
    both = solve_clipped(net, np.stack([low, high]), limits=limits).solution.output
    initial, final = float(both[0, -1, 0]), float(both[1, -1, 0])
    change = final - initial
    unlimited = nodes.solve(net, np.stack([low, high])[..., None]).output
    linear = float(unlimited[1, -1, 0] - unlimited[0, -1, 0])
    at_limit = abs(change) < LEAST_CHANGE * abs(linear)
    if duration is None:
        slowest = np.abs(poles(net).real).min(initial=1e12)
        duration = 14.0 / max(slowest, 1e-3) + 1.5 * abs(change) / net.design.op_amp.slew_rate
    waves = {signal: Wave("step", offset=at, amplitude=size)}
    run, times = _start(stage, waves, duration, samples)
    out, upto, slewing, clipping, events, complete = run.run(times)
    inputs = np.array([sample(p, times) for p in run.sources[: run.n]])
    record = Trace(
        times[:upto], inputs[:, :upto], out[:, :upto], slewing / duration, clipping / duration, events, complete
    )
    if change == 0 or at_limit or not complete:
        return Step(record, initial, final, 0.0, None, dict.fromkeys(SETTLING_BANDS), at_limit)
    t, y = _dense(run)
    rel = (y - initial) / change
    settled = {band: _settled(run, t, rel, initial, change, band) for band in SETTLING_BANDS}
    first = [next((k for k in range(len(rel)) if rel[k] >= level), None) for level in (0.1, 0.9)]
    rise = None if None in first else _crossing(t, rel, first[1], 0.9) - _crossing(t, rel, first[0], 0.1)
    return Step(record, initial, final, float(max(0.0, rel.max() - 1.0)), rise, settled)


def _dense(run):
    """The last output on a grid fine enough for every segment's modes."""
    t, y = [], []
    for seg in run.segments:
        length = seg.end - seg.start
        if length <= 0:
            continue
        inner = seg.mode.grid[seg.mode.grid < length]
        tau = np.union1d(inner, np.linspace(0.0, length, 400))
        t.append(seg.start + tau)
        y.append(seg.watch(tau)[run.cells - 1])
    return np.concatenate(t), np.concatenate(y)


def _crossing(t, rel, k, level):
    """Time at which `rel` reaches `level` just before sample k."""
    if k == 0 or rel[k] == rel[k - 1]:
        return t[k]
    return t[k - 1] + (level - rel[k - 1]) / (rel[k] - rel[k - 1]) * (t[k] - t[k - 1])


def _settled(run, t, rel, initial, change, band):
    """Last moment outside the band."""
    outside = np.abs(rel - 1.0) > band
    if outside[-1]:
        return None
    last = np.flatnonzero(outside)
    if len(last) == 0:
        return 0.0
    lo, hi = t[last[-1]], t[last[-1] + 1]
    seg = next(s for s in run.segments if s.start <= lo <= s.end and s.end > s.start and hi <= s.end + 1e-18)
    for _ in range(4):
        at = lo + (hi - lo) * FRACTIONS
        y = (seg.watch(at - seg.start)[run.cells - 1] - initial) / change
        out = np.flatnonzero(np.abs(y - 1.0) > band)
        last = int(out[-1]) if len(out) else -1
        lo, hi = (float(at[last]) if last >= 0 else lo), float(at[min(last + 1, len(at) - 1)])
    return float(hi)
