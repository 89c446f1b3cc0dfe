"""Cable out: what an unplugged or dead source does to all the others."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .nodes import Network
from .operating_point import influence
from .stage import Design


class CableOut(NamedTuple):
    """The stage with one signal's cable out, (m, ...) over the signals asked about."""

    names: tuple[str, ...]  # m
    open_weights: np.ndarray  # (m, n) V/V with that leg open (its own is 0)
    open_offset: np.ndarray  # (m,) V
    open_noise_gain: np.ndarray  # (m, cells) V/V
    dead_weights: np.ndarray  # (m, n) V/V with that cable shorted to ground at the plug
    dead_offset: np.ndarray  # (m,) V
    dead_noise_gain: np.ndarray  # (m, cells) V/V


def cable_out(design: Design, *, unplugged=(), net: Network | None = None) -> CableOut:
    """Weights, offset and noise gain with each signal's source unplugged, or dead.

    Parameters
    ----------
    design : Design
        Realised, n signals.
    unplugged : iterable of str, optional
        Cables that are out already.
    net : Network, optional
        Compiled, when the caller has it.

    Returns
    -------
    CableOut

    Notes
    -----
    Unplugged: the leg carries no current, so at a shared + node every other
    weight changes, and at a virtual ground only the noise gain does. Dead: the
    leg is held at ground without its source resistance, so the other weights
    change only by that resistance.
    """
    net = Network(design, unplugged) if net is None else net
    n = net.signal_count
    names = design.signal_names
    resistances = np.tile(net.resistances, (n, 1))
    for i, name in enumerate(names):
        for j, part in enumerate(net.parts):
            if part.source == name:
                resistances[i, j] = np.inf
    opened = influence(net, resistances=resistances)
    rs = np.tile(net.source_resistances, (n, 1))
    bare = [i for i, name in enumerate(names) if any(p.source == name and p.resistance == 0 for p in net.parts)]
    led = np.array([i for i in range(n) if i not in bare], dtype=int)
    rs[led, led] = 0.0
    dead = influence(net, source_resistances=rs).output[:, -1]
    for i in bare:  # without its source's resistance such a leg ties the + node to ground
        dead[i] = influence(Network(design, net.unplugged, shorted=(names[i],))).output[-1]
    dead_weights = dead[:, :n].copy()
    dead_weights[np.arange(n), np.arange(n)] = 0.0
    reference = net.values[n]
    return CableOut(
        names,
        opened.output[:, -1, :n],
        opened.output[:, -1, n] * reference,
        net.noise_gains(resistances),
        dead_weights,
        dead[:, n] * reference,
        net.noise_gains(source_resistances=rs),
    )
