"""Responses and margins against python-control, scipy.signal and published loop examples."""

import math

import control
import numpy as np
import pytest
from scipy import signal
from sumwright.engine.nodes import Network
from sumwright.engine.response import full_power_bandwidth, loop_gains, response, source_gains
from sumwright.engine.stage import Cell, Design, Leg, Load, Signal, Supply, replace
from sumwright.engine.trace import step
from support.stages import ideal_op_amp, one_cell, op_amp


def flat(legs=4, r=1e5, r_f=1e5, gbw=3e6, c_in=15e-12, c_f=0.0):
    amp = ideal_op_amp(open_loop_gain=1e8, gain_bandwidth=gbw, differential_capacitance=c_in, slew_rate=1e12)
    names = {f"in{i}": 0.0 for i in range(legs)}
    ground = None
    if not legs:
        names, ground = {"in0": 0.0}, None
    minus = dict.fromkeys(names, r) if legs else {"in0": 1e12}
    return one_cell(
        names, minus=minus, minus_ground=ground, plus_ground=0.0, feedback=r_f, feedback_capacitance=c_f, amp=amp
    )


# Four 100k into 100k, 15 pF at the input, one-pole GBW 3 MHz. The feedback capacitor of equal time constants,
# C_in (R1 ∥ ...)/Rf = 3.75 pF, makes the noise gain flat (Analog Devices MT-050, p. 1): 90° at 600.0 kHz, no overshoot.
@pytest.mark.parametrize(
    ("pf", "khz", "degrees", "overshoot"),
    [(0.0, 455.3, 49.36, 0.188), (1.0, None, 63.4, None), (3.75, 600.0, 90.0, 0.0), (10.0, 1169.0, None, None)],
)
def test_the_neutral_feedback_capacitor(pf, khz, degrees, overshoot):
    design = flat(c_f=pf * 1e-12)
    cell = response(design).cells[0]
    assert cell.noise_gain == pytest.approx(5.0)
    if khz:
        assert cell.crossover == pytest.approx(khz * 1e3, rel=5e-4)
    if degrees:
        assert cell.phase_margin == pytest.approx(degrees, abs=0.2)
    if overshoot is not None:
        assert step(design, "in0", 0.01).overshoot == pytest.approx(overshoot, abs=1e-3)


def test_the_transimpedance_rule():
    # C_f = √(C_in/(2π Rf GBW)) = 2.821 pF for 15 pF, 100k, 3 MHz without input resistors: 56.2°, 10.7° without it
    # (standard rule, from memory)
    c_f = math.sqrt(15e-12 / (2 * math.pi * 1e5 * 3e6))
    assert c_f == pytest.approx(2.821e-12, abs=1e-15)
    assert response(flat(legs=0)).cells[0].phase_margin == pytest.approx(10.7, abs=0.1)
    assert response(flat(legs=0, c_f=c_f)).cells[0].phase_margin == pytest.approx(56.2, abs=0.1)


def test_a_resistor_across_the_inputs_costs_bandwidth_but_no_gain():
    # OPA134 data sheet, p. 9: raising the noise gain to 101 with a resistor across the inputs leaves the signal gain
    # and divides loop gain and bandwidth by 101 (against a noise gain of 1)
    amp = ideal_op_amp(open_loop_gain=1e8, gain_bandwidth=8e6)
    plain = one_cell({"a": 0.0}, plus={"a": 0.0}, feedback=1e4, amp=amp)
    slowed = one_cell({"a": 0.0}, plus={"a": 0.0}, feedback=1e4, amp=replace(amp, input_resistance=100.0))
    fast, slow = response(plain), response(slowed)
    assert slow.signals[0].dc_gain == pytest.approx(fast.signals[0].dc_gain, rel=1e-5)
    assert fast.signals[0].bandwidth_3db / slow.signals[0].bandwidth_3db == pytest.approx(101, rel=1e-4)
    assert fast.cells[0].crossover / slow.cells[0].crossover == pytest.approx(101, rel=2e-3)


# slew rate / (2π·10 V): LM741 0.5, NE5532 9, TL072 13, LM358 0.3 V/µs; 2 V/µs at 12 V 26.5 kHz
@pytest.mark.parametrize(
    ("slew", "peak", "hz"),
    [(0.5e6, 10, 7.96e3), (9e6, 10, 143e3), (13e6, 10, 207e3), (0.3e6, 10, 4.77e3), (2e6, 12, 26.5e3)],
)
def test_full_power_bandwidth(slew, peak, hz):
    amp = op_amp(slew_rate=slew)
    design = one_cell({"a": 0.0}, minus={"a": 1e4}, plus_ground=0.0, feedback=1e4, amp=amp)
    assert full_power_bandwidth(design, 2.0 * peak) == pytest.approx(hz, rel=4e-3)
    assert full_power_bandwidth(design, 0.0) is None


