"""The fold Budget without a browser: terms, boards coarse and refined, advice, op amps, holding, export."""

import asyncio
import csv
import io
import pickle
import types
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from sumwright.engine.boards import in_steps, monte_carlo
from sumwright.engine.catalogue import catalogue
from sumwright.engine.stage import replace
from sumwright.errors import InvalidDesign, InvalidQuantity
from sumwright.files.op_amps import write_op_amps
from sumwright.model import demo, edits
from sumwright.model.workbench import Workbench
from sumwright.views.budget import Budget
from sumwright.views.fold import Context
from sumwright.views.wire import packed


class Jobs:
    """Stands in for the process: runs a job's steps when told to."""

    def __init__(self):
        self.jobs, self.stopped = {}, []

    def start(self, key, function, *args, progress, done, failed):
        self.jobs[key] = (function, pickle.loads(pickle.dumps(args)), progress, done)

    def running(self, key):
        return key in self.jobs

    def stop(self, key):
        self.stopped.append(key)
        self.jobs.pop(key, None)

    def run(self, key):
        function, args, progress, done = self.jobs.pop(key)
        steps, seen = function(*args), []
        while True:
            try:
                seen.append(pickle.loads(pickle.dumps(next(steps))))
                progress(seen[-1])
            except StopIteration as end:
                done(pickle.loads(pickle.dumps(end.value)))
                return seen


def opened(design=None, may=lambda action: None):
    bench, jobs, said = Workbench(design or demo.design(), on="north"), Jobs(), []
    fold = Budget(Context(bench, jobs, lambda: None, lambda: None, lambda text, bad=False: said.append(text), may, {}))
    fold.figures()
    return fold, bench, jobs


def in_loop(function):
    """Run it where an event loop is, as the server does; in a thread, since a browser's tests may hold this one's."""

    async def go():
        return function()

    with ThreadPoolExecutor(1) as pool:
        return pool.submit(lambda: asyncio.run(go())).result()


def test_the_terms_are_those_of_the_engine_and_add_up():
    fold, bench, _ = opened()
    shown = fold.show()
    budget = bench.analysis.errors["highest"]
    assert shown["point"] == "highest"
    assert sum(r[4] for r in shown["terms"]) == pytest.approx(1.0)
    assert sum(r[2] for r in shown["terms"]) == pytest.approx(budget.limit_effects.sum())
    assert sum(r[5] for r in shown["terms"]) == pytest.approx(budget.shift)
    assert [r[4] for r in shown["terms"]] == sorted((r[4] for r in shown["terms"]), reverse=True)
    packed(shown)


def test_coarse_boards_are_live_and_follow_the_present_point():
    fold, bench, _ = opened()
    fold.handle({"do": "point", "point": "present"})
    first = fold.show()["boards"]
    assert first["draws"] == 8000
    bench.edit(edits.with_value, "north", 1.0)
    second = fold.show()["boards"]
    assert second["mean"] != first["mean"]
    assert second["mean"] == pytest.approx(bench.analysis.errors["present"].shift, abs=3e-3)


def test_corners_do_not_move_with_the_hand_so_nothing_is_drawn_anew():
    fold, bench, _ = opened()
    before = fold.show()["boards"]
    top = fold._bins.data["top"]
    bench.edit(edits.with_value, "north", 1.0)
    assert fold.show()["boards"] == before and fold._bins.data["top"] is top


def test_boards_are_refined_by_a_job_and_are_the_same_boards():
    fold, bench, jobs = opened()

    def go():
        fold.show()
        fold.handle({"do": "size", "size": 200_000})
        fold.show()
        fold._refine()
        steps = jobs.run("budget boards")
        return steps, fold.show()

    steps, shown = in_loop(go)
    assert [s.statistics.draws for s in steps] == [64000, 192000]
    assert shown["boards"]["draws"] == 200_000
    direct = monte_carlo(bench.analysis, 200_000, 1, points=("highest",))["highest"]
    assert shown["boards"]["mean"] == direct.mean and shown["boards"]["yield"] == direct.yield_
    assert float(np.sum(fold._bins.data["share"])) == pytest.approx(100.0, abs=0.01)


def test_stop_stops_and_a_change_begins_anew():
    fold, _, jobs = opened()

    def go():
        fold.show()
        fold._refine()
        assert fold.show()["running"]
        fold.handle({"do": "stop"})
        assert not fold.show()["running"] and "budget boards" in jobs.stopped
        fold._refine()  # a late timer changes its mind
        return fold.show()["running"]

    assert not in_loop(go)


def test_steps_are_one_stream_of_boards():
    design = demo.design()
    bench = Workbench(design)
    steps = in_steps(bench.design, (), "highest", 30_000, 3, np.linspace(-0.1, 0.1, 11), first=8000)
    try:
        while True:
            next(steps)
    except StopIteration as end:
        last = end.value
    direct = monte_carlo(bench.analysis, 30_000, 3, points=("highest",))["highest"]
    assert last.statistics == direct and last.counts.sum() <= 30_000


def test_advice_names_parts_and_all_resistors_can_be_changed_in_one_step():
    design = replace(demo.design(), target=replace(demo.design().target, accuracy=0.015))
    fold, bench, _ = opened(design)
    fold.handle({"do": "page", "page": "tighten"})
    more = fold.show()["more"]
    assert more["plan"].wanted == 0.015
    assert more["trim"].software < more["trim"].untrimmed
    fold.handle({"do": "tolerance", "tolerance": 0.0001})
    assert bench.design.resistor.tolerance == 0.0001
    assert bench.undo() and bench.design.resistor.tolerance == design.resistor.tolerance
    bench.put(replace(design, target=replace(design.target, accuracy=None)))
    assert "Type the accuracy" in fold.show()["more"]["problem"]


