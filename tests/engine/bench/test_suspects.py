"""Boards with one fault, drawn by editing the design and read by the operating point, none of it the bench's own code."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal
from sumwright.engine.bench.board import Bench, log_likelihood
from sumwright.engine.bench.diagnose import diagnose
from sumwright.engine.bench.explain import describe
from sumwright.engine.bench.faults import FAULTS, Fault, Place, Way
from sumwright.engine.bench.next_reading import candidates, expected_bits, next_reading
from sumwright.engine.bench.plan import plan
from sumwright.engine.bench.readings import Meter, Readings
from sumwright.engine.bench.suspects import Diagnosis, condense, list_cases, wire
from sumwright.engine.operating_point import operating_point
from support.bench_stages import broken, drawn_board, every_arrangement, stage

STAGES = every_arrangement()
METER = Meter()
# Fault, part, value: one of each kind on the mixed-sign stage, and what only other arrangements have.
FAULTY = [
    ("mixed-sign", "none", "", 1), ("mixed-sign", "leg open", "north", 1), ("mixed-sign", "leg open", "tare", 1),
    ("mixed-sign", "leg shorted", "east", 1), ("mixed-sign", "leg shorted", "tare", 1), ("mixed-sign", "leg wrong value", "south", 10),
    ("mixed-sign", "leg wrong value", "tare", 0.1), ("mixed-sign", "leg wrong value", "west", 1.2), ("mixed-sign", "wrong input", "tare", 1),
    ("mixed-sign", "wrong input", "east", 1), ("mixed-sign", "source resistance high", "north", 1e5),
    ("mixed-sign", "legs swapped", "north, south", 1), ("mixed-sign", "legs swapped", "south, tare", 1),
    ("mixed-sign", "feedback open", "cell 1", 1), ("mixed-sign", "feedback shorted", "cell 1", 1),
    ("mixed-sign", "feedback wrong value", "cell 1", 1.5), ("mixed-sign", "plus ground missing", "cell 1", 1),
    ("mixed-sign", "reference missing", "reference", 1), ("mixed-sign", "output overloaded", "output", 50),
    ("mixed-sign", "rail missing", "high", 1), ("non-inverting", "minus ground missing", "cell 1", 1),
    ("non-inverting", "feedback open", "cell 1", 1), ("non-inverting", "leg open", "west", 1),
    ("inverting", "leg wrong value", "north", 1.1), ("inverting", "rail missing", "low", 1), ("inverting", "plus ground missing", "cell 1", 1),
    ("inverting", "legs swapped", "north, west", 1), ("inverting-pair", "feedback wrong value", "cell 2", 2),
    ("inverting-pair", "leg open", "cell 1", 1), ("inverting-pair", "leg wrong value", "reference", 3),
    ("two-stage", "leg shorted", "north", 1), ("two-stage", "feedback open", "cell 2", 1), ("two-stage", "wrong input", "south", 1),
    ("two-stage", "legs swapped", "north, south", 1), ("two-stage", "legs swapped", "north, cell 1", 1),
]  # fmt: skip


def run_of(design):
    """The settings at which the plan reads the output."""
    return np.array(
        [[s.apply[n] for n in design.signal_names] for s in plan(design) if s.probe == "output" and s.unit == "V"]
    )


def read(design, volts, rng, meter=METER, lie=1.0):
    """What a meter reads on this board."""
    y = np.array([operating_point(design, v).output for v in volts])
    u = meter.standard_uncertainty(y)
    return Readings(design.signal_names, volts, y + rng.normal(size=len(y)) * u * lie, u)


@pytest.mark.parametrize(("name", "fault", "part", "value"), FAULTY)
def test_the_true_fault_is_in_the_first_group(name, fault, part, value):
    design = STAGES[name]
    rng = np.random.default_rng(11)
    board = drawn_board(broken(design, fault, part, value), rng)
    report = diagnose(design, read(board, run_of(design), rng), foresee=False)
    first = {(s.fault, s.part): s for s in report.suspects if s.group == 1}
    assert (fault, part) in first
    assert len(first) <= 9
    found = first[fault, part]
    assert found.explain
    if fault.endswith("wrong value"):
        nominal = {leg.source: leg.resistance for c in design.cells for leg in (*c.minus, *c.plus)}
        nominal |= {f"cell {k + 1}": c.feedback for k, c in enumerate(design.cells) if fault.startswith("feedback")}
        assert found.estimate == pytest.approx(nominal[part] * value, rel=0.06)
    if fault == "source resistance high":
        assert found.estimate == pytest.approx(value, rel=0.06)


def test_a_dead_output_that_is_not_a_hard_zero_is_known_all_the_same():
    """A dead amplifier held at ground through 75 ohm passes a little of the signals on: Kirchhoff at both nodes, by hand."""
    design = STAGES["inverting"]
    cell, volts = design.cells[0], run_of(design)
    legs = np.array([1 / (x.resistance + 50.0) for x in cell.minus])
    back, pins = 1 / cell.feedback, 1 / design.op_amp.input_resistance
    g = np.array([[legs.sum() + back + pins, -back], [-back, back + 1 / 75.0 + 1 / design.load.resistance]])
    y = np.linalg.solve(g, np.stack([volts @ legs, np.zeros(len(volts))]))[1]
    u = METER.standard_uncertainty(y)
    noisy = y + np.random.default_rng(3).normal(size=len(y)) * u
    first = diagnose(design, Readings(design.signal_names, volts, noisy, u), foresee=False).suspects[0]
    assert (first.fault, first.part, first.estimate) == ("op amp dead", "cell 1", None)


def test_probabilities_add_up_and_are_in_order():
    design = STAGES["two-stage"]
    rng = np.random.default_rng(0)
    d = diagnose(design, read(design, run_of(design), rng), foresee=False).diagnosis
    assert d.probabilities.sum() == pytest.approx(1)
    assert (np.diff(d.probabilities[d.order]) <= 0).all()
    groups = d.groups()[d.order]
    firsts = [int(np.flatnonzero(groups == g)[0]) for g in range(1, groups.max() + 1)]
    assert firsts == sorted(firsts)  # groups are numbered in the order of their likeliest


def test_healthy_boards_are_called_healthy():
    design = STAGES["mixed-sign"]
    rng = np.random.default_rng(7)
    volts = run_of(design)
    first = [
        diagnose(design, read(drawn_board(design, rng), volts, rng), foresee=False).suspects[0].fault for _ in range(25)
    ]
    assert first == ["none"] * 25


def test_a_meter_three_times_worse_than_stated_does_not_condemn_a_healthy_board():
    design = STAGES["mixed-sign"]
    rng = np.random.default_rng(8)
    volts = run_of(design)
    first = [
        diagnose(design, read(drawn_board(design, rng), volts, rng, lie=3.0), foresee=False).suspects[0].fault
        for _ in range(20)
    ]
    assert first.count("none") >= 19


def test_look_alikes_share_a_group_and_are_told_what_would_part_them():
    """Outside, 100k more in the leg and 100k more in its source are one and the same."""
    design = STAGES["inverting"]
    rng = np.random.default_rng(1)
    board = broken(design, "source resistance high", "east", 1e5)
    suspects = diagnose(design, read(board, run_of(design), rng), foresee=False).suspects
    pair = {s.fault: s for s in suspects if s.group == 1}
    assert {"leg wrong value", "source resistance high"} <= set(pair)
    assert "ohms" in pair["leg wrong value"].tell
    assert {s.group for s in suspects if s.fault == "none"} != {1}


def test_a_fault_no_reading_has_touched_is_not_ruled_out():
    """With east and south never driven, both open legs of an inverting stage still stand."""
    design = STAGES["inverting"]
    volts = np.zeros((4, 4))
    volts[1, 0], volts[2, 3], volts[3, [0, 3]] = 4, 4, 2
    rng = np.random.default_rng(1)
    d = diagnose(design, read(design, volts, rng), foresee=False).diagnosis
    case = {c.key: i for i, c in enumerate(d.cases)}
    groups = d.groups()
    assert groups[case["leg open", "east"]] == groups[case["none", ""]]
    assert groups[case["leg open", "north"]] != groups[case["none", ""]]


def test_a_wrong_reference_is_estimated_in_volts():
    from sumwright.engine.stage import replace

    design = STAGES["mixed-sign"]
    rng = np.random.default_rng(5)
    board = drawn_board(replace(design, reference=replace(design.reference, voltage=2.048)), rng)
    suspects = diagnose(design, read(board, run_of(design), rng), foresee=False).suspects
    found = next(s for s in suspects if s.fault == "reference wrong")
    assert found.group == 1
    assert found.unit == "V"
    assert found.estimate == pytest.approx(2.048, rel=0.02)
    assert "2.5" in found.explain


def test_one_more_fault_is_one_more_entry():
    """A fault nobody listed: the reference at half its voltage."""

    def places(bench):
        def halve(boards, row, value):
            boards.reference_volts[row] *= 0.5

        yield Place("reference", (Way(halve),))

    design = STAGES["mixed-sign"]
    faults = (*FAULTS, Fault("reference halved", 3, places, "The reference gives half of what it should."))
    rng = np.random.default_rng(3)
    from sumwright.engine.stage import replace

    board = replace(design, reference=replace(design.reference, voltage=1.25))
    readings = read(board, run_of(design), rng)
    d = Diagnosis(Bench(design), readings.volts, readings.output, readings.uncertainty, faults=faults)
    first = describe(d, 10, 1e-6)
    assert ("reference halved", "reference") in {(s.fault, s.part) for s in first if s.group == 1}


def test_joint_density_is_scipys():
    bench = Bench(STAGES["mixed-sign"])
    volts = run_of(bench.design)
    p = bench.predict(bench.healthy, volts)
    y = p.mean[0] + 1e-3 * np.arange(len(volts))
    u = np.full(len(volts), 1e-3)
    got = log_likelihood(p, y, u, (1.0, 3.0))[0]
    for scale, value in zip((1.0, 3.0), got, strict=True):
        covariance = p.columns[0].T @ p.columns[0] + np.diag(p.own[0] + (scale * u) ** 2)
        assert value == pytest.approx(multivariate_normal(p.mean[0], covariance).logpdf(y), rel=1e-9)


def test_predicted_spread_is_that_of_drawn_boards():
    """Mean and standard deviation at every setting against 3,000 boards drawn part by part, clipping included."""
    design = stage("inverting", (-1.0, -0.7), offset=0.0, rails=12.0)
    bench = Bench(design)
    volts = np.array([[0.0, 0], [5, 0], [0, 9], [6, 6], [10, 10]])
    p = bench.predict(bench.healthy, volts)
    rng = np.random.default_rng(4)
    boards = bench.healthy.take(np.zeros(3000, dtype=int))
    t = design.resistor.tolerance
    for part in ("leg_ohm", "feedback_ohm"):
        values = getattr(boards, part)
        values *= 1 + rng.uniform(-t, t, values.shape)
    boards.nudge[:] = rng.uniform(-1, 1, boards.nudge.shape) * design.op_amp.offset_voltage
    boards.rail_low[:] *= 1 + rng.uniform(-1, 1, 3000) * design.supply.tolerance
    drawn = bench.outputs(boards, volts)
    spread = np.sqrt(p.own[0] + np.square(p.columns[0]).sum(axis=0))
    np.testing.assert_allclose(drawn.mean(axis=0)[:3], p.mean[0][:3], atol=0.002)
    # at the edge of clipping, where the limit's own spread is wider than was drawn
    assert drawn.mean(axis=0)[3] == pytest.approx(p.mean[0][3], abs=0.06)
    assert (drawn.std(axis=0)[:3] < 1.3 * spread[:3]).all()
    assert (drawn.std(axis=0)[:3] > 0.6 * spread[:3]).all()
    assert p.share_low[0, 4] > 0.99  # both at their end: clipped


def test_next_reading_measures_what_is_in_doubt():
    """When only south is in doubt, south is driven; a reading that cannot tell anything is worth nothing."""
    design = STAGES["inverting"]
    rng = np.random.default_rng(2)
    volts = np.zeros((4, 4))
    volts[1, 0], volts[2, 1], volts[3, 3] = 8, 8, 8
    readings = read(design, volts, rng)
    d = Diagnosis(Bench(design), readings.volts, readings.output, readings.uncertainty)
    chosen = next_reading(d, METER.standard_uncertainty)
    assert abs(chosen.volts["south"]) > 1
    settings = np.array([[0, 0, 0, 0], [8, 0, 0, 0], [0, 0, 5.0, 0]])
    bits = expected_bits(d, settings, METER.standard_uncertainty)
    assert bits[2] > 20 * max(bits[0], bits[1])


def test_information_is_that_of_a_plain_integration():
    """Mutual information of suspect and reading against a fine sum over the reading's axis."""
    from sumwright.engine.bench import next_reading as module

    design = STAGES["inverting"]
    d = Diagnosis(Bench(design), np.zeros((0, 4)), np.zeros(0), np.zeros(0))
    settings = np.array([[6.0, 0, 0, 0], [3, 4, 5, 6]])
    got = expected_bits(d, settings, METER.standard_uncertainty)
    trials, weight, owner = module._standing(d)
    mean, spread = module._foresee(d, trials, settings, METER.standard_uncertainty)
    for j in range(2):
        y = np.unique(
            np.concatenate([m + s * np.linspace(-6, 6, 400) for m, s in zip(mean[:, j], spread[:, j], strict=True)])
        )
        dense = (
            np.exp(-0.5 * ((y - mean[:, j, None]) / spread[:, j, None]) ** 2) / spread[:, j, None] / np.sqrt(2 * np.pi)
        )
        by_case = np.array([(weight[owner == c, None] * dense[owner == c]).sum(axis=0) for c in range(owner.max() + 1)])
        prior = by_case.sum(axis=0)
        p = np.array([weight[owner == c].sum() for c in range(owner.max() + 1)])
        with np.errstate(divide="ignore", invalid="ignore"):
            terms = np.where(by_case > 0, by_case * np.log2(by_case / p[:, None] / prior), 0.0)
        exact = np.trapezoid(terms.sum(axis=0), y)
        assert got[j] == pytest.approx(exact, rel=0.15)


