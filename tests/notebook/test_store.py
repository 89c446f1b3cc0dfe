"""The store keeps what it is given, on both databases, and shows any later change."""

from __future__ import annotations

import hashlib
import json
import threading

import pytest
from sqlalchemy import create_engine, text
from sumwright.errors import StoreError
from sumwright.notebook import migrations
from sumwright.notebook.entries import make_entry
from sumwright.notebook.store import SheetConflict, Store, _engine
from sumwright.notebook.text import InvalidText

DESIGN = {"title": "Vat level", "signals": [{"name": "probe", "weight": 1.0}], "op_amp": {"name": "BX-2 dual"}}


@pytest.fixture
def book(store):
    return store.new_notebook("Vat level", "Ines", {"design": DESIGN})


def test_a_new_notebook_has_one_sheet_that_holds_what_was_given(store, book):
    sheet = store.sheet(book.id, 1)
    assert sheet.state == {"design": DESIGN}
    assert (sheet.revision, sheet.saved_by, book.sheets) == (1, "Ines", ((1, "Sheet 1"),))


def test_a_second_store_on_the_same_address_sees_everything(store, book, url):
    store.append(book.id, "note", {"text": "first"}, "Ines")
    other = Store(url)
    assert [e.body["text"] for e in other.entries(book.id)] == ["first"]
    assert other.notebook(book.id) == store.notebook(book.id)
    other.close()


def test_saving_counts_up_and_keeps_state_and_history(store, book):
    revision, _ = store.save(book.id, 1, {"x": 0.1}, "Tomas", revision=1, history={"undo": [1, 2]})
    assert revision == 2
    store.save(book.id, 1, {"x": 0.2}, "Tomas", revision=2)  # no history given: the kept one stays
    sheet = store.sheet(book.id, 1)
    assert (sheet.state, sheet.history, sheet.revision, sheet.saved_by) == ({"x": 0.2}, {"undo": [1, 2]}, 3, "Tomas")


def test_a_save_from_an_old_revision_writes_nothing_and_brings_theirs(store, book):
    store.save(book.id, 1, {"x": "theirs"}, "Tomas", revision=1)
    with pytest.raises(SheetConflict) as caught:
        store.save(book.id, 1, {"x": "mine"}, "Ines", revision=1)
    assert caught.value.theirs.state == {"x": "theirs"}
    assert caught.value.theirs.saved_by == "Tomas"
    assert store.sheet(book.id, 1).state == {"x": "theirs"}


