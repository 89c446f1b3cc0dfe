"""Undo and redo: one step back gives exactly what was there, and a drag is one step."""

import pytest
from sumwright.errors import SumwrightError
from sumwright.model import acts, demo, edits
from sumwright.model.workbench import Workbench


@pytest.fixture
def bench():
    return Workbench(demo.design())


def do(bench, act, **message):
    return acts.ACTS[act](bench, message)


def test_undo_gives_back_every_change_in_turn_and_redo_makes_them_again(bench):
    before = [bench.snapshot]
    for act, message in [
        ("weight", {"signal": "north", "text": "0.33"}),
        ("plug", {"signal": "east", "out": True}),
        ("part", {"part": "0/feedback", "text": "15k"}),
        ("figure", {"group": "supply", "figure": "high", "text": "9"}),
        ("arrange", {"arrangement": "two-stage"}),
        ("add", {}),
        ("remove", {"signal": "tare"}),
        ("name", {"signal": "west", "text": "south-west"}),
        ("title", {"text": "Another hopper"}),
    ]:
        do(bench, act, **message)
        before.append(bench.snapshot)
    for state in reversed(before[:-1]):
        assert bench.undo()
        assert bench.snapshot == state
    assert not bench.undo()
    for state in before[1:]:
        assert bench.redo()
        assert bench.snapshot == state
    assert not bench.redo()


def test_a_drag_is_one_step_and_letting_go_ends_it(bench):
    at_first = bench.snapshot
    for volts in (1.0, 2.0, 3.0):
        do(bench, "value", signal="north", value=volts)
    do(bench, "let_go")
    after = bench.snapshot
    do(bench, "value", signal="north", value=5.0)
    bench.undo()
    assert bench.snapshot == after
    bench.undo()
    assert bench.snapshot == at_first


def test_two_sliders_moved_in_turn_are_two_steps(bench):
    do(bench, "value", signal="north", value=1.0)
    after = bench.snapshot
    do(bench, "value", signal="east", value=1.0)
    bench.undo()
    assert bench.snapshot == after


def test_a_new_change_gives_up_what_was_taken_back(bench):
    do(bench, "value", signal="north", value=1.0)
    bench.undo()
    do(bench, "value", signal="east", value=2.0)
    assert not bench.redo()


def test_a_refused_change_leaves_no_step_and_no_trace(bench):
    before, steps = bench.snapshot, len(bench.history.past)
    for act, message in [
        ("weight", {"signal": "north", "text": "0"}),
        ("part", {"part": "0/feedback", "text": "-1k"}),
        ("part", {"part": "7/feedback", "text": "1k"}),
        ("signal", {"signal": "north", "figure": "low", "text": "11"}),
        ("figure", {"group": "supply", "figure": "high", "text": "-20"}),
        ("open", {"text": "{"}),
        ("name", {"signal": "north", "text": "reference"}),
        ("arrange", {"arrangement": "inverting"}),
    ]:
        with pytest.raises(SumwrightError):
            do(bench, act, **message)
        assert bench.snapshot == before
    assert len(bench.history.past) == steps


def test_a_change_that_changes_nothing_is_no_step(bench):
    do(bench, "signal", signal="north", figure="value", text="7.6")
    assert not bench.history.past


def test_a_file_that_was_opened_can_be_undone(bench):
    before = bench.snapshot
    other = edits.with_value(bench.design, "north", 1.0)
    from sumwright.files.design import write_design

    do(bench, "open", text=write_design(other))
    assert bench.design == other
    bench.undo()
    assert bench.snapshot == before