def test_candidates_stay_inside_the_ranges():
    design = stage(span=(1.0, 5.0))
    rows = candidates(design, np.random.default_rng(0))
    assert (rows >= 1).all()
    assert (rows <= 5).all()
    assert len(np.unique(rows, axis=0)) == len(rows)


def test_adaptive_readings_find_the_fault():
    design = STAGES["mixed-sign"]
    rng = np.random.default_rng(9)
    bench = Bench(design)
    board = drawn_board(broken(design, "wrong input", "west"), rng)
    volts, output = np.zeros((0, 5)), np.zeros(0)
    for _ in range(6):
        d = Diagnosis(bench, volts, output, METER.standard_uncertainty(output))
        ask = next_reading(d, METER.standard_uncertainty).volts
        volts = np.vstack([volts, [[ask[n] for n in design.signal_names]]])
        output = np.append(output, read(board, volts[-1:], rng).output)
    d = Diagnosis(bench, volts, output, METER.standard_uncertainty(output))
    assert d.cases[d.order[0]].key == ("wrong input", "west")


def test_many_rows_are_condensed_without_losing_the_extremes():
    rng = np.random.default_rng(0)
    volts = rng.integers(0, 3, (500, 2)).astype(float)
    y = volts @ [1.0, 2.0] + rng.normal(size=500) * 0.01
    v, r, u = condense(volts, y, np.full(500, 0.01))
    assert len(r) == 9
    np.testing.assert_allclose(r, v @ [1.0, 2.0], atol=0.006)
    assert (u < 0.002).all()
    v, r, u = condense(rng.random((500, 2)), y, np.full(500, 0.01))
    assert len(r) == 60
    assert r.min() == y.min()
    assert r.max() == y.max()


