"""Summers, level shifters and gain errors against handbooks and textbooks; the source stands beside each.

Where a source gives only the formula, the law is named: superposition at an ideal virtual short, Millman's theorem,
loop gain.
"""

import math

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import exact_cells, ideal_weights
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Ambient, Design, Reference, Signal, Supply, Target, replace
from support.stages import ideal_op_amp, one_cell

EXACT = 1e-9


def output(values, minus=(), plus=(), **cell):
    return operating_point(one_cell(values, minus, plus, **cell)).output


# US Army TC 9-62 (23 June 2005), p. 7-30, para. 7-90; the same circuit as NEETS Module 8, figure 3-24.
SCALING_ADDER = {"a": 12.0, "b": 3.0, "c": 8.0}


def test_the_armys_scaling_adder():
    design = one_cell(
        SCALING_ADDER, {"a": 6e3, "b": 3e3, "c": 4e3}, feedback=12e3, plus_ground=0.0
    )  # fmt: skip
    point = operating_point(design)
    cell = point.cells[0]
    assert point.output == pytest.approx(-60.0, rel=EXACT)
    assert cell.leg_currents == pytest.approx({"a": 2e-3, "b": 1e-3, "c": 2e-3}, rel=EXACT)
    assert cell.feedback_current == pytest.approx(5e-3, rel=EXACT)
    # follows from it: I²R in the feedback resistor
    assert cell.feedback_current**2 * 12e3 == pytest.approx(0.300, rel=EXACT)


def test_no_op_amp_on_fifteen_volts_can_do_it():
    design = one_cell(
        SCALING_ADDER, {"a": 6e3, "b": 3e3, "c": 4e3}, feedback=12e3, plus_ground=0.0, supply=15.0
    )  # fmt: skip
    point = operating_point(design)
    assert (point.output, point.clipped) == (pytest.approx(-15.0), "low")
    assert point.unclipped_output == pytest.approx(-60.0, rel=EXACT)


def test_a_misprint_in_the_armys_figure_is_a_misprint():
    # TC 9-62, p. 7-29, prints R2 = 12 kΩ for a ratio of 4; the ratio needs 3 kΩ, and 12 kΩ gives -51 V.
    legs = {"a": 6e3, "b": 12e3, "c": 4e3}
    assert output(SCALING_ADDER, legs, feedback=12e3, plus_ground=0.0) == pytest.approx(-51.0, rel=EXACT)


def test_the_navys_adder_of_gain_ten():
    # NEETS Module 8, p. 3-33, figure 3-23, with the resistor p. 3-32 has replaced: 1 kΩ each into 10 kΩ.
    legs = {"a": 1e3, "b": 1e3}
    assert output({"a": 2, "b": 3}, legs, feedback=10e3, plus_ground=0.0) == pytest.approx(-50.0, rel=EXACT)


def test_microchips_non_inverting_summing_amplifier():
    # Microchip developer help, "Non-Inverting Summing Amplifier": 3 V via 2 kΩ, -4 V via 3 kΩ; 9 kΩ and 1 kΩ.
    design = one_cell({"a": 3, "b": -4}, plus={"a": 2e3, "b": 3e3}, feedback=9e3, minus_ground=1e3)
    point = operating_point(design)
    assert point.cells[0].plus_voltage == pytest.approx(0.2, rel=EXACT)
    assert list(point.weights) == pytest.approx([6.0, 4.0], rel=EXACT)
    assert point.output == pytest.approx(2.0, rel=EXACT)


def test_the_armys_difference_amplifier():
    # TC 9-62, para. 7-96: 1 kΩ and 5 kΩ on both sides, 3 V and 12 V.
    design = one_cell({"e1": 3, "e2": 12}, {"e1": 1e3}, {"e2": 1e3}, feedback=5e3, plus_ground=5e3)
    point = operating_point(design)
    assert point.cells[0].plus_voltage == pytest.approx(10.0, rel=EXACT)
    assert point.output == pytest.approx(45.0, rel=EXACT)


