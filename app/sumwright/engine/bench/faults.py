"""What can be wrong with a board: one entry a fault, and how to wire a board that has it.

A `Fault` says where it can sit and what it does to the wiring of one board of a
batch. One more fault is one more entry in `FAULTS`; nothing else needs to know.
A fault can look different from case to case (an op amp that is dead may hold any
output): each such way is wired and the readings weigh them.

How often each kind happens beside the others (`odds`) is common practice, not a
measured figure: leave-outs and wrong values lead, dead parts are rare.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..stage import OUTPUT, REFERENCE, cell_name
from .board import EITHER, MINUS, PLUS, Bench, Boards

HEALTHY = "none"
HEALTHY_ODDS = 0.85  # share of boards with nothing wrong; the faults share the rest
DECADE_SHARE = 0.3  # of wrong values: how many are the right figures in a wrong decade
OPEN = np.inf
FIRM = 20.0  # ohm: a source with less in series feels the ohm of a bridge
BALANCED = 1e-6  # an op amp whose offset and bias current happen to cancel

Edit = Callable[[Boards, int, float], None]


class Values(NamedTuple):
    """A quantity [ohm] the fault leaves unknown: spans, each even in its logarithm, and single likely values."""

    spans: tuple[tuple[float, float, float], ...]  # from, to, share
    likely: tuple[float, ...] = ()
    likely_share: float = 0.0
    told: bool = True  # whether the estimate says anything to a person


class Way(NamedTuple):
    """One wiring of the fault; `edit(boards, row, value)` puts it on one board of a batch."""

    edit: Edit
    share: float = 1.0
    values: Values | None = None


class Place(NamedTuple):
    """Where the fault can sit: the contract's `part`, and the ways it can show there."""

    part: str
    ways: tuple[Way, ...]
    nominal: float | None = None  # ohm that should be there, where the fault changes one resistor


@dataclass(frozen=True)
class Fault:
    """One entry of the list. `says` has {part}, {estimate} and {nominal} filled in."""

    name: str
    odds: float
    places: Callable[[Bench], Iterator[Place]]
    says: str
    parts_it: str = ""  # the measurement, power off or on, that tells it from its look-alikes
    unit: str = "Ω"  # of the estimate, where it has one


def _cells(bench):
    return ((k, cell_name(k)) for k in range(bench.cell_count))


def _by_source(bench):
    """Legs grouped by their source: the reference may feed one leg of each cell."""
    groups: dict[str, list[int]] = {}
    for i, leg in enumerate(bench.legs):
        groups.setdefault(leg.source, []).append(i)
    return groups.items()


def _set(name, at, value=None):
    """An edit that writes `value`, or the unknown one, into `boards.name[row, *at]`."""

    def edit(boards, row, unknown):
        getattr(boards, name)[(row, *at)] = unknown if value is None else value

    return edit


def _both(*edits):
    def edit(boards, row, unknown):
        for e in edits:
            e(boards, row, unknown)

    return edit


def _wrong_values(bench, nominal):
    """Mostly another value within a decade, or the right figures in a wrong decade; but not what the tolerance allows."""
    near = max(2.0 * bench.design.resistor.tolerance, 0.004)
    return Values(
        (
            (nominal * 1e-3, nominal * 0.1, 0.1),
            (nominal * 0.1, nominal * (1 - near), 0.4),
            (nominal * (1 + near), nominal * 10, 0.4),
            (nominal * 10, nominal * 1e3, 0.1),
        ),
        tuple(nominal * d for d in (0.01, 0.1, 10.0, 100.0)),
        DECADE_SHARE,
    )


def _leg_open(bench):
    for source, legs in _by_source(bench):
        yield Place(source, tuple(Way(_set("leg_ohm", (i,), OPEN), 1 / len(legs)) for i in legs), _first(bench, legs))


def _first(bench, legs):
    return bench.legs[legs[0]].resistance


def _tipping(bench, cell, edit, share=1.0):
    """Ways of an amplifier left without a loop: with no drive its own offset tips it, either way, unless trimmed out."""
    amp = bench.design.op_amp
    volts = 3.0 * max(amp.offset_voltage, 20.0 / amp.open_loop_gain)
    yield Way(edit, 0.3 * share)
    yield Way(_both(edit, _set("unrest", (), BALANCED)), 0.2 * share)
    for side in (1.0, -1.0):
        yield Way(_both(edit, _set("nudge", (cell,), side * volts)), 0.25 * share)


