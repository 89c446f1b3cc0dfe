"""The tables of a report, each filled from one analysis and nothing else."""

from __future__ import annotations

import dataclasses
from typing import Any

from sumwright.engine.analysis import Analysis
from sumwright.engine.designators import designators
from sumwright.engine.response import at_signal_frequencies
from sumwright.engine.stage import cell_name
from sumwright.files.bill import bill as bill_of
from sumwright.quantity import THIN, format_fixed, format_percent, format_quantity

from .formulas import derivation
from .tables import Column, Measured, Table

POINTS = ("present", "highest", "lowest")
_MATRIX_MOST = 7  # signals that fit side by side on paper
VOLTS: dict[str, Any] = {"unit": "V", "form": "fixed", "decimals": 3}
WEIGHT: dict[str, Any] = {"unit": "", "form": "fixed", "decimals": 4, "sign": True}

# What each figure of an op amp means, in the order a data sheet has them.
OP_AMP_FIGURES = (
    ("open_loop_gain", "open-loop gain at DC", "V/V"), ("gain_bandwidth", "gain-bandwidth product", "Hz"),
    ("second_pole", "second pole", "Hz"), ("slew_rate", "slew rate", "V/µs"),
    ("input_resistance", "resistance between the inputs", "Ω"),
    ("differential_capacitance", "capacitance between the inputs", "F"),
    ("common_mode_capacitance", "capacitance of each input to ground", "F"),
    ("output_resistance", "output resistance, open loop", "Ω"), ("offset_voltage", "offset voltage, limit ±", "V"),
    ("offset_drift", "offset drift, limit ±", "V/K"), ("bias_current", "bias current, limit ±", "A"),
    ("offset_current", "offset current, limit ±", "A"), ("cmrr", "CMRR", "V/V"), ("psrr", "PSRR", "V/V"),
    ("noise_voltage", "voltage noise", "V/√Hz"), ("noise_voltage_corner", "its 1/f corner", "Hz"),
    ("noise_current", "current noise, each input", "A/√Hz"), ("noise_current_corner", "its 1/f corner", "Hz"),
    ("dropout_high", "least distance of the output from the + rail", "V"),
    ("dropout_low", "least distance of the output from the − rail", "V"),
    ("dropout_resistance", "more of it per ampere", "Ω"),
    ("common_mode_high", "least distance of the inputs from the + rail", "V"),
    ("common_mode_low", "least distance of the inputs from the − rail", "V"),
    ("output_current", "most output current", "A"), ("supply_least", "least total supply", "V"),
    ("supply_most", "most total supply", "V"), ("supply_current", "supply current, each amplifier", "A"),
    ("thermal_resistance", "thermal resistance, junction to ambient", "K/W"), ("junction_most", "most junction", "°C"),
    ("per_package", "amplifiers in a package", ""),
)  # fmt: skip


def all_tables(analysis: Analysis, drawn: dict[str, Any] | None = None) -> tuple[Table, ...]:
    """Every table of a report in its order; `drawn` is of `boards.monte_carlo`."""
    return (
        signals(analysis), requirements(analysis), parts(analysis), bill(analysis), weights(analysis),
        formula_table(analysis), margins(analysis), headroom(analysis), corners(analysis), nodes(analysis),
        branches(analysis), error_summary(analysis, drawn), error_terms(analysis), bands(analysis), loops(analysis),
        noise_terms(analysis), heat(analysis), op_amp(analysis), *([cables(analysis)] if len(analysis.design.signals) > 1 else []),
    )  # fmt: skip


def signals(analysis: Analysis) -> Table:
    d = analysis.design
    rows = [
        (s.name, s.weight, s.low, s.high, s.value, s.source_resistance, s.frequency or None) for s in d.signals
    ]  # fmt: skip
    columns = (
        Column("signal"), Column("wanted weight", **WEIGHT), Column("from", **VOLTS), Column("to", **VOLTS),
        Column("present value", **VOLTS), Column("source", "Ω", "figures", 3), Column("up to", "Hz", "figures", 3),
    )  # fmt: skip
    return Table("signals", "Signals", columns, tuple(rows))


