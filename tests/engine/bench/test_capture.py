"""Records with a known weight, delay, pole, clip, slew, ring and hum in them."""

import numpy as np
import pytest
from scipy.signal import cont2discrete, lfilter
from sumwright.engine.bench.capture import fit_capture
from sumwright.engine.operating_point import operating_point
from sumwright.errors import InvalidReadings
from support.bench_stages import stage

PLAIN = stage("inverting", (-1.0, -0.5), offset=0.0)
WEIGHTS = operating_point(PLAIN).weights
NOISE = 1e-3


def times(count=20000, dt=1e-6):
    return np.arange(count) * dt


def noisy(y, seed=0):
    return y + np.random.default_rng(seed).normal(size=len(y)) * NOISE


def keys(fitted):
    return {f.key for f in fitted.findings}


def through_pole(x, dt, bandwidth):
    """One pole, exact for straight lines between samples (SciPy's first-order hold)."""
    w = 2 * np.pi * bandwidth
    b, a, _ = cont2discrete(([w], [1, w]), dt, method="foh")
    return lfilter(b.ravel(), a, x - x[0]) + x[0]


def test_weights_offset_delay_and_bandwidth_come_back():
    t = times()
    design = stage()
    point = operating_point(design)
    north, east = 5 + 4 * np.sign(np.sin(2 * np.pi * 500 * t)), 4 + 3 * np.sin(2 * np.pi * 170 * t)
    rest = point.offset + point.contributions[2:].sum()
    y = through_pole(rest + point.weights[0] * north + point.weights[1] * east, 1e-6, 30e3)
    y = noisy(np.interp(t - 7.3e-6, t, y))
    got = fit_capture(design, t, y, {"north": north, "east": east})
    np.testing.assert_allclose(got.fit.value, [point.weights[0], point.weights[1], rest], rtol=3e-4)
    assert got.delay == pytest.approx(7.3e-6, rel=0.03)
    assert got.bandwidth == pytest.approx(30e3, rel=0.02)
    assert got.noise == pytest.approx(NOISE, rel=0.1)
    assert keys(got) == set()
    assert (
        np.abs(got.fit.value - [point.weights[0], point.weights[1], rest]) < 4 * got.fit.standard_uncertainty + 1e-6
    ).all()


def test_clipping_is_named_and_kept_out():
    t = times()
    a, b = 9 * np.sin(2 * np.pi * 300 * t), 6 * np.sin(2 * np.pi * 130 * t)
    y = noisy(np.clip(WEIGHTS[0] * a + WEIGHTS[1] * b, -10, 10))
    got = fit_capture(PLAIN, t, y, {"north": a, "east": b})
    assert [round(f.amount, 2) for f in got.findings] == [10.0, -10.0]
    assert keys(got) == {"clipping"}
    np.testing.assert_allclose(got.fit.value[:2], WEIGHTS, rtol=1e-3)


def test_a_square_wave_inside_the_limits_is_no_clipping():
    t = times()
    x = 4 * np.sign(np.sin(2 * np.pi * 200 * t))
    got = fit_capture(PLAIN, t, noisy(WEIGHTS[0] * x), {"north": x})
    assert keys(got) == set()
    np.testing.assert_allclose(got.fit.value[0], WEIGHTS[0], rtol=1e-3)


def test_slewing_is_named_with_its_rate():
    t = times()
    x = 4 * np.sign(np.sin(2 * np.pi * 2000 * t))
    y = np.empty(len(t))
    y[0] = WEIGHTS[0] * x[0]
    for i in range(1, len(t)):
        y[i] = y[i - 1] + np.clip(WEIGHTS[0] * x[i] - y[i - 1], -0.5, 0.5)
    got = fit_capture(PLAIN, t, noisy(y), {"north": x})
    assert keys(got) == {"slewing"}
    assert got.findings[0].amount == pytest.approx(0.5e6, rel=0.02)
    assert got.fit.value[0] == pytest.approx(WEIGHTS[0], rel=2e-3)


