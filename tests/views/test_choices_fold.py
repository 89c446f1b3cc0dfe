"""The fold Choices without a browser: search, preview, take, undo, drawer, trim, spans, parts list."""

import csv
import functools
import io
import json
import pickle

import pytest
from sumwright.engine.realise.choices import Realisation
from sumwright.engine.realise.steps import search_steps, with_cells
from sumwright.errors import InvalidQuantity, InvalidReadings, SumwrightError
from sumwright.model import demo
from sumwright.model.workbench import Workbench
from sumwright.views.choices import Choices, tag
from sumwright.views.fold import Context
from sumwright.views.wire import packed


class Jobs:
    """Stands in for the process: runs the job's steps when told to."""

    def __init__(self):
        self.job = None
        self.stopped = []

    def start(self, key, function, *args, progress, done, failed):
        self.job = (function, pickle.loads(pickle.dumps(args)), progress, done, failed)

    def stop(self, key):
        self.stopped.append(key)
        self.job = None

    def run(self):
        function, args, progress, done, failed = self.job
        steps = function(*args)
        shares = []
        try:
            while True:
                told = pickle.loads(pickle.dumps(next(steps)))
                shares.append(told["share"])
                progress(told)
        except StopIteration as end:
            done(pickle.loads(pickle.dumps(end.value)))
        except SumwrightError as problem:
            failed(str(problem))
        return shares


def opened(design=None):
    bench = Workbench(design or demo.design())
    jobs, refreshed = Jobs(), []
    fold = Choices(
        Context(bench, jobs, lambda: refreshed.append(1), lambda: None, lambda *a, **k: None, lambda a: None, {})
    )
    fold.figures()
    return fold, bench, jobs


@functools.cache
def found():
    """The demonstration's choices, searched once for all tests."""
    steps = search_steps(demo.design())
    try:
        while True:
            next(steps)
    except StopIteration as end:
        return end.value


def searched():
    fold, bench, jobs = opened()
    fold.show()
    fold._start()
    fold._done(found())
    return fold, bench, jobs


def name_of(fold, k):
    return tag(fold._rows[k])


def test_the_search_tells_how_far_it_is_and_ends_with_a_proof():
    fold, _, jobs = opened()
    fold.show()
    fold._start()
    shares = jobs.run()
    assert shares == sorted(shares) and shares[-1] == 1.0
    shown = fold.show()
    assert shown["share"] is None and shown["rows"]
    assert all(p["proved"] for p in shown["proof"])
    assert [r["error"] for r in shown["rows"]] == sorted(r["error"] for r in shown["rows"])
    json.loads(packed(shown))


def test_a_moving_slider_does_not_search_again_but_a_weight_does():
    fold, bench, jobs = searched()
    first = fold._found
    name = bench.signal_names[0]
    from sumwright.model import edits

    bench.edit(edits.with_value, name, 0.1)
    fold.show()
    assert fold._found is first
    bench.edit(edits.with_weight, name, bench.design.signal(name).weight * 1.3)
    shown = fold.show()
    assert shown["rows"] == [] and fold._found is None and jobs.stopped


def test_preview_changes_nothing_and_take_is_one_step_that_undo_brings_back():
    fold, bench, _ = searched()
    before, checks = bench.design, bench.analysis.checks
    fold.handle({"do": "pick", "id": name_of(fold, 0)})
    shown = fold.show()
    preview = shown["open"]
    assert bench.design is before and preview["picked"] and not preview["same"]
    assert {m["key"] for m in preview["margins"]} >= {c.key for c in checks} and len(preview["margins"]) >= 5
    assert [leg["name"] for leg in preview["legs"]] == list(bench.signal_names)
    then = {m["key"]: m["margin_then"] for m in preview["margins"] if m["status_then"] is not None}
    fold.handle({"do": "take", "id": name_of(fold, 0)})
    assert bench.design.cells != before.cells
    # what was promised is what the sheet now says
    assert {c.key: c.margin for c in bench.analysis.checks} == then
    assert any(r["same"] for r in fold.show()["rows"])
    assert bench.undo() and bench.design == before


