"""`sumwright realise`: ranked sets of resistors that can be bought, or are in the drawer."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from sumwright.engine.realise.choices import Choice, Realisation, realise
from sumwright.engine.realise.drawer import to_buy
from sumwright.engine.stage import ARRANGEMENTS, Design, cell_name, replace
from sumwright.errors import SumwrightError
from sumwright.files.bill import bill_csv
from sumwright.files.design import design_document
from sumwright.files.drawer import read_drawer
from sumwright.files.text import write_whole
from sumwright.quantity import format_fixed, format_percent, format_quantity, format_resistor, parse_quantity
from sumwright.verbs.common import add_design, add_json, check_outputs, load_design, plain, print_json, table


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    parser.add_argument("--arrangement", metavar="A", help=f"look at one arrangement alone: {', '.join(ARRANGEMENTS)}")
    parser.add_argument(
        "--stock",
        metavar="FILE",
        type=Path,
        help="take the resistors from this drawer alone (CSV: value, tolerance, count, note)",
    )
    parser.add_argument(
        "--pairs", action="store_true", help="let two resistors stand for one where that earns its place"
    )
    parser.add_argument(
        "--least-input",
        metavar="NAME=OHM",
        action="append",
        default=[],
        help="least leg that a signal's source may see, as north=20k; once a signal",
    )
    parser.add_argument(
        "--buy-for",
        metavar="ERROR",
        help="with --stock: say what to buy to get under this worst weight error, as 0.2%%",
    )
    parser.add_argument(
        "--bill", metavar="FILE", type=Path, help="write the bill of materials of the best choice (CSV)"
    )
    add_json(parser)


def run(args: argparse.Namespace) -> int:
    if args.pairs and args.stock is not None:
        raise SumwrightError("--pairs and --stock cannot be given together; a drawer is searched for single resistors.")
    if args.buy_for is not None and args.stock is None:
        raise SumwrightError("--buy-for is given without --stock; it says what the drawer lacks.")
    design = load_design(args.design, realised=False)
    check_outputs((args.bill,), (args.design, args.stock))
    drawer = None if args.stock is None else read_drawer(args.stock)
    goal = None if args.buy_for is None else parse_quantity(args.buy_for, "", "--buy-for")
    if goal is not None and not 0 < goal < 1:
        raise SumwrightError(f"--buy-for is {goal:g}; it must be over 0 and under 1, as 0.002 or 0.2 %.")
    result = realise(
        design,
        arrangement=args.arrangement,
        pairs=args.pairs,
        drawer=drawer,
        least_input=_least_input(args.least_input),
    )
    document = to_json(design, result)
    if goal is not None:
        document["buy"] = [p._asdict() for p in to_buy(design, result, drawer, goal)]  # type: ignore[arg-type]
    if args.bill is not None:
        write_whole(args.bill, bill_csv(replace(design, cells=result.choices[0].cells)))
    if args.json:
        print_json(document)
    else:
        print(_report(design, result, document))
    return 0


def _least_input(given: list[str]) -> dict[str, float]:
    out = {}
    for text in given:
        name, equals, ohm = text.rpartition("=")
        if not equals or not name:
            raise SumwrightError(f"--least-input is '{text}'; write NAME=OHM, as north=20k.")
        out[name] = parse_quantity(ohm, "Ω", f"--least-input {name}")
    return out


def cells_document(design: Design, cells) -> list[dict[str, Any]]:
    """Cells as the design file holds them, ready to be pasted under `cells`."""
    return design_document(replace(design, cells=tuple(cells)))["cells"]


def choice_document(design: Design, choice: Choice) -> dict[str, Any]:
    """One choice as JSON: the keys every reader may rely on, then what else is known of it."""
    return {
        "arrangement": choice.arrangement,
        "cells": cells_document(design, choice.cells),
        "weights": choice.weights,
        "offset": choice.offset,
        "worst_weight_error": choice.worst_weight_error,
        "resistor_count": choice.resistor_count,
        "op_amp_count": choice.op_amp_count,
        "noise_gain": choice.noise_gain,
        "worst_weight": choice.worst_weight,
        "different_values": choice.different_values,
        "least_input_resistance": choice.least_input_resistance if choice.least_input_resistance < 1e18 else None,
        "noise_density": choice.noise_density,
        "parts": [p._asdict() for p in choice.parts],
        "merits": list(choice.merits),
    }


def to_json(design: Design, result: Realisation) -> dict[str, Any]:
    """The document of `realise --json`."""
    return {
        "choices": [choice_document(design, c) for c in result.choices],
        "bounds": {name: {"bound": bound, "proved": result.proved[name]} for name, bound in result.bounds.items()},
        "notes": list(result.notes),
    }


def _report(design: Design, result: Realisation, document: dict[str, Any]) -> str:
    rows = [
        (
            c.arrangement, ", ".join(c.merits), format_percent(c.worst_weight_error, 3), str(c.resistor_count), str(c.op_amp_count), str(c.different_values),
            format_fixed(c.noise_gain, "", 2), format_quantity(c.noise_density, "V/√Hz"), format_quantity(c.least_input_resistance, "Ω"),
        )
        for c in result.choices
    ]  # fmt: skip
    head = ("arrangement", "", "worst error", "resistors", "op amps", "values", "noise gain", "noise", "sources see")
    text = [plain(design.title) or "Untitled", table(head, rows, text_columns=2)]
    best: dict[str, Choice] = {}
    for c in result.choices:
        best.setdefault(c.arrangement, c)
    text += [_values(c) for c in best.values()]
    for name, bound in result.bounds.items():
        if result.proved[name]:
            text.append(
                f"{name}: the best is proved; no set of these values errs less than {format_percent(bound, 3)}."
            )
        else:
            text.append(f"{name}: cut short; no set of these values can err less than {format_percent(bound, 3)}.")
    if "buy" in document:
        bought = [f"{p['count']} × {format_resistor(p['value'])} ({p['place']})" for p in document["buy"]]
        text.append("Buy " + ", ".join(bought) + "." if bought else "Nothing needs to be bought.")
    return "\n\n".join([*text, *map(plain, result.notes)])


def _values(c: Choice) -> str:
    lines = [f"best {c.arrangement}: worst is '{plain(c.worst_weight)}', {format_percent(c.worst_weight_error, 3)}"]
    for k, cell in enumerate(c.cells):
        bits = [f"− {plain(leg.source)} {format_resistor(leg.resistance)}" for leg in cell.minus]
        bits += [f"+ {plain(leg.source)} {format_resistor(leg.resistance)}" for leg in cell.plus]
        if cell.minus_ground is not None:
            bits.append(f"− ground {format_resistor(cell.minus_ground)}")
        if cell.plus_ground is not None:
            bits.append("+ to ground" if cell.plus_ground == 0 else f"+ ground {format_resistor(cell.plus_ground)}")
        bits.append(f"feedback {format_resistor(cell.feedback)}")
        lines.append(f"  {cell_name(k)}: " + ", ".join(bits))
    lines += [
        f"  {plain(p.place)}: {format_resistor(p.first)} and {format_resistor(p.second)} in {p.how}" for p in c.parts
    ]
    return "\n".join(lines)
