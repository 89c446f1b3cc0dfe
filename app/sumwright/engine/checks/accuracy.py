"""Does the output stay within the accuracy wanted, at 95 %?"""

from __future__ import annotations

import math

from sumwright.quantity import format_fixed, format_percent, format_quantity, format_resistor

from .check import Check, choices, down_figures, judged, unknown, up_figures

FOLLOWS_VALUES = True
KEY, TITLE = "accuracy", "Accuracy, 95 %"


def checks(analysis) -> tuple[Check, ...]:
    """|known shift| + expanded uncertainty at the worst of the three points against `target.accuracy`."""
    accuracy = analysis.design.target.accuracy
    worst = max(analysis.errors.values(), key=lambda b: abs(b.shift) + b.expanded_95)
    error = abs(worst.shift) + worst.expanded_95
    where = {"present": "where the signals are", "highest": "at the highest corner", "lowest": "at the lowest corner"}
    said = (
        f"Known shift {_volts(worst.shift)} {where[worst.point]}, ±{_volts(worst.expanded_95)} at 95 %"
    )  # fmt: skip
    if accuracy is None:
        return (
            unknown(
                KEY, TITLE, "V", f"{said}; no accuracy is asked for.", "Type the accuracy wanted under target.", error
            ),
        )
    return (
        judged(
            KEY, TITLE, "V", error, accuracy, accuracy - error, accuracy, f"{said}; allowed ±{_volts(accuracy)}.",
            lambda goal: _cure(analysis, worst, accuracy - goal),
        ),
    )  # fmt: skip


def _volts(value):
    return format_quantity(value, "V", 3)


def _cure(analysis, worst, allowed):
    """What one part must become; where no one part is enough, the two that matter most."""
    shift = _less_shift(analysis, worst, allowed) if abs(worst.shift) > 0.3 * allowed else ""
    if analysis.unplugged and shift:
        return shift
    if worst.expanded_95 < allowed:
        # either alone is enough: less shift, or less spread beside the shift as it is
        return choices(shift, _less_spread(analysis, worst, allowed - abs(worst.shift)))
    # the spread is too much by itself; the shift, if it matters, must go as well
    room = 0.9 * allowed if shift else allowed - abs(worst.shift)
    spread = _less_spread(analysis, worst, room)
    return f"{spread}; and {shift}" if shift else spread


def _less_spread(analysis, worst, room):
    """The figure that brings the 95 % spread down to `room`."""
    if room <= 0:
        return ""
    groups: dict[str, float] = {}
    for term in worst.terms:
        groups[term.kind] = groups.get(term.kind, 0.0) + term.standard_uncertainty**2
    total = sum(groups.values())
    ranked = sorted((kind for kind in groups if groups[kind] > 0), key=lambda kind: -groups[kind])
    if not ranked:
        return ""
    kind = ranked[0]
    left = (0.5 * room) ** 2 - (total - groups[kind])
    if left > 0:
        return _better(analysis.design, kind, math.sqrt(left / groups[kind]))
    shares = " and ".join(f"{k} ({format_percent(groups[k] / total)} of the variance)" for k in ranked[:2])
    return f"less of both {shares}" if len(ranked) > 1 else f"less {shares}"


def _less_shift(analysis, worst, allowed):
    """Where the known shift comes from, and how far it must come down."""
    if analysis.unplugged:
        out = "', '".join(s for s in analysis.design.signal_names if s in analysis.unplugged)
        return f"plug '{out}' in, or ground its leg: a grounded leg leaves the other weights alone"
    term = max(worst.terms, key=lambda t: abs(t.shift))
    left = allowed - worst.expanded_95
    amount = f" (below {_volts(left)})" if left > 0 else ""
    if term.kind == "rounding":
        return f"a closer set under Choices: rounding makes {_volts(term.shift)} of the shift{amount}"
    if term.kind == "source resistance":
        return f"legs less their source resistance, which makes {_volts(term.shift)} of the shift{amount}"
    gain = analysis.design.op_amp.open_loop_gain
    ratio = abs(term.shift) / left if left > 0 else math.inf
    more = f" of {format_quantity(up_figures(gain * ratio), '', 2)} open-loop gain" if 1 < ratio < math.inf else ""
    return f"an op amp{more}: its finite gain and input make {_volts(term.shift)} of the shift{amount}"


def _better(design, kind, factor):
    """The figure that shrinks this group of terms by `factor`."""
    amp, part = design.op_amp, design.resistor
    worse = 1.0 / factor

    def less(value, unit):
        return format_quantity(down_figures(value * factor), unit, 2)

    if kind == "tolerance":
        return f"resistors of ±{format_percent(down_figures(part.tolerance * factor))} instead of ±{format_percent(part.tolerance)}"
    if kind == "temperature":
        ppm = format_fixed(down_figures(part.temperature_coefficient * factor) * 1e6, "ppm/K", 1)
        return f"resistors of {ppm}, or a smaller ambient range"
    if kind == "reference":
        return f"a reference of ±{format_percent(down_figures(design.reference.tolerance * factor))}"
    if kind in ("CMRR", "PSRR"):
        ratio = amp.cmrr if kind == "CMRR" else amp.psrr
        return f"an op amp of {math.ceil(20 * math.log10(ratio * worse) - 1e-9)} dB {kind}"
    figures = {
        "offset voltage": (amp.offset_voltage, "V"), "offset drift": (amp.offset_drift, "V/K"),
        "bias current": (amp.bias_current, "A"), "offset current": (amp.offset_current, "A"),
    }  # fmt: skip
    value, unit = figures[kind]
    way = f"an op amp of {less(value, unit)} {kind}"
    if kind == "bias current" and amp.bias_current > 3 * amp.offset_current and (balance := _balance(design)):
        way += f"; or {balance}"
    return way


def _balance(design):
    """The resistor that makes both nodes of the first tied cell see the same resistance.

    Not offered where bias and offset current are alike: a bias-cancelled input gains nothing by it.
    """
    for k, cell in enumerate(design.cells):
        if cell.plus_ground == 0 and cell.feedback:
            series = {s.name: s.source_resistance for s in design.signals}
            g = 1.0 / cell.feedback + sum(1.0 / (leg.resistance + series.get(leg.source, 0.0)) for leg in cell.minus)
            g += 1.0 / cell.minus_ground if cell.minus_ground else 0.0
            where = f" of cell {k + 1}" if len(design.cells) > 1 else ""
            return f"{format_resistor(1.0 / g, 3)} from the + input{where} to ground, which leaves the offset current"
    return ""
