"""The run on the bench: readings find their step, and nothing typed is lost."""

import json

import numpy as np
import pytest
from sumwright.engine.bench.readings import parse_meter
from sumwright.engine.stage import replace
from sumwright.errors import InvalidQuantity, InvalidReadings
from sumwright.files.readings import parse_readings
from sumwright.model import edits
from sumwright.model.bench_run import MOST_READINGS, BenchRun
from sumwright.model.workbench import Workbench
from support.bench_stages import stage

DESIGN = stage()


def output_rows(run):
    return [i for i, r in enumerate(run.rows()) if r.step.probe == "output" and r.step.unit == "V"]


def test_a_reading_is_judged_at_once():
    run = BenchRun(DESIGN)
    i = output_rows(run)[0]
    run.put(i, f"{run.rows()[i].step.expect:.4f}")
    assert run.rows()[i].word == "in"
    run.put(i, "1.9")
    assert run.rows()[i].word == "out"
    run.put(i, "1900m")
    assert run.rows()[i].taken.value == pytest.approx(1.9)
    run.put(i, "")
    assert run.rows()[i].word == ""


def test_a_reading_that_cannot_be_read_leaves_the_old_one():
    run = BenchRun(DESIGN)
    i = output_rows(run)[1]
    run.put(i, "1.9")
    with pytest.raises(InvalidQuantity, match=r"0\.\.91"):
        run.put(i, "0..91")
    with pytest.raises(InvalidQuantity, match="Ω"):
        run.put(i, "4k7Ω")
    assert run.rows()[i].taken.text == "1.9"


def test_a_column_pasted_goes_down_and_a_table_with_a_heading_adds_rows():
    run = BenchRun(DESIGN)
    first = output_rows(run)[0]
    assert run.paste(first, "0,5\n1,9\r\n1.4\n") == 3
    assert [run.rows()[first + k].taken.value for k in range(3)] == [0.5, 1.9, 1.4]
    before = len(run.rows())
    assert run.paste(0, "north\teast\toutput\n3\t4\t1.31\n5\t5\t1.7\n") == 2
    assert len(run.rows()) == before + 2
    assert run.readings().count == 5


def test_a_paste_that_does_not_fit_takes_nothing():
    run = BenchRun(DESIGN)
    last = len(run.rows()) - 1
    for row, text in ((last, "1\n2\n"), (0, "1\ntwo\n"), (0, "1\t2\n3\t4\n"), (0, " \n")):
        with pytest.raises((InvalidReadings, InvalidQuantity)):
            run.paste(row, text)
    assert not run.taken


def test_readings_survive_a_change_of_the_design():
    """A resistor is changed: the same settings find their steps; settings that are steps no more stay as rows of their own."""
    run = BenchRun(DESIGN)
    rows = output_rows(run)
    for i in rows:
        run.put(i, f"{run.rows()[i].step.expect:.4f}")
    count = run.readings().count
    changed = replace(DESIGN, signals=tuple(replace(s, high=s.high / 2) for s in DESIGN.signals))
    assert run.follow(changed)
    assert run.readings().count == count
    assert not run.follow(replace(changed, signals=tuple(replace(s, value=1.0) for s in changed.signals)))


def test_the_next_reading_is_taken_up_once():
    run = BenchRun(DESIGN)
    volts = {"north": 3.3, "east": 1.1}
    row = run.ask(volts)
    assert row == len(run.rows()) - 1
    assert run.ask(volts) == row
    run.put(row, "1.2")
    assert run.readings().volts[-1, 0] == 3.3
    assert run.ask({n: 0.0 for n in DESIGN.signal_names}) == output_rows(run)[0]


def test_the_csv_reads_back_the_same():
    run = BenchRun(DESIGN, parse_meter("0.1 % + 1 mV"))
    for i in output_rows(run):
        run.put(i, f"{run.rows()[i].step.expect + 0.002:.4f}")
    again = BenchRun(DESIGN)
    assert again.restore(run.to_csv()) == run.readings().count
    for name in ("volts", "output", "uncertainty"):
        np.testing.assert_allclose(getattr(again.readings(), name), getattr(run.readings(), name), rtol=1e-6)


def test_a_better_meter_narrows_the_limits():
    run = BenchRun(DESIGN, parse_meter("1 % + 10 mV"))
    i = output_rows(run)[2]
    wide = run.rows()[i].step
    run.restate(parse_meter("0.01 % + 0.1 mV"))
    narrow = run.rows()[i].step
    assert narrow.high - narrow.low < 0.6 * (wide.high - wide.low)


def test_a_run_is_bounded():
    run = BenchRun(DESIGN)
    table = "north,output\n" + "".join(f"{k / 1000},1\n" for k in range(MOST_READINGS + 1))
    with pytest.raises(InvalidReadings, match=str(MOST_READINGS)):
        run.paste(0, table)
    with pytest.raises(InvalidReadings, match="no row"):
        run.put(10_000, "1")


