"""The design report: one HTML file that stands alone and prints on A4 and Letter.

It holds no script and refers to nothing outside itself; every text a person typed
is escaped by the templates, every number comes from one `Analysis`.
"""

from __future__ import annotations

import getpass
import hashlib
import re
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cache
from importlib.resources import files
from typing import Any

import jinja2
import numpy as np
from markupsafe import Markup, escape

from sumwright import __version__
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import arrangement_of
from sumwright.engine.boards import draw_boards, shortest_interval, statistics
from sumwright.engine.budget import POINTS
from sumwright.engine.cautions import cautions
from sumwright.engine.checks import headline
from sumwright.engine.operating_point import ideal_output
from sumwright.engine.stage import Design
from sumwright.engine.trace import step, trace
from sumwright.engine.waves import Wave
from sumwright.files.design import write_design
from sumwright.quantity import MINUS, THIN, format_fixed, format_percent, format_quantity
from sumwright.tokens import tokens_css

from . import charts
from .contents import all_tables
from .drawing import HAIR, INK, LINE, RED, Drawing
from .schematic import SYMBOLS, schematic
from .tables import measure

DRAWS = 10_000  # boards of the histogram unless told otherwise

WHAT_IT_IS = {
    "inverting": "One op amp, every signal at its inverting node: all weights negative, sources isolated from each other.",
    "inverting-pair": "An inverting summer and an inverter: all weights positive, sources isolated from each other.",
    "non-inverting": "One op amp, every signal at its non-inverting node: all weights positive; the sources see each other.",
    "mixed-sign": "One op amp with legs on both nodes: weights of either sign.",
    "two-stage": "Positive weights summed and inverted, then summed with the negative ones: every leg at a virtual ground.",
}  # fmt: skip

ASSUMPTIONS = (
    "The stage is solved from Kirchhoff's current law at every node, with the op amp's finite open-loop gain, input and output resistance, the sources' resistances and the load. "
    "Offset voltage, bias currents, CMRR and PSRR are zero in the nominal solution and enter as errors.",
    "Every limit without a stated distribution is rectangular: standard uncertainty = limit/√3 (JCGM 101:2008, 6.4.2). Terms are independent; every resistor and every op amp is drawn by itself.",
    "Headroom counts every combination of the signals' ends, rails at their least favourable tolerance, and dropout as a straight line in the output current.",
    "The op amp's gain is A(s) = A0 / ((1 + s·A0/(2π·GBW))·(1 + s/(2π·f2))); the slew rate bounds its first stage. Phase margin is 180° + arg T at the first |T| = 1, the loop cut at the op amp's own source.",
    "Noise: e²(f) = e²·(1 + fc/f) for the op amp's voltage and each input's current, uncorrelated; 4kTR for every resistor and source resistance (Nyquist 1928), k = 1.380649·10⁻²³ J/K.",
    "Resistors take their rating up to 70 °C and nothing at 155 °C, in a straight line between. The junction is the ambient plus thermal resistance times dissipation.",
    "Not in the model: layout but for the stated capacitance at the inverting node, leakage across the board, dielectric absorption, self-heating of resistors, the op amp's change with supply or temperature other than drift, radio-frequency rectification, and common-mode errors of the sources' own grounds.",
    "The op amp's figures are those the design states, as listed below: compare them with the data sheet of the part that is bought. Resistor tolerance, temperature coefficient and power are those stated for the series.",
)  # fmt: skip


@dataclass(frozen=True)
class Decision:
    """One decision of the log: when, by whom, what, and which entry it is or corrects."""

    at: str
    author: str
    text: str
    entry: str = ""


@dataclass(frozen=True)
class About:
    """What stands at the head of a document."""

    title: str
    author: str
    made: str
    version: str
    sha256: str


def about(design: Design, author: str | None = None, now: datetime | None = None) -> About:
    """Title, author (default: who runs this), time, version, and the hash of the design's canonical file."""
    now = datetime.now(UTC) if now is None else now.astimezone(UTC)
    return About(
        design.title or "Untitled", author or whoever(), now.strftime("%Y-%m-%d %H:%M UTC"), __version__, design_sha256(design)
    )  # fmt: skip


def design_sha256(design: Design) -> str:
    """SHA-256 of the design as `files.design.write_design` writes it, in hexadecimal."""
    return hashlib.sha256(write_design(design).encode("utf-8")).hexdigest()


def whoever() -> str:
    """The name of who runs this, as the system knows it."""
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):  # a container without a user entry
        return "not named"