def requirements(analysis: Analysis) -> Table:
    d = analysis.design
    t, s = d.target, d.supply
    rows: list[tuple[str, str]] = [("offset of the output", format_quantity(t.offset, "V", 4, trim=True))]
    if t.low is not None or t.high is not None:
        rows.append(("output window", f"{format_fixed(t.low, 'V')} to {format_fixed(t.high, 'V')}"))
    for value, word, unit in (
        (t.accuracy, "accuracy, ±", "V"), (t.noise, "noise, RMS", "V"), (t.bandwidth, "bandwidth", "Hz"),
    ):  # fmt: skip
        rows.append((word, "not asked" if value is None else format_quantity(value, unit, 3, trim=True)))
    rows.append(
        (
            "rails",
            f"{format_fixed(s.high, 'V', 2, sign=True)}, {format_fixed(s.low, 'V', 2, sign=True)}, ±{format_percent(s.tolerance)}",
        )
    )
    load = [] if d.load.resistance is None else [format_quantity(d.load.resistance, "Ω", 3, trim=True)]
    if d.load.capacitance:
        load.append(format_quantity(d.load.capacitance, "F", 3, trim=True))
    rows.append(("load", " ∥ ".join(load) or "none"))
    if d.reference:
        r = d.reference
        rows.append(
            (
                "reference",
                f"{format_fixed(r.voltage, 'V')} ±{format_percent(r.tolerance)} behind {format_quantity(r.source_resistance, 'Ω', 3, trim=True)}",
            )
        )
    a = d.ambient
    rows.append(("ambient", f"{a.low:g} °C to {a.high:g} °C, nominal {a.nominal:g} °C".replace("-", "−")))
    rows.append(
        (
            "noise band",
            f"{format_quantity(d.noise_band[0], 'Hz', 3, trim=True)} to {format_quantity(d.noise_band[1], 'Hz', 3, trim=True)}",
        )
    )
    rows.append(
        ("capacitance of the board at the inverting node", format_quantity(d.stray_capacitance, "F", 3, trim=True))
    )
    return Table("requirements", "Requirements and surroundings", (Column("quantity"), Column("value")), tuple(rows))


def parts(analysis: Analysis) -> Table:
    """Every resistor and capacitor: where it sits and what it carries."""
    d = analysis.design
    names = designators(d, analysis.net)
    power = {r.name: r for r in analysis.power.resistors}
    rows: list[tuple[Any, ...]] = []
    for name, part in zip(names.resistors, analysis.net.parts, strict=True):
        if name:
            p = power[part.name]
            rows.append((name, part.name, part.resistance, None, p.dissipation_most, p.rating))
    for k, name in enumerate(names.capacitors):
        if name:
            where = "across the feedback" + (f", cell {k + 1}" if len(d.cells) > 1 else "")
            rows.append((name, where, None, d.cells[k].feedback_capacitance, None, None))
    columns = (
        Column("part"), Column("place"), Column("resistance", "", "resistor"), Column("capacitance", "F", "figures", 3),
        Column("dissipates at most", "W", "scaled", 4), Column("may", "W", "scaled"),
    )  # fmt: skip
    if not any(names.capacitors):
        rows = [(*r[:3], *r[4:]) for r in rows]
        return Table("parts", "Values", (*columns[:3], *columns[4:]), tuple(rows))
    return Table("parts", "Values", columns, tuple(rows))


def bill(analysis: Analysis) -> Table:
    """Bill of materials: parts that are bought under one value together."""
    rows: list[tuple[Any, ...]] = []
    for line in bill_of(analysis.design):
        rows.append(
            (
                line.count,
                f"{line.value} {line.part}" if line.part != "op amp" else line.value,
                ", ".join(line.designators),
                line.rating,
                line.note,
            )
        )
    columns: tuple[Column, ...] = (
        Column("count", "", "fixed", 0),
        Column("part"),
        Column("which"),
        Column("rating"),
        Column("note"),
    )
    if not any(r[-1] for r in rows):
        columns, rows = columns[:-1], [r[:-1] for r in rows]
    return Table("bill", "Bill of materials", columns, tuple(rows), "Sockets, connectors and the board are not listed.")


