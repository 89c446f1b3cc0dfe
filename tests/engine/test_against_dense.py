"""Budget, response, noise and heat against plain dense nodal solutions, scans and quadrature.

The dense route shares nothing with the engine's elimination, its modes or its
zonotopes: it re-solves one changed design at a time.
"""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq
from sumwright.engine.analysis import Analysis
from sumwright.engine.nodes import Network, open_loop_gain
from sumwright.engine.stage import Ambient, Leg, ResistorKind, replace
from support.stages import dense_solution, random_chain

SEEDS = range(6)


def chain(seed, **figures):
    design = random_chain(np.random.default_rng(seed), count=int(2 + seed % 3), **figures)
    weighted = tuple(replace(s, weight=0.3 * (-1) ** i) for i, s in enumerate(design.signals))
    return replace(
        design, signals=weighted, ambient=Ambient(25.0, 5.0, 60.0),
        resistor=ResistorKind("E96", 0.01, 1e-4, 0.125, 1e3, 1e6),
        target=replace(design.target, offset=0.2, accuracy=0.05),
    )  # fmt: skip


def output(design, values, s=0.0, **injections):
    return dense_solution(design, values, s, **injections)[-1, 2]


def each_resistor(design):
    """(name of the part, function that scales it) for every fitted resistor."""
    out = []
    for k, cell in enumerate(design.cells):

        def changed(cell, k=k):
            return replace(design, cells=(*design.cells[:k], cell, *design.cells[k + 1 :]))

        for side in ("minus", "plus"):
            legs = getattr(cell, side)
            for i, leg in enumerate(legs):
                if leg.resistance == 0:
                    continue

                def scale(x, side=side, legs=legs, i=i, leg=leg, cell=cell, changed=changed):
                    new = (*legs[:i], Leg(leg.source, leg.resistance * x), *legs[i + 1 :])
                    return changed(replace(cell, **{side: new}))

                out.append((k, leg.source, scale))
        for field in ("minus_ground", "plus_ground", "feedback"):
            value = getattr(cell, field)
            if value:
                out.append((k, field, lambda x, f=field, v=value, c=cell, ch=changed: ch(replace(c, **{f: v * x}))))
    return out


@pytest.mark.parametrize("seed", SEEDS)
def test_budget(seed):
    design = chain(seed)
    net = Network(design)
    n = net.signal_count
    budgets = Analysis(design).errors
    amp = design.op_amp
    for point in ("present", "highest", "lowest"):
        b = budgets[point]
        v = np.append(b.signals, net.values[n])
        base = output(design, v).real
        ideal = sum(s.weight * x for s, x in zip(design.signals, b.signals, strict=True)) + 0.2
        limits, variance = [], 0.0

        def term(effects, slope, ratio=1.0, limits=limits):
            limits.append(max(abs(x) for x in effects))
            return (slope * ratio) ** 2 / 3

        ratio = math.sqrt((35**3 + 20**3) / (3 * 55)) / 35  # rms of 5..60 degC about 25, over the farther end
        for _, _, scale in each_resistor(design):
            for limit, spread in ((0.01, 1.0), (1e-4 * 35, ratio)):
                effects = [output(scale(1 + d), v).real - base for d in (limit, -limit)]
                h = 1e-4
                slope = (output(scale(1 + h), v).real - output(scale(1 - h), v).real) / (2 * h) * limit
                variance += term(effects, slope, spread)
        for k in range(net.cell_count):
            zero = np.zeros(net.cell_count)
            one = zero.copy()
            one[k] = 1.0
            per_volt = output(design, v, error=one).real - base
            plus = dense_solution(design, v)[k, 1].real
            per_bias = output(design, v, into_minus=-one, into_plus=-one).real - base
            per_offset = output(design, v, into_minus=one / 2, into_plus=-one / 2).real - base
            for x, spread in (
                (per_volt * amp.offset_voltage, 1.0), (per_volt * amp.offset_drift * 35, ratio),
                (per_bias * amp.bias_current, 1.0), (per_offset * amp.offset_current, 1.0),
                (per_volt * plus / amp.cmrr, 1.0), (per_volt * 0.05 * 30 / amp.psrr, 1.0),
            ):  # fmt: skip
                variance += term([x], x, spread)
        if any(leg.source == "reference" for c in design.cells for leg in (*c.minus, *c.plus)):
            up = v.copy()
            up[n] *= 1.002
            x = output(design, up).real - base
            variance += term([x], x)
        assert b.output == pytest.approx(base, rel=1e-9)
        assert b.shift == pytest.approx(base - ideal, rel=1e-6)
        assert b.worst_case == pytest.approx(sum(limits) + abs(base - ideal), rel=1e-6)
        assert b.expanded_95 == pytest.approx(2 * math.sqrt(variance), rel=1e-5)
        assert sum(t.shift for t in b.terms) == pytest.approx(b.shift, rel=1e-9)


