"""How far off the output can be, and whose fault it is.

Every quantity with a limit is moved alone: exactly to either limit (`limit_effect`),
and by its first derivative, from which its standard uncertainty follows. A resistor
that changes acts as a current beside it, so both follow from the voltage across it
and from what a current there does to the output. What is known beforehand (rounding to fitted values,
source resistance, finite gain) is a shift, not an uncertainty.

Sources: JCGM 101:2008, 6.4.2 (a limit without a distribution is rectangular:
u = limit / √3); JCGM 100:2008, 5.1.2 (first-order combination).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np

from . import nodes
from .operating_point import ideal_output
from .stage import REFERENCE, Design

POINTS = ("present", "highest", "lowest")


class Term(NamedTuple):
    """One entry of the budget; all in volts at the stage's output.

    `kind` is one of tolerance, temperature, offset voltage, offset drift, bias
    current, offset current, CMRR, PSRR, reference, rounding, source resistance,
    finite gain; `source` is the part it comes from. `slope` is the first-order
    change of the output for one limit of the quantity, sign kept (0 for shifts).
    """

    name: str
    source: str
    kind: str
    limit_effect: float
    standard_uncertainty: float
    shift: float
    slope: float


@dataclass(frozen=True)
class Budget:
    """The error budget at one point [V], relative to the ideal output.

    Arrays run over the terms: `names`, `sources`, `kinds` as in `Term`.
    """

    point: str
    signals: np.ndarray  # (signals,) V, where it is taken
    output: float  # nominal, unclipped
    ideal_output: float  # wanted weights and offset
    labels: tuple[tuple[str, str, str], ...]  # name, source, kind of each term
    limit_effects: np.ndarray
    standard_uncertainties: np.ndarray
    shifts: np.ndarray
    slopes: np.ndarray

    @property
    def shift(self) -> float:
        """Known beforehand: output - ideal_output [V]."""
        return self.output - self.ideal_output

    @property
    def worst_case(self) -> float:
        """Every quantity at its worst limit at once, the known shift on top [V]."""
        return float(self.limit_effects.sum()) + abs(self.shift)

    @property
    def combined(self) -> float:
        """Standard uncertainty of the output [V], first order."""
        return float(math.sqrt(self.standard_uncertainties @ self.standard_uncertainties))

    @property
    def expanded_95(self) -> float:
        """2 u: about 95 % of boards lie this near the shifted mean [V]."""
        return 2.0 * self.combined

    @cached_property
    def terms(self) -> tuple[Term, ...]:
        numbers = zip(
            self.limit_effects.tolist(), self.standard_uncertainties.tolist(), self.shifts.tolist(),
            self.slopes.tolist(), strict=True,
        )  # fmt: skip
        return tuple(Term(*label, *row) for label, row in zip(self.labels, numbers, strict=True))

    @property
    def shares(self) -> np.ndarray:
        """Share of each term in the variance, adding up to one (zeros if there is no variance)."""
        u2 = self.standard_uncertainties**2
        total = u2.sum()
        return u2 / total if total > 0 else u2


class Temperature(NamedTuple):
    """The ambient range as seen from its nominal [K]."""

    low: float
    high: float
    most: float  # the farther end, absolute
    ratio: float  # rms of a rectangular ΔT over `most`


def temperature_span(design: Design) -> Temperature:
    """ΔT of the ambient's ends from its nominal, and how a term that grows with it spreads."""
    a = design.ambient.low - design.ambient.nominal
    b = design.ambient.high - design.ambient.nominal
    most = max(abs(a), abs(b))
    if most == 0:
        return Temperature(a, b, 0.0, 0.0)
    mean_square = (b * b + a * b + a * a) / 3.0
    return Temperature(a, b, most, math.sqrt(mean_square) / most)


def supply_error(design: Design) -> float:
    """Input-referred change [V] when the total supply moves by its tolerance."""
    s = design.supply
    return s.tolerance * (abs(s.high) + abs(s.low)) / design.op_amp.psrr


