"""Dissipation against data-book examples and derating lines."""

import pytest
from sumwright.engine.heat import heat, resistor_rating, zonotope
from sumwright.engine.stage import Ambient, Load, ResistorKind, Signal, Supply, replace
from support.stages import ideal_op_amp, one_cell


def follower(amp, load, low, high, supply, ambient=25.0):
    design = one_cell({"a": 0.0}, plus={"a": 0.0}, feedback=1e9, amp=amp, load=Load(load))
    return replace(
        design, signals=(Signal("a", 1.0, low, high, low),), supply=supply, ambient=Ambient(25.0, 25.0, ambient)
    )


def most(design):
    return heat(design).op_amps[0].dissipation_most


def test_worst_case_of_a_loaded_output_is_at_half_swing():
    # ±15 V, 2 kΩ: (V/2)²/R = 28.125 mW each at ±7.5 V beside the 42 mW idle; two of them 84 + 56.25 = 140.3 mW
    amp = ideal_op_amp(supply_current=1.4e-3, thermal_resistance=100.0, per_package=1)
    design = follower(amp, 2e3, -15.0, 15.0, Supply(15.0, -15.0))
    assert most(design) == pytest.approx(0.042 + 0.028125, rel=1e-6)
    assert 2 * most(design) == pytest.approx(0.1403, abs=6e-5)


def test_a_package_heats_all_that_is_in_it():
    amp = ideal_op_amp(supply_current=1.4e-3, thermal_resistance=100.0, per_package=2)
    design = follower(amp, 2e3, -15.0, 15.0, Supply(15.0, -15.0), ambient=50.0)
    # the unused amplifier draws its supply current
    assert heat(design).op_amps[0].junction == pytest.approx(50 + 100 * (0.070125 + 0.042), rel=1e-6)
    assert heat(replace(design, op_amp=replace(amp, thermal_resistance=None))).op_amps[0].junction is None


def test_a_video_amplifier_into_a_low_load():
    # TI SBOS223F (OPA690), p. 25: ±5 V (10 V total), 6.2 mA, output at V/2 into 20 Ω ∥ 804 Ω: 382 mW; 150 K/W at 85 °C: 142 °C
    amp = ideal_op_amp(supply_current=6.2e-3, thermal_resistance=150.0, output_current=10.0)
    design = follower(amp, 20 * 804 / 824, 0.0, 5.0, Supply(5.0, -5.0), ambient=85.0)
    assert most(design) == pytest.approx(0.382, abs=5e-4)
    assert heat(design).op_amps[0].junction == pytest.approx(142, abs=0.5)


def test_a_high_voltage_amplifier_into_500_ohm():
    # TI OPA810 data sheet: ±12 V, 4.7 mA, half swing (6 V) into 500 Ω: 184.8 mW; 190.8 K/W from 25 °C: 60 °C
    amp = ideal_op_amp(supply_current=4.7e-3, thermal_resistance=190.8, output_current=10.0)
    design = follower(amp, 500.0, -12.0, 12.0, Supply(12.0, -12.0))
    assert most(design) == pytest.approx(0.1848, abs=5e-5)
    assert heat(design).op_amps[0].junction == pytest.approx(60, abs=0.5)


def test_a_single_supply_stage():
    # TI precision hub, "op amp power dissipation", part 2: 5.5 V, 0.5 mA, output 2.75 V into 5 kΩ and a 1.67k + 1.67k
    # feedback chain: 0.550 + 0.8234 mA (printed 0.8324 by mistake), 6.53 mW
    amp = ideal_op_amp(supply_current=0.5e-3, output_current=1.0)
    load = 1 / (1 / 5e3 + 1 / 3.34e3)
    design = follower(amp, load, 0.0, 2.75, Supply(5.5, 0.0))
    assert most(design) == pytest.approx(6.53e-3, abs=1e-5)


# Vishay TNPW e3: P70 × thermal resistance + 70 °C is the film's 125 °C. Here the common line to 155 °C:
# full to 70 °C, half at 112.5 °C, nothing at 155 °C.
@pytest.mark.parametrize(("ambient", "share"), [(25, 1.0), (70, 1.0), (112.5, 0.5), (155, 0.0), (200, 0.0)])
def test_a_resistor_is_derated_in_a_straight_line(ambient, share):
    design = follower(ideal_op_amp(), 1e3, 0.0, 1.0, Supply(5.0, -5.0), ambient=float(ambient))
    assert resistor_rating(replace(design, resistor=ResistorKind(power=0.25))) == pytest.approx(0.25 * share)


def test_ohm_and_joule_in_a_summer():
    # US Army TC 9-62, p. 7-30: 12k with -60 V across it dissipates 0.300 W
    design = one_cell({"a": 12, "b": 3, "c": 8}, minus={"a": 6e3, "b": 3e3, "c": 4e3}, plus_ground=0.0, feedback=12e3)
    ends = tuple(replace(s, low=s.value, high=s.value) for s in design.signals)
    found = {r.name: r.dissipation_most for r in heat(replace(design, signals=ends)).resistors}
    assert found["feedback"] == pytest.approx(0.3, rel=1e-9)
    assert found["a leg"] == pytest.approx(12**2 / 6e3, rel=1e-9)


def test_zonotope_is_what_a_box_is_mapped_to():
    import numpy as np

    rng = np.random.default_rng(3)
    sides = rng.normal(size=(5, 2))
    corners = zonotope([1.0, -2.0], sides)
    inside = np.array([1.0, -2.0]) + rng.random((4000, 5)) @ sides
    edge = np.roll(corners, -1, axis=0) - corners
    for point in inside:
        across = edge[:, 0] * (point - corners)[:, 1] - edge[:, 1] * (point - corners)[:, 0]
        assert (across > -1e-12).all()
    whole = np.array([1.0, -2.0]) + np.array(np.meshgrid(*[[0, 1]] * 5)).reshape(5, -1).T @ sides
    for corner in corners:
        assert np.abs(whole - corner).sum(axis=1).min() < 1e-12


def test_dropout_that_grows_with_current_bounds_the_reach():
    """Always asked for more than it can: into 100 Ω the output stands at 15 - 50 i = 100 i, 10 V and 0.1 A, 0.5 W."""
    amp = ideal_op_amp(supply_current=0.0, dropout_resistance=50.0, output_current=10.0)
    assert most(follower(amp, 100.0, 12.0, 14.0, Supply(15.0, -15.0))) == pytest.approx(0.5, rel=1e-6)
    # half swing is within reach: 7.5² / 100
    assert most(follower(amp, 100.0, 0.0, 14.0, Supply(15.0, -15.0))) == pytest.approx(0.5625, rel=1e-6)
    # up to 4 V into 10 Ω the current limit of 0.2 A stops it at 2 V: 13 V times 0.2 A
    weak = ideal_op_amp(supply_current=0.0, output_current=0.2)
    assert most(follower(weak, 10.0, 0.0, 4.0, Supply(15.0, -15.0))) == pytest.approx(2.6, rel=1e-6)