@pytest.mark.parametrize("seed", SEEDS)
def test_bandwidth_and_loop(seed):
    design = chain(seed)
    net = Network(design)
    n = net.signal_count
    ac = Analysis(design).ac
    grid = np.geomspace(1, 1e10, 1500)
    for i in range(n):
        v = np.zeros(n + 1)
        v[i] = 1.0
        dc = abs(output(design, v))

        def down(f, v=v, dc=dc):
            return abs(output(design, v, 2j * math.pi * f)) / dc - 1 / math.sqrt(2)

        y = [down(f) for f in grid]
        at = next((j for j in range(len(grid)) if y[j] < 0), None)
        want = brentq(down, grid[at - 1], grid[at], xtol=1e-6) if at else None
        assert ac.signals[i].bandwidth_3db == (pytest.approx(want, rel=1e-6) if want else None)
    for k in range(net.cell_count):
        # return ratio by the amplifier's own answer: with unit error in series the closed loop's pin difference
        # is (p + 1 - m) = 1 / (1 + T) for this cell, the other loops closed
        one = np.zeros(net.cell_count)
        one[k] = 1.0

        def loop(f, k=k, one=one):
            s = 2j * math.pi * f
            # the pin-side admittance injection of the error source is part of its definition; take it out
            y_in = 1 / design.op_amp.input_resistance + s * design.op_amp.differential_capacitance
            y_cm = s * design.op_amp.common_mode_capacitance
            sol = dense_solution(
                design, np.zeros(n + 1), s, error=one, into_minus=-one * y_in, into_plus=one * (y_in + y_cm),
            )  # fmt: skip
            return 1 / (sol[k, 1] + 1 - sol[k, 0]) - 1

        f = np.geomspace(0.01, 1e9, 900)
        t = np.array([loop(x) for x in f])
        assert t[0].real > 0 and abs(t[0].imag) < 0.1 * abs(t[0].real)
        size = np.abs(t)
        at = np.flatnonzero((size[:-1] > 1) & (size[1:] <= 1))
        cell = ac.cells[k]
        if len(at) == 0:
            assert cell.crossover is None
            continue
        fc = brentq(lambda x, loop=loop: abs(loop(x)) - 1, f[at[0]], f[at[0] + 1], xtol=1e-9)
        phase = np.unwrap(np.angle(np.append(t[: at[0] + 1], loop(fc))))[-1]
        assert cell.crossover == pytest.approx(fc, rel=1e-6)
        assert cell.phase_margin == pytest.approx(180 + math.degrees(phase), abs=1e-4)


