"""The node equations against an independent dense solution, and the laws they must keep."""

import numpy as np
import pytest
from sumwright.engine.clipping import solve_clipped
from sumwright.engine.nodes import Network, solve
from sumwright.engine.stage import Load, replace
from support.stages import dense_solution, one_cell, random_chain


@pytest.mark.parametrize("seed", range(40))
@pytest.mark.parametrize("s", [None, 2j * np.pi * 1e5], ids=["dc", "100 kHz"])
def test_any_chain_equals_plain_modified_nodal_analysis(seed, s):
    rng = np.random.default_rng(seed)
    design = random_chain(rng)
    net = Network(design)
    e = rng.normal(size=net.cell_count) * 1e-2
    into_plus, into_minus = rng.normal(size=(2, net.cell_count)) * 1e-6
    want = dense_solution(design, net.values, s or 0.0, e, into_minus, into_plus)
    got = solve(
        net, net.values[:, None], s=s, error=e[:, None], into_plus=into_plus[:, None], into_minus=into_minus[:, None]
    )
    got = np.stack([x[..., 0] for x in got], axis=-1)
    np.testing.assert_allclose(got, want, rtol=1e-7, atol=1e-9 * np.abs(want).max())


def test_many_boards_at_once_are_the_same_boards_one_by_one():
    rng = np.random.default_rng(3)
    design = random_chain(rng, cells=2, count=5)
    net = Network(design)
    r = net.resistances * rng.uniform(0.9, 1.1, size=(4, 3, len(net.parts)))
    together = solve(net, np.eye(6), resistances=r)
    for index in np.ndindex(4, 3):
        alone = solve(net, np.eye(6), resistances=r[index])
        np.testing.assert_allclose(together.output[index], alone.output, rtol=1e-12)


def test_scaling_every_resistance_changes_no_voltage_without_a_load():
    rng = np.random.default_rng(8)
    design = random_chain(rng, cells=2, load=None, input_resistance=1e9, output_resistance=0.0)
    scaled = replace(
        design,
        op_amp=replace(design.op_amp, input_resistance=1e10),
        signals=tuple(replace(x, source_resistance=10 * x.source_resistance) for x in design.signals),
        reference=replace(design.reference, source_resistance=100.0),
    )
    a = solve(Network(design), np.eye(len(design.signals) + 1))
    b = solve(Network(scaled), np.eye(len(design.signals) + 1), resistances=10 * Network(design).resistances)
    np.testing.assert_allclose(a.output, b.output, rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(a.current, 10 * b.current, rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("seed", range(30))
def test_every_output_is_inside_its_limits_and_on_them_only_when_driven_there(seed):
    rng = np.random.default_rng(seed)
    design = random_chain(rng, span=20.0, load=float(rng.choice([50.0, 500.0, 1e4])))
    net = Network(design)
    sol, state = solve_clipped(net, net.values)
    amp = design.op_amp
    for k in range(net.cell_count):
        m, p, o, i = (float(x[k, 0]) for x in sol)
        high = 15 - amp.dropout_high - amp.dropout_resistance * max(i, 0)
        low = -15 + amp.dropout_low + amp.dropout_resistance * max(-i, 0)
        assert low - 1e-9 <= o <= high + 1e-9
        assert abs(i) <= amp.output_current * (1 + 1e-9)
        drive = amp.open_loop_gain * (p - m) - o - amp.output_resistance * i
        if state[k] == 0:
            assert abs(drive) < 1e-5  # the amplifier's own equation holds
        else:
            assert drive * state[k] > 0  # it wants further out than the limit lets it
            assert o == pytest.approx(high if state[k] > 0 else low) or abs(i) == pytest.approx(amp.output_current)


def test_open_feedback_is_a_comparator():
    stage = one_cell({"a": 0.1}, {"a": 1e4}, plus_ground=0.0, feedback=None, supply=12.0)
    sol, state = solve_clipped(Network(stage), Network(stage).values)
    assert state[0] == -1 or state[0] == -2
    assert sol.output[0, 0] == pytest.approx(-12.0)
    # without current into its pins the inverting node follows the only thing that holds it
    assert sol.minus[0, 0] == pytest.approx(0.1)


def test_a_short_on_the_output_takes_the_limit_current():
    stage = one_cell({"a": -5.0}, {"a": 1e4}, plus_ground=0.0, feedback=1e4, supply=12.0, load=Load(1e-3))
    stage = replace(stage, op_amp=replace(stage.op_amp, output_current=0.02))
    sol, state = solve_clipped(Network(stage), Network(stage).values)
    assert state[0] == 3
    assert sol.current[0, 0] == pytest.approx(0.02)