def test_a_passive_level_shift_leg():
    # Superposition: 5 V via 5 kΩ, the signal via 10 kΩ, 10 kΩ to ground; -10, 0, +10 V become 0, 2.5, 5 V.
    for volts, node in ((-10, 0.0), (0, 2.5), (10, 5.0)):
        design = one_cell(
            {"in": volts}, plus={"in": 10e3, "reference": 5e3}, plus_ground=10e3, feedback=1e3, reference=5.0
        )  # fmt: skip
        assert operating_point(design).cells[0].plus_voltage == pytest.approx(node, abs=1e-9)


def test_four_weighted_lines():
    # Superposition: 1 kΩ, 500, 250, 125 Ω into 1 kΩ, the word 1001 at 1 V.
    legs = {"d0": 1e3, "d1": 500.0, "d2": 250.0, "d3": 125.0}
    word = {"d0": 1, "d1": 0, "d2": 0, "d3": 1}
    assert output(word, legs, feedback=1e3, plus_ground=0.0) == pytest.approx(-9.0, rel=EXACT)


def test_signs_add_at_the_virtual_ground():
    # Superposition: three 10 kΩ into 50 kΩ, 1 V on two and -1 V on one.
    legs = {"a": 10e3, "b": 10e3, "c": 10e3}
    assert output({"a": 1, "b": 1, "c": -1}, legs, feedback=50e3, plus_ground=0.0) == pytest.approx(-5.0, rel=EXACT)


def test_two_unlike_legs():
    # Superposition: 2 kΩ and 5 kΩ into 10 kΩ make -(5 U1 + 2 U2).
    design = one_cell({"u1": 1, "u2": 1}, {"u1": 2e3, "u2": 5e3}, feedback=10e3, plus_ground=0.0)
    assert list(operating_point(design).weights) == pytest.approx([-5.0, -2.0], rel=EXACT)


def test_equal_legs_average():
    # Millman's theorem: 1, 2, 3, 6 V through equal resistors meet at 3 V; a noise gain of N makes it the sum.
    values = {"a": 1, "b": 2, "c": 3, "d": 6}
    legs = dict.fromkeys(values, 10e3)
    assert output(values, plus=legs, feedback=1e3) == pytest.approx(3.0, rel=EXACT)
    assert output(values, plus=legs, feedback=3e3, minus_ground=1e3) == pytest.approx(12.0, rel=EXACT)


def test_noise_gain_of_n_equal_inputs_is_n_plus_one():
    # 1 + Rf·Σ1/R. An article on mixing prints N; the feedback resistor's own share is missing there.
    for n in (1, 4, 8):
        legs = {f"s{k}": 10e3 for k in range(n)}
        design = one_cell(dict.fromkeys(legs, 0.0), legs, feedback=10e3, plus_ground=0.0)
        assert Analysis(design).ac.cells[0].noise_gain == pytest.approx(n + 1, rel=EXACT)


# Recipes --------------------------------------------------------------------------------------------


def wanted(weights, offset=0.0, reference=None):
    signals = tuple(Signal(name, w, -1.0, 1.0, 0.0) for name, w in weights.items())
    return Design(
        "recipe", signals, Supply(15.0, -15.0), ideal_op_amp(), Target(offset),
        None if reference is None else Reference(reference),
    )  # fmt: skip


# D. H. Sheingold's rules for resistor values in adder-subtractor circuits (Analog Dialogue) and K. Knollman, "Daisy's
# theorem" (EDN): every R = Rf / weight, and the one ground leg has the weight that closes Σ+ = 1 + Σ-.
def test_two_minus_four_on_one_op_amp():
    (cell,) = exact_cells(wanted({"v1": 2.0, "v2": -4.0}), "mixed-sign", feedback=100e3)
    assert cell.plus[0].resistance == pytest.approx(50e3, rel=EXACT)
    assert cell.minus[0].resistance == pytest.approx(25e3, rel=EXACT)
    assert cell.plus_ground == pytest.approx(100e3 / 3, rel=EXACT)
    assert cell.minus_ground is None
    # both nodes see 20 kΩ, so bias current cancels
    plus = 1 / (1 / cell.plus[0].resistance + 1 / cell.plus_ground)
    minus = 1 / (1 / cell.minus[0].resistance + 1 / cell.feedback)
    assert plus == pytest.approx(20e3, rel=EXACT) and minus == pytest.approx(20e3, rel=EXACT)


