"""The fold Bench without a browser: what it shows, what it takes, what it refuses."""

import base64

import numpy as np
import pytest
from sumwright.engine.operating_point import operating_point
from sumwright.errors import SumwrightError
from sumwright.jobs import Jobs
from sumwright.model import edits
from sumwright.model.workbench import Workbench
from sumwright.views.bench import Bench
from sumwright.views.fold import Context
from support.bench_stages import broken, stage

DESIGN = stage()


class Said(list):
    def __call__(self, text, bad=False):
        self.append(text)


@pytest.fixture
def fold():
    said = Said()
    bench = Workbench(DESIGN, on="north")
    fold = Bench(Context(bench, Jobs(), lambda: None, lambda: None, said, lambda action: None, {}))
    fold.said = said
    yield fold
    fold.close()


def fill(fold, board):
    """Type what this board reads at every step that reads the output."""
    for i, row in enumerate(fold.show()["rows"]):
        if row["probe"] == "output" and row["unit"] == "V":
            y = operating_point(board, row["apply"]).output
            fold.handle({"do": "reading", "row": i, "text": f"{y:.4f}"})


def test_it_shows_the_run_before_anything_is_read(fold):
    shown = fold.show()
    assert shown["taken"] == 0
    assert shown["told"]["suspects"][0]["fault"] == "none"
    assert set(shown["told"]["next"]) == set(DESIGN.signal_names)
    assert all(w["value"] is None for w in shown["fit"])


def test_a_wrong_leg_is_seen_in_weights_suspects_and_what_brings_it_home(fold):
    fill(fold, broken(DESIGN, "leg wrong value", "south", 1.3))
    shown = fold.show()
    words = {w["name"]: w["word"] for w in shown["fit"]}
    assert words["south"] == "out"
    first = shown["told"]["suspects"][0]
    assert (first["fault"], first["part"]) in {("leg wrong value", "south"), ("source resistance high", "south")}
    assert shown["told"]["tell"]
    mend = shown["told"]["cure"]
    assert (mend["part"], mend["fault"]) == (first["part"], first["fault"])
    assert shown["home"] == []
    assert {c["name"] for c in shown["software"]} == {*DESIGN.signal_names, "offset"}


def test_the_board_as_built_goes_onto_the_sheet_and_undo_gives_the_drawing_back(fold):
    board = broken(DESIGN, "leg wrong value", "south", 1.3)
    fill(fold, board)
    fold.show()
    fold.handle({"do": "as built"})
    made = operating_point(fold.workbench.design).weights
    np.testing.assert_allclose(made, operating_point(board).weights, rtol=2e-3)
    fold.workbench.undo()
    assert fold.workbench.design.cells == DESIGN.cells


def test_a_board_with_a_dead_op_amp_is_not_taken_as_built(fold):
    for i, row in enumerate(fold.show()["rows"]):
        if row["probe"] == "output" and row["unit"] == "V":
            fold.handle({"do": "reading", "row": i, "text": "0"})
    fold.show()
    with pytest.raises(SumwrightError, match="mend that first"):
        fold.handle({"do": "as built"})
    assert fold.workbench.design.cells == DESIGN.cells


def test_the_next_reading_becomes_a_row_to_type_in(fold):
    shown = fold.show()
    reply = fold.handle({"do": "next"})
    after = fold.show()
    assert after["now"] == reply["focus"]
    assert after["rows"][after["now"]]["apply"] == pytest.approx(list(shown["told"]["next"].values()))


@pytest.mark.parametrize(
    "message",
    [
        {}, {"do": "fly"}, {"do": "reading", "row": -1, "text": "1"}, {"do": "reading", "row": 0}, {"do": "reading", "row": 999, "text": "1"},
        {"do": "reading", "row": 0, "text": "<b>1</b>"}, {"do": "meter", "text": "fine"}, {"do": "paste", "row": 0, "text": ""},
        {"do": "file", "text": "north,output\n1,x\n"}, {"do": "go", "row": 10**6}, {"do": "keep"}, {"do": "as built"},
        {"do": "capture", "step": "fit", "map": {}}, {"do": "capture", "step": "part", "data": "AAAA", "first": False, "last": False},
        {"do": "capture", "step": "part", "data": "no base64!", "first": True, "last": True}, {"do": "reading", "row": 0, "text": "1" * 100},
    ],
)  # fmt: skip
def test_what_cannot_be_done_is_refused_in_a_sentence(fold, message):
    fold.show()
    with pytest.raises(SumwrightError):
        fold.handle(message)
    assert fold.show()["taken"] == 0


