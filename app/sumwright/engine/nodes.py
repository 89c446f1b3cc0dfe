"""The node equations of a chain of cells, written once.

Every analysis is a question put to these equations. Each cell has three unknown
nodes: the inverting node m, the non-inverting node p and the output o. With legs
of conductance g (into m) and h (into p), input admittance y_in between the pins,
y_cm from each pin to ground, an error voltage e in series with the + pin and the
op amp's output current i:

    m:  (Σg + g_mg + y_f + y_in + y_cm) m - y_in p - y_f o = Σ g v + y_in e + j_m
    p:  (Σh + g_pg + y_in + y_cm) p - y_in m               = Σ h v - (y_in + y_cm) e + j_p
    o:  a_m m + a_p (p + e) + a_o o + a_i i                = r

The third row is the op amp: a_m = -1, a_p = 1, a_o = -1/A, a_i = -r_o/A for the
linear amplifier, and one of the limits of its output where it clips. Later cells
load earlier outputs, so the chain is eliminated from the last cell back and then
filled in from the first one on. It is exact: no iteration, no large numbers
standing for infinity, and it works for real or complex coefficients with any
leading axes (boards, curves, frequencies) and any number of right-hand sides.

Source: Kirchhoff's current law at each node.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from .stage import REFERENCE, Design, cell_name

# States of an op amp's output. The sign is the side; 0 is the linear amplifier.
LINEAR = 0
SWING = 1  # at the voltage limit, current flowing the way that costs dropout
SWING_IDLE = 2  # at the voltage limit, current flowing the other way
CURRENT = 3  # at the current limit


class Part(NamedTuple):
    """One fitted resistor: what it is, where it sits, what it holds [ohm]."""

    name: str
    kind: str  # minus, plus, minus_ground, plus_ground, feedback
    cell: int
    source: str  # of a leg; "" for the others
    resistance: float


class _Legs(NamedTuple):
    """The legs into one node, told apart by where they come from; None where there are none of that kind."""

    own: np.ndarray | slice | None  # which of them come from signals and the reference
    sources: np.ndarray  # where those come from
    ups: tuple[np.ndarray | None, ...]  # which of them come from each earlier cell

    @classmethod
    def into(cls, k, leg_sources, n_src):
        """Where the legs of cell k come from, as an array and told apart; from a list of indices."""
        every = np.array(leg_sources, dtype=int)
        if leg_sources and max(leg_sources) < n_src:
            return every, cls(slice(None), every, (None,) * k)
        own = [i for i, s in enumerate(leg_sources) if s < n_src]
        ups = ([i for i, s in enumerate(leg_sources) if s == n_src + j] for j in range(k))
        return every, cls(np.array(own) if own else None, every[own], tuple(np.array(u) if u else None for u in ups))


class _CellNet(NamedTuple):
    """Index lists of one cell; -1 where a part is not fitted."""

    minus_parts: np.ndarray
    minus_sources: np.ndarray  # into the source axis; upstream outputs follow the sources
    plus_parts: np.ndarray
    plus_sources: np.ndarray
    minus_ground: int
    plus_ground: int
    feedback: int
    tied: int  # -1 free, -2 tied to ground, else the source the + node is tied to
    capacitance: float
    into_minus: _Legs
    into_plus: _Legs


class Network:
    """A design's topology and nominal values, compiled once for all analyses.

    Parameters
    ----------
    design : Design
        A realised design (with cells).
    unplugged : iterable of str, optional
        Signals whose cable is out: their leg carries no current.
    shorted : iterable of str, optional
        Signals whose cable is shorted to ground at the plug: 0 V behind no
        source resistance.

    Attributes
    ----------
    parts : tuple of Part
        Every fitted resistor, cell by cell: minus legs, plus legs, minus ground,
        plus ground, feedback.
    resistances : (parts,) ndarray
        Nominal values [ohm]; infinite where the cable is out.
    source_resistances : (sources,) ndarray
        Of each signal, then of the reference [ohm].
    values : (sources,) ndarray
        Present voltage of each signal, then of the reference [V].
    """

    def __init__(self, design: Design, unplugged=(), shorted=()):
        self.design = design
        self.unplugged = frozenset(unplugged)
        self.shorted = frozenset(shorted)
        names = list(design.signal_names)
        self.signal_count = len(names)
        self.cell_count = len(design.cells)
        index = {name: i for i, name in enumerate(names)}
        index[REFERENCE] = len(names)
        for k in range(self.cell_count):
            index[cell_name(k)] = len(names) + 1 + k
        reference = design.reference
        rs = [0.0 if s.name in self.shorted else s.source_resistance for s in design.signals]
        rs.append(reference.source_resistance if reference else 0.0)
        self.source_resistances = np.array(rs, dtype=float)
        volts = [0.0 if s.name in self.shorted else s.value for s in design.signals]
        volts.append(reference.voltage if reference else 0.0)
        self.values = np.array(volts, dtype=float)
        self.lows = np.array([0.0 if s.name in self.shorted else s.low for s in design.signals], dtype=float)
        self.highs = np.array([0.0 if s.name in self.shorted else s.high for s in design.signals], dtype=float)
        # rs by leg source, upstream outputs included (their resistance is the op amp's own)
        self._leg_rs = np.concatenate([self.source_resistances, np.zeros(self.cell_count)])
        parts: list[Part] = []
        self.cells: list[_CellNet] = []
        for k, cell in enumerate(design.cells):
            self.cells.append(self._compile(k, cell, index, parts))
        self.parts = tuple(parts)
        self.resistances = np.array(
            [np.inf if p.source in self.unplugged else p.resistance for p in self.parts], dtype=float
        )
        amp = design.op_amp
        self.y_in = 1.0 / amp.input_resistance
        self.load_conductance = 1.0 / design.load.resistance if design.load.resistance else 0.0

    def _compile(self, k, cell, index, parts):
        where = f", cell {k + 1}" if self.cell_count > 1 else ""

        def add(kind, resistance, source="", name=None):
            parts.append(Part((name or kind.replace("_", " ")) + where, kind, k, source, float(resistance)))
            return len(parts) - 1

        def legs(kind, side):
            ids, sources = [], []
            for leg in side:
                own = leg.source in index and index[leg.source] < self.signal_count
                ids.append(len(parts))
                # a signal feeds one leg of the whole stage, so its name alone is unique
                parts.append(
                    Part(f"{leg.source} leg" + ("" if own else where), kind, k, leg.source, float(leg.resistance))
                )
                sources.append(index[leg.source])
            return np.array(ids, dtype=int), *_Legs.into(k, sources, self.signal_count + 1)

        minus_parts, minus_sources, into_minus = legs("minus", cell.minus)
        plus_parts, plus_sources, into_plus = legs("plus", cell.plus)
        minus_ground = add("minus_ground", cell.minus_ground) if cell.minus_ground is not None else -1
        plus_ground = -1
        tied = -1
        if cell.plus_ground is not None:
            if cell.plus_ground == 0:
                tied = -2
            else:
                plus_ground = add("plus_ground", cell.plus_ground)
        if len(cell.plus) == 1 and cell.plus_ground is None:
            leg = cell.plus[0]
            if leg.resistance + self._leg_rs[plus_sources[0]] == 0 and leg.source not in self.unplugged:
                tied = int(plus_sources[0])
        feedback = add("feedback", cell.feedback) if cell.feedback is not None else -1
        return _CellNet(
            minus_parts, minus_sources, plus_parts, plus_sources, minus_ground, plus_ground, feedback, tied,
            cell.feedback_capacitance, into_minus, into_plus,
        )  # fmt: skip

    def _leg_resistances(self, source_resistances):
        """Source resistance by leg source: the given ones, then nothing for upstream outputs."""
        given = np.asarray(source_resistances)
        return np.concatenate([given, np.zeros((*given.shape[:-1], self.cell_count))], axis=-1)

    def noise_gains(self, resistances=None, source_resistances=None):
        """Ideal noise gain 1 + r_f (Σ 1/(r + r_s) + 1/r_g) of each cell at DC, shape (..., cells) [V/V]."""
        r = self.resistances if resistances is None else np.asarray(resistances, dtype=float)
        leg_rs = self._leg_rs if source_resistances is None else self._leg_resistances(source_resistances)
        gains = []
        for c in self.cells:
            g = (1.0 / (r[..., c.minus_parts] + leg_rs[..., c.minus_sources])).sum(axis=-1)
            if c.minus_ground >= 0:
                g = g + 1.0 / r[..., c.minus_ground]
            gains.append(1.0 + r[..., c.feedback] * g if c.feedback >= 0 else np.full(g.shape, np.inf))
        return np.stack(gains, axis=-1)


class Limits(NamedTuple):
    """Limits of every op amp's output: rails' reach [V], dropout [ohm], current [A]."""

    high: np.ndarray | float
    low: np.ndarray | float
    dropout_resistance: float
    current: float


def nominal_limits(design: Design) -> Limits:
    """The output limits with the rails at nominal."""
    amp, supply = design.op_amp, design.supply
    return Limits(
        supply.high - amp.dropout_high, supply.low + amp.dropout_low, amp.dropout_resistance, amp.output_current
    )


class Solution(NamedTuple):
    """Node voltages [V] and op amp output currents [A], each (..., cells, columns)."""

    minus: np.ndarray
    plus: np.ndarray
    output: np.ndarray
    current: np.ndarray


def solve(
    net: Network,
    sources,
    *,
    resistances=None,
    source_resistances=None,
    s=None,
    gain=None,
    load_conductance=None,
    error=None,
    common_mode=None,
    into_minus=None,
    into_plus=None,
    into_output=None,
    internal=None,
    opened=None,
    state=None,
    limits: Limits | None = None,
) -> Solution:
    """Node voltages of the whole chain.

    Parameters
    ----------
    net : Network
    sources : (..., sources, columns) array_like
        Voltage of every signal, then of the reference [V]. `numpy.eye(n + 1)`
        gives the influence of each.
    resistances : (..., parts) array_like, optional
        Instead of `net.resistances` [ohm]; infinity is an open part.
    source_resistances : (..., sources) array_like, optional
        Instead of the nominal ones [ohm]; complex where a cable's capacitance is part of the source.
    s : (...) array_like of complex, optional
        Complex frequency [rad/s]; None is DC.
    gain : (...) array_like, optional
        Open-loop gain [V/V] instead of the design's at `s`.
    load_conductance : (...) array_like, optional
        Load at the last output instead of the design's [S].
    error : (..., cells, columns) array_like, optional
        Voltage in series with each + input [V].
    common_mode : (..., cells) array_like, optional
        Signed 1/CMRR of each op amp: adds (V+ - mid-supply) times it to `error`.
    into_minus, into_plus, into_output : (..., cells, columns) array_like, optional
        Currents injected into the nodes [A].
    internal : (..., cells, columns) array_like, optional
        Voltage added to A(V+ - V-) inside each op amp [V].
    opened : int, optional
        Cell whose controlled source A(V+ - V-) is taken out (its loop is cut
        there), leaving only `internal` behind the output resistance.
    state : (..., cells) int array_like, optional
        Output states; needs `limits`. Columns then are whole operating points.

    Returns
    -------
    Solution

    Notes
    -----
    `columns` right-hand sides share one elimination. Source: module docstring.
    """
    design, amp = net.design, net.design.op_amp
    sources = np.asarray(sources)
    r = net.resistances if resistances is None else np.asarray(resistances, dtype=float)
    leg_rs = net._leg_rs if source_resistances is None else net._leg_resistances(source_resistances)
    if gain is None:
        gain = amp.open_loop_gain if s is None else open_loop_gain(design, s)
    a_ol = np.asarray(gain)
    inv_a = 1.0 / a_ol
    y_in = net.y_in if s is None else net.y_in + s * amp.differential_capacitance
    y_cm = 0.0 if s is None else s * amp.common_mode_capacitance
    y_stray = 0.0 if s is None else s * design.stray_capacitance
    y_load = net.load_conductance if load_conductance is None else load_conductance
    if s is not None:
        y_load = y_load + s * design.load.capacitance
    mid = 0.5 * (design.supply.high + design.supply.low)
    r_out = amp.output_resistance
    count, n_src, columns = net.cell_count, net.signal_count + 1, sources.shape[-1]

    def col(x):
        """A coefficient (...) as one that broadcasts over columns."""
        return np.asarray(x)[..., None]

    # What later cells draw from each output: current = const[j] + sum_j' draw[j][j'] o_j'
    const: list = [0.0] * count
    draw: list = [[0.0] * count for _ in range(count)]
    solved: list = [None] * count
    legs: list = [None] * count
    for k in range(count - 1, -1, -1):
        c = net.cells[k]
        g = 1.0 / (r[..., c.minus_parts] + leg_rs[..., c.minus_sources])
        y_f = 1.0 / r[..., c.feedback] if c.feedback >= 0 else 0.0
        if s is not None and c.capacitance:
            y_f = y_f + s * c.capacitance
        total_m = g.sum(axis=-1) + y_f + y_in + y_cm + y_stray
        if c.minus_ground >= 0:
            total_m = total_m + 1.0 / r[..., c.minus_ground]
        e = None if error is None else np.asarray(error)[..., k, :]

        # right-hand sides: the caller's columns, then one for each upstream output
        rm = _leg_drive(g, c.into_minus, sources)
        if c.tied == -1:
            h = 1.0 / (r[..., c.plus_parts] + leg_rs[..., c.plus_sources])
            total_p = h.sum(axis=-1) + y_in + y_cm
            if c.plus_ground >= 0:
                total_p = total_p + 1.0 / r[..., c.plus_ground]
            rp = _leg_drive(h, c.into_plus, sources)
            y_back = y_in
            if into_plus is not None:
                rp = _plus_columns(rp, np.asarray(into_plus)[..., k, :], columns)
            if e is not None:
                rp = _plus_columns(rp, -col(y_in + y_cm) * e, columns)
        else:
            h, total_p, y_back = None, 1.0, 0.0
            rp = _leg_drive(_TIE if c.tied >= 0 else _TIE[:0], c.into_plus, sources)
        if into_minus is not None:
            rm = _plus_columns(rm, np.asarray(into_minus)[..., k, :], columns)
        if e is not None:
            rm = _plus_columns(rm, col(y_in) * e, columns)

        # the op amp's row
        a_m: Any = -1.0
        a_p: Any = 1.0
        a_o: Any = -inv_a
        a_i: Any = -r_out * inv_a
        ro = np.zeros(columns)
        if common_mode is not None:
            cm = np.asarray(common_mode)[..., k]
            a_p = a_p + cm
            ro = ro + col(cm * mid)
        if internal is not None:
            ro = ro - col(inv_a) * np.asarray(internal)[..., k, :]
        if opened == k:
            # o + r_o i = internal: the controlled source is taken out
            a_m, a_p, a_o, a_i = 0.0, 0.0, 1.0, r_out
            ro = np.asarray(internal)[..., k, :] if internal is not None else np.zeros(columns)
        if state is not None and limits is not None:
            st = np.asarray(state)[..., k]
            if st.any():
                a_m, a_p, a_o, a_i, ro = _limited_row(st, limits, k, a_m, a_p, a_o, a_i, ro)
        if e is not None:
            ro = ro - col(a_p) * e
        y_own = y_f + (y_load if k == count - 1 else 0.0) + draw[k][k]
        b_m = a_m - a_i * y_f
        b_o = a_o + a_i * y_own
        ro = ro - col(a_i) * const[k]
        if into_output is not None:
            ro = ro + col(a_i) * np.asarray(into_output)[..., k, :]
        if k:
            ups = [-a_i * draw[k][j] for j in range(k)]
            ro = _join(ro, ups)

        # eliminate p, then the two by two in m and o
        inv_p = 1.0 / total_p
        k_m = total_m - y_in * y_back * inv_p
        k_o = b_m + a_p * y_back * inv_p
        rm2 = rm + col(y_in * inv_p) * rp
        ro2 = ro - col(a_p * inv_p) * rp
        inv_det = col(1.0 / (k_m * b_o + y_f * k_o))
        m = (col(b_o) * rm2 + col(y_f) * ro2) * inv_det
        o = (col(k_m) * ro2 - col(k_o) * rm2) * inv_det
        p = col(inv_p) * (rp + col(y_back) * m)
        solved[k] = (m, p, o)
        legs[k] = (g, h, y_f)

        for j in range(k):
            pull_m, pull_p = _pull(c, g, h, j)
            parts = [
                -pull_m * m[..., i] - pull_p * p[..., i] + draw[j][k] * o[..., i] for i in range(columns, columns + k)
            ]
            const[j] = const[j] - col(pull_m) * m[..., :columns] - col(pull_p) * p[..., :columns]
            const[j] = const[j] + col(draw[j][k]) * o[..., :columns]
            if c.tied == n_src + j:  # a + pin straight on an output draws only what the pin takes
                pin = col(y_in + y_cm) * p - col(y_in) * m
                parts = [q + pin[..., columns + i] for i, q in enumerate(parts)]
                const[j] = const[j] + pin[..., :columns] + (col(y_in + y_cm) * e if e is not None else 0.0)
                if into_plus is not None:  # the pin's node is that output
                    const[j] = const[j] - np.asarray(into_plus)[..., k, :]
            for i in range(k):
                draw[j][i] = draw[j][i] + parts[i] + ((pull_m + pull_p) if i == j else 0.0)

    outs: list = []
    minus: list = []
    plus: list = []
    for k in range(count):
        m, p, o = solved[k]
        full = [x[..., :columns] for x in (m, p, o)]
        for j in range(k):
            full = [f + x[..., columns + j, None] * outs[j] for f, x in zip(full, (m, p, o), strict=True)]
        minus.append(full[0])
        plus.append(full[1])
        outs.append(full[2])
    currents = []
    for k in range(count):
        i_out = (outs[k] - minus[k]) * col(legs[k][2])
        if k == count - 1:
            i_out = i_out + outs[k] * col(y_load)
        for q in range(k + 1, count):
            c = net.cells[q]
            pull_m, pull_p = _pull(c, legs[q][0], legs[q][1], k)
            i_out = i_out + col(pull_m) * (outs[k] - minus[q]) + col(pull_p) * (outs[k] - plus[q])
            if c.tied == n_src + k:
                pin = plus[q] if error is None else plus[q] + np.asarray(error)[..., q, :]
                i_out = i_out + col(y_in + y_cm) * pin - col(y_in) * minus[q]
                if into_plus is not None:
                    i_out = i_out - np.asarray(into_plus)[..., q, :]
        if into_output is not None:
            i_out = i_out - np.asarray(into_output)[..., k, :]
        currents.append(i_out)
    return Solution(*(_stack(x) for x in (minus, plus, outs, currents)))


def open_loop_gain(design: Design, s):
    """A(s) of the op amp at complex frequency `s` [rad/s], shape of `s`."""
    amp = design.op_amp
    a = amp.open_loop_gain / (1.0 + np.asarray(s) * (amp.open_loop_gain / (2 * np.pi * amp.gain_bandwidth)))
    if amp.second_pole is not None:
        a = a / (1.0 + np.asarray(s) / (2 * np.pi * amp.second_pole))
    return a


def _stack(arrays):
    """The cells' arrays (..., columns) as one (..., cells, columns)."""
    if len(arrays) == 1:
        return arrays[0][..., None, :]
    *lead, columns = _common_shape(arrays)
    out = np.empty((*lead, len(arrays), columns), dtype=np.result_type(*arrays))
    for k, x in enumerate(arrays):
        out[..., k, :] = x
    return out