def weights(analysis: Analysis) -> Table:
    d, dc = analysis.design, analysis.dc
    rows = []
    for i, s in enumerate(d.signals):
        made = float(dc.weights[i])
        rows.append((s.name, s.weight, made, made / s.weight - 1 if s.weight else None, float(dc.contributions[i])))
    rows.append(
        ("offset", d.target.offset, dc.offset, dc.offset / d.target.offset - 1 if d.target.offset else None, dc.offset)
    )
    columns = (
        Column("signal"), Column("wanted", **WEIGHT), Column("made", "", "fixed", 5, True),
        Column("off by", "", "percent", 3, True), Column("adds to the output", "V", "fixed", 4, True),
    )  # fmt: skip
    note = (
        f"Made: with the op amp's finite gain and resistances, the sources' and the load. The offset is in volts. "
        f"Sum {format_fixed(dc.unclipped_output, 'V', 4)}, wanted {format_fixed(dc.ideal_output, 'V', 4)}"
        + (f"; the output clips {dc.clipped} at {format_fixed(dc.output, 'V', 4)}." if dc.clipped != "no" else ".")
    )
    return Table("weights", "Weights, wanted and made", columns, tuple(rows), note)


def formula_table(analysis: Analysis) -> Table:
    rows = [
        (line.name + (f"({line.of})" if line.name == "w" else ""), line.formula, line.numbers, line.result)
        for line in derivation(analysis.design)
    ]
    columns = (Column("of"), Column("follows as"), Column("in numbers"), Column("is"))
    return Table("formulas", "How each weight follows", columns, tuple(rows))


def margins(analysis: Analysis) -> Table:
    rows, short = [], []
    for i, c in enumerate(analysis.checks):
        value, limit, margin = (Measured(x, c.unit) for x in (c.value, c.limit, c.margin))
        rows.append((c.title, c.status, margin, value, limit, c.unit, f"{c.why} {c.advice}".strip()))
        if c.status == "short":
            short.append(i)
    columns = (
        Column("check"), Column("word"), Column("margin", "", "measured", sign=True), Column("value", "", "measured", only_file=True),
        Column("limit", "", "measured", only_file=True), Column("unit", only_file=True), Column("why, and what would cure it"),
    )  # fmt: skip
    return Table("margins", "Margins, tightest first", columns, tuple(rows), marked=frozenset(short))


def headroom(analysis: Analysis) -> Table:
    rows = []
    for k, c in enumerate(analysis.headroom.cells):
        rows.append(
            (f"{cell_name(k)}, output", c.lowest, c.highest, c.limit_low, c.limit_high, c.margin_low, c.margin_high)
        )
        rows.append(
            (f"{cell_name(k)}, inputs", c.inputs_lowest, c.inputs_highest, c.common_mode_limit_low, c.common_mode_limit_high,
             c.common_mode_margin_low, c.common_mode_margin_high)
        )  # fmt: skip
    columns = (
        Column("node"), Column("lowest", **VOLTS), Column("highest", **VOLTS), Column("limit low", **VOLTS), Column("limit high", **VOLTS),
        Column("room below", "V", "fixed", 3, True), Column("room above", "V", "fixed", 3, True),
    )  # fmt: skip
    short = frozenset(i for i, r in enumerate(rows) if min(r[5], r[6]) < 0)
    return Table(
        "headroom", "Headroom over all corners", columns, tuple(rows),
        "Every combination of the signals' ends; rails at their least favourable tolerance; the dropout at the current of that corner.", short,
    )  # fmt: skip


def corners(analysis: Analysis) -> Table:
    room = analysis.headroom
    rows = tuple(
        (name, float(h), float(low))
        for name, h, low in zip(analysis.design.signal_names, room.corner_high, room.corner_low, strict=True)
    )
    return Table(
        "corners",
        "Where the extremes lie",
        (Column("signal"), Column("at the highest", **VOLTS), Column("at the lowest", **VOLTS)),
        rows,
    )


def nodes(analysis: Analysis) -> Table:
    rows = tuple(
        (
            cell_name(k),
            c.minus_voltage,
            c.plus_voltage,
            c.output_voltage,
            c.output_current,
            c.feedback_current,
            "no" if c.clipped == "no" else c.clipped,
        )
        for k, c in enumerate(analysis.dc.cells)
    )
    columns = (
        Column("cell"), Column("− input", "V", "fixed", 4), Column("+ input", "V", "fixed", 4), Column("output", "V", "fixed", 4),
        Column("output current", "A", "scaled", 4), Column("feedback current", "A", "scaled", 4), Column("clips"),
    )  # fmt: skip
    return Table("nodes", "Nodes at the present values", columns, rows)


