"""Operating point, headroom, curves and cable-out against laws and brute force."""

import itertools

import numpy as np
import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.cable_out import cable_out
from sumwright.engine.clipping import solve_clipped
from sumwright.engine.curves import transfer_curves
from sumwright.engine.headroom import headroom
from sumwright.engine.nodes import Network, solve
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Cell, Leg, Signal, replace
from support.stages import one_cell, op_amp, random_chain

SEEDS = range(25)


@pytest.mark.parametrize("seed", SEEDS)
def test_contributions_and_offset_add_up_to_the_unclipped_output(seed):
    point = operating_point(random_chain(np.random.default_rng(seed)))
    assert point.contributions.sum() + point.offset == pytest.approx(point.unclipped_output, rel=1e-12, abs=1e-15)


@pytest.mark.parametrize("seed", SEEDS)
def test_currents_into_every_node_add_up_to_nothing_clipped_or_not(seed):
    rng = np.random.default_rng(seed)
    design = random_chain(rng, span=float(rng.choice([1.0, 20.0])))
    point = operating_point(design)
    for k, cell in enumerate(point.cells):
        net = Network(design).cells[k]
        pin = (cell.plus_voltage - cell.minus_voltage) / design.op_amp.input_resistance
        minus = sum(cell.leg_currents[leg.source] for leg in design.cells[k].minus)
        assert minus + pin == pytest.approx(cell.feedback_current + cell.minus_ground_current, abs=1e-13)
        if net.tied == -1:
            plus = sum(cell.leg_currents[leg.source] for leg in design.cells[k].plus)
            assert plus == pytest.approx(cell.plus_ground_current + pin, abs=1e-13)
        downstream = sum(
            later.leg_currents[leg.source]
            for later, made in zip(point.cells[k + 1 :], design.cells[k + 1 :], strict=True)
            for leg in (*made.minus, *made.plus)
            if leg.source == f"cell {k + 1}"
        )
        load = point.load_current if k == len(point.cells) - 1 else 0.0
        assert cell.output_current + cell.feedback_current == pytest.approx(load + downstream, abs=1e-13)


@pytest.mark.parametrize("seed", SEEDS)
def test_headroom_equals_every_corner_tried(seed):
    design = random_chain(np.random.default_rng(seed), count=4, span=3.0)
    net = Network(design)
    room = headroom(design)
    corners = np.array([[*c, net.values[4]] for c in itertools.product(*zip(net.lows, net.highs, strict=True))])
    sol = solve(net, corners.T)
    for k, cell in enumerate(room.cells):
        assert cell.highest == pytest.approx(sol.output[k].max())
        assert cell.lowest == pytest.approx(sol.output[k].min())
        assert cell.output_current_peak == pytest.approx(np.abs(sol.current[k]).max())
        assert cell.inputs_highest == pytest.approx(max(sol.plus[k].max(), sol.minus[k].max()))
        at = int(sol.output[k].argmax())
        assert cell.limit_high == pytest.approx(15 * 0.95 - 1.5 - 20 * max(sol.current[k][at], 0))
        assert cell.margin_high == pytest.approx(cell.limit_high - cell.highest)


def test_a_signal_that_only_loads_an_earlier_output_takes_its_room():
    # without output resistance "b" moves cell 1 not at all, but the current it draws from there costs dropout
    one = Cell(minus=(Leg("a", 1e4),), plus_ground=0.0, feedback=1e4)
    two = Cell(minus=(Leg("cell 1", 1e3),), plus=(Leg("b", 1e3),), plus_ground=1e3, feedback=1e3)
    a, b = (Signal(name, 1.0, -5.0, 5.0, 0.0, 0.0, 10.0) for name in "ab")
    design = replace(
        one_cell({"a": 0.0}), signals=(a, b), cells=(one, two),
        op_amp=op_amp(output_resistance=0.0, dropout_resistance=100.0, input_resistance=1e15),
    )  # fmt: skip
    first = headroom(design).cells[0]
    # pins of cell 2 follow b/2: cell 1 at +5 V sources most into b = -5 V, at -5 V sinks most with b = +5 V
    assert first.current_high == pytest.approx(5 / 1e4 + 7.5 / 1e3, rel=1e-4)
    assert first.current_low == pytest.approx(-(5 / 1e4 + 7.5 / 1e3), rel=1e-4)