def design_report(
    analysis: Analysis, *, symbols: str = "iec", draws: int = DRAWS, seed: int = 0, author: str | None = None,
    decisions: Iterable[Decision] = (), now: datetime | None = None,
) -> str:  # fmt: skip
    """The report as HTML text.

    Parameters
    ----------
    analysis : Analysis
    symbols : {"iec", "ieee"}
        Resistor symbols.
    draws, seed : int
        Boards of the Monte Carlo; 0 leaves it out.
    author : str, optional
    decisions : iterable of Decision, optional
    now : datetime, optional
        Time of making; default now.

    Returns
    -------
    str
    """
    design = analysis.design
    drawn, histogram = None, None
    if draws:
        boards = draw_boards(analysis, draws, seed)
        accuracy = design.target.accuracy
        drawn = {p: statistics(e, seed, accuracy) for p, e in zip(boards.points, boards.errors, strict=True)}
        errors = boards.errors[POINTS.index("present")]
        histogram = charts.histogram(errors, accuracy, shortest_interval(errors)).svg()
    tables = {t.key: t for t in all_tables(analysis, drawn)}
    name = design.signals[charts.busiest(analysis)].name
    step_picture, step_caption = _step(analysis, name)
    sine_picture, sine_caption = _sine(analysis, name)
    return render(
        "report.html", "design report", about(design, author, now),
        t=tables, verdict=_verdict(analysis), equation=equation(design), many=len(design.cells) > 1,
        arrangement=WHAT_IT_IS.get(arrangement_of(design.cells) or "", "A chain of cells of its own kind."),
        schematic=schematic(design, analysis.dc, symbols=symbols, unplugged=analysis.unplugged).svg(), symbols=SYMBOLS[symbols],
        margins=[_margin(c) for c in analysis.checks], ruler=charts.ruler(analysis).svg(), key=charts.curve_key(analysis).svg(),
        shares=charts.shares(analysis).svg(), histogram=histogram, gain=charts.gain_and_phase(analysis).svg(),
        loops=charts.loops(analysis).svg(), step=step_picture, step_caption=step_caption, sine=sine_picture, sine_caption=sine_caption,
        full_power=_full_power(analysis), noise=charts.noise_density(analysis).svg(), cautions=cautions(analysis),
        assumptions=ASSUMPTIONS, decisions=list(decisions), design_text=escape(write_design(design)),
    )  # fmt: skip


def render(template: str, kind: str, head: About, **values: Any) -> str:
    """A document from a template of this package; everything that is not `Markup` is escaped."""
    folder = files("sumwright.report").joinpath("templates")
    return _environment().get_template(template).render(
        kind=kind, about=head, tokens=_plain_css(tokens_css()), style=_plain_css(folder.joinpath("document.css").read_text(encoding="utf-8")), **values
    )  # fmt: skip


