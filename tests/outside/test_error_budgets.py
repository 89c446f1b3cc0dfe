"""Budgets and boards against published uncertainty examples and offset arithmetic."""

import math

import numpy as np
import pytest
from sumwright.engine.boards import first_order_holds, monte_carlo, shortest_interval
from sumwright.engine.budget import error_budget, sensitivities
from sumwright.engine.stage import Cell, Design, Leg, ResistorKind, Signal, Supply, replace
from support.stages import ideal_op_amp, one_cell

NO_ERROR = {
    "offset_voltage": 0.0,
    "offset_drift": 0.0,
    "bias_current": 0.0,
    "offset_current": 0.0,
    "cmrr": 1e30,
    "psrr": 1e30,
}


def inverters(first_noise_gain):
    """Four inverters of gain -1 whose offsets add at the output: the first with a higher noise gain.

    JCGM 101 adds four independent rectangular quantities; here they are the offsets of four op amps.
    """
    cells = []
    for k in range(4):
        source = "in" if k == 0 else f"cell {k}"
        ground = 1e4 / (first_noise_gain - 2) if k == 0 and first_noise_gain > 2 else None
        cells.append(Cell((Leg(source, 1e4),), (), ground, 0.0, 1e4))
    amp = ideal_op_amp(**{**NO_ERROR, "offset_voltage": math.sqrt(3.0) / 2})  # × noise gain 2: standard deviation 1
    return Design(
        "four offsets", (Signal("in", 1.0, -1.0, 1.0, 0.0),), Supply(100.0, -100.0), amp,
        resistor=ResistorKind(tolerance=0.0, temperature_coefficient=0.0), cells=tuple(cells),
    )  # fmt: skip


def test_four_equal_rectangular_quantities():
    # JCGM 101:2008, 9.2.3 (from memory): u = 2.0; 95 % exactly ± 2√3 (2 - (3/5)^¼) = ± 3.88; first order ± 3.92
    design = inverters(2)
    budget, drawn = error_budget(design), monte_carlo(design, 400_000, 1)["present"]
    exact = 2 * math.sqrt(3) * (2 - 0.6**0.25)
    assert exact == pytest.approx(3.8794, abs=5e-5)
    assert budget.combined == pytest.approx(2.0, rel=1e-9)
    assert drawn.mean == pytest.approx(0.0, abs=0.015)
    assert drawn.standard_deviation == pytest.approx(2.0, abs=0.01)
    # the shortest interval wanders along a flat minimum, its width hardly
    assert (drawn.high_95 - drawn.low_95) / 2 == pytest.approx(exact, abs=0.02)
    assert first_order_holds(budget, replace_interval(drawn, exact))


def replace_interval(drawn, half):
    """Statistics with the exact symmetric interval, so that the rule is tested and not the luck of the draw."""
    return drawn._replace(low_95=-half, high_95=half)


def test_one_quantity_ten_times_the_others():
    # JCGM 101:2008, 9.2.4 (from memory): u(x4) = 10, u(y) = 10.1, 95 % ± 17.0 where first order says ± 19.9
    design = inverters(20)
    budget, drawn = error_budget(design), monte_carlo(design, 400_000, 2)["present"]
    assert budget.combined == pytest.approx(math.sqrt(103), rel=1e-9)
    assert 1.959964 * budget.combined == pytest.approx(19.9, abs=0.05)
    assert (drawn.high_95 - drawn.low_95) / 2 == pytest.approx(17.016, abs=0.05)
    assert not first_order_holds(budget, drawn)


# 95 % factor of the sum of n equal rectangular quantities, by convolution
@pytest.mark.parametrize(("n", "factor"), [(1, 1.6454), (2, 1.9018), (3, 1.9373), (4, 1.9397), (6, 1.9458)])
def test_shortest_interval_of_rectangular_sums(n, factor):
    y = np.random.default_rng(n).uniform(-1, 1, (n, 400_000)).sum(axis=0) * math.sqrt(3 / n)
    low, high = shortest_interval(y)
    assert (high - low) / 2 == pytest.approx(factor, abs=0.006)


def test_shortest_interval_counts_as_the_guide_does():
    # JCGM 101:2008, 7.7.2: q is the integer part of 0.95 M + 1/2; of y(r) to y(r + q), the shortest
    y = np.array([0.0, 5.0, *np.linspace(10, 11, 37), 40.0])
    assert shortest_interval(y) == (0.0, 11.0)  # M = 40, q = 38: 0 to 11 against 5 to 40
    assert shortest_interval(y, 0.9) == (10.0, 11.0)  # q = 36


