"""Monte Carlo: many boards built and solved, every quantity drawn at once.

Boards are drawn in blocks of a fixed size, each from its own stream, so a seed
gives the same boards whatever the number of threads, and fewer boards are the
first of more. A block stays in a core's cache; NumPy releases the interpreter
while it computes, so blocks run on all cores.

Each board is solved exactly (closed-form node equations, limits of the output out
of play). One thing alone is held: what a later cell draws from an earlier output is
taken at its nominal, since it acts behind the loop gain (below a nanovolt).

Sources: JCGM 101:2008, 6.4.2 (rectangular limits), 7.5 and 7.7 (mean, standard
deviation, shortest coverage interval).
"""

from __future__ import annotations

import math
import os
from concurrent.futures import ThreadPoolExecutor
from typing import NamedTuple

import numpy as np

from . import nodes
from .budget import POINTS, extreme_corners, network_of, supply_error, temperature_span
from .operating_point import ideal_output

BLOCK = 8000  # boards that share a stream and a core's cache; not a power of two, whose rows would share cache sets
MOST_DRAWS = 20_000_000  # 8 bytes a board and point
_OP_AMP_DRAWS = 6
_LEAK = 1e-15  # S


class MonteCarlo(NamedTuple):
    """Statistics of the boards at one point; volts relative to the ideal output."""

    draws: int
    seed: int
    mean: float
    standard_deviation: float
    low_95: float  # shortest interval that holds 95 %
    high_95: float
    yield_: float | None  # share within the wanted accuracy; None where none is wanted


class Boards(NamedTuple):
    """Errors (points, draws) [V] of the drawn boards, in the order drawn."""

    points: tuple[str, ...]
    errors: np.ndarray


def shortest_interval(values, coverage: float = 0.95, *, is_sorted: bool = False) -> tuple[float, float]:
    """Shortest interval that holds `coverage` of the values.

    Source: JCGM 101:2008, 7.7.2: of the intervals from y(r) to y(r + q), q the
    integer part of coverage·M + 1/2, the shortest. With q = M the whole range.
    """
    y = np.asarray(values, dtype=float)
    y = y if is_sorted else np.sort(y)
    m = len(y)
    q = min(int(coverage * m + 0.5), m - 1)
    if q <= 0:
        return float(y[0]), float(y[-1])
    width = y[q:] - y[: m - q]
    r = int(width.argmin())
    return float(y[r]), float(y[r + q])


def first_order_holds(budget, drawn: MonteCarlo) -> bool:
    """Whether the first-order 95 % interval is good to two digits, judged by the boards.

    Source: JCGM 101:2008, 8.1: the ends of the normal interval, shift ± 1.96 u, and of
    the drawn one may differ by half a unit of the second digit of u.
    """
    u = budget.combined
    if u == 0:
        return drawn.standard_deviation == 0
    tolerance = 0.5 * 10.0 ** (math.floor(math.log10(u) + 1e-12) - 1)
    low, high = budget.shift - 1.959964 * u, budget.shift + 1.959964 * u
    return max(abs(low - drawn.low_95), abs(high - drawn.high_95)) <= tolerance


def statistics(errors, seed: int, accuracy: float | None) -> MonteCarlo:
    """Mean, standard deviation, shortest 95 % interval and yield of `errors` (draws,) [V]; sorts a copy."""
    return _statistics(np.array(errors, dtype=float), seed, accuracy)


