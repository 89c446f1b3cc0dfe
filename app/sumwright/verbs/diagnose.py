"""`sumwright diagnose`: what the readings say of a board."""

from __future__ import annotations

import argparse
import math
from pathlib import Path
from typing import Any

from sumwright.engine.bench.diagnose import Report, diagnose
from sumwright.engine.bench.readings import parse_limits, parse_meter
from sumwright.errors import SumwrightError, shown
from sumwright.files.readings import read_readings
from sumwright.quantity import format_fixed, format_resistor
from sumwright.verbs.common import add_design, add_json, load_design, plain, print_json, table


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    parser.add_argument(
        "readings", metavar="READINGS", type=Path,
        help="CSV: a column a signal, output, and perhaps uncertainty (standard, V); one line a reading",
    )  # fmt: skip
    parser.add_argument(
        "--meter", metavar="STATEMENT",
        help="the meter's accuracy as its data sheet states it, as '0.05 %% + 0.01 %% of 20 V', where the file states none",
    )  # fmt: skip
    parser.add_argument(
        "--limit", metavar="NAME=LOW..HIGH", action="append", default=[],
        help="judge this weight (or offset) against these limits, or ±2 %% of what is wanted, instead of what the parts allow; "
        "once a signal",
    )  # fmt: skip
    add_json(parser)


def run(args: argparse.Namespace) -> int:
    design = load_design(args.design)
    meter = None if args.meter is None else parse_meter(args.meter)
    limits = dict(_limit(text, design) for text in args.limit)
    readings = read_readings(args.readings, design)
    report = diagnose(design, readings, meter=meter, limits=limits)
    document = to_json(report)
    if args.json:
        print_json(document)
    else:
        print(_tables(design, report))
    return 0


def _limit(text, design):
    name, equals, span = text.rpartition("=")
    if not equals:
        raise SumwrightError(f"--limit is {shown(text)}; write NAME=LOW..HIGH, as north=0.24..0.26, or NAME=±2 %.")
    wanted = {s.name: s.weight for s in design.signals} | {"offset": design.target.offset}
    if name not in wanted:
        raise SumwrightError(f"--limit names {shown(name)}; it must be a signal of the design, or offset.")
    return name, parse_limits(span, wanted[name], name)


def to_json(report: Report) -> dict[str, Any]:
    """The document of `diagnose --json`; what the readings do not tell is null."""
    fit, names = report.fit, report.names
    pairs = [
        {"value": _leaf(v), "standard_uncertainty": _leaf(u), "expanded_95": _leaf(x)}
        for v, u, x in zip(fit.value, fit.standard_uncertainty, fit.expanded, strict=True)
    ]
    bands = [
        {"nominal": b.nominal, "low": v.low, "high": v.high, "guard": _leaf(v.guard), "more_readings": v.more}
        for b, v in zip(report.bands, report.verdicts, strict=True)
    ]
    return {
        "fit": {
            "weights": dict(zip(names[:-1], pairs[:-1], strict=True)),
            "offset": pairs[-1],
            "chi_squared": _leaf(fit.chi_squared),
            "degrees_of_freedom": fit.degrees_of_freedom,
            "p_value": _leaf(fit.p_value),
            "scatter": _leaf(fit.scatter),
            "coverage_factor": _leaf(fit.coverage_factor),
            "residuals": [_leaf(r) for r in fit.residuals],
            "undetermined": [n for n, ok in zip(names, fit.determined, strict=True) if not ok],
            "left_out": [x._asdict() for x in report.left_out],
        },
        "verdicts": {n: v.word for n, v in zip(names[:-1], report.verdicts, strict=False)},
        "offset_verdict": report.verdicts[-1].word,
        "limits": dict(zip(names, bands, strict=True)),
        "suspects": [s._asdict() for s in report.suspects],
        "next_reading": report.next_reading.volts,
        "next_reading_bits": report.next_reading.bits,
        "notes": list(report.notes),
    }


def _leaf(x):
    return None if x is None or not math.isfinite(x) else float(x)


def _about(s):
    if s.estimate is None:
        return ""
    return format_fixed(s.estimate, "V", 3) if s.unit == "V" else format_resistor(s.estimate, 3)


def _tables(design, report: Report) -> str:
    fit = report.fit
    rows = []
    for name, value, wide, v in zip(report.names, fit.value, fit.expanded, report.verdicts, strict=True):
        unit = "V" if name == report.names[-1] else ""
        more = f"{v.more} more would decide" if v.word == "undecided" and v.more else ""
        rows.append((
            name, format_fixed(value, unit, 5, sign=True), format_fixed(wide, unit, 5), format_fixed(v.low, unit, 5, sign=True),
            format_fixed(v.high, unit, 5, sign=True), v.word, more,
        ))  # fmt: skip
    text = [plain(design.title) or "Untitled", table(("", "fitted", "95 % ±", "allowed from", "to", "", ""), rows)]
    if fit.chi_squared is not None:
        p = "" if fit.p_value is None else f", p = {fit.p_value:.3g}"
        text.append(f"chi-squared {fit.chi_squared:.3g} on {fit.degrees_of_freedom} degrees of freedom{p}")
    text += [plain(n) for n in report.notes]
    listed = [
        (f"{s.probability:.3f}", s.fault, s.part, _about(s), str(s.group))
        for s in report.suspects
    ]  # fmt: skip
    text.append(table(("probability", "suspect", "", "about", "group"), listed, text_columns=3))
    first = [s for s in report.suspects if s.group == 1]
    text += [plain(s.explain) for s in first[:3]]
    if len(first) > 1:
        text.append("These readings do not tell the first group apart. " + plain(first[0].tell or first[1].tell))
    volts = ", ".join(f"{plain(n)} {format_fixed(v, 'V', 3)}" for n, v in report.next_reading.volts.items())
    text.append(f"Next reading: {volts} ({report.next_reading.bits:.2f} bit).")
    return "\n\n".join(text)
