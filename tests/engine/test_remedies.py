"""Advice that can be acted on: it does what it says, and nothing cheaper or smaller would."""

import itertools
import math

import control
import numpy as np
import pytest
from sumwright.engine.abuse import JUNCTION_DROP, input_currents, output_short, overdrive
from sumwright.engine.analysis import Analysis
from sumwright.engine.budget import error_budgets
from sumwright.engine.catalogue import catalogue
from sumwright.engine.compensation import (
    crosstalk,
    cures,
    feedback_capacitor,
    isolated_margin,
    isolating_resistor,
    with_cables,
    with_capacitor,
)
from sumwright.engine.nodes import Network
from sumwright.engine.response import loop_gains, response, source_gains
from sumwright.engine.stage import Ambient, Load, ResistorKind, Signal, Supply, replace
from sumwright.engine.tighten import GRADES, after_trim, tighten
from sumwright.engine.which_op_amp import ranked, try_all
from sumwright.errors import InvalidQuantity
from support.stages import ideal_op_amp, one_cell, op_amp, random_chain

CLEAN = {
    "offset_voltage": 0.0,
    "offset_drift": 0.0,
    "bias_current": 0.0,
    "offset_current": 0.0,
    "cmrr": 1e30,
    "psrr": 1e30,
}


def summer(amp=None, accuracy=0.05, **kind):
    design = one_cell({"a": 2.0, "b": 1.0}, minus={"a": 2e4, "b": 5e4}, plus_ground=0.0, feedback=1e4,
                      amp=amp or op_amp(), supply=15.0, load=Load(2e3, 1e-10))  # fmt: skip
    sig = (Signal("a", -0.5, 0.0, 10.0, 2.0, 50.0), Signal("b", -0.2, 0.0, 10.0, 1.0, 50.0))
    return replace(
        design, signals=sig, target=replace(design.target, accuracy=accuracy), ambient=Ambient(25.0, 0.0, 50.0),
        resistor=ResistorKind(**{"tolerance": 0.01, "temperature_coefficient": 1e-4, **kind}),
    )  # fmt: skip


def with_each(design, tolerances):
    """|shift| + 95 % of a design whose resistors have tolerances (and coefficients) of their own: by hand."""
    worst = 0.0
    for b in error_budgets(design).values():
        u2 = 0.0
        for t in b.terms:
            factor = 1.0
            if t.source in tolerances:
                grade = tolerances[t.source]
                factor = grade[0] / 0.01 if t.kind == "tolerance" else grade[1] / 1e-4
            u2 += (t.standard_uncertainty * factor) ** 2
        worst = max(worst, abs(b.shift) + 2 * math.sqrt(u2))
    return worst


@pytest.mark.parametrize("accuracy", [0.06, 0.04, 0.02, 0.018])
def test_the_plan_is_the_cheapest_of_all(accuracy):
    design = summer(accuracy=accuracy)
    plan = tighten(design)
    parts = ["a leg", "b leg", "feedback"]
    grades = [g for g in GRADES if g[0] <= 0.01]
    best = min(
        (sum(g[2] - 1 for g in choice) for choice in itertools.product(grades, repeat=3)
         if with_each(design, dict(zip(parts, choice, strict=True))) <= accuracy),
        default=None,
    )  # fmt: skip
    assert plan.possible and best is not None
    assert plan.extra_cost == pytest.approx(best, abs=0.05)
    chosen = {c.part: (c.tolerance, c.temperature_coefficient) for c in plan.changes}
    assert with_each(design, chosen) <= accuracy
    assert max(plan.errors.values()) == pytest.approx(with_each(design, chosen), rel=1e-9)


def test_a_plan_that_cannot_be_says_what_is_in_the_way():
    plan = tighten(summer(op_amp(offset_voltage=0.05)), 0.01)
    assert not plan.possible and plan.obstacle == "offset voltage" and max(plan.errors.values()) > 0.01
    with pytest.raises(InvalidQuantity):
        tighten(summer(accuracy=None))


def test_trimming_the_offset_leaves_no_offset_and_software_leaves_the_drift():
    amp = ideal_op_amp(**{**CLEAN, "offset_voltage": 5e-3, "offset_drift": 1e-5})
    design = summer(amp, tolerance=0.0, temperature_coefficient=0.0)
    left = after_trim(replace(design, signals=tuple(replace(s, source_resistance=0.0) for s in design.signals)))
    noise_gain = 1 + 1e4 / 2e4 + 1e4 / 5e4
    drift = 2 * noise_gain * 1e-5 * 25 / 3  # rectangular in drift and in ΔT = ±25 K: limit/√3 · 1/√3
    assert left.untrimmed == pytest.approx(2 * math.hypot(noise_gain * 5e-3 / math.sqrt(3), drift / 2), rel=1e-6)
    assert left.offset == pytest.approx(drift, rel=1e-6)
    assert left.software == pytest.approx(drift, rel=1e-6)


