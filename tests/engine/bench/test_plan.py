"""The bring-up run: expectations are the engine's, limits hold healthy boards, few steps prove everything."""

import numpy as np
import pytest
from sumwright.engine.bench.plan import plan, resistance_between
from sumwright.engine.nodes import Network
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Cell, Leg, Supply, replace
from support.bench_stages import drawn_board, every_arrangement, stage

STAGES = every_arrangement()


def output_steps(design):
    return [s for s in plan(design) if s.probe == "output" and s.unit == "V"]


@pytest.mark.parametrize("name", STAGES)
def test_expectations_are_the_operating_points(name):
    design = STAGES[name]
    for s in output_steps(design):
        expected = operating_point(design, [s.apply[n] for n in design.signal_names]).output
        assert s.expect == pytest.approx(expected, abs=1e-9)
        assert s.low < s.expect < s.high


@pytest.mark.parametrize("name", STAGES)
def test_the_readings_determine_every_weight_and_the_offset(name):
    design = STAGES[name]
    steps = output_steps(design)
    volts = np.array([[s.apply[n] for n in design.signal_names] for s in steps])
    linear = [operating_point(design, v).clipped == "no" for v in volts]
    matrix = np.column_stack([volts, np.ones(len(volts))])[linear]
    n = len(design.signals)
    assert np.linalg.matrix_rank(matrix) == n + 1
    assert len(steps) <= n + 4
    assert max(s.expect for s in steps) >= max(operating_point(design, v).output for v in volts)


@pytest.mark.parametrize("name", STAGES)
def test_signals_stay_inside_their_ranges_or_at_ground(name):
    design = STAGES[name]
    for s in output_steps(design):
        for signal in design.signals:
            v = s.apply[signal.name]
            assert v == 0 or signal.low <= v <= signal.high


@pytest.mark.parametrize("name", STAGES)
def test_limits_hold_healthy_boards_at_least_95_times_in_100(name):
    design = STAGES[name]
    rng = np.random.default_rng(3)
    steps = output_steps(design)
    held = []
    for _ in range(60):
        board = drawn_board(design, rng)
        for s in steps:
            y = operating_point(board, [s.apply[n] for n in design.signal_names]).output
            held.append(s.low <= y <= s.high)
    assert np.mean(held) >= 0.95


def test_numbers_run_from_one_and_every_step_says_why_and_what_a_miss_means():
    steps = plan(STAGES["two-stage"])
    assert [s.number for s in steps] == list(range(1, len(steps) + 1))
    assert all(s.why and s.miss and s.probe and s.title and s.setup for s in steps)
    units = [s.unit for s in steps]
    assert units == sorted(units, key=["Ω", "A", "V", "Hz", "s"].index)
    assert all(not s.apply for s in steps if s.unit == "Ω")


def test_a_corner_that_clips_expects_the_limit():
    design = stage("inverting", (-1.0, -0.7), offset=0.0)
    lowest = next(s for s in output_steps(design) if "lowest" in s.title)
    assert lowest.expect == pytest.approx(operating_point(design, [10, 10]).output)
    assert operating_point(design, [10, 10]).clipped == "low"
    assert lowest.high - lowest.low > 0.5


def test_a_single_supply_stage_rests_where_nothing_clips():
    design = replace(stage("mixed-sign", (-0.2, 0.8), offset=-2.0, rails=12.0), supply=Supply(12.0, 0.0, 0.05))
    rest = output_steps(design)[0]
    assert operating_point(design, [rest.apply[n] for n in design.signal_names]).clipped == "no"


def test_a_high_rail_carries_the_caution():
    design = stage()
    high = replace(design, supply=Supply(40.0, -40.0, 0.05), op_amp=replace(design.op_amp, supply_most=100.0))
    cautions = " ".join(s.caution for s in plan(high))
    assert "licensed" in cautions
    assert "licensed" not in " ".join(s.caution for s in plan(design))
    assert "unpowered" in " ".join(s.caution for s in plan(design))


# Ohms by hand: 12k to the output, which the 10k load takes to ground; legs 20k and 30k to ground at the node.
def test_in_circuit_resistance_counts_the_parallel_paths():
    cell = Cell(minus=(Leg("north", 20e3), Leg("east", 30e3)), plus_ground=0.0, feedback=12e3)
    design = replace(stage("inverting", (-0.6, -0.4), offset=0.0), cells=(cell,))
    net = Network(design)
    node = 1 / (1 / 20e3 + 1 / 30e3 + 1 / (12e3 + 10e3))
    assert resistance_between(net, ("m", 0), None)[0] == pytest.approx(node, rel=1e-6)
    across = 1 / (1 / 12e3 + 1 / (10e3 + 12e3))  # the other way round: load, then both legs in parallel (12k)
    assert resistance_between(net, ("o", 0), ("m", 0))[0] == pytest.approx(across, rel=1e-6)


def test_a_node_that_hangs_free_reads_infinite():
    cell = Cell(minus=(Leg("north", 20e3),), plus_ground=0.0, feedback=None)
    design = replace(stage("inverting", (-0.6,), offset=0.0, load=None), cells=(cell,))
    assert resistance_between(Network(design), ("o", 0), ("m", 0))[0] == np.inf


def test_worst_case_of_one_resistor_is_its_tolerance():
    cell = Cell(minus=(Leg("north", 20e3),), plus_ground=0.0, feedback=None)
    design = replace(stage("inverting", (-0.6,), offset=0.0), cells=(cell,))
    ohm, u, worst, names = resistance_between(Network(design), ("m", 0), None)
    assert (ohm, worst) == (pytest.approx(20e3), pytest.approx(200))
    assert u == pytest.approx(200 / np.sqrt(3))
    assert names == ["north leg"]