def branches(analysis: Analysis) -> Table:
    names = designators(analysis.design, analysis.net).resistors
    rows = []
    for i, part in enumerate(analysis.net.parts):
        c = analysis.dc.cells[part.cell]
        current = {
            "minus_ground": c.minus_ground_current, "plus_ground": c.plus_ground_current, "feedback": c.feedback_current,
        }.get(part.kind)  # fmt: skip
        if current is None:
            current = c.leg_currents[part.source]
        way = {"feedback": "node to output", "minus_ground": "node to ground", "plus_ground": "node to ground"}.get(
            part.kind, "source to node"
        )
        rows.append((names[i] or "wire", part.name, current, way))
    columns = (Column("part"), Column("place"), Column("current", "A", "scaled", 4), Column("counted from"))
    return Table("branches", "Currents at the present values", columns, tuple(rows))


def error_summary(analysis: Analysis, drawn: dict[str, Any] | None = None) -> Table:
    rows = []
    for point in POINTS:
        b = analysis.errors[point]
        row = [point, b.ideal_output, b.shift, b.expanded_95, b.worst_case]
        if drawn:
            m = drawn[point]
            row += [m.mean, m.standard_deviation, m.low_95, m.high_95, m.yield_]
        rows.append(tuple(row))
    scaled: dict[str, Any] = {"unit": "V", "form": "scaled", "decimals": 4}
    columns = [
        Column("at", "", "text"), Column("ideal output", **VOLTS), Column("known shift", sign=True, **scaled), Column("95 % ±", **scaled),
        Column("worst case ±", **scaled),
    ]  # fmt: skip
    if drawn:
        columns += [
            Column("drawn: mean", sign=True, **scaled), Column("deviation", **scaled), Column("95 % from", sign=True, **scaled),
            Column("to", sign=True, **scaled), Column("yield", "", "percent", 2),
        ]  # fmt: skip
    first = next(iter(drawn.values())) if drawn else None
    note = "Relative to the ideal output, at the present values and at the highest and lowest corner."
    if first is not None:
        drawn_boards = f"{first.draws:,}".replace(",", THIN)
        note += f" Drawn: {drawn_boards} boards, seed\u00a0{first.seed}."
    return Table("errors", "Error of the output", tuple(columns), tuple(rows), note)


def error_terms(analysis: Analysis) -> Table:
    budgets = [analysis.errors[p] for p in POINTS]
    order = sorted(
        range(len(budgets[0].terms)), key=lambda i: -max(b.terms[i].standard_uncertainty + abs(b.terms[i].shift) for b in budgets)
    )  # fmt: skip
    rows = []
    for i in order:
        t = budgets[0].terms[i]
        row: list[Any] = [t.name]
        for b in budgets:
            x = b.terms[i]
            row += [x.shift or None, x.limit_effect or None, x.standard_uncertainty or None]
        if any(v is not None for v in row[1:]):
            rows.append(tuple(row))
    columns = [Column("term")]
    for point in POINTS:
        columns += [
            Column(f"{point}: shift", "V", "figures", 3, True), Column("limit ±", "V", "figures", 3), Column("u", "V", "figures", 3),
        ]  # fmt: skip
    return Table(
        "terms", "Error budget by term", tuple(columns), tuple(rows),
        "Limit: change of the output with that quantity alone at its worse limit. u: standard uncertainty, the limit divided by √3 "
        "(JCGM 101:2008, 6.4.2); with temperature, times the root mean square of the ambient's departure over its largest. "
        "Terms that are nothing are left out. Worst case = Σ limits + |shift|; 95 % = 2·√Σu² (JCGM 100:2008, 5.1.2).",
    )  # fmt: skip


def bands(analysis: Analysis) -> Table:
    at = at_signal_frequencies(analysis.design)
    rows = tuple(
        (s.name, s.dc_gain, s.bandwidth_3db, a.frequency or None, a.amplitude_error if a.frequency else None, a.phase if a.frequency else None,
         a.error_while_moving if a.frequency else None)
        for s, a in zip(analysis.ac.signals, at, strict=True)
    )  # fmt: skip
    columns = (
        Column("signal"), Column("gain at DC", "", "fixed", 5, True), Column("down 3 dB at", "Hz", "figures", 3), Column("at its own", "Hz", "figures", 3),
        Column("gain off by", "", "percent", 4, True), Column("phase, °", "", "fixed", 3), Column("error while moving", "V", "figures", 3),
    )  # fmt: skip
    return Table(
        "bands", "Bandwidth of each signal", columns, rows,
        "Error while moving: the size of the difference between the output and an ideal one, the signal a sine over its whole range at its own frequency.",
    )  # fmt: skip


