"""The run on the bench: steps of the plan, readings taken, and what is still to do.

A reading belongs to what was applied and where it was probed, not to a row: when the
design changes, a reading finds its step again or stands as a step of its own.
"""

from __future__ import annotations

import contextlib
import csv
import io
import math
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np

from sumwright.engine.bench.board import Bench
from sumwright.engine.bench.plan import Step, plan
from sumwright.engine.bench.readings import Meter, Readings, parse_limits, parse_meter
from sumwright.engine.stage import Design
from sumwright.engine.stage import replace as with_fields
from sumwright.errors import InvalidQuantity, InvalidReadings, shown
from sumwright.files.readings import number, parse_readings
from sumwright.quantity import parse_quantity

MOST_READINGS = 400  # by hand or from a file; longer tables go to the command line
OUTPUT_PROBE = "output"


@dataclass(frozen=True)
class Taken:
    """One reading, in SI units, as it was typed."""

    apply: tuple[tuple[str, float], ...]  # signals not named are at 0 V
    probe: str
    unit: str
    text: str
    value: float
    uncertainty: float | None = None  # V, where a file stated it

    @property
    def key(self):
        return (self.probe, self.unit, tuple(sorted((n, round(v, 9)) for n, v in self.apply if v)))


class Row(NamedTuple):
    """A step with its reading, if one was taken."""

    step: Step
    taken: Taken | None
    planned: bool

    @property
    def word(self) -> str:
        """in, out, or empty without a reading."""
        low, high = self.step.low, self.step.high
        if self.taken is None or low is None or high is None:
            return ""
        return "in" if low <= self.taken.value <= high else "out"


def step_key(step: Step):
    """What a reading must share to belong to the step."""
    return (step.probe, step.unit, tuple(sorted((n, round(v, 9)) for n, v in step.apply.items() if v)))


