"""The bring-up run: what to apply, where to probe, what to expect, between which limits, and what a miss means.

In order: power off, three resistances a cell with every plug shorted to ground (they
take in every leg); power up; all signals grounded; each signal alone; a pair; the two
corners where the output goes highest and lowest; then bandwidth and a step. That is
one reading more than there are weights, and the fewest that also show both headrooms.

Limits are those of healthy parts at 95 %: two standard uncertainties of parts and
meter together (JCGM 100:2008, 6.3.3), of parts never more than their worst case.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from sumwright.engine.analysis import Analysis
from sumwright.engine.cautions import cautions
from sumwright.engine.nodes import Network, nominal_limits
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import REFERENCE, Design, cell_name
from sumwright.quantity import format_fixed, format_quantity

from .board import Bench
from .readings import Meter

OHM_METER = 0.005  # of the reading, limit
OHM_METER_CONSTANT = 0.2  # ohm, limit: leads and contacts
# Data sheets give supply current and gain-bandwidth as typical figures; parts differ by this (common practice).
CURRENT_SPREAD = (0.4, 1.7)
SPEED_SPREAD = (0.6, 1.6)
CLOSEST = 0.9  # of the way to a limit that a signal alone may take the output


class Step(NamedTuple):
    """One step of the run; SI units."""

    number: int
    title: str
    setup: str  # power and plugs
    apply: dict[str, float]  # V; empty with the power off
    probe: str
    expect: float | None
    low: float | None
    high: float | None
    unit: str
    why: str
    miss: str
    caution: str


def plan(design: Design, meter: Meter | None = None) -> tuple[Step, ...]:
    """The run for a realised design.

    Parameters
    ----------
    design : Design
    meter : Meter, optional
        The voltmeter's statement; default 0.05 % + 0.5 mV.

    Returns
    -------
    tuple of Step

    Raises
    ------
    InvalidDesign
        If the design has no cells.
    """
    analysis = Analysis(design)
    run = _Run(analysis, meter or Meter())
    run.power_off()
    run.power_up()
    run.signals()
    run.fast()
    return tuple(run.steps)


class _Run:
    """Collects the steps of one design."""

    def __init__(self, analysis: Analysis, meter: Meter):
        self.analysis, self.design, self.meter = analysis, analysis.design, meter
        self.bench = Bench(self.design)
        self.net = analysis.net
        self.steps: list[Step] = []
        self.cautions = {c.key: c.text for c in cautions(analysis) if c.present}
        self.low = np.array([s.low for s in self.design.signals])
        self.high = np.array([s.high for s in self.design.signals])

    def add(self, title, setup, apply, probe, expect, low, high, unit, why, miss, caution=""):
        self.steps.append(
            Step(len(self.steps) + 1, title, setup, apply, probe, expect, low, high, unit, why, miss, caution)
        )

    # -- power off ---------------------------------------------------------------

    def power_off(self):
        setup = "Power off, rails discharged, op amps in place or not, every plug shorted to ground"
        caution = "Supplies off while probing ohms; let capacitors discharge first."
        first = True
        for k, cell in enumerate(self.design.cells):
            name = cell_name(k)
            minus, plus, out = f"inverting node of {name}", f"+ node of {name}", f"output of {name}"
            pairs = []
            if cell.feedback is not None:
                pairs.append((("o", k), ("m", k), f"{out} to {minus}"))
            pairs.append((("m", k), None, f"{minus} to ground"))
            if cell.plus_ground != 0:
                pairs.append((("p", k), None, f"{plus} to ground"))
            for a, b, probe in pairs:
                ohm, spread, worst, legs = resistance_between(self.net, a, b)
                if not np.isfinite(ohm):
                    continue
                half = np.hypot(min(2 * spread, worst), 2 * (OHM_METER * ohm + OHM_METER_CONSTANT) / np.sqrt(3))
                why = f"Counts {', '.join(legs[:6])}{' and more' if len(legs) > 6 else ''}, and every path beside them."
                miss = (
                    "High: one of these is open or too large. Low: a bridge, or one too small. The reading of each leg alone, "
                    "plug to node with the plugs open, finds which."
                )
                self.add(
                    f"Ohms, {probe}", setup, {}, probe, ohm, max(ohm - half, 0.0), ohm + half, "Ω", why, miss,
                    caution if first else "",
                )  # fmt: skip
                first = False

    # -- power up ----------------------------------------------------------------

    def power_up(self):
        design, supply, amp = self.design, self.design.supply, self.design.op_amp
        setup = "Power on from a current-limited supply, every signal at 0 V"
        zero = self._volts(np.zeros(len(design.signals)))
        packages = -(-len(design.cells) // max(1, amp.per_package))
        point = operating_point(design, np.zeros(len(design.signals)))
        outputs = sum(max(c.output_current, 0.0) for c in point.cells)
        idle = packages * max(1, amp.per_package) * amp.supply_current
        caution = " ".join(
            [
                self.cautions.get("voltage", ""),
                f"Limit the supply to about {format_quantity(3 * (idle + outputs) + 5e-3, 'A', 2)}. Check polarity before the op amp "
                "goes in: a reversed or missing rail destroys it.",
            ]
        ).strip()
        self.add(
            "Supply current", setup, zero, "current into the + rail", idle + outputs, CURRENT_SPREAD[0] * idle + outputs,
            CURRENT_SPREAD[1] * idle + outputs, "A",
            "The data sheet's figure for every amplifier in the packages, and what the outputs deliver.",
            "Far above: a short, a reversed part, or an oscillation: switch off at once. Near zero: no rail at the op amp.",
            caution,
        )  # fmt: skip
        for probe, volts in (("+ rail at the op amp", supply.high), ("− rail at the op amp", supply.low)):
            if volts:
                half = abs(volts) * supply.tolerance + 2 * float(self.meter.standard_uncertainty(volts))
                self.add(
                    f"The {probe}", setup, zero, probe, volts, volts - half, volts + half, "V",
                    "At the op amp's own pin, so that the wiring is proved too.",
                    "Near 0 V or a diode drop: this rail does not arrive.",
                )  # fmt: skip
        reference = design.reference
        if reference and any(p.source == REFERENCE for p in self.net.parts):
            half = np.hypot(
                abs(reference.voltage) * reference.tolerance,
                2 * float(self.meter.standard_uncertainty(reference.voltage)),
            )
            self.add(
                "The reference", setup, zero, "reference", reference.voltage, reference.voltage - half,
                reference.voltage + half, "V", "The offset hangs on it.", "Check its supply and its load.",
            )  # fmt: skip

    # -- signals -----------------------------------------------------------------

    def signals(self):
        design, n = self.design, len(self.design.signals)
        setup = "Power on"
        rest = self._rest()
        grounded = not rest.any()
        self._reading(
            "All signals grounded" if grounded else "The resting point", setup, rest,
            "The offset, and that the stage is alive." if grounded
            else "Every signal at a value where no output clips; the next readings move one signal each from here.",
            "At a rail: feedback open, op amp inputs exchanged, a rail or ground leg missing. A steady error: offset leg or reference.",
            "Never drive signals into an unpowered stage: the current goes through the input protection. "
            + self.cautions.get("unpowered", ""),
        )  # fmt: skip
        reach = [self._farthest(rest, i) for i in range(n)]
        for i, s in enumerate(design.signals):
            volts = rest.copy()
            volts[i] = reach[i]
            weight = f"{format_fixed(self.weights[i], '', 4, sign=True)}"
            self._reading(
                f"{s.name} alone" if grounded else f"{s.name} moved alone", setup, volts,
                f"With the reading at rest it gives the weight of {s.name}, {weight}, alone.",
                f"No change: the {s.name} leg is open. Wrong sign: it is on the other node. Another amount: a wrong value, or legs "
                "exchanged; if the other weights are off too, all legs on its node share the blame.",
            )  # fmt: skip
        if n > 1:
            order = np.argsort(-np.abs(self.weights * (np.array(reach) - rest)), kind="stable")
            pair = order[:2]
            volts = rest.copy()
            volts[pair] = [reach[i] for i in pair]
            names = " and ".join(design.signals[i].name for i in sorted(pair))
            volts = self._pull_in(rest, volts)
            self._reading(
                f"{names} together", setup, volts, "Two at once must add up to what each did alone.",
                "Not the sum: the output or the current limit is reached, or the sources pull on each other.",
            )  # fmt: skip
        for word, sign in (("highest", 1.0), ("lowest", -1.0)):
            volts = np.where(sign * self.weights > 0, self.high, self.low)
            self._reading(
                f"All together, output {word}", setup, volts,
                f"The {word} the output goes: proves the headroom on that side.",
                "Short of the limits: it clips. Look at the rail, the load and the current limit.",
                self.cautions.get("burn", ""),
            )  # fmt: skip

    @property
    def weights(self):
        return self.analysis.linear.output[-1, : len(self.design.signals)]

    def _room(self, volts):
        """Least distance of any cell's output from its limits [V]; negative when clipped; `volts` (..., n)."""
        v = np.asarray(volts, dtype=float)
        outs = v @ self.analysis.linear.output[:, :-1].T + self.analysis.linear.output[:, -1] * self.net.values[-1]
        limits = nominal_limits(self.design)
        supply = self.design.supply
        high = limits.high - supply.tolerance * abs(supply.high)
        low = limits.low + supply.tolerance * abs(supply.low)
        return np.minimum(high - outs, outs - low).min(axis=-1)

    def _rest(self):
        """All at 0 V where the stage allows it; else the point of the ranges with most room."""
        zero = np.zeros(len(self.design.signals))
        if self._room(zero) > 0.05:
            return zero
        inside = np.clip(zero, self.low, self.high)
        middle = 0.5 * (self.low + self.high)
        ends = [
            middle,
            np.where(self.weights > 0, self.high, self.low),
            np.where(self.weights > 0, self.low, self.high),
        ]
        tries = [inside + f * (end - inside) for end in ends for f in np.linspace(0, 1, 41)]
        room = self._room(np.array(tries))
        return np.round(tries[int(np.argmax(room))], 4)

    def _farthest(self, rest, i):
        """The end of a signal's range farther from rest, pulled in until nothing clips."""
        ends = sorted((self.high[i], self.low[i]), key=lambda end: -abs(end - rest[i]))
        best = rest[i]
        for end in ends:
            volts = rest.copy()
            volts[i] = end
            got = self._pull_in(rest, volts)[i]
            if abs(got - rest[i]) > abs(best - rest[i]) + 1e-12:
                best = got
        return best

    def _pull_in(self, rest, volts):
        """As far from rest towards `volts` as keeps a tenth of the room at rest."""
        if self._room(volts) > 0:
            return volts
        room = self._room(rest)
        if room <= 0:
            return volts
        share = CLOSEST * room / (room - self._room(volts))
        pulled = rest + share * (volts - rest)
        # a value a person can set
        step = 10.0 ** np.floor(np.log10(np.maximum(np.abs(pulled - rest), 1e-6)) - 1)
        return rest + np.trunc((pulled - rest) / step) * step

    def _reading(self, title, setup, volts, why, miss, caution=""):
        """A step that reads the output; a setting already read is not read twice, only said of the earlier step."""
        for k, step in enumerate(self.steps):
            if step.probe == "output" and step.apply == self._volts(volts):
                self.steps[k] = step._replace(why=f"{step.why} {why}", miss=f"{step.miss} {miss}")
                return
        p = self.bench.predict(self.bench.healthy, volts[None, :])
        expect = operating_point(self.design, volts).output
        u = float(np.sqrt(np.square(p.columns).sum() + p.own.sum() + self.meter.standard_uncertainty(expect) ** 2))
        half = 2 * u + abs(float(p.mean[0, 0]) - expect)
        self.add(
            title, setup, self._volts(volts), "output", expect, expect - half, expect + half, "V", why, miss, caution.strip()
        )  # fmt: skip

    def _volts(self, volts):
        return {s.name: float(v) + 0.0 for s, v in zip(self.design.signals, volts, strict=True)}

    # -- AC and step -------------------------------------------------------------

    def fast(self):
        design = self.design
        bands = [(r.bandwidth_3db, i) for i, r in enumerate(self.analysis.ac.signals) if r.bandwidth_3db]
        if not bands:
            return
        band, i = min(bands)
        name = design.signals[i].name
        rest = self._rest()
        swing = self._farthest(rest, i) - rest[i]
        # small enough that the slew rate leaves the sine alone
        peak = min(abs(swing) / 2, 0.3 * design.op_amp.slew_rate / (2 * np.pi * band * max(abs(self.weights[i]), 1e-9)))
        peak = float(f"{peak:.1g}")
        middle = rest.copy()
        middle[i] = rest[i] + np.sign(swing) * peak
        apply = self._volts(middle)
        self.add(
            "Bandwidth", f"Power on; a sine of {format_quantity(peak, 'V', 2, trim=True)} peak on {name} about the value given",
            apply, "output, frequency where it is 0.707 of that at a tenth of it", band, SPEED_SPREAD[0] * band,
            SPEED_SPREAD[1] * band, "Hz", f"The −3 dB point of {name}, the slowest path.",
            "Low: a slower op amp, more capacitance at the inverting node, or a larger feedback capacitor. A peak before it falls: "
            "little phase margin.",
            "Touch the inverting node only through about 10k in the probe; the probe's capacitance alone can set it ringing.",
        )  # fmt: skip
        change = abs(self.weights[i] * swing)
        linear, slewed = 0.35 / band, 0.8 * change / design.op_amp.slew_rate
        rise = float(np.hypot(linear, slewed))
        apply = rest.copy()
        apply[i] = rest[i] + swing
        self.add(
            "Step", f"Power on; {name} stepping between {format_fixed(rest[i], 'V', 2)} and the value given", self._volts(apply),
            "output, rise time from 10 to 90 %", rise, rise / SPEED_SPREAD[1], rise / SPEED_SPREAD[0], "s",
            "Shows slewing, overshoot and ringing at full size. Expected: 0.35 over the bandwidth, and 0.8 of the step over the slew rate.",
            "Overshoot past a fifth or ringing that goes on: little phase margin; look at the load's and the wiring's capacitance.",
        )  # fmt: skip


