"""The usual cautions appear where their limit is passed, and not a hair below it."""

import dataclasses

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.cautions import cautions
from sumwright.engine.stage import Ambient, ResistorKind, Signal, Supply
from support.stages import one_cell, op_amp


def stage(low=-1.0, high=1.0, frequency=0.0, leg=1e4, rails=12.0, **parts):
    d = one_cell({"a": 0.5}, minus={"a": leg}, feedback=1e4, plus_ground=0.0, amp=op_amp())
    return dataclasses.replace(
        d, signals=(Signal("a", -1.0, low, high, 0.0, 0.0, frequency),), supply=Supply(rails, -rails), **parts
    )


def keys(design):
    return {c.key for c in cautions(Analysis(design)) if c.present}


# IEC 61010-1 and IEC 62368-1 (from memory): 60 V DC, 30 V RMS are the limits in normal conditions.
@pytest.mark.parametrize(
    ("parts", "said"),
    [
        ({"high": 60.0, "leg": 1e6}, False),
        ({"high": 60.5, "leg": 1e6}, True),
        ({"low": -60.5, "leg": 1e6}, True),
        ({"rails": 30.0}, False),
        ({"rails": 30.1}, True),
        ({"low": -42.4, "high": 42.4, "frequency": 50.0, "leg": 1e6}, False),  # 30 V RMS is 42.4 V peak
        ({"low": -42.5, "high": 42.5, "frequency": 50.0, "leg": 1e6}, True),
    ],
)
def test_voltage_past_extra_low_voltage_is_said(parts, said):
    assert ("voltage" in keys(stage(**parts))) is said


def test_a_part_past_half_its_rating_is_said_to_be_hot():
    # 10 V over 10k is 10 mW; it may take 20 mW, so exactly half is not yet past it.
    cold = Ambient(25.0, 25.0, 25.0)
    for rating, said in ((0.0199, True), (0.0201, False)):
        d = stage(low=-1.0, high=10.0, ambient=cold, resistor=ResistorKind(power=rating))
        burns = [c for c in cautions(Analysis(d)) if c.key == "burn"]
        text = burns[0].text if burns else ""
        assert ("takes" in text) is said


def test_strong_signals_into_a_dead_stage_are_named():
    assert "unpowered" in keys(stage(high=10.0, leg=1.9e3))
    assert "unpowered" not in keys(stage(high=10.0, leg=2.1e3))


def test_the_general_cautions_always_stand():
    said = {c.key for c in cautions(Analysis(stage()))}
    assert {"rails", "use", "short", "unpowered"} <= said


def test_those_with_a_reason_come_first():
    order = [c.present for c in cautions(Analysis(stage(rails=40.0)))]
    assert order == sorted(order, reverse=True) and order[0]


def test_a_drop_that_the_clipped_output_cannot_reach_is_no_hot_part():
    # by hand: -1 x 30 V wants 30 V across the feedback; clipped near the 12 V rail at most about 12 V + what the leg adds
    amp = op_amp()
    design = stage(low=-30.0, high=30.0, leg=2e4, resistor=ResistorKind(power=0.125))
    design = dataclasses.replace(design, op_amp=amp, ambient=Ambient(25.0, 10.0, 25.0), supply=Supply(12.0, -12.0, 0.0))
    cell = dataclasses.replace(design.cells[0], feedback=8e4)
    design = dataclasses.replace(design, cells=(cell,))
    analysis = Analysis(design)
    feedback = next(r for r in analysis.power.resistors if r.name == "feedback")
    assert feedback.dissipation_most == pytest.approx(120.0**2 / 8e4, rel=1e-3)  # unclipped: 180 mW
    said = next((c.text for c in cautions(analysis) if c.key == "burn"), "")
    # clipped: the whole of 30 V + 12 V falls along 20k + 80k, 42 V / 100k through 80k = 14.1 mW
    assert "feedback takes" not in said


def test_a_large_voltage_is_written_out():
    text = next(c.text for c in cautions(Analysis(stage(high=1050.0, leg=1e6))) if c.key == "voltage")
    assert "reaches 1050 V" in text


def test_a_plus_input_left_without_a_path_is_said():
    d = one_cell({"a": 2.0}, plus={"a": 1e4}, minus_ground=1e4, feedback=1e4)
    assert "floating" not in keys(d)
    assert "floating" in {c.key for c in cautions(Analysis(d, ("a",))) if c.present}
    held = dataclasses.replace(d, cells=(dataclasses.replace(d.cells[0], plus_ground=1e6),))
    assert "floating" not in {c.key for c in cautions(Analysis(held, ("a",))) if c.present}