class BenchRun:
    """Readings of one board against one design."""

    def __init__(self, design: Design, meter: Meter | None = None):
        self.meter = meter or Meter()
        self.taken: dict[tuple, Taken] = {}
        self.limits: dict[str, str] = {}  # of weights and the offset, as a person stated them
        self.asked: dict[tuple, Taken] = {}  # settings a person took up beyond the plan, not read yet
        self._for: Design | None = None
        self.follow(design)

    def follow(self, design: Design) -> bool:
        """Make the plan again if the stage is another one; whether it was."""
        still = with_fields(design, signals=tuple(with_fields(s, value=0.0) for s in design.signals), title="")
        if still == self._for:
            return False
        self._for, self.design = still, design
        self.bench = Bench(design)
        self.steps = plan(design, self.meter)
        return True

    def restate(self, meter: Meter) -> None:
        """Another meter: the limits move with it."""
        self.meter = meter
        self.steps = plan(self.design, meter)

    def state(self, name: str, text: str) -> None:
        """State the limits of a weight, or of `offset`; an empty text goes back to what the parts allow.

        Raises
        ------
        InvalidQuantity, InvalidReadings
            If the text states none, or the stage has no such weight.
        """
        wanted = self._wanted()
        if name not in wanted:
            raise InvalidReadings(f"The stage has no weight of {shown(name)}.")
        if text.strip():
            parse_limits(text, wanted[name], name)
            self.limits[name] = text.strip()
        else:
            self.limits.pop(name, None)

    def stated_limits(self) -> dict[str, tuple[float, float]]:
        """Low and high of each weight that has limits of its own; a share is one of what is wanted now."""
        wanted, stated = self._wanted(), {}
        for name, text in self.limits.items():
            if name in wanted:
                with contextlib.suppress(InvalidQuantity):  # a share of a wanted 0 says nothing
                    stated[name] = parse_limits(text, wanted[name], name)
        return stated

    def _wanted(self) -> dict[str, float]:
        target = self.design.target
        return {s.name: s.weight for s in self.design.signals} | {"offset": target.offset if target else 0.0}

    def rows(self) -> list[Row]:
        """Steps in their order, then readings and settings that no step asks for."""
        rows = [Row(s, self.taken.get(step_key(s)), True) for s in self.steps]
        known = {step_key(s) for s in self.steps}
        names = set(self.design.signal_names)
        extra = [t for key, t in {**self.asked, **self.taken}.items() if key not in known]
        extra = [
            t for t in extra if t.probe == OUTPUT_PROBE and t.unit == "V" and {n for n, v in t.apply if v} <= names
        ]
        steps = self._steps_of(extra, len(rows) + 1)
        return rows + [Row(s, self.taken.get(t.key), False) for s, t in zip(steps, extra, strict=True)]

    def _steps_of(self, extra: list[Taken], first: int) -> list[Step]:
        """Steps for settings that are not in the plan, with the same limits as if they were."""
        if not extra:
            return []
        names = self.design.signal_names
        volts = np.array([[dict(t.apply).get(n, 0.0) for n in names] for t in extra])
        p = self.bench.predict(self.bench.healthy, volts)
        expect = self.bench.outputs(self.bench.healthy, volts)[0]
        u = np.sqrt(np.square(p.columns[0]).sum(axis=0) + p.own[0] + self.meter.standard_uncertainty(expect) ** 2)
        half = 2 * u + np.abs(p.mean[0] - expect)
        return [
            Step(
                first + i, "A reading of your own", "Power on", dict(zip(names, map(float, volts[i]), strict=True)), OUTPUT_PROBE,
                float(expect[i]), float(expect[i] - half[i]), float(expect[i] + half[i]), "V",
                "Not a step of the run; it counts in the fit and for the suspects all the same.", "The suspects tell what it means.",
                "",
            )
            for i in range(len(extra))
        ]  # fmt: skip

    # -- readings ----------------------------------------------------------------

    def put(self, row: int, text: str) -> None:
        """Type a reading at a row; an empty text takes it back.

        Raises
        ------
        InvalidQuantity
            If the text is not a quantity in the row's unit.
        """
        rows = self.rows()
        if not 0 <= row < len(rows):
            raise InvalidReadings(f"The run has {len(rows)} rows; there is no row {row + 1}.")
        step = rows[row].step
        key = step_key(step)
        if not text.strip():
            if self.taken.pop(key, None) is not None and not rows[row].planned:
                self.asked[key] = Taken(tuple(step.apply.items()), step.probe, step.unit, "", 0.0)
            return
        value = parse_quantity(text, step.unit, f"Reading {row + 1}")
        self._room(1)
        self.taken[key] = Taken(tuple(step.apply.items()), step.probe, step.unit, text.strip(), value)

    def ask(self, volts: dict[str, float]) -> int:
        """Add a setting to the run; the row it stands at."""
        t = Taken(tuple((n, float(v)) for n, v in volts.items()), OUTPUT_PROBE, "V", "", 0.0)
        known = {step_key(r.step): i for i, r in enumerate(self.rows())}
        if t.key in known:
            return known[t.key]
        self._room(1)
        self.asked[t.key] = t
        return len(self.rows()) - 1

    def paste(self, row: int, text: str) -> int:
        """Fill readings downward from a row, or take a whole table with a heading; how many were read.

        Nothing is taken unless all of it can be.
        """
        lines = [line for line in text.replace("\r", "\n").split("\n") if line.strip()]
        if not lines:
            raise InvalidReadings("What was pasted is empty.")
        if "output" in lines[0].casefold():
            return self.take(parse_readings(text, self.design, "What was pasted"))
        rows = self.rows()
        if row + len(lines) > len(rows):
            raise InvalidReadings(
                f"{len(lines)} readings were pasted at row {row + 1}, but the run ends at row {len(rows)}; a table with a heading adds rows."
            )
        fresh = {}
        for k, line in enumerate(lines):
            cells = [c for c in line.replace(";", "\t").split("\t") if c.strip()]
            if len(cells) != 1:
                raise InvalidReadings(
                    f"Line {k + 1} of what was pasted has {len(cells)} cells; a column of readings, or a table with a heading, is wanted."
                )
            step = rows[row + k].step
            where = f"Line {k + 1} of what was pasted"
            value = number(cells[0], "\t", where) if step.unit == "V" else parse_quantity(cells[0], step.unit, where)
            fresh[step_key(step)] = Taken(tuple(step.apply.items()), step.probe, step.unit, cells[0].strip(), value)
        self.taken.update(fresh)
        return len(fresh)

    def take(self, readings: Readings) -> int:
        """Every reading of a file; how many. Of several at one setting the mean is taken, its uncertainty that of a mean."""
        readings = _averaged(readings)
        self._room(readings.count)
        for i in range(readings.count):
            apply = tuple(zip(readings.names, map(float, readings.volts[i]), strict=True))
            value = float(readings.output[i])
            u = None if readings.uncertainty is None else float(readings.uncertainty[i])
            t = Taken(apply, OUTPUT_PROBE, "V", f"{value:.6g}", value, u)
            self.taken[t.key] = t
        return readings.count

    def _room(self, more: int) -> None:
        if len(self.taken) + len(self.asked) + more > MOST_READINGS:
            raise InvalidReadings(f"The run holds {MOST_READINGS} readings, the most it takes.")

    def clear(self) -> dict[tuple, Taken]:
        """Take every reading away; what they were, to bring back."""
        gone, self.taken, self.asked = self.taken, {}, {}
        return gone

    def readings(self) -> Readings:
        """The readings of the output, for the fit."""
        names = self.design.signal_names
        rows = [
            (i, r) for i, r in enumerate(self.rows()) if r.taken and r.step.probe == OUTPUT_PROBE and r.step.unit == "V"
        ]
        volts = np.array([[r.step.apply.get(n, 0.0) for n in names] for _, r in rows]).reshape(-1, len(names))
        output = np.array([r.taken.value for _, r in rows if r.taken])
        stated = [r.taken.uncertainty for _, r in rows if r.taken]
        guess = self.meter.standard_uncertainty(output)
        u = np.array([g if s is None else s for s, g in zip(stated, guess, strict=True)])
        return Readings(names, volts, output, u, tuple(i + 1 for i, _ in rows))

    def to_csv(self) -> str:
        """The readings of the output as the readings file holds them."""
        r = self.readings()
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow([*r.names, "output", "uncertainty"])
        for volts, y, u in zip(
            r.volts, r.output, r.uncertainty if r.uncertainty is not None else r.output, strict=True
        ):
            writer.writerow([f"{x:.9g}" for x in (*volts, y, u)])
        return out.getvalue()

    def document(self) -> dict[str, Any]:
        """All of it as plain data, to be kept with the sheet."""
        return {
            "meter": self.meter.text, "taken": [_plain(t) for t in self.taken.values()],
            "asked": [_plain(t) for t in self.asked.values()], **({"limits": dict(self.limits)} if self.limits else {}),
        }  # fmt: skip

    def take_up(self, document: dict[str, Any]) -> None:
        """The readings and the meter that `document` gave, in place of those here; none at all for `{}`.

        Raises
        ------
        InvalidReadings, InvalidQuantity
            If it is not one; nothing is changed then.
        """
        meter = parse_meter(document["meter"]) if isinstance(document.get("meter"), str) else Meter()
        sides = []
        for side in ("taken", "asked"):
            held = document.get(side, [])
            if not isinstance(held, list) or len(held) > MOST_READINGS:
                raise InvalidReadings(f"The readings kept hold no list of at most {MOST_READINGS} under {side!r}.")
            sides.append({t.key: t for t in map(_taken, held)})
        limits = document.get("limits", {})
        if not isinstance(limits, dict) or not all(
            isinstance(x, str) and len(x) <= 80 for pair in limits.items() for x in pair
        ):
            raise InvalidReadings("The limits kept with the readings are not understood.")
        for name, text in limits.items():
            parse_limits(text, 1.0, name)
        self.taken, self.asked = sides
        self.limits = dict(limits)
        if meter != self.meter:
            self.restate(meter)

    def restore(self, text: str) -> int:
        """Readings kept earlier as `to_csv` wrote them."""
        count = self.take(parse_readings(text, self.design, "The readings kept"))
        for key, t in self.taken.items():
            if t.uncertainty is not None:
                self.taken[key] = replace(t, text=f"{t.value:.6g}")
        return count


