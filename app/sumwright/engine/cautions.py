"""Where a stage could hurt somebody or destroy itself, in words that belong beside the numbers.

These are the usual cautions, not a safety assessment: local codes and licensed
practice decide. Sources: 60 V DC and 30 V AC RMS, the usual limits of extra-low
voltage in normal conditions (IEC 61010-1 and IEC 62368-1, from memory); surfaces
above 60 °C (burn thresholds of ISO 13732-1, from memory); film resistors at 155 °C
when they take their rating at 70 °C ambient, as the derating line says; 5 mA
through the protection of an input, common practice where a data sheet is silent.
"""

from __future__ import annotations

import math
from functools import lru_cache
from itertools import product
from typing import NamedTuple

import numpy as np

from .clipping import solve_clipped
from .heat import FULL_POWER_TO, NO_POWER_AT, resistor_rating
from .nodes import Network, nominal_limits
from .stage import cell_name, replace

DC_LIMIT = 60.0  # V
AC_LIMIT = 30.0  # V RMS
HOT_SURFACE = 60.0  # degC
PROTECTION_CURRENT = 5e-3  # A
MOST_CLIPPED = 8  # signals: up to so many, every corner is solved with the outputs at their limits


class Caution(NamedTuple):
    """One caution; `present` is True where this design gives the reason, False where it holds of any."""

    key: str  # voltage, burn, floating, unpowered, short, rails, use
    title: str
    text: str
    present: bool


def cautions(analysis) -> tuple[Caution, ...]:
    """Every caution that goes with a design, those it gives reason for first.

    Parameters
    ----------
    analysis : Analysis

    Returns
    -------
    tuple of Caution
    """
    found = [
        *_voltage(analysis.design),
        *_heat(analysis),
        *_floating(analysis),
        *_unpowered(analysis.design),
        _short(analysis),
    ]
    found += [
        Caution(
            "rails", "Rails",
            "Check the rails' polarity and value at the socket before the op amp goes in: a reversed or missing rail destroys it.",
            False,
        ),
        Caution(
            "use", "Use",
            "Not for protection, medical or other uses where a wrong sum can hurt somebody, without independent means.", False,
        ),
    ]  # fmt: skip
    return tuple(sorted(found, key=lambda c: not c.present))


def _voltage(design) -> list[Caution]:
    over = []
    s = design.supply
    total = (s.high - s.low) * (1 + s.tolerance)
    if max(total, abs(s.high), abs(s.low)) > DC_LIMIT:
        over.append(f"{_three(total)} V between the rails")
    for x in design.signals:
        peak = max(abs(x.low), abs(x.high))
        rms = (x.high - x.low) / 2 / math.sqrt(2) if x.frequency > 0 else 0.0
        if peak > DC_LIMIT:
            over.append(f"'{x.name}' reaches {_three(peak)} V")
        elif rms > AC_LIMIT:
            over.append(f"'{x.name}' is {_three(rms)} V RMS as a sine over its range")
    if not over:
        return []
    return [
        Caution(
            "voltage", "Hazardous voltage",
            f"{'; '.join(over)}: past 60 V DC or 30 V AC RMS, the usual limits of extra-low voltage. Guard live parts and "
            "discharge capacitors before touching; the local code decides, and the work belongs to licensed practice.",
            True,
        )
    ]  # fmt: skip


def _floating(analysis) -> list[Caution]:
    """A + input whose every leg is open: the bias current has no path, which no resistor in the model shows."""
    bare = [
        cell_name(k)
        for k, cell in enumerate(analysis.design.cells)
        if cell.plus and cell.plus_ground is None and all(leg.source in analysis.unplugged for leg in cell.plus)
    ]
    if not bare:
        return []
    return [
        Caution(
            "floating", "Input without a path",
            f"With what is unplugged, nothing holds the + input of {' and '.join(bare)}: its bias current takes the output to a rail, "
            "whatever the figures say. A resistor from that node to ground holds it.",
            True,
        )
    ]  # fmt: skip


def _heat(analysis) -> list[Caution]:
    design, power = analysis.design, analysis.power
    hot = []
    rating = resistor_rating(design)
    taken = [r.dissipation_most for r in power.resistors]
    limited = any(c.margin_high < 0 or c.margin_low < 0 for c in analysis.headroom.cells)
    if (
        limited
        and len(design.signals) <= MOST_CLIPPED
        and any(t > 0.5 * rating or _surface(design, t) > HOT_SURFACE for t in taken)
    ):
        at_rest = replace(design, signals=tuple(replace(s, value=0.0) for s in design.signals))
        taken = [min(a, b) for a, b in zip(taken, _clipped_heat(at_rest, analysis.unplugged), strict=True)]
    for r, watts in zip(power.resistors, taken, strict=True):
        surface = _surface(design, watts)
        if watts > 0.5 * rating:
            hot.append(
                f"the {r.name} takes {_watts(watts)} of the {_watts(rating)} it may at {design.ambient.high:g} °C"
            )
        elif surface > HOT_SURFACE and watts > 0:
            hot.append(f"the {r.name} may reach {surface:.0f} °C")
    for a in power.op_amps:
        if a.junction is not None and a.junction > HOT_SURFACE:
            hot.append(f"the op amp of {a.name} may reach {a.junction:.0f} °C inside")
    if not hot:
        return []
    most = 4
    more = f"; and {len(hot) - most} more" if len(hot) > most else ""
    return [
        Caution("burn", "Hot parts", f"At worst {'; '.join(hot[:most])}{more}. Let them cool before touching.", True)
    ]


