"""A notebook goes out as one open file and comes back whole, or not at all."""

from __future__ import annotations

import contextlib
import csv
import io
import json
import zipfile

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sumwright.errors import StoreError
from sumwright.notebook import bundle
from sumwright.notebook.store import Store
from sumwright.notebook.text import InvalidNotebookFile, csv_cell, read_json, sha256

DESIGN = {"title": "Vat level", "signals": [{"name": "=probe", "weight": 0.1}]}


@pytest.fixture
def filled(sqlite_store):
    book = sqlite_store.new_notebook("Vat level", "Ines", {"design": DESIGN})
    sqlite_store.save(book.id, 1, {"design": DESIGN, "x": 1e-12}, "Tomas", revision=1, history={"undo": [DESIGN]})
    sqlite_store.new_sheet(book.id, "Spare", "Tomas", {"design": None})
    sqlite_store.append(book.id, "note", {"text": '=HYPERLINK("http://x.example")\nsecond'}, "Ines", sheet=1)
    sqlite_store.append(
        book.id, "frozen", {"title": "A", "design": DESIGN, "results": {"output": [1.5, "V"]}}, "@Tomas"
    )
    sqlite_store.append(book.id, "readings", {"title": "r", "csv": "north,output\n1,2\n"}, "Ines")
    return sqlite_store, book.id


def test_out_and_in_again_gives_the_same_notebook(filled, store):
    source, key = filled
    data = bundle.export_notebook(source, key)
    came = bundle.import_notebook(store, data)
    assert came.id == key
    (book, sheets, entries), (book2, sheets2, entries2) = source.whole(key), store.whole(key)
    assert book == book2
    assert entries == entries2
    assert [(s.number, s.title, s.state, s.history, s.saved_by, s.saved_at) for s in sheets] == [
        (s.number, s.title, s.state, s.history, s.saved_by, s.saved_at) for s in sheets2
    ]
    assert store.verify(key) == []
    store.append(key, "note", {"text": "goes on"}, "Kim")
    assert store.verify(key) == []


def test_a_notebook_that_is_there_already_comes_in_as_a_copy_whose_log_still_holds(filled):
    store, key = filled
    copy = bundle.import_notebook(store, bundle.export_notebook(store, key))
    assert copy.id != key and copy.title == "Vat level (copy)"
    assert store.entries(copy.id) == store.entries(key)
    store.append(copy.id, "note", {"text": "only here"}, "Kim")
    assert store.verify(copy.id) == [] and store.verify(key) == []
    again = bundle.import_notebook(store, bundle.export_notebook(store, copy.id))
    assert store.verify(again.id) == []


def test_everything_in_the_file_is_open_and_summed(filled):
    store, key = filled
    with zipfile.ZipFile(io.BytesIO(bundle.export_notebook(store, key))) as packed:
        names = set(packed.namelist())
        assert names == {
            "manifest.json", "notebook.json", "log.csv", "sheets/1.json", "sheets/2.json", "log/0001.json",
            "log/0002.json", "log/0003.json", "designs/0002.json", "tables/0003.csv",
        }  # fmt: skip
        sums = json.loads(packed.read("manifest.json"))["files"]
        assert {n: sums[n]["sha256"] for n in sums} == {n: sha256(packed.read(n)) for n in names - {"manifest.json"}}
        assert json.loads(packed.read("designs/0002.json")) == DESIGN
        assert packed.read("tables/0003.csv") == b"north,output\n1,2\n"
        rows = list(csv.reader(io.StringIO(packed.read("log.csv").decode())))
    assert rows[1][5].startswith("'=HYPERLINK") and rows[2][2] == "'@Tomas"


@pytest.mark.parametrize("start", "=+-@\t\r\n")
def test_a_cell_that_a_spreadsheet_would_run_is_made_text(start):
    assert csv_cell(start + "1+1") == "'" + start + "1+1"
    assert csv_cell("1" + start) == "1" + start


def _rezip(data, change, *, resum=True):
    """The same zip with `change(files)` done, and a manifest that fits again."""
    with zipfile.ZipFile(io.BytesIO(data)) as packed:
        files = {n: packed.read(n) for n in packed.namelist()}
    change(files)
    if resum:
        manifest = json.loads(files.pop("manifest.json"))
        manifest["files"] = {n: {"bytes": len(b), "sha256": sha256(b)} for n, b in files.items()}
        files["manifest.json"] = json.dumps(manifest).encode()
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as packed:
        for name, held in files.items():
            packed.writestr(name, held)
    return out.getvalue()


