"""Time records against one-pole slew arithmetic, second-order theory and SciPy's ODE solvers."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from sumwright.engine.nodes import Network, nominal_limits
from sumwright.engine.stage import Cell, Design, Leg, Load, Signal, Supply, replace
from sumwright.engine.trace import step, trace
from sumwright.engine.waves import Wave
from support.stages import ideal_op_amp, op_amp


def inverter(amp, *, legs=1, r=1e5, r_f=1e5, supply=40.0, load=None, c_f=0.0, stray=0.0):
    names = [f"in{i + 1}" for i in range(legs)]
    sig = tuple(Signal(n, -1.0, -50.0, 50.0, 0.0) for n in names)
    cell = Cell(tuple(Leg(n, r) for n in names), (), None, 0.0, r_f, c_f)
    return Design(
        "inverter", sig, Supply(supply, -supply), amp, load=load or Load(), cells=(cell,), stray_capacitance=stray
    )


def one_pole(**figures):
    return ideal_op_amp(open_loop_gain=1e8, gain_bandwidth=3e6, slew_rate=1e12, **figures)


# ln(1/ε) time constants of a single pole: 4.605, 6.908, 9.210 for 1 %, 0.1 %, 0.01 % (any text; TI SLYW038 tabulates it)
@pytest.mark.parametrize(("band", "constants"), [(0.01, 4.605170), (0.001, 6.907755), (0.0001, 9.210340)])
def test_a_single_pole_settles_in_logarithms(band, constants):
    tau = 5 / (2 * math.pi * 3e6)  # noise gain 5 over the gain-bandwidth product
    s = step(inverter(one_pole(), legs=4), "in1", 0.01)
    assert s.settled[band] == pytest.approx(constants * tau, rel=2e-5)
    assert s.rise == pytest.approx(math.log(9) * tau, rel=1e-3)  # the 2.2 τ of 10 % to 90 %, rise × bandwidth = 0.35
    assert s.overshoot == 0


def test_an_output_at_its_limit_has_no_step_to_measure():
    # by hand: -10 V and -11 V are both past the -5 V rail; the limit creeps a little with the current, that is no step
    amp = replace(one_pole(), dropout_resistance=20.0, output_current=0.1)
    s = step(replace(inverter(amp, legs=1), supply=Supply(5.0, -5.0, 0.0)), "in1", 1.0, start=10.0)
    assert s.at_limit and s.overshoot == 0.0 and s.rise is None and set(s.settled.values()) == {None}
    assert not step(replace(inverter(amp, legs=1), supply=Supply(5.0, -5.0, 0.0)), "in1", 1.0, start=0.0).at_limit


def test_a_large_step_slews_first_and_then_settles():
    # One-pole slew model: slews until the error is SR·τ, then an exponential. 10 V at 13 V/µs, GBW 3 MHz, noise
    # gain 5, to 0.1 %: 0.504 µs of slewing, 1.550 µs of tail, 2.054 µs in all (not 2.60, slewing plus 6.9 τ).
    s = step(inverter(one_pole() and replace(one_pole(), slew_rate=13e6), legs=4), "in1", 10.0)
    tau = 5 / (2 * math.pi * 3e6)
    start = (10 - 13e6 * tau) / 13e6
    assert start == pytest.approx(0.504e-6, abs=0.001e-6)
    assert s.settled[0.001] == pytest.approx(start + tau * math.log(13e6 * tau / 0.01), rel=1e-4)
    assert s.settled[0.001] == pytest.approx(2.054e-6, abs=0.0005e-6)
    assert s.trace.slewing > 0


# Second-order loop with one integrator and one more pole: overshoot against phase margin; exact values of
# exp(-π ζ / √(1 - ζ²)) with PM = arctan(2ζ / √(√(1 + 4ζ⁴) - 2ζ²)) (J. C. Daly, Univ. of Rhode Island, Table I,
# prints 13.3, 8.7, 4.7, 1.4, 0.008 %).
@pytest.mark.parametrize(("margin", "percent"), [(55, 13.27), (60, 8.77), (65, 4.72), (70, 1.44), (75, 0.0076)])
def test_overshoot_follows_phase_margin(margin, percent):
    from sumwright.engine.response import response

    gbw = 1e6
    # |T| = 1 at fc with phase -90° - arctan(fc/f2) = margin - 180°
    ratio = math.tan(math.radians(90 - margin))  # fc / f2
    fc = gbw / 2 / math.sqrt(1 + ratio**2)  # noise gain 2
    amp = ideal_op_amp(open_loop_gain=1e9, gain_bandwidth=gbw, second_pole=fc / ratio, slew_rate=1e12)
    design = inverter(amp)
    assert response(design).cells[0].phase_margin == pytest.approx(margin, abs=0.01)
    assert 100 * step(design, "in1", 0.1).overshoot == pytest.approx(percent, abs=0.01 if percent > 1 else 0.0005)


def test_rc_settling_of_a_loaded_output():
    # 10 kΩ and 12 pF to a quarter of a 12-bit step: 9.704 time constants, 1164 ns. Here as feedback network.
    amp = ideal_op_amp(open_loop_gain=1e12, gain_bandwidth=1e14, slew_rate=1e15)
    design = inverter(amp, r=1e4, r_f=1e4, c_f=12e-12)
    run = trace(design, {"in1": Wave("step", amplitude=-1.0)}, 1164.448e-9, samples=2)
    assert 1 - run.outputs[0, -1] == pytest.approx(0.25 / 4096, rel=2e-3)


def ode(design, u, duration, times, rtol=1e-9):
    """The same stage by a stiff ODE solver straight from its node equations, slewing as a clipped rate.

    One inverting cell: unknown node voltages m and o, op amp states a and b. Written for this test alone.
    """
    amp, cell = design.op_amp, design.cells[0]
    g = np.array([1 / leg.resistance for leg in cell.minus])
    gf, cf = 1 / cell.feedback, cell.feedback_capacitance
    cm = amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance
    cl, gl = design.load.capacitance, 1 / design.load.resistance
    ro, w1, w2 = amp.output_resistance, 2 * np.pi * amp.gain_bandwidth / amp.open_loop_gain, 2 * np.pi * amp.second_pole
    y_in = 1 / amp.input_resistance
    inverse = np.linalg.inv(np.array([[cm + cf, -cf], [-cf, cl + cf]]))

    def f(t, x):
        m, o, a, b = x
        into_m = (g * (u(t) - m)).sum() - gf * (m - o) - y_in * m
        into_o = (b - o) / ro - gf * (o - m) - gl * o
        dm, do = inverse @ (into_m, into_o)
        rate = np.clip(w1 * (-amp.open_loop_gain * m - a), -amp.slew_rate, amp.slew_rate)
        return dm, do, rate, w2 * (a - b)

    v = np.linalg.solve(
        np.array([
            [g.sum() + gf + y_in, -gf, 0.0], [-gf, gf + gl + 1 / ro, -1 / ro], [amp.open_loop_gain, 0.0, 1.0]
        ]),
        [(g * u(-1.0)).sum(), 0.0, 0.0],
    )  # fmt: skip
    s = solve_ivp(
        f, (0, duration), [v[0], v[1], v[2], v[2]], "Radau", times, rtol=rtol, atol=1e-9, max_step=duration / 400
    )
    return s.y[1]


@pytest.mark.parametrize("height", [0.1, 8.0])
def test_steps_are_those_of_an_ode_solver(height):
    """Small: linear and ringing. Large: slewing with the second pole and the loaded output in play."""
    design = inverter(op_amp(), legs=3, r=2e4, r_f=2e4, load=Load(2e3, 2e-10), c_f=1e-12, stray=5e-12)
    times = np.linspace(0, 4e-6, 201)
    ours = trace(design, {"in2": Wave("step", amplitude=height)}, 4e-6, samples=201).outputs[0]
    theirs = ode(design, lambda t: np.array([0.0, height if t >= 0 else 0.0, 0.0]), 4e-6, times)
    np.testing.assert_allclose(ours, theirs, atol=2e-5 * height)


def test_a_slewing_sine_is_that_of_an_ode_solver():
    design = inverter(op_amp(slew_rate=2e6), legs=1, r=2e4, r_f=2e4, load=Load(2e3, 1e-10), stray=5e-12)
    wave = Wave("sine", amplitude=8.0, frequency=1e5)  # asks for 5 V/µs
    run = trace(design, {"in1": wave}, 2e-5, samples=401)
    theirs = ode(design, lambda t: np.array([8 * math.sin(2 * math.pi * 1e5 * max(t, 0.0))]), 2e-5, run.times)
    # the ODE starts at rest and the record too, since at steady state the stage would slew
    np.testing.assert_allclose(run.outputs[0], theirs, atol=2e-3)
    assert run.slewing > 0.5 and run.complete


def test_a_clipped_record_recovers_to_the_linear_one():
    """Clipped tops sit at the static limit, and half a period later the record is linear again."""
    design = inverter(op_amp(dropout_resistance=50.0), r=1e4, r_f=2e4, supply=12.0, load=Load(1e3))
    run = trace(design, {"in1": Wave("sine", amplitude=8.0, frequency=1e3)}, 1e-3, samples=2001)
    limit = nominal_limits(design).high
    i = limit / (1 / (1 / 1e3 + 1 / 2e4) + 50.0)  # load and feedback through the dropout resistance, m near ground
    top = run.outputs[0].max()
    assert top == pytest.approx(limit - 50 * i, abs=0.05)
    assert run.clipping > 0.3
    quiet = np.abs(16 * np.sin(2 * np.pi * 1e3 * run.times)) < 5
    quiet &= run.times > 1e-4
    np.testing.assert_allclose(run.outputs[0][quiet], -16 * np.sin(2 * np.pi * 1e3 * run.times[quiet]), atol=0.05)


def limited_ode(design, u, duration, times):
    """As `ode`, with the output stage's limits as a stiff but smooth law: current of the branch against both ends.

    Behind the output resistance the op amp holds b; what reaches the output is bounded by the rails less dropout and
    by the current limit. The compensation capacitor follows what the output allows, as the engine holds it.
    """
    amp, cell = design.op_amp, design.cells[0]
    g = np.array([1 / leg.resistance for leg in cell.minus])
    gf = 1 / cell.feedback
    cm = amp.differential_capacitance + amp.common_mode_capacitance + design.stray_capacitance
    cl, gl = design.load.capacitance, 1 / design.load.resistance
    ro, rd, w1 = amp.output_resistance, amp.dropout_resistance, 2 * np.pi * amp.gain_bandwidth / amp.open_loop_gain
    top, bottom = design.supply.high - amp.dropout_high, design.supply.low + amp.dropout_low

    def held(a, o):
        """Output current and the inner voltage that goes with it."""
        i = (a - o) / ro
        most = min(amp.output_current, (top - o) / rd)
        least = max(-amp.output_current, (bottom - o) / rd)
        bounded = min(max(i, least), most)
        return bounded, o + ro * bounded

    def f(t, x):
        m, o, a = x
        i, inner = held(a, o)
        dm = ((g * (u(t) - m)).sum() - gf * (m - o)) / cm
        do = (i - gf * (o - m) - gl * o) / cl
        rate = np.clip(w1 * (-amp.open_loop_gain * m - a), -amp.slew_rate, amp.slew_rate)
        # beyond a limit the capacitor is pulled back to it within a nanosecond
        return dm, do, rate - max(a - inner, 0.0) * 1e9 - min(a - inner, 0.0) * 1e9

    s = solve_ivp(f, (0, duration), [0.0, 0.0, 0.0], "LSODA", times, rtol=1e-8, atol=1e-10, max_step=duration / 4000)
    return s.y[1]


@pytest.mark.parametrize(("height", "load", "current"), [(9.0, Load(1e3, 1e-9), 1.0), (6.0, Load(2e3, 2e-8), 0.01)])
def test_limits_and_recovery_are_those_of_an_ode_solver(height, load, current):
    """A triangle into the rail and back; a step into a heavy capacitor at the current limit."""
    amp = op_amp(
        second_pole=None, output_current=current, dropout_resistance=60.0, input_resistance=1e15, slew_rate=5e6
    )
    design = inverter(amp, r=1e4, r_f=1.5e4, supply=12.0, load=load, stray=5e-12)
    if current < 1:
        wave = Wave("points", times=(0.0, 1e-6, 1e-6, 60e-6, 60e-6), volts=(0.0, 0.0, height, height, 0.0))
    else:
        wave = Wave("triangle", amplitude=height, frequency=2e4)
    run = trace(design, {"in1": wave}, 1e-4, samples=501)
    from sumwright.engine.waves import pieces, sample

    p = pieces(wave, 1e-4)
    theirs = limited_ode(design, lambda t: np.array([sample(p, [t])[0]]), 1e-4, run.times)
    assert run.clipping > 0.05 and run.complete
    np.testing.assert_allclose(run.outputs[0], theirs, atol=0.02)


def test_a_sine_is_the_frequency_response():
    from sumwright.engine.response import source_gains

    design = inverter(op_amp(), legs=2, r=2e4, r_f=2e4, load=Load(2e3, 1e-10), c_f=2e-12)
    run = trace(design, {"in1": Wave("sine", amplitude=0.1, frequency=3e5)}, 1e-4, samples=1000)
    h = source_gains(Network(design), [3e5])[0, 0]
    want = 0.1 * (h * -1j * np.exp(2j * np.pi * 3e5 * run.times)).real
    np.testing.assert_allclose(run.outputs[0], want, atol=1e-9)