def test_cleared_readings_can_be_brought_back():
    run = BenchRun(DESIGN)
    run.put(output_rows(run)[0], "0.5")
    gone = run.clear()
    assert run.readings().count == 0
    run.taken = gone
    assert run.readings().count == 1


def test_readings_and_design_are_taken_back_in_the_order_in_which_they_changed():
    bench = Workbench(DESIGN)
    one, two, three = ({"taken": [k]} for k in range(3))
    bench.read(one)
    bench.edit(edits.with_value, "north", 1.5)
    bench.read(two)
    bench.clear_readings({})
    bench.read(three)
    seen = []
    while bench.undo():
        seen.append((bench.readings.get("taken", []), bench.design.signal("north").value))
    value = DESIGN.signal("north").value
    assert seen == [([], 1.5), ([1], 1.5), ([0], 1.5), ([0], value), ([], value)]
    again = []
    while bench.redo():
        again.append((bench.readings.get("taken", []), bench.design.signal("north").value))
    assert again == [([0], value), ([0], 1.5), ([1], 1.5), ([2], 1.5)]
    assert not bench.can_redo


def test_what_the_sheet_holds_comes_back_as_it_was():
    run = BenchRun(DESIGN, parse_meter("0.1 % + 2 mV"))
    rows = output_rows(run)
    run.put(rows[0], "1900m")
    run.put(0, "12.01")
    run.ask({"north": 1.25})
    run.take(parse_readings("north,output,uncertainty\n3,1.31,0.002\n", DESIGN, "A file"))
    again = BenchRun(DESIGN)
    again.take_up(json.loads(json.dumps(run.document())))
    assert (again.taken, again.asked, again.meter) == (run.taken, run.asked, run.meter)
    assert again.document() == run.document()
    again.take_up({})
    assert again.taken == again.asked == {} and again.meter.text == BenchRun(DESIGN).meter.text


@pytest.mark.parametrize(
    "held",
    [
        {"taken": 3}, {"taken": [{}]}, {"taken": [None]}, {"meter": "fine"}, {"asked": [{"apply": []}]}, {"taken": [{}] * (MOST_READINGS + 1)},
        {"taken": [{"apply": {"north": "x"}, "probe": "output", "unit": "V", "text": "1", "value": 1.0, "uncertainty": None}]},
        {"taken": [{"apply": {}, "probe": "output", "unit": "V", "text": "1", "value": float("nan"), "uncertainty": None}]},
        {"taken": [{"apply": {}, "probe": "output", "unit": "V", "text": "1", "value": 1.0, "uncertainty": -1}]},
        {"taken": [{"apply": {}, "probe": 7, "unit": "V", "text": "1", "value": 1.0, "uncertainty": None}]},
    ],
)  # fmt: skip
def test_what_the_sheet_cannot_have_held_changes_nothing(held):
    run = BenchRun(DESIGN)
    run.put(output_rows(run)[0], "1.9")
    before = run.document()
    with pytest.raises((InvalidReadings, InvalidQuantity)):
        run.take_up(held)
    assert run.document() == before


def test_limits_of_a_persons_own_are_kept_with_the_readings_and_follow_what_is_wanted():
    run = BenchRun(DESIGN)
    run.state("north", "±2 %")
    run.state("tare", "-0.19..-0.17")
    run.state("offset", "+/- 5m")
    low, high = run.stated_limits()["north"]
    assert (low, high) == pytest.approx((0.14 * 0.98, 0.14 * 1.02))
    assert run.stated_limits()["offset"] == pytest.approx((0.495, 0.505))
    for text in ("0.2", "2..1", "±0", "±two", "..", "1..2..3"):
        with pytest.raises((InvalidQuantity, InvalidReadings), match="limits of north"):
            run.state("north", text)
    with pytest.raises(InvalidReadings, match="nobody"):
        run.state("nobody", "1..2")
    again = BenchRun(DESIGN)
    again.take_up(json.loads(json.dumps(run.document())))
    assert again.stated_limits() == run.stated_limits()
    again.state("north", " ")
    assert set(again.stated_limits()) == {"tare", "offset"}
    again.follow(replace(DESIGN, signals=tuple(replace(s, name=s.name.replace("tare", "lid")) for s in DESIGN.signals), cells=tuple(replace(c, minus=tuple(replace(x, source="lid") for x in c.minus)) for c in DESIGN.cells)))  # fmt: skip
    assert set(again.stated_limits()) == {"offset"}


def test_repeats_of_a_setting_in_a_file_count_by_their_mean():
    run = BenchRun(DESIGN)
    text = "north,output,uncertainty\n3,1.0,0.001\n1,0.6,0.001\n3,1.1,0.001\n3,1.3,0.002\n"
    assert run.take(parse_readings(text, DESIGN)) == 2
    read = run.readings()
    assert sorted(read.output) == pytest.approx([0.6, (1.0 + 1.1 + 1.3 / 4) / 2.25])
    assert min(read.uncertainty) == pytest.approx(0.001 / 1.5)
