"""Laws that must hold for any chain: energy balances, noise powers add, records agree with responses."""

import numpy as np
import pytest
from sumwright.engine.abuse import overdrive
from sumwright.engine.analysis import Analysis
from sumwright.engine.heat import heat
from sumwright.engine.nodes import Network
from sumwright.engine.noise import noise, spectrum
from sumwright.engine.response import loop_gains, response, source_gains
from sumwright.engine.stage import Ambient, Leg, replace
from sumwright.engine.trace import step, trace
from sumwright.engine.waves import Wave
from support.stages import random_chain

SEEDS = range(8)


def chain(seed, **more):
    """A random chain with rails so wide and so much current that nothing clips."""
    design = random_chain(np.random.default_rng(100 + seed), output_current=10.0, input_resistance=1e12, **more)
    return replace(design, supply=replace(design.supply, high=500.0, low=-500.0))


@pytest.mark.parametrize("seed", SEEDS)
def test_energy_balances(seed):
    """What sources and rails give is what resistors, load and op amps turn to heat (Tellegen)."""
    design = chain(seed)
    # every signal stays where it is, rails at nominal: the worst case over the box is this one point
    still = tuple(replace(s, low=s.value, high=s.value) for s in design.signals)
    design = replace(design, signals=still, supply=replace(design.supply, tolerance=0.0))
    a, found = Analysis(design), heat(design)
    given = float(a.values @ a.dc.source_currents) + design.reference.voltage * a.dc.reference_current
    warmed = sum(r.dissipation_most for r in found.resistors)
    warmed += sum(s.source_resistance * i**2 for s, i in zip(design.signals, a.dc.source_currents, strict=True))
    for cell, point in zip(design.cells, a.dc.cells, strict=True):
        for leg in (*cell.minus, *cell.plus):
            if leg.source == "reference":
                warmed += design.reference.source_resistance * point.leg_currents["reference"] ** 2
                break
    last = a.dc.cells[-1]
    warmed += last.output_voltage**2 / design.load.resistance
    high, low, idle = design.supply.high, design.supply.low, design.op_amp.supply_current
    for amp, point in zip(found.op_amps, a.dc.cells, strict=True):
        i, v = point.output_current, point.output_voltage
        given += idle * (high - low) + (high * i if i > 0 else low * i)
        warmed += amp.dissipation_most
        assert amp.dissipation_most == pytest.approx(
            idle * (high - low) + ((high - v) * i if i > 0 else (low - v) * i), rel=1e-6
        )
    assert a.dc.clipped == "no"
    assert given == pytest.approx(warmed, rel=1e-5)  # the input resistances take the rest


@pytest.mark.parametrize("seed", SEEDS)
def test_noise_powers_add(seed):
    design = chain(seed)
    s = spectrum(design, np.geomspace(1, 1e7, 30))
    np.testing.assert_allclose(s.total**2, (s.terms**2).sum(axis=0), rtol=1e-12)
    n = noise(design)
    assert n.rms**2 == pytest.approx(sum(t.rms**2 for t in n.terms))
    halves = noise(design, band=(0.1, 100.0)).rms ** 2 + noise(design, band=(100.0, 1e5)).rms ** 2
    assert n.rms**2 == pytest.approx(halves, rel=1e-6)


def test_a_leg_and_its_source_make_the_noise_of_one_resistor():
    design = chain(3, cells=1)
    s = design.signals[0]
    side = "minus" if any(leg.source == s.name for leg in design.cells[0].minus) else "plus"
    legs = getattr(design.cells[0], side)
    moved = tuple(Leg(x.source, x.resistance - 300.0) if x.source == s.name else x for x in legs)
    split = replace(
        design, signals=(replace(s, source_resistance=s.source_resistance + 300.0), *design.signals[1:]),
        cells=(replace(design.cells[0], **{side: moved}),),
    )  # fmt: skip
    assert noise(split).rms == pytest.approx(noise(design).rms, rel=1e-12)


def test_resistor_noise_goes_with_the_root_of_temperature():
    design = replace(chain(2), op_amp=replace(chain(2).op_amp, noise_voltage=0.0, noise_current=0.0))
    cold, hot = (noise(replace(design, ambient=Ambient(t, t, t))).rms for t in (-73.15, 126.85))
    assert hot / cold == pytest.approx(np.sqrt(2.0), rel=1e-9)  # 200 K and 400 K


@pytest.mark.parametrize("seed", SEEDS)
def test_the_modes_answer_as_the_node_equations_do(seed):
    design = chain(seed)
    net = Network(design)
    f = np.geomspace(1.0, 1e7, 40)
    r = response(design, frequencies=f)
    scale = np.abs(r.gains).max()
    np.testing.assert_allclose(r.gains, source_gains(net, f), atol=1e-9 * scale)
    np.testing.assert_allclose(r.loop_gains, loop_gains(net, f), rtol=1e-6)


@pytest.mark.parametrize("seed", SEEDS)
def test_a_small_sine_comes_out_as_the_response_says(seed):
    design = chain(seed, slew_rate=1e9)
    poles_stable = all(c.phase_margin is None or c.phase_margin > 5 for c in response(design).cells)
    name = design.signals[0].name
    run = trace(design, {name: Wave("sine", 0.0, 1e-3, 2e5)}, 2e-5, samples=64)
    if not poles_stable:
        assert run.outputs.shape[1] > 1
        return
    h = source_gains(Network(design), [2e5])[0, 0]
    rest = trace(design, {name: Wave("dc", 0.0)}, 2e-5, samples=64).outputs[-1]
    want = rest + (1e-3 * -1j * h * np.exp(2j * np.pi * 2e5 * run.times)).real
    np.testing.assert_allclose(run.outputs[-1], want, atol=1e-8)


def test_unplugged_signals_neither_gain_nor_noise():
    design = chain(1, count=3)
    gone = design.signals[1].name
    a = Analysis(design, (gone,))
    assert a.ac.signals[1].dc_gain == 0 and a.ac.signals[1].bandwidth_3db is None
    assert not any(t.name.startswith(gone) for t in a.noise.terms)
    assert not any(t.source.startswith(gone) for t in a.errors["present"].terms)


def test_whole_numbers_are_numbers():
    """A design typed with integers gives what the same design with floats gives."""
    floats = chain(4, cells=2, count=3)
    floats = replace(floats, signals=tuple(replace(s, low=-2.0, high=3.0, value=1.0) for s in floats.signals))
    ints = replace(
        floats, signals=tuple(replace(s, low=-2, high=3, value=1) for s in floats.signals),
        supply=replace(floats.supply, high=500, low=-500), op_amp=replace(floats.op_amp, open_loop_gain=200000),
    )  # fmt: skip
    a, b = Analysis(floats), Analysis(ints)
    assert a.errors["highest"].worst_case == b.errors["highest"].worst_case
    assert a.power == b.power and a.noise.rms == b.noise.rms
    s, t = step(a, "s0", 0.5), step(b, "s0", 0.5)
    np.testing.assert_array_equal(s.trace.outputs, t.trace.outputs)
    assert overdrive(a, 1.25) == overdrive(b, 1.25)