def test_preview_tells_the_checks_that_only_the_other_number_of_op_amps_has():
    fold, bench, _ = searched()
    cells = len(bench.design.cells)
    other = next(c for c in fold._rows if len(c.cells) != cells)
    fold.handle({"do": "pick", "id": tag(other)})
    margins = fold.show()["open"]["margins"]
    fresh = {m["key"] for m in margins if m["status"] is None}
    gone = {m["key"] for m in margins if m["status_then"] is None}
    assert any(k.startswith("swing_high") for k in fresh) and any(k.startswith("swing_high") for k in gone)
    assert all(m["status"] or m["status_then"] for m in margins)


def test_picking_again_puts_it_down_and_a_tap_picks():
    fold, _, _ = searched()
    fold.handle({"do": "pick", "id": name_of(fold, 1)})
    assert fold.show()["picked"] == 1
    fold.handle({"do": "pick", "id": name_of(fold, 1)})
    assert fold.show()["picked"] is None
    fold._map._points.selected.indices = [3]  # the present stage is point 0
    assert fold.show()["picked"] == 2


def test_what_a_browser_sends_is_checked():
    fold, _, _ = searched()
    for bad in (
        {}, {"do": "explode"}, {"do": "pick", "id": "0"}, {"do": "pick", "id": 1}, {"do": "pick"}, {"do": "take", "id": "x" * 99},
        {"do": "options", "arrangement": "sideways", "pairs": True}, {"do": "options", "arrangement": "", "pairs": "yes"},
        {"do": "goal", "text": "0"}, {"do": "goal", "text": "abc"}, {"do": "measured", "signal": "nobody", "text": "1"},
        {"do": "window", "end": "low", "text": "9 A"}, {"do": "window", "end": "low", "text": "99"},
    ):  # fmt: skip
        with pytest.raises(InvalidQuantity):
            fold.handle(bad)


def test_a_choice_found_for_another_sheet_is_not_taken():
    fold, bench, _ = searched()
    from sumwright.model import edits

    bench.edit(edits.with_weight, bench.signal_names[0], bench.design.signals[0].weight * 2)
    with pytest.raises(InvalidQuantity, match="has changed"):
        fold.handle({"do": "take", "id": name_of(fold, 0)})


def test_stop_keeps_what_was_found_so_far():
    fold, _, _ = opened()
    fold.show()
    fold._start()
    fold._progress({"share": 0.5, "arrangement": "mixed-sign", "choices": ()})
    fold.handle({"do": "stop"})
    shown = fold.show()
    assert shown["stopped"] and shown["share"] is None
    fold.handle({"do": "again"})
    assert not fold.show()["stopped"]


def test_the_drawer_is_searched_alone_and_says_what_to_buy():
    fold, _, jobs = searched()
    with pytest.raises(InvalidReadings, match="Line 2 of the drawer, count"):
        fold.handle({"do": "drawer", "name": "bad.csv", "text": "value,count\n1k,-2\n"})
    text = "value;count\n" + "".join(f"{v};6\n" for v in ("10k", "22k", "47k", "100k", "150k", "220k"))
    assert fold.handle({"do": "drawer", "name": "mine.csv", "text": text}) == {"drawer": 6}
    fold.handle({"do": "pane", "pane": "drawer"})
    fold.show()
    fold._start()
    jobs.run()
    shown = fold.show()
    assert shown["use_drawer"] and shown["rows"] and shown["open"]["bins"] == 6
    held = {1e4, 2.2e4, 4.7e4, 1e5, 1.5e5, 2.2e5}
    from sumwright.engine.realise.choices import resistors_of

    assert all(set(resistors_of(c.cells)) <= held for c in fold._rows)
    assert shown["open"]["buy"] or "refused" in shown["open"]
    fold.handle({"do": "goal", "text": "90 %"})
    assert fold.show()["open"]["buy"] == []


