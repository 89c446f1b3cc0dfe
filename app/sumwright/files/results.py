"""An analysis as the JSON document of `sumwright analyse --json`.

What does not exist (no crossover, no -3 dB point, no thermal resistance) is null.
No number is rounded.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from sumwright.engine.analysis import Analysis

POINTS = ("present", "highest", "lowest")
_CELL_DC = ("minus_voltage", "plus_voltage", "output_voltage", "output_current", "feedback_current")
_CELL_HEADROOM = (
    "highest", "lowest", "limit_high", "limit_low", "margin_high", "margin_low", "common_mode_margin_high",
    "common_mode_margin_low", "output_current_peak",
)  # fmt: skip
_CHECK = ("key", "title", "status", "value", "limit", "margin", "unit", "advice")


def to_json(analysis: Analysis, monte_carlo: dict[str, Any] | None = None) -> dict[str, Any]:
    """The document; every leaf a text, a finite number or null.

    Parameters
    ----------
    analysis : Analysis
    monte_carlo : dict, optional
        By point (`present`, `highest`, `lowest`), what `boards.monte_carlo` found.
    """
    return {
        "dc": _dc(analysis),
        "headroom": _headroom(analysis),
        "errors": _errors(analysis, monte_carlo or {}),
        "ac": _ac(analysis),
        "noise": _noise(analysis),
        "power": {
            "resistors": [_pick(r, ("name", "dissipation_most", "rating")) for r in analysis.power.resistors],
            "op_amps": [_pick(a, ("dissipation_most", "junction")) for a in analysis.power.op_amps],
        },
        "checks": [_pick(c, _CHECK) for c in analysis.checks],
    }


def _dc(analysis: Analysis) -> dict[str, Any]:
    dc, names = analysis.dc, analysis.design.signal_names
    return {
        "output": _leaf(dc.output),
        "unclipped_output": _leaf(dc.unclipped_output),
        "ideal_output": _leaf(dc.ideal_output),
        "clipped": dc.clipped,
        "offset": _leaf(dc.offset),
        "weights": _by_name(names, dc.weights),
        "wanted_weights": _by_name(names, dc.wanted_weights),
        "contributions": _by_name(names, dc.contributions),
        "source_currents": _by_name(names, dc.source_currents),
        "cells": [
            {**_pick(c, _CELL_DC), "leg_currents": {s: _leaf(i) for s, i in c.leg_currents.items()}} for c in dc.cells
        ],
    }


def _headroom(analysis: Analysis) -> dict[str, Any]:
    room, names = analysis.headroom, analysis.design.signal_names
    return {
        "corner_high": _by_name(names, room.corner_high),
        "corner_low": _by_name(names, room.corner_low),
        "cells": [_pick(c, _CELL_HEADROOM) for c in room.cells],
    }


def _errors(analysis: Analysis, monte_carlo: dict[str, Any]) -> dict[str, Any]:
    document = {}
    for point in POINTS:
        budget = analysis.errors[point]
        drawn = monte_carlo.get(point)
        document[point] = {
            "terms": [_pick(t, ("name", "source", "limit_effect", "standard_uncertainty")) for t in budget.terms],
            **_pick(budget, ("shift", "worst_case", "expanded_95")),
            "monte_carlo": None
            if drawn is None
            else _pick(drawn, ("draws", "seed", "mean", "standard_deviation", "low_95", "high_95"))
            | {"yield": _leaf(drawn.yield_)},
        }
    return document


def _ac(analysis: Analysis) -> dict[str, Any]:
    from sumwright.engine.checks.full_power_band import full_power_bandwidth

    ac = analysis.ac
    return {
        "signals": {s.name: _pick(s, ("dc_gain", "bandwidth_3db")) for s in ac.signals},
        "cells": [_pick(c, ("noise_gain", "crossover", "phase_margin", "gain_margin_db")) for c in ac.cells],
        "full_power_bandwidth": _leaf(full_power_bandwidth(analysis)),
    }


def _noise(analysis: Analysis) -> dict[str, Any]:
    noise = analysis.noise
    return {
        "density_1khz": _leaf(noise.density_1khz),
        "rms": _leaf(noise.rms),
        "band": [_leaf(f) for f in noise.band],
        "terms": [_pick(t, ("name", "rms")) for t in noise.terms],
    }


def _by_name(names: Iterable[str], values: Iterable[Any]) -> dict[str, Any]:
    return {name: _leaf(value) for name, value in zip(names, values, strict=True)}


def _pick(record: Any, keys: Iterable[str]) -> dict[str, Any]:
    return {key: _leaf(getattr(record, key)) for key in keys}


def _leaf(value: Any) -> Any:
    if value is None or isinstance(value, str | bool):
        return value
    if isinstance(value, int):
        return value
    number = float(value)
    return number if math.isfinite(number) else None
