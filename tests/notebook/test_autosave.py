"""Saving without being asked: soon, in order, again after a failure, and never over somebody else's."""

from __future__ import annotations

import threading
import time

import pytest
from sumwright.errors import NotAllowed, StoreError
from sumwright.notebook.autosave import Autosave, Snapshot
from sumwright.notebook.desk import SET_ASIDE, Desk
from sumwright.notebook.people import Person
from sumwright.notebook.store import Store

DESIGN = {"title": "Vat"}


def desk_of(store, name="Ines", role="author"):
    return Desk(store, lambda: Person(name, role))


class Open:
    """A page with one sheet open, as the page slice would hold it."""

    def __init__(self, desk, key, delay=0.02):
        self.marks = []
        self.change = threading.Event()
        sheet = desk.sheet(key, 1)
        self.autosave = Autosave(
            lambda snapshot, revision: desk.save(key, 1, snapshot, revision), sheet.revision, self._told, delay=delay
        )

    def _told(self, mark):
        self.marks.append(mark)
        self.change.set()

    def set(self, x):
        self.autosave.changed(lambda: Snapshot({"x": x, "design": DESIGN}))

    def until(self, kind, timeout=10.0):
        end = time.monotonic() + timeout
        while self.autosave.mark.kind != kind:
            self.change.clear()
            if self.autosave.mark.kind != kind:
                assert self.change.wait(end - time.monotonic()), f"never {kind}: {self.marks}"


@pytest.fixture
def book(store):
    return store.new_notebook("Vat", "Ines", {"x": 0, "design": DESIGN})


def test_the_newest_of_many_changes_is_saved_and_the_mark_says_so(store, book):
    page = Open(desk_of(store), book.id)
    for k in range(100):
        page.set(k)
    assert page.autosave.wait(10)
    sheet = store.sheet(book.id, 1)
    assert sheet.state["x"] == 99
    assert sheet.revision < 20  # they rode along; a hundred changes are no hundred writes
    assert page.marks[0].kind == "saving"
    assert page.autosave.mark.kind == "saved" and page.autosave.mark.at == sheet.saved_at


def test_a_drag_that_does_not_end_is_saved_while_it_lasts(sqlite_store):
    """Each write waits for the first change it holds, not for the hand to rest."""
    book = sqlite_store.new_notebook("Vat", "Ines", {"x": 0})
    page = Open(desk_of(sqlite_store), book.id, delay=0.05)
    k = 0
    while sqlite_store.revision(book.id, 1)[0] < 4:
        k += 1
        assert k < 20_000
        page.set(k)
        time.sleep(0.002)


def test_a_store_that_fails_is_told_and_tried_until_it_works(sqlite_store, monkeypatch):
    book = sqlite_store.new_notebook("Vat", "Ines", {"x": 0})
    broken = threading.Event()
    broken.set()
    plain = Store.save

    def save(self, *args, **kwargs):
        if broken.is_set():
            raise StoreError("The disk is full.")
        return plain(self, *args, **kwargs)

    monkeypatch.setattr(Store, "save", save)
    monkeypatch.setattr("sumwright.notebook.autosave.RETRIES", (0.02, 0.05))
    page = Open(desk_of(sqlite_store), book.id)
    page.set(1)
    page.until("unsaved")
    mark = page.autosave.mark
    assert mark.why == "The disk is full." and mark.again > 0
    page.set(2)
    assert page.autosave.mark.at == mark.at  # not saved since the first change that is missing
    broken.clear()
    page.until("saved")
    assert sqlite_store.sheet(book.id, 1).state["x"] == 2


def test_a_state_that_cannot_be_made_is_told_too(sqlite_store):
    book = sqlite_store.new_notebook("Vat", "Ines", {"x": 0})
    page = Open(desk_of(sqlite_store), book.id)
    page.autosave.changed(lambda: Snapshot({"x": float("nan")}))
    page.until("unsaved")
    assert "cannot be written as JSON" in page.autosave.mark.why
    page.set(3)
    page.until("saved")


