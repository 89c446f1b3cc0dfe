"""Power cut, full disk, read-only folder, lost database, spoilt file: told, tried again, and no entry lost."""

from __future__ import annotations

import contextlib
import os
import pwd
import random
import resource
import signal
import subprocess
import sys
import threading

import pytest
from sumwright.errors import StoreError
from sumwright.notebook.autosave import Autosave, Snapshot
from sumwright.notebook.store import Store

WRITER = """
import sys
from sumwright.notebook.store import Store
store = Store(sys.argv[1])
key = sys.argv[2]
revision = store.revision(key, 1)[0]
while True:
    entry = store.append(key, "note", {"text": "x" * 3000}, "Ines")
    print("entry", entry.number, entry.sha256, flush=True)
    revision, _ = store.save(key, 1, {"revision": revision + 1}, "Ines", revision=revision)
    print("saved", revision, flush=True)
"""


def _writer(url, key, **options):
    return subprocess.Popen(
        [sys.executable, "-c", WRITER, url, key], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, **options
    )


def test_killed_at_random_moments_the_store_loses_nothing_it_said_it_had(url):
    """SIGKILL in the middle of whatever it is doing, five times over; seed 20."""
    rng = random.Random(20)
    store = Store(url)
    key = store.new_notebook("Vat", "Ines", {}).id
    told_entries, told_revision = {}, 1
    for _ in range(5):
        writer = _writer(url, key)
        lines = rng.randint(3, 40)
        said = []
        while len(said) < lines:
            said.append(writer.stdout.readline())
            assert said[-1], writer.stderr.read()
        writer.send_signal(signal.SIGKILL)
        rest = writer.stdout.read()
        writer.wait()
        writer.stderr.close()
        for line in (*said, *rest.splitlines()):
            word = line.split()
            if len(word) == 3:
                told_entries[int(word[1])] = word[2]
            elif len(word) == 2 and word[0] == "saved":
                told_revision = int(word[1])
        kept = {e.number: e.sha256 for e in store.entries(key)}
        assert all(kept.get(number) == sha for number, sha in told_entries.items())
        assert store.verify(key) == []
        sheet = store.sheet(key, 1)
        assert sheet.revision >= told_revision
        assert sheet.state == {"revision": sheet.revision} or sheet.revision == 1
    assert len(told_entries) >= 5
    store.close()


def test_a_full_disk_is_told_and_what_was_there_stays(tmp_path):
    """The file system's answer when there is no room, brought about by a limit on how large a file may grow."""
    store = Store(tmp_path / "n.db")
    key = store.new_notebook("Vat", "Ines", {}).id
    store.close()
    writer = _writer(
        f"sqlite:///{tmp_path / 'n.db'}", key,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (600_000, 600_000)),
    )  # fmt: skip
    out, problem = writer.communicate(timeout=60)
    told = {int(w[1]): w[2] for w in map(str.split, out.splitlines()) if len(w) == 3}
    assert "StoreError" in problem.splitlines()[-1] and str(tmp_path / "n.db") in problem.splitlines()[-1]
    assert len(told) > 10
    store = Store(tmp_path / "n.db")
    assert {e.number: e.sha256 for e in store.entries(key)}.items() >= told.items()
    assert store.verify(key) == []
    store.append(key, "note", {"text": "room again"}, "Ines")
    assert store.verify(key) == []


def test_a_disk_that_fills_up_and_is_cleared_costs_a_page_nothing(tmp_path, monkeypatch):
    """SQLite's own answer to a full disk, by a limit on its pages; saving goes on by itself when there is room."""
    from sumwright.notebook import store as module

    store = Store(tmp_path / "n.db")
    key = store.new_notebook("Vat", "Ines", {}).id
    full = threading.Event()
    plain = module._sqlite_set_up

    from sqlalchemy import event

    def set_up(connection, record):
        if full.is_set():
            connection.execute("PRAGMA max_page_count = 1")

    event.listen(store._engine, "connect", set_up)
    assert plain
    monkeypatch.setattr("sumwright.notebook.autosave.RETRIES", (0.05,))
    told = threading.Semaphore(0)
    marks = []

    def hear(mark):
        marks.append(mark)
        told.release()

    page = Autosave(lambda s, r: store.save(key, 1, s.state, "Ines", revision=r), 1, hear, delay=0.01)
    full.set()
    page.changed(lambda: Snapshot({"x": "y" * 50_000}))
    while page.mark.kind != "unsaved":
        assert told.acquire(timeout=10)
    assert "full" in page.mark.why
    with pytest.raises(StoreError, match="full"):
        store.append(key, "note", {"text": "z" * 50_000}, "Ines")
    full.clear()
    assert page.wait(10)
    assert store.sheet(key, 1).state == {"x": "y" * 50_000}
    store.append(key, "note", {"text": "z" * 50_000}, "Ines")
    assert store.verify(key) == [] and len(store.entries(key)) == 1


