"""Test signals: what a source does over time, and records that are told what they cannot do."""

import numpy as np
import pytest
from sumwright.engine import events
from sumwright.engine.trace import step, trace
from sumwright.engine.waves import Wave, common_period, pieces, sample
from sumwright.errors import InvalidQuantity
from support.stages import one_cell, op_amp


def seen(wave, times, duration=1.0):
    return sample(pieces(wave, duration), times)


def test_every_kind_goes_where_it_says():
    t = np.array([0.0, 0.125, 0.25, 0.375, 0.5, 0.625, 0.75, 0.99])
    np.testing.assert_allclose(seen(Wave("dc", 2.0), t), 2.0)
    np.testing.assert_allclose(seen(Wave("sine", 1.0, 2.0, 1.0), t), 1 + 2 * np.sin(2 * np.pi * t), atol=1e-12)
    np.testing.assert_allclose(seen(Wave("sine", 0.0, 1.0, 1.0, 90.0), t), np.cos(2 * np.pi * t), atol=1e-12)
    np.testing.assert_allclose(seen(Wave("square", 0.0, 1.0, 1.0), t), [1, 1, 1, 1, -1, -1, -1, -1])
    np.testing.assert_allclose(seen(Wave("square", 0.0, 1.0, 1.0, duty=0.2), t), [1, 1, -1, -1, -1, -1, -1, -1])
    np.testing.assert_allclose(seen(Wave("triangle", 0.0, 1.0, 1.0), t[:-1]), [0, 0.5, 1, 0.5, 0, -0.5, -1], atol=1e-12)
    np.testing.assert_allclose(seen(Wave("ramp", 0.0, 1.0, 1.0), t), 2 * t - 1, atol=1e-12)
    np.testing.assert_allclose(seen(Wave("step", 1.0, 2.0, delay=0.3), t), [1, 1, 1, 3, 3, 3, 3, 3])


def test_periods_follow_each_other_without_a_seam():
    for kind in ("square", "triangle", "ramp"):
        for phase in (0.0, 77.0, 180.0, 300.0):
            w = Wave(kind, 0.5, 2.0, 3.0, phase)
            t = np.linspace(0, 0.9, 301) + 1e-4
            shifted = Wave(kind, 0.5, 2.0, 3.0, 0.0)
            np.testing.assert_allclose(
                seen(w, t), seen(shifted, t + phase / 360 / 3.0, 2.0), atol=1e-9, err_msg=f"{kind} {phase}"
            )


def test_a_jump_between_periods_is_no_steep_ramp():
    """Rounding must not part the end of one period from the start of the next."""
    for kind in ("square", "ramp"):
        p = pieces(Wave(kind, 0.0, 1.0, 1e5, 77.0), 3e-3)
        assert np.diff(p.starts).min() > 1e-6
        assert np.abs(p.slopes).max() < 3e5


def test_waves_come_round_together():
    sine, square = Wave("sine", 0.0, 1.0, 2e4), Wave("square", 0.0, 1.0, 3e4)
    assert common_period([sine, square, Wave("dc", 1.0)]) == (pytest.approx(1e-4), 0.0)
    assert common_period([sine, Wave("step", 0.0, 1.0, delay=2e-3)]) == (pytest.approx(5e-5), 2e-3)
    assert common_period([sine, Wave("sine", 0.0, 1.0, 2e4 * 2**0.5)]) is None
    assert common_period([Wave("dc", 1.0)]) is None


def test_points_run_straight_and_hold_their_ends():
    w = Wave("points", times=(0.2, 0.4, 0.4, 0.6), volts=(1.0, 2.0, 5.0, 3.0))
    np.testing.assert_allclose(seen(w, [0.0, 0.2, 0.3, 0.4, 0.5, 0.6, 0.9]), [1, 1, 1.5, 5, 4, 3, 3])
    again = Wave("points", times=(0.0, 0.25), volts=(0.0, 1.0), repeat=True)
    np.testing.assert_allclose(seen(again, [0.1, 0.35, 0.6, 0.85]), [0.4, 0.4, 0.4, 0.4], atol=1e-12)


@pytest.mark.parametrize(
    ("wrong", "says"),
    [
        ({"kind": "noise"}, "'noise'"), ({"kind": "sine", "frequency": 0.0}, "above 0 Hz"),
        ({"offset": float("nan")}, "offset must be finite"), ({"kind": "square", "frequency": 1.0, "duty": 1.0}, "duty"),
        ({"kind": "points", "times": (0.0, 1.0), "volts": (1.0,)}, "2 and 1"),
        ({"kind": "points", "times": (1.0, 0.0), "volts": (1.0, 2.0)}, "backwards"),
    ],
)  # fmt: skip
def test_an_impossible_wave_is_refused(wrong, says):
    with pytest.raises(InvalidQuantity, match=says):
        Wave(**wrong)


