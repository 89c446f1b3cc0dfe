"""`sumwright analyse`: everything the engine can say of a design."""

from __future__ import annotations

import argparse

import numpy as np

from sumwright.engine.analysis import Analysis
from sumwright.errors import SumwrightError
from sumwright.files.results import POINTS, to_json
from sumwright.quantity import THIN, format_fixed, format_percent, format_quantity
from sumwright.verbs.common import add_design, add_json, load_design, plain, print_json, table, whole

MOST_DRAWS = 10_000_000


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    add_json(parser)
    parser.add_argument("--draws", metavar="N", help="draw N boards at random (Monte Carlo) besides the error budget")
    parser.add_argument("--seed", metavar="S", help="where the draws start; the same seed draws the same boards (0)")
    parser.add_argument("--strict", action="store_true", help="exit with 1 when a check falls short")


def run(args: argparse.Namespace) -> int:
    draws = None if args.draws is None else whole(args.draws, "--draws", 2, MOST_DRAWS)
    if args.seed is not None and draws is None:
        raise SumwrightError("--seed is given without --draws; it says where the draws start.")
    seed = 0 if args.seed is None else whole(args.seed, "--seed", 0, 2**63 - 1)
    analysis = Analysis(load_design(args.design))
    # A stage without feedback has no ideal output; what comes out infinite is written as null.
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        drawn = None if draws is None else _draw(analysis, draws, seed)
        document = to_json(analysis, drawn)
    if args.json:
        print_json(document)
    else:
        print(_report(analysis, document))
    return 1 if args.strict and any(check.status == "short" for check in analysis.checks) else 0


def _draw(analysis: Analysis, draws: int, seed: int) -> dict:
    from sumwright.engine.boards import monte_carlo

    return monte_carlo(analysis.design, draws, seed)


# The readable tables --------------------------------------------------------------------------------


def _report(analysis: Analysis, document: dict) -> str:
    parts = [
        plain(analysis.design.title) or "Untitled",
        _verdict(analysis),
        _outputs(analysis),
        _signals(analysis, document),
        _cells(document),
        _headroom(document),
        _errors(document),
        _bands(document),
        _noise(document),
        _heat(document),
    ]
    return "\n\n".join(part for part in parts if part)


def _verdict(analysis: Analysis) -> str:
    rows = []
    notes = []
    for check in analysis.checks:
        value, limit = (_measure(x, check.unit) for x in (check.value, check.limit))
        rows.append((check.title, check.status, _measure(check.margin, check.unit, sign=True), value, limit))
        if check.status != "clear" and check.advice:
            notes.append(f"{check.title}: {check.why} {check.advice}")
    return "\n".join([table(("check", "", "margin", "value", "limit"), rows, text_columns=2), *map(plain, notes)])


def _measure(value: float | None, unit: str, sign: bool = False) -> str:
    if unit == "%":
        return format_percent(None if value is None else value / 100, 3, sign=sign)
    if unit == "°" or unit == "°C":
        return format_fixed(value, "", 1, sign=sign) + ("" if value is None else (THIN if unit == "°C" else "") + unit)
    return format_quantity(value, unit, 4, sign=sign)


def _outputs(analysis: Analysis) -> str:
    dc = analysis.dc
    line = f"output {_volts(dc.output)}, wanted {_volts(dc.ideal_output)}"
    if dc.clipped != "no":
        line += f"; clipped {dc.clipped}, it would be {_volts(dc.unclipped_output)}"
    return line


def _volts(value: float | None) -> str:
    return format_fixed(value, "V", 4)


def _signals(analysis: Analysis, document: dict) -> str:
    dc = document["dc"]
    rows = [
        (
            s.name, format_fixed(s.weight, "", 4, sign=True), format_fixed(dc["weights"][s.name], "", 5, sign=True),
            _volts(s.value), _volts(dc["contributions"][s.name]), format_quantity(dc["source_currents"][s.name], "A"),
        )
        for s in analysis.design.signals
    ]  # fmt: skip
    rows.append(("offset", _volts(analysis.design.target.offset), _volts(dc["offset"]), "", _volts(dc["offset"]), ""))
    return table(("signal", "wanted", "made", "value", "share", "current"), rows)


