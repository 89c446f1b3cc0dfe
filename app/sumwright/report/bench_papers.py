"""Papers of the bench: the bring-up sheet with blanks to fill in, and the calibration record of a board as measured.

They are made from the documents of `sumwright plan --json` and `sumwright diagnose --json`,
so that what is printed is what was computed.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any

from sumwright.engine.analysis import Analysis
from sumwright.engine.bench.fit import headline
from sumwright.engine.cautions import cautions
from sumwright.engine.stage import Design
from sumwright.quantity import THIN, format_fixed, format_quantity, format_resistor

from .axes import Scale
from .document import about, equation, render
from .drawing import INK, LINE, RAISED, RED, SOFT, Drawing
from .schematic import SYMBOLS, schematic
from .tables import Column, Table

VERDICT_WORDS = ("in", "out", "undecided")
LEAST_BITS = 0.01  # of a next reading: one that tells less is not worth taking


def bring_up_sheet(
    analysis: Analysis, plan: Mapping[str, Any] | Sequence[Mapping[str, Any]], *, symbols: str = "iec", author: str | None = None,
    now: datetime | None = None,
) -> str:  # fmt: skip
    """The run plan as a sheet to be filled in by hand, HTML.

    Parameters
    ----------
    analysis : Analysis
    plan : mapping or sequence
        The steps, or a document with them under `steps`; each has `number`, `apply`,
        `probe`, `expect`, `low`, `high`, `unit`, `why`, `miss`, and perhaps `title`,
        `setup` and `caution`.
    """
    steps = plan["steps"] if isinstance(plan, Mapping) else plan
    design = analysis.design
    return render(
        "bring_up.html", "bring-up sheet", about(design, author, now), equation=equation(design),
        schematic=schematic(design, analysis.dc, symbols=symbols).svg(), symbols=SYMBOLS[symbols],
        cautions=cautions(analysis), steps=[_step(s) for s in steps],
    )  # fmt: skip


def _step(step: Mapping[str, Any]) -> dict[str, Any]:
    unit = step["unit"]

    def shown(value: float | None) -> str:
        if value is None:
            return ""
        return format_fixed(value, unit) if unit == "V" else format_quantity(value, unit, 4)

    return {
        "number": step["number"], "apply": _applied(step["apply"]), "probe": step["probe"], "expect": shown(step["expect"]),
        "low": shown(step["low"]), "high": shown(step["high"]), "why": step["why"], "miss": step["miss"],
        "title": step.get("title", ""), "setup": step.get("setup", ""), "caution": step.get("caution", ""),
    }  # fmt: skip


def _applied(volts: Mapping[str, float] | str | None) -> str:
    if isinstance(volts, str):
        return volts
    live = {k: v for k, v in (volts or {}).items() if v}
    if live:
        return ", ".join(f"{k} {format_fixed(v, 'V')}" for k, v in live.items())
    return f"every signal at 0{THIN}V" if volts else "–"


def calibration_record(
    design: Design, diagnosis: Mapping[str, Any], readings: Sequence[Mapping[str, float]], *,
    board: str = "", meter: str = "", author: str | None = None, now: datetime | None = None,
) -> str:  # fmt: skip
    """A board's weights as measured, with their uncertainty and verdicts, HTML.

    Parameters
    ----------
    design : Design
    diagnosis : mapping
        The document of `sumwright diagnose --json`.
    readings : sequence of mapping
        One a row: signals [V], `output` [V] and perhaps `uncertainty` [V].
    board, meter : str, optional
        Which board, and the meter's own statement (type, uncertainty, when calibrated); blanks to fill in if not given.
    """
    fit, verdicts = diagnosis["fit"], diagnosis["verdicts"]
    rows = []
    for s in design.signals:
        rows.append(
            _row(
                s.name,
                s.weight,
                fit["weights"].get(s.name),
                diagnosis.get("limits", {}).get(s.name),
                verdicts.get(s.name, ""),
            )
        )
    rows.append(
        _row(
            "offset, V",
            design.target.offset,
            fit["offset"],
            diagnosis.get("limits", {}).get("offset"),
            diagnosis.get("offset_verdict", ""),
        )
    )
    weights = Table(
        "fitted",
        "Fitted weights",
        _columns([r[5] for r in rows]),
        tuple(rows),
        marked=frozenset(i for i, r in enumerate(rows) if r[-1] == "out"),
    )
    words, offset = [*verdicts.values()], diagnosis.get("offset_verdict", "")
    counts = {word: sum(v == word for v in (*words, offset)) for word in VERDICT_WORDS}
    passed = counts["out"] == 0 and counts["undecided"] == 0
    ahead = diagnosis.get("next_reading") if diagnosis.get("next_reading_bits", 1.0) >= LEAST_BITS else None
    return render(
        "calibration.html", "calibration record", about(design, author, now), board=board, meter=meter, passed=passed, headline=headline(words, offset),
        count=", ".join(f"{n} {word}" for word, n in counts.items()), statement=_statement(readings, meter), weights=weights,
        fit_note=_fit_note(fit), notes=list(diagnosis.get("notes", ())), chart=_chart(rows[:-1]).svg(), suspects=_suspects(diagnosis.get("suspects", ())),
        next=_applied(ahead) if ahead else "", readings=_readings(design, readings, fit.get("left_out", ())),
    )  # fmt: skip


def readings_rows(readings, meter=None) -> list[dict[str, float]]:
    """`engine.bench.readings.Readings` as `calibration_record` takes them; `meter` states what they do not."""
    rows = []
    for i in range(readings.count):
        row = {n: float(v) for n, v in zip(readings.names, readings.volts[i], strict=True) if n not in readings.unnamed}
        row["output"] = float(readings.output[i])
        if readings.uncertainty is not None:
            row["uncertainty"] = float(readings.uncertainty[i])
        elif meter is not None:
            row["uncertainty"] = float(meter.standard_uncertainty(row["output"]))
        rows.append(row)
    return rows


def _row(name, wanted, found, limit, verdict) -> tuple[Any, ...]:
    found, limit = found or {}, limit or {}
    return (
        name,
        wanted,
        limit.get("low"),
        limit.get("high"),
        found.get("value"),
        found.get("standard_uncertainty"),
        verdict,
    )


def _columns(uncertainties: Sequence[float | None]) -> tuple[Column, ...]:
    """Columns of the fitted weights; what was measured is written down to the second figure of its uncertainty."""
    least = min((u for u in uncertainties if u and math.isfinite(u)), default=1e-4)
    places = max(5, min(8, 1 - math.floor(math.log10(least))))
    return (
        Column("signal"), Column("wanted", "", "fixed", 4, True), Column("parts allow, from", "", "fixed", 5, True), Column("to", "", "fixed", 5, True),
        Column("measured", "", "fixed", places, True), Column("u", "", "figures", 2), Column("verdict"),
    )  # fmt: skip


def _statement(readings, meter: str) -> str:
    stated = [r["uncertainty"] for r in readings if r.get("uncertainty")]
    said = f"{len(readings)} readings. "
    if stated:
        low, high = min(stated), max(stated)
        span = (
            format_quantity(low, "V", 2)
            if low == high
            else f"{format_quantity(low, 'V', 2)} to {format_quantity(high, 'V', 2)}"
        )
        said += f"Standard uncertainty of a reading, as stated: {span}."
    else:
        said += (
            "No uncertainty of the readings was stated; their scatter was estimated from the fit, and Student's t used."
        )
    return said + ("" if meter else " The meter's own statement is to be filled in above.")


def _fit_note(fit) -> str:
    chi, dof, p = fit.get("chi_squared"), fit.get("degrees_of_freedom"), fit.get("p_value")
    if not dof:
        return "As many readings as unknowns: the fit cannot be tested."
    if chi is None:
        return f"Least squares with {dof} degrees of freedom; the readings' own scatter stands for their uncertainty, so it cannot test the fit."
    said = f"Least squares: χ² = {chi:.3g} with {dof} degrees of freedom"
    return said + (f", p = {p:.2g}." if p is not None else ".")


def _about(suspect) -> str:
    """The estimate in its unit: ohm, but volts of a reference."""
    value = suspect["estimate"]
    return format_fixed(value, "V") if suspect.get("unit") == "V" else format_resistor(value, 3)


def _suspects(suspects) -> Table | None:
    rows = tuple(
        (
            s["fault"],
            s["part"],
            s["probability"],
            None if s.get("estimate") is None else _about(s),
            s["explain"],
        )
        for s in suspects[:6]
    )
    if not rows or (rows[0][0] == "none" and rows[0][2] > 0.95):
        return None
    columns = (
        Column("fault"),
        Column("part"),
        Column("probability", "", "percent", 1),
        Column("estimate"),
        Column("why"),
    )
    return Table("suspects", "Suspects", columns, rows)


def _readings(design: Design, readings, left_out) -> Table:
    names = [n for n in design.signal_names if any(n in r for r in readings)]
    stated = any(r.get("uncertainty") for r in readings)
    columns = [
        Column("no", "", "fixed", 0),
        *(Column(n, "V", "fixed", 4) for n in names),
        Column("output", "V", "fixed", 5),
    ]
    if stated:
        columns.append(Column("u", "V", "scaled", 2))
    out = {x["row"]: x["why"] for x in left_out}
    if out:
        columns.append(Column("left out of the fit"))
    rows = [
        (i, *(r.get(n, 0.0) for n in names), r["output"], *([r.get("uncertainty")] if stated else []), *([out.get(i - 1, "")] if out else []))
        for i, r in enumerate(readings, 1)
    ]  # fmt: skip
    return Table("readings", "Readings", tuple(columns), tuple(rows))


def _chart(rows, width: float = 680.0) -> Drawing:
    """Departures from the nominal weight within their limits, one row a signal."""
    said = "; ".join(f"{r[0]} {format_fixed(r[4], '', 5, sign=True)} {r[6]}" for r in rows)
    d = Drawing(width, max(1, len(rows)) * 26 + 10, f"Measured weights against their limits: {said}.")
    x = Scale(-1.0, 1.0, 190.0, width - 90.0)
    for i, (name, wanted, low, high, value, u, verdict) in enumerate(rows):
        y = i * 26 + 16.0
        if value is None:
            d.text(180, y + 5, name, anchor="end")
            d.text(x(0), y + 5, "not told by these readings", anchor="middle", fill=SOFT)
            continue
        middle = wanted if low is None else (low + high) / 2
        half = 0.0 if low is None else (high - low) / 2
        reach = max(half, abs(value - middle) + 2 * (u or 0.0), 1e-12) * 1.15
        d.text(180, y + 5, name, anchor="end")
        if half:
            d.rect(x(-half / reach), y - 8, x(half / reach) - x(-half / reach), 16, fill=RAISED)
            for side in (-1, 1):
                d.line(x(side * half / reach), y - 9, x(side * half / reach), y + 9, width=1.2)
        d.line(x(0), y - 5, x(0), y + 5, stroke=LINE, width=1)
        at = (value - middle) / reach
        colour = RED if verdict == "out" else INK
        if u and math.isfinite(u):
            d.line(x(at - 2 * u / reach), y, x(at + 2 * u / reach), y, stroke=colour, width=2)
        d.dot(x(at), y, 4, fill=colour)
        d.text(width - 80, y + 5, verdict, bold=verdict == "out", fill=RED if verdict == "out" else SOFT)
    return d


__all__ = ["bring_up_sheet", "calibration_record", "readings_rows"]