READ_ONLY = """
import os
import sys
import sqlalchemy.dialects.sqlite
import sqlalchemy.exc
from sumwright.errors import StoreError
from sumwright.notebook.store import Store
if len(sys.argv) > 3:  # everything is imported: become somebody who may not write
    os.setgroups([])
    os.setgid(int(sys.argv[4]))
    os.setuid(int(sys.argv[3]))
try:
    store = Store(sys.argv[1])
    store.append(sys.argv[2], "note", {"text": "x"}, "Ines")
except StoreError as error:
    print(error)
"""


def test_a_read_only_folder_is_told_in_one_sentence(tmp_path):
    store = Store(tmp_path / "data" / "n.db")
    key = store.new_notebook("Vat", "Ines", {}).id
    store.close()
    somebody = []
    if os.geteuid() == 0:  # root writes anywhere: the child is somebody else
        nobody = pwd.getpwnam("nobody")
        somebody = [str(nobody.pw_uid), str(nobody.pw_gid)]
    folder = tmp_path / "data"
    for path in (tmp_path, *tmp_path.parents):
        if path.owner() == tmp_path.owner() and path.name.startswith("pytest"):
            path.chmod(0o755)
    folder.chmod(0o555)
    tmp_path.chmod(0o755)
    (folder / "n.db").chmod(0o444)
    try:
        for place in (folder / "n.db", folder / "fresh.db", folder / "sub" / "n.db"):
            done = subprocess.run(
                [sys.executable, "-c", READ_ONLY, f"sqlite:///{place}", key, *somebody], capture_output=True, text=True
            )
            assert done.stderr == ""
            assert str(place.parent) in done.stdout and done.stdout.count("\n") == 1
            assert "cannot be" in done.stdout
    finally:
        folder.chmod(0o755)
        (folder / "n.db").chmod(0o644)
    assert Store(folder / "n.db").entries(key) == []


@pytest.mark.parametrize("damage", ["text", "head", "empty tail", "folder"])
def test_a_spoilt_store_file_is_refused_and_left_as_it_is(tmp_path, damage):
    place = tmp_path / "n.db"
    if damage == "folder":
        place.mkdir()
    else:
        store = Store(place)
        key = store.new_notebook("Vat", "Ines", {}).id
        for _ in range(40):
            store.append(key, "note", {"text": "x" * 2000}, "Ines")
        store.close()
        for extra in ("-wal", "-shm"):
            (tmp_path / f"n.db{extra}").unlink(missing_ok=True)
        data = place.read_bytes()
        place.write_bytes(
            {
                "text": b"not a database at all, but long enough to be looked at " * 20,
                "head": bytes(200) + data[200:],
                "empty tail": data[: len(data) // 3],
            }[damage]
        )
        before = place.read_bytes()
    with pytest.raises(StoreError, match=str(place)):
        store = Store(place)
        store.verify(store.notebooks()[0].id)
    if damage != "folder":
        assert place.read_bytes()[4096:] == before[4096:]


@pytest.mark.store
def test_a_lost_database_connection_is_told_and_saving_goes_on_when_it_is_back(cluster, monkeypatch):
    url = cluster.new_database()
    store = Store(url)
    key = store.new_notebook("Vat", "Ines", {}).id
    entry = store.append(key, "note", {"text": "before"}, "Ines")
    monkeypatch.setattr("sumwright.notebook.autosave.RETRIES", (0.1,))
    told = threading.Semaphore(0)
    page = Autosave(
        lambda s, r: store.save(key, 1, s.state, "Ines", revision=r), 1, lambda m: told.release(), delay=0.01
    )
    cluster.stop("immediate")
    try:
        page.changed(lambda: Snapshot({"x": 1}))
        while page.mark.kind != "unsaved":
            assert told.acquire(timeout=20)
        with pytest.raises(StoreError) as caught:
            store.append(key, "note", {"text": "meanwhile"}, "Ines")
        assert "cannot be written" in str(caught.value)
        with pytest.raises(StoreError):
            store.ready()
    finally:
        cluster.start()
    assert page.wait(30)
    assert store.sheet(key, 1).state == {"x": 1}
    assert store.entries(key) == [entry]
    store.ready()
    with contextlib.suppress(StoreError):
        store.close()
