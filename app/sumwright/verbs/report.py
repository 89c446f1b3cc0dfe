"""`sumwright report`: the design report, the bring-up sheet or the calibration record, one HTML file that stands alone."""

from __future__ import annotations

import argparse
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from sumwright.engine.analysis import Analysis
from sumwright.engine.bench.readings import parse_meter
from sumwright.engine.stage import Design
from sumwright.errors import SumwrightError
from sumwright.files.text import write_whole
from sumwright.report.bench_papers import bring_up_sheet, calibration_record, readings_rows
from sumwright.report.document import DRAWS, Decision, design_report
from sumwright.report.export import bundle
from sumwright.report.schematic import SYMBOLS
from sumwright.verbs.common import add_design, check_outputs, load_design, read_whole, whole

KINDS = ("design", "bring-up", "calibration")
MOST_DRAWS = 10_000_000


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    parser.add_argument("-o", "--output", metavar="FILE.html", type=Path, required=True, help="where the report goes")
    parser.add_argument(
        "--kind", choices=KINDS, default="design",
        help="the design report; the bring-up sheet with blanks to fill in; or the calibration record of a board that was measured",
    )  # fmt: skip
    parser.add_argument(
        "--readings", metavar="FILE.csv", type=Path, help="of --kind calibration: the readings, as diagnose takes them"
    )
    parser.add_argument(
        "--meter",
        metavar="STATEMENT",
        help="of bring-up and calibration: the meter's accuracy as its data sheet states it",
    )
    parser.add_argument("--board", metavar="NAME", default="", help="of calibration: which board")
    parser.add_argument(
        "--symbols", choices=sorted(SYMBOLS), default="iec", help="resistor symbols: IEC 60617 or IEEE 315 (iec)"
    )
    parser.add_argument("--author", metavar="NAME", help="who made it (the name you are signed in with)")
    parser.add_argument(
        "--notebook",
        metavar="NOTEBOOK",
        help="list the decisions of this notebook's log: its id in the store, or a file that it was exported to",
    )
    parser.add_argument("--draws", metavar="N", help=f"boards drawn at random for the histogram, 0 for none ({DRAWS})")
    parser.add_argument("--seed", metavar="S", help="where the draws start; the same seed draws the same boards (0)")
    parser.add_argument(
        "--bundle",
        metavar="FILE.zip",
        type=Path,
        help="also write everything in one ZIP: CSV tables, SVG pictures, JSON, Markdown",
    )


def run(args: argparse.Namespace) -> int:
    draws = DRAWS if args.draws is None else whole(args.draws, "--draws", 0, MOST_DRAWS)
    seed = 0 if args.seed is None else whole(args.seed, "--seed", 0, 2**63 - 1)
    if (args.kind == "calibration") != (args.readings is not None):
        raise SumwrightError(
            "A calibration record is made from readings: give both --kind calibration and --readings FILE.csv."
        )
    if args.kind != "design" and args.notebook is not None:
        raise SumwrightError(
            "--notebook goes with the design report, which lists decisions; leave out --kind, or --notebook."
        )
    if args.kind != "design" and args.bundle is not None:
        raise SumwrightError("--bundle goes with the design report; leave out --kind, or --bundle.")
    design = load_design(args.design)
    check_outputs((args.output, args.bundle), (args.design, args.readings, args.notebook))
    head: dict[str, Any] = {"author": args.author, "now": datetime.now(UTC)}
    files = None
    if args.kind == "bring-up":
        text = _bring_up(design, args, head)
    elif args.kind == "calibration":
        text = _calibration(design, args, head)
    else:
        analysis = Analysis(design)
        decisions = [] if args.notebook is None else _decisions(args.notebook)
        how = {"symbols": args.symbols, "draws": draws, "seed": seed, "decisions": decisions, **head}
        text = design_report(analysis, **how)
        files = None if args.bundle is None else bundle(analysis, **how)
    write_whole(args.output, text)
    if files is not None:
        write_whole(args.bundle, files)
    return 0


def _decisions(named: str) -> list[Decision]:
    """The decisions in the log of a notebook in the store, or in a notebook file."""
    from sumwright.notebook import bundle as file
    from sumwright.notebook.entries import decisions_of
    from sumwright.notebook.settings import read_settings
    from sumwright.notebook.store import Store

    if not file.is_id(named):
        _, _, entries = file.unpack(read_whole(named, file.FILE_MOST))
    else:
        store = Store(read_settings().store_url)
        try:
            store.notebook(named)
            entries = store.entries(named)
        finally:
            store.close()
    return [Decision(*d) for d in decisions_of(entries)]


def _bring_up(design: Design, args: argparse.Namespace, head: dict[str, Any]) -> str:
    from sumwright.engine.bench.plan import plan

    meter = None if args.meter is None else parse_meter(args.meter)
    return bring_up_sheet(Analysis(design), [s._asdict() for s in plan(design, meter)], symbols=args.symbols, **head)


def _calibration(design: Design, args: argparse.Namespace, head: dict[str, Any]) -> str:
    from sumwright.engine.bench.diagnose import diagnose
    from sumwright.files.readings import read_readings
    from sumwright.verbs.diagnose import to_json

    meter = None if args.meter is None else parse_meter(args.meter)
    readings = read_readings(args.readings, design)
    found = to_json(diagnose(design, readings, meter=meter))
    rows = readings_rows(readings, meter)
    return calibration_record(design, found, rows, board=args.board, meter=args.meter or "", **head)
