"""Everything the readings say of a board: fit, verdicts, suspects, next reading."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from sumwright.engine.nodes import Network, nominal_limits
from sumwright.engine.operating_point import influence
from sumwright.engine.stage import Design
from sumwright.errors import InvalidDesign
from sumwright.quantity import format_quantity

from .board import Bench
from .explain import describe
from .fit import Fit, Verdict, least_squares, verdict
from .next_reading import NextReading, next_reading
from .readings import Meter, Readings
from .suspects import Diagnosis, Suspect

LISTED = 20
LEAST_PROBABILITY = 1e-6
# Without a stated uncertainty: what a bench meter is good for, and how much of the
# output's span a scatter may be before it is no longer called noise.
GUESSED_METER = Meter()
SCATTER_SHARE = 0.01


class LeftOut(NamedTuple):
    """A reading kept out of the linear fit."""

    row: int  # from 0
    line: int
    reading: float
    why: str


class Band(NamedTuple):
    """What the parts allow a weight (or the offset, V) to be."""

    nominal: float
    low: float
    high: float


@dataclass(frozen=True)
class Report:
    """The whole of `diagnose`; `fit` runs over the signals, then the offset."""

    names: tuple[str, ...]
    fit: Fit
    bands: tuple[Band, ...]
    verdicts: tuple[Verdict, ...]
    left_out: tuple[LeftOut, ...]
    suspects: tuple[Suspect, ...]
    next_reading: NextReading
    diagnosis: Diagnosis
    notes: tuple[str, ...]


def weight_bands(design: Design, bench: Bench | None = None) -> tuple[Band, ...]:
    """What each weight, then the offset, may be with every resistor at either limit of its tolerance.

    Nominal ± Σ|Δ| over the resistors; the offset also over the op amps' offset voltage and
    bias currents and the reference's tolerance.

    Returns
    -------
    tuple of Band
        One a signal in the design's order, then the offset [V].
    """
    net = Network(design)
    n = net.signal_count
    tolerance = design.resistor.tolerance
    count = len(net.parts)
    r = np.broadcast_to(net.resistances, (1 + 2 * count, count)).copy()
    for i in range(count):
        r[1 + i, i] *= 1.0 + tolerance
        r[1 + count + i, i] *= 1.0 - tolerance
    made = influence(net, resistances=r).output[:, -1, :] if count else influence(net).output[None, -1]
    made = made.copy()
    made[:, n] *= net.values[n]  # the reference's part of the offset
    change = np.abs(made[1:] - made[:1]).reshape(2, count, n + 1).max(axis=0).sum(axis=0) if count else np.zeros(n + 1)
    extra = abs(made[0, n]) * design.reference.tolerance if design.reference else 0.0
    bench = bench or Bench(design)
    u, _, _ = bench._walk(bench.healthy, np.zeros((1, n)))
    for i, (what, _) in enumerate(bench.quantities, start=1):
        if what in ("offset", "bias", "difference"):
            extra += abs(float(u[0, i, 0] - u[0, 0, 0])) * np.sqrt(3)  # from standard uncertainty back to the limit
    change[n] += extra
    return tuple(Band(float(m), float(m - c), float(m + c)) for m, c in zip(made[0], change, strict=True))


def near_clipping(design: Design, readings: Readings, bench: Bench) -> list[LeftOut]:
    """Readings so near an output limit that they may be clipped, and those where an earlier cell clips.

    The limit is taken with the rails at their least favourable tolerance and the
    current the reading itself draws.
    """
    out = []
    amp, supply = design.op_amp, design.supply
    net = Network(design)
    load = net.load_conductance
    feedback = design.cells[-1].feedback
    pull = load + (1.0 / feedback if feedback else 0.0)
    worst = (supply.high - supply.tolerance * abs(supply.high), supply.low + supply.tolerance * abs(supply.low))
    lead = influence(net).output
    limits = nominal_limits(design)
    u = np.zeros(readings.count) if readings.uncertainty is None else readings.uncertainty
    for i, (volts, y) in enumerate(zip(readings.volts, readings.output, strict=True)):
        high = worst[0] - amp.dropout_high - amp.dropout_resistance * max(y * pull, 0.0)
        low = worst[1] + amp.dropout_low + amp.dropout_resistance * max(-y * pull, 0.0)
        line = readings.lines[i] if readings.lines else i + 1
        if y >= high - 2 * u[i]:
            out.append(LeftOut(i, line, float(y), f"within the clipping limit of {format_quantity(high, 'V')}"))
        elif y <= low + 2 * u[i]:
            out.append(LeftOut(i, line, float(y), f"within the clipping limit of {format_quantity(low, 'V')}"))
        else:
            inner = lead[:-1] @ np.append(volts, net.values[-1])
            for k, v in enumerate(inner):
                if not limits.low < v < limits.high:
                    out.append(LeftOut(i, line, float(y), f"cell {k + 1} clips at these signals"))
                    break
    return out


def diagnose(
    design: Design, readings: Readings, *, meter: Meter | None = None, limits: dict[str, tuple[float, float]] | None = None,
    bench: Bench | None = None, foresee: bool = True,
) -> Report:  # fmt: skip
    """Fit, verdicts, suspects and the next reading.

    Parameters
    ----------
    design : Design
        Realised.
    readings : Readings
        Perhaps none.
    meter : Meter, optional
        States the uncertainty of readings that carry none, and of the next one.
    limits : dict, optional
        Of a weight by signal (`offset` for the offset), low and high, instead of what
        the parts allow.
    foresee : bool
        Whether to look for the next reading.

    Raises
    ------
    InvalidDesign
        If the design has no cells.
    """
    if not design.cells:
        raise InvalidDesign("cells is missing: the design is not realised yet; realise it first.", "cells")
    bench = bench or Bench(design)
    if readings.uncertainty is None and meter is not None:
        readings = _with_meter(readings, meter)
    bands = weight_bands(design, bench)
    names = (*bench.names, "offset")
    left_out = tuple(near_clipping(design, readings, bench))
    keep = np.setdiff1d(np.arange(readings.count), [x.row for x in left_out])
    matrix = np.column_stack([readings.volts[keep], np.ones(len(keep))])
    u = None if readings.uncertainty is None else readings.uncertainty[keep]
    fit = least_squares(matrix, readings.output[keep], u)
    verdicts = tuple(_judge(fit, i, bands[i], (limits or {}).get(name), len(keep)) for i, name in enumerate(names))
    spread, stated = reading_uncertainty(readings, fit)
    diagnosis = Diagnosis(bench, readings.volts, readings.output, spread, stated)
    suspects = tuple(describe(diagnosis, LISTED, LEAST_PROBABILITY))
    ahead = next_reading(diagnosis, _meter_ahead(readings, meter, spread)) if foresee else NextReading({}, 0.0)
    notes = _notes(readings, fit, names, left_out, diagnosis)
    return Report(names, fit, bands, verdicts, left_out, suspects, ahead, diagnosis, notes)


def _with_meter(readings, meter):
    return Readings(
        readings.names, readings.volts, readings.output, meter.standard_uncertainty(readings.output), readings.lines,
        readings.unnamed,
    )  # fmt: skip


def _judge(fit, i, band, stated, count):
    low, high = stated or (band.low, band.high)
    factor = 2.0 if fit.coverage_factor is None else fit.coverage_factor
    return verdict(fit.value[i], fit.standard_uncertainty[i], low, high, factor=factor, readings=max(count, 1))


def reading_uncertainty(readings: Readings, fit: Fit) -> tuple[np.ndarray, bool]:
    """Standard uncertainty (R,) [V] to hold the suspects against, and whether it was stated.

    A board with one fault is still linear, so the scatter of a linear fit is the
    meter's, as long as it is small beside the output; else a bench meter is assumed.
    """
    if readings.uncertainty is not None:
        return readings.uncertainty, True
    guess = GUESSED_METER.standard_uncertainty(readings.output)
    if fit.scatter is None:
        return guess, False
    span = float(np.ptp(readings.output)) if readings.count else 0.0
    if fit.scatter > SCATTER_SHARE * span:
        return guess, False
    gain = GUESSED_METER.of_reading * np.abs(readings.output) / np.sqrt(3)
    return np.sqrt(fit.scatter**2 + gain**2 + 1e-4**2), False


def _meter_ahead(readings, meter, spread):
    """The uncertainty of a reading not yet taken, as a function of its volts."""
    if meter is not None:
        return meter.standard_uncertainty
    if readings.uncertainty is not None and readings.count:
        typical = float(np.median(readings.uncertainty))
        return lambda volts: np.full(np.shape(volts), typical)
    if readings.count:
        typical = float(np.median(spread))
        return lambda volts: np.full(np.shape(volts), typical)
    return GUESSED_METER.standard_uncertainty


def _notes(readings, fit, names, left_out, diagnosis):
    notes = []
    if left_out:
        lines = ", ".join(str(x.line) for x in left_out[:12]) + (" and more" if len(left_out) > 12 else "")
        one = len(left_out) == 1
        notes.append(
            f"{len(left_out)} reading{'' if one else 's'} (line {lines}) {'is' if one else 'are'} within the limits of "
            f"clipping and kept out of the linear fit."
        )
    missing = [name for name, ok in zip(names, fit.determined, strict=True) if not ok]
    if readings.count and missing:
        notes.append(
            f"These readings do not determine {_listed(missing)}; vary {'it' if len(missing) == 1 else 'them'} on their own."
        )
    if readings.count > 1 and np.ptp(readings.output) == 0:
        notes.append(
            f"All {readings.count} readings are equal, {readings.output[0]:.6g} V: the output does not follow the signals, or "
            f"the meter does not."
        )
    if readings.count and readings.uncertainty is None:
        if fit.scatter is None:
            notes.append("No uncertainty is stated and there are too few readings to estimate it; state the meter.")
        else:
            notes.append(
                f"No uncertainty is stated; the scatter of the fit, {format_quantity(fit.scatter, 'V')}, stands for it, with "
                f"t = {fit.coverage_factor:.3g} for {fit.degrees_of_freedom} degrees of freedom."
            )
    if fit.p_value is not None and fit.p_value < 0.01:
        notes.append(
            f"No set of weights explains the readings within their uncertainty (p = {fit.p_value:.2g}): a reading is wrong, "
            f"the meter is worse than stated, or the output clips somewhere."
        )
    if readings.count > len(diagnosis.readings):
        notes.append(f"The suspects are judged on {len(diagnosis.readings)} of the readings, equal ones averaged.")
    return tuple(notes)


def _listed(words):
    words = [str(w) for w in words]
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " and " + words[-1]
