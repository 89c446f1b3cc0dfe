"""The strips: a row a signal, with its value, wanted and made weight, and its share of the output."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

from sumwright.engine.stage import REFERENCE, Signal
from sumwright.quantity import format_exact
from sumwright.rows import rows


def show(bench: Any) -> dict[str, Any]:
    """What the strips need, in the order of the rows; what moves with the values is in `live`."""
    analysis = bench.analysis
    design = analysis.design
    shown, seen = [], set()
    for source, cell, node in rows(design.cells, design.signal_names):
        seen.add(source)
        place = {"name": source, "cell": cell, "node": node}
        if source == REFERENCE:
            shown.append({**place, "reference": True, "rs": design.reference.source_resistance})
        else:
            shown.append({**place, **_fixed(design.signal(source)), "style": bench.style(source)})
            shown[-1]["out"] = source in bench.unplugged
    for s in design.signals:  # a leg may be missing on a sheet of somebody's own making
        if s.name not in seen:
            shown.append(
                {"name": s.name, "cell": -1, "node": "", **_fixed(s), "style": bench.style(s.name), "out": True}
            )
    return {
        "rows": shown, "order": list(design.signal_names), "offset": design.target.offset, "follow": bench.follow,
        "series": design.resistor.series, "sum": [[s.name, s.weight] for s in design.signals],
    }  # fmt: skip


def _fixed(s: Signal) -> dict[str, Any]:
    """What a move of its slider does not change."""
    return {
        "low": s.low, "high": s.high, "weight": s.weight, "weight_text": format_exact(s.weight),
        "rs": s.source_resistance, "figures": _figures(s.low, s.high, s.source_resistance, s.frequency),
    }  # fmt: skip


@lru_cache(maxsize=512)
def _figures(low: float, high: float, resistance: float, frequency: float) -> dict[str, str]:
    return {
        "low": format_exact(low), "high": format_exact(high), "source_resistance": format_exact(resistance),
        "frequency": format_exact(frequency),
    }  # fmt: skip


def live(bench: Any) -> dict[str, Any]:
    """What moves with the values, in the order of the rows."""
    analysis = bench.analysis
    design, dc = analysis.design, analysis.dc
    places = {name: k for k, name in enumerate(design.signal_names)}
    weights, shares, values = dc.weights.tolist(), dc.contributions.tolist(), dc.values.tolist()
    value, made, share, seen = [], [], [], set()
    for source, _, _ in rows(design.cells, design.signal_names):
        seen.add(source)
        if source == REFERENCE:
            value.append(design.reference.voltage)
            made.append(None)
            share.append(dc.offset)
        else:
            k = places[source]
            value.append(values[k])
            made.append(weights[k])
            share.append(shares[k])
    for s in design.signals:
        if s.name not in seen:
            value.append(s.value)
            made.append(0.0)
            share.append(0.0)
    return {"value": value, "made": made, "share": share, "on": bench.on}


def cable_out(bench: Any) -> dict[str, Any] | None:
    """What becomes of every weight when the cable of the signal under the hand is out, or its source is dead."""
    return _cable_out(bench.on, bench.analysis)


def _cable_out(name: str, analysis: Any) -> dict[str, Any] | None:
    found = analysis.cable_out
    if name not in found.names:
        return None
    k, dc = found.names.index(name), analysis.dc
    weights = [
        [s, float(dc.weights[i]), float(found.open_weights[k, i]), float(found.dead_weights[k, i])]
        for i, s in enumerate(found.names)
    ]
    gains = analysis.net.noise_gains()
    return {
        "name": name,
        "weights": weights,
        "offset": [dc.offset, float(found.open_offset[k]), float(found.dead_offset[k])],
        "noise_gain": [float(gains[-1]), float(found.open_noise_gain[k][-1]), float(found.dead_noise_gain[k][-1])],
    }
