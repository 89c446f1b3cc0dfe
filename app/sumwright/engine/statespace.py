"""The stage as ordinary differential equations, one set for each state of its outputs.

The node equations with capacitances, C dy/dt + G y = inputs, are reduced to as
many states as there are independent capacitor voltages (nodes without one follow
algebraically), and each op amp adds its one or two poles. A cell whose op amp
slews or whose output is at a limit no longer listens to its inputs, so its first
pole leaves the states and becomes an input that runs along a straight line.

Source: Kirchhoff's current law; the op amp as in its data sheet
(A0, gain-bandwidth, second pole), slewing where the first pole is driven.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from .nodes import Limits, Network

# What a cell's op amp is doing. The sign is the side.
LINEAR = 0
SLEW = 1
SWING = 2  # output at the voltage limit, current flowing the way that costs dropout
CURRENT = 3  # output at the current limit
SWING_IDLE = 4  # output at the voltage limit, current flowing the other way

# An ideal branch still needs a resistance to write the equation of. Smaller ones make poles so far out that the modes
# lose digits; see `is_exact`.
_LEAST_OUTPUT_RESISTANCE = 1e-2  # ohm, behind a loop that takes its effect away
_LEAST_LIMIT_RESISTANCE = 1e-4  # ohm, of an output at a limit that does not yield
_LEAST_TIE_RESISTANCE = 0.1  # ohm, of a + pin tied straight to a source: far below anything it could load


class StateSpace(NamedTuple):
    """dx/dt = a x + b w;  y = c x + d w.

    x: capacitor coordinates, then the op amp states in `first` and `second`.
    w: sources (n + 1), the constant 1, then one input a cell: the first op amp
    state where it is not in x. y: for each cell m, p, o, then the output current
    of each cell (3 cells + cells rows). `b_node`, `d_node`: the same from a current
    into each node (m, p, o of each cell).
    """

    a: np.ndarray
    b: np.ndarray
    c: np.ndarray
    d: np.ndarray
    capacitor: np.ndarray  # (capacitor states, 3 cells): coordinates from m, p, o of each cell
    first: tuple[int, ...]  # index of each cell's first op amp state in x, -1 where frozen
    second: tuple[int, ...]  # of its second, -1 where there is none or it is frozen
    minus: np.ndarray  # row of y for each cell's node
    plus: np.ndarray
    output: np.ndarray
    current: np.ndarray
    b_node: np.ndarray
    d_node: np.ndarray


def state_space(net: Network, modes=None, limits: Limits | None = None) -> StateSpace:
    """Equations of the chain with each cell's op amp in the given mode.

    Parameters
    ----------
    net : Network
    modes : (cells,) int, optional
        LINEAR (default), ±SLEW, ±SWING, ±SWING_IDLE, ±CURRENT.
    limits : Limits, optional
        Needed where a mode is a limit of the output.
    """
    cells, n = net.cell_count, net.signal_count
    modes = (0,) * cells if modes is None else tuple(modes)
    amp, design = net.design.op_amp, net.design
    r_out = max(amp.output_resistance, _LEAST_OUTPUT_RESISTANCE)
    nodes = 3 * cells
    inputs = n + 2 + cells
    gmat, cmat = np.zeros((nodes, nodes)), np.zeros((nodes, nodes))
    drive = np.zeros((nodes, inputs + nodes))  # from w, then from currents into the nodes
    drive[:, inputs:] = np.eye(nodes)
    inner = np.zeros((nodes, cells))  # from each op amp's internal voltage
    branch = np.zeros(cells)  # conductance of the output branch
    r = net.resistances
    same = np.eye(nodes)  # all nodes from the free ones: a + pin tied to ground or to an output is not free

    def between(i, j, g, c=0.0):
        """A conductance and capacitance between node i and node j (None = ground)."""
        for mat, value in ((gmat, g), (cmat, c)):
            if value:
                mat[i, i] += value
                if j is not None:
                    mat[j, j] += value
                    mat[i, j] -= value
                    mat[j, i] -= value

    def leg(node, source, resistance):
        g = 1.0 / resistance
        if source <= n:
            gmat[node, node] += g
            drive[node, source] += g
        else:
            between(node, 3 * (source - n - 1) + 2, g)

    for k, c in enumerate(net.cells):
        m, p, o = 3 * k, 3 * k + 1, 3 * k + 2
        for i, s in zip(c.minus_parts, c.minus_sources, strict=True):
            leg(m, int(s), r[i] + net._leg_rs[s])
        if c.minus_ground >= 0:
            between(m, None, 1.0 / r[c.minus_ground])
        if c.feedback >= 0:
            between(m, o, 1.0 / r[c.feedback], c.capacitance)
        for i, s in zip(c.plus_parts, c.plus_sources, strict=True):
            if c.tied <= n:
                leg(p, int(s), max(r[i] + net._leg_rs[s], _LEAST_TIE_RESISTANCE))
        if c.plus_ground >= 0:
            between(p, None, 1.0 / r[c.plus_ground])
        if c.tied == -2:
            same[p, p] = 0.0
        elif c.tied > n:
            same[p, p], same[p, 3 * (c.tied - n - 1) + 2] = 0.0, 1.0
        between(m, p, net.y_in, amp.differential_capacitance)
        between(m, None, 0.0, amp.common_mode_capacitance + design.stray_capacitance)
        between(p, None, 0.0, amp.common_mode_capacitance)
        if k == cells - 1:
            between(o, None, net.load_conductance, design.load.capacitance)
        mode = modes[k]
        if abs(mode) in (LINEAR, SLEW):
            branch[k] = 1.0 / r_out
            inner[o, k] = branch[k]
        elif abs(mode) in (SWING, SWING_IDLE):
            least = _LEAST_LIMIT_RESISTANCE
            branch[k] = 1.0 / (max(amp.dropout_resistance, least) if abs(mode) == SWING else least)
            drive[o, n + 1] += branch[k] * (limits.high if mode > 0 else limits.low)
        else:
            drive[o, n + 1] += math.copysign(limits.current, mode)
        gmat[o, o] += branch[k]

    same = same[:, same.any(axis=0)]
    gmat, cmat = same.T @ gmat @ same, same.T @ cmat @ same
    drive, inner = same.T @ drive, same.T @ inner

    # y = q a + z b with a the capacitor coordinates, b what follows algebraically
    value, vector = np.linalg.eigh(cmat)
    real = value > 1e-12 * max(value[-1], 1e-30)
    q, z = vector[:, real], vector[:, ~real]
    inv = np.linalg.inv(z.T @ gmat @ z) @ z.T if z.shape[1] else np.zeros((0, len(gmat)))
    y_a = q - z @ (inv @ gmat @ q)  # y from capacitor coordinates
    y_in = z @ inv  # y from injected currents
    n_cap = q.shape[1]

    states = n_cap
    first: list[int] = []
    second: list[int] = []
    for mode in modes:
        free = mode == LINEAR
        has_second = amp.second_pole is not None and abs(mode) in (LINEAR, SLEW)
        first.append(states if free else -1)
        states += free
        second.append(states if has_second else -1)
        states += has_second

    # internal voltages as functions of x and w
    v_x, v_w = np.zeros((cells, states)), np.zeros((cells, inputs + nodes))
    for k, mode in enumerate(modes):
        if second[k] >= 0:
            v_x[k, second[k]] = 1.0
        elif first[k] >= 0:
            v_x[k, first[k]] = 1.0
        elif abs(mode) == SLEW:
            v_w[k, n + 2 + k] = 1.0
    inj_x, inj_w = inner @ v_x, drive + inner @ v_w
    free_x, free_w = y_in @ inj_x, y_in @ inj_w
    free_x[:, :n_cap] += y_a
    c = np.zeros((nodes + cells, states))
    c[:nodes] = same @ free_x
    d = np.zeros((nodes + cells, inputs + nodes))
    d[:nodes] = same @ free_w
    a, b = np.zeros((states, states)), np.zeros((states, inputs + nodes))
    if n_cap:
        inv_c = 1.0 / value[real]
        a[:n_cap] = inv_c[:, None] * (q.T @ (inj_x - gmat @ free_x))
        b[:n_cap] = inv_c[:, None] * (q.T @ (inj_w - gmat @ free_w))
    w1 = 2 * math.pi * amp.gain_bandwidth / amp.open_loop_gain
    for k in range(cells):
        m, p, o = 3 * k, 3 * k + 1, 3 * k + 2
        if first[k] >= 0:
            a[first[k]] = w1 * amp.open_loop_gain * (c[p] - c[m])
            a[first[k], first[k]] -= w1
            b[first[k]] = w1 * amp.open_loop_gain * (d[p] - d[m])
        if second[k] >= 0:
            w2 = 2 * math.pi * amp.second_pole
            a[second[k], second[k]] -= w2
            if first[k] >= 0:
                a[second[k], first[k]] += w2
            else:
                b[second[k], n + 2 + k] += w2
        row = nodes + k
        if abs(modes[k]) == CURRENT:
            d[row, n + 1] = math.copysign(limits.current, modes[k])
        else:
            c[row] = branch[k] * (v_x[k] - c[o])
            d[row] = branch[k] * (v_w[k] - d[o])
            if abs(modes[k]) in (SWING, SWING_IDLE):
                d[row, n + 1] += branch[k] * (limits.high if modes[k] > 0 else limits.low)
    base = 3 * np.arange(cells)
    return StateSpace(
        a, b[:, :inputs], c, d[:, :inputs], q.T @ (same / same.sum(axis=0)).T, tuple(first), tuple(second),
        base, base + 1, base + 2, nodes + np.arange(cells), b[:, inputs:], d[:, inputs:],
    )  # fmt: skip


def is_exact(net: Network) -> bool:
    """Whether these equations are the stage's own; an output without resistance, or a + pin on a source, is given some."""
    tied_to_source = any(0 <= c.tied <= net.signal_count for c in net.cells)
    return net.design.op_amp.output_resistance >= _LEAST_OUTPUT_RESISTANCE and not tied_to_source