def one_percent_summer():
    """-(1 a + 2 b + 4 c), every input at 1 V, 1 % parts and nothing else wrong."""
    design = one_cell({"a": 1, "b": 1, "c": 1}, minus={"a": 4e4, "b": 2e4, "c": 1e4}, plus_ground=0.0, feedback=4e4,
                      amp=ideal_op_amp(**NO_ERROR))  # fmt: skip
    wanted = tuple(replace(s, weight=w) for s, w in zip(design.signals, (-1.0, -2.0, -4.0), strict=True))
    return replace(design, signals=wanted, resistor=ResistorKind(tolerance=0.01, temperature_coefficient=0.0))


def test_weights_one_two_four():
    # Superposition: worst case 2 %, root of squares √(7² + 1² + 2² + 4²)/7 = 1.1952 %, as rectangular u 0.6901 %
    budget = error_budget(one_percent_summer())
    slopes = np.abs(budget.slopes)
    assert slopes.sum() / 7 == pytest.approx(0.02, rel=1e-8)
    assert math.sqrt((slopes**2).sum()) / 7 == pytest.approx(0.011952, abs=5e-7)
    assert budget.combined / 7 == pytest.approx(0.006901, abs=5e-7)


def test_one_gain_of_two_parts():
    # -Rf/Ri of 1 % parts: both alone at their limits give +1 and ±1/(1 ∓ 0.01) - 1; root of squares 1.414 %.
    # A forum answer's tolerance/√n (0.71 %) is wrong.
    design = one_cell({"a": 1}, minus={"a": 1e4}, plus_ground=0.0, feedback=1e4, amp=ideal_op_amp(**NO_ERROR))
    design = replace(
        design, resistor=ResistorKind(tolerance=0.01, temperature_coefficient=0.0),
        signals=(replace(design.signals[0], weight=-1.0),),
    )  # fmt: skip
    budget = error_budget(design)
    assert math.sqrt((budget.slopes**2).sum()) == pytest.approx(0.01414, abs=5e-6)
    assert sorted(budget.limit_effects)[-2:] == pytest.approx([0.01, 1 / 0.99 - 1], rel=1e-9)


def offsets(amp, r, r_f, plus_ground, legs=1):
    names = {f"in{i}": 0.0 for i in range(legs)}
    design = one_cell(names, minus=dict.fromkeys(names, r), plus_ground=plus_ground, feedback=r_f, amp=amp)
    budget = error_budget(replace(design, resistor=ResistorKind(tolerance=0.0, temperature_coefficient=0.0)))
    return {t.kind: t.limit_effect for t in budget.terms}


def test_offset_of_a_gain_of_minus_a_hundred():
    # Superposition of Vos, Ib, Ios: R1 100k, R2 10M, Vos 1 mV, Ib 30 nA, Ios 3 nA:
    # 101 + 300 (+ 15 from Ios/2 into one pin) mV without a bias resistor, 101 + 30 mV with 99.01k on the + pin
    amp = ideal_op_amp(**{**NO_ERROR, "offset_voltage": 1e-3, "bias_current": 30e-9, "offset_current": 3e-9})
    bare = offsets(amp, 1e5, 1e7, 0.0)
    assert bare["offset voltage"] == pytest.approx(0.101, rel=1e-6)
    assert bare["bias current"] == pytest.approx(0.300, rel=1e-6)
    assert bare["offset current"] == pytest.approx(0.015, rel=1e-6)
    fair = offsets(amp, 1e5, 1e7, 1e5 * 1e7 / 1.01e7)
    assert fair["bias current"] == pytest.approx(0.0, abs=1e-9)
    assert fair["offset current"] == pytest.approx(0.030, rel=1e-6)
    assert sum(fair.values()) == pytest.approx(0.131, abs=5e-4)
    half = offsets(replace(amp, offset_voltage=0.5e-3), 1e5, 1e7, 1e5 * 1e7 / 1.01e7)
    assert sum(half.values()) == pytest.approx(0.0805, abs=5e-5)


