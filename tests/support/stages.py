"""Stages to test with: one of each kind by hand, and random chains of any shape."""

import numpy as np
from sumwright.engine.stage import (
    Cell,
    Design,
    Leg,
    Load,
    OpAmp,
    Reference,
    Signal,
    Supply,
    Target,
)


def op_amp(**figures):
    """An invented JFET-like op amp; any figure can be given."""
    base = {
        "name": "invented", "open_loop_gain": 2e5, "gain_bandwidth": 3e6, "second_pole": 8e6, "slew_rate": 13e6,
        "input_resistance": 1e9, "differential_capacitance": 3e-12, "common_mode_capacitance": 5e-12,
        "output_resistance": 70.0, "offset_voltage": 1e-3, "offset_drift": 5e-6, "bias_current": 1e-8,
        "offset_current": 2e-9, "cmrr": 2e4, "psrr": 2e4, "noise_voltage": 18e-9, "noise_voltage_corner": 100.0,
        "noise_current": 1e-14, "noise_current_corner": 0.0, "dropout_high": 1.5, "dropout_low": 1.5,
        "dropout_resistance": 20.0, "common_mode_high": 1.0, "common_mode_low": 1.0, "output_current": 0.02,
        "supply_least": 6.0, "supply_most": 36.0, "supply_current": 1e-3, "thermal_resistance": 100.0,
        "junction_most": 125.0, "per_package": 1,
    }  # fmt: skip
    return OpAmp(**{**base, **figures})


def ideal_op_amp(**figures):
    """So good that a handbook's ideal op amp is met to ten digits, and without limits that matter."""
    base = {
        "open_loop_gain": 1e15, "input_resistance": 1e18, "output_resistance": 0.0, "second_pole": None,
        "differential_capacitance": 0.0, "common_mode_capacitance": 0.0, "dropout_high": 0.0, "dropout_low": 0.0,
        "dropout_resistance": 0.0, "common_mode_high": 0.0, "common_mode_low": 0.0, "output_current": 1e3,
        "supply_most": 1e6,
    }  # fmt: skip
    return op_amp(**{**base, **figures})


def signals(**weights_and_values):
    """Signals by name=(weight, value), each -10 V to 10 V behind no resistance."""
    return tuple(Signal(n, w, -10.0, 10.0, v) for n, (w, v) in weights_and_values.items())


def one_cell(values, minus=(), plus=(), *, amp=None, supply=100.0, load=None, reference=None, **cell):
    """A stage of one cell; `values` is {signal: V}, legs are {source: ohm}."""
    sig = tuple(Signal(n, 1.0, min(0.0, v) - 1, max(0.0, v) + 1, float(v)) for n, v in values.items())
    legs = [tuple(Leg(s, float(r)) for s, r in dict(side).items()) for side in (minus, plus)]
    return Design(
        "test stage", sig, Supply(supply, -supply), amp or ideal_op_amp(), Target(),
        Reference(reference) if reference is not None else None, load or Load(),
        cells=(Cell(legs[0], legs[1], **cell),),
    )  # fmt: skip


def random_chain(rng, cells=None, count=None, *, span=1.0, load=2e3, **figures):
    """A random chain of cells in which any node may hold legs, grounds and earlier outputs."""
    cells = int(rng.integers(1, 4)) if cells is None else cells
    count = int(rng.integers(1, 7)) if count is None else count

    def ohms():
        return float(10 ** rng.uniform(3, 5))

    sig = tuple(
        Signal(f"s{i}", 1.0, -span, span, float(rng.uniform(-span, span)), float(rng.uniform(0, 500)))
        for i in range(count)
    )
    sides = [([], []) for _ in range(cells)]
    for s in sig:
        sides[rng.integers(cells)][rng.integers(2)].append(Leg(s.name, ohms()))
    built = []
    for k, (minus, plus) in enumerate(sides):
        for j in range(k):
            if j == k - 1 or rng.random() < 0.5:
                (minus, plus)[rng.integers(2)].append(Leg(f"cell {j + 1}", ohms()))
        if rng.random() < 0.5:
            (minus, plus)[rng.integers(2)].append(Leg("reference", ohms()))
        ground = None if plus and rng.random() < 0.4 else ohms()
        if not plus and rng.random() < 0.5:
            ground = 0.0
        if len(plus) == 1 and rng.random() < 0.3 and plus[0].source.startswith("cell"):
            plus[0], ground = Leg(plus[0].source, 0.0), None
        built.append(
            Cell(tuple(minus), tuple(plus), ohms() if rng.random() < 0.5 else None, ground, ohms(),
                 float(rng.choice([0.0, 1e-11])))
        )  # fmt: skip
    return Design(
        "random chain", sig, Supply(15.0, -15.0, 0.05), op_amp(**figures), Target(), Reference(2.5, 10.0, 0.002),
        Load(load, 1e-10), stray_capacitance=5e-12, cells=tuple(built),
    )  # fmt: skip


