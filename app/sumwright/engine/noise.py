"""Noise at the stage's output, by term: density, and RMS over a band.

Each source of noise is a unit injection into a node or in series with a + input;
four injections a cell carry every term. Sources: Nyquist, Phys. Rev. 32 (1928):
4kTR; uncorrelated powers add; 1/f noise as e²(f) = e²(1 + f_c/f).
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from . import nodes
from .budget import network_of
from .statespace import Transfer, is_exact, linear_modes, linear_space, poles

BOLTZMANN = 1.380649e-23  # J/K, exact in the SI since 2019
ZERO_CELSIUS = 273.15  # K


class NoiseTerm(NamedTuple):
    name: str
    kind: str  # op amp voltage, op amp current, resistor, source
    density_1khz: float  # V/√Hz at the output
    rms: float  # V over the band, at the output


class Noise(NamedTuple):
    """Output noise; RMS over `band` [Hz]."""

    density_1khz: float  # V/√Hz
    rms: float  # V
    band: tuple[float, float]
    terms: tuple[NoiseTerm, ...]


class SignalToNoise(NamedTuple):
    """A full-scale sine over the noise: ratio [dB], and the bits of a converter as noisy as that."""

    decibels: float
    bits: float


def signal_to_noise(rms: float, span: float) -> SignalToNoise | None:
    """How a sine that fills `span` [V, peak to peak] compares with noise of `rms` [V]; None without either.

    Source: a perfect n-bit converter has 6.02 n + 1.76 dB (uniform quantisation noise, Bennett 1948).
    """
    if rms <= 0 or span <= 0:
        return None
    decibels = 20.0 * np.log10(span / (2.0 * np.sqrt(2.0)) / rms)
    return SignalToNoise(float(decibels), float((decibels - 10 * np.log10(1.5)) / (20 * np.log10(2.0))))


class Spectrum(NamedTuple):
    """Output noise density: frequencies (f,) [Hz], terms (terms, f) and total (f,) [V/√Hz]."""

    frequencies: np.ndarray
    names: tuple[str, ...]
    kinds: tuple[str, ...]
    terms: np.ndarray
    total: np.ndarray


def spectrum(stage, frequencies) -> Spectrum:
    """Output noise density of every term at `frequencies` [Hz], at the nominal ambient."""
    net = network_of(stage)
    f = np.asarray(frequencies, dtype=float)
    names, kinds, power = _powers(net, f)
    return Spectrum(f, names, kinds, np.sqrt(power), np.sqrt(power.sum(axis=0)))


def noise(stage, *, band=None) -> Noise:
    """Output noise over a band, by term.

    Parameters
    ----------
    stage : Design or Analysis
    band : (float, float), optional
        Instead of the design's `noise_band` [Hz].

    Returns
    -------
    Noise

    Notes
    -----
    Integrated in log f by Gauss-Legendre panels of about a decade, split
    where the response turns, so the 1/f part and a resonance are both followed.
    """
    net = network_of(stage)
    low, high = net.design.noise_band if band is None else band
    f, weight = _quadrature(low, high, _corners(net))
    names, kinds, power = _powers(net, np.append(f, 1e3))
    rms = np.sqrt(power[:, :-1] @ weight)
    at_1k = power[:, -1]
    terms = tuple(
        NoiseTerm(n, k, float(d), float(r)) for n, k, d, r in zip(names, kinds, np.sqrt(at_1k), rms, strict=True)
    )
    return Noise(float(np.sqrt(at_1k.sum())), float(np.sqrt((rms**2).sum())), (float(low), float(high)), terms)


def _node_transfers(net, f):
    """To the last output from a voltage in series with each + input and a current into each node, (cells, 4, f).

    The voltage e lies between the node and the pin: the op amp sees it beside the + node's
    voltage, and what the pin's admittances draw because of it is a current into m and out of p.
    """
    if not is_exact(net):
        width = 4 * net.cell_count
        injected = np.eye(width).reshape(net.cell_count, 4, width)
        error, into_m, into_p, into_o = np.moveaxis(injected, 1, 0)
        sol = nodes.solve(
            net, np.zeros((net.signal_count + 1, width)), s=2j * np.pi * f,
            error=error, into_minus=into_m, into_plus=into_p, into_output=into_o,
        )  # fmt: skip
        return sol.output[:, -1].T.reshape(net.cell_count, 4, -1)
    ss, amp = linear_space(net), net.design.op_amp
    cells, last = net.cell_count, ss.output[-1:]
    through = np.zeros((len(ss.a), 4 * cells))
    through[ss.first, np.arange(cells)] = 2 * math.pi * amp.gain_bandwidth
    through[:, cells:] = ss.b_node
    direct = np.zeros((1, 4 * cells))
    direct[:, cells:] = ss.d_node[last]
    h = Transfer(ss.a, through, ss.c[last], direct, linear_modes(net)).curves(f)[0]
    from_e, from_node = h[:cells], h[cells:].reshape(cells, 3, -1)
    s = 2j * np.pi * f
    y_in = net.y_in + s * amp.differential_capacitance
    y_pin = y_in + s * amp.common_mode_capacitance
    from_e = from_e + y_in * from_node[:, 0] - y_pin * from_node[:, 1]
    return np.concatenate([from_e[:, None], from_node], axis=1)


def _powers(net, f):
    """Names, kinds and output power densities (terms, f) [V²/Hz]."""
    design = net.design
    amp = design.op_amp
    cells = net.cell_count
    h = _node_transfers(net, f)  # to the output from e, m, p, o
    # every term is a number times one of a few squared transfers, some with a 1/f part
    bases: list[np.ndarray] = []
    known: dict[tuple, int] = {}

    def base(key, transfer):
        """Index of |transfer()|², worked out once."""
        if key not in known:
            t = transfer()
            known[key] = len(bases)
            bases.append(t.real**2 + t.imag**2)
        return known[key]

    names: list[str] = []
    kinds: list[str] = []
    factors: list[float] = []
    which: list[int] = []

    def add(name, kind, factor, index):
        names.append(name)
        kinds.append(kind)
        factors.append(factor)
        which.append(index)

    for k in range(cells):
        suffix = f", cell {k + 1}" if cells > 1 else ""
        add(f"op amp voltage{suffix}", "op amp voltage", amp.noise_voltage**2, base((k, "e"), lambda k=k: h[k, 0]))
        for node, sign in ((1, "−"), (2, "+")):
            index = base((k, node), lambda k=k, node=node: h[k, node])
            add(f"op amp current into {sign}{suffix}", "op amp current", amp.noise_current**2, index)
    own = len(names)
    four_kt = 4.0 * BOLTZMANN * (design.ambient.nominal + ZERO_CELSIUS)
    ups = {f"cell {j + 1}": j for j in range(cells)}
    rs_of = {s.name: net.source_resistances[i] for i, s in enumerate(design.signals)}
    rs_of["reference"] = net.source_resistances[-1]
    for part, r in zip(net.parts, net.resistances.tolist(), strict=True):
        if r == np.inf:
            continue
        k = part.cell
        rs = float(rs_of.get(part.source, 0.0)) if part.source else 0.0
        if r + rs <= 0:
            continue
        node = 2 if part.kind.startswith("plus") else 1
        if part.kind == "feedback":
            index = base((k, "feedback"), lambda k=k: h[k, 1] - h[k, 3])
        elif part.source in ups:
            j = ups[part.source]
            index = base((k, node, j), lambda k=k, node=node, j=j: h[k, node] - h[j, 3])
        else:
            index = base((k, node), lambda k=k, node=node: h[k, node])
        add(part.name, "resistor", four_kt * r / (r + rs) ** 2, index)
        if rs > 0:
            add(
                f"{part.source} source resistance" + _where(part, cells), "source", four_kt * rs / (r + rs) ** 2, index
            )  # fmt: skip
    power = np.array(factors)[:, None] * np.array(bases)[which]
    voltage, current = (1.0 + corner / f for corner in (amp.noise_voltage_corner, amp.noise_current_corner))
    for i in range(own):
        power[i] *= voltage if i % 3 == 0 else current
    return tuple(names), tuple(kinds), power


def _where(part, cells):
    return f", cell {part.cell + 1}" if part.source == "reference" and cells > 1 else ""


_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(12)  # a pole's turn in a decade's panel, to 1e-7 of the power


def _quadrature(low, high, corners):
    """Frequencies and weights for ∫ S(f) df from `low` to `high`, panels in log f."""
    a, b = math.log(low), math.log(high)
    edges = [a, *sorted(x for x in map(math.log, corners) if a < x < b), b]
    middles, halves = [], []
    for p, q in pairwise(edges):
        n = max(1, math.ceil((q - p) / 2.4))
        half = 0.5 * (q - p) / n
        middles += [p + (2 * i + 1) * half for i in range(n)]
        halves += [half] * n
    half = np.array(halves)[:, None]
    f = np.exp(np.array(middles)[:, None] + half * _NODES)
    return f.ravel(), (half * _WEIGHTS * f).ravel()


# In widths of a resonance: panels grow with their distance from it, also where only its skirt is in the band.
_AROUND = (-60.0, -22.0, -8.0, -2.5, -0.8, 0.0, 0.8, 2.5, 8.0, 22.0, 60.0)


def _corners(net):
    """Where the response turns sharply [Hz]: around each resonant closed-loop pole."""
    out = []
    for p in poles(net).tolist():
        size = abs(p)
        damping = max(abs(p.real) / size, 1e-4) if size else 1.0
        if p.imag > 0 and damping < 0.8:
            spread = min(damping, 0.4)
            out += [size / (2 * math.pi) * math.exp(x * spread) for x in _AROUND if abs(x * spread) < 2.0]
    return out
