"""What to tighten first: the cheapest resistor grades that meet an accuracy, and what trimming would leave.

First-order throughout (JCGM 100:2008, 5.1.2): variances of independent terms add, so
choosing a grade for each resistor is a small integer programme with one constraint
for each point that must hold.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, milp

from .budget import (
    POINTS,
    error_budgets,
    extreme_corners,
    influences,
    network_of,
    supply_error,
    temperature_span,
)

# tolerance, usual temperature coefficient [1/K], price against a 1 % part: representative, ask your supplier
GRADES = (
    (0.05, 2e-4, 0.7),
    (0.02, 1e-4, 0.9),
    (0.01, 1e-4, 1.0),
    (0.005, 5e-5, 2.0),
    (0.001, 2.5e-5, 5.0),
    (0.0005, 1e-5, 12.0),
    (0.0001, 5e-6, 40.0),
)


class Change(NamedTuple):
    part: str
    tolerance: float  # relative, the grade to fit
    temperature_coefficient: float  # 1/K, of that grade


class Plan(NamedTuple):
    """The cheapest way to meet `wanted` [V] with better resistors alone.

    `possible` is False where even the best grade everywhere is not enough; `errors`
    then are what that would leave. `errors`: |shift| + 95 % at each point [V].
    `extra_cost` in prices of a 1 % part.
    """

    wanted: float
    possible: bool
    changes: tuple[Change, ...]
    errors: dict[str, float]
    extra_cost: float
    obstacle: str  # the largest term that resistors do not touch


def tighten(stage, wanted: float | None = None) -> Plan:
    """Which resistors to make better, and how much, so that every point meets `wanted`.

    Parameters
    ----------
    stage : Design or Analysis
    wanted : float, optional
        Allowed |shift| + 95 % [V]; by default `target.accuracy`.

    Returns
    -------
    Plan

    Raises
    ------
    InvalidQuantity
        Where no accuracy is wanted.
    """
    from ..errors import InvalidQuantity

    net = network_of(stage)
    design, kind = net.design, net.design.resistor
    wanted = design.target.accuracy if wanted is None else wanted
    if wanted is None or not wanted > 0:
        raise InvalidQuantity(f"the wanted accuracy must be above 0 V to plan for it; it is {wanted}.")
    budgets = error_budgets(stage)
    own = (kind.tolerance, kind.temperature_coefficient, _price(kind.tolerance))
    grades = [own] + [
        (t, min(c, kind.temperature_coefficient), max(p, own[2] * 1.01))
        for t, c, p in GRADES
        if t < kind.tolerance * 0.999
    ]
    labels = budgets["present"].labels
    rows = [i for i, label in enumerate(labels) if label[2] == "tolerance"]
    hot = {label[1]: i for i, label in enumerate(labels) if label[2] == "temperature"}
    parts = [labels[i][1] for i in rows]
    n, g = len(rows), len(grades)
    variance, fixed, shifts = np.zeros((3, n, g)), np.zeros(3), np.zeros(3)
    obstacle = ("", 0.0)
    for q, point in enumerate(POINTS):
        b = budgets[point]
        u2 = b.standard_uncertainties**2
        for r, i in enumerate(rows):
            for j, (t, c, _) in enumerate(grades):
                by_tolerance = u2[i] * (t / own[0]) ** 2 if own[0] else 0.0
                by_heat = u2[hot[parts[r]]] * (c / own[1]) ** 2 if own[1] else 0.0
                variance[q, r, j] = by_tolerance + by_heat
        others = [i for i, label in enumerate(labels) if label[2] not in ("tolerance", "temperature")]
        fixed[q], shifts[q] = u2[others].sum(), abs(b.shift)
        top = max(others, key=lambda i: u2[i], default=None)
        if top is not None and u2[top] > obstacle[1]:
            obstacle = (labels[top][0], u2[top])
    room = ((wanted - shifts) / 2.0) ** 2 * np.sign(wanted - shifts) - fixed

    def outcome(choice):
        left = fixed + variance[:, np.arange(n), choice].sum(axis=1)
        return {p: float(s + 2 * math.sqrt(v)) for p, s, v in zip(POINTS, shifts, left, strict=True)}

    best = np.full(n, g - 1)
    if n == 0 or (variance[:, np.arange(n), best].sum(axis=1) > room).any():
        return Plan(wanted, n == 0 and bool((room >= 0).all()), (), outcome(best), 0.0, obstacle[0])
    price = np.tile([p for _, _, p in grades], n) - own[2]
    one_each = np.kron(np.eye(n), np.ones(g))
    scale = room.max()
    found = milp(
        price + 1e-6 * np.tile(np.arange(g), n),
        constraints=[
            LinearConstraint(one_each, 1, 1),
            LinearConstraint(variance.reshape(3, -1) / scale, -np.inf, room * (1 - 1e-9) / scale),
        ],
        integrality=np.ones(n * g), bounds=Bounds(0, 1), options={"time_limit": 2.0},
    )  # fmt: skip
    choice = found.x.reshape(n, g).argmax(axis=1) if found.x is not None else best
    changes = tuple(Change(parts[r], *grades[j][:2]) for r, j in enumerate(choice) if j)
    return Plan(
        wanted, True, changes, outcome(choice), float(price.reshape(n, g)[np.arange(n), choice].sum()), obstacle[0]
    )


def _price(tolerance):
    """Price of a grade by interpolation of the usual ones in log-log."""
    t = [math.log(row[0]) for row in reversed(GRADES)]
    p = [math.log(row[2]) for row in reversed(GRADES)]
    return math.exp(np.interp(math.log(max(tolerance, 1e-5)), t, p))


class Remains(NamedTuple):
    """What is left of the error [V, |shift| + 95 %] at the worst place after each kind of correction.

    `offset`: the output adjusted to its wanted value with the signals at 0 V, or as near
    as their ranges go. `offset_and_gain`: there, and at the corner whose output is
    farthest from it. `software`: every weight and
    the offset measured and corrected. All at nominal temperature and supply: drift,
    temperature coefficients and supply rejection stay.
    """

    untrimmed: float
    offset: float
    offset_and_gain: float
    software: float


def after_trim(stage) -> Remains:
    """What trimming or correcting would leave; the worst over the corners, each signal flipped alone, and now.

    Parameters
    ----------
    stage : Design or Analysis
    """
    net = network_of(stage)
    design, amp, kind = net.design, net.design.op_amp, net.design.resistor
    known = getattr(stage, "error_influences", None)
    inf = influences(net) if known is None else known
    n = net.signal_count
    corners = extreme_corners(net, inf.nominal)
    zero = np.append(np.clip(0.0, net.lows, net.highs), net.values[n:])
    far = max(("highest", "lowest"), key=lambda p: abs(inf.nominal @ (corners[p] - zero)))
    near = "lowest" if far == "highest" else "highest"
    places = [zero, corners[far], corners[near], corners["present"]]
    for i in range(n):
        for a, b in ((1, 2), (2, 1)):
            flipped = places[a].copy()
            flipped[i] = places[b][i]
            places.append(flipped)
    x = np.array(places).T  # (sources, places)
    span = temperature_span(design)
    slope = inf.slope[:, None] * inf.across  # (resistors, sources)
    third = 1 / math.sqrt(3)
    mid = 0.5 * (design.supply.high + design.supply.low)
    ones = np.ones(x.shape[1])
    stays, goes = [], []  # rows of u over the places: what a correction at nominal conditions cannot and can reach
    goes += list(slope @ x * kind.tolerance * third)
    stays += list(slope @ x * kind.temperature_coefficient * span.most * third * span.ratio)
    for k in range(net.cell_count):
        volt, bias, offset = inf.op_amp[k]
        goes += [
            volt * amp.offset_voltage * third * ones, bias * amp.bias_current * third * ones,
            offset * amp.offset_current * third * ones, volt * (inf.plus[k] @ x - mid) / amp.cmrr * third,
        ]  # fmt: skip
        stays += [
            volt * amp.offset_drift * span.most * third * span.ratio * ones,
            volt * supply_error(design) * third * ones,
        ]
    if inf.uses_reference and design.reference is not None:
        goes.append(inf.nominal[n] * design.reference.voltage * design.reference.tolerance * third * ones)
    go, stay = np.array(goes).reshape(-1, x.shape[1]), np.array(stays).reshape(-1, x.shape[1])
    shift = inf.nominal @ x - (np.array([s.weight for s in design.signals]) @ x[:n] + design.target.offset)
    y = inf.nominal @ x
    reach = y[1] - y[0]
    share = (y - y[0]) / reach if reach else np.zeros_like(y)

    def left(known_shift, rows):
        return float((np.abs(known_shift) + 2 * np.sqrt((rows**2).sum(axis=0) + (stay**2).sum(axis=0))).max())

    def one(e):
        return e - e[..., :1]

    def two(e):
        return e - e[..., :1] - (e[..., 1:2] - e[..., :1]) * share

    return Remains(left(shift, go), left(one(shift), one(go)), left(two(shift), two(go)), left(0 * shift, 0 * go))