class Influences(NamedTuple):
    """What every quantity of the budget does, before the signals' values are known.

    `across` (resistors, sources): voltage across each resistor (source resistance in
    it) per volt of source. `moved` (4, resistors): change of the output per volt
    across with that resistor at + and - its tolerance, + and - its temperature limit;
    `slope` (resistors,): per relative change of it. `nominal`, `ideal`, `loaded`
    (sources,): influence on the output as designed; with an ideal op amp and no source
    resistance; with source resistance alone added. `op_amp` (cells, 3): output per volt
    of input error, per ampere of bias current, per ampere of offset current. `plus`
    (cells, sources): influence on the + pins.
    """

    labels: tuple[tuple[str, str, str], ...]
    across: np.ndarray
    moved: np.ndarray
    slope: np.ndarray
    nominal: np.ndarray
    ideal: np.ndarray
    loaded: np.ndarray
    op_amp: np.ndarray
    plus: np.ndarray
    uses_reference: bool


def network_of(stage) -> nodes.Network:
    """The compiled network of a design or of an analysis."""
    net = getattr(stage, "net", None)
    return nodes.Network(stage) if net is None else net


def unit_responses(net: nodes.Network) -> nodes.Solution:
    """Every node for 1 V of each source, 1 V in series with each + input, 1 A into each m, each p and each o.

    Leading axis: as designed; with an ideal op amp; with ideal sources too. Where a
    loop is open there is no answer at infinite gain and the op amp's own gain stays.
    """
    design, cells, sources = net.design, net.cell_count, net.signal_count + 1
    gain = np.full(3, float(design.op_amp.open_loop_gain))
    if all(c.feedback >= 0 for c in net.cells):
        gain[1:] = np.inf
    rs = np.tile(net.source_resistances, (3, 1))
    # a leg of 0 ohm is alone on a + pin, which draws nothing at infinite gain: its source's resistance may stay
    names = {p.source for p in net.parts if p.resistance == 0}
    rs[2] = np.where([n in names for n in (*design.signal_names, REFERENCE)], rs[2], 0.0)
    columns = sources + 4 * cells
    unit = np.eye(columns)
    error, into_m, into_p, into_o = unit[sources:].reshape(4, cells, columns)
    return nodes.solve(
        net, unit[:sources], gain=gain, source_resistances=rs,
        error=error, into_minus=into_m, into_plus=into_p, into_output=into_o,
    )  # fmt: skip


def influences(net: nodes.Network, unit: nodes.Solution | None = None) -> Influences:
    """What follows for every quantity from `unit_responses`, the caller's if there are some.

    Notes
    -----
    A conductance that changes by d passes d·u' more than before, u' its new voltage.
    With u across it before, z the voltage across it and t the output for a current
    through the place, u' = u / (1 + d z) and the output moves by -d t u': exact for any
    d (Sherman-Morrison; the compensation theorem).
    """
    design, kind = net.design, net.design.resistor
    span = temperature_span(design)
    r0, cells, sources = net.resistances, net.cell_count, net.signal_count + 1
    fitted = np.flatnonzero(np.isfinite(r0) & (r0 > 0))
    sol = unit_responses(net) if unit is None else unit
    out = sol.output[:, -1]
    by_error, by_minus, by_plus, _ = out[0, sources:].reshape(4, cells)

    # the voltages that ends of resistors see, a row each: sources, m, p, o of each cell, ground
    first, other, behind = _ends(net)
    first, other = first[fitted], other[fitted]
    volts = np.zeros((sources + 3 * cells + 1, out.shape[-1]))
    volts[:sources, :sources] = np.eye(sources)
    volts[sources:-1] = np.concatenate([sol.minus[0], sol.plus[0], sol.output[0]])
    by_current = np.zeros((len(volts), len(volts)))  # from a current into the place; none moves a source or ground
    by_current[:, sources:-1] = volts[:, sources + cells :]
    t = by_current[-2, first] - by_current[-2, other]
    z = by_current[first, first] - by_current[first, other] - by_current[other, first] + by_current[other, other]
    hot = kind.temperature_coefficient * span.most
    r, rs_of = r0[fitted], behind[fitted]
    g = 1.0 / (r + rs_of)
    d = 1.0 / (r * (1.0 + np.array([[kind.tolerance], [-kind.tolerance], [hot], [-hot]])) + rs_of) - g
    across = volts[:, :sources]
    uses_reference = design.reference is not None and any(p.source == REFERENCE for p in net.parts)
    return Influences(
        _labels(net, fitted, uses_reference), across[first] - across[other], -d * t / (1.0 + d * z), t * r * g * g,
        out[0, :sources], out[2, :sources], out[1, :sources],
        np.stack([by_error, -by_minus - by_plus, 0.5 * (by_minus - by_plus)], axis=-1), sol.plus[0, :, :sources],
        uses_reference,
    )  # fmt: skip