def _common_shape(arrays):
    """The shape that all broadcast to; most often they have it already."""
    shapes = {x.shape for x in arrays}
    return shapes.pop() if len(shapes) == 1 else np.broadcast_shapes(*shapes)


_TIE = np.ones(1)  # a + pin tied to a source follows it


def _leg_drive(g, legs, sources):
    """Σ g v over the legs: the caller's columns, then the factor of each upstream output."""
    if legs.own is None:
        base = np.zeros(sources.shape[-1])
    else:
        weight, v = g[..., legs.own], sources[..., legs.sources, :]
        base = weight @ v if v.ndim == 2 else (weight[..., None, :] @ v)[..., 0, :]
    if not legs.ups:
        return base
    return _join(base, [0.0 if u is None else g[..., u].sum(axis=-1) for u in legs.ups])


def _join(base, extra):
    """`base` (..., columns) with one more column for each of `extra` (...)."""
    lead = base.shape[:-1]
    if any(np.shape(x) not in ((), lead) for x in extra):
        lead = np.broadcast_shapes(lead, *(np.shape(x) for x in extra))
    dtype = np.result_type(base, *extra)
    out = np.empty((*lead, base.shape[-1] + len(extra)), dtype=dtype)
    out[..., : base.shape[-1]] = base
    for i, x in enumerate(extra):
        out[..., base.shape[-1] + i] = x
    return out