def kept_of(net: Network) -> dict:
    """What is worked out once for a network, whatever its signals do; an analysis hands it on."""
    return net.__dict__.setdefault("_kept", {})


def linear_space(net: Network) -> StateSpace:
    """`state_space` with every op amp linear, kept with the network."""
    kept = kept_of(net)
    if "linear" not in kept:
        kept["linear"] = state_space(net)
    return kept["linear"]


class Modes(NamedTuple):
    """Eigenvalues and vectors of a state matrix; no inverse where near-coincident poles make them useless."""

    values: np.ndarray
    vectors: np.ndarray
    inverse: np.ndarray | None


def modes_of(a) -> Modes:
    return each_modes(a[None])[0]


def each_modes(a) -> list[Modes]:
    """`Modes` of each of some matrices (count, n, n), worked out together."""
    values, vectors = np.linalg.eig(a)
    with np.errstate(all="ignore"):
        try:
            inverse = np.linalg.inv(vectors)
        except np.linalg.LinAlgError:  # one of them has no full set
            if len(a) > 1:
                return [each_modes(one[None])[0] for one in a]
            return [Modes(values[0], vectors[0], None)]
        sound = np.linalg.norm(vectors, axis=(1, 2)) * np.linalg.norm(inverse, axis=(1, 2)) < 1e6
    return [
        Modes(value, vector, inv if good else None)
        for value, vector, inv, good in zip(values, vectors, inverse, sound, strict=True)
    ]


