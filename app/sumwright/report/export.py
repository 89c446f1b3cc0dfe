"""What leaves the sheet in other people's formats: CSV for tables, SVG for pictures, JSON, Markdown, all in one ZIP."""

from __future__ import annotations

import io
import json
import zipfile
from collections.abc import Callable, Iterable
from datetime import UTC, datetime

from sumwright.engine.analysis import Analysis
from sumwright.engine.boards import draw_boards, shortest_interval, statistics
from sumwright.engine.budget import POINTS
from sumwright.engine.checks import headline
from sumwright.engine.trace import step
from sumwright.files.design import write_design
from sumwright.files.results import to_json
from sumwright.quantity import format_fixed

from . import charts
from .contents import all_tables, bill, margins, signals, weights
from .document import DRAWS, Decision, about, design_report
from .drawing import Drawing
from .schematic import schematic
from .tables import csv_text, markdown, plain_markdown

PICTURES = ("schematic", "curves", "key", "error-shares", "gain-and-phase", "loop", "noise", "step", "boards")


def drawing(analysis: Analysis, which: str, *, symbols: str = "iec", errors=None) -> Drawing | None:
    """One picture of `PICTURES`; None where the stage has none (a step of a signal that cannot move, boards not drawn)."""
    if which == "schematic":
        return schematic(analysis.design, analysis.dc, symbols=symbols, unplugged=analysis.unplugged)
    if which == "step":
        s = analysis.design.signals[charts.busiest(analysis)]
        if s.high <= s.low:
            return None
        return charts.step_answer(analysis, step(analysis, s.name, s.high - s.low, start=s.low), s.name)
    if which == "boards":
        return (
            None
            if errors is None
            else charts.histogram(errors, analysis.design.target.accuracy, shortest_interval(errors))
        )
    draw: dict[str, Callable[..., Drawing]] = {
        "curves": charts.ruler, "key": charts.curve_key, "error-shares": charts.shares, "gain-and-phase": charts.gain_and_phase,
        "loop": charts.loops, "noise": charts.noise_density,
    }  # fmt: skip
    return draw[which](analysis)


def drawings(analysis: Analysis, *, symbols: str = "iec", errors=None) -> dict[str, Drawing]:
    """Every picture by name; `errors` (draws,) [V] are drawn boards for a histogram."""
    found = {which: drawing(analysis, which, symbols=symbols, errors=errors) for which in PICTURES}
    return {which: picture for which, picture in found.items() if picture is not None}


def summary(analysis: Analysis, author: str | None = None, now: datetime | None = None) -> str:
    """A page of Markdown for a message or a ticket: verdict, signals, weights, margins, parts."""
    design, dc = analysis.design, analysis.dc
    head = about(design, author, now)
    worst = headline(analysis.checks)
    lines = [
        f"# {plain_markdown(head.title)}", "",
        f"Sumwright {head.version}, {head.made}, {plain_markdown(head.author)}. Design SHA-256 `{head.sha256}`.", "",
        f"**{worst.title}: {worst.status}.** {plain_markdown(f'{worst.why} {worst.advice}'.strip())}", "",
        f"Output {format_fixed(dc.output, 'V', 4)}, wanted {format_fixed(dc.ideal_output, 'V', 4)}"
        + (f", clipped {dc.clipped}." if dc.clipped != "no" else "."),
    ]  # fmt: skip
    for table in (signals(analysis), weights(analysis), margins(analysis), bill(analysis)):
        lines += ["", f"## {table.title}", "", markdown(table)]
    return "\n".join(lines) + "\n"


def bundle(
    analysis: Analysis, *, symbols: str = "iec", draws: int = DRAWS, seed: int = 0, author: str | None = None,
    decisions: Iterable[Decision] = (), now: datetime | None = None, theme: str = "light",
) -> bytes:  # fmt: skip
    """Everything in one ZIP: the report, the design, the results, a CSV a table, an SVG a picture, a summary."""
    now = datetime.now(UTC) if now is None else now.astimezone(UTC)
    drawn, errors = None, None
    if draws:
        boards = draw_boards(analysis, draws, seed)
        accuracy = analysis.design.target.accuracy
        drawn = {p: statistics(e, seed, accuracy) for p, e in zip(boards.points, boards.errors, strict=True)}
        errors = boards.errors[POINTS.index("present")]
    files = {
        "report.html": design_report(
            analysis, symbols=symbols, draws=draws, seed=seed, author=author, decisions=decisions, now=now
        ),
        "design.json": write_design(analysis.design),
        "results.json": json.dumps(to_json(analysis, drawn), indent=2, ensure_ascii=False, allow_nan=False) + "\n",
        "summary.md": summary(analysis, author, now),
    }
    for i, table in enumerate(all_tables(analysis, drawn), start=1):
        # the mark at the start makes spreadsheets read UTF-8
        files[f"tables/{i:02d}-{table.key.replace('_', '-')}.csv"] = "\ufeff" + csv_text(table)
    for name, picture in drawings(analysis, symbols=symbols, errors=errors).items():
        files[f"pictures/{name}.svg"] = picture.file(theme)
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, text in files.items():
            entry = zipfile.ZipInfo(name, date_time=(now.year, now.month, now.day, now.hour, now.minute, now.second))
            entry.compress_type = zipfile.ZIP_DEFLATED
            entry.external_attr = 0o644 << 16
            archive.writestr(entry, text.encode("utf-8"))
    return out.getvalue()


__all__ = ["PICTURES", "bundle", "drawing", "drawings", "summary"]