def _statistics(errors, seed, accuracy):
    """As `statistics`, free to reorder `errors`.

    The ends of every interval of 95 % lie in the tails, so of many boards only those
    are gathered and sorted; where a guess of the tails was too narrow, all are.
    """
    draws = len(errors)
    mean = float(errors.mean())
    squares, inside = 0.0, 0
    lows, highs = [], []
    low_end, high_end = np.quantile(errors[:BLOCK], (0.06, 0.94)) if draws >= 4 * BLOCK else (-np.inf, np.inf)
    for at in range(0, draws, BLOCK):  # in pieces that stay in cache
        part = errors[at : at + BLOCK]
        squares += _squares(part, mean)
        if accuracy is not None:
            inside += int(np.count_nonzero(np.abs(part) <= accuracy))
        lows.append(part[part < low_end])
        highs.append(part[part > high_end])
    sd = float(np.sqrt(squares / (draws - 1))) if draws > 1 else 0.0
    tail = draws - min(int(0.95 * draws + 0.5), draws - 1)
    bottom, top = np.concatenate(lows), np.concatenate(highs)
    if len(bottom) < tail or len(top) < tail:
        low, high = shortest_interval(errors)
    else:
        bottom.sort()
        top.sort()
        r = int((top[-tail:] - bottom[:tail]).argmin())
        low, high = float(bottom[r]), float(top[len(top) - tail + r])
    return MonteCarlo(draws, seed, mean, sd, low, high, None if accuracy is None else inside / draws)


def _squares(part, mean):
    part = part - mean
    return float(part @ part)


def monte_carlo(stage, draws: int, seed: int = 0, *, points=POINTS, progress=None) -> dict[str, MonteCarlo]:
    """Draw boards and say how far off they are.

    Parameters
    ----------
    stage : Design or Analysis
    draws : int
        Boards, at least 1.
    seed : int
        Not negative.
    points : sequence of str, optional
        Of `present`, `highest`, `lowest`; the same boards at each.
    progress : callable, optional
        Called with the boards done; returning False stops (fewer boards count).

    Returns
    -------
    dict of str to MonteCarlo

    Raises
    ------
    InvalidQuantity
        For draws below 1 or a negative seed.
    """
    drawn = draw_boards(stage, draws, seed, points=points, progress=progress)
    accuracy = network_of(stage).design.target.accuracy
    with ThreadPoolExecutor(_threads()) as pool:
        stats = pool.map(lambda row: _statistics(row, seed, accuracy), drawn.errors)
        return dict(zip(drawn.points, stats, strict=True))


