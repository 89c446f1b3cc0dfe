"""The engine against nodal equations written here, in exact fractions, and against the laws any circuit keeps.

SymPy solves the node equations of a realised stage symbolically built from Kirchhoff's current law, with rational
numbers and no rounding; nothing of the engine's elimination is used. Hypothesis draws the stages.
"""

import math

import numpy as np
import pytest
import sympy
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import ARRANGEMENTS, Design, Load, Reference, Signal, Supply, Target, replace
from sumwright.errors import CannotRealise
from support.stages import op_amp, random_chain

SIGNS = {"inverting": (-1,), "inverting-pair": (1,), "non-inverting": (1,), "mixed-sign": (-1, 1), "two-stage": (-1, 1)}


@st.composite
def stages(draw, arrangement, **figures):
    """A stage of that arrangement with everything random that may be, source resistances and load included."""
    count = draw(st.integers(1, 5))
    sign = st.sampled_from(SIGNS[arrangement])
    size = st.floats(0.05, 20.0).map(lambda x: round(x, 3))
    volts = st.integers(-3000, 3000).map(lambda k: k / 1000)
    signals = tuple(
        Signal(
            f"s{k}", draw(sign) * draw(size), -3.0, 3.0, draw(volts), draw(st.sampled_from([0.0, 10.0, 50.0, 470.0]))
        )
        for k in range(count)
    )
    with_offset = draw(st.booleans())
    offset = (draw(sign) * draw(st.floats(0.1, 3.0).map(lambda x: round(x, 2)))) if with_offset else 0.0
    reference = Reference(2.5, draw(st.sampled_from([0.0, 5.0]))) if with_offset else None
    load = draw(st.sampled_from([None, 600.0, 10e3]))
    design = Design(
        "drawn", signals, Supply(1e4, -1e4), op_amp(output_current=1e6, supply_most=1e9, **figures), Target(offset),
        reference, Load(load),
    )  # fmt: skip
    try:
        cells = exact_cells(design, arrangement, feedback=draw(st.sampled_from([15e3, 33e3, 100e3])))
    except CannotRealise:
        assume(False)
    # off the exact values, so that nothing cancels by recipe
    wrong = st.floats(0.9, 1.1).map(lambda x: round(x, 3))
    cells = tuple(
        replace(
            cell,
            minus=tuple(replace(leg, resistance=leg.resistance * draw(wrong)) for leg in cell.minus),
            plus=tuple(replace(leg, resistance=leg.resistance * draw(wrong)) for leg in cell.plus),
        )
        for cell in cells
    )
    return replace(design, cells=cells)


def exact_nodes(design):
    """{cell: (minus, plus, output)} in exact fractions, from Kirchhoff's current law at every node."""
    amp = design.op_amp
    ratio = sympy.Rational
    a, r_in, r_out = (ratio(x) for x in (amp.open_loop_gain, amp.input_resistance, amp.output_resistance))
    volts = {s.name: ratio(s.value) for s in design.signals}
    series = {s.name: ratio(s.source_resistance) for s in design.signals}
    if design.reference:
        volts["reference"], series["reference"] = (
            ratio(x) for x in (design.reference.voltage, design.reference.source_resistance)
        )
    count = len(design.cells)
    m, p, o = (sympy.symbols(f"{x}1:{count + 1}") for x in "mpo")
    for k in range(count):
        volts[f"cell {k + 1}"], series[f"cell {k + 1}"] = o[k], 0
    equations = []
    drawn = [0] * count  # what leaves each output into later legs
    for k, cell in enumerate(design.cells):

        def into(node, legs):
            total = 0
            for leg in legs:
                current = (volts[leg.source] - node) / (ratio(leg.resistance) + series[leg.source])
                total += current
                if leg.source.startswith("cell "):
                    drawn[int(leg.source[5:]) - 1] += current
            return total

        between = (p[k] - m[k]) / r_in
        feedback = (m[k] - o[k]) / ratio(cell.feedback)
        ground = m[k] / ratio(cell.minus_ground) if cell.minus_ground else 0
        equations.append(into(m[k], cell.minus) + between - feedback - ground)
        if cell.plus_ground == 0:
            equations.append(p[k])
        else:
            ground = p[k] / ratio(cell.plus_ground) if cell.plus_ground else 0
            equations.append(into(p[k], cell.plus) - between - ground)
    for k, cell in enumerate(design.cells):
        current = drawn[k] - (m[k] - o[k]) / ratio(cell.feedback)
        if k == count - 1 and design.load.resistance:
            current += o[k] / ratio(design.load.resistance)
        equations.append(a * (p[k] - m[k]) - r_out * current - o[k])
    unknowns = [*m, *p, *o]
    solved = sympy.Matrix(sympy.linear_eq_to_matrix(equations, unknowns)[0]).LUsolve(
        sympy.linear_eq_to_matrix(equations, unknowns)[1]
    )
    found = dict(zip(unknowns, solved, strict=True))
    return [tuple(float(found[x[k]]) for x in (m, p, o)) for k in range(count)]


