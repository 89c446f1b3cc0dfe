"""Suspects in words: what the fault is, what it does to the weights, how well it fits."""

from __future__ import annotations

import numpy as np

from sumwright.engine.realise.preferred import values_within
from sumwright.errors import SumwrightError
from sumwright.quantity import format_fixed, format_percent, format_resistor

from .suspects import Diagnosis, Suspect, wire

SMALL = 0.004  # relative change of a weight not worth a word


def describe(diagnosis: Diagnosis, most: int, least: float) -> list[Suspect]:
    """The ranked suspects: at most `most`, but the whole first group, none under `least` probability but the first."""
    groups = diagnosis.groups()
    chosen = [
        c for rank, c in enumerate(diagnosis.order)
        if groups[c] == 1 or (rank < most and diagnosis.probabilities[c] >= least) or rank < 3
    ]  # fmt: skip
    # group numbers run 1, 2, 3 down the list that is shown
    renumber: dict[int, int] = {}
    for c in chosen:
        renumber.setdefault(int(groups[c]), len(renumber) + 1)
    effects = _Effects(diagnosis)
    misfits = diagnosis.misfits(chosen)
    out = []
    for c, misfit in zip(chosen, misfits, strict=True):
        case = diagnosis.cases[c]
        estimate = diagnosis.estimate(c)
        fault, part = case.key
        out.append(
            Suspect(
                fault, part, float(diagnosis.probabilities[c]), estimate, diagnosis.estimate_uncertainty(c),
                renumber[int(groups[c])], _sentences(diagnosis, c, estimate, effects, misfit),
                _fill(case.fault.parts_it, case, estimate) if case.fault else "", float(misfit),
                case.fault.unit if case.fault and estimate is not None else "",
            )
        )  # fmt: skip
    return out


def _fill(template, case, estimate):
    nominal, unit = case.place.nominal, case.fault.unit

    def shown(value, none):
        if value is None:
            return none
        if unit == "V":
            return format_fixed(value, "V", 3)
        return "0 ohm" if value == 0 else format_resistor(value, 3 if value is estimate else 4)

    return template.format(
        part=case.place.part, estimate=shown(estimate, "an unknown value"), nominal=shown(nominal, "nothing")
    )


def _sentences(diagnosis, c, estimate, effects, misfit):
    case = diagnosis.cases[c]
    count = len(diagnosis.readings)
    if case.fault is None:
        first = (
            "Nothing is wrong: every part within its tolerance gives these readings."
            if count
            else ("Nothing has been read yet; most boards are sound.")
        )
        if count and misfit > 4:
            first = f"Every part within its tolerance: then one reading is off by {misfit:.0f} times its uncertainty."
        return first
    text = [_fill(case.fault.says, case, estimate)]
    if estimate is not None and case.fault.name.endswith("wrong value"):
        text.append(_nearest(diagnosis, estimate))
    text.append(effects.of(c))
    if count:
        if misfit <= 4:
            text.append(f"{'The reading fits' if count == 1 else f'All {count} readings fit'}.")
        else:
            text.append(f"Even so one reading is off by {min(misfit, 9999):.0f} times its uncertainty.")
    return " ".join(t for t in text if t)


def _nearest(diagnosis, estimate):
    series = diagnosis.bench.design.resistor.series
    try:
        values = values_within(series, estimate / 3, estimate * 3)
    except SumwrightError:
        return ""
    near = float(values[np.argmin(np.abs(np.log(values / estimate)))])
    return f"Nearest {series} value: {format_resistor(near)}."


class _Effects:
    """What a fault does to the small-signal weights, in words."""

    def __init__(self, diagnosis: Diagnosis):
        self.diagnosis = diagnosis
        bench = diagnosis.bench
        design = bench.design
        low = np.array([s.low for s in design.signals])
        high = np.array([s.high for s in design.signals])
        rest = np.clip(0.0, low, high)
        step = 0.02 * np.maximum(np.abs(high - low), 1e-3)
        self.volts = np.vstack([rest, rest + np.diag(step)])
        self.step = step
        self.plain = self._weights(bench.outputs(bench.healthy, self.volts))[0]

    def _weights(self, out):
        return (out[:, 1:] - out[:, :1]) / self.step

    def of(self, c) -> str:
        d = self.diagnosis
        trial = d.evidence.trials[d.best_trial[c]]
        out = d.bench.outputs(wire(d.bench, d.cases, [trial]), self.volts)
        made = self._weights(out)[0]
        if not np.any(np.abs(made) > 1e-6):
            return (
                f"The output stays at {format_fixed(float(out[0, 0]), 'V', 2)} whatever the signals do."
                if len(d.readings)
                else ""
            )
        bits: list[str] = []
        alike: dict[str, list[str]] = {}
        for name, was, now in zip(d.bench.names, self.plain, made, strict=True):
            if abs(now - was) <= SMALL * max(abs(was), 1e-9):
                continue
            change = now / was - 1.0 if was else np.inf
            if abs(now) < 1e-3 * abs(was):
                bits.append(f"{name} no longer counts")
            elif not np.isfinite(change) or change < -1 or abs(change) > 0.5:
                bits.append(f"{name} weighs {format_fixed(now, '', 4)} instead of {format_fixed(was, '', 4)}")
            else:
                alike.setdefault(format_percent(change, 2, sign=True), []).append(name)
        for change, names in alike.items():
            bits.append(f"{', '.join(names)} {'changes' if len(names) == 1 else 'change'} by {change}")
        if not bits:
            return ""
        text = "; ".join(bits[:4]) + ("; others change too" if len(bits) > 4 else "")
        return text[0].upper() + text[1:] + "."