@pytest.mark.parametrize(
    "waves",
    [
        {"a": Wave("sine", 0.0, 30.0, 1e5)}, {"a": Wave("square", 1.0, 3.0, 1e5, 33.0), "b": Wave("sine", 0.0, 20.0, 2e4)},
        {"a": Wave("step", 0.0, 2.0, delay=1.23e-4), "b": Wave("triangle", 0.0, 30.0, 1e5)},
    ],
)  # fmt: skip
def test_a_period_that_repeats_is_the_record_worked_out_event_by_event(waves, monkeypatch):
    """Clipped, slewing, mixed periods, after a step: the reused period is the one that would come."""
    design = stage(gain_bandwidth=1e7, second_pole=3e7, slew_rate=8e6)
    quick = trace(design, waves, 4e-4, samples=1601)
    monkeypatch.setattr(events, "_BUSY", 10**9)
    whole = trace(design, waves, 4e-4, samples=1601)
    assert whole.complete and whole.events > 60
    np.testing.assert_allclose(quick.outputs, whole.outputs, atol=1e-6)
    assert quick.events == pytest.approx(whole.events, abs=6)
    assert quick.slewing == pytest.approx(whole.slewing, abs=2e-3) and quick.clipping == pytest.approx(
        whole.clipping, abs=2e-3
    )


def stage(**figures):
    return one_cell(
        {"a": 1.0, "b": 0.5},
        minus={"a": 1e4, "b": 2e4},
        plus_ground=0.0,
        feedback=1e4,
        amp=op_amp(**figures),
        supply=12.0,
    )


def test_too_much_for_one_record_is_refused_not_endured():
    with pytest.raises(InvalidQuantity, match="too many for one record"):
        trace(stage(), {"a": Wave("square", 0.0, 1.0, 1e6)}, 1.0)
    with pytest.raises(InvalidQuantity, match="'z' is not a signal"):
        trace(stage(), {"z": Wave()}, 1.0)
    with pytest.raises(InvalidQuantity, match="duration must be above 0"):
        trace(stage(), {}, 0.0)
    with pytest.raises(InvalidQuantity, match="samples must be at least 2"):
        trace(stage(), {}, 1.0, samples=1)
    with pytest.raises(InvalidQuantity, match="not 0 V"):
        step(stage(), "a", 0.0)


def test_a_stage_at_rest_stays_at_rest():
    run = trace(stage(), {}, 1e-3, samples=50)
    assert np.ptp(run.outputs) < 1e-9 and run.events == 0
    assert run.outputs[0, 0] == pytest.approx(-1.25, abs=1e-3)


def test_a_clipped_stage_at_rest_stays_clipped():
    design = stage()
    run = trace(design, {"a": Wave("dc", 20.0)}, 1e-3, samples=50)
    assert run.clipping == pytest.approx(1.0)
    assert np.ptp(run.outputs) < 1e-6 and run.outputs[0, 0] < -10


def test_records_do_not_depend_on_how_finely_they_are_sampled():
    wave = {"a": Wave("triangle", 0.0, 12.0, 2e4), "b": Wave("sine", 0.0, 3.0, 7e4)}
    coarse = trace(stage(slew_rate=1e6), wave, 2e-4, samples=101)
    fine = trace(stage(slew_rate=1e6), wave, 2e-4, samples=2001)
    np.testing.assert_allclose(coarse.outputs[0], fine.outputs[0, ::20], atol=2e-3)
    assert coarse.slewing > 0.1 and coarse.clipping > 0


def test_an_unstable_stage_is_said_to_oscillate():
    run = trace(stage(second_pole=2e4), {"a": Wave("square", 0.0, 1.0, 1e3)}, 20e-3, samples=400)
    swing = np.ptp(run.outputs[0][-20:])
    assert swing > 0.5 or not run.complete


def test_a_heavy_capacitor_charges_at_the_current_limit():
    from sumwright.engine.stage import Load, replace

    design = replace(
        stage(slew_rate=1e9, second_pole=None, output_resistance=1.0, output_current=0.01), load=Load(None, 1e-6)
    )
    run = trace(design, {"a": Wave("step", 1.0, -5.0)}, 300e-6, samples=301)
    slope = np.gradient(run.outputs[0], run.times)[20:60]
    np.testing.assert_allclose(slope, 0.01 / 1e-6, rtol=0.1)  # less what the feedback takes