@cache
def _environment() -> jinja2.Environment:
    return jinja2.Environment(
        loader=jinja2.PackageLoader("sumwright.report", "templates"), autoescape=True, undefined=jinja2.StrictUndefined,
        finalize=_together,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip


_LONG = re.compile(r"\S{25,}")
_PIECE = 12  # characters of a long word that stay together


def _together(value: Any) -> Any:
    """A number stays on the line of its unit, and a word too long for a column may break."""
    if not isinstance(value, str) or isinstance(value, Markup):
        return value
    text = value.replace(THIN, "\u00a0")
    if not _LONG.search(text):
        return text
    words = _LONG.sub(lambda m: "\0".join(m[0][i : i + _PIECE] for i in range(0, len(m[0]), _PIECE)), text)
    return Markup("<wbr>").join(words.split("\0"))


def _plain_css(text: str) -> Markup:
    if "</" in text or "url(" in text or "@import" in text:
        raise ValueError("a document's style must not reach outside it")
    return Markup(text)


def equation(design: Design) -> Markup:
    """The sum that is wanted, as it is written."""
    terms = []
    for i, s in enumerate(sorted(design.signals, key=lambda x: x.weight < 0)):
        sign = f" {MINUS} " if s.weight < 0 else " + " if i else ""
        terms.append(Markup("{}{}&#8202;<i>{}</i>").format(sign, f"{abs(s.weight):.4g}", s.name))
    offset = design.target.offset
    if offset:
        terms.append(Markup("{}{}{}V").format(f" {MINUS} " if offset < 0 else " + ", f"{abs(offset):.4g}", THIN))
    return Markup("<i>out</i> = ") + Markup("").join(terms)


def _verdict(analysis: Analysis) -> dict[str, str]:
    checks = analysis.checks
    worst = headline(checks)
    words = [f"{sum(c.status == w for c in checks)} {w}" for w in ("short", "tight", "clear", "unknown")]
    if worst.status == "clear":
        return {
            "status": "clear", "big": "all clear", "title": f"Least margin: {worst.title}", "advice": "",
            "why": f"{measure(worst.margin, worst.unit, True)}. {worst.why}", "count": ", ".join(words),
        }  # fmt: skip
    if worst.status == "tight":
        return {
            "status": "tight", "big": "all hold", "title": f"Least margin: {worst.title}", "advice": worst.advice,
            "why": f"{measure(worst.margin, worst.unit, True)}. {worst.why}", "count": ", ".join(words),
        }  # fmt: skip
    big = f"{_roughly(abs(worst.margin), worst.unit)} {worst.status}" if worst.margin is not None else worst.status
    return {
        "status": worst.status, "big": big, "title": worst.title, "why": worst.why, "advice": worst.advice, "count": ", ".join(words)
    }  # fmt: skip


def _roughly(size: float, unit: str) -> str:
    """The headline's number: volts with two decimals, degrees whole, the rest in two figures."""
    if unit == "V" and 0.0995 <= size < 1e3:
        return format_fixed(size, "V", 2)
    if unit in ("°", "°C", "K"):
        return format_fixed(size, "", 0) + (unit if unit == "°" else f"{THIN}{unit}")
    if unit == "%":
        return format_fixed(size, "%", 2)
    return format_quantity(size, unit, 2)


def _margin(check) -> dict[str, Any]:
    return {
        "title": check.title, "status": check.status, "why": check.why, "advice": check.advice,
        "margin": "not given" if check.status == "unknown" else measure(check.margin, check.unit, True), "gauge": gauge(check).svg(),
    }  # fmt: skip


def gauge(check, width: float = 106.0) -> Drawing:
    """A margin as a bar from the zero line: right of it room, left of it short."""
    d = Drawing(width, 15, f"{check.title}: {check.status}")
    zero, end, y = 26.0, width - 2, 8.0
    room = end - zero
    for i in range(4):
        x = zero + i * room * 0.1 / 4
        d.line(x, y + 5, x + 4, y - 5, stroke=HAIR, width=1)
    d.line(zero, y, end, y, stroke=HAIR, width=1, dash="2 2" if check.status == "unknown" else "")
    d.line(zero, 0, zero, 15, width=1.5)
    if check.status == "unknown":
        return d
    share = 1.0 if check.margin is None or not check.allowance else check.margin / check.allowance
    if share < 0:
        x = max(3.0, zero + share * room)
        d.rect(x, y - 4, zero - x, 8, fill=RED)
        d.line(x, y - 6, x, y + 6, stroke=RED, width=3)
    else:
        x = zero + min(share, 1.0) * room
        if check.status == "tight":
            d.rect(zero, y - 4, max(2.0, x - zero), 8, fill="var(--paper)", stroke=INK, width=1.2)
        else:
            d.line(zero, y, x, y, width=4)
        d.line(x, y - 6, x, y + 6, width=2)
    if check.margin is not None and not check.allowance:
        d.line(zero, y, end, y, stroke=LINE, width=1)
    return d


def _full_power(analysis: Analysis) -> str:
    c = analysis.headroom.cells[-1]
    span = c.highest - c.lowest
    if span <= 0:
        return "no limit; the output does not move"
    rate = analysis.design.op_amp.slew_rate
    return (
        f"{format_quantity(rate / (np.pi * span), 'Hz')}, the slew rate of {rate / 1e6:g}{THIN}V/µs divided by 2π times half of the "
        f"{format_quantity(span, 'V')} from the lowest to the highest corner"
    )


def _step(analysis: Analysis, name: str) -> tuple[Markup | None, str]:
    """The signal stepped over its whole range; nothing where no signal has one."""
    s = analysis.design.signal(name)
    if s.high <= s.low:
        return None, ""
    result = step(analysis, name, s.high - s.low, start=s.low)
    settled = "; ".join(
        f"within {format_percent(b)} after {format_quantity(t, 's')}" for b, t in result.settled.items()
    )
    told = (
        "the output is at its limit; there is no step to measure."
        if result.at_limit
        else f"rise {format_quantity(result.rise, 's')} (10 % to 90 %), overshoot {format_percent(result.overshoot)}; {settled}. "
        f"Slewing {format_percent(result.trace.slewing)} of the record."
    )
    caption = (
        f"Step of {name} from {format_quantity(s.low, 'V', 3, trim=True)} to {format_quantity(s.high, 'V', 3, trim=True)}, "
        f"the others where they are: {told}"
    )
    return charts.step_answer(analysis, result, name).svg(), caption


def _sine(analysis: Analysis, name: str) -> tuple[Markup | None, str]:
    """The signal as a sine over its whole range at the highest frequency that matters for it."""
    design = analysis.design
    s = design.signal(name)
    f = s.frequency or design.target.bandwidth or 0.0
    if not f or s.high <= s.low:
        return None, ""
    duration = 2.0 / f
    record = trace(
        analysis,
        {name: Wave("sine", offset=(s.high + s.low) / 2, amplitude=(s.high - s.low) / 2, frequency=f)},
        duration,
        samples=601,
    )
    ideal = ideal_output(design, record.inputs.T)
    caption = (
        f"{name} as a sine over its whole range at {format_quantity(f, 'Hz', 3, trim=True)}, the others where they are; dotted: the ideal sum. "
        f"Slewing {format_percent(record.slewing)} and clipping {format_percent(record.clipping)} of the time."
    )
    return charts.sine_answer(analysis, record, ideal, name).svg(), caption


__all__ = [
    "ASSUMPTIONS",
    "DRAWS",
    "About",
    "Decision",
    "about",
    "design_report",
    "design_sha256",
    "equation",
    "render",
    "whoever",
]