def _ends(net):
    """For each part its node, what it comes from (rows as in `influences`) and the source resistance behind it [ohm]."""
    cells, sources = net.cell_count, net.signal_count + 1
    m, p, o, ground = (sources + i * cells for i in range(4))
    first, other, behind = np.full(len(net.parts), m), np.full(len(net.parts), ground), np.zeros(len(net.parts))
    for k, c in enumerate(net.cells):
        for node, parts, legs in ((m, c.minus_parts, c.minus_sources), (p, c.plus_parts, c.plus_sources)):
            first[parts] = node + k
            other[parts] = np.where(legs < sources, legs, legs + 2 * cells)
            behind[parts] = net._leg_rs[legs]
        for part, node, to in ((c.minus_ground, m, ground), (c.plus_ground, p, ground), (c.feedback, m, o + k)):
            if part >= 0:
                first[part], other[part] = node + k, to
    return first, other, behind


_OP_AMP_TERMS = ("offset voltage", "offset drift", "bias current", "offset current", "CMRR", "PSRR")


def _labels(net, fitted, uses_reference):
    names = [net.parts[i].name for i in fitted]
    labels = [(f"{n} tolerance", n, "tolerance") for n in names]
    labels += [(f"{n} temperature", n, "temperature") for n in names]
    for k in range(net.cell_count):
        suffix = f", cell {k + 1}" if net.cell_count > 1 else ""
        labels += [(f"{what}{suffix}", f"op amp{suffix}", what) for what in _OP_AMP_TERMS]
    if uses_reference:
        labels.append(("reference tolerance", REFERENCE, "reference"))
    labels += [
        ("rounding to fitted values", "resistors", "rounding"),
        ("source resistance", "sources", "source resistance"),
        ("finite gain", "op amp", "finite gain"),
    ]
    return tuple(labels)


def extreme_corners(net: nodes.Network, influence) -> dict[str, np.ndarray]:
    """Source voltages (sources,) at the three points, from the output's `influence` (sources,)."""
    n = net.signal_count
    up = influence[:n] >= 0
    reference = net.values[n:]
    return {
        "present": net.values,
        "highest": np.concatenate([np.where(up, net.highs, net.lows), reference]),
        "lowest": np.concatenate([np.where(up, net.lows, net.highs), reference]),
    }


