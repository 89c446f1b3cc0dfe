"""From "this span to that span" to weights and an offset."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import NamedTuple

from sumwright.engine.stage import Design, Signal
from sumwright.errors import CannotRealise, InvalidQuantity


class Spans(NamedTuple):
    """Weights and offset that put the signals' ranges into an output window."""

    weights: tuple[float, ...]  # V/V
    offset: float  # V


def span_to_span(low: float, high: float, out_low: float, out_high: float) -> Spans:
    """The weight and offset that map one signal's span onto an output span, low onto `out_low`.

    Parameters
    ----------
    low, high : float
        The signal's ends [V].
    out_low, out_high : float
        The output at those ends [V]; `out_low` above `out_high` inverts.

    Raises
    ------
    InvalidQuantity
        If a number is not finite or a span has no width.

    Notes
    -----
    Source: the straight line through two points.
    """
    for name, value in (("low", low), ("high", high), ("out_low", out_low), ("out_high", out_high)):
        if not math.isfinite(value):
            raise InvalidQuantity(f"{name} must be finite, in V; it is {value:g}.")
    if low == high:
        raise InvalidQuantity(f"The input span is {low:g} V to {high:g} V; it must have a width.")
    if out_low == out_high:
        raise InvalidQuantity(f"The output span is {out_low:g} V to {out_high:g} V; it must have a width.")
    weight = (out_high - out_low) / (high - low)
    return Spans((weight,), out_low - weight * low)


def into_window(
    signals: Sequence[Signal], out_low: float, out_high: float, shares: Sequence[float] | None = None
) -> Spans:
    """Weights that let all signals together fill an output window, whatever corner they are at.

    Parameters
    ----------
    signals : sequence of Signal
        Their ranges count; their weights do not, but for the sign: a signal of negative weight stays inverted.
    out_low, out_high : float
        The window [V].
    shares : sequence of float, optional
        How much of the window each signal moves the output through, in any unit; equal if left out.

    Raises
    ------
    InvalidQuantity
        If the window or a range has no width, or a share is not positive.
    """
    if not (math.isfinite(out_low) and math.isfinite(out_high) and out_low < out_high):
        raise InvalidQuantity(f"The output window is {out_low:g} V to {out_high:g} V; it must be finite and rising.")
    given = [1.0] * len(signals) if shares is None else list(shares)
    if len(given) != len(signals) or not signals:
        raise InvalidQuantity(f"{len(given)} shares are given for {len(signals)} signals.")
    for s, share in zip(signals, given, strict=True):
        if not (math.isfinite(share) and share > 0):
            raise InvalidQuantity(f"The share of '{s.name}' is {share:g}; it must be positive.")
        if not s.low < s.high:
            raise InvalidQuantity(f"The range of '{s.name}' is {s.low:g} V to {s.high:g} V; it must have a width.")
    total = math.fsum(given)
    weights, lowest = [], []
    for s, share in zip(signals, given, strict=True):
        weight = share / total * (out_high - out_low) / (s.high - s.low)
        if s.weight < 0:
            weight = -weight
        weights.append(weight)
        lowest.append(min(weight * s.low, weight * s.high))
    return Spans(tuple(weights), out_low - math.fsum(lowest))


def with_spans(design: Design, spans: Spans) -> Design:
    """The design with these weights and offset, and its target window as it is; not realised any more.

    Raises
    ------
    CannotRealise
        If an offset is needed and there is no reference to make it from.
    """
    if spans.offset and (design.reference is None or design.reference.voltage == 0):
        raise CannotRealise(
            f"These spans need an offset of {spans.offset:g} V; give the design a reference to make it from."
        )
    signals = tuple(replace(s, weight=w) for s, w in zip(design.signals, spans.weights, strict=True))
    return replace(design, signals=signals, target=replace(design.target, offset=spans.offset), cells=())