def _leg_shorted(bench):
    """A bridge has a fraction of an ohm, which matters only where nothing else is in the way."""
    bridge = Values(((0.02, 5.0, 1.0),), told=False)
    for source, legs in _by_source(bench):
        legs = [i for i in legs if bench.legs[i].resistance > 0]
        ways = []
        for i in legs:
            edit, leg = _set("leg_ohm", (i,), 0.0), bench.legs[i]
            share = 1 / len(legs)
            ways += _tipping(bench, leg.cell, edit, share) if leg.node == MINUS else [Way(edit, share)]
            if _series(bench, i) < FIRM:
                ways.append(Way(_set("leg_ohm", (i,)), share, bridge))
        if ways:
            yield Place(source, tuple(ways), _first(bench, legs))


def _leg_wrong_value(bench):
    for source, legs in _by_source(bench):
        legs = [i for i in legs if bench.legs[i].resistance > 0]
        ways = tuple(
            Way(_set("leg_ohm", (i,)), 1 / len(legs), _wrong_values(bench, bench.legs[i].resistance)) for i in legs
        )
        if ways:
            yield Place(source, ways, _first(bench, legs))


def _wrong_input(bench):
    for source, legs in _by_source(bench):
        yield Place(
            source, tuple(Way(_set("leg_node", (i,), PLUS + MINUS - bench.legs[i].node), 1 / len(legs)) for i in legs)
        )


def _source_resistance_high(bench):
    n = bench.signal_count
    for source, legs in _by_source(bench):
        at = bench.names.index(source) if source in bench.names else n if source == REFERENCE else None
        if at is None:
            continue
        have, leg = float(bench.healthy.series_ohm[0, at]), _first(bench, legs)
        least = have + max(2.0 * bench.design.resistor.tolerance, 0.004) * max(leg, have, 1.0)
        yield Place(
            source, (Way(_set("series_ohm", (at,)), 1.0, Values(((least, 1e3 * max(leg, have, 1.0), 1.0),))),), have
        )


def _legs_swapped(bench):
    """Two resistors in each other's place, or two connections; on one node the two are nearly the same."""
    order = sorted(range(len(bench.legs)), key=lambda i: int(bench.healthy.leg_source[0, i]))
    for a, first in enumerate(order):
        for second in order[a + 1 :]:
            p, q = bench.legs[first], bench.legs[second]
            if p.source == q.source:
                continue
            same_node = (p.cell, p.node) == (q.cell, q.node)
            ways = []
            if p.resistance != q.resistance:
                ways.append(_both(_set("leg_ohm", (first,), q.resistance), _set("leg_ohm", (second,), p.resistance)))
            src = bench.healthy.leg_source[0]
            back = _feeds(bench, p, q) or _feeds(bench, q, p)
            if not back and (
                not same_node or (p.resistance != q.resistance and _series(bench, first) != _series(bench, second))
            ):
                ways.append(_both(_set("leg_source", (first,), src[second]), _set("leg_source", (second,), src[first])))
            if ways:
                yield Place(f"{p.source}, {q.source}", tuple(Way(w, 1 / len(ways)) for w in ways))


def _series(bench, i):
    at = int(bench.healthy.leg_source[0, i])
    return float(bench.healthy.series_ohm[0, at]) if at <= bench.signal_count else 0.0


def _feeds(bench, p, q):
    """Whether exchanging would send an output into an earlier cell, or its own where that is no feedback."""
    if not p.source.startswith("cell ") or p.source in bench.names:
        return False
    cell = int(p.source[5:]) - 1
    return cell > q.cell or (cell == q.cell and q.node != MINUS)


def _feedback_open(bench):
    for k, part in _cells(bench):
        if np.isfinite(bench.healthy.feedback_ohm[0, k]):
            yield Place(part, tuple(_tipping(bench, k, _set("feedback_ohm", (k,), OPEN))))


def _feedback_shorted(bench):
    for k, part in _cells(bench):
        if bench.healthy.feedback_ohm[0, k] > 0:
            yield Place(part, (Way(_set("feedback_ohm", (k,), 0.0)),))


def _feedback_wrong(bench):
    for k, part in _cells(bench):
        nominal = float(bench.healthy.feedback_ohm[0, k])
        if 0 < nominal < np.inf:
            yield Place(part, (Way(_set("feedback_ohm", (k,)), 1.0, _wrong_values(bench, nominal)),), nominal)


