"""Noise against the constants of nature, data-book arithmetic and quadrature."""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from sumwright.engine.noise import BOLTZMANN, noise, spectrum
from sumwright.engine.stage import Ambient, replace
from support.stages import ideal_op_amp, one_cell


def summer(amp, r, r_f, legs, kelvin, plus_ground=0.0):
    names = {f"in{i}": 0.0 for i in range(legs)}
    design = one_cell(names, minus=dict.fromkeys(names, r), plus_ground=plus_ground, feedback=r_f, amp=amp)
    celsius = kelvin - 273.15
    return replace(design, ambient=Ambient(celsius, celsius, celsius), noise_band=(1.0, 1e11))


def quiet(**figures):
    base = {
        "open_loop_gain": 1e9,
        "noise_voltage": 0.0,
        "noise_current": 0.0,
        "noise_voltage_corner": 0.0,
        "noise_current_corner": 0.0,
    }
    return ideal_op_amp(**{**base, **figures})


# √(4kTR) with the exact k of the SI (2019): 1 kΩ 4.0019, 4.0578, 4.0704 nV/√Hz; 100 kΩ at 300 K 40.70
@pytest.mark.parametrize(
    ("r", "kelvin", "nv"), [(1e3, 290, 4.0019), (1e3, 298.15, 4.0578), (1e3, 300, 4.0704), (1e5, 300, 40.70)]
)
def test_a_resistor_makes_four_ktr(r, kelvin, nv):
    design = summer(quiet(gain_bandwidth=1e9), r, r, 1, kelvin)
    term = next(t for t in noise(design, band=(10, 100)).terms if t.kind == "resistor")
    assert term.density_1khz * 1e9 == pytest.approx(nv, abs=0.006 if nv > 40 else 6e-5)
    # 4kT at 290 K = 1.6016e-20 J, "1.6e-20" in data sheets
    assert pytest.approx(1.6016e-20, rel=1e-4) == 4 * BOLTZMANN * 290


def test_summing_four_tens_of_kilohms():
    # Terms of TI SBOS450B, Fig. 32, for four legs: 4 × 10k, Rf 10k, 5 nV, 0.7 pA, 300 K, 10 MHz. Amplifier 25.00,
    # in·Rf 7.00, inputs 25.74, Rf 12.87 nV; 38.76 nV/√Hz in all; one pole at 2.00 MHz makes 68.7 µV.
    amp = quiet(gain_bandwidth=1e7, noise_voltage=5e-9, noise_current=0.7e-12)
    found = noise(summer(amp, 1e4, 1e4, 4, 300))
    nv = {t.name: 1e9 * t.density_1khz for t in found.terms}
    assert nv["op amp voltage"] == pytest.approx(25.00, abs=5e-3)
    assert nv["op amp current into −"] == pytest.approx(7.00, abs=5e-3)
    assert math.sqrt(sum(v**2 for k, v in nv.items() if k.endswith("leg"))) == pytest.approx(25.74, abs=6e-3)
    assert nv["feedback"] == pytest.approx(12.87, abs=6e-3)
    assert 1e9 * found.density_1khz == pytest.approx(38.76, abs=6e-3)
    assert 1e6 * found.rms == pytest.approx(68.7, abs=0.06)
    with_bias_resistor = noise(summer(amp, 1e4, 1e4, 4, 300, plus_ground=2e3))
    assert 1e9 * with_bias_resistor.density_1khz == pytest.approx(48.78, abs=0.02)
    assert 1e6 * with_bias_resistor.rms == pytest.approx(86.5, abs=0.06)


def test_summing_four_hundreds_of_kilohms():
    # As above: 4 × 100k, Rf 100k, 8 nV, 0.2 pA, GBW 1 MHz: 101.4 nV, 56.8 µV; with 20k on the + pin 137.7 nV, 77.2 µV
    amp = quiet(gain_bandwidth=1e6, noise_voltage=8e-9, noise_current=0.2e-12)
    for ground, nv, uv in ((0.0, 101.4, 56.8), (2e4, 137.7, 77.2)):
        found = noise(summer(amp, 1e5, 1e5, 4, 300, ground))
        assert 1e9 * found.density_1khz == pytest.approx(nv, abs=0.06)
        assert 1e6 * found.rms == pytest.approx(uv, abs=0.06)


def test_one_over_f_noise_integrates_as_in_the_textbooks():
    # ∫ e²(1 + fc/f) df = e² (fb - fa + fc ln(fb/fa))
    amp = quiet(gain_bandwidth=1e9, noise_voltage=1e-8, noise_voltage_corner=100.0)
    design = summer(amp, 1e-3, 1e-3, 1, 300)
    found = noise(design, band=(0.1, 1e4))
    want = 2e-8 * math.sqrt(1e4 - 0.1 + 100 * math.log(1e5))
    assert found.terms[0].rms == pytest.approx(want, rel=1e-6)


def test_a_corner_can_be_found_from_two_points():
    # e(f)² = e²(1 + fc/f) with the higher one taken as the floor: 8 nV at 30 Hz over 5 nV makes 46.8 Hz, 2.7 over
    # 0.7 pA 416 Hz (NE5532 data sheets, from memory)
    for low, floor, corner in ((8.0, 5.0, 46.8), (2.7, 0.7, 416.0)):
        amp = quiet(gain_bandwidth=1e9, noise_voltage=floor * 1e-9, noise_voltage_corner=corner)
        s = spectrum(summer(amp, 1e-3, 1e-3, 1, 300), [30.0, 1e7])
        np.testing.assert_allclose(s.terms[0] / 2e-9, [low, floor], rtol=5e-4)


def test_a_capacitor_holds_kt_over_c():
    # √(kT/C): 0.1 µF at 25 °C 0.203 µV, whatever the resistor. Here R and C around an ideal op amp:
    # 4kTR over π/2 / (2πRC) is kT/C.
    amp = quiet(gain_bandwidth=1e12)
    design = summer(amp, 1e4, 1e4, 1, 298.15)
    cell = replace(design.cells[0], feedback_capacitance=1e-7)
    found = noise(replace(design, cells=(cell,)), band=(1e-3, 1e8))
    own = next(t.rms for t in found.terms if t.name == "feedback")
    assert own == pytest.approx(math.sqrt(BOLTZMANN * 298.15 / 1e-7), rel=1e-4)
    assert own == pytest.approx(0.203e-6, abs=5e-10)


@pytest.mark.parametrize("second_pole, capacitance", [(4e6, 1e-11), (7e6, 0.0)], ids=["ringing", "damped"])
def test_the_integral_is_that_of_adaptive_quadrature(second_pole, capacitance):
    """Low phase margin and a peak of noise near the crossover; then poles so damped that no panel is split for them."""
    amp = ideal_op_amp(
        open_loop_gain=1e6, gain_bandwidth=1e7, second_pole=second_pole, noise_voltage=1e-8, noise_voltage_corner=500.0,
        differential_capacitance=capacitance, noise_current=1e-12,
    )  # fmt: skip
    design = replace(summer(amp, 3e4, 3e4, 3, 300), noise_band=(0.1, 1e8))
    found = noise(design)

    def power(x):
        f = math.exp(x)
        return spectrum(design, [f]).total[0] ** 2 * f * 1e12

    total = sum(quad(power, math.log(a), math.log(b), epsabs=0, epsrel=1e-9, limit=400)[0]
                for a, b in ((0.1, 1e4), (1e4, 1e6), (1e6, 4e6), (4e6, 1e8)))  # fmt: skip
    assert found.rms == pytest.approx(math.sqrt(total) * 1e-6, rel=1e-7)
