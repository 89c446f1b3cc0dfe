"""The one ruler: what it must hold, and where the output clips on it."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.analysis import Analysis
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Target, replace
from sumwright.model import demo, edits, sums
from sumwright.model.workbench import Workbench
from sumwright.views.curves import _contributions, clip_levels, nice_step, ruler


def stage(text, arrangement):
    return edits.with_arrangement(sums.new_design(sums.read_sum(text), demo.op_amp()), arrangement)


STAGES = [
    demo.design(),
    stage("out = - 0.5 a - 0.25 b", "inverting"),
    stage("out = 0.5 a + 0.25 b", "inverting-pair"),
    stage("out = 2 a + 3 b", "non-inverting"),
    stage("out = 0.5 a + 0.25 b - 2 c", "two-stage"),
]


@pytest.mark.parametrize("design", STAGES, ids=lambda d: str(len(d.cells)) + d.signals[0].name)
def test_it_holds_the_window_the_present_output_and_all_the_output_can_do_within_its_rails(design):
    a = Analysis(design)
    low, high, ticks = ruler(design, a.dc, a.headroom)
    assert low < a.dc.output < high
    for wanted in (design.target.low, design.target.high):
        assert wanted is None or low < wanted < high
    assert high > min(a.headroom.cells[-1].highest, design.supply.high)
    assert low < max(a.headroom.cells[-1].lowest, design.supply.low)
    assert 3 <= len(ticks) <= 12
    assert all(low <= t <= high for t in ticks)


def test_it_stands_where_nothing_moves():
    """Every cable out, no window and rails far away leave nothing to scale by."""
    far = replace(STAGES[1], supply=replace(STAGES[1].supply, high=90.0, low=-90.0), target=Target())
    a = Analysis(far, ("a", "b"))
    low, high, ticks = ruler(a.design, a.dc, a.headroom)
    assert low < 0 < high and ticks


def test_it_stands_still_while_a_signal_moves_within_its_range():
    ends = set()
    for volts in (0.0, 2.5, 5.0, 10.0):
        design = edits.with_value(demo.design(), "north", volts)
        a = Analysis(design)
        ends.add(ruler(design, a.dc, a.headroom)[:2])
    assert len(ends) == 1


@pytest.mark.parametrize("design", STAGES, ids=lambda d: str(len(d.cells)) + d.signals[0].name)
def test_the_clip_lines_are_where_an_overdriven_output_stops(design):
    a = Analysis(design)
    k = 0
    name, weight = design.signals[k].name, a.dc.weights[k]
    levels = clip_levels(a, name)
    for side, level in ((1, levels[0]), (-1, levels[1])):
        # drive the signal to just past the onset by the weight it has: there the output must have stopped, at the line
        to = (level - a.dc.unclipped_output) / weight
        over = design.signals[k].value + to + side * 0.02 / weight
        point = operating_point(edits.with_value(design, name, over))
        if all(c.clipped == "no" for c in point.cells[:-1]):  # an earlier op amp may stop first
            assert point.clipped == ("high" if side > 0 else "low")
            assert point.output == pytest.approx(level, abs=2e-3)


@settings(max_examples=200)
@given(st.floats(1e-9, 1e9))
def test_steps_are_one_two_or_five_times_a_power_of_ten(least):
    step = nice_step(least)
    assert least * (1 - 1e-6) <= step <= 2.5 * least * (1 + 1e-6)
    mantissa = float(f"{step:e}".split("e")[0])
    assert mantissa in (1.0, 2.0, 5.0)


def test_the_contributions_end_at_the_output_when_it_is_clipped_too():
    bench = Workbench(edits.with_figure(demo.design(), "supply", "high", 4.0))
    dc = bench.analysis.dc
    assert dc.clipped == "high"
    parts = _contributions(bench, bench.analysis.design, dc)
    assert parts[-1]["cut"]
    assert parts[-1]["volts"] < 0
    assert sum(p["volts"] for p in parts) == pytest.approx(dc.output, abs=1e-9)
    whole = Workbench(demo.design())
    assert not any("cut" in p for p in _contributions(whole, whole.analysis.design, whole.analysis.dc))
