"""How far off the output can be, and whose fault it is.

Every quantity with a limit is moved alone: to either limit by an exact re-solve
(`limit_effect`), and by a tiny step for the first derivative, from which its
standard uncertainty follows. What is known beforehand (rounding to fitted values,
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
_STEP = 1e-5  # relative step of the central difference: truncation and rounding both near 1e-10


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

    `moved` (6, resistors, sources): influence of each source on the output with one
    resistor at + and - its tolerance, + and - its temperature limit, and a tiny
    step up and down. `nominal`, `ideal`, `loaded` (sources,): as designed; with an
    ideal op amp and no source resistance; with source resistance alone added.
    `op_amp` (cells, 3): output per volt of input error, per ampere of bias current,
    per ampere of offset current. `plus` (cells, sources): influence on the + pins.
    """

    labels: tuple[tuple[str, str, str], ...]
    moved: np.ndarray
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


def influences(net: nodes.Network) -> Influences:
    """One batched solve for every quantity at its limits and beside its nominal."""
    design, kind = net.design, net.design.resistor
    span = temperature_span(design)
    r0, cells, sources = net.resistances, net.cell_count, net.signal_count + 1
    fitted = np.flatnonzero(np.isfinite(r0) & (r0 > 0))
    count = len(fitted)
    hot = kind.temperature_coefficient * span.most
    moves = np.array([kind.tolerance, -kind.tolerance, hot, -hot, _STEP, -_STEP])
    rows = 6 * count
    trial = np.tile(r0, (rows + 3, 1))
    trial[np.arange(rows), np.tile(fitted, 6)] *= 1.0 + np.repeat(moves, count)
    gain = np.full(rows + 3, float(design.op_amp.open_loop_gain))
    if all(c.feedback >= 0 for c in net.cells):  # an open loop has no answer at infinite gain
        gain[-2:] = np.inf
    rs = np.tile(net.source_resistances, (rows + 3, 1))
    # a leg of 0 ohm is alone on a + pin, which draws nothing at infinite gain: its source's resistance may stay
    names = {p.source for p in net.parts if p.resistance == 0}
    rs[-1] = np.where([n in names for n in (*design.signal_names, REFERENCE)], rs[-1], 0.0)

    # the op amps' errors are right-hand sides, so their slopes are exact
    columns = sources + 3 * cells
    drive = np.zeros((sources, columns))
    drive[:, :sources] = np.eye(sources)
    error, into_m, into_p = (np.zeros((cells, columns)) for _ in range(3))
    for k in range(cells):
        volt, bias, offset = range(sources + 3 * k, sources + 3 * k + 3)
        error[k, volt] = 1.0
        into_m[k, bias] = into_p[k, bias] = -1.0
        into_m[k, offset], into_p[k, offset] = 0.5, -0.5
    sol = nodes.solve(
        net,
        drive,
        resistances=trial,
        gain=gain,
        source_resistances=rs,
        error=error,
        into_minus=into_m,
        into_plus=into_p,
    )
    out = sol.output[:, -1]
    uses_reference = design.reference is not None and any(p.source == REFERENCE for p in net.parts)
    return Influences(
        _labels(net, fitted, uses_reference), out[:rows, :sources].reshape(6, count, sources), out[rows, :sources],
        out[rows + 2, :sources], out[rows + 1, :sources], out[rows, sources:].reshape(cells, 3),
        sol.plus[rows, :, :sources], uses_reference,
    )  # fmt: skip


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
    out = inf.moved @ x
    nominal, ideal_amp, loaded = inf.nominal @ x, inf.ideal @ x, inf.loaded @ x
    wanted = ideal_output(design, x[:n].T)
    slope_r = (out[4] - out[5]) / (2 * _STEP)  # V per relative change
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
    effects = [np.abs(out[:2] - nominal).max(axis=0), np.abs(out[2:4] - nominal).max(axis=0), np.abs(flat)]
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
    r = inf.moved.shape[1]
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
    slopes = (inf.moved[4] - inf.moved[5]) @ x / (2 * _STEP) * 0.01
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