def error_budgets(stage, points=POINTS) -> dict[str, Budget]:
    """The error budget at the present values and at both extreme corners.

    Parameters
    ----------
    stage : Design or Analysis
        Realised (with cells); an analysis may have cables out.
    points : sequence of str, optional
        Which of `present`, `highest`, `lowest`.

    Returns
    -------
    dict of str to Budget

    Notes
    -----
    A term that grows with temperature has its limit at the ambient's farther end.
    The current into a pin is I+ = Ib + Ios/2, I- = Ib - Ios/2. The known shifts are
    told apart in the order rounding (ideal op amp, ideal sources), then source
    resistance, then the op amp's finite gain with its input and output resistance
    and the load.
    """
    net = network_of(stage)
    known = getattr(stage, "error_influences", None)  # an analysis keeps them from move to move
    inf = influences(net) if known is None else known
    design, amp, kind = net.design, net.design.op_amp, net.design.resistor
    n = net.signal_count
    span = temperature_span(design)
    hot = kind.temperature_coefficient * span.most
    corners = extreme_corners(net, inf.nominal)
    x = np.stack([corners[p] for p in points], axis=-1)  # (sources, points)
    across = inf.across @ x
    nominal, ideal_amp, loaded = inf.nominal @ x, inf.ideal @ x, inf.loaded @ x
    wanted = ideal_output(design, x[:n].T)
    slope_r = inf.slope[:, None] * across  # V per relative change
    mid = 0.5 * (design.supply.high + design.supply.low)
    per_volt, per_bias, per_offset = inf.op_amp.T[..., None]  # each (cells, 1)
    ones = np.ones(len(points))
    amp_slopes = np.stack(
        [
            per_volt * amp.offset_voltage * ones,
            per_volt * amp.offset_drift * span.most * ones,
            per_bias * amp.bias_current * ones,
            per_offset * amp.offset_current * ones,
            per_volt * (inf.plus @ x - mid) / amp.cmrr,
            per_volt * supply_error(design) * ones,
        ],
        axis=1,
    )  # (cells, 6, points)
    flat = amp_slopes.reshape(-1, len(points))
    blocks = [slope_r * kind.tolerance, slope_r * hot, flat]
    by_tolerance, by_heat = np.abs(inf.moved).reshape(2, 2, -1).max(axis=1)[..., None] * np.abs(across)
    effects = [by_tolerance, by_heat, np.abs(flat)]
    if inf.uses_reference and design.reference is not None:
        by_reference = inf.nominal[n] * design.reference.voltage * design.reference.tolerance * ones[None]
        blocks.append(by_reference)
        effects.append(np.abs(by_reference))
    zero = np.zeros((3, len(points)))
    slopes = np.concatenate([*blocks, zero])
    limits = np.concatenate([*effects, zero])
    shifts = np.zeros_like(slopes)
    shifts[-3:] = ideal_amp - wanted, loaded - ideal_amp, nominal - loaded
    ratio = np.full(len(slopes), 1.0 / math.sqrt(3.0))
    r = len(inf.slope)
    ratio[r : 2 * r] *= span.ratio
    ratio[2 * r + 1 : 2 * r + len(flat) : len(_OP_AMP_TERMS)] *= span.ratio
    u = np.abs(slopes) * ratio[:, None]
    return {
        point: Budget(
            point, x[:n, q].copy(), float(nominal[q]), float(wanted[q]), inf.labels,
            limits[:, q], u[:, q], shifts[:, q], slopes[:, q],
        )
        for q, point in enumerate(points)
    }  # fmt: skip


def error_budget(stage, point: str = "present") -> Budget:
    """The error budget at one point: `present`, `highest` or `lowest`; see `error_budgets`."""
    return error_budgets(stage, (point,))[point]


class Sensitivity(NamedTuple):
    """How far the output moves [V] for a small change of one quantity: `per` says of what."""

    part: str
    per: str  # "+1 %", "1 mV", "1 nA"
    volts: float


def sensitivities(stage, point: str = "present") -> tuple[Sensitivity, ...]:
    """First derivatives of the output at one point, whatever the limits are; largest first.

    Resistors and the reference for +1 %, input error voltage for 1 mV, bias and offset
    current for 1 nA of each op amp.
    """
    net = network_of(stage)
    known = getattr(stage, "error_influences", None)
    inf = influences(net) if known is None else known
    x = extreme_corners(net, inf.nominal)[point]
    slopes = inf.slope * (inf.across @ x) * 0.01
    names = [part for _, part, kind in inf.labels if kind == "tolerance"]
    found = [Sensitivity(name, "+1 %", float(v)) for name, v in zip(names, slopes, strict=True)]
    if inf.uses_reference:
        found.append(Sensitivity(REFERENCE, "+1 %", float(inf.nominal[-1] * x[-1] * 0.01)))
    found.sort(key=lambda s: -abs(s.volts))
    for k, (volt, bias, offset) in enumerate(inf.op_amp.tolist()):
        at = f"op amp, cell {k + 1}" if net.cell_count > 1 else "op amp"
        found.append(Sensitivity(f"{at}, offset voltage", "1 mV", volt * 1e-3))
        found.append(Sensitivity(f"{at}, bias current", "1 nA", bias * 1e-9))
        found.append(Sensitivity(f"{at}, offset current", "1 nA", offset * 1e-9))
    return tuple(found)