@pytest.mark.parametrize(
    ("count", "weight", "ground"), [(5, 10.0, 100e3 / 49), (3, 6.0, 100e3 / 17), (2, 200.0, 100e3 / 399)]
)
def test_large_positive_sums_ask_for_a_ground_leg_on_the_other_node(count, weight, ground):
    (cell,) = exact_cells(wanted({f"v{k}": weight for k in range(count)}), "non-inverting", feedback=100e3)
    assert [leg.resistance for leg in cell.plus] == pytest.approx([100e3 / weight] * count, rel=EXACT)
    assert cell.minus_ground == pytest.approx(ground, rel=EXACT)
    assert cell.plus_ground is None


def test_one_volt_per_volt_lifted_by_eight():
    # TI SLOA097, case +m, +b (formulas from memory): m = 1, b = 8, Vref 10 V, R1 1 kΩ, Rf 2 kΩ give R2 = Vref·R1·m/b =
    # 1250 Ω and Rg = R2·Rf/(m(R1 + R2) - R2) = 2500 Ω; checked on the node: 0 and 2 V become 8 and 10 V.
    for volts, out in ((0, 8.0), (2, 10.0)):
        design = one_cell(
            {"in": volts}, plus={"in": 1e3, "reference": 1250.0}, feedback=2e3, minus_ground=2500.0, reference=10.0
        )  # fmt: skip
        assert operating_point(design).output == pytest.approx(out, rel=EXACT)


def test_a_sensor_shifted_into_a_converter():
    # R. Mancini, "Op Amps for Everyone", ch. 4, case 1: 0.01 to 1 V become 1 to 4.5 V, reference 5 V (problem from
    # memory, numbers recomputed from its formulas).
    m = (4.5 - 1.0) / (1.0 - 0.01)
    b = 1.0 - 0.01 * m
    assert (m, b) == (pytest.approx(3.53535, abs=5e-6), pytest.approx(0.964646, abs=5e-7))
    design = wanted({"in": m}, b, 5.0)
    (cell,) = exact_cells(design, "non-inverting")
    legs = {leg.source: leg.resistance for leg in cell.plus}
    assert legs["reference"] / legs["in"] == pytest.approx(18.3246, abs=5e-5)
    assert cell.feedback / cell.minus_ground == pytest.approx(2.72828, abs=5e-6)
    weights, offset = ideal_weights(design, (cell,))
    assert (weights["in"], offset) == (pytest.approx(m, rel=EXACT), pytest.approx(b, rel=EXACT))


# Finite gain ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("gain", "percent", "millivolts"), [(1e3, -0.990, 9.90), (1e4, -0.0999, 0.999), (1e5, -0.0100, 0.1000)]
)
def test_finite_gain_of_a_gain_of_ten(gain, percent, millivolts):
    # Sedra/Smith, Microelectronic Circuits, 7th ed., problem 2.12 (numbers recomputed): 1 kΩ and 9 kΩ, 1 V in.
    design = one_cell(
        {"in": 1}, plus={"in": 0.0}, minus_ground=1e3, feedback=9e3, amp=ideal_op_amp(open_loop_gain=gain)
    )
    point = operating_point(design)
    cell = point.cells[0]
    assert 100 * (point.output / 10 - 1) == pytest.approx(percent, abs=0.5 * 10 ** -(3 if gain < 1e4 else 4))
    difference = 1e3 * (cell.plus_voltage - cell.minus_voltage)
    assert difference == pytest.approx(millivolts, abs=0.5 * 10 ** -(2 if gain < 1e4 else 3 if gain < 1e5 else 4))


@pytest.mark.parametrize(
    ("gain", "closed", "percent", "half_digit"), [(2000, 8, -0.398, 5e-4), (1e5, 10, -0.0100, 5e-5)]
)
def test_gain_error_is_one_over_loop_gain(gain, closed, percent, half_digit):
    # 1/(1 + A/G), the loop-gain formula of any text on feedback.
    design = one_cell(
        {"in": 1}, plus={"in": 0.0}, minus_ground=1e3, feedback=(closed - 1) * 1e3, amp=ideal_op_amp(open_loop_gain=gain)
    )  # fmt: skip
    assert 100 * (operating_point(design).output / closed - 1) == pytest.approx(percent, abs=half_digit)