def _minus_ground_missing(bench):
    for k, part in _cells(bench):
        if np.isfinite(bench.healthy.ground_ohm[0, k, MINUS]):
            yield Place(part, (Way(_set("ground_ohm", (k, MINUS), OPEN)),))


def _plus_ground_missing(bench):
    """A + node that nothing else holds floats: to either rail, or with the other input."""
    h = bench.healthy
    for k, part in _cells(bench):
        if not np.isfinite(h.ground_ohm[0, k, PLUS]):
            continue
        lift = _set("ground_ohm", (k, PLUS), OPEN)
        if any(leg.cell == k and leg.node == PLUS for leg in bench.legs):
            yield Place(part, (Way(lift),))
        else:
            ways = [Way(_both(lift, _set("drift", (k,), amps)), 0.25) for amps in (-1e-4, 1e-4)]
            yield Place(part, (*ways, Way(lift, 0.25), Way(_both(lift, _set("unrest", (), BALANCED)), 0.25)))


def _inputs_swapped(bench):
    """Positive feedback: the output latches at a rail, whichever it met first, or now this one and now that."""
    for k, part in _cells(bench):
        flip = _set("swapped", (k,), True)
        yield Place(part, tuple(Way(_both(flip, _set("latch", (), came))) for came in (-1.0, 0.0, 1.0, EITHER)))


def _op_amp_dead(bench):
    """Stuck firmly, loosely or through some resistance where dead outputs are found, or not driven at all."""
    supply, amp = bench.design.supply, bench.design.op_amp
    middle = 0.5 * (supply.high + supply.low)
    rest = [(0.0, 0.001, 2), (0.0, 0.2, 1)]
    if middle:
        rest += [(middle, 0.001, 1), (middle, 0.2, 1)]
    for rail, dropout in ((supply.high, amp.dropout_high), (supply.low, -amp.dropout_low)):
        rest += [(rail, np.hypot(0.02, supply.tolerance * rail / np.sqrt(3)), 0.5), (rail - dropout, 0.3, 1)]
    weak = Values(((5.0, 5e3, 1.0),), (amp.output_resistance,) if amp.output_resistance > 0 else (), 0.3, told=False)
    for k, part in _cells(bench):
        ways = [
            Way(_both(_set("stuck", (k,), volts), _set("stuck_spread", (k,), spread)), share)
            for volts, spread, share in rest
        ]
        behind = Way(_both(_set("stuck", (k,), 0.0), _set("stuck_ohm", (k,))), 1.0, weak)
        yield Place(part, (*ways, behind, Way(_set("undriven", (k,), True), 1.5)))


def _reference_missing(bench):
    legs = [i for i, leg in enumerate(bench.legs) if leg.source == REFERENCE]
    if legs:
        opened = _both(*(_set("leg_ohm", (i,), OPEN) for i in legs))
        yield Place(REFERENCE, (Way(opened, 0.5), Way(_set("reference_volts", (), 0.0), 0.5)))


def _reference_wrong(bench):
    """Another voltage of the same sign, from a twentieth to two and a half times."""
    reference = bench.design.reference
    if reference is None or not reference.voltage or not any(leg.source == REFERENCE for leg in bench.legs):
        return

    def edit(boards, row, volts):
        boards.reference_volts[row] = np.copysign(volts, reference.voltage)

    size, near = abs(reference.voltage), max(2.0 * reference.tolerance, 0.004)
    spans = ((0.05 * size, (1 - near) * size, 0.5), ((1 + near) * size, 2.5 * size, 0.5))
    yield Place(REFERENCE, (Way(edit, 1.0, Values(spans)),), reference.voltage)


def _rail_missing(bench):
    """The op amp lives on the other rail and cannot pass 0 V; how close it comes varies. Without another rail it is dead."""
    amp, supply = bench.design.op_amp, bench.design.supply
    for part, at, field, volts, other, dropout in (
        ("high", 0, "rail_high", supply.high, supply.low, amp.dropout_high),
        ("low", 1, "rail_low", supply.low, supply.high, -amp.dropout_low),
    ):
        if not volts:
            continue
        gone = _set(field, (), 0.0)
        ways = [Way(gone, 0.4)]
        for spread, share in ((-0.01, 0.2), (0.4, 0.4)):
            ways.append(Way(_both(_set(field, (), dropout), _set("rail_spread", (at,), spread)), share))
        if not other:
            every = slice(None)
            for spread, share in ((0.001, 0.3), (max(abs(dropout), 0.05), 0.2), (0.4, 0.1)):
                ways.append(Way(_both(_set("stuck", (every,), 0.0), _set("stuck_spread", (every,), spread)), share))
            ways.append(Way(_set("undriven", (every,), True), 0.3))
        yield Place(part, tuple(ways))