def test_input_offset_counts_by_noise_gain():
    # Sedra and Smith, 6th ed., problem 2.94 (from memory): R2/R1 = 100, 0.4 V out means |Vos| 3.96 mV (÷ 101)
    amp = ideal_op_amp(**{**NO_ERROR, "offset_voltage": 3.960396e-3})
    assert offsets(amp, 1e3, 1e5, 0.0)["offset voltage"] == pytest.approx(0.4, rel=1e-6)


def test_an_lm358_summing_four():
    # TI SLOS068V: Vos 7 mV, Ib 250 nA, Ios 50 nA at most. Four 100k and 100k (noise gain 5): 35 + 25 mV without,
    # 35 + 5 mV with a 20k bias resistor
    amp = ideal_op_amp(**{**NO_ERROR, "offset_voltage": 7e-3, "bias_current": 250e-9, "offset_current": 50e-9})
    bare = offsets(amp, 1e5, 1e5, 0.0, legs=4)
    assert bare["offset voltage"] + bare["bias current"] == pytest.approx(0.060, rel=1e-6)
    fair = offsets(amp, 1e5, 1e5, 2e4, legs=4)
    assert sum(fair.values()) == pytest.approx(0.040, rel=1e-6)


def test_sensitivities_are_the_derivatives_of_the_textbook_formula():
    # v = -Rf Σ v_i/R_i: +1 % of a leg takes 1 % of its contribution away, +1 % of Rf adds 1 % of the sum;
    # a millivolt of offset comes out times the noise gain, a nanoampere of bias times Rf
    design = one_percent_summer()
    found = {s.part: s.volts for s in sensitivities(design)}
    assert found["c leg"] == pytest.approx(0.04, rel=1e-6) and found["a leg"] == pytest.approx(0.01, rel=1e-6)
    assert found["feedback"] == pytest.approx(-0.07, rel=1e-6)
    assert abs(found["op amp, offset voltage"]) == pytest.approx(8e-3, rel=1e-6)
    assert abs(found["op amp, bias current"]) == pytest.approx(4e4 * 1e-9, rel=1e-6)


def gain_shift(a_ol, ground, feedback, volts=1.0):
    """Relative finite-gain shift of a non-inverting stage."""
    design = one_cell({"a": volts}, plus={"a": 0.0}, minus_ground=ground, feedback=feedback, supply=1e5,
                      amp=ideal_op_amp(**NO_ERROR, open_loop_gain=a_ol))  # fmt: skip
    design = replace(design, signals=(replace(design.signals[0], weight=1 + feedback / ground),))
    budget = error_budget(design)
    return next(t.shift for t in budget.terms if t.kind == "finite gain") / budget.ideal_output


# Sedra and Smith, 7th ed., problem 2.12 (from memory): gain 10 with A = 10³, 10⁴, 10⁵ errs by -0.990, -0.0999,
# -0.0100 %. A = 2000 at gain 8: -0.398 %. Analog Devices MT-044 (from memory): noise gain 1000, A from 2e6 to 3e5:
# 0.05 to 0.33 %, a change of 0.28 %.
@pytest.mark.parametrize(
    ("a_ol", "gain", "percent", "digit"),
    [(1e3, 10, -0.990, 5e-4), (1e4, 10, -0.0999, 5e-5), (1e5, 10, -0.0100, 5e-5), (2000, 8, -0.398, 5e-4),
     (2e6, 1000, -0.05, 5e-3), (3e5, 1000, -0.33, 5e-3)],
)  # fmt: skip
def test_finite_gain_is_a_known_shift(a_ol, gain, percent, digit):
    assert 100 * gain_shift(a_ol, 1e3, 1e3 * (gain - 1)) == pytest.approx(percent, abs=digit)


def test_known_shifts_add_up_and_are_no_uncertainty():
    design = one_percent_summer()
    amp = ideal_op_amp(**NO_ERROR, open_loop_gain=500.0)
    sources = tuple(replace(s, source_resistance=200.0, weight=s.weight * 1.01) for s in design.signals)
    budget = error_budget(replace(design, op_amp=amp, signals=sources))
    shifts = {t.kind: t for t in budget.terms if t.shift}
    assert set(shifts) == {"rounding", "source resistance", "finite gain"}
    assert sum(t.shift for t in shifts.values()) == pytest.approx(budget.shift, rel=1e-12)
    assert all(t.limit_effect == 0 and t.standard_uncertainty == 0 for t in shifts.values())
    assert budget.worst_case == pytest.approx(sum(t.limit_effect for t in budget.terms) + abs(budget.shift))
