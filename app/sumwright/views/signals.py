"""The strips: a row a signal, with its value, wanted and made weight, and its share of the output."""

from __future__ import annotations

from typing import Any

from sumwright.engine.stage import REFERENCE
from sumwright.quantity import format_exact, format_quantity

from .rows import rows


def show(bench: Any) -> dict[str, Any]:
    """What the strips need, in the order of the rows."""
    analysis = bench.analysis
    design = analysis.design
    dc = analysis.dc
    known = {name: k for k, name in enumerate(analysis.design.signal_names)}
    shown, seen = [], set()
    for source, cell, node in rows(analysis.design.cells, analysis.design.signal_names):
        seen.add(source)
        if source == REFERENCE:
            volts = analysis.design.reference.voltage
            wanted = design.target.offset / volts if volts else None
            made = dc.offset / volts if volts else None
            shown.append({
                "name": source, "reference": True, "cell": cell, "node": node, "value": volts, "weight": wanted,
                "made": made, "share": dc.offset, "rs": analysis.design.reference.source_resistance,
            })  # fmt: skip
            continue
        k, s = known[source], analysis.design.signal(source)
        shown.append({
            "name": s.name, "style": bench.style(s.name), "cell": cell, "node": node, "value": s.value, "low": s.low,
            "high": s.high, "weight": s.weight, "weight_text": format_exact(s.weight), "made": dc.weights[k],
            "share": dc.contributions[k], "out": s.name in bench.unplugged, "rs": s.source_resistance,
            "rs_text": format_quantity(s.source_resistance, "Ω", 4, trim=True),
            "figures": {
                f: format_exact(getattr(s, f)) for f in ("value", "low", "high", "source_resistance", "frequency")
            },
        })  # fmt: skip
    for s in analysis.design.signals:  # a leg may be missing on a sheet of somebody's own making
        if s.name not in seen:
            shown.append({
                "name": s.name, "style": bench.style(s.name), "cell": -1, "node": "", "value": s.value, "low": s.low,
                "high": s.high, "weight": s.weight, "weight_text": format_exact(s.weight), "made": 0.0, "share": 0.0,
                "out": True, "rs": s.source_resistance, "rs_text": "", "figures": {},
            })  # fmt: skip
    return {
        "rows": shown, "on": bench.on, "order": list(design.signal_names), "offset": design.target.offset,
        "offset_text": format_exact(design.target.offset), "follow": bench.follow, "series": design.resistor.series,
        "sum": [[s.name, s.weight] for s in design.signals], "cable_out": _cable_out(bench.on, analysis),
    }  # fmt: skip


def _cable_out(name: str, analysis: Any) -> dict[str, Any] | None:
    """What becomes of every weight when the cable of the signal under the hand is out, or its source is dead."""
    found = analysis.cable_out
    if name not in found.names:
        return None
    k, dc = found.names.index(name), analysis.dc
    rows = [
        [s, float(dc.weights[i]), float(found.open_weights[k, i]), float(found.dead_weights[k, i])]
        for i, s in enumerate(found.names)
    ]
    gains = analysis.net.noise_gains()
    return {
        "name": name,
        "weights": rows,
        "offset": [dc.offset, found.open_offset[k], found.dead_offset[k]],
        "noise_gain": [gains[-1], found.open_noise_gain[k][-1], found.dead_noise_gain[k][-1]],
    }