@pytest.mark.parametrize("arrangement", ARRANGEMENTS)
def test_every_node_is_that_of_exact_nodal_equations(arrangement):
    @given(stages(arrangement))
    @settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.too_slow])
    def compare(design):
        point = operating_point(design)
        for cell, (minus, plus, output) in zip(point.cells, exact_nodes(design), strict=True):
            scale = max(abs(minus), abs(plus), abs(output), 1e-3)
            assert cell.minus_voltage == pytest.approx(minus, rel=1e-9, abs=1e-11 * scale)
            assert cell.plus_voltage == pytest.approx(plus, rel=1e-9, abs=1e-11 * scale)
            assert cell.output_voltage == pytest.approx(output, rel=1e-9, abs=1e-11 * scale)

    compare()


@pytest.mark.parametrize("arrangement", ARRANGEMENTS)
def test_exact_recipes_make_the_weights_wanted(arrangement):
    """With an op amp as good as ideal, what was asked for comes out, whatever the sources' resistance."""

    @given(stages(arrangement, open_loop_gain=1e15, input_resistance=1e18, output_resistance=0.0))
    @settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.too_slow])
    def compare(design):
        exact = replace(design, cells=exact_cells(design, arrangement))
        point = operating_point(exact)
        assert list(point.weights) == pytest.approx([s.weight for s in design.signals], rel=1e-9)
        assert point.offset == pytest.approx(design.target.offset, rel=1e-9, abs=1e-12)
        assert point.output == pytest.approx(point.ideal_output, rel=1e-9, abs=1e-9)

    compare()


chains = st.builds(
    lambda seed, rail, most: replace(
        random_chain(np.random.default_rng(seed), span=10.0, output_current=most), supply=Supply(rail, -rail)
    ),
    st.integers(0, 10**9),
    st.sampled_from([5.0, 15.0, 1e4]),
    st.sampled_from([1e-3, 0.02, 1e3]),
)


def leg_end(design, point, source):
    """The voltage a leg comes from and the resistance in series with it."""
    if source == "reference":
        return design.reference.voltage, design.reference.source_resistance
    if source.startswith("cell "):
        return point.cells[int(source[5:]) - 1].output_voltage, 0.0
    signal = design.signal(source)
    return signal.value, signal.source_resistance


@given(chains)
@settings(deadline=None)
def test_currents_into_every_node_add_up_to_zero_clipped_or_not(design):
    """Kirchhoff's current law, with every current from Ohm's law here and the voltages from the engine."""
    point = operating_point(design)
    amp = design.op_amp
    for k, (cell, c) in enumerate(zip(design.cells, point.cells, strict=True)):
        pin = (c.plus_voltage - c.minus_voltage) / amp.input_resistance
        total = pin - c.minus_ground_current - c.feedback_current
        scale = abs(c.feedback_current) + abs(c.minus_ground_current)
        assert c.feedback_current == pytest.approx(
            (c.minus_voltage - c.output_voltage) / cell.feedback, rel=1e-9, abs=1e-15
        )
        for leg in cell.minus:
            volts, series = leg_end(design, point, leg.source)
            current = (volts - c.minus_voltage) / (leg.resistance + series)
            assert c.leg_currents[leg.source] == pytest.approx(current, rel=1e-9, abs=1e-14)
            total += current
            scale += abs(current)
        assert total == pytest.approx(0.0, abs=1e-9 * scale + 1e-15)
        if cell.plus_ground != 0 and not (len(cell.plus) == 1 and cell.plus[0].resistance == 0):
            total = -pin - c.plus_ground_current
            scale = abs(pin) + abs(c.plus_ground_current)
            for leg in cell.plus:
                volts, series = leg_end(design, point, leg.source)
                current = (volts - c.plus_voltage) / (leg.resistance + series)
                total += current
                scale += abs(current)
            assert total == pytest.approx(0.0, abs=1e-9 * scale + 1e-15)
        leaving = -c.feedback_current
        for later, found in zip(design.cells[k + 1 :], point.cells[k + 1 :], strict=True):
            name = f"cell {k + 1}"
            if any(leg.source == name for leg in (*later.minus, *later.plus)):
                leaving += found.leg_currents[name]
        if k == len(design.cells) - 1:
            leaving += point.load_current
        assert c.output_current == pytest.approx(leaving, rel=1e-7, abs=1e-12)


