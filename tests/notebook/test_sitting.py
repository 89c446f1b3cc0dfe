"""A session's place in the notebook, without a server: what is stored comes back, what is not of ours is refused."""

from __future__ import annotations

import dataclasses
import gc
import json
import threading
import weakref

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sumwright.errors import SumwrightError
from sumwright.files.design import design_document
from sumwright.model import demo, edits
from sumwright.model.history import Snapshot as Step
from sumwright.model.sums import UNTITLED
from sumwright.notebook.desk import Desk
from sumwright.notebook.people import Person
from sumwright.notebook.text import other_format
from sumwright.page import Page
from sumwright.sitting import STATE_FORMAT, STEPS_MOST, Sitting, read_history, read_state, state_of, step_document


@pytest.fixture
def desk(sqlite_store):
    return Desk(sqlite_store, lambda: Person("Ines", "keeper"))


def page_of(sitting):
    page = Page(sitting.workbench, sitting.may)
    page.sit(sitting)
    return page


def moved(sitting, *values):
    for value in values:
        sitting.workbench.edit(edits.with_value, "north", value)
    assert sitting.autosave.wait(10)


def test_the_state_comes_back_with_its_history(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    moved(sitting, 1.0, 2.0, 3.0)
    sitting.workbench.plug("east", True)
    sitting.workbench.follow_weights("exact")
    sitting.workbench.symbols = "IEEE 315"
    sitting.workbench.undo()
    assert sitting.autosave.wait(10)
    again = Sitting(desk, sitting.key, 1)
    assert again.problem == ""
    assert again.workbench.snapshot == sitting.workbench.snapshot
    assert again.workbench.symbols == "IEEE 315"
    assert again.workbench.history.past == sitting.workbench.history.past
    assert again.workbench.history.future == sitting.workbench.history.future
    sitting.workbench.edit(edits.with_value, "north", 4.0)  # and loaded anew at once, before its turn to be saved
    assert not sitting.autosave.clean
    assert Sitting(desk, sitting.key, 1).workbench.design == sitting.workbench.design
    page.close()


def test_readings_of_the_bench_are_saved_without_being_asked_and_come_back(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    page.turn_to("bench")
    bench = page.folds["bench"]
    row = next(i for i, r in enumerate(bench.show()["rows"]) if r["probe"] == "output" and r["unit"] == "V")
    bench.handle({"do": "reading", "row": row, "text": "0.5219"})
    assert not sitting.autosave.clean and sitting.autosave.wait(10)
    again = page_of(Sitting(desk, sitting.key, 1))
    again.turn_to("bench")
    assert again.folds["bench"].show()["rows"][row]["text"] == "0.5219"
    bench.handle({"do": "clear"})
    assert sitting.autosave.wait(10)
    assert Sitting(desk, sitting.key, 1).workbench.readings["taken"] == []
    page.close()
    again.close()


def test_a_single_change_is_kept_with_its_undo_step_at_the_first_save(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    moved(sitting, 1.0)
    assert Sitting(desk, sitting.key, 1).workbench.undo()
    page.close()


def test_a_title_that_no_notebook_may_have_does_not_keep_the_sheet_from_being_saved(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    sitting.workbench.title = "a\u202eb"
    assert sitting.autosave.wait(10)
    assert desk.notebook(sitting.key).title == "Untitled sheet"
    page.close()


def test_a_notebook_begun_without_a_title_takes_the_first_one_its_sheet_gets(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    sitting.workbench.put(dataclasses.replace(sitting.workbench.design, title=UNTITLED))
    assert sitting.autosave.wait(10) and desk.notebook(sitting.key).title == UNTITLED
    for title in ("Mill race", "Mill race, two gates"):
        sitting.workbench.edit(lambda design, text: dataclasses.replace(design, title=text), title)
        assert sitting.autosave.wait(10) and desk.notebook(sitting.key).title == "Mill race"
    page.close()


def test_history_is_kept_to_its_newest_steps(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    moved(sitting, *[k / 100 for k in range(STEPS_MOST + 30)])
    again = Sitting(desk, sitting.key, 1)
    assert again.workbench.history.past == sitting.workbench.history.past[-STEPS_MOST:]
    page.close()


def test_what_is_looked_at_by_a_reader_is_not_kept(sqlite_store, desk):
    key = desk.new_notebook("N", state_of(Sitting(desk).workbench)).id
    reader = Sitting(Desk(sqlite_store, lambda: Person("Rea", "reader")), key, 1)
    page = page_of(reader)
    reader.workbench.edit(edits.with_value, "north", 1.5)
    assert reader.autosave.clean and page.saved["state"] == "reader"
    assert sqlite_store.sheet(key, 1).revision == 1
    page.close()


def test_an_archived_notebook_is_shown_and_not_written(desk):
    key = desk.new_notebook("N", state_of(Sitting(desk).workbench)).id
    desk.archive(key)
    sitting = Sitting(desk, key, 1)
    page = page_of(sitting)
    sitting.workbench.edit(edits.with_value, "north", 1.5)
    assert sitting.problem == "" and sitting.autosave.clean and "archived" in page.saved["why"]
    page.close()


def test_a_first_entry_and_a_first_change_at_once_make_one_notebook(sqlite_store, desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    threads = [threading.Thread(target=sitting.begin_notebook) for _ in range(4)]
    for t in threads:
        t.start()
    moved(sitting, 1.0)
    for t in threads:
        t.join()
    moved(sitting, 2.0)
    assert len(sqlite_store.notebooks()) == 1
    assert sitting.autosave.mark.kind == "saved"
    page.close()


def test_a_closed_session_is_collected(desk):
    sitting = Sitting(desk)
    page = page_of(sitting)
    page.turn_to("log")
    moved(sitting, 1.0)
    gone = [weakref.ref(sitting), weakref.ref(page), weakref.ref(sitting.workbench), weakref.ref(page.folds["log"])]
    page.close()
    del sitting, page
    for _ in range(50):  # what was under way in a thread still holds on to it for a moment
        gc.collect()
        if not any(ref() for ref in gone):
            break
        threading.Event().wait(0.1)
    assert [ref() for ref in gone] == [None] * 4


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"format": "other"}, "'other'; it must be 'sumwright-sheet/1'"),
        ({"symbols": "crayon"}, "crayon"),
        ({"unplugged": ["nobody"]}, "cables out of signals"),
        ({"unplugged": "north"}, "cables out of signals"),
        ({"follow": []}, "follow of the stored sheet"),
        ({"design": None}, ""),
        ({"design": {"signals": []}}, ""),
    ],
)
def test_a_stored_sheet_that_is_none_is_refused_in_one_sentence(change, says):
    whole = {"format": "sumwright-sheet/1", **step_document(Step(demo.design())), "symbols": "IEC 60617"}
    read_state(whole)
    with pytest.raises(SumwrightError) as caught:
        read_state(whole | change)
    assert says in str(caught.value)


_ANY = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=6),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
    max_leaves=6,
)


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(data=st.data())
def test_any_value_anywhere_in_a_stored_sheet_is_taken_or_refused(data):
    whole = {"format": "sumwright-sheet/1", **step_document(Step(demo.design())), "symbols": "IEC 60617"}
    held = json.loads(json.dumps(whole))
    place = held
    while isinstance(place, dict | list) and place:
        key = data.draw(st.sampled_from(sorted(place) if isinstance(place, dict) else range(len(place))))
        if data.draw(st.booleans()) or not isinstance(place[key], dict | list) or not place[key]:
            place[key] = data.draw(_ANY)
            break
        place = place[key]
    try:
        step, symbols = read_state(held)
    except SumwrightError as error:
        assert str(error)
    else:
        assert design_document(step.design)["signals"] and symbols


def test_a_file_of_a_newer_version_is_refused_whole_and_says_so(sqlite_store, desk):
    sitting = Sitting(desk)
    good = state_of(sitting.workbench)
    for key in (desk.new_notebook("N", good | {"format": "sumwright-sheet/2"}).id, desk.new_notebook("N", good).id):
        data = desk.export(key)
        count = len(sqlite_store.notebooks())
        if sqlite_store.sheet(key, 1).state["format"] == STATE_FORMAT:
            assert sitting.import_notebook(data).title == "N (copy)"
            continue
        with pytest.raises(SumwrightError, match=r"made by a newer version of Sumwright: .* Bring this one up to date"):
            sitting.import_notebook(data)
        assert len(sqlite_store.notebooks()) == count
    assert "must be" in str(other_format("The file", "other/2", "sumwright-notebook/1"))
    assert "newer" in str(other_format("The file", "sumwright-notebook/2", "sumwright-notebook/1"))


@settings(max_examples=100, deadline=None)
@given(st.dictionaries(st.sampled_from(["past", "future", "x"]), _ANY | st.lists(st.text(max_size=20), max_size=4)))
def test_any_history_is_read_or_left_out(held):
    assert read_history(held) == ([], [])


def test_readings_of_either_side_outlive_a_conflict(desk):
    """Kept mine: theirs go to the log, those of the output as a file and the others as a note. Taken theirs: mine are one undo away."""

    def taken(probe, unit, value):
        return {
            "apply": {"north": 1.0},
            "probe": probe,
            "unit": unit,
            "text": f"{value}",
            "value": value,
            "uncertainty": None,
        }

    first = Sitting(desk)
    page = page_of(first)
    moved(first, 1.0)
    second = Sitting(desk, first.key, 1)
    other = page_of(second)
    theirs = {
        "meter": "0.05 % + 0.5 mV",
        "taken": [taken("output", "V", 1.25), taken("current into the + rail", "A", 0.002)],
        "asked": [],
    }
    mine = {**theirs, "taken": [taken("output", "V", 3.5)]}
    first.workbench.readings = theirs
    assert first.autosave.wait(10)

    def conflict(sitting):
        for _ in range(200):
            if sitting.autosave.mark.theirs is not None:
                return
            threading.Event().wait(0.05)
        raise AssertionError("no conflict")

    second.workbench.readings = mine
    conflict(second)
    second.keep_mine()
    assert second.autosave.wait(10)
    by_kind = {e.kind: e.body for e in desk.entries(first.key)}
    assert by_kind["readings"]["csv"] == "north,output\n1,1.25\n"
    assert "current into the + rail: 0.002" in by_kind["note"]["text"]
    assert desk.sheet(first.key, 1).state["readings"] == mine
    first.workbench.readings = {**theirs, "taken": [taken("output", "V", 9.0)]}
    conflict(first)
    first.take_theirs()
    assert first.workbench.readings == mine
    first.workbench.undo()
    assert [t["value"] for t in first.workbench.readings["taken"]] == [3.5, 9.0]  # mine last: it counts
    page.close()
    other.close()