def test_every_case_wires_its_own_board():
    """No two faults of one list leave the same board, but for those that do nothing else by design."""
    bench = Bench(STAGES["mixed-sign"])
    cases = list_cases(bench)
    assert len({c.key for c in cases}) == len(cases)
    from sumwright.engine.bench.suspects import Trial

    boards = wire(bench, cases, [Trial(i, 0, 12345.0) for i in range(len(cases))])
    assert boards.count == len(cases)
    np.testing.assert_array_equal(bench.healthy.leg_ohm[0], wire(bench, cases, [Trial(0, 0, 0.0)]).leg_ohm[0])


def test_screening_on_a_few_readings_changes_no_answer(monkeypatch):
    """With thirty readings the long way and the screened way rank the same suspects with the same odds."""
    from sumwright.engine.bench import suspects

    design = STAGES["mixed-sign"]
    rng = np.random.default_rng(12)
    board = drawn_board(broken(design, "leg wrong value", "west", 1.3), rng)
    readings = read(board, rng.uniform(0, 10, (30, 5)), rng)
    both = []
    for rows in (suspects.SCREEN_ROWS, 100):
        monkeypatch.setattr(suspects, "SCREEN_ROWS", rows)
        both.append(Diagnosis(Bench(design), readings.volts, readings.output, readings.uncertainty))
    assert not both[0]._alive.all()
    assert both[1]._alive.all()
    np.testing.assert_allclose(both[0].probabilities, both[1].probabilities, atol=2e-3)
    np.testing.assert_array_equal(both[0].order[:2], both[1].order[:2])