def _averaged(readings: Readings) -> Readings:
    """One row a setting; repeats averaged, by their uncertainty where it is stated."""
    keys, back = np.unique(readings.volts, axis=0, return_inverse=True)
    if len(keys) == readings.count:
        return readings
    back = back.reshape(-1)
    order = np.argsort([int(np.flatnonzero(back == k)[0]) for k in range(len(keys))])  # as the file has them
    weight = np.ones(readings.count) if readings.uncertainty is None else readings.uncertainty**-2.0
    total = np.bincount(back, weight)
    mean = np.bincount(back, weight * readings.output) / total
    u = None if readings.uncertainty is None else total[order] ** -0.5
    return Readings(readings.names, keys[order], mean[order], u, tuple(range(1, len(keys) + 1)), readings.unnamed)


def as_text(document: dict[str, Any]) -> tuple[str, str]:
    """Readings that a sheet holds, for the log: those of the output as a readings file, the others a line each.

    Raises
    ------
    InvalidReadings
        If `document` holds no readings.
    """
    held = [_taken(t) for t in document.get("taken", ()) or ()]
    ours = [t for t in held if t.probe == OUTPUT_PROBE and t.unit == "V"]
    names = list(dict.fromkeys(n for t in ours for n, _ in t.apply))
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    stated = any(t.uncertainty is not None for t in ours)
    writer.writerow([*names, "output", *(["uncertainty"] if stated else [])])
    for t in ours:
        volts = dict(t.apply)
        u = Meter().standard_uncertainty(t.value) if t.uncertainty is None else t.uncertainty
        writer.writerow([f"{x:.9g}" for x in (*(volts.get(n, 0.0) for n in names), t.value, *([u] if stated else []))])
    others = [t for t in held if t not in ours]
    return out.getvalue() if ours else "", "\n".join(f"{t.probe}: {t.text} ({t.value:.6g} {t.unit})" for t in others)


def _plain(t: Taken) -> dict[str, Any]:
    return {
        "apply": dict(t.apply), "probe": t.probe, "unit": t.unit, "text": t.text, "value": t.value, "uncertainty": t.uncertainty,
    }  # fmt: skip


def _taken(held: Any) -> Taken:
    """One reading kept, checked as if it came from anywhere: it may have come in a notebook file."""
    try:
        apply = tuple((str(n), float(v)) for n, v in held["apply"].items())
        words = [held[k] for k in ("probe", "unit", "text")]
        u = held["uncertainty"]
        numbers = [float(held["value"]), *([] if u is None else [float(u)])]
        if not (all(isinstance(w, str) and len(w) <= 200 for w in words) and len(apply) <= 64):
            raise ValueError
        if not all(map(math.isfinite, (*numbers, *(v for _, v in apply)))) or (u is not None and numbers[1] <= 0):
            raise ValueError
    except (TypeError, ValueError, KeyError, AttributeError, OverflowError):
        raise InvalidReadings("One of the readings kept is not understood.") from None
    return Taken(apply, *words, *numbers)