def test_the_csv_can_be_opened_again(fold):
    fill(fold, DESIGN)
    fold.show()
    csv = fold.handle({"do": "csv"})["csv"]
    count = fold.show()["taken"]
    fold.handle({"do": "clear"})
    assert fold.show()["taken"] == 0
    fold.handle({"do": "file", "text": csv})
    assert fold.show()["taken"] == count


def test_a_capture_comes_in_parts_is_mapped_by_name_and_fitted(fold):
    fold.figures()
    t = np.arange(4000) * 1e-5
    north, tare = 5 + 4 * np.sin(2 * np.pi * 90 * t), 3 + 2 * np.sign(np.sin(2 * np.pi * 31 * t))
    point = operating_point(DESIGN)
    y = point.offset + point.contributions[1:4].sum() + point.weights[0] * north + point.weights[4] * tare
    lines = ["scope of our own", "date,today", "time (s),North (V),tare (V),ch 3 (mV)"]
    lines += [f"{a:.5f},{b:.5f},{c:.5f},{1e3 * d:.3f}" for a, b, c, d in zip(t, north, tare, y, strict=True)]
    data = "\n".join(lines).encode()
    half = len(data) // 2
    for k, part in enumerate((data[:half], data[half:])):
        fold.handle(
            {"do": "capture", "step": "part", "data": base64.b64encode(part).decode(), "first": k == 0, "last": k == 1}
        )
    about = fold.show()["capture"]["about"]
    assert about["rows"] == 4000
    assert about["map"] == {"North": "north", "tare": "tare", "ch 3": "output"}
    fold.handle({"do": "capture", "step": "fit", "map": about["map"]})
    found = fold.show()["capture"]["fit"]
    np.testing.assert_allclose(found["value"][:2], [point.weights[0], point.weights[4]], rtol=1e-3)
    assert len(fold.capture._measured.data["x"]) > 500


def test_undo_after_clear_gives_the_readings_back_and_leaves_the_design(fold):
    bench = fold.workbench
    bench.edit(edits.with_value, "north", 1.5)
    fill(fold, DESIGN)
    count, design = fold.show()["taken"], bench.design
    fold.handle({"do": "clear"})
    assert fold.show()["taken"] == 0 and fold.show()["gone"]
    assert bench.undo()
    assert fold.show()["taken"] == count and not fold.show()["gone"]
    assert bench.design == design
    while bench.undo() and bench.design == design:  # the readings, one step each, then the change before them
        pass
    assert bench.design != design and fold.show()["taken"] == 0


def test_a_change_of_the_design_after_clear_is_undone_first(fold):
    fill(fold, DESIGN)
    count = fold.show()["taken"]
    fold.handle({"do": "clear"})
    row = next(i for i, r in enumerate(fold.show()["rows"]) if r["probe"] == "output" and r["unit"] == "V")
    fold.handle({"do": "reading", "row": row, "text": "0.1234"})
    fold.workbench.edit(edits.with_value, "north", 1.5)
    fold.workbench.undo()
    assert fold.show()["taken"] == 1 and fold.show()["rows"][row]["text"] == "0.1234"
    fold.workbench.undo()  # the reading
    assert fold.show()["taken"] == 0
    fold.workbench.undo()  # and clear
    assert fold.show()["taken"] == count


def test_a_capture_that_cannot_be_read_is_called_by_its_own_name(fold):
    part = base64.b64encode(b"nothing of use\n").decode()
    with pytest.raises(SumwrightError, match=r"“gate scope\.csv” has no table"):
        fold.handle(
            {"do": "capture", "step": "part", "data": part, "first": True, "last": True, "name": "gate scope.csv"}
        )