def test_of_many_saves_from_one_revision_exactly_one_wins(store, book):
    outcomes = []

    def save(k):
        try:
            store.save(book.id, 1, {"x": k}, f"person {k}", revision=1)
            outcomes.append(k)
        except SheetConflict:
            pass

    threads = [threading.Thread(target=save, args=(k,)) for k in range(8)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    assert len(outcomes) == 1
    assert store.sheet(book.id, 1).state == {"x": outcomes[0]}


def test_entries_appended_at_once_form_one_unbroken_chain(store, book):
    def write(k):
        for j in range(5):
            store.append(book.id, "note", {"text": f"{k}-{j}"}, f"person {k}")

    threads = [threading.Thread(target=write, args=(k,)) for k in range(4)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    entries = store.entries(book.id)
    assert [e.number for e in entries] == list(range(1, 21))
    assert {e.body["text"] for e in entries} == {f"{k}-{j}" for k in range(4) for j in range(5)}
    assert store.verify(book.id) == []


def test_the_hash_is_the_documented_one(store, book):
    """SHA-256 (FIPS 180-4) of the canonical JSON, computed here with hashlib alone."""
    entry = store.append(book.id, "decision", {"text": "One op amp: 24,9 kΩ"}, "Ines", sheet=1)
    spelled = (
        '{"at":"' + entry.at + '","author":"Ines","body":{"text":"One op amp: 24,9 kΩ"},"format":"sumwright-entry/1",'
        '"kind":"decision","notebook":"' + book.id + '","number":1,"previous":"' + "0" * 64 + '","sheet":1}'
    )
    assert entry.sha256 == hashlib.sha256(spelled.encode("utf-8")).hexdigest()
    second = store.append(book.id, "note", {"text": "x"}, "Ines")
    assert second.previous == entry.sha256


@pytest.mark.parametrize(
    "tampering",
    [
        'UPDATE entries SET body = \'{"text":"other"}\' WHERE number = 2',
        "UPDATE entries SET author = 'Tomas' WHERE number = 2",
        "UPDATE entries SET at = '2020-01-01T00:00:00.000000Z' WHERE number = 2",
        "UPDATE entries SET kind = 'decision' WHERE number = 2",
        "UPDATE entries SET sheet = 1 WHERE number = 2",
        "UPDATE entries SET previous = sha256 WHERE number = 2",
        "DELETE FROM entries WHERE number = 2",
        "DELETE FROM entries WHERE number = 3",
        "DELETE FROM entries",
    ],
)
def test_any_later_change_is_found(store, book, url, tampering):
    for k in range(3):
        store.append(book.id, "note", {"text": f"note {k}"}, "Ines")
    assert store.verify(book.id) == []
    engine = _engine(url)
    with engine.begin() as connection:  # as somebody with the whole database in hand would
        if engine.dialect.name == "postgresql":
            connection.execute(text("ALTER TABLE entries DISABLE TRIGGER ALL"))
        else:
            connection.execute(text("DROP TRIGGER entries_no_update"))
            connection.execute(text("DROP TRIGGER entries_no_delete"))
        connection.execute(text(tampering))
    engine.dispose()
    assert store.verify(book.id) != []


@pytest.mark.parametrize("statement", ["UPDATE entries SET author = 'x'", "DELETE FROM entries"])
def test_the_database_itself_refuses_to_change_an_entry(store, book, url, statement):
    store.append(book.id, "note", {"text": "kept"}, "Ines")
    engine = _engine(url)
    with pytest.raises(Exception, match="written once"), engine.begin() as connection:
        connection.execute(text(statement))
    engine.dispose()
    assert store.entries(book.id)[0].author == "Ines"


def test_search_looks_through_titles_notes_parts_and_people(store, book):
    store.append(book.id, "note", {"text": "Straße cable swapped, 100% sure"}, "Ines")
    store.append(book.id, "frozen", {"title": "A", "design": DESIGN}, "Tomas", sheet=1)
    other = store.new_notebook("Silo", "Tomas", {})
    store.append(other.id, "decision", {"text": "BX-2 it is"}, "Tomas")

    def found(words):
        return {(n.id, e.number) for n, e in store.search(words)}

    assert found("STRASSE") == {(book.id, 1)}  # folded: eszett and double s are one (Unicode, caseless matching)
    assert found("100%") == {(book.id, 1)}
    assert found("1_0") == set()  # a blank cheque for LIKE is none here
    assert found("bx-2") == {(book.id, 2), (other.id, 1)}
    assert found("bx-2 probe") == {(book.id, 2)}
    assert found("tomas") == {(book.id, 2), (other.id, 1)}
    assert found("  ") == set()
    assert [n.title for n in store.notebooks(text="silo")] == ["Silo"]


def test_archiving_hides_and_locks_but_loses_nothing(store, book):
    store.append(book.id, "note", {"text": "kept"}, "Ines")
    store.archive(book.id, "Kim")
    assert store.notebooks() == [] and store.search("kept") == []
    assert [n.id for n in store.notebooks(archived=True)] == [book.id]
    for act in (
        lambda: store.append(book.id, "note", {"text": "late"}, "Ines"),
        lambda: store.save(book.id, 1, {}, "Ines", revision=1),
        lambda: store.new_sheet(book.id, "more", "Ines", {}),
    ):
        with pytest.raises(StoreError, match="archived"):
            act()
    store.archive(book.id, "Kim", back=True)
    assert [e.body["text"] for e in store.entries(book.id)] == ["kept"]


def test_a_correction_names_an_entry_that_is_there(store, book):
    store.append(book.id, "note", {"text": "9k1"}, "Ines")
    assert store.append(book.id, "correction", {"of": 1, "text": "91k"}, "Ines").body == {"of": 1, "text": "91k"}
    with pytest.raises(InvalidText, match="Entry 7 cannot be corrected: the log has 2 entries"):
        store.append(book.id, "correction", {"of": 7, "text": "x"}, "Ines")


@pytest.mark.parametrize(
    ("kind", "body", "says"),
    [
        ("note", {"text": ""}, "empty"),
        ("note", {"text": "a\x00b"}, r"U\+0000 at place 2"),
        ("note", {"text": "a\u202eb"}, r"U\+202E at place 2, which reorders"),
        ("note", {"text": "a\ud800b"}, r"U\+D800"),
        ("note", {"text": "a", "extra": 1}, "'extra' is none of them"),
        ("note", {}, "needs 'text'"),
        ("poem", {"text": "a"}, "'poem'"),
        ("frozen", {"title": "A", "design": []}, "must be an object; it is list"),
        ("frozen", {"title": "A", "design": {"x": float("nan")}}, "cannot be written as JSON"),
        ("frozen", {"title": "A", "design": {"x": "\ud800"}}, "cannot be written as JSON"),
        ("frozen", {"title": "A" * 201, "design": {}}, "201 characters"),
        ("note", {"text": "x" * 100_001}, "100001 characters; at most 100000"),
        ("readings", {"title": "r", "csv": "x" * 8_000_001}, "8000001 characters"),
        ("correction", {"text": "x", "of": "1"}, "names '1'"),
    ],
)
def test_what_does_not_belong_in_an_entry_is_refused_and_nothing_is_written(sqlite_store, kind, body, says):
    book = sqlite_store.new_notebook("N", "Ines", {})
    with pytest.raises(InvalidText, match=says):
        sqlite_store.append(book.id, kind, body, "Ines")
    assert sqlite_store.entries(book.id) == []


def test_odd_texts_come_back_as_they_were(store):
    title = '\'; DROP TABLE entries; -- "%s" {x} \\ 😀 عربي'
    book = store.new_notebook(title, "O'Neil", {"design": {"title": "\u0000 in a state"}})
    store.append(book.id, "note", {"text": title + "\n\tsecond line"}, "O'Neil")
    assert store.notebook(book.id).title == title
    assert store.entries(book.id)[0].body["text"] == title + "\n\tsecond line"
    assert store.sheet(book.id, 1).state == {"design": {"title": "\u0000 in a state"}}


def test_what_is_not_there_is_said_by_name(store, book):
    for act in (
        lambda: store.notebook("nosuch"),
        lambda: store.sheet(book.id, 9),
        lambda: store.entry(book.id, 9),
        lambda: store.revision("nosuch", 1),
        lambda: store.append("nosuch", "note", {"text": "x"}, "Ines"),
    ):
        with pytest.raises(StoreError, match="There is no"):
            act()


@pytest.mark.parametrize("made_by", range(migrations.SCHEMA))
def test_a_store_of_any_earlier_schema_is_brought_up_with_everything_in_it(url, made_by):
    """Schemas 0 (empty) to the last but one, each filled as its own version would have."""
    engine = _engine(url)
    entry = make_entry(
        "abcdefghijklmnop", None, "note", {"text": "from Ines, long ago"}, "Ines", 1, "2024-05-01T10:00:00.000000Z"
    )
    with engine.begin() as connection:
        migrations.migrate(connection, upto=made_by)
        if made_by:
            held = {"id": "abcdefghijklmnop", "title": "Old", "created_at": entry.at, "created_by": "Ines"}
            if made_by >= 2:
                held |= {"origin": "abcdefghijklmnop", "length": 1, "head": entry.sha256}
            _insert(connection, "notebooks", held)
            _insert(connection, "sheets", {"notebook": held["id"], "number": 1, "title": "Sheet 1", "state": "{}",
                    "history": b"x\x9c\xab\xae\x05\x00\x01u\x00\xf9", "revision": 4, "saved_at": entry.at, "saved_by": "Ines"})  # fmt: skip
            row = {k: v for k, v in entry.as_dict().items() if k != "body"}
            words = {"words": "note ines from ines, long ago"} if made_by >= 3 else {}
            _insert(connection, "entries", row | words | {"notebook": held["id"], "body": json.dumps(entry.body)})
    engine.dispose()
    store = Store(url)
    if made_by:
        assert store.notebooks()[0].title == "Old"
        assert store.sheet("abcdefghijklmnop", 1).revision == 4
        assert [e for _, e in store.search("long ago")] == [entry]
        assert store.verify("abcdefghijklmnop") == []
        store.append("abcdefghijklmnop", "note", {"text": "new"}, "Tomas")
        assert store.verify("abcdefghijklmnop") == []
    else:
        assert store.notebooks() == []
    store.close()


def _insert(connection, table, row):
    connection.execute(text(f"INSERT INTO {table} ({', '.join(row)}) VALUES ({', '.join(':' + k for k in row)})"), row)


def test_a_store_of_a_newer_schema_is_refused_and_left_alone(url):
    Store(url).close()
    engine = _engine(url)
    with engine.begin() as connection:
        connection.execute(text("INSERT INTO schema_versions VALUES (99, 'later')"))
    with pytest.raises(
        StoreError, match=r"schema 99, made by a newer Sumwright; this one knows up to 4\. .*nothing was changed"
    ):
        Store(url)
    with engine.begin() as connection:
        assert connection.execute(text("SELECT MAX(version) FROM schema_versions")).scalar_one() == 99
    engine.dispose()


def test_somebody_elses_database_is_not_taken_over(tmp_path):
    engine = create_engine(f"sqlite:///{tmp_path / 'other.db'}")
    with engine.begin() as connection:
        connection.execute(text("CREATE TABLE notebooks (isbn TEXT)"))
    with pytest.raises(StoreError, match="not Sumwright's"):
        Store(tmp_path / "other.db")


def test_first_start_by_several_at_once_makes_one_store(url):
    problems = []

    def start():
        try:
            Store(url).close()
        except StoreError as error:
            problems.append(error)

    threads = [threading.Thread(target=start) for _ in range(6)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    assert problems == []
    assert Store(url).notebooks() == []


@pytest.mark.parametrize(
    ("url", "says"),
    [
        ("mysql://h/x", "is of 'mysql'"),
        ("nonsense", "not a database address"),
        ("sqlite://", "names no file"),
    ],
)
def test_an_address_that_is_none_is_refused(url, says):
    with pytest.raises(StoreError, match=says):
        Store(url)


def test_a_password_in_the_address_is_never_shown(tmp_path):
    with pytest.raises(StoreError) as caught:
        Store(f"postgresql://ines:geheim123@/x?host={tmp_path}")
    assert "geheim123" not in str(caught.value)