def dense_solution(design, values, s=0.0, error=None, into_minus=None, into_plus=None, into_output=None):
    """The same stage by plain modified nodal analysis: one row a node and an op amp branch, one dense solve.

    Written from Kirchhoff's laws alone and sharing nothing with the engine; (cells, 4) of m, p, o, i.
    """
    amp, count = design.op_amp, len(design.cells)
    a_ol = amp.open_loop_gain / (1 + s * amp.open_loop_gain / (2 * np.pi * amp.gain_bandwidth))
    if amp.second_pole:
        a_ol = a_ol / (1 + s / (2 * np.pi * amp.second_pole))
    matrix = np.zeros((4 * count, 4 * count), complex)
    right = np.zeros(4 * count, complex)
    volts = dict(zip((*design.signal_names, "reference"), values, strict=True))
    rs = {x.name: x.source_resistance for x in design.signals}
    rs["reference"] = design.reference.source_resistance if design.reference else 0.0
    y_in = 1 / amp.input_resistance + s * amp.differential_capacitance
    y_cm = s * amp.common_mode_capacitance
    for k, cell in enumerate(design.cells):
        m, p, o, i = range(4 * k, 4 * k + 4)
        e = 0.0 if error is None else error[k]

        def branch(node, source, y):
            matrix[node, node] += y
            if source in volts:
                right[node] += y * volts[source]
            else:
                up = 4 * (int(source.split()[1]) - 1) + 2
                matrix[node, up] -= y
                matrix[up, up] += y
                matrix[up, node] -= y

        tied = "ground" if cell.plus_ground == 0 else None
        for leg in cell.minus:
            branch(m, leg.source, 1 / (leg.resistance + rs.get(leg.source, 0.0)))
        for leg in cell.plus:
            if leg.resistance + rs.get(leg.source, 0.0) == 0:
                tied = leg.source
            else:
                branch(p, leg.source, 1 / (leg.resistance + rs.get(leg.source, 0.0)))
        matrix[m, m] += (1 / cell.minus_ground if cell.minus_ground else 0) + y_in + y_cm + s * design.stray_capacitance
        matrix[m, p] -= y_in
        right[m] += y_in * e + (into_minus[k] if into_minus is not None else 0)
        if tied is None:
            matrix[p, p] += (1 / cell.plus_ground if cell.plus_ground else 0) + y_in + y_cm
            matrix[p, m] -= y_in
            right[p] += -(y_in + y_cm) * e + (into_plus[k] if into_plus is not None else 0)
        else:
            matrix[p, p] = 1
            if tied in volts:
                right[p] = volts[tied]
            elif tied != "ground":
                up = 4 * (int(tied.split()[1]) - 1) + 2
                matrix[p, up] = -1
                matrix[up, p] += y_in + y_cm
                matrix[up, m] -= y_in
                right[up] += -(y_in + y_cm) * e + (into_plus[k] if into_plus is not None else 0)
        y_f = (1 / cell.feedback if cell.feedback else 0) + s * cell.feedback_capacitance
        for a, b in ((m, o), (o, m)):
            matrix[a, a] += y_f
            matrix[a, b] -= y_f
        if k == count - 1:
            matrix[o, o] += (1 / design.load.resistance if design.load.resistance else 0) + s * design.load.capacitance
        matrix[o, i] -= 1
        matrix[i, p] += a_ol
        matrix[i, m] -= a_ol
        matrix[i, o] -= 1
        matrix[i, i] -= amp.output_resistance
        right[i] -= a_ol * e
        right[o] += into_output[k] if into_output is not None else 0
    return np.linalg.solve(matrix, right).reshape(count, 4)