def _edit(name, **changes):
    def change(files):
        held = json.loads(files[name])
        held.update(changes)
        files[name] = json.dumps(held).encode()

    return change


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (lambda f: f.update({"../../etc/cron.d/x": b"*"}), "does not belong"),
        (lambda f: f.update({"/etc/passwd": b"*"}), "does not belong"),
        (lambda f: f.update({"log\\0001.json": b"*"}), "does not belong"),
        (lambda f: f.update({"sheets/1.json/../../x": b"*"}), "does not belong"),
        (lambda f: f.update({"log/0001.JSON": b"*"}), "does not belong"),
        (lambda f: f.update({"C:evil.json": b"*"}), "does not belong"),
        (lambda f: f.update({"log/0001.json ": b"*"}), "does not belong"),
        (lambda f: f.pop("notebook.json"), "no notebook.json"),
        (lambda f: [f.pop(n) for n in list(f) if n.startswith("sheets/")], "no sheet"),
        (lambda f: f.pop("log/0002.json"), "entry 2 is missing"),
        (lambda f: f.pop("log/0003.json"), "had 3 entries; 2 are"),
        (_edit("log/0001.json", body={"text": "other"}), "entry 1 was changed"),
        (_edit("log/0001.json", author="Kim"), "entry 1 was changed"),
        (_edit("log/0001.json", kind="poem"), "'poem'"),
        (_edit("log/0001.json", number=True), "whole number"),
        (_edit("log/0001.json", at="yesterday"), "'yesterday'"),
        (_edit("log/0001.json", body=[]), "must be an object"),
        (_edit("notebook.json", origin="aaaaaaaaaaaaaaaa"), "was changed"),
        (_edit("notebook.json", id="../../../../x"), "id is"),
        (_edit("notebook.json", title="a\u202eb"), "reorders"),
        (_edit("notebook.json", title=7), "must be a text"),
        (_edit("notebook.json", created_by=""), "empty"),
        (_edit("sheets/1.json", number=2), "sheet number twice"),
        (_edit("sheets/1.json", state=[]), "must be an object"),
        (_edit("sheets/1.json", state={"x": "y" * 4_100_000}), "larger than 4000000"),
        (lambda f: f.update({"notebook.json": b"[" * 100_000}), "nested deeper than 64"),
        (lambda f: f.update({"notebook.json": b'{"a":' * 100_000}), "nested deeper"),
        (lambda f: f.update({"notebook.json": b'{"id":1,"id":2}'}), "stands there twice"),
        (lambda f: f.update({"notebook.json": b'{"id":NaN}'}), "not a finite number"),
        (lambda f: f.update({"notebook.json": b"\xff\xfe{}"}), "not UTF-8"),
        (lambda f: f.update({"notebook.json": b'{"id":' + b"9" * 5000 + b"}"}), "not JSON"),
    ],
)
def test_a_file_that_is_not_as_it_should_be_is_refused_and_leaves_nothing(filled, tmp_path, change, says):
    source, key = filled
    data = _rezip(bundle.export_notebook(source, key), change)
    empty = Store(tmp_path / "other" / "n.db")
    before = sorted(tmp_path.rglob("*"))
    with pytest.raises(InvalidNotebookFile, match=says):
        bundle.import_notebook(empty, data)
    assert empty.notebooks() == [] and empty.notebooks(archived=True) == []
    assert sorted(tmp_path.rglob("*")) == before


def test_a_change_that_leaves_the_manifest_alone_is_noticed(filled):
    store, key = filled
    data = _rezip(bundle.export_notebook(store, key), _edit("notebook.json", title="Other"), resum=False)
    with pytest.raises(InvalidNotebookFile, match=r"notebook\.json in the zip is not what its manifest says"):
        bundle.unpack(data)


