"""`sumwright plan`: the bring-up run of a design."""

from __future__ import annotations

import argparse
from typing import Any

from sumwright.engine.bench.plan import Step, plan
from sumwright.engine.bench.readings import parse_meter
from sumwright.quantity import format_fixed, format_quantity
from sumwright.verbs.common import add_design, add_json, load_design, plain, print_json


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    parser.add_argument(
        "--meter", metavar="STATEMENT",
        help="the voltmeter's accuracy as its data sheet states it, as '0.05 %% + 0.01 %% of 20 V' (0.05 %% + 0.5 mV)",
    )  # fmt: skip
    add_json(parser)


def run(args: argparse.Namespace) -> int:
    design = load_design(args.design)
    steps = plan(design, None if args.meter is None else parse_meter(args.meter))
    if args.json:
        print_json(to_json(steps))
    else:
        print("\n\n".join([plain(design.title) or "Untitled", *(_lines(s) for s in steps)]))
    return 0


def to_json(steps) -> dict[str, Any]:
    """The document of `plan --json`."""
    return {"steps": [s._asdict() for s in steps]}


def _lines(s: Step) -> str:
    def measure(value):
        return format_fixed(value, "V", 4) if s.unit == "V" else format_quantity(value, s.unit, 4)

    live = ", ".join(f"{plain(n)} {format_fixed(v, 'V', 3)}" for n, v in s.apply.items() if v)
    lines = [f"{s.number}. {plain(s.title)}", f"   {plain(s.setup)}{': ' + live if live else ''}"]
    lines.append(f"   probe {plain(s.probe)}; expect {measure(s.expect)}, from {measure(s.low)} to {measure(s.high)}")
    lines += [f"   {plain(s.why)}", f"   If not: {plain(s.miss)}"]
    if s.caution:
        lines.append(f"   Caution: {plain(s.caution)}")
    return "\n".join(lines)