@pytest.mark.parametrize("seed", SEEDS)
def test_curves_equal_the_clipped_stage_at_every_sample(seed):
    rng = np.random.default_rng(seed)
    design = random_chain(
        rng, span=20.0, load=float(rng.choice([50.0, 500.0, 1e4])), dropout_resistance=float(rng.choice([0.0, 200.0]))
    )
    net = Network(design)
    for q, curve in enumerate(transfer_curves(design)):
        x = np.linspace(-20, 20, 101)
        v = np.tile(net.values, (101, 1))
        v[:, q] = x
        y = solve_clipped(net, v).solution.output[:, -1, 0]
        np.testing.assert_allclose(np.interp(x, curve.x, curve.y), y, atol=1e-9)
        assert curve.x[0] == -20 and curve.x[-1] == 20


def test_a_clip_onset_is_exact():
    # gain -2 from rails of 10 V without dropout: the output meets the rail at -5 V and 5 V
    stage = one_cell({"a": 1.0}, {"a": 1e4}, plus_ground=0.0, feedback=2e4, supply=10.0)
    stage = replace(stage, signals=(replace(stage.signals[0], low=-8.0, high=8.0),))
    (curve,) = transfer_curves(stage)
    assert curve.clip_low == pytest.approx(5.0, rel=1e-9)
    assert curve.clip_high == pytest.approx(-5.0, rel=1e-9)
    np.testing.assert_allclose(curve.x, [-8, -5, 5, 8], rtol=1e-9)
    np.testing.assert_allclose(curve.y, [10, 10, -10, -10], rtol=1e-9)


@pytest.mark.parametrize("seed", SEEDS)
def test_cable_out_equals_the_stage_built_without_that_leg(seed):
    design = random_chain(np.random.default_rng(seed), count=4)
    out = cable_out(design)
    for i, name in enumerate(out.names):
        cells = tuple(
            replace(c, minus=tuple(leg for leg in c.minus if leg.source != name),
                    plus=tuple(leg for leg in c.plus if leg.source != name))
            for c in design.cells
        )  # fmt: skip
        if any(not c.plus and c.plus_ground is None for c in cells):
            continue  # the + node would float
        rest = replace(design, cells=cells)
        point = operating_point(rest)
        np.testing.assert_allclose(out.open_weights[i], point.weights, rtol=1e-9, atol=1e-12)
        assert out.open_offset[i] == pytest.approx(point.offset)
        np.testing.assert_allclose(out.open_noise_gain[i], Network(rest).noise_gains())


def test_at_a_virtual_ground_a_pulled_cable_leaves_the_other_weights_alone():
    stage = one_cell({"a": 1.0, "b": 2.0}, {"a": 1e4, "b": 2e4}, plus_ground=0.0, feedback=1e4)
    out = cable_out(stage)
    np.testing.assert_allclose(out.open_weights, [[0, -0.5], [-1, 0]], atol=1e-9)
    np.testing.assert_allclose(out.open_noise_gain[:, 0], [1.5, 2.0])


def test_at_a_shared_node_a_pulled_cable_raises_the_other_weight():
    stage = one_cell({"a": 1.0, "b": 1.0}, plus={"a": 1e4, "b": 1e4}, minus_ground=1e4, feedback=1e4)
    out = cable_out(stage)
    np.testing.assert_allclose(out.open_weights, [[0, 2], [2, 0]], atol=1e-9)
    np.testing.assert_allclose(out.dead_weights, [[0, 1], [1, 0]], atol=1e-9)


def test_an_analysis_that_follows_gives_what_a_fresh_one_gives():
    design = random_chain(np.random.default_rng(11), cells=2, count=4)
    first = Analysis(design)
    first.headroom, first.linear, first.cable_out  # noqa: B018 - computed so that they can be handed on
    moved = replace(design, signals=(replace(design.signals[0], value=0.77), *design.signals[1:]))
    follower = first.follow(moved)
    assert follower.__dict__["headroom"] is first.headroom
    assert follower.dc.output == pytest.approx(Analysis(moved).dc.output, rel=1e-14)
    changed = replace(moved, cells=(replace(moved.cells[0], feedback=12345.0), *moved.cells[1:]))
    assert "headroom" not in follower.follow(changed).__dict__
    unplugged = follower.follow(moved, unplugged=("s1",))
    assert "headroom" not in unplugged.__dict__
    assert unplugged.dc.weights[1] == 0


def test_a_follower_tied_to_an_output_adds_nothing_but_its_pin_current():
    stage = one_cell({"a": 3.0}, plus={"a": 0.0}, feedback=1e4)
    point = operating_point(replace(stage, cells=(replace(stage.cells[0], plus=(Leg("a", 0.0),)),)))
    assert point.output == pytest.approx(3.0)
    assert abs(point.source_currents[0]) < 1e-15
