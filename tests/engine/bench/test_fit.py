"""The fit of a board: what is determined, what is left out, what the parts allow."""

import itertools

import numpy as np
import pytest
from scipy.optimize import curve_fit
from sumwright.engine.bench.board import Bench
from sumwright.engine.bench.diagnose import diagnose, near_clipping, weight_bands
from sumwright.engine.bench.fit import least_squares
from sumwright.engine.bench.readings import Meter, Readings, no_readings, parse_meter
from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import replace
from sumwright.errors import InvalidDesign, InvalidQuantity
from support.bench_stages import every_arrangement, stage


def readings_of(design, volts, output=None, uncertainty=None):
    if output is None:
        output = [operating_point(design, v).output for v in volts]
    return Readings(design.signal_names, np.asarray(volts, float), np.asarray(output, float), uncertainty)


def test_weighted_fit_agrees_with_scipy():
    rng = np.random.default_rng(2)
    x = rng.normal(size=(12, 3))
    u = rng.uniform(0.01, 0.1, 12)
    y = x @ [1.0, -2.0, 0.5] + 0.3 + rng.normal(size=12) * u
    fit = least_squares(np.column_stack([x, np.ones(12)]), y, u)
    value, covariance = curve_fit(lambda x, a, b, c, d: x @ [a, b, c] + d, x, y, [0] * 4, u, absolute_sigma=True)
    np.testing.assert_allclose(fit.value, value, rtol=1e-6)
    np.testing.assert_allclose(fit.covariance, covariance, rtol=1e-5)
    assert fit.degrees_of_freedom == 8
    assert 0 < fit.p_value < 1


def test_stated_uncertainties_are_not_scaled_by_the_scatter():
    x = np.column_stack([np.arange(6.0), np.ones(6)])
    y = np.array([0.0, 3.0, 1.0, 4.0, 2.0, 5.0])
    tight, loose = (least_squares(x, y, np.full(6, s)) for s in (0.01, 0.1))
    np.testing.assert_allclose(loose.standard_uncertainty, 10 * tight.standard_uncertainty)
    assert tight.chi_squared == pytest.approx(100 * loose.chi_squared)


def test_a_weight_never_varied_is_named_and_the_others_still_come_out():
    design = stage()
    volts = np.vstack([np.zeros(5), np.diag([10.0, 10, 10, 0, 10]), [1, 2, 3, 0, 4]])
    report = diagnose(design, readings_of(design, volts, uncertainty=np.full(7, 1e-3)), foresee=False)
    assert [n for n, ok in zip(report.names, report.fit.determined, strict=True) if not ok] == ["west"]
    made = operating_point(design).weights
    np.testing.assert_allclose(np.delete(report.fit.value[:5], 3), np.delete(made, 3), rtol=1e-6)
    assert report.verdicts[3].word == "undecided"
    assert "west" in " ".join(report.notes)


def test_two_signals_always_moved_together_are_both_undetermined():
    design = stage()
    volts = np.array(
        [[0, 0, 0, 0, 0], [5, 5, 0, 0, 0], [2, 2, 8, 0, 0], [1, 1, 0, 3, 0], [0, 0, 0, 0, 9], [1, 1, 1, 1, 1.0]]
    )
    report = diagnose(design, readings_of(design, volts, uncertainty=np.full(6, 1e-3)), foresee=False)
    assert list(report.fit.determined) == [False, False, True, True, True, True]


@pytest.mark.parametrize("name", every_arrangement())
def test_bands_hold_every_corner_of_the_tolerances_to_first_order(name):
    """No board with its resistors at the limits leaves the band by more than second order."""
    design = every_arrangement()[name]
    bands = weight_bands(design)
    bench = Bench(design)
    rng = np.random.default_rng(1)
    n, t = len(design.signals), design.resistor.tolerance
    boards = bench.healthy.take(np.zeros(400, dtype=int))
    for part in ("leg_ohm", "feedback_ohm", "ground_ohm"):
        values = getattr(boards, part)
        values *= 1 + t * rng.choice([-1, 1], values.shape)
    volts = np.vstack([np.zeros(n), 0.5 * np.eye(n)])
    out = bench.outputs(boards, volts)
    weights = (out[:, 1:] - out[:, :1]) / 0.5
    for i, band in enumerate(bands[:-1]):
        half = band.high - band.nominal
        assert np.abs(weights[:, i] - band.nominal).max() <= half * 1.05
        assert np.abs(weights[:, i] - band.nominal).max() >= 0.5 * half


def test_band_of_an_inverting_weight_is_the_sum_of_both_tolerances():
    """A gain Rf/R of 1 % parts: first order 2 % (JCGM 100:2008, 5.1.2, sum of limits)."""
    design = stage("inverting", (-0.5, -0.25), offset=0.0)
    band = weight_bands(design)[0]
    assert (band.high - band.low) / 2 / abs(band.nominal) == pytest.approx(0.02, rel=0.02)


def test_clipped_readings_are_kept_out_and_said_so():
    design = stage("inverting", (-1.0, -0.7), offset=0.0, source=0.0)
    volts = np.array([[0, 0], [5, 0], [0, 5], [4, 4], [10, 10], [9, 10.0]])
    report = diagnose(design, readings_of(design, volts, uncertainty=np.full(6, 1e-3)), foresee=False)
    assert [x.row for x in report.left_out] == [4, 5]
    np.testing.assert_allclose(report.fit.value[:2], operating_point(design).weights, rtol=1e-6)
    assert "clipping" in report.notes[0]