def loop_of_an_inverter(design):
    """T(s) of one inverting cell as a python-control transfer function, written out from the circuit by hand."""
    amp, cell = design.op_amp, design.cells[0]
    s = control.tf("s")
    a = amp.open_loop_gain / (1 + s * amp.open_loop_gain / (2 * math.pi * amp.gain_bandwidth))
    a = a / (1 + s / (2 * math.pi * amp.second_pole))
    y_1 = sum(1 / leg.resistance for leg in cell.minus) + 1 / amp.input_resistance
    y_1 = y_1 + s * (amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance)
    y_f = 1 / cell.feedback + s * cell.feedback_capacitance
    y_l = 1 / design.load.resistance + s * design.load.capacitance
    g_o = 1 / amp.output_resistance
    # divider from behind the output resistance to the output, then to the inverting node
    series = y_1 * y_f / (y_1 + y_f)
    return control.minreal(a * g_o / (g_o + y_l + series) * y_f / (y_1 + y_f), 1e-6, verbose=False), y_1, y_f


def ringing(c_f=0.0, load=1e-10, gbw=3e6):
    amp = op_amp(gain_bandwidth=gbw)
    sig = tuple(Signal(n, -1.0, -1.0, 1.0, 0.0) for n in "abc")
    return Design(
        "loop", sig, Supply(15.0, -15.0), amp, load=Load(2e3, load), stray_capacitance=5e-12,
        cells=(Cell((Leg("a", 3e4), Leg("b", 2e4), Leg("c", 5e4)), (), None, 0.0, 3e4, c_f),),
    )  # fmt: skip


@pytest.mark.parametrize(
    ("c_f", "load", "gbw"), [(0.0, 1e-10, 3e6), (2e-12, 1e-9, 3e6), (5e-12, 1e-8, 1e6), (0.0, 1e-12, 5e5)]
)
def test_margins_are_those_of_python_control(c_f, load, gbw):
    design = ringing(c_f, load, gbw)
    t, _, _ = loop_of_an_inverter(design)
    gain, phase, _, _, w_c, _ = control.stability_margins(t)
    cell = response(design).cells[0]
    assert cell.crossover == pytest.approx(w_c / (2 * math.pi), rel=1e-6)
    assert cell.phase_margin == pytest.approx(phase, abs=1e-4)
    assert cell.gain_margin_db == pytest.approx(20 * math.log10(gain), abs=1e-4)
    f = np.geomspace(1e2, 1e7, 25)
    np.testing.assert_allclose(loop_gains(Network(design), f)[0], t(2j * np.pi * f), rtol=1e-6)


def test_closed_loop_is_that_of_scipy_signal():
    design = ringing(1e-12, 5e-10)
    t, y_1, y_f = loop_of_an_inverter(design)
    # feedforward through the network aside, -y_a/y_f · T/(1 + T); the exact one adds it at the output node
    s = control.tf("s")
    y_a, g_o = 1 / 3e4, 1 / design.op_amp.output_resistance
    y_l = 1 / 2e3 + s * 5e-10
    direct = y_a / (y_1 + y_f) * y_f / (g_o + y_l + y_1 * y_f / (y_1 + y_f))  # to the output with the op amp dead
    closed = control.minreal((-y_a / y_f * t + direct) / (1 + t), 1e-6, verbose=False)
    system = signal.TransferFunction(closed.num[0][0], closed.den[0][0])
    f = np.geomspace(1e2, 1e7, 60)
    _, h = signal.freqresp(system, 2 * np.pi * f)
    np.testing.assert_allclose(source_gains(Network(design), f)[0], h, rtol=1e-5)
    np.testing.assert_allclose(response(design, frequencies=f).gains[0], h, rtol=1e-5)
    size = np.abs(h) / abs(h[0])
    crossing = np.interp(-1 / math.sqrt(2), -size[size.argmax() :], f[size.argmax() :])
    assert response(design).signals[0].bandwidth_3db == pytest.approx(crossing, rel=0.02)
    fine = np.linspace(0.9, 1.1, 20001) * crossing
    _, h = signal.freqresp(system, 2 * np.pi * fine)
    found = fine[np.argmax(np.abs(h) < 1 / math.sqrt(2) * abs(closed(1e-3j)))]
    assert response(design).signals[0].bandwidth_3db == pytest.approx(found, rel=2e-5)


def test_step_is_that_of_scipy_signal():
    design = ringing(1e-12, 5e-10)
    _, y_1, y_f = loop_of_an_inverter(design)
    s = step(replace(design, op_amp=replace(design.op_amp, slew_rate=1e12)), "a", 0.1, duration=5e-6, samples=401)
    f = np.geomspace(1, 1e9, 3)
    assert np.isfinite(source_gains(Network(design), f)).all()
    t, _, _ = loop_of_an_inverter(design)
    sys_s = control.tf("s")
    y_a, g_o = 1 / 3e4, 1 / design.op_amp.output_resistance
    direct = y_a / (y_1 + y_f) * y_f / (g_o + 1 / 2e3 + sys_s * 5e-10 + y_1 * y_f / (y_1 + y_f))
    closed = control.minreal((-y_a / y_f * t + direct) / (1 + t), 1e-6, verbose=False)
    _, y = signal.step(signal.TransferFunction(closed.num[0][0], closed.den[0][0]), T=s.trace.times)
    np.testing.assert_allclose(s.trace.outputs[0], 0.1 * y, atol=2e-6)