@given(chains)
@settings(deadline=None)
def test_what_the_sources_give_is_what_the_resistors_take(design):
    """Power balance (Tellegen): sources and op amp outputs against I²R of every resistance."""
    point = operating_point(design)
    given_power = sum(s.value * i for s, i in zip(design.signals, point.source_currents, strict=True))
    given_power += design.reference.voltage * point.reference_current
    taken = 0.0
    for cell, c in zip(design.cells, point.cells, strict=True):
        given_power += c.output_voltage * c.output_current
        taken += c.feedback_current**2 * cell.feedback
        taken += (c.plus_voltage - c.minus_voltage) ** 2 / design.op_amp.input_resistance
        if cell.minus_ground:
            taken += c.minus_voltage**2 / cell.minus_ground
        if cell.plus_ground:
            taken += c.plus_voltage**2 / cell.plus_ground
        for leg in (*cell.minus, *cell.plus):
            _, series = leg_end(design, point, leg.source)
            taken += c.leg_currents[leg.source] ** 2 * (leg.resistance + series)
    if design.load.resistance:
        taken += point.output**2 / design.load.resistance
    assert given_power == pytest.approx(taken, rel=1e-7, abs=1e-12)


@given(chains)
@settings(deadline=None)
def test_contributions_add_up_and_no_limit_is_passed(design):
    hold_limits(design)


@pytest.mark.parametrize("seed", [67, 153, 650, 666, 1883, 6188])
@pytest.mark.parametrize("rail", [5.0, 15.0])
def test_limits_hold_where_later_cells_are_a_negative_resistance_to_an_earlier_one(seed, rail):
    """Chains in which moving one output at a time to its limit goes round in circles."""
    design = random_chain(np.random.default_rng(seed), span=10.0, output_current=1e-3)
    hold_limits(replace(design, supply=Supply(rail, -rail)))


def hold_limits(design):
    point = operating_point(design)
    assert math.fsum([point.offset, *point.contributions]) == pytest.approx(
        point.unclipped_output, rel=1e-12, abs=1e-12
    )
    amp, rail = design.op_amp, design.supply.high
    for c in point.cells:
        high = rail - amp.dropout_high - amp.dropout_resistance * max(c.output_current, 0.0)
        low = -rail + amp.dropout_low + amp.dropout_resistance * max(-c.output_current, 0.0)
        # an output that gives all the current it can may be pushed past its other limit from outside
        if not (c.at_current_limit and c.clipped == "low"):
            assert c.output_voltage <= high + 1e-9 * rail
        if not (c.at_current_limit and c.clipped == "high"):
            assert c.output_voltage >= low - 1e-9 * rail
        assert abs(c.output_current) <= amp.output_current * (1 + 1e-9)
        if c.clipped != "no" and not c.at_current_limit:
            assert c.output_voltage == pytest.approx(high if c.clipped == "high" else low, rel=1e-9)
    if all(c.clipped == "no" for c in point.cells):
        assert point.output == pytest.approx(point.unclipped_output, rel=1e-9, abs=1e-12)


@given(st.integers(0, 10**9), st.floats(0.1, 10.0))
@settings(deadline=None, max_examples=30)
def test_scaling_every_resistance_changes_no_voltage(seed, factor):
    """A law that must hold: weights depend on ratios of resistances alone."""
    design = random_chain(np.random.default_rng(seed))

    def scaled(x):
        return None if x is None else x * factor

    cells = tuple(
        replace(
            c, minus=tuple(replace(leg, resistance=leg.resistance * factor) for leg in c.minus),
            plus=tuple(replace(leg, resistance=leg.resistance * factor) for leg in c.plus),
            minus_ground=scaled(c.minus_ground), plus_ground=scaled(c.plus_ground), feedback=scaled(c.feedback),
        )
        for c in design.cells
    )  # fmt: skip
    other = replace(
        design,
        cells=cells,
        signals=tuple(replace(s, source_resistance=s.source_resistance * factor) for s in design.signals),
        reference=replace(design.reference, source_resistance=design.reference.source_resistance * factor),
        load=replace(design.load, resistance=design.load.resistance * factor),
        op_amp=replace(
            design.op_amp,
            input_resistance=design.op_amp.input_resistance * factor,
            output_resistance=design.op_amp.output_resistance * factor,
        ),
    )
    before, after = Analysis(design), Analysis(other)
    assert list(after.dc.weights) == pytest.approx(list(before.dc.weights), rel=1e-9)
    assert [c.highest for c in after.headroom.cells] == pytest.approx(
        [c.highest for c in before.headroom.cells], rel=1e-9
    )
