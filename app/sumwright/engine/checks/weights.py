"""Are the weights made the weights wanted?

Allowed is the relative error that, in every weight and the offset at once, would use
half of `target.accuracy` at full scale; the other half is for tolerances. Without
an accuracy it is 1 %, as 1 % resistors could not hold better (common practice).
"""

from __future__ import annotations

import numpy as np

from sumwright.engine.operating_point import operating_point
from sumwright.engine.realise.preferred import values_within
from sumwright.engine.stage import REFERENCE, replace
from sumwright.errors import SumwrightError
from sumwright.quantity import format_fixed, format_percent, format_resistor

from .check import Check, choices, judged, spoken, unknown

FOLLOWS_VALUES = False
KEY, TITLE = "weights", "Weights"
USUAL = 0.01


def checks(analysis) -> tuple[Check, ...]:
    """Worst relative error of any weight or of the offset, everything nominal counted."""
    design, dc = analysis.design, analysis.dc
    if any(cell.feedback is None for cell in design.cells):
        why = "A cell without feedback is a comparator: it makes no weights."
        return (unknown(KEY, TITLE, "%", why, "Fit the feedback resistor."),)
    offset = design.target.offset
    full = abs(offset) + sum(abs(s.weight) * max(abs(s.low), abs(s.high)) for s in design.signals)
    accuracy = design.target.accuracy
    share = bool(accuracy and full)
    limit = 0.5 * accuracy / full if share else USUAL
    # what is wanted to be next to nothing is compared with the largest weight
    largest = max(abs(s.weight) for s in design.signals) or 1.0
    rows = [
        (s.name, float(made), s.weight, (float(made) - s.weight) / _whole(s.weight, largest))
        for s, made in zip(design.signals, dc.weights, strict=True)
        if s.name not in analysis.unplugged
    ]
    if offset:
        rows.append((REFERENCE, dc.offset, offset, (dc.offset - offset) / _whole(offset, full)))
    if not rows:
        return (unknown(KEY, TITLE, "%", "Every cable is out.", "Plug one in."),)
    name, made, wanted, error = max(rows, key=lambda row: abs(row[3]))
    unit = "V" if name == REFERENCE else ""
    what = "The offset" if name == REFERENCE else f"'{name}'"
    made_text, wanted_text = (format_fixed(x, unit, 4, sign=True) for x in (made, wanted))
    return (
        judged(
            KEY, TITLE, "%", 100 * abs(error), 100 * limit, 100 * (limit - abs(error)), 100 * limit,
            f"{what} is {made_text} for {wanted_text}, {format_percent(error, 2, sign=True)} off; "
            + (
                f"the limit {format_percent(limit)} is half the accuracy asked for, at full scale."
                if share
                else f"the limit is the usual {format_percent(limit)}, as no accuracy is asked for."
            ),
            lambda goal: _cure(analysis, name, made, wanted, limit),
        ),
    )  # fmt: skip


def _whole(wanted, largest):
    """What an error is a share of."""
    return abs(wanted) if abs(wanted) > 1e-9 * largest else largest


def _cure(analysis, name, made, wanted, limit):
    """The leg's resistance that would make the weight, its neighbours as they are."""
    if analysis.unplugged:
        out = "', '".join(s for s in analysis.design.signal_names if s in analysis.unplugged)
        return f"plug '{out}' in, or ground its leg: a grounded leg leaves the other weights alone"
    legs = [i for i, part in enumerate(analysis.net.parts) if part.source == name]
    if not legs or made * wanted <= 0:
        return (
            f"{'the reference' if name == REFERENCE else repr(name)} into the other node" if made * wanted < 0 else ""
        )
    new = _leg(analysis, legs[0], wanted / made)
    part = analysis.net.parts[legs[0]]
    own = "" if new is None else _fitted(analysis, part, new, limit)
    return choices(own, "a closer set under Choices")


def _fitted(analysis, part, ohm, limit):
    """The leg at the nearest value of the design's series where that clears every weight; else trimmed to the ohm."""
    said = f"the {spoken(part.name)} from {format_resistor(part.resistance)}"
    kind = analysis.design.resistor
    try:
        values = values_within(kind.series, kind.least, kind.most)
    except SumwrightError:  # nothing to be bought in that range
        return ""
    near = float(values[np.abs(np.log(values / ohm)).argmin()])
    if near != part.resistance and _worst(analysis.design, part, near) <= limit:
        return f"{said} to {format_resistor(near)}"
    if _worst(analysis.design, part, ohm) <= limit:
        return f"{said} trimmed to {format_resistor(ohm)} (no value of {kind.series} clears it)"
    return ""


def _worst(design, part, ohm):
    """Worst relative error of any weight or of the offset with one leg changed."""

    def legs(old):
        return tuple(replace(leg, resistance=ohm) if leg.source == part.source else leg for leg in old)

    cells = list(design.cells)
    cell = cells[part.cell]
    cells[part.cell] = replace(cell, **{part.kind: legs(getattr(cell, part.kind))})
    changed = replace(design, cells=tuple(cells))
    dc = operating_point(changed)
    largest = max(abs(s.weight) for s in design.signals) or 1.0
    errors = [
        (float(w) - s.weight) / _whole(s.weight, largest) for w, s in zip(dc.weights, design.signals, strict=True)
    ]
    if design.target.offset:
        errors.append((dc.offset - design.target.offset) / abs(design.target.offset))
    return max(map(abs, errors))


def _leg(analysis, i, ratio):
    """The fitted resistance [ohm] that multiplies the weight of part `i` by `ratio`; None if there is none."""
    net = analysis.net
    part, cell = net.parts[i], net.cells[net.parts[i].cell]
    ids, sources = (
        (cell.minus_parts, cell.minus_sources) if part.kind == "minus" else (cell.plus_parts, cell.plus_sources)
    )
    series = net._leg_resistances(net.source_resistances)
    total = part.resistance + series[sources[list(ids).index(i)]]
    if part.kind == "minus":
        new = total / ratio
    else:
        # a leg into the + node weighs as its share of the node's conductance
        g = float((1.0 / (net.resistances[ids] + series[sources])).sum())
        g += 1.0 / net.resistances[cell.plus_ground] if cell.plus_ground >= 0 else 0.0
        share = ratio / (total * g)
        others = g - 1.0 / total
        if not 1e-9 < share < 1 or others <= 0:
            return None
        new = (1.0 - share) / (share * others)
    fitted = float(new - (total - part.resistance))
    return fitted if fitted > 0 else None