def test_a_clipping_first_cell_is_recognised_behind_an_innocent_output():
    design = stage("inverting-pair", (0.5, 0.5), offset=0.0, span=(-20, 20))
    # the second inverter is made weak, so that the first clips far from the output's limits
    first, second = design.cells
    design = replace(design, cells=(first, replace(second, feedback=second.feedback / 10)))
    assert near_clipping(design, readings_of(design, [[20, 20.0], [1, 1]]), Bench(design))[0].why.startswith("cell 1")


def test_without_an_uncertainty_the_t_factor_is_used():
    design = stage()
    rng = np.random.default_rng(3)
    volts = np.vstack([np.zeros(5), 10 * np.eye(5), [5] * 5, [2] * 5])
    exact = readings_of(design, volts)
    noisy = readings_of(design, volts, exact.output + rng.normal(size=8) * 1e-3)
    fit = diagnose(design, noisy, foresee=False).fit
    assert fit.degrees_of_freedom == 2
    assert fit.coverage_factor == pytest.approx(
        4.53, abs=0.005
    )  # NIST TN 1297, table B.1: 2 degrees of freedom, 95.45 %
    assert fit.chi_squared is None


def test_coverage_of_the_intervals():
    """Of 400 boards read with a stated meter, 95 % of the intervals hold the true weight (k = 2: 95.45 %)."""
    design = stage()
    rng = np.random.default_rng(5)
    volts = np.vstack([np.zeros(5), 10 * np.eye(5), rng.uniform(0, 10, (6, 5))])
    true = np.append(operating_point(design).weights, operating_point(design).offset)
    matrix = np.column_stack([volts, np.ones(len(volts))])
    hits = []
    for known in (True, False):
        for _ in range(200):
            y = matrix @ true + rng.normal(size=len(volts)) * 1e-3
            fit = least_squares(matrix, y, np.full(len(volts), 1e-3) if known else None)
            hits += list(np.abs(fit.value - true) <= fit.expanded)
    assert 0.935 < np.mean(hits) < 0.97


def test_equal_readings_are_said_to_be_equal():
    design = stage()
    volts = np.vstack([np.zeros(5), 10 * np.eye(5)])
    report = diagnose(design, readings_of(design, volts, np.full(6, 0.5)), foresee=False)
    assert any("equal" in n for n in report.notes)
    assert report.suspects[0].fault != "none"


def test_no_readings_leave_everything_undecided_and_still_name_a_next_reading():
    design = stage()
    report = diagnose(design, no_readings(design))
    assert {v.word for v in report.verdicts} == {"undecided"}
    assert report.suspects[0].fault == "none"
    assert set(report.next_reading.volts) == set(design.signal_names)
    assert all(s.low <= report.next_reading.volts[s.name] <= s.high for s in design.signals)


def test_a_design_without_cells_is_refused():
    design = replace(stage(), cells=())
    with pytest.raises(InvalidDesign, match="not realised"):
        diagnose(design, no_readings(design))


@pytest.mark.parametrize(
    ("text", "at_10", "at_0"),
    [
        ("0.05 % + 0.5 mV", 5.5e-3, 0.5e-3), ("±(0.05 % + 3 digits of 1 mV)", 8e-3, 3e-3), ("0.05% + 0.01% of 20 V", 7e-3, 2e-3),
        ("500 ppm + 0.01 % of range 20 V", 7e-3, 2e-3), ("2m", 2e-3, 2e-3), ("0,5 % + 10 counts of 1m", 0.06, 0.01),
    ],
)  # fmt: skip
def test_meter_statement_becomes_a_rectangular_standard_uncertainty(text, at_10, at_0):
    """limit/√3: JCGM 100:2008, 4.3.7."""
    meter = parse_meter(text)
    np.testing.assert_allclose(meter.standard_uncertainty([10.0, -10.0, 0.0]) * np.sqrt(3), [at_10, at_10, at_0])


@pytest.mark.parametrize(
    "text", ["", "good", "0.05 % +", "0 %", "-1 % + 1 mV", "200 %", "3 digits of 1 kΩ", "1 % of ten"]
)
def test_a_meter_statement_that_cannot_be_meant_is_refused(text):
    with pytest.raises(InvalidQuantity, match="meter"):
        parse_meter(text)


def test_the_meter_states_what_the_readings_do_not():
    design = stage()
    volts = np.vstack([np.zeros(5), 10 * np.eye(5), [5.0] * 5])
    fit = diagnose(design, readings_of(design, volts), meter=Meter(), foresee=False).fit
    assert fit.chi_squared is not None
    assert fit.coverage_factor == 2.0


def test_limits_a_person_states_replace_those_of_the_parts():
    design = stage()
    volts = np.vstack([np.zeros(5), 10 * np.eye(5)])
    readings = readings_of(design, volts, uncertainty=np.full(6, 1e-4))
    words = [
        diagnose(design, readings, limits=limits, foresee=False).verdicts[0].word
        for limits in ({}, {"north": (0.2, 0.3)}, {"north": (0.1, 0.2)})
    ]
    assert words == ["in", "out", "in"]


def test_every_pair_of_names_is_kept_in_the_designs_order():
    design = stage()
    for order in itertools.islice(itertools.permutations(range(5)), 0, 120, 17):
        volts = np.vstack([np.zeros(5), 10 * np.eye(5)])[:, list(order)]
        fit = diagnose(design, readings_of(design, volts, uncertainty=np.full(6, 1e-3)), foresee=False).fit
        np.testing.assert_allclose(fit.value[:5], operating_point(design).weights, rtol=1e-5)