def test_two_people_on_one_sheet_and_the_second_takes_theirs(store, book):
    ines, tomas = Open(desk_of(store), book.id), Open(desk_of(store, "Tomas"), book.id)
    tomas.set("from Tomas")
    assert tomas.autosave.wait(10)
    ines.set("from Ines")
    ines.until("elsewhere")
    mark = ines.autosave.mark
    assert mark.theirs.saved_by == "Tomas" and mark.theirs.state["x"] == "from Tomas"
    ines.set("more from Ines")
    assert not ines.autosave.wait(0.2)
    assert store.sheet(book.id, 1).state["x"] == "from Tomas"  # nothing is written while the choice is open
    assert ines.autosave.take_theirs().state["x"] == "from Tomas"
    ines.set("on top of theirs")
    assert ines.autosave.wait(10)
    assert store.sheet(book.id, 1).state["x"] == "on top of theirs"


def test_two_people_on_one_sheet_and_the_second_keeps_hers_with_theirs_set_aside(store, book):
    desk = desk_of(store)
    ines, tomas = Open(desk, book.id), Open(desk_of(store, "Tomas"), book.id)
    tomas.set("from Tomas")
    assert tomas.autosave.wait(10)
    ines.set("from Ines")
    ines.until("elsewhere")
    desk.set_aside(ines.autosave.mark.theirs)
    ines.autosave.keep_mine()
    assert ines.autosave.wait(10)
    assert store.sheet(book.id, 1).state["x"] == "from Ines"
    (entry,) = store.entries(book.id)
    assert entry.body["title"].startswith(f"{SET_ASIDE}: as Tomas saved it") and entry.body["design"] == DESIGN


def test_a_third_save_between_the_conflict_and_keeping_mine_is_a_conflict_again(store, book):
    ines, tomas = Open(desk_of(store), book.id), Open(desk_of(store, "Tomas"), book.id)
    tomas.set(1)
    assert tomas.autosave.wait(10)
    ines.set(2)
    ines.until("elsewhere")
    tomas.set(3)
    assert tomas.autosave.wait(10)
    ines.change.clear()
    ines.autosave.keep_mine()
    ines.until("elsewhere")
    assert store.sheet(book.id, 1).state["x"] == 3


def test_a_closed_page_still_gets_its_last_change_to_the_disk(store, book):
    page = Open(desk_of(store), book.id, delay=60)
    page.set("last")
    page.autosave.close()
    assert page.autosave.wait(10)
    assert store.sheet(book.id, 1).state["x"] == "last"
    page.set("after the end")
    assert page.autosave.wait(10)
    assert store.sheet(book.id, 1).state["x"] == "last"


@pytest.mark.parametrize(
    ("role", "allowed"),
    [
        ("reader", set()),
        ("author", {"save", "append", "new notebook", "new sheet", "rename", "import", "set aside"}),
        ("keeper", {"save", "append", "new notebook", "new sheet", "rename", "import", "set aside", "archive"}),
    ],
)
def test_what_each_role_may_is_decided_at_the_desk(sqlite_store, role, allowed):
    book = sqlite_store.new_notebook("Vat", "Ines", {"x": 0, "design": DESIGN})
    sqlite_store.append(book.id, "note", {"text": "there"}, "Ines")
    desk = desk_of(sqlite_store, "Kim", role)
    data = desk.export(book.id)
    before = sqlite_store.whole(book.id)
    acts = {
        "save": lambda: desk.save(book.id, 1, Snapshot({"x": 1, "design": DESIGN}), desk.revision(book.id, 1)[0]),
        "append": lambda: desk.append(book.id, "note", {"text": "x"}),
        "new notebook": lambda: desk.new_notebook("N", {}),
        "new sheet": lambda: desk.new_sheet(book.id, "S", {}),
        "rename": lambda: desk.rename(book.id, "Other"),
        "import": lambda: desk.import_notebook(data),
        "set aside": lambda: desk.set_aside(desk.sheet(book.id, 1)),
        "archive": lambda: desk.archive(book.id),
    }
    for name, act in acts.items():
        if name in allowed:
            act()
        else:
            with pytest.raises(NotAllowed, match=f"Kim is signed in as {role}"):
                act()
    if not allowed:
        assert sqlite_store.whole(book.id) == before
    assert desk.search("there") or "archive" in allowed
    assert desk.verify(book.id) == []


def test_a_role_taken_away_counts_at_the_next_act(sqlite_store):
    role = ["author"]
    desk = Desk(sqlite_store, lambda: Person("Kim", role[0]))
    book = desk.new_notebook("N", {})
    role[0] = "reader"
    with pytest.raises(NotAllowed):
        desk.append(book.id, "note", {"text": "x"})
    assert not desk.may("write") and desk.may("read")