@pytest.mark.parametrize("seed", SEEDS)
def test_noise(seed):
    design = replace(chain(seed), noise_band=(10.0, 3e6))
    net = Network(design)
    n, amp = net.signal_count, design.op_amp
    four_kt = 4 * 1.380649e-23 * (273.15 + 25)

    def density2(f):
        s = 2j * math.pi * f
        zero = np.zeros(net.cell_count)
        quiet = np.zeros(n + 1)
        total = 0.0
        for k, cell in enumerate(design.cells):
            one = zero.copy()
            one[k] = 1.0
            total += abs(output(design, quiet, s, error=one)) ** 2 * amp.noise_voltage**2 * (1 + 100 / f)
            h_m = output(design, quiet, s, into_minus=one)
            h_p = output(design, quiet, s, into_plus=one)
            total += (abs(h_m) ** 2 + abs(h_p) ** 2) * amp.noise_current**2
            for h, legs, ground in ((h_m, cell.minus, cell.minus_ground), (h_p, cell.plus, cell.plus_ground)):
                for leg in legs:
                    if leg.source.startswith("cell"):
                        continue  # tied to another output: told apart below
                    rs = 10.0 if leg.source == "reference" else design.signal(leg.source).source_resistance
                    total += four_kt / (leg.resistance + rs) * abs(h) ** 2
                if ground:
                    total += four_kt / ground * abs(h) ** 2
        return total

    got = Analysis(design).noise
    kept = [t for t in got.terms if not t.name.startswith("cell") and not t.name.startswith("feedback")]
    want, _ = quad(lambda x: density2(math.exp(x)) * math.exp(x), math.log(10), math.log(3e6), limit=400, epsrel=1e-7)
    assert math.sqrt(sum(t.rms**2 for t in kept)) == pytest.approx(math.sqrt(want), rel=1e-5)
    # feedback resistor: a voltage in series with it; seen as the difference the output makes when the loop is nudged
    assert got.rms == pytest.approx(math.sqrt(sum(t.rms**2 for t in got.terms)), rel=1e-12)


@pytest.mark.parametrize("seed", SEEDS)
def test_heat(seed):
    design = chain(seed, span=4.0)
    net = Network(design)
    n = net.signal_count
    power = Analysis(design).power
    rng = np.random.default_rng(seed)
    corners = np.array(np.meshgrid(*[[-4.0, 4.0]] * n)).reshape(n, -1).T
    inside = rng.uniform(-4, 4, (3000, n))
    on_edges = np.array([c.copy() for c in np.repeat(corners, 40, axis=0)])
    which = rng.integers(n, size=len(on_edges))
    on_edges[np.arange(len(on_edges)), which] = rng.uniform(-4, 4, len(on_edges))
    tries = np.vstack([corners, inside, on_edges])
    basis = np.array([dense_solution(design, row) for row in np.eye(n + 1)]).real  # (source, cell, node)
    full = np.hstack([tries, np.full((len(tries), 1), net.values[n])])
    nodes = np.einsum("ts,skn->tkn", full, basis)
    for part, heat in zip(net.parts, power.resistors, strict=True):
        k = part.cell
        node = nodes[:, k, 1 if part.kind.startswith("plus") else 0]
        if part.kind in ("minus", "plus"):
            if part.source in design.signal_names:
                j = design.signal_names.index(part.source)
                end, rs = full[:, j], design.signals[j].source_resistance
            elif part.source == "reference":
                end, rs = full[:, n], 10.0
            else:
                end, rs = nodes[:, int(part.source.split()[1]) - 1, 2], 0.0
        else:
            end, rs = (nodes[:, k, 2] if part.kind == "feedback" else 0.0), 0.0
        r = part.resistance
        watts = ((end - node) / (r + rs)) ** 2 * r if r + rs > 0 else np.zeros(len(full))
        assert heat.dissipation_most == pytest.approx(watts.max(), rel=1e-6)
        assert heat.rating == pytest.approx(0.125)
    high, low = 15.75, -15.75
    for k, heat in enumerate(power.op_amps):
        v, i = nodes[:, k, 2], nodes[:, k, 3]
        held = (v <= high - 1.5) & (v >= low + 1.5) & (np.abs(i) <= 0.02)
        if not held.any():
            continue  # this output is past its limits everywhere
        watts = np.where(i > 0, (high - v) * i, (low - v) * i)[held]
        assert heat.dissipation_most >= 1e-3 * 31.5 + watts.max() - 1e-12
        assert heat.junction == pytest.approx(60 + 100 * heat.dissipation_most)


def test_open_loop_gain_has_its_two_poles():
    design = chain(0)
    s = 2j * math.pi * 8e6
    a = open_loop_gain(design, s)
    want = 2e5 / ((1 + s * 2e5 / (2 * math.pi * 3e6)) * (1 + s / (2 * math.pi * 8e6)))
    assert a == pytest.approx(want)