def _output_overloaded(bench):
    load = bench.design.load.resistance or np.inf
    most = min(load / 3, 1e4)
    if most > 1:
        yield Place(OUTPUT, (Way(_set("load_ohm", ()), 1.0, Values(((1.0, most, 1.0),), (50.0, 75.0, 600.0), 0.3)),))


FAULTS: tuple[Fault, ...] = (
    Fault(
        "leg open", 14, _leg_open, "The {part} leg carries no current: not soldered, cracked, or its cable is out.",
        "Power off: ohms from the {part} plug to the node; open reads far above the leg's {nominal}.",
    ),
    Fault(
        "leg shorted", 7, _leg_shorted, "The {part} leg is bridged: the source sits straight on the node.",
        "Power off: ohms across the {part} leg; a bridge reads under 1 ohm.",
    ),
    Fault(
        "leg wrong value", 20, _leg_wrong_value, "The {part} leg holds about {estimate} where {nominal} belongs.",
        "Power off: ohms from the {part} plug to the node. {nominal} clears the board and blames the source.",
    ),
    Fault(
        "wrong input", 8, _wrong_input, "The {part} leg is wired to the other node of its cell.",
        "Power off: ohms from the {part} plug to each op amp input; the lower one is where it goes.",
    ),
    Fault(
        "source resistance high", 4, _source_resistance_high,
        "The {part} source has about {estimate} in series where {nominal} was stated.",
        "Meter on the {part} plug itself, loaded and unloaded: a weak source sags, a wrong leg does not.",
    ),
    Fault(
        "legs swapped", 9, _legs_swapped, "The legs of {part} are in each other's place.",
        "Power off: ohms of both legs; each should read its own value.",
    ),
    Fault(
        "feedback open", 5, _feedback_open, "The feedback of {part} is open: it compares instead of adding.",
        "Power off: ohms from the output of {part} to its inverting node.",
    ),
    Fault(
        "feedback shorted", 4, _feedback_shorted, "The feedback of {part} is bridged: it follows its + node.",
        "Power off: ohms from the output of {part} to its inverting node; a bridge reads under 1 ohm.",
    ),
    Fault(
        "feedback wrong value", 8, _feedback_wrong, "The feedback of {part} holds about {estimate} where {nominal} belongs.",
        "Power off: ohms from the output of {part} to its inverting node.",
    ),
    Fault(
        "minus ground missing", 5, _minus_ground_missing, "The ground leg at the inverting node of {part} is missing.",
        "Power off: ohms from the inverting node of {part} to ground.",
    ),
    Fault(
        "plus ground missing", 5, _plus_ground_missing, "The ground leg at the + node of {part} is missing.",
        "Power off: ohms from the + node of {part} to ground.",
    ),
    Fault(
        "inputs swapped", 4, _inputs_swapped, "The two inputs of the op amp of {part} are exchanged: it latches at a rail.",
        "Power off: ohms from the output of {part} to each op amp input; the feedback belongs on the inverting one.",
    ),
    Fault(
        "op amp dead", 4, _op_amp_dead, "The op amp of {part} does not answer to its inputs.",
        "Power on: volts between the two inputs of {part}. More than a few millivolts with the output off its rails: dead.",
    ),
    Fault(
        "reference missing", 6, _reference_missing, "The reference does not reach its leg, or is at 0 V.",
        "Power on: volts at the reference pin, then at the far end of its leg.",
    ),
    Fault(
        "reference wrong", 1.5, _reference_wrong, "The reference gives about {estimate} where {nominal} belongs.",
        "Power on: volts at the reference pin. {nominal} clears it and blames its leg.", "V",
    ),
    Fault(
        "rail missing", 5, _rail_missing, "The {part} rail does not reach the op amp: the output cannot pass 0 V that way.",
        "Power on: volts at the op amp's own supply pin of the {part} rail.",
    ),
    Fault(
        "output overloaded", 5, _output_overloaded,
        "The output drives about {estimate}: it runs into its current limit. Look for a 50 ohm termination left on.",
        "Take everything off the output but the meter and read again.",
    ),
)  # fmt: skip
