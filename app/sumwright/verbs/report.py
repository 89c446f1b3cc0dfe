"""`sumwright report`: the design report as one HTML file that stands alone."""

from __future__ import annotations

import argparse
from datetime import UTC, datetime
from pathlib import Path

from sumwright.engine.analysis import Analysis
from sumwright.files.text import write_whole
from sumwright.report.document import DRAWS, design_report
from sumwright.report.export import bundle
from sumwright.report.schematic import SYMBOLS
from sumwright.verbs.common import add_design, load_design, whole

MOST_DRAWS = 10_000_000


def arguments(parser: argparse.ArgumentParser) -> None:
    add_design(parser)
    parser.add_argument("-o", "--output", metavar="FILE.html", type=Path, required=True, help="where the report goes")
    parser.add_argument(
        "--symbols", choices=sorted(SYMBOLS), default="iec", help="resistor symbols: IEC 60617 or IEEE 315 (iec)"
    )
    parser.add_argument("--author", metavar="NAME", help="who made it (the name you are signed in with)")
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
    analysis = Analysis(load_design(args.design))
    how = {"symbols": args.symbols, "draws": draws, "seed": seed, "author": args.author, "now": datetime.now(UTC)}
    text = design_report(analysis, **how)
    files = None if args.bundle is None else bundle(analysis, **how)
    write_whole(args.output, text)
    if files is not None:
        write_whole(args.bundle, files)
    return 0