def draw_boards(stage, draws: int, seed: int = 0, *, points=POINTS, first: int = 0, progress=None) -> Boards:
    """The boards themselves: errors relative to the ideal output.

    Parameters
    ----------
    first : int, optional
        Boards to pass over, a multiple of `BLOCK`: to go on where an earlier call ended.

    Other parameters as in `monte_carlo`.
    """
    from ..errors import InvalidQuantity

    if not 1 <= draws <= MOST_DRAWS or draws != int(draws):
        raise InvalidQuantity(f"draws must be a whole number of boards, 1 to {MOST_DRAWS}; it is {draws}.")
    if seed < 0:
        raise InvalidQuantity(f"seed must be a whole number, not negative; it is {seed}.")
    if first % BLOCK:
        raise InvalidQuantity(f"first must be a multiple of {BLOCK} boards; it is {first}.")
    points = tuple(points)
    net = network_of(stage)
    recipe = _Recipe(net, points)
    draws = int(draws)
    errors = np.empty((len(points), draws))
    blocks = range((draws + BLOCK - 1) // BLOCK)

    def run(share):
        """Every thread takes each n-th block, with its own scratch memory."""
        work = recipe.scratch()
        for b in share:
            stop = min(draws, (b + 1) * BLOCK)
            out = recipe.block(work, seed, first // BLOCK + b)
            errors[:, b * BLOCK : stop] = out[:, : stop - b * BLOCK]

    threads = _threads()
    if progress is None and len(blocks) > 1 and threads > 1:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(run, [blocks[i::threads] for i in range(threads)]))
        return Boards(points, errors)
    step = 8
    with ThreadPoolExecutor(threads) if threads > 1 and len(blocks) > 1 else _Here() as pool:
        for at in range(0, len(blocks), step * threads):
            part = blocks[at : at + step * threads]
            list(pool.map(run, [part[i::threads] for i in range(threads)]))
            done = min(draws, (part[-1] + 1) * BLOCK)
            if progress is not None and progress(done) is False:
                return Boards(points, errors[:, :done])
    return Boards(points, errors)


class _Here:
    """A pool of no threads: small jobs run where they are."""

    def __enter__(self):
        return self

    def __exit__(self, *_):
        return None

    @staticmethod
    def map(function, items):
        return map(function, items)


def _threads():
    try:
        return max(1, len(os.sched_getaffinity(0)))
    except AttributeError:  # not on every system
        return os.cpu_count() or 1


class _Legs(NamedTuple):
    """The live legs of one node, signals first: where their resistors are, and what drives them."""

    rows: object  # slice or index array into the block's resistors
    series: np.ndarray | None  # (legs, 1) source resistances, None where there are none
    signals: int  # how many of the legs are signals'
    matrix: np.ndarray  # (points + 1, signals): a row of ones, then the points' voltages
    others: tuple[int, ...]  # the source of each further leg
    bare: tuple[tuple[float, int], ...]  # conductance and source of legs of 0 ohm behind a source's resistance


class _Recipe:
    """All numbers that turn a block of uniform draws into errors at the points."""

    def __init__(self, net, points):
        design, amp, kind = net.design, net.design.op_amp, net.design.resistor
        self.net = net
        corners = extreme_corners(net, nodes.solve(net, np.eye(net.signal_count + 1)).output[-1])
        x = np.stack([corners[p] for p in points])  # (points, sources)
        self.ideals = ideal_output(design, x[:, : net.signal_count])[:, None]
        self.x = x
        span = temperature_span(design)
        self.ambient = span.low, span.high - span.low
        fitted = np.isfinite(net.resistances) & (net.resistances > 0)
        self.order = np.flatnonzero(fitted)
        self.r0 = net.resistances[self.order][:, None]
        self.row = {int(part): i for i, part in enumerate(self.order)}
        self.tolerance, self.tcr = kind.tolerance, kind.temperature_coefficient
        self.limits = (
            amp.offset_voltage, amp.offset_drift, amp.bias_current, amp.offset_current, 1.0 / amp.cmrr, supply_error(design),
        )  # fmt: skip
        self.limits = np.array(self.limits)[:, None]
        self.mid = 0.5 * (design.supply.high + design.supply.low)
        reference = design.reference
        self.reference = reference.tolerance if reference is not None else 0.0
        nominal = nodes.solve(net, x.T)
        self.nominal = nominal  # of every node, (cells, points)
        self.resistors = len(self.order)
        # rows of a block: tolerance and TCR of each resistor, six a cell, reference, temperature
        self.quantities = 2 * self.resistors + _OP_AMP_DRAWS * net.cell_count + 2
        self.legs = [
            (self._legs(c.minus_parts, c.minus_sources), self._legs(c.plus_parts, c.plus_sources)) for c in net.cells
        ]
        # a + pin that hangs in the air
        self.loose = [not np.isfinite(net.resistances[c.plus_parts]).any() and c.plus_ground < 0 for c in net.cells]

    def _legs(self, parts, sources):
        net, n = self.net, self.net.signal_count
        live = [(int(i), int(s)) for i, s in zip(parts, sources, strict=True) if int(i) in self.row]
        live.sort(key=lambda leg: leg[1] >= n)
        rows = [self.row[i] for i, _ in live]
        together = rows == list(range(rows[0], rows[0] + len(rows))) if rows else False
        series = net._leg_rs[[s for _, s in live]][:, None] if live else np.zeros((0, 1))
        plain = [s for _, s in live if s < n]
        return _Legs(
            slice(rows[0], rows[0] + len(rows)) if together else np.array(rows, dtype=int),
            series if series.any() else None, len(plain),
            np.vstack([np.ones(len(plain)), self.x[:, plain]]), tuple(s for _, s in live if s >= n),
            tuple(
                (1.0 / net._leg_rs[s], int(s))
                for i, s in zip(parts, sources, strict=True)
                if net.resistances[i] == 0 and net._leg_rs[s] > 0
            ),
        )  # fmt: skip

    def scratch(self):
        n_leg = max((len(c.minus_parts) + len(c.plus_parts) for c in self.net.cells), default=0)
        p = len(self.x)
        return {
            "u": np.empty((self.quantities, BLOCK)), "g": np.empty((n_leg, BLOCK)),
            "p": [np.empty((p + 1, BLOCK)) for _ in range(2)],
        }  # fmt: skip

    def block(self, work, seed, number):
        """Errors (points, BLOCK) [V] of one block of boards."""
        rng = np.random.Generator(np.random.SFC64(np.random.SeedSequence(seed, spawn_key=(number,))))
        u = work["u"]
        rng.random(out=u)
        n = self.resistors
        r, hot = u[:n], u[n : 2 * n]
        delta = u[-1]
        delta *= self.ambient[1]
        delta += self.ambient[0]
        # r0 (1 + tolerance) (1 + coefficient ΔT), each factor drawn within its limits
        swing = delta * (2 * self.tcr)
        hot *= swing
        swing *= -0.5
        swing += 1.0
        hot += swing
        r *= 2 * self.tolerance * self.r0
        r += (1.0 - self.tolerance) * self.r0
        r *= hot
        rest = u[2 * n : -1]
        volts = rest[-1]
        volts *= 2 * self.reference
        volts += 1.0 - self.reference  # the reference, relative
        outs: list[np.ndarray] = []
        for k in range(self.net.cell_count):
            outs.append(self._cell(work, k, r, rest[_OP_AMP_DRAWS * k : _OP_AMP_DRAWS * (k + 1)], delta, volts, outs))
        out = outs[-1]
        out -= self.ideals
        return out

    def _cell(self, work, k, r, draws, delta, volts, outs):
        net, amp = self.net, self.net.design.op_amp
        c, n = net.cells[k], net.signal_count
        draws *= 2.0 * self.limits  # drawn from 0 to 1, meant from -limit to +limit
        draws -= self.limits
        e, drift, into_minus, half, cm, psrr = draws
        drift *= delta
        e += drift
        e += psrr
        half *= 0.5
        into_plus = into_minus + half
        into_minus -= half

        total_m, drive_m = self._node(work, 0, self.legs[k][0], r, volts, outs)
        if c.minus_ground >= 0:
            total_m += 1.0 / r[self.row[c.minus_ground]]
        drive_m -= into_minus
        g_f = 1.0 / r[self.row[c.feedback]] if c.feedback >= 0 else np.zeros(BLOCK)
        total_m += g_f
        y_in = net.y_in
        if c.tied == -1:
            total_p, plus = self._node(work, 1, self.legs[k][1], r, volts, outs)
            if c.plus_ground >= 0:
                total_p += 1.0 / r[self.row[c.plus_ground]]
            plus -= into_plus
            if self.loose[k]:
                total_p += _LEAK
            inv_p = 1.0 / total_p
            plus *= inv_p
            inv_p *= y_in
            inv_p += 1.0  # 1 + y_in / G+
            pull = inv_p
        else:
            plus = work["p"][1][1:]
            if c.tied == -2:
                plus[:] = 0.0
            elif c.tied > n:
                plus[:] = outs[c.tied - n - 1]
            else:
                plus[:] = self.x[:, c.tied][:, None]
                if c.tied == n:
                    plus *= volts
            pull = 1.0
        # what the + pin holds over the - pin at infinite gain: V+ + (V+ - mid)/CMRR + e
        pin = plus
        if self.mid:
            e += cm * (e - self.mid)
        else:
            e += cm * e
        cm += 1.0
        pin *= cm
        pin += e
        # d = V+ - V- pins: v_o (1 + r_o G_o) = A d + r_o (g_f m + i), m = pin - pull d
        a, r_o = amp.open_loop_gain, amp.output_resistance
        g_o = g_f.copy()
        load, drawn = self._load(k, r)
        g_o += load
        stiff = g_f * r_o
        stiff *= pull
        np.subtract(a, stiff, out=stiff)
        kappa = total_m * pull
        kappa += y_in
        kappa /= stiff  # how far the - node strays per volt of output, times conductance
        stray = kappa * r_o
        top = stray * g_f
        top += total_m
        out = pin
        out *= top
        out -= drive_m
        if drawn is not None:
            out += drawn * stray
        g_o *= r_o
        g_o += 1.0
        g_o *= kappa
        g_o += g_f
        np.reciprocal(g_o, out=g_o)
        out *= g_o
        return out.copy() if k < net.cell_count - 1 else out

    def _node(self, work, slot, legs, r, volts, outs):
        """Total conductance (BLOCK,) and driven current (points, BLOCK) of the legs into one node."""
        n = self.net.signal_count
        count = legs.signals + len(legs.others)
        g = work["g"][:count]
        if legs.series is None:
            np.reciprocal(r[legs.rows], out=g)
        elif count:
            np.add(r[legs.rows], legs.series, out=g)
            np.reciprocal(g, out=g)
        both = work["p"][slot]
        if legs.signals:
            # one small matrix product: a row of ones sums the conductances, the points' voltages drive
            np.dot(legs.matrix, g[: legs.signals], out=both)
        else:
            both[:] = 0.0
        total, drive = both[0], both[1:]
        for row, s in zip(g[legs.signals :], legs.others, strict=True):
            total += row
            if s == n:
                drive += row * volts * self.x[0, n]  # the reference is the same at every point
            else:
                drive += outs[s - n - 1] * row
        for conductance, s in legs.bare:
            total += conductance
            drive += conductance * (self.x[0, n] * volts if s == n else self.x[:, s][:, None])
        return total, drive

    def _load(self, k, r):
        """Conductance at the output beside the feedback, and the current later cells feed back into it."""
        net, n = self.net, self.net.signal_count
        load = net.load_conductance if k == net.cell_count - 1 else 0.0
        drawn = None
        for q in range(k + 1, net.cell_count):
            c = net.cells[q]
            for parts, sources, node in (
                (c.minus_parts, c.minus_sources, self.nominal.minus),
                (c.plus_parts, c.plus_sources, self.nominal.plus),
            ):
                for i, s in zip(parts, sources, strict=True):
                    if s == n + 1 + k and int(i) in self.row:
                        g = 1.0 / r[self.row[int(i)]]
                        load = load + g
                        term = node[q][:, None] * g
                        drawn = term if drawn is None else drawn + term
        return load, drawn


class Progress(NamedTuple):
    """Boards drawn so far at one point, ready to be shown."""

    statistics: MonteCarlo
    counts: np.ndarray  # boards in each bin
    wanted: int  # boards asked for


def in_steps(design, unplugged, point: str, draws: int, seed: int, edges, first: int = 1 << 16):
    """Draw boards step by step: a generator of `Progress`, returning the last; steps double.

    Parameters
    ----------
    design : Design
    unplugged : iterable of str
    point : str
        `present`, `highest` or `lowest`.
    draws, seed : int
    edges : (bins + 1,) array_like
        Of the histogram [V], evenly spaced.
    first : int, optional
        Boards of the first step.
    """
    net = nodes.Network(design, unplugged)
    stage = _Stage(design, net)
    edges = np.asarray(edges, dtype=float)
    errors = np.empty(draws)
    counts = np.zeros(len(edges) - 1, dtype=int)
    done, step = 0, max(BLOCK, first - first % BLOCK)
    while True:
        part = draw_boards(stage, min(step, draws - done), seed, points=(point,), first=done).errors[0]
        errors[done : done + len(part)] = part
        counts += np.histogram(part, len(counts), (edges[0], edges[-1]))[0]
        done += len(part)
        found = Progress(statistics(errors[:done], seed, design.target.accuracy), counts.copy(), draws)
        if done >= draws:
            return found
        yield found
        step *= 2


class _Stage(NamedTuple):
    """A design with its network, as `network_of` takes it."""

    design: object
    net: nodes.Network