def test_gain_error_moves_with_the_open_loop_gain():
    # Analog Devices MT-044 (from memory, recomputed): noise gain 1000, 2e6 falling to 3e5: 0.05 %, 0.33 %, change 0.28 %.
    def percent(gain):
        design = one_cell(
            {"in": 0.001}, plus={"in": 0.0}, minus_ground=1e3, feedback=999e3, amp=ideal_op_amp(open_loop_gain=gain)
        )  # fmt: skip
        return 100 * (1 - operating_point(design).output / 1.0)

    light, heavy = percent(2e6), percent(3e5)
    assert light == pytest.approx(0.05, abs=0.005)
    assert heavy == pytest.approx(0.33, abs=0.005)
    assert heavy - light == pytest.approx(0.28, abs=0.005)


# Offsets --------------------------------------------------------------------------------------------


def test_offset_current_through_a_kilohm_in_open_loop():
    # By Ohm's law: 20 nA of offset current through 1 kΩ is 20 µV, 2.0 V behind a gain of 1e5.
    amp = ideal_op_amp(
        open_loop_gain=1e5, offset_current=20e-9, offset_voltage=0.0, offset_drift=0.0, bias_current=0.0, cmrr=1e12, psrr=1e12
    )  # fmt: skip
    design = one_cell({"in": 0.0}, {"in": 1e3}, plus_ground=1e3, amp=amp)
    terms = {t.kind: t.limit_effect for t in Analysis(design).errors["present"].terms}
    assert terms["offset current"] / 1e5 == pytest.approx(20e-6, rel=1e-6)
    assert terms["offset current"] == pytest.approx(2.0, rel=1e-6)


def summing_four(**figures):
    """Four 100 kΩ into 100 kΩ, an accuracy asked for that bias current alone spoils."""
    values = dict.fromkeys("abcd", 0.0)
    amp = ideal_op_amp(
        cmrr=1e12, psrr=1e12, offset_drift=0.0, thermal_resistance=None, junction_most=None, offset_voltage=0.0, **figures
    )  # fmt: skip
    design = one_cell(values, dict.fromkeys(values, 100e3), feedback=100e3, plus_ground=0.0, amp=amp)
    return replace(
        design,
        signals=tuple(replace(s, weight=-1.0) for s in design.signals),
        target=Target(0.0, accuracy=5e-3),
        resistor=replace(design.resistor, tolerance=0.0, temperature_coefficient=0.0),
        ambient=Ambient(25, 25, 25),
    )


def accuracy_advice(design):
    (check,) = [c for c in Analysis(design).checks if c.key == "accuracy"]
    assert check.status == "short"
    return check.advice


def test_bias_current_is_cured_by_the_parallel_resistance_of_the_node():
    # All R ∥ Rf = 20 kΩ from the + input: common practice. LM358 (TI SLOS068): 20 nA bias, 2 nA offset current.
    assert "20k from the + input" in accuracy_advice(summing_four(bias_current=200e-9, offset_current=2e-9))


def test_a_bias_cancelled_part_gets_no_compensation_resistor():
    # TI SBOS079C (OPA277): bias and offset current are alike and of either sign, so the resistor only adds offset and noise.
    assert "from the + input" not in accuracy_advice(summing_four(bias_current=200e-9, offset_current=180e-9))


def test_the_named_resistor_does_what_the_advice_says():
    design = summing_four(bias_current=200e-9, offset_current=2e-9)
    cell = replace(design.cells[0], plus_ground=20e3)
    before, after = (Analysis(d).errors["present"].expanded_95 for d in (design, replace(design, cells=(cell,))))
    # Ib·Rf = 20 mV becomes Ios·Rf = 0.2 mV, and 95 % of a rectangular limit is 2/√3 of it
    assert before == pytest.approx(20e-3 * 2 / math.sqrt(3), rel=0.01)
    assert after == pytest.approx(0.2e-3 * 2 / math.sqrt(3), rel=0.01)