def loops(analysis: Analysis) -> Table:
    rows = tuple(
        (cell_name(k), c.noise_gain, c.crossover, c.phase_margin, c.gain_margin_db) for k, c in enumerate(analysis.ac.cells)
    )  # fmt: skip
    columns = (
        Column("cell"), Column("noise gain", "", "fixed", 4), Column("loop gain 1 at", "Hz", "figures", 4), Column("phase margin, °", "", "fixed", 1),
        Column("gain margin, dB", "", "fixed", 1),
    )  # fmt: skip
    return Table("loops", "Stability of each loop", columns, rows)


def noise_terms(analysis: Analysis) -> Table:
    n = analysis.noise
    total = n.rms**2
    order = sorted(n.terms, key=lambda t: -t.rms)
    rows = [(t.name, t.density_1khz, t.rms, t.rms**2 / total if total else None) for t in order if t.rms > 0]
    rows.append(("all together", n.density_1khz, n.rms, 1.0 if total else None))
    columns = (
        Column("term"), Column("at 1 kHz", "V/√Hz", "scaled", 4), Column("RMS over the band", "V", "scaled", 4), Column("share", "", "percent", 1),
    )  # fmt: skip
    note = f"Band {format_quantity(n.band[0], 'Hz', 3, trim=True)} to {format_quantity(n.band[1], 'Hz', 3, trim=True)}, at the output, at the nominal ambient."
    return Table("noise", "Noise by term", columns, tuple(rows), note)


def heat(analysis: Analysis) -> Table:
    rows = tuple((f"op amp, {a.name}", a.dissipation_most, a.junction) for a in analysis.power.op_amps)
    columns = (Column("part"), Column("dissipates at most", "W", "scaled"), Column("junction", "°C", "fixed", 1))
    return Table(
        "heat", "Heat", columns, rows,
        "Over the whole ranges of the signals, rails at their high tolerance, hottest ambient. The resistors' dissipation stands under Values.",
    )  # fmt: skip


def op_amp(analysis: Analysis) -> Table:
    amp = analysis.design.op_amp
    known = {f.name for f in dataclasses.fields(amp)}
    rows = []
    for key, words, unit in OP_AMP_FIGURES:
        if key in known:
            rows.append((words, _figure(getattr(amp, key), unit), key))
    return Table(
        "op_amp",
        f"Op amp: {amp.name}",
        (Column("figure"), Column("value"), Column("key in the design file")),
        tuple(rows),
    )


def _figure(value: float | None, unit: str) -> str:
    """One figure of an op amp as data sheets write it."""
    if value is None:
        return "not given"
    if unit in ("°C", "K/W", ""):
        return f"{value:g}{THIN}{unit}".strip()
    if unit == "V/µs":
        return f"{value / 1e6:g}{THIN}{unit}"
    if unit == "V/V":
        return f"{format_quantity(value, '', 4, trim=True)}{THIN}{unit}"
    return format_quantity(value, unit, 4, trim=True)


def cables(analysis: Analysis) -> Table:
    """What an unplugged source does to the weights of the others."""
    out = analysis.cable_out
    names = analysis.design.signal_names
    title = "With a cable out"
    rows: list[tuple[Any, ...]] = []
    if len(names) > _MATRIX_MOST:
        now = analysis.dc.weights
        for i, name in enumerate(out.names):
            moved = [0.0 if j == i else abs(float(out.open_weights[i, j] - now[j])) for j in range(len(names))]
            j = max(range(len(names)), key=moved.__getitem__)
            rows.append((name, names[j], float(now[j]), float(out.open_weights[i, j]), float(out.open_offset[i])))
        most = (
            Column("cable out"),
            Column("changes most"),
            Column("from", **WEIGHT),
            Column("to", **WEIGHT),
            Column("offset", **VOLTS),
        )
        return Table("cables", title, most, tuple(rows))
    for i, name in enumerate(out.names):
        w = [None if j == i else float(out.open_weights[i, j]) for j in range(len(names))]
        rows.append((name, *w, float(out.open_offset[i])))
    columns = (
        Column("cable out"),
        *(Column(f"w({n})", "", "fixed", 4, True) for n in names),
        Column("offset", **VOLTS),
    )
    return Table("cables", title, columns, tuple(rows))


__all__ = ["OP_AMP_FIGURES", "all_tables"]