def linear_modes(net: Network) -> Modes:
    """Modes of the stage with every op amp linear, kept with the network."""
    kept = kept_of(net)
    if "modes" not in kept:
        kept["modes"] = modes_of(linear_space(net).a)
    return kept["modes"]


def poles(net: Network) -> np.ndarray:
    """Poles of the closed stage [rad/s], complex, every op amp linear."""
    return linear_modes(net).values.astype(complex)


class Transfer:
    """Rows of c (sI - a)^-1 b + d, by the modes of a where it has a sound set of them, else by elimination."""

    def __init__(self, a, b, c, d, modes: Modes | None = None):
        self.a, self.b, self.c, self.d = a, b, c, d
        self._residues = None
        if len(a):
            self._modes = modes_of(a) if modes is None else modes
            if self._modes.inverse is not None:
                self._residues = (c @ self._modes.vectors)[:, None, :] * (self._modes.inverse @ b).T[None]

    def curves(self, f):
        """All entries over frequency [Hz], (outputs, inputs, f)."""
        s = 2j * np.pi * f
        if self._residues is None:
            if not len(self.a):
                return np.broadcast_to(self.d[..., None], (*self.d.shape, len(f))).astype(complex)
            eye = np.eye(len(self.a))
            inner = np.linalg.solve(s[:, None, None] * eye - self.a, self.b[None].astype(complex))
            return np.moveaxis(self.c @ inner + self.d, 0, -1)
        p, residues = self._modes.values, self._residues
        h = residues.reshape(-1, len(p)) @ (1.0 / (s - p[:, None]))
        return h.reshape(*residues.shape[:2], -1) + self.d[..., None]

    def of(self, i):
        """The first output from input i as a function of one frequency [Hz]."""
        d = complex(self.d[0, i])
        if self._residues is None:
            if not len(self.a):
                return lambda f: d
            eye = np.eye(len(self.a))
            return lambda f: complex(self.c[0] @ np.linalg.solve(2j * math.pi * f * eye - self.a, self.b[:, i])) + d
        terms = list(zip(self._residues[0, i].tolist(), self._modes.values.tolist(), strict=True))

        def at(f):
            s = 2j * math.pi * f
            return sum([r / (s - p) for r, p in terms], d)

        return at
