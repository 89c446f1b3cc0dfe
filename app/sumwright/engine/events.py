"""The stage between two events, in closed form, and what ends it.

While no op amp starts or stops slewing, no output meets or leaves a limit and no
source turns a corner, the stage is a linear system driven by straight lines and
sines. Its course is then a particular solution plus decaying modes, evaluated where
a record wants it and watched for the next event.

An output leaves a limit when its op amp would pull away from it faster than the
limit itself runs, and comes back already moving; comparing drives alone would make
it chatter where the limit moves with the current.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from . import clipping, nodes
from .statespace import CURRENT, LINEAR, SLEW, SWING, SWING_IDLE, kept_of, state_space

MOST_EVENTS = 1500
MOST_UNSTABLE = 400  # events of a stage that oscillates: what is shown is no longer the signal
_GROWN_MOST = 500.0  # nepers: beyond it a number overflows
_BUSY = 12  # segments: a record with fewer is not worth looking for its period
_FROM_STATIC = {
    nodes.LINEAR: LINEAR,
    nodes.SWING: SWING,
    nodes.SWING_IDLE: SWING_IDLE,
    nodes.CURRENT: CURRENT,
}


class Mode:
    """One state of the outputs: its equations and their modes."""

    def __init__(self, net, modes, limits):
        ss = state_space(net, modes, limits)
        self.ss = ss
        cells, n = net.cell_count, net.signal_count
        a = ss.a
        size = len(a)
        if size:
            scale = 1.0
            for _ in range(3):
                self.lam, self.v = np.linalg.eig(a * scale)
                if np.linalg.cond(self.v) < 1e9:
                    break
                # coinciding poles have no full set of modes: part them by a ten-millionth
                scale = 1.0 + 1e-7 * np.linspace(0.3, 1.0, size)[:, None]
            self.v_inv = np.linalg.inv(self.v)
        else:
            self.lam, self.v, self.v_inv = np.zeros(0, complex), np.zeros((0, 0)), np.zeros((0, 0))
        # where constant inputs take x, and how a running one makes it lag
        self.lag = np.linalg.inv(a) if size else np.zeros((0, 0))
        self.still = -self.lag @ ss.b if size else np.zeros((0, ss.b.shape[1]))
        # rows watched: outputs, output currents, what reaches the pins, first op amp states
        first = np.zeros((cells, size))
        first_w = np.zeros((cells, n + 2 + cells))
        for k in range(cells):
            if ss.first[k] >= 0:
                first[k, ss.first[k]] = 1.0
            else:
                first_w[k, n + 2 + k] = 1.0
        self.rows = np.concatenate([ss.c[ss.output], ss.c[ss.current], ss.c[ss.plus] - ss.c[ss.minus], first])
        self.direct = np.concatenate([ss.d[ss.output], ss.d[ss.current], ss.d[ss.plus] - ss.d[ss.minus], first_w])
        # what the op amp would have to hold inside to make its output what it is: o + r_o i, and how fast that runs
        r_out = net.design.op_amp.output_resistance
        self.hold = ss.c[ss.output] + r_out * ss.c[ss.current]
        self.hold_direct = ss.d[ss.output] + r_out * ss.d[ss.current]
        self.rows_v = self.rows @ self.v if size else self.rows.astype(complex)
        if size:
            self.rows_v = np.concatenate([self.rows_v, (self.hold @ self.v) * self.lam])
        else:
            self.rows_v = np.concatenate([self.rows_v, self.hold.astype(complex)])
        self._sines: dict[float, np.ndarray] = {}
        self.grid = _watch_grid(self.lam)

    def particular(self, w0, w1):
        """Straight-line response x = p0 + p1 τ to w = w0 + w1 τ."""
        p1 = self.still @ w1
        return self.still @ w0 + self.lag @ p1, p1

    def sine(self, omega, drive):
        """Phasor of x for the phasor `drive` (inputs,) at `omega`."""
        inner = self._sines.get(omega)
        if inner is None:
            inner = np.linalg.solve(1j * omega * np.eye(len(self.ss.a)) - self.ss.a, self.ss.b.astype(complex))
            self._sines[omega] = inner
        return inner @ drive


def _watch_grid(lam):
    """Times after a change at which the stage is watched, fine where its modes are fast [s]."""
    if not len(lam):
        return np.array([1e-9, 1e-6])
    fast, slow = np.abs(lam).max(), max(np.abs(lam.real).min(), 1e-3)
    t = [np.geomspace(0.03 / fast, max(30.0 / slow, 1.0 / fast), 90)]
    for z in lam[(lam.imag > 0) & (np.abs(lam.real) < lam.imag)]:
        step = math.pi / (10 * z.imag)
        last = 10.0 / max(abs(z.real), z.imag * 1e-3)
        t.append(step * np.arange(1, min(400, int(last / step) + 2)))
    return np.unique(np.concatenate(t))


FRACTIONS = np.arange(1, 49) / 48.0


class _Passed(NamedTuple):
    """A moment of a record: the state then, and what had happened until then."""

    state: tuple
    segments: int
    time: float
    slewing: float
    clipping: float
    events: int


class Course:
    """One record under way."""

    def __init__(self, net, sources, duration, limits, period=None):
        self.net, self.limits = net, limits
        self.period, self.since = period or (math.inf, 0.0)
        self.cells, self.n = net.cell_count, net.signal_count
        self.amp = net.design.op_amp
        self.w1 = 2 * math.pi * self.amp.gain_bandwidth / self.amp.open_loop_gain
        self.r_out = self.amp.output_resistance
        self.sources = sources
        self.duration = duration
        self.sines = sorted({p.omega for p in sources if p.phasor})
        self.phasors = [
            np.array([p.phasor if p.omega == om else 0.0 for p in sources] + [0.0] * (1 + self.cells))
            for om in self.sines
        ]
        self.cache: dict[tuple[int, ...], Mode] = kept_of(net).setdefault(("modes", limits), {})
        self.segments: list[Segment] = []
        self.close = 1e-6 / (2 * math.pi * self.amp.gain_bandwidth)  # s, to which an event's moment is found

    def mode(self, key):
        m = self.cache.get(key)
        if m is None:
            m = self.cache[key] = Mode(self.net, key, self.limits)
        return m

    def rest(self, volts):
        """State of the stage at rest with constant sources: modes, node voltages, first states."""
        found = clipping.solve_clipped(self.net, volts, limits=self.limits)
        sol = found.solution
        modes = tuple(int(np.sign(s)) * _FROM_STATIC[abs(int(s))] for s in found.state)
        y = np.stack([sol.minus[:, 0], sol.plus[:, 0], sol.output[:, 0]], axis=-1).ravel()
        v = sol.output[:, 0] + self.r_out * sol.current[:, 0]
        return modes, y, v

    def begin(self):
        """Where the record starts: steady with its sines if that is linear, else at rest."""
        before = np.array([p.before for p in self.sources])
        modes, y, v = self.rest(before)
        key = (LINEAR,) * self.cells
        if self.sines and modes == key:
            m = self.mode(key)
            w0 = np.concatenate([before, [1.0], np.zeros(self.cells)])
            p0, _ = m.particular(w0, np.zeros_like(w0))
            z = [m.sine(om, ph) for om, ph in zip(self.sines, self.phasors, strict=True)]
            probe = np.linspace(0, 2 * math.pi / min(self.sines), 129)
            watch = (m.rows @ p0 + m.direct @ w0)[:, None] + sum(
                ((m.rows @ q + m.direct @ ph)[:, None] * np.exp(1j * om * probe)).real
                for q, ph, om in zip(z, self.phasors, self.sines, strict=True)
            )
            watch = np.concatenate([watch, np.zeros((self.cells, len(probe)))])
            if not self._leaving(key, watch).any():
                return key, p0 + sum(q.real for q in z)
        if self.sines:
            now = before + np.array([p.phasor.real for p in self.sources])
            modes, y, v = self.rest(now)
        m = self.mode(modes)
        return modes, self._pack(m, m.ss.capacitor @ y, v, v), v

    def _pack(self, m, cap, v1, v2):
        x = np.empty(len(m.ss.a))
        x[: len(cap)] = cap
        for k in range(self.cells):
            if m.ss.first[k] >= 0:
                x[m.ss.first[k]] = v1[k]
            if m.ss.second[k] >= 0:
                x[m.ss.second[k]] = v2[k]
        return x

    def _parts(self, watch):
        c = self.cells
        return watch[:c], watch[c : 2 * c], watch[2 * c : 3 * c], watch[3 * c : 4 * c], watch[4 * c :]

    def _leaving(self, key, watch):
        """Where some op amp ceases to be in its mode, (times,) bool."""
        out = np.zeros(watch.shape[1], dtype=bool)
        for k, (o, i, d, v1, run) in enumerate(zip(*self._parts(watch), strict=True)):
            if abs(key[k]) not in (LINEAR, SLEW):
                out |= self._next(key[k], o, i, d, v1, run) != key[k]
            elif not self._well_inside(key[k], o, i, d, v1):
                out |= self._free_no_more(key[k], o, i, d, v1)
        return out

    def _free_no_more(self, mode, o, i, d, v1):
        """Where `_next` would not leave an op amp that is linear or slews as it is; the same bounds, fewer steps."""
        amp, lim = self.amp, self.limits
        rate = self.w1 * (amp.open_loop_gain * d - v1)
        if mode == LINEAR:
            out = np.abs(rate) > amp.slew_rate * (1 + 1e-9)
        else:
            out = rate <= amp.slew_rate * (1 - 1e-9) if mode > 0 else rate >= -amp.slew_rate * (1 - 1e-9)
        tol_v, tol_i = 1e-9 * (1.0 + abs(lim.high) + abs(lim.low)), 1e-9 * lim.current + 1e-15
        drop = lim.dropout_resistance * i
        out |= np.abs(i) > lim.current + tol_i
        out |= o + np.maximum(drop, 0.0) > lim.high + tol_v
        out |= o + np.minimum(drop, 0.0) < lim.low - tol_v
        return out

    def _well_inside(self, mode, o, i, d, v1):
        """Quick look: no sample is near leaving, so none needs sorting out."""
        amp, lim = self.amp, self.limits
        rate = self.w1 * (amp.open_loop_gain * d - v1)
        if mode == LINEAR:
            if max(rate.max(), -rate.min()) > amp.slew_rate:
                return False
        elif (rate.min() if mode > 0 else -rate.max()) < amp.slew_rate:
            return False
        most = max(i.max(), -i.min())
        drop = lim.dropout_resistance * most
        return most <= lim.current and o.max() <= lim.high - drop and o.min() >= lim.low + drop

    def _next(self, mode, o, i, d, v1, run):
        """The mode each sample belongs in, given that it was in `mode`.

        An output leaves a limit when the op amp would pull away from it faster than the
        limit itself runs (`run` [V/s]: it moves with the current).
        """
        amp, lim = self.amp, self.limits
        side, kind = (mode > 0) - (mode < 0), abs(mode)
        high = lim.high - lim.dropout_resistance * np.maximum(i, 0.0)
        low = lim.low + lim.dropout_resistance * np.maximum(-i, 0.0)
        tol_v, tol_i = 1e-9 * (1.0 + abs(lim.high) + abs(lim.low)), 1e-9 * lim.current + 1e-15
        if kind in (LINEAR, SLEW):
            rate = self.w1 * (amp.open_loop_gain * d - v1)
            top = amp.slew_rate * (1 + 1e-9) if kind == LINEAR else amp.slew_rate * (1 - 1e-9)
            out = np.where(rate > top, SLEW, np.where(rate < -top, -SLEW, LINEAR))
            out = np.where(np.abs(i) > lim.current + tol_i, np.where(i > 0, CURRENT, -CURRENT), out)
            out = np.where(o > high + tol_v, np.where(i > 0, SWING, SWING_IDLE), out)
            return np.where(o < low - tol_v, np.where(i < 0, -SWING, -SWING_IDLE), out)
        release = side * (self._pull(o, i, d) - run) < -1e-9 * amp.slew_rate
        flow = side * i
        if kind == CURRENT:
            beyond = side * (o - (high if side > 0 else low)) > tol_v
            held = np.where(beyond, SWING, CURRENT)
        else:
            held = np.where(flow > lim.current + tol_i, CURRENT, np.where(flow > tol_i, SWING, kind))
            held = np.where(flow < -tol_i, SWING_IDLE, held)
        return np.where(release, LINEAR, side * held)

    def _pull(self, o, i, d):
        """How fast the op amp would move if it held just what its output is at [V/s]."""
        rate = self.w1 * (self.amp.open_loop_gain * d - (o + self.r_out * i))
        return np.clip(rate, -self.amp.slew_rate, self.amp.slew_rate)

    def run(self, times):
        """Outputs (cells, len(times)) and what happened on the way."""
        started = self.begin()
        key, x = started[0], started[1]
        v1 = started[2].copy() if len(started) > 2 else np.zeros(self.cells)
        out = np.full((self.cells, len(times)), np.nan)
        starts = np.unique(np.concatenate([p.starts for p in self.sources]))
        starts = starts[starts < self.duration]
        edges = np.append(starts, self.duration)
        at_sample = 0
        slewing = clipping = 0.0
        events = 0
        fastest = max(self.sines, default=0.0)
        most_step = math.pi / (24 * fastest) if fastest else np.inf
        mark, last = math.inf, None  # when the state is compared next, and what it was a period before
        alone = not self.sines and all(p.slopes[-1] == 0 for p in self.sources)
        cycle, due = None, 2 * _BUSY
        unstable = self.mode((LINEAR,) * self.cells).lam.real.max(initial=-1.0) > 0
        most_events = MOST_UNSTABLE if unstable else MOST_EVENTS
        for j in range(len(starts)):
            t, stop = edges[j], edges[j + 1]
            while t < stop:
                if mark == math.inf and len(self.segments) >= _BUSY and self.period < self.duration:
                    mark = self.since + self.period * math.ceil(max(t - self.since, 0.0) / self.period)
                m = self.mode(key)
                seg = self._segment(m, key, t, x, v1)
                end, left = self._follow(seg, key, min(stop, max(mark, t)), times, at_sample, most_step)
                # samples up to the end of the segment; a jump's sample belongs to what follows
                upto = int(np.searchsorted(times, end, side="right" if end >= self.duration else "left"))
                if upto > at_sample:
                    out[:, at_sample:upto] = seg.watch(times[at_sample:upto] - t)[: self.cells]
                    at_sample = upto
                seg.end = end
                self.segments.append(seg)
                span = end - t
                slewing += span * any(abs(q) == SLEW for q in key)
                clipping += span * any(abs(q) in (SWING, SWING_IDLE, CURRENT) for q in key)
                x, v1, v2 = seg.state(end - t)
                if left:
                    events += 1
                    if events > most_events:
                        return out, at_sample, slewing, clipping, events, False
                    key, x, v1 = self._change(m, key, seg, end - t, x, v1, v2)
                t = end
                here = _Passed((key, x, v1), len(self.segments), t, slewing, clipping, events)
                earlier = None
                if t >= mark:  # the sources begin anew
                    earlier, last, mark = last, here, t + self.period
                elif left and alone and j == len(starts) - 1:  # an oscillation of its own: Brent's search for a cycle
                    earlier = cycle
                    if events >= due:
                        cycle, due = here, 2 * events
                if earlier is not None and self._same(earlier.state, here.state):
                    return self._repeat(earlier, here, times, at_sample, out)
        return out, at_sample, slewing, clipping, events, True

    def _same(self, before, now):
        """Whether two states differ by no more than the moments of events are known to."""
        if before[0] != now[0]:
            return False
        slack = self.amp.slew_rate * self.close
        return all(
            (np.abs(a - b) <= slack + 1e-10 * np.abs(b).max(initial=0.0)).all()
            for a, b in zip(before[1:], now[1:], strict=True)
        )

    def _repeat(self, earlier, here, times, at, out):
        """What `run` gives where all that follows is the stretch between two equal states, over and over."""
        period = [q for q in self.segments[earlier.segments : here.segments] if q.end > q.start]
        first, length = earlier.time, here.time - earlier.time
        tau = np.mod(times[at:] - first, length) + first
        which = np.searchsorted([q.start for q in period], tau, side="right") - 1
        for i, seg in enumerate(period):
            mine = np.flatnonzero(which == i)
            out[:, at + mine] = seg.watch(tau[mine] - seg.start)[: self.cells]
        rounds = (self.duration - here.time) / length
        slewing, clipping, events = (now + (now - was) * rounds for was, now in zip(earlier[3:], here[3:], strict=True))
        return out, len(times), slewing, clipping, round(events), True

    def _change(self, m, key, seg, tau, x, v1, v2):
        """Mode and state after an event."""
        watch = seg.watch(np.array([tau]))
        nxt = list(key)
        for k, (o, i, d, f, run) in enumerate(zip(*self._parts(watch), strict=True)):
            now = int(self._next(key[k], o, i, d, f, run)[0])
            if now != key[k] and abs(key[k]) not in (LINEAR, SLEW) and now == LINEAR:
                # it comes back from the limit it was held at, already moving
                v1[k] = v2[k] = o[0] + self.r_out * i[0]
                pull = float(self._pull(o, i, d)[0])
                if self.amp.second_pole is not None:
                    v1[k] += pull / (2 * math.pi * self.amp.second_pole)
                if abs(pull) >= self.amp.slew_rate:
                    now = SLEW if pull > 0 else -SLEW
            nxt[k] = now
        new = self.mode(tuple(nxt))
        return tuple(nxt), self._pack(new, x[: new.ss.capacitor.shape[0]], v1, v2), v1

    def _segment(self, m, key, t, x, v1):
        w0, w1 = np.zeros(self.n + 2 + self.cells), np.zeros(self.n + 2 + self.cells)
        for s, p in enumerate(self.sources):
            i = int(np.searchsorted(p.starts, t, side="right")) - 1
            w0[s] = p.values[i] + p.slopes[i] * (t - p.starts[i])
            w1[s] = p.slopes[i]
        w0[self.n + 1] = 1.0
        for k, mode in enumerate(key):
            if mode != LINEAR:
                w0[self.n + 2 + k] = v1[k]
                if abs(mode) == SLEW:
                    w1[self.n + 2 + k] = math.copysign(self.amp.slew_rate, mode)
        return Segment(m, t, x, w0, w1, self.sines, self.phasors)

    def _follow(self, seg, key, stop, times, at_sample, most_step):
        """End of the segment [s] and whether an event ended it."""
        t0 = seg.start
        length = stop - t0
        grid = seg.mode.grid
        grid = grid[grid < length]
        begin = 0.0
        if self._leaving(key, seg.watch(np.zeros(1)))[0]:
            return t0, True
        for part in _looks(grid, times, at_sample, t0, length, most_step):
            bad = self._leaving(key, seg.watch(part))
            if bad.any():
                i = int(bad.argmax())
                lo = part[i - 1] if i else begin
                return t0 + self._pin_down(seg, key, lo, part[i]), True
            begin = part[-1]
        return stop, False

    def _pin_down(self, seg, key, lo, hi):
        """First moment of the event between `lo` and `hi`, on its far side."""
        for _ in range(8):
            t = lo + (hi - lo) * FRACTIONS
            bad = self._leaving(key, seg.watch(t))
            i = int(bad.argmax()) if bad.any() else len(t) - 1
            lo, hi = (t[i - 1] if i else lo), t[i]
            if hi - lo <= self.close:  # a millionth of the fastest loop's time constant
                break
        return hi


def _looks(grid, times, at_sample, t0, length, most_step):
    """When to look at a segment, in growing windows [s after its start].

    First where its modes move; once they have died out, the samples and a sine's own
    pace are watch enough.
    """
    for at in range(0, len(grid), 128):
        yield grid[at : at + 128]
    reach = float(grid[-1]) if len(grid) else 0.0
    last = int(np.searchsorted(times, t0 + length, side="left"))
    at = int(np.searchsorted(times, t0 + reach, side="right"))
    at = max(at, at_sample)
    width = 128
    while reach < length:
        until = length
        paced = most_step < np.inf and (length - reach) / most_step < 40000
        if paced:
            until = min(length, reach + width * most_step)
        elif at + width < last:
            until = float(times[at + width]) - t0
        stop = int(np.searchsorted(times, t0 + until, side="left"))
        part = times[at:stop] - t0
        part = part[part > reach]
        if paced:
            part = np.union1d(part, np.arange(reach + most_step, until, most_step))
        yield np.append(part, until)
        at, reach = max(stop, at), until
        width = min(2 * width, 4096)


def _modes_at(lam, tau):
    """exp(lam τ); an unstable mode, which an event ends long before, stops growing short of overflow."""
    power = lam * tau
    if power.size and power.real.max() > _GROWN_MOST:
        power = np.minimum(power.real, _GROWN_MOST) + 1j * power.imag
    return np.exp(power)


class Segment:
    """Closed form of the course between two events."""

    def __init__(self, m, start, x, w0, w1, sines, phasors):
        self.mode, self.start, self.end = m, start, start
        self.omegas = sines
        p0, p1 = m.particular(w0, w1)
        self.p0, self.p1, self.w0, self.w1 = p0, p1, w0, w1
        self.z = [m.sine(om, ph) * np.exp(1j * om * start) for om, ph in zip(sines, phasors, strict=True)]
        rest = x - p0 - sum((q.real for q in self.z), np.zeros(len(p0)))
        self.c = m.v_inv @ rest if len(rest) else np.zeros(0, complex)
        self.y0 = m.rows @ p0 + m.direct @ w0
        self.y1 = m.rows @ p1 + m.direct @ w1
        self.ys = [
            m.rows @ q + m.direct @ (ph * np.exp(1j * om * start))
            for q, om, ph in zip(self.z, sines, phasors, strict=True)
        ]
        hold = m.hold @ p1 + m.hold_direct @ w1
        self.y0, self.y1 = np.concatenate([self.y0, hold]), np.concatenate([self.y1, np.zeros(len(hold))])
        self.ys = [
            np.concatenate([y, 1j * om * (m.hold @ q + m.hold_direct @ (ph * np.exp(1j * om * start)))])
            for y, q, om, ph in zip(self.ys, self.z, sines, phasors, strict=True)
        ]
        self.l = m.rows_v * self.c

    def watch(self, tau):
        """Watched rows at `tau` [s] after the start, (5 cells, times)."""
        out = self.y0[:, None] + self.y1[:, None] * tau
        if len(self.c):
            out += (self.l @ _modes_at(self.mode.lam[:, None], tau)).real
        for om, y in zip(self.omegas, self.ys, strict=True):
            out += (y[:, None] * np.exp(1j * om * tau)).real
        return out

    def state(self, tau):
        """State vector, first and second op amp states at `tau`."""
        m = self.mode
        x = self.p0 + self.p1 * tau
        if len(self.c):
            x = x + (m.v @ (self.c * _modes_at(m.lam, tau))).real
        for om, z in zip(self.omegas, self.z, strict=True):
            x = x + (z * np.exp(1j * om * tau)).real
        frozen = self.w0[-len(m.ss.first) :] + self.w1[-len(m.ss.first) :] * tau
        v1 = np.array([x[i] if i >= 0 else f for i, f in zip(m.ss.first, frozen, strict=True)])
        v2 = np.array([x[i] if i >= 0 else f for i, f in zip(m.ss.second, v1, strict=True)])
        return x, v1, v2