def test_trimming_gain_takes_out_what_two_legs_share():
    """The feedback moves every weight alike, so a gain trim leaves only what the legs differ by."""
    amp = ideal_op_amp(**CLEAN)
    design = summer(amp, temperature_coefficient=0.0)
    design = replace(design, signals=tuple(replace(s, source_resistance=0.0) for s in design.signals))
    left = after_trim(design)
    assert left.untrimmed >= left.offset >= left.offset_and_gain > left.software == pytest.approx(0, abs=1e-9)
    # legs of ±1 % each: at the corners exact, with one signal flipped the rest of the two
    a, b = 5.0 * 0.01 / math.sqrt(3), 2.0 * 0.01 / math.sqrt(3)
    flipped = 2 * math.hypot(a * (1 - 5 / 7), b * 5 / 7)
    assert left.offset_and_gain == pytest.approx(flipped, rel=1e-6)


def test_the_capacitor_gives_the_margin_it_promises_and_a_smaller_one_does_not():
    design = summer()
    cure = feedback_capacitor(design, 0, 65.0)
    assert response(design).cells[0].phase_margin < 65
    assert response(with_capacitor(design, 0, cure.value)).cells[0].phase_margin == pytest.approx(65, abs=0.1)
    assert response(with_capacitor(design, 0, 0.97 * cure.value)).cells[0].phase_margin < 65
    assert cure.bandwidth < cure.bandwidth_before
    assert feedback_capacitor(with_capacitor(design, 0, cure.value * 1.2), 0, 60.0) is None


def test_the_isolating_resistor_is_that_of_python_control():
    design = summer()
    design = replace(design, load=Load(2e3, 5e-9), stray_capacitance=5e-12)
    assert isolated_margin(design, 0.0)[0] == pytest.approx(response(design).cells[0].phase_margin, abs=1e-6)
    cure = isolating_resistor(design, 45.0)
    amp = design.op_amp
    s = control.tf("s")
    a = amp.open_loop_gain / (1 + s * amp.open_loop_gain / (2 * math.pi * amp.gain_bandwidth))
    a = a / (1 + s / (2 * math.pi * amp.second_pole))
    y_1 = 1 / 20050 + 1 / 50050 + 1 / amp.input_resistance
    y_1 = y_1 + s * (amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance)
    y_f, y_l = 1 / 1e4, 1 / 2e3 + s * 5e-9
    y_o = y_l / (1 + cure.value * y_l) + y_1 * y_f / (y_1 + y_f)
    g_o = 1 / amp.output_resistance
    loop = control.minreal(a * g_o / (g_o + y_o) * y_f / (y_1 + y_f), 1e-6, verbose=False)
    _, margin, _, _, w_c, _ = control.stability_margins(loop)
    found, crossover = isolated_margin(design, cure.value)
    assert found == pytest.approx(margin, abs=1e-3) and found == pytest.approx(45, abs=0.3)
    assert crossover == pytest.approx(w_c / 2 / math.pi, rel=1e-6)
    assert cure.gain_loss == pytest.approx(cure.value / (cure.value + 2e3))
    assert isolating_resistor(replace(design, load=Load(2e3)), 45.0) is None


def test_where_no_part_alone_is_enough_two_are_named_and_keep_their_promise():
    """22 kilohm at the inverting node and 10 nF on the output: the capacitor for one, the resistor for the other."""
    design = replace(summer(), load=Load(1e4, 1e-8))
    cell = design.cells[0]
    large = replace(cell, minus=tuple(replace(leg, resistance=leg.resistance * 3) for leg in cell.minus), feedback=3e4)
    design = replace(design, cells=(large,))
    assert isolating_resistor(design, 45.0) is None and feedback_capacitor(design, 0, 45.0) is None
    *_, found = cures(design)
    both = found[-1]
    fitted = with_capacitor(design, 0, both.value)
    assert isolated_margin(fitted, both.resistor)[0] == pytest.approx(both.phase_margin) and both.phase_margin >= 45
    advice = next(c.advice for c in Analysis(design).checks if c.key == "phase_margin")
    assert "across the feedback" in advice and "between the output and its" in advice


