"""The fold Response without a browser: curves, scope, waves, cures, cables, holding, export."""

import csv
import io
import math
import pickle

import numpy as np
import pytest
from sumwright.engine.compensation import cures
from sumwright.engine.stage import replace
from sumwright.errors import InvalidQuantity
from sumwright.model import demo, edits
from sumwright.model.workbench import Workbench
from sumwright.views.fold import Context
from sumwright.views.response import Response
from sumwright.views.wire import packed


class Jobs:
    """Stands in for the process: keeps the job until it is run."""

    def __init__(self):
        self.job = None

    def start(self, key, function, *args, progress, done, failed):
        self.job = (function, pickle.loads(pickle.dumps(args)), progress, done)

    def stop(self, key):
        self.job = None

    def run(self):
        function, args, progress, done = self.job
        steps = function(*args)
        while True:
            try:
                progress(next(steps))
            except StopIteration as end:
                return done(pickle.loads(pickle.dumps(end.value)))


def opened(design=None):
    bench, jobs = Workbench(design or demo.design(), on="north"), Jobs()
    fold = Response(Context(bench, jobs, lambda: None, lambda: None, lambda *a, **k: None, lambda a: None, {}))
    fold.figures()
    return fold, bench, jobs


def line(source, name):
    i = list(source.data["name"]).index(name)
    return np.asarray(source.data["x"][i]), np.asarray(source.data["y"][i])


def test_curves_are_those_of_the_engine_with_the_crossing_marked():
    fold, bench, _ = opened()
    shown = fold.show()
    packed(shown)
    ac = bench.analysis.ac
    f, db = line(fold._gain, "north")
    k = len(f) // 2
    at = np.argmin(np.abs(ac.frequencies - f[k]))
    i = bench.design.signal_names.index("north")
    assert db[k] == pytest.approx(20 * math.log10(abs(ac.gains[i][at])), abs=1e-3)
    assert fold._cross.data["x"] == [ac.cells[0].crossover]
    f, open_db = line(fold._gain, "open loop")
    noise_db = line(fold._gain, "noise gain")[1]
    level = fold._cross.data["y"][0]
    x = math.log(ac.cells[0].crossover)
    assert np.interp(x, np.log(f), open_db) == pytest.approx(level, abs=0.1)  # where the two lines meet
    assert np.interp(x, np.log(f), noise_db) == pytest.approx(level, abs=0.1)


def test_a_slider_moves_the_record_and_no_curve():
    fold, bench, _ = opened()
    fold.show()
    y, v = fold._gain.data["y"], line(fold._scope, "output")[1].copy()
    bench.edit(edits.with_value, "south", 1.0)
    fold.show()
    assert fold._gain.data["y"] is y
    assert not np.array_equal(line(fold._scope, "output")[1], v)
    assert line(fold._scope, "output")[1][0] == pytest.approx(bench.analysis.dc.output, abs=1e-4)


def test_the_step_is_of_the_signal_under_the_hand():
    fold, bench, _ = opened()
    bench.on = "tare"
    told = fold.show()["scope"]
    assert told["signal"] == "tare" and told["settled"]["0.01"] < told["settled"]["0.001"]


def test_waves_are_set_figure_by_figure():
    fold, _, _ = opened()
    fold.handle({"do": "kind", "kind": "waves"})
    fold.handle({"do": "wave", "name": "north", "figure": "kind", "kind": "square"})
    fold.handle({"do": "wave", "name": "north", "figure": "frequency", "text": "2k"})
    fold.handle({"do": "wave", "name": "north", "figure": "amplitude", "text": "1.5"})
    fold.handle({"do": "wave", "name": "south", "figure": "kind", "kind": "triangle"})
    shown = fold.show()
    assert fold.waves["north"].frequency == 2000.0 and fold.waves["north"].amplitude == 1.5
    assert {"north", "south", "output", "ideal output"} <= set(fold._scope.data["name"])
    assert shown["scope"]["complete"]
    fold.handle({"do": "wave", "name": "south", "figure": "kind", "kind": "dc"})
    assert "south" not in fold.waves
    with pytest.raises(InvalidQuantity, match="choose a wave for south first"):
        fold.handle({"do": "wave", "name": "south", "figure": "amplitude", "text": "1"})


def test_a_wave_file_plays_and_a_bad_one_changes_nothing():
    fold, _, _ = opened()
    fold.handle({"do": "wave file", "name": "north", "text": "0,1\n1m,5\n2m,2\n"})
    t, v = (fold.show(), line(fold._scope, "north"))[1]
    assert v.max() == pytest.approx(5.0, abs=0.01) and t[-1] == pytest.approx(2.0)  # ms
    with pytest.raises(InvalidQuantity, match="line 2"):
        fold.handle({"do": "wave file", "name": "north", "text": "0,1\nrubbish,5\n"})
    assert fold.waves["north"].volts == (1.0, 5.0, 2.0)