def _surface(design, watts: float) -> float:
    """Temperature of a film [degC], from the slope of its derating line."""
    return design.ambient.high + (NO_POWER_AT - FULL_POWER_TO) / design.resistor.power * watts


@lru_cache(maxsize=16)
def _clipped_heat(design, unplugged) -> tuple[float, ...]:
    """Worst dissipation of every resistor [W] over the corners of the signals, no output past its limits.

    With an output at its limit the drop across a resistor is still monotone in every
    signal, so the corners have the worst. Rails at their high tolerance.
    """
    net = Network(design, unplugged)
    supply, n = design.supply, net.signal_count
    wide = replace(supply, high=supply.high * (1 + supply.tolerance), low=supply.low * (1 + supply.tolerance))
    corners = np.array(list(product(*((s.low, s.high) for s in design.signals))))
    sources = np.column_stack([corners, np.full(len(corners), net.values[n])])
    sol = solve_clipped(net, sources, limits=nominal_limits(replace(design, supply=wide))).solution
    minus, plus, output = (x[..., 0] for x in (sol.minus, sol.plus, sol.output))
    found = []
    for i, part in enumerate(net.parts):
        c, r = net.cells[part.cell], float(net.resistances[i])
        node = (plus if part.kind in ("plus", "plus_ground") else minus)[:, part.cell]
        end, total = np.zeros(len(corners)), r
        if part.kind == "feedback":
            end = output[:, part.cell]
        elif part.kind in ("minus", "plus"):
            ids, ends = (c.minus_parts, c.minus_sources) if part.kind == "minus" else (c.plus_parts, c.plus_sources)
            source = int(ends[list(ids).index(i)])
            end = sources[:, source] if source <= n else output[:, source - n - 1]
            total = r + float(net._leg_rs[source])
        found.append(float((((end - node) / total) ** 2 * r).max()) if 0 < total < math.inf else 0.0)
    return tuple(found)


def _three(value: float) -> str:
    """Three figures, never as a power of ten."""
    return f"{float(f'{value:.3g}'):.12g}" if abs(value) < 1e9 else f"{value:.3g}"


def _watts(power: float) -> str:
    return f"{power * 1e3:.3g} mW" if power < 1 else f"{power:.3g} W"


def _unpowered(design) -> list[Caution]:
    """Signals that push more current into a dead op amp than its input protection should carry."""
    net = Network(design)
    strong = []
    for part in net.parts:
        if part.source not in design.signal_names or part.kind not in ("minus", "plus"):
            continue
        x = design.signal(part.source)
        ohm = part.resistance + x.source_resistance
        peak = max(abs(x.low), abs(x.high))
        current = math.inf if ohm == 0 else peak / ohm
        if peak and current > PROTECTION_CURRENT:
            strong.append(
                f"'{x.name}' pushes {_three(current * 1e3)} mA" if ohm else f"'{x.name}' has no resistor in series"
            )
    if strong:
        text = f"With the rails off, {', '.join(strong)} into the op amp's input protection; switch the rails on first and off last."
        return [Caution("unpowered", "Signals without rails", text, True)]
    return [
        Caution(
            "unpowered", "Signals without rails",
            "Switch the rails on before the signals and off after them: a driven input of an unpowered op amp conducts through its protection.",
            False,
        )
    ]  # fmt: skip


def _short(analysis) -> Caution:
    design, amp = analysis.design, analysis.design.op_amp
    watts = max(abs(design.supply.high), abs(design.supply.low)) * amp.output_current
    text = f"Into a short the output stage takes {_watts(watts)}"
    junction = None if amp.thermal_resistance is None else design.ambient.high + amp.thermal_resistance * watts
    over = junction is not None and amp.junction_most is not None and junction > amp.junction_most
    if over:
        text += f", which would bring the junction to {junction:.0f} °C, past its {amp.junction_most:.0f} °C"
    return Caution("short", "Output into a short", text + ". Find the short before the next try.", over)


__all__ = ["AC_LIMIT", "DC_LIMIT", "HOT_SURFACE", "PROTECTION_CURRENT", "Caution", "cautions"]