def resistance_between(net: Network, a, b) -> tuple[float, float, float, list[str]]:
    """What an ohmmeter reads between two nodes with the power off and every plug at ground.

    Parameters
    ----------
    net : Network
    a, b : (kind, cell) or None
        Kind "m", "p" or "o" (inverting node, + node, output); None is ground.

    Returns
    -------
    ohm : float
        Infinite if nothing joins them.
    spread : float
        Standard uncertainty from the resistors' tolerance [ohm].
    worst : float
        Sum of each resistor's largest change [ohm].
    names : list of str
        The parts that matter, most first.

    Notes
    -----
    Dead op amps are taken as open at all pins, which holds for the fraction of a volt
    that an ohmmeter applies. Source: Kirchhoff's current law; signal sources
    are out of circuit.
    """
    cells = net.cell_count
    index = {("m", k): 3 * k for k in range(cells)} | {("p", k): 3 * k + 1 for k in range(cells)}
    index |= {("o", k): 3 * k + 2 for k in range(cells)}
    ground = 3 * cells
    ends = []
    for p in net.parts:
        node = index["m" if p.kind in ("minus", "minus_ground", "feedback") else "p", p.cell]
        if p.kind == "feedback":
            other = index["o", p.cell]
        elif p.kind in ("minus", "plus") and p.source.startswith("cell ") and p.source not in net.design.signal_names:
            other = index["o", int(p.source[5:]) - 1]
        else:
            other = ground
        ends.append((node, other))
    ohms = np.array([p.resistance for p in net.parts])
    names = [p.name for p in net.parts]
    if net.load_conductance:
        ends.append((index["o", cells - 1], ground))
        ohms = np.append(ohms, 1 / net.load_conductance)
        names.append("load")
    tied = [index["p", k] for k, c in enumerate(net.cells) if c.tied != -1]

    def solve(r):
        size = ground + 1
        g = np.zeros((size, size))
        links = [(i, j, 1 / max(x, 1e-3)) for (i, j), x in zip(ends, r, strict=True)]
        links += [(i, ground, 1e3) for i in tied]
        for i, j, y in links:
            g[i, i] += y
            g[j, j] += y
            g[i, j] -= y
            g[j, i] -= y
        probe = np.zeros(size)
        probe[index[a]] += 1.0
        probe[ground if b is None else index[b]] -= 1.0
        level, *_ = np.linalg.lstsq(g, probe, rcond=1e-13)
        if np.abs(g @ level - probe).max() > 1e-6:
            return np.inf
        return float(probe @ level)

    ohm = solve(ohms)
    if not np.isfinite(ohm):
        return ohm, 0.0, 0.0, []
    tolerance = net.design.resistor.tolerance
    change = np.zeros(len(ohms))
    for i in range(len(net.parts)):
        up, down = ohms.copy(), ohms.copy()
        up[i] *= 1 + tolerance
        down[i] *= 1 - tolerance
        change[i] = max(abs(solve(up) - ohm), abs(solve(down) - ohm))
    share = np.array([abs(solve(ohms * (1 + 1e-3 * (np.arange(len(ohms)) == i))) - ohm) for i in range(len(ohms))])
    order = [i for i in np.argsort(-share, kind="stable") if share[i] > 2e-3 * share.max()]
    return ohm, float(np.sqrt(np.square(change / np.sqrt(3)).sum())), float(change.sum()), [names[i] for i in order]