def _plus_columns(full, part, columns):
    """`full` with `part` added to its first `columns` columns."""
    if full.shape[-1] == columns:
        return full + part
    part = np.asarray(part)
    lead = np.broadcast_shapes(full.shape[:-1], part.shape[:-1])
    out = np.empty((*lead, full.shape[-1]), dtype=np.result_type(full, part))
    out[...] = full
    out[..., :columns] += part
    return out


def _pull(c, g, h, up):
    """Conductances by which cell `c` hangs on the output of cell `up`: into its minus and its plus node."""
    from_m, from_p = c.into_minus.ups[up], c.into_plus.ups[up]
    pull_m = 0.0 if from_m is None else g[..., from_m].sum(axis=-1)
    return pull_m, 0.0 if from_p is None or h is None else h[..., from_p].sum(axis=-1)


def _limited_row(st, limits, k, a_m, a_p, a_o, a_i, ro):
    """The op amp's row with the outputs that are at a limit put there."""
    side, kind = np.sign(st), np.abs(st)
    linear, at_current = kind == LINEAR, kind == CURRENT
    level = np.where(side > 0, _of_cell(limits.high, k), _of_cell(limits.low, k))
    a_m = np.where(linear, a_m, 0.0)
    a_p = np.where(linear, a_p, 0.0)
    a_o = np.where(linear, a_o, np.where(at_current, 0.0, 1.0))
    a_i = np.where(linear, a_i, np.where(at_current, 1.0, np.where(kind == SWING, limits.dropout_resistance, 0.0)))
    held = np.where(at_current, side * limits.current, level)
    return a_m, a_p, a_o, a_i, np.where(linear[..., None], ro, held[..., None])


def _of_cell(x, k):
    """A limit that is either one number for all cells or (..., cells)."""
    x = np.asarray(x)
    return x[..., k] if x.ndim else x
