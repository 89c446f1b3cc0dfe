"""Headroom: how far every cell goes over all corners of the signals' ranges, and how far it may.

The linear solution is a weighted sum of the signals at every node, so its
extremes over the box of ranges lie where each signal sits at the end its own
weight points to: no enumeration of 2^n corners.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .nodes import Network, Solution
from .operating_point import influence
from .stage import Design


class CellHeadroom(NamedTuple):
    """One cell over all corners, linear solution, rails at their least favourable."""

    highest: float  # V
    lowest: float  # V
    limit_high: float  # V, at the current of that corner
    limit_low: float  # V
    margin_high: float  # V
    margin_low: float  # V
    inputs_highest: float  # V
    inputs_lowest: float  # V
    common_mode_limit_high: float  # V
    common_mode_limit_low: float  # V
    common_mode_margin_high: float  # V
    common_mode_margin_low: float  # V
    output_current_peak: float  # A, largest magnitude, sourced or sunk
    corner_high: np.ndarray  # (n,) V, signals at this cell's highest
    corner_low: np.ndarray  # (n,) V
    current_high: float  # A, out of the op amp at `corner_high`
    current_low: float  # A


class Headroom(NamedTuple):
    corner_high: np.ndarray  # (n,) V, where the last cell's output is highest
    corner_low: np.ndarray  # (n,) V
    cells: tuple[CellHeadroom, ...]


def extremes(factors, constant, lows, highs):
    """Least and greatest of a weighted sum over a box.

    Parameters
    ----------
    factors : (..., n) array_like
    constant : (...) array_like
    lows, highs : (n,) array_like

    Returns
    -------
    lowest, highest : (...) ndarray
    """
    a, b = factors * lows, factors * highs
    return constant + np.minimum(a, b).sum(axis=-1), constant + np.maximum(a, b).sum(axis=-1)


def least_favourable_rails(design: Design) -> tuple[float, float]:
    """The + and the - rail [V] at the end of their tolerance that leaves least room."""
    s = design.supply
    return s.high - s.tolerance * abs(s.high), s.low + s.tolerance * abs(s.low)


def headroom(design: Design, *, unplugged=(), net: Network | None = None, linear: Solution | None = None) -> Headroom:
    """Extremes of every cell over the corners of the signals' ranges, and the margins left.

    Parameters
    ----------
    design : Design
        Realised.
    unplugged : iterable of str, optional
        Signals whose cable is out.
    net, linear : optional
        The compiled network and its `influence`, when the caller has them.

    Returns
    -------
    Headroom

    Notes
    -----
    Limits: rail at its least favourable tolerance, less the dropout at no load,
    less `dropout_resistance` times the current at that corner. Common mode: both
    inputs, over all corners.
    """
    net = Network(design, unplugged) if net is None else net
    linear = influence(net) if linear is None else linear
    amp = design.op_amp
    n = net.signal_count
    reference = net.values[n]
    rail_high, rail_low = least_favourable_rails(design)
    cells = []
    for k in range(net.cell_count):
        w, base = linear.output[k, :n], linear.output[k, n] * reference
        w_i, base_i = linear.current[k, :n], linear.current[k, n] * reference
        # A signal of a later cell that leaves this output where it is may still draw current from it:
        # of the corners that are equally far, the one whose current leaves least room.
        rising = (w > 0) | ((w == 0) & (w_i >= 0))
        up = np.where(rising, net.highs, net.lows)
        down = np.where(rising, net.lows, net.highs)
        highest, lowest = base + w @ up, base + w @ down
        i_up, i_down = base_i + w_i @ up, base_i + w_i @ down
        limit_high = rail_high - amp.dropout_high - amp.dropout_resistance * max(i_up, 0.0)
        limit_low = rail_low + amp.dropout_low + amp.dropout_resistance * max(-i_down, 0.0)
        pins = np.stack([linear.minus[k], linear.plus[k]])
        pin_low, pin_high = extremes(pins[:, :n], pins[:, n] * reference, net.lows, net.highs)
        i_low, i_high = extremes(w_i, base_i, net.lows, net.highs)
        cm_high, cm_low = rail_high - amp.common_mode_high, rail_low + amp.common_mode_low
        in_high, in_low = float(pin_high.max()), float(pin_low.min())
        cells.append(
            CellHeadroom(
                float(highest),
                float(lowest),
                float(limit_high),
                float(limit_low),
                float(limit_high - highest),
                float(lowest - limit_low),
                in_high,
                in_low,
                cm_high,
                cm_low,
                cm_high - in_high,
                in_low - cm_low,
                float(max(abs(i_low), abs(i_high))),
                up,
                down,
                float(i_up),
                float(i_down),
            )
        )
    return Headroom(cells[-1].corner_high, cells[-1].corner_low, tuple(cells))