def test_a_cable_is_one_more_pole_of_its_source():
    design = summer(ideal_op_amp(**CLEAN, gain_bandwidth=1e12))
    design = replace(design, signals=tuple(replace(s, source_resistance=1e3) for s in design.signals))
    net, f = Network(design), np.geomspace(1e3, 1e7, 20)
    none = with_cables(design, f, [0.0, 0.0])
    np.testing.assert_allclose(none.gains, source_gains(net, f)[:2], rtol=1e-12)
    np.testing.assert_allclose(none.loop_gains, loop_gains(net, f), rtol=1e-12)
    loaded = with_cables(design, f, [1e-9, 0.0])
    pole = 1 / (1 + 2j * np.pi * f * 1e-9 * (1e3 * 2e4 / 2.1e4))  # R_s ∥ R into a virtual ground
    np.testing.assert_allclose(loaded.gains[0] / none.gains[0], pole, rtol=1e-4)
    np.testing.assert_allclose(loaded.gains[1], none.gains[1], rtol=1e-4)
    assert (np.abs(loaded.loop_gains[0, -1]) < np.abs(none.loop_gains[0, -1])).all()


def test_crosstalk_goes_through_what_is_left_of_the_virtual_ground():
    design = summer(ideal_op_amp(**CLEAN) and op_amp(**CLEAN, open_loop_gain=1e4))
    x = crosstalk(design, 0.0)
    net = Network(design)
    out = source_gains(net, [1e-6])[:2, 0].real
    want = -out[1] / 1e4 * 50 / 20050  # node at -v_out/A (output resistance aside), across 50 Ω of 20.05 kΩ
    assert x[0, 1].real == pytest.approx(want, rel=0.08)
    assert x[0, 0] == x[1, 1] == 0
    assert abs(crosstalk(design, 1e5)[0, 1]) > 5 * abs(x[0, 1])  # the loop gain is gone, the node moves


def test_non_inverting_sources_see_each_other():
    design = one_cell(
        {"a": 1.0, "b": 1.0}, plus={"a": 1e4, "b": 1e4}, minus_ground=1e4, feedback=1e4, amp=ideal_op_amp()
    )
    design = replace(design, signals=tuple(replace(s, source_resistance=100.0) for s in design.signals))
    # half of b at the node, 100 Ω of 10.1 kΩ of that on a's terminals: 0.5 · 0.0099
    assert crosstalk(design, 0.0)[0, 1].real == pytest.approx(0.5 * 100 / 10100, rel=1e-9)


def test_a_short_is_the_current_limit_times_the_rail():
    design = replace(summer(), supply=Supply(15.0, -12.0, 0.1))
    short = output_short(design)
    assert short.current == 0.02
    assert short.dissipation == pytest.approx(0.02 * 16.5 + 1e-3 * (16.5 + 13.2))
    assert short.junction == pytest.approx(50 + 100 * short.dissipation)


def test_an_unpowered_stage_takes_what_ohm_says():
    # both signals at 10 V into the node held at one junction drop, the feedback resistor to an output at 0 V
    worst = input_currents(summer())[0]
    want = (10 - JUNCTION_DROP) / 20050 + (10 - JUNCTION_DROP) / 50050 - JUNCTION_DROP / 1e4
    assert (worst.state, worst.pin, worst.signals) == ("unpowered", "minus", ("a", "b"))
    assert worst.current == pytest.approx(want, rel=1e-9)
    assert {c.state for c in input_currents(summer())} == {"unpowered", "high rail missing"}
    small = tuple(replace(s, high=0.5) for s in summer().signals)
    assert input_currents(replace(summer(), signals=small)) == ()


def test_a_signal_past_its_range_clips_and_then_reaches_the_others():
    found = {o.name: o for o in overdrive(summer(), 10.0)}
    assert found["a"].clipped != "no" and found["a"].others > 1e-7
    gentle = {o.name: o for o in overdrive(summer(), 1.01)}
    assert gentle["b"].clipped == "no" and gentle["b"].others < 1e-8


def test_every_op_amp_is_judged_by_the_same_checks():
    design = replace(summer(), target=replace(summer().target, low=-8.0, high=1.0, noise=1e-3, bandwidth=1e4))
    trials = list(try_all(design))
    assert [t.name for t in trials] == [e.name for e in catalogue()]
    one = next(t for t in trials if t.name == "TL072")
    own = Analysis(replace(design, op_amp=next(e for e in catalogue() if e.name == "TL072").op_amp)).checks
    assert one.checks == {c.key: (c.title, c.status, c.margin, c.unit) for c in own}
    assert one.short == sum(c.status == "short" for c in own)
    order = ranked(trials)
    assert [t.short for t in order] == sorted(t.short for t in trials)
    cmos = next(t for t in trials if t.name == "MCP6002")
    assert cmos.short > 0  # ±15 V is far past its 6 V


def test_remedies_hold_for_any_chain():
    design = random_chain(np.random.default_rng(11), cells=2, count=3)
    design = replace(design, target=replace(design.target, accuracy=10.0), ambient=Ambient(25.0, 0.0, 60.0))
    assert tighten(design).possible
    left = after_trim(design)
    assert left.software <= left.untrimmed
    assert len(overdrive(design)) == 3
    assert crosstalk(design, 1e3).shape == (3, 3)
