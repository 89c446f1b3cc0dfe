"""Test signals: what a source does over time, as straight pieces and sines."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from ..errors import InvalidQuantity

KINDS = ("dc", "sine", "square", "triangle", "ramp", "step", "points")
MOST_PIECES = 20000
_MOST_PERIODS = 64  # of the slowest wave, in which all of them may come round together


@dataclass(frozen=True)
class Wave:
    """One source over time.

    `sine`, `square`, `triangle` and `ramp` swing `amplitude` [V] to either side of
    `offset` [V] at `frequency` [Hz], starting `phase` [degrees] into their period;
    `duty` is the share of the period that a square is high. `step` goes from `offset`
    to `offset + amplitude` at `delay` [s]. `points` runs straight through
    (`times` [s], `volts` [V]), holding the ends, or round and round with `repeat`;
    two points of one time are a jump.
    """

    kind: str = "dc"
    offset: float = 0.0
    amplitude: float = 0.0
    frequency: float = 0.0
    phase: float = 0.0
    duty: float = 0.5
    delay: float = 0.0
    times: tuple[float, ...] = field(default=())
    volts: tuple[float, ...] = field(default=())
    repeat: bool = False

    def __post_init__(self):
        if self.kind not in KINDS:
            raise InvalidQuantity(f"the wave's kind is {self.kind!r}; it must be one of {', '.join(KINDS)}.")
        for name in ("offset", "amplitude", "frequency", "phase", "duty", "delay"):
            if not math.isfinite(getattr(self, name)):
                raise InvalidQuantity(f"the wave's {name} must be finite; it is {getattr(self, name)}.")
        if self.kind in ("sine", "square", "triangle", "ramp") and self.frequency <= 0:
            raise InvalidQuantity(f"the frequency of a {self.kind} must be above 0 Hz; it is {self.frequency:g}.")
        if not 0 < self.duty < 1:
            raise InvalidQuantity(f"duty must be between 0 and 1; it is {self.duty:g}.")
        if self.kind == "points":
            t = np.asarray(self.times, dtype=float)
            if len(t) < 1 or len(t) != len(self.volts):
                raise InvalidQuantity(
                    f"a wave of points needs as many times as volts, at least one; it has {len(t)} and {len(self.volts)}."
                )
            if not (np.isfinite(t).all() and np.isfinite(self.volts).all()) or (np.diff(t) < 0).any():
                raise InvalidQuantity("the times of a wave of points must be finite and must not run backwards.")
            if self.repeat and t[-1] <= t[0]:
                raise InvalidQuantity("a repeating wave of points must last longer than no time.")


class Pieces(NamedTuple):
    """A source as straight pieces plus sines: u = value + slope (t - start) + Re(phasor exp(j omega t)).

    `starts`, `values`, `slopes` are (pieces,), the first start at 0.
    """

    starts: np.ndarray
    values: np.ndarray
    slopes: np.ndarray
    omega: float
    phasor: complex
    before: float  # value just before t = 0, sines aside


def pieces(wave: Wave, duration: float) -> Pieces:
    """The wave from 0 to `duration` [s]."""
    if wave.kind == "dc":
        return _straight([0.0], [wave.offset], [0.0], wave.offset)
    if wave.kind == "sine":
        phasor = wave.amplitude * complex(0.0, -1.0) * np.exp(1j * math.radians(wave.phase))
        one = np.zeros(1)
        return Pieces(one, one + wave.offset, one, 2 * math.pi * wave.frequency, complex(phasor), wave.offset)
    if wave.kind == "step":
        after = wave.offset + wave.amplitude
        if wave.delay <= 0:
            return _straight([0.0], [after], [0.0], wave.offset)
        return _straight([0.0, wave.delay], [wave.offset, after], [0.0, 0.0], wave.offset)
    if wave.kind == "points" and not wave.repeat:
        return _from_corners(np.asarray(wave.times, float), np.asarray(wave.volts, float), None, 0.0, duration)
    low, high = wave.offset - wave.amplitude, wave.offset + wave.amplitude
    if wave.kind == "square":
        t, v = np.array([0.0, wave.duty, wave.duty, 1.0]), np.array([high, high, low, low])
    elif wave.kind == "triangle":
        t, v = np.array([0.0, 0.25, 0.75, 1.0]), np.array([wave.offset, high, low, wave.offset])
    elif wave.kind == "ramp":
        t, v = np.array([0.0, 1.0]), np.array([low, high])
    else:
        t, v = np.asarray(wave.times, float), np.asarray(wave.volts, float)
        return _from_corners(t - t[0], v, t[-1] - t[0], 0.0, duration)
    period = 1.0 / wave.frequency
    return _from_corners(t * period, v, period, (wave.phase / 360.0 % 1.0) * period, duration)


def common_period(waves) -> tuple[float, float] | None:
    """The period [s] after which all the waves repeat, and the time from which they do; None where they never do.

    Frequencies count as commensurate if their common period is at most 64 of the slowest one.
    """
    rates, since = [], 0.0
    for w in waves:
        if w.kind == "step":
            since = max(since, w.delay)
        elif w.kind == "points" and not w.repeat:
            since = max(since, w.times[-1])
        elif w.kind == "points":
            rates.append(1.0 / (w.times[-1] - w.times[0]))
        elif w.kind != "dc" and w.amplitude:
            rates.append(w.frequency)
    slowest = min(rates, default=0.0)
    for periods in range(1, _MOST_PERIODS + 1) if slowest > 0 else ():
        rounds = [periods * rate / slowest for rate in rates]
        if all(abs(x - round(x)) <= 1e-12 * x for x in rounds):
            return periods / slowest, since
    return None


def _straight(starts, values, slopes, before):
    return Pieces(np.array(starts), np.array(values), np.array(slopes), 0.0, 0j, float(before))


def _from_corners(t, v, period, shift, duration):
    """Pieces through corners (t, v), repeated each `period` if given, `shift` into the period at time 0."""
    if period is not None:
        rounds = math.ceil((duration + shift) / period) + 1
        if rounds * len(t) > MOST_PIECES:
            raise InvalidQuantity(
                f"{rounds} periods in {duration:g} s are too many for one record; at most {MOST_PIECES // len(t)} fit. "
                "Take a shorter record."
            )
        # the end of a period and the start of the next are one moment, to the last bit: between them is a jump, no ramp
        t = ((t / period)[None, :] + np.arange(rounds)[:, None]).ravel() * period - shift
        v = np.tile(v, rounds)
    elif len(t) > MOST_PIECES:
        raise InvalidQuantity(f"a wave of points may have at most {MOST_PIECES} points; it has {len(t)}.")
    before = float(v[0]) if period is None else float(np.interp(-shift * 0.0, t, v))
    starts, values, slopes = [0.0], [float(np.interp(0.0, t, v))], [0.0]
    for i in range(len(t)):
        if t[i] > duration:
            break
        rise = (v[i + 1] - v[i]) / (t[i + 1] - t[i]) if i + 1 < len(t) and t[i + 1] > t[i] else 0.0
        start, value = t[i], v[i]
        if start < 0:
            if i + 1 < len(t) and t[i + 1] > 0:
                value, start = v[i] - t[i] * rise, 0.0
            else:
                continue
        if start <= starts[-1]:
            values[-1], slopes[-1] = value, rise
        else:
            starts.append(start)
            values.append(value)
            slopes.append(rise)
    if period is None and len(t) and t[0] > 0:
        values[0] = v[0]
    before = values[0] if period is not None else before
    return _straight(starts, values, slopes, before)


def sample(p: Pieces, times) -> np.ndarray:
    """The source at `times` [s]."""
    t = np.asarray(times, dtype=float)
    i = np.clip(np.searchsorted(p.starts, t, side="right") - 1, 0, None)
    out = p.values[i] + p.slopes[i] * (t - p.starts[i])
    if p.phasor:
        out = out + (p.phasor * np.exp(1j * p.omega * t)).real
    return out