def test_every_op_amp_is_tried_and_one_is_taken_in_one_step():
    fold, bench, jobs = opened()

    def go():
        fold.handle({"do": "page", "page": "op amps"})
        fold.show()
        jobs.run("op amps")
        return fold.show()["more"]

    more = in_loop(go)
    assert more["tried"] == more["of"] == len(catalogue())
    packed(more)
    fold.handle({"do": "entry", "name": "TL072"})
    entry = fold.show()["more"]["entry"]
    assert len(entry["rows"]) == 30 and all(source for *_, source in entry["rows"])
    fold.handle({"do": "entry", "name": "TL072"})  # once more folds it away
    assert fold.show()["more"]["entry"] is None
    fold.handle({"do": "take", "name": "TL072"})
    assert bench.design.op_amp.name == "TL072"
    assert bench.undo() and bench.design.op_amp.name == demo.design().op_amp.name
    with pytest.raises(InvalidQuantity, match="'nothing'"):
        fold.handle({"do": "take", "name": "nothing"})


def test_a_list_of_ones_own_joins_and_a_bad_one_changes_nothing():
    fold, bench, _ = opened()
    mine = replace(catalogue()[0].op_amp, name="mine")
    fold.handle({"do": "own", "text": write_op_amps([mine])})
    assert fold.show()["more"]["own"] == 1
    fold.handle({"do": "take", "name": "mine"})
    assert bench.design.op_amp == mine
    with pytest.raises(InvalidDesign):
        fold.handle({"do": "own", "text": "rubbish"})
    assert fold.show()["more"]["own"] == 1
    # the list given back is one that can be given; a name of the catalogue's now means the person's figures
    text = fold.handle({"do": "csv", "what": "list"})["csv"].replace("mine", "TL072").replace(",", ";")
    assert "1 op amp " in fold.handle({"do": "own", "text": text})["said"]
    assert fold.show()["more"]["of"] == len(catalogue())
    fold.handle({"do": "take", "name": "TL072"})
    assert bench.design.op_amp == replace(mine, name="TL072")


def test_who_may_not_change_the_sheet_may_not_take():
    def may(action):
        raise PermissionError(action)

    fold, bench, _ = opened(may=may)
    with pytest.raises(PermissionError):
        fold.handle({"do": "take", "name": "TL072"})
    assert bench.design.op_amp.name == demo.design().op_amp.name


def test_heat_and_mishaps_are_told():
    fold, _, _ = opened()
    fold.handle({"do": "page", "page": "heat"})
    more = fold.show()["more"]
    assert len(more["past"]) == len(demo.design().signals)
    packed(more)


def test_margins_are_compared_with_the_stage_held():
    fold, bench, _ = opened()
    fold.handle({"do": "page", "page": "compare"})
    assert fold.show()["more"]["held"] is None
    fold.handle({"do": "hold"})
    bench.edit(lambda d: replace(d, supply=replace(d.supply, high=d.supply.high + 1.0)))
    rows = {r[0]: r for r in fold.show()["more"]["rows"]}
    assert len(fold._held.data["x"]) == 73 and max(fold._held.data["y"]) == 1.0
    assert rows["Swing to + rail"][6] == pytest.approx(0.95, abs=0.05)  # a volt of rail, less its tolerance
    fold.handle({"do": "let go"})
    assert fold.show()["more"]["held"] is None and len(fold._held.data["x"]) == 0


def test_csv_holds_what_is_shown():
    fold, bench, _ = opened()
    fold.show()
    rows = list(csv.DictReader(io.StringIO(fold.handle({"do": "csv", "what": "terms"})["csv"])))
    budget = bench.analysis.errors["highest"]
    assert [r["term"] for r in rows] == [t.name for t in budget.terms]
    assert [float(r["limit_effect_V"]) for r in rows] == [t.limit_effect for t in budget.terms]
    bins = list(csv.DictReader(io.StringIO(fold.handle({"do": "csv", "what": "boards"})["csv"])))
    assert sum(float(r["share_percent"]) for r in bins) == pytest.approx(100.0, abs=0.1)


@pytest.mark.parametrize(
    "message",
    [{}, {"do": "fly"}, {"do": "point", "point": "middle"}, {"do": "size", "size": 5}, {"do": "page", "page": 3},
     {"do": "tolerance", "tolerance": "1 %"}, {"do": "tolerance", "tolerance": -1}, {"do": "take"}, {"do": "csv", "what": "all"}],
)  # fmt: skip
def test_nonsense_from_a_browser_is_refused(message):
    fold, bench, _ = opened()
    before = bench.design
    with pytest.raises(InvalidQuantity):
        fold.handle(message)
    assert bench.design == before


def test_without_an_accuracy_there_is_no_band_and_no_yield():
    fold, bench, _ = opened(replace(demo.design(), target=replace(demo.design().target, accuracy=None)))
    shown = fold.show()
    assert shown["accuracy"] is None and shown["boards"]["yield"] is None and not fold._band.visible
    fold.handle({"do": "page", "page": "tighten"})
    assert "accuracy" in fold.show()["more"]["problem"]
    assert isinstance(bench, Workbench) and isinstance(fold.figures, types.MethodType)