def test_a_zip_bomb_is_stopped_at_the_limit_and_not_by_what_it_says_of_itself(filled):
    store, key = filled
    data = _rezip(
        bundle.export_notebook(store, key), lambda f: f.update({"tables/0009.csv": b"0" * (bundle.MEMBER_MOST + 1)})
    )
    assert len(data) < 100_000  # 24 MB of one byte
    with pytest.raises(InvalidNotebookFile, match=f"unpacks to more than {bundle.MEMBER_MOST} bytes"):
        bundle.unpack(data)


def test_many_files_that_are_small_each_are_stopped_by_their_number_and_their_sum(filled, monkeypatch):
    store, key = filled
    data = bundle.export_notebook(store, key)
    monkeypatch.setattr(bundle, "COUNT_MOST", 9)
    with pytest.raises(InvalidNotebookFile, match="holds 10 files; at most 9"):
        bundle.unpack(data)
    monkeypatch.undo()
    with pytest.raises(InvalidNotebookFile, match="unpacks to more than"):
        bundle._unzip(data, bundle._NAMES, bundle.FORMAT, whole=900)


def test_the_same_name_twice_is_refused(filled):
    store, key = filled
    out = io.BytesIO(bundle.export_notebook(store, key))
    with zipfile.ZipFile(out, "a") as packed, pytest.warns(UserWarning, match="Duplicate"):
        packed.writestr("notebook.json", b"{}")
    with pytest.raises(InvalidNotebookFile, match="twice"):
        bundle.unpack(out.getvalue())


@given(st.binary(max_size=400))
def test_bytes_that_are_no_zip_are_refused_with_one_sentence(data):
    with pytest.raises(InvalidNotebookFile):
        bundle.unpack(data)


_JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
    max_leaves=8,
)
_EXAMPLE: list[bytes] = []


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(data=st.data())
def test_any_value_in_any_place_is_taken_or_refused_never_a_fall(filled, data):
    store, key = filled
    if not _EXAMPLE:
        _EXAMPLE.append(bundle.export_notebook(store, key))
    name = data.draw(
        st.sampled_from(["notebook.json", "sheets/1.json", "log/0001.json", "log/0002.json", "manifest.json"])
    )

    def change(files):
        held = json.loads(files[name])
        where = data.draw(st.sampled_from(sorted(held)))
        held[where] = data.draw(_JSON)
        files[name] = json.dumps(held).encode()

    changed = _rezip(_EXAMPLE[0], change, resum=name != "manifest.json")
    try:
        came = bundle.import_notebook(store, changed)
    except (InvalidNotebookFile, StoreError) as error:
        assert len(str(error)) < 600
    else:
        assert store.verify(came.id) == []


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(at=st.integers(0, 10**6), byte=st.integers(0, 255))
def test_one_changed_byte_never_gets_by_unnoticed(filled, at, byte):
    store, key = filled
    data = bytearray(bundle.export_notebook(store, key))
    whole = bundle.unpack(bytes(data))
    data[at % len(data)] = byte
    with contextlib.suppress(InvalidNotebookFile):
        assert bundle.unpack(bytes(data)) == whole  # times and flags of the zip itself carry nothing


@given(_JSON)
def test_json_comes_through_the_guard_as_the_standard_module_reads_it(value):
    text = json.dumps(value)
    assert read_json("it", text) == json.loads(text)


def test_backup_and_restore_bring_back_what_is_missing_and_change_nothing(filled, store):
    source, key = filled
    source.archive(source.new_notebook("Put away", "Kim", {}).id, "Kim")
    data = bundle.backup(source)
    assert sorted((r.title, r.what) for r in bundle.restore(store, data)) == [
        ("Put away", "added"),
        ("Vat level", "added"),
    ]
    assert [n.title for n in store.notebooks(archived=True)] == ["Put away"]
    assert store.verify(key) == []
    assert {r.what for r in bundle.restore(store, data)} == {"same"}
    store.append(key, "note", {"text": "written since"}, "Ines")
    assert {r.what for r in bundle.restore(store, data)} == {"same"}  # the backup holds nothing that is not there
    store.save(key, 1, {"design": "moved on"}, "Ines", revision=1)
    assert sorted(r.what for r in bundle.restore(store, data)) == ["copied", "same"]
    assert store.sheet(key, 1).state == {"design": "moved on"}
    assert store.entries(key)[-1].body["text"] == "written since"
    with pytest.raises(InvalidNotebookFile):
        bundle.restore(store, data[:-40])