def test_ringing_is_named_with_its_frequency():
    t = times()
    damping, w = 0.15, 2 * np.pi * 40e3
    b, a, _ = cont2discrete(([w**2], [1, 2 * damping * w, w**2]), 1e-6)
    x = 0.2 * np.sign(np.sin(2 * np.pi * 500 * t))
    drive = WEIGHTS[0] * x
    y = noisy(lfilter(b.ravel(), a, drive - drive[0]) + drive[0])
    got = fit_capture(PLAIN, t, y, {"north": x})
    assert keys(got) == {"ringing"}
    # a damped oscillation rings at w sqrt(1 - damping^2)
    assert got.findings[0].amount == pytest.approx(40e3 * np.sqrt(1 - damping**2), rel=0.03)


@pytest.mark.parametrize("mains", [50, 60])
def test_mains_pick_up_is_named_with_its_size(mains):
    t = times(dt=1e-4)
    x = 3 * np.sin(2 * np.pi * 7 * t)
    y = noisy(WEIGHTS[0] * x + 4e-3 * np.sin(2 * np.pi * mains * t + 1))
    got = fit_capture(PLAIN, t, y, {"north": x})
    assert keys(got) == {"mains"}
    assert got.findings[0].amount == pytest.approx(4e-3, rel=0.05)
    assert f"{mains} Hz" in got.findings[0].text


def test_a_clean_record_has_no_findings():
    for seed in range(6):
        t = times(dt=1e-4)
        x = 3 * np.sin(2 * np.pi * 7 * t)
        got = fit_capture(PLAIN, t, noisy(WEIGHTS[0] * x, seed), {"north": x})
        assert keys(got) == set()
        assert got.bandwidth is None or got.bandwidth > 1e3


def test_a_signal_that_never_moves_is_not_determined():
    t = times()
    x = 3 * np.sin(2 * np.pi * 700 * t)
    got = fit_capture(PLAIN, t, noisy(WEIGHTS[0] * x + 1), {"north": x, "east": np.full(len(t), -2.0)})
    assert list(got.fit.determined) == [True, False, False]
    assert got.noise < 2 * NOISE


def test_uneven_times_are_read_as_they_are():
    rng = np.random.default_rng(1)
    t = np.sort(rng.uniform(0, 0.02, 8000))
    x = 3 * np.sin(2 * np.pi * 150 * t)
    got = fit_capture(PLAIN, t, noisy(WEIGHTS[0] * x), {"north": x})
    assert got.fit.value[0] == pytest.approx(WEIGHTS[0], rel=2e-3)


def test_the_drawing_of_a_record_keeps_its_peaks():
    t = times(60000)
    x = 2 * np.sin(2 * np.pi * 100 * t)
    y = WEIGHTS[0] * x
    y[31234] = 7.5
    got = fit_capture(PLAIN, t, y, {"north": x})
    assert got.measured.max() == 7.5
    assert len(got.time) <= 1500


def test_what_cannot_be_fitted_is_refused():
    t = times(100)
    with pytest.raises(InvalidReadings, match="mapped"):
        fit_capture(PLAIN, t, t, {})
    with pytest.raises(InvalidReadings, match="at least 16"):
        fit_capture(PLAIN, t[:8], t[:8], {"north": t[:8]})
    with pytest.raises(InvalidReadings, match="Nothing moves"):
        fit_capture(PLAIN, t, np.ones(100), {"north": np.ones(100)})


def test_waves_too_dense_to_draw_fill_their_height():
    """Some 19 samples a drawn point and a wave in every 15 samples: one sample of each would beat, least and greatest do not."""
    t = times(28_500)
    north = 4 * np.sin(2 * np.pi * 66.7e3 * t)
    got = fit_capture(PLAIN, t, noisy(WEIGHTS[0] * north), {"north": north})
    for drawn in (got.predicted - got.predicted_offset, got.fitted):
        assert drawn[::2].min() > 3.5
        assert drawn[1::2].max() < -3.5
