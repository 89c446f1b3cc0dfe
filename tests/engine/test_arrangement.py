"""The exact recipe makes the wanted weights, in every arrangement that can."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.arrangement import able, arrangement_of, exact_cells, ideal_weights, out_of_range
from sumwright.engine.stage import (
    ARRANGEMENTS,
    Cell,
    Design,
    Leg,
    OpAmp,
    Reference,
    ResistorKind,
    Signal,
    Supply,
    Target,
)
from sumwright.errors import CannotRealise, InvalidDesign

OP_AMP = OpAmp(
    name="any", open_loop_gain=2e5, gain_bandwidth=1e6, second_pole=None, slew_rate=5e5, input_resistance=2e6,
    differential_capacitance=1e-12, common_mode_capacitance=2e-12, output_resistance=75, offset_voltage=1e-3, offset_drift=5e-6,
    bias_current=80e-9, offset_current=20e-9, cmrr=3e4, psrr=3e4, noise_voltage=2e-8, noise_voltage_corner=100,
    noise_current=5e-13, noise_current_corner=500, dropout_high=1.5, dropout_low=1.5, dropout_resistance=50,
    common_mode_high=2, common_mode_low=2, output_current=0.02, supply_least=6, supply_most=36, supply_current=2e-3,
    thermal_resistance=100, junction_most=150,
)  # fmt: skip


def stage(weights, *, offset=0.0, reference=2.5, sources=None, reference_source=0.0, **resistor):
    sources = sources or [0.0] * len(weights)
    return Design(
        title="t",
        signals=tuple(Signal(f"s{i}", w, -1, 1, 0, r) for i, (w, r) in enumerate(zip(weights, sources, strict=True))),
        supply=Supply(15, -15),
        op_amp=OP_AMP,
        target=Target(offset=offset),
        reference=None if reference is None else Reference(reference, reference_source),
        resistor=ResistorKind(**resistor),
    )


def made(design, cells):
    weights, offset = ideal_weights(design, cells)
    return [*weights.values(), offset]


magnitude = st.floats(0.05, 20)


@settings(max_examples=200, deadline=None)
@given(
    weights=st.lists(st.tuples(magnitude, st.booleans()), min_size=1, max_size=8),
    offset=st.sampled_from([0.0, 0.7, -1.3]),
    voltage=st.sampled_from([2.5, -5.0]),
    source=st.sampled_from([0.0, 50.0, 600.0]),
)
def test_exact_cells_make_the_wanted_weights_and_offset(weights, offset, voltage, source):
    design = stage(
        [w if up else -w for w, up in weights],
        offset=offset,
        reference=voltage,
        sources=[source * (i % 3) for i in range(len(weights))],
        reference_source=source,
    )
    can = able(design)
    assert {"mixed-sign", "two-stage"} <= set(can)
    for arrangement in can:
        cells = exact_cells(design, arrangement)
        assert made(design, cells) == pytest.approx([*(s.weight for s in design.signals), offset], rel=1e-9, abs=1e-12)


@pytest.mark.parametrize(
    ("weights", "expected"),
    [
        ([-1, -2], ("inverting", "mixed-sign", "two-stage")),
        ([1, 2], ("inverting-pair", "non-inverting", "mixed-sign", "two-stage")),
        ([1, -2], ("mixed-sign", "two-stage")),
    ],
)
def test_signs_decide_who_is_able(weights, expected):
    design = stage(weights)
    assert able(design) == expected
    for arrangement in ARRANGEMENTS:
        if arrangement in expected:
            exact_cells(design, arrangement)
        else:
            with pytest.raises(CannotRealise, match=r"s0|s1") as refused:
                exact_cells(design, arrangement)
            assert refused.value.able == expected


def test_two_minus_four_by_one_op_amp():
    """vO = 2 v1 - 4 v2 with Rf 100k: legs 50k and 25k, ground leg 33.333k, 20k seen from both nodes.

    Source: Sheingold's rule for adder-subtractors, worked by hand.
    """
    (cell,) = exact_cells(stage([2, -4]), "mixed-sign", feedback=100e3)
    assert cell.plus[0].resistance == pytest.approx(50e3, rel=1e-12)
    assert cell.minus[0].resistance == pytest.approx(25e3, rel=1e-12)
    assert cell.plus_ground == pytest.approx(100e3 / 3, rel=1e-12)
    assert cell.minus_ground is None
    assert 1 / (1 / 50e3 + 3 / 100e3) == pytest.approx(1 / (1 / 25e3 + 1 / 100e3)) == pytest.approx(20e3)


@pytest.mark.parametrize(("weights", "divisor"), [([10] * 5, 49), ([6] * 3, 17), ([200] * 2, 399)])
def test_positive_sums_above_one_take_a_ground_leg_on_the_inverting_node(weights, divisor):
    """Five inputs of gain 10 with Rf 100k: Rf/49 = 2.0408k to ground. Source: as above."""
    for arrangement in ("non-inverting", "mixed-sign"):
        (cell,) = exact_cells(stage(weights), arrangement, feedback=100e3)
        assert cell.minus_ground == pytest.approx(100e3 / divisor, rel=1e-12)
        assert cell.plus_ground is None
        assert [leg.resistance for leg in cell.plus] == pytest.approx([100e3 / w for w in weights])


def test_a_sum_of_tenths_needs_no_ground_leg():
    (cell,) = exact_cells(stage([0.1] * 10), "non-inverting")
    assert cell.plus_ground is None and cell.minus_ground is None


def test_level_shift_0_to_2_volts_into_8_to_10():
    """m = 1, b = 8 from a 10 V reference: R1 1k, R2 1250, Rf 2k, Rg 2500.

    Source: Texas Instruments SLOA097 (B. Carter), the +m +b case, formulas from memory; checked here by the node equations.
    """
    design = stage([1.0], offset=8, reference=10)
    cells = (Cell(plus=(Leg("s0", 1e3), Leg("reference", 1250)), minus_ground=2500, feedback=2e3),)
    assert made(design, cells) == pytest.approx([1, 8], rel=1e-12)


def test_level_shift_10_millivolt_to_1_volt_into_1_to_4_5():
    """m 3.53535, b 0.964646 from 5 V: R2/R1 18.3246, Rf/Rg 2.72828.

    Source: R. Mancini, Op Amps for Everyone, ch. 4, case 1: problem from memory, numbers worked from its equations.
    """
    m = 3.5 / 0.99
    b = 1 - 0.01 * m
    assert (m, b) == (pytest.approx(3.53535, abs=5e-6), pytest.approx(0.964646, abs=5e-7))
    design = stage([m], offset=b, reference=5)
    cells = (Cell(plus=(Leg("s0", 10e3), Leg("reference", 183.246e3)), minus_ground=10e3, feedback=27.2828e3),)
    assert made(design, cells) == pytest.approx([m, b], rel=1e-5)


def test_passive_leg_check():
    """+5 V through 5k, the signal through 10k, 10k to ground: -10, 0, +10 V give 0, 2.5, 5 V (superposition)."""
    design = stage([0.25], offset=2.5, reference=5)
    cells = (Cell(plus=(Leg("s0", 10e3), Leg("reference", 5e3)), plus_ground=10e3, feedback=10e3),)
    weights, offset = ideal_weights(design, cells)
    assert [offset + weights["s0"] * v for v in (-10, 0, 10)] == pytest.approx([0, 2.5, 5], abs=1e-12)


def test_army_worked_example():
    """Rf 12k; 6k, 3k, 4k; +12, +3, +8 V give -60 V. Source: US Army TC 9-62 (23 Jun 2005), p 7-30, para 7-90."""
    design = stage([-2, -4, -3])
    cells = (Cell(minus=(Leg("s0", 6e3), Leg("s1", 3e3), Leg("s2", 4e3)), plus_ground=0.0, feedback=12e3),)
    weights, _ = ideal_weights(design, cells)
    assert sum(w * v for w, v in zip(weights.values(), (12, 3, 8), strict=True)) == pytest.approx(-60, rel=1e-12)


def test_weighted_plus_node():
    """3 V by 2k, -4 V by 3k, Rf 9k, Rg 1k: gains +6, +4, output 2 V. Source: Microchip developer help, Non-Inverting Summing Amplifier."""
    design = stage([6, 4])
    cells = (Cell(plus=(Leg("s0", 2e3), Leg("s1", 3e3)), minus_ground=1e3, feedback=9e3),)
    assert made(design, cells)[:2] == pytest.approx([6, 4], rel=1e-12)


def test_source_resistance_is_part_of_the_leg():
    (cell,) = exact_cells(stage([-1, -2], sources=[600, 50]), "inverting", feedback=10e3)
    assert [leg.resistance for leg in cell.minus] == pytest.approx([9400, 4950])


def test_too_much_source_resistance_names_the_signal_and_what_to_raise():
    with pytest.raises(CannotRealise, match=r"'s1'.*Raise the feedback resistor, 10\skΩ, above 40\skΩ"):
        exact_cells(stage([-1, -2], sources=[0, 20e3]), "inverting", feedback=10e3)


@pytest.mark.parametrize("arrangement", ARRANGEMENTS)
def test_a_weight_of_zero_is_refused(arrangement):
    with pytest.raises(CannotRealise, match="'s1' is 0"):
        exact_cells(stage([1, 0]), arrangement)
    assert able(stage([1, 0])) == ()


def test_an_offset_needs_a_reference_of_fitting_sign():
    with pytest.raises(CannotRealise, match="no reference"):
        exact_cells(stage([-1], offset=1, reference=None), "inverting")
    with pytest.raises(CannotRealise, match="reference voltage is 0 V"):
        exact_cells(stage([-1], offset=1, reference=0.0), "inverting")
    with pytest.raises(CannotRealise, match="negative reference") as refused:
        exact_cells(stage([-1], offset=1), "inverting")
    assert refused.value.able == ("mixed-sign", "two-stage")
    design = stage([-1], offset=1, reference=-5)
    assert made(design, exact_cells(design, "inverting")) == pytest.approx([-1, 1])


@settings(max_examples=100, deadline=None)
@given(weights=st.lists(st.floats(0.1, 10), min_size=1, max_size=6), source=st.sampled_from([0.0, 300.0]))
def test_default_feedback_keeps_every_resistor_in_range(weights, source):
    design = stage([-w for w in weights], sources=[source] * len(weights), least=1e3, most=1e6)
    assert out_of_range(design, exact_cells(design, "inverting")) == ()


def test_out_of_range_says_which():
    design = stage([-0.001, -1000.0], least=1e4, most=1e5)
    said = out_of_range(design, exact_cells(design, "inverting"))
    assert any("s0 leg" in s and "above the most" in s for s in said)
    assert any("s1 leg" in s and "below the least" in s for s in said)


def test_arrangements_are_recognised():
    for weights, arrangement in [
        ([-1, -2], "inverting"),
        ([1, 2], "inverting-pair"),
        ([1, 2], "non-inverting"),
        ([1, -2], "mixed-sign"),
        ([1, -2], "two-stage"),
    ]:
        assert arrangement_of(exact_cells(stage(weights), arrangement)) == arrangement
    assert arrangement_of(()) is None


def test_what_makes_no_weights_is_refused():
    design = stage([1])
    with pytest.raises(InvalidDesign, match="open loop"):
        ideal_weights(design, (Cell(plus=(Leg("s0", 1e4),)),))
    with pytest.raises(InvalidDesign, match="connected to nothing"):
        ideal_weights(design, (Cell(minus=(Leg("s0", 1e4),), feedback=1e4),))
    with pytest.raises(InvalidDesign, match="'nobody'"):
        ideal_weights(design, (Cell(plus=(Leg("nobody", 1e4),), feedback=1e4),))