def _cells(document: dict) -> str:
    rows = [
        (
            f"cell {k + 1}", _volts(c["minus_voltage"]), _volts(c["plus_voltage"]), _volts(c["output_voltage"]),
            format_quantity(c["output_current"], "A"), format_quantity(c["feedback_current"], "A"),
        )
        for k, c in enumerate(document["dc"]["cells"])
    ]  # fmt: skip
    return table(("", "− input", "+ input", "output", "current", "feedback"), rows)


def _headroom(document: dict) -> str:
    rows = [
        (
            f"cell {k + 1}", _volts(c["lowest"]), _volts(c["highest"]), _volts(c["limit_low"]), _volts(c["limit_high"]),
            format_quantity(c["output_current_peak"], "A"),
        )
        for k, c in enumerate(document["headroom"]["cells"])
    ]  # fmt: skip
    return table(("all corners", "lowest", "highest", "limit low", "limit high", "peak current"), rows)


def _errors(document: dict) -> str:
    rows = []
    for point in POINTS:
        e = document["errors"][point]
        row = [point, *(format_quantity(e[k], "V", 3) for k in ("shift", "expanded_95", "worst_case"))]
        if drawn := e["monte_carlo"]:
            row += [format_quantity(drawn[k], "V", 3) for k in ("mean", "standard_deviation", "low_95", "high_95")]
            row.append(format_percent(drawn["yield"], 4))
        rows.append(row)
    head = ["error at", "known shift", "95 % ±", "worst case"]
    if document["errors"]["present"]["monte_carlo"]:
        head += ["drawn mean", "deviation", "95 % from", "to", "yield"]
    return table(head, rows)


def _bands(document: dict) -> str:
    ac = document["ac"]
    signals = [
        (name, format_fixed(s["dc_gain"], "", 5, sign=True), format_quantity(s["bandwidth_3db"], "Hz"))
        for name, s in ac["signals"].items()
    ]
    cells = [
        (
            f"cell {k + 1}", format_fixed(c["noise_gain"], "", 3), format_quantity(c["crossover"], "Hz"),
            format_fixed(c["phase_margin"], "", 1) + ("" if c["phase_margin"] is None else "°"),
            format_fixed(c["gain_margin_db"], "dB", 1),
        )
        for k, c in enumerate(ac["cells"])
    ]  # fmt: skip
    return "\n\n".join(
        [
            table(("signal", "gain at DC", "to −3 dB"), signals),
            table(("", "noise gain", "crossover", "phase margin", "gain margin"), cells),
            f"full-power bandwidth {format_quantity(ac['full_power_bandwidth'], 'Hz')}",
        ]
    )


def _noise(document: dict) -> str:
    noise = document["noise"]
    low, high = (format_quantity(f, "Hz", trim=True) for f in noise["band"])
    first = f"noise {format_quantity(noise['rms'], 'V')} RMS in {low} to {high}; "
    first += f"{format_quantity(noise['density_1khz'], 'V/√Hz')} at 1{THIN}kHz"
    worst = sorted(noise["terms"], key=lambda t: -t["rms"])[:5]
    return first + "\n" + table(("most from", "RMS"), [(t["name"], format_quantity(t["rms"], "V")) for t in worst])


def _heat(document: dict) -> str:
    power = document["power"]
    hot = sorted(power["resistors"], key=lambda r: -r["dissipation_most"])[:3]
    rows = [(r["name"], format_quantity(r["dissipation_most"], "W"), format_quantity(r["rating"], "W")) for r in hot]
    for k, a in enumerate(power["op_amps"]):
        junction = "–" if a["junction"] is None else format_fixed(a["junction"], "°C", 1)
        rows.append((f"op amp, cell {k + 1}", format_quantity(a["dissipation_most"], "W"), junction))
    return table(("most heat", "at worst", "rating, junction"), rows)