def test_parts_trim_and_spans_panes():
    fold, bench, _ = searched()
    fold.handle({"do": "pane", "pane": "parts"})
    parts = fold.show()["open"]
    assert parts["of"] == "now" and any(line[2] == "op amp" for line in parts["lines"]) and parts["balance"]
    reply = fold.handle({"do": "csv"})
    assert len(list(csv.reader(io.StringIO(reply["csv"])))) == len(parts["lines"]) + 1

    fold.handle({"do": "pane", "pane": "trim"})
    name = bench.signal_names[0]
    fold.handle({"do": "measured", "signal": name, "text": str(bench.design.signals[0].weight * 0.99)})
    rows = {r["name"]: r for r in fold.show()["open"]["rows"]}
    assert set(bench.signal_names) <= set(rows) and rows[name]["how"] == "parallel"

    fold.handle({"do": "pane", "pane": "spans"})
    fold.handle({"do": "window", "end": "high", "text": "4.5"})
    fold.handle({"do": "window", "end": "low", "text": "500m"})
    spans = fold.show()["open"]
    assert (spans["low"], spans["high"]) == (0.5, 4.5) and spans["able"]
    before = bench.design
    fold.handle({"do": "span_take"})
    lows = [min(s.weight * s.low, s.weight * s.high) for s in bench.design.signals]
    highs = [max(s.weight * s.low, s.weight * s.high) for s in bench.design.signals]
    offset = bench.design.target.offset
    assert offset + sum(lows) == pytest.approx(0.5) and offset + sum(highs) == pytest.approx(4.5)
    assert bench.undo() and bench.design == before


def test_a_least_leg_is_searched_for_and_kept():
    fold, _, jobs = searched()
    fold.handle({"do": "least", "text": "150k"})
    fold.show()
    fold._start()
    jobs.run()
    names = fold.workbench.signal_names
    assert fold._rows
    for c in fold._rows:
        assert min(x.resistance for cell in c.cells for x in (*cell.minus, *cell.plus) if x.source in names) >= 150e3
    for bad in ("0", "5G", "-1k"):
        with pytest.raises(InvalidQuantity, match="least leg"):
            fold.handle({"do": "least", "text": bad})
    fold.handle({"do": "least", "text": ""})
    assert fold._least_leg is None


def test_checks_that_would_fall_short_are_told_with_each_choice():
    from dataclasses import replace

    from sumwright.engine.analysis import Analysis

    design = demo.design()
    tight = replace(design, supply=replace(design.supply, high=3.0))
    steps = search_steps(tight, "mixed-sign")
    try:
        while True:
            next(steps)
    except StopIteration as end:
        for c in end.value.choices:
            checks = Analysis(with_cells(tight, c.cells)).checks
            assert c.short and c.short == tuple(x.title for x in checks if x.status == "short")


def test_feedback_capacitors_stay_with_their_op_amps():
    from dataclasses import replace

    design = demo.design()
    design = replace(design, cells=(replace(design.cells[0], feedback_capacitance=22e-12),))
    for c in found().choices:
        kept = with_cells(design, c.cells).cells
        assert [cell.feedback_capacitance for cell in kept] == [22e-12] * len(c.cells)


def test_the_balancing_resistor_is_fitted_where_it_is_worth_it():
    from dataclasses import replace

    from sumwright.engine.arrangement import exact_cells
    from support.stages import op_amp
    from support.wanted import design_for

    design = design_for([-1.0] * 4, amp=op_amp(offset_voltage=3e-3, bias_current=250e-9, offset_current=50e-9))
    fold, bench, _ = opened(replace(design, cells=exact_cells(design, "inverting", feedback=100e3)))
    fold.handle({"do": "pane", "pane": "parts"})
    assert fold.show()["open"]["balance"][0]["verdict"] == "worth it"
    fold.handle({"do": "balance", "cell": 0})
    assert bench.design.cells[0].plus_ground == 20e3
    assert fold.show()["open"]["balance"][0]["verdict"] == "balanced"
    with pytest.raises(InvalidQuantity, match="needs no balancing"):
        fold.handle({"do": "balance", "cell": 0})
    assert bench.undo() and bench.design.cells[0].plus_ground == 0


def test_other_axes_and_papers_move_the_same_points():
    fold, bench, _ = searched()
    fold.show()
    count = len(fold._map._points.data["x"])
    for axis in ("noise", "band", "parts"):
        fold.handle({"do": "axis", "axis": axis})
        fold.show()
        assert len(fold._map._points.data["x"]) == count
    bench.theme = "dark"
    fold.show()
    fold.close()


def test_steps_search_one_arrangement_or_refuse():
    design = demo.design()
    steps = search_steps(design, "two-stage")
    try:
        while True:
            next(steps)
    except StopIteration as end:
        assert isinstance(end.value, Realisation) and {c.arrangement for c in end.value.choices} == {"two-stage"}
    with pytest.raises(SumwrightError):
        next(search_steps(design, "inverting"))