def test_a_record_that_is_too_long_is_refused_in_its_place():
    fold, _, _ = opened()
    fold.handle({"do": "wave", "name": "north", "figure": "kind", "kind": "square"})
    fold.handle({"do": "wave", "name": "north", "figure": "frequency", "text": "1M"})
    fold.handle({"do": "duration", "text": "10"})
    shown = fold.show()
    assert "too many" in shown["problem"] and shown["more"]  # the rest of the fold stands
    fold.handle({"do": "duration", "text": ""})
    assert fold.show()["problem"] == ""


def test_noise_is_the_engine_s_and_has_bits():
    fold, bench, _ = opened()
    more = fold.show()["more"]
    assert more["rms"] == bench.analysis.noise.rms
    assert more["to_noise"].decibels == pytest.approx(20 * math.log10(5 / 2 / math.sqrt(2) / more["rms"]))


def test_cures_are_looked_for_beside_the_server_and_one_is_fitted():
    design = demo.design()
    bare = replace(design, load=replace(design.load, capacitance=3e-10))
    fold, bench, jobs = opened(bare)
    bench.edit(edits.with_feedback_capacitance, 0, 0.0)
    fold.handle({"do": "page", "page": "loop"})
    assert fold.show()["more"]["cures"] is None
    jobs.run()
    found = fold.show()["more"]["cures"]
    assert [c.kind for c in found] and all(c.phase_margin >= 44.9 for c in found)
    for cure in found:
        if cure.kind == "feedback capacitor":
            fold.handle({"do": "fit", "cell": cure.cell, "value": cure.value})
            assert bench.design.cells[0].feedback_capacitance == cure.value
            assert bench.undo()


def test_cables_and_crosstalk():
    fold, _, _ = opened()
    fold.handle({"do": "page", "page": "signals"})
    assert fold.show()["more"]["cabled"] is None
    fold.handle({"do": "cable", "text": "1n"})
    fold.handle({"do": "frequency", "text": "1k"})
    more = fold.show()["more"]
    free = [s.bandwidth_3db for s in more["signals"]]
    assert all(a <= b * 1.001 for a, b in zip(more["cabled"].bandwidths, free, strict=True))
    assert more["crosstalk"][0] > 0 and fold.frequency == 1000.0
    packed(more)


def test_the_held_stage_is_in_every_plot():
    fold, bench, _ = opened()
    fold.handle({"do": "hold"})
    bench.edit(edits.with_feedback_capacitance, 0, 1e-12)
    fold.show()
    assert "north, held" in fold._gain.data["name"] and "north, held" in fold._phase.data["name"]
    assert "output, held" in fold._scope.data["name"]
    fold.handle({"do": "let go"})
    fold.show()
    assert "north, held" not in fold._gain.data["name"]


def test_csv_holds_the_curves_and_the_record():
    fold, bench, _ = opened()
    fold.show()
    rows = list(csv.DictReader(io.StringIO(fold.handle({"do": "csv", "what": "gain"})["csv"])))
    assert len(rows) == len(bench.analysis.ac.frequencies)
    assert float(rows[0]["north_gain"]) == pytest.approx(abs(bench.analysis.ac.signals[1].dc_gain), rel=1e-6)
    rows = list(csv.DictReader(io.StringIO(fold.handle({"do": "csv", "what": "scope"})["csv"])))
    assert float(rows[0]["output_cell_1_V"]) == pytest.approx(bench.analysis.dc.output, abs=1e-6)
    assert len(list(csv.reader(io.StringIO(fold.handle({"do": "csv", "what": "noise"})["csv"])))) > 5


@pytest.mark.parametrize(
    "message",
    [{}, {"do": "page", "page": "x"}, {"do": "kind", "kind": "sine"}, {"do": "wave", "name": "nobody", "figure": "kind", "kind": "sine"},
     {"do": "duration", "text": "-1"}, {"do": "duration", "text": "1e9"}, {"do": "cable", "text": "-1p"}, {"do": "cable"},
     {"do": "frequency", "text": "often"}, {"do": "fit", "cell": 9, "value": 1e-12}, {"do": "fit", "cell": 0, "value": math.nan}],
)  # fmt: skip
def test_nonsense_from_a_browser_is_refused(message):
    fold, bench, _ = opened()
    before = bench.design
    with pytest.raises(InvalidQuantity):
        fold.handle(message)
    assert bench.design == before


def test_cures_is_a_generator_that_ends():
    steps = cures(Workbench(demo.design()).design, (80.0,))
    seen = 0
    try:
        while True:
            next(steps)
            seen += 1
    except StopIteration as end:
        assert isinstance(end.value, list) and seen <= len(end.value) + 1
