"""`sumwright people`, `notebook` and `serve --check`, as they are typed; also while the notebooks are being written."""

from __future__ import annotations

import io
import json
import os
import subprocess
import sys
import threading
import zipfile

import pytest
from sumwright.command import main
from sumwright.files.examples import NAMES, example_text
from sumwright.notebook.people import People
from sumwright.notebook.store import Store


@pytest.fixture
def sumwright(tmp_path, monkeypatch, capsys):
    """Runs the command with a data folder of its own: (status, stdout, stderr).

    Here, since a process costs a second; `serve`, which sets up its process, and a backup beside writers in one of their own.
    """
    for name in [n for n in os.environ if n.startswith(("SUMWRIGHT_", "PANEL_"))]:
        monkeypatch.delenv(name)
    monkeypatch.setenv("SUMWRIGHT_DATA", str(tmp_path / "data"))

    def run(*words, typed="", **settings):
        own = {f"SUMWRIGHT_{k.upper()}": v for k, v in settings.items()}
        if "serve" in words or "backup" in words:
            done = subprocess.run(
                [sys.executable, "-m", "sumwright.command", *words],
                env={**os.environ, **own},
                input=typed,
                capture_output=True,
                text=True,
            )
            return done.returncode, done.stdout, done.stderr
        with monkeypatch.context() as here:
            for name, value in own.items():
                here.setenv(name, value)
            here.setattr(sys, "stdin", io.StringIO(typed))
            status = main(list(words))
        return status, *capsys.readouterr()

    return run


def test_people_come_change_and_go(sumwright, tmp_path):
    assert sumwright("people", "add", "Ines", "--role", "keeper", typed="correct horse 7\n")[0] == 0
    assert sumwright("people", "add", "Rea", "--role", "reader", "--no-password")[0] == 0
    assert json.loads(sumwright("people", "list", "--json")[1]) == [
        {"name": "Ines", "role": "keeper"},
        {"name": "Rea", "role": "reader"},
    ]
    assert People(tmp_path / "data" / "people.json").check("Ines", "correct horse 7")
    assert sumwright("people", "role", "Rea", "--role", "author")[0] == 0
    assert People(tmp_path / "data" / "people.json").person("Rea").role == "author"
    assert sumwright("people", "remove", "Rea")[0] == 0
    assert "Rea" not in sumwright("people", "list")[1]


@pytest.mark.parametrize(
    ("words", "typed", "says"),
    [
        (("people", "add", "Ines"), "short\n", "A password has 10 to 1000 characters; this one has 5."),
        (("people", "add"), "", "wants a name"),
        (("people", "remove", "Nobody"), "", "There is nobody named 'Nobody'"),
        (("people", "add", "x", "--role", "boss"), "", "boss"),
        (("notebook", "verify", "nosuch"), "", "There is no notebook 'nosuch'"),
        (("notebook", "export"), "", "wants a notebook's id"),
        (
            ("notebook", "import", "/nonexistent.zip"),
            "",
            "/nonexistent.zip' cannot be read: No such file or directory.",
        ),
        (("serve", "--port", "0"), "", "--port is '0'"),
        (("serve", "--address", "0.0.0.0"), "", "whoever reaches the server could write"),
    ],
)
def test_what_does_not_go_is_one_line_and_exit_2(sumwright, words, typed, says):
    status, out, problem = sumwright(*words, typed=typed)
    assert (status, out, problem.count("\n")) == (2, "", 1)
    assert says in problem.replace('"', "'")


def test_a_notebook_goes_out_and_comes_in_by_the_command_line(sumwright, tmp_path):
    store = Store(tmp_path / "data" / "notebook.db")
    key = store.new_notebook("Vat", "Ines", {"x": 1}).id
    store.append(key, "note", {"text": "kept"}, "Ines")
    store.append(key, "decision", {"text": "Take 0.1 % parts."}, "Ines")
    store.append(key, "correction", {"text": "0.05 % parts.", "of": 2}, "Kim")
    assert sumwright("notebook", "export", key, "-o", str(tmp_path / "n.zip"))[0] == 0
    (tmp_path / "d.json").write_text(example_text(NAMES[0]), encoding="utf-8")
    for named in (key, str(tmp_path / "n.zip")):  # a report lists what was decided, and what corrected it
        words = (str(tmp_path / "d.json"), "--draws", "0", "-o", str(tmp_path / "r.html"))
        assert sumwright("report", *words, "--notebook", named) == (0, "", "")
        said = (tmp_path / "r.html").read_text(encoding="utf-8")
        assert "Take 0.1 % parts." in said and "Kim, entry 3, corrects entry 2" in said and "kept" not in said
    assert (
        sumwright("report", *words, "--notebook", "a" * 16)[2]
        == f"sumwright: There is no notebook '{'a' * 16}' in this store.\n"
    )
    status, out, _ = sumwright("notebook", "import", str(tmp_path / "n.zip"))
    assert status == 0 and "Vat (copy)" in out
    listed = json.loads(sumwright("notebook", "list", "--json")[1])
    assert sorted(n["title"] for n in listed) == ["Vat", "Vat (copy)"]
    assert sumwright("notebook", "archive", key)[0] == 0
    assert next(n for n in json.loads(sumwright("notebook", "list", "--json")[1]) if n["id"] == key)["archived"]
    assert sumwright("notebook", "unarchive", key)[0] == 0
    assert json.loads(sumwright("notebook", "verify", "--json")[1]) == {"notebooks": 2, "flaws": []}
    (tmp_path / "n.zip").write_bytes((tmp_path / "n.zip").read_bytes()[:-30])
    status, _, problem = sumwright("notebook", "import", str(tmp_path / "n.zip"))
    assert status == 2 and problem.count("\n") == 1
    assert len(store.notebooks()) == 2


def test_a_log_that_was_changed_makes_verify_exit_1(sumwright, tmp_path):
    store = Store(tmp_path / "data" / "notebook.db")
    key = store.new_notebook("Vat", "Ines", {}).id
    store.append(key, "note", {"text": "kept"}, "Ines")
    import sqlite3

    with sqlite3.connect(tmp_path / "data" / "notebook.db") as database:
        database.execute("DROP TRIGGER entries_no_update")
        database.execute("UPDATE entries SET author = 'Tomas'")
    status, out, _ = sumwright("notebook", "verify")
    assert status == 1 and f"{key}: entry 1 was changed after it was written" in out


def test_backup_while_people_write_and_restore_elsewhere(sumwright, url, tmp_path):
    """On both databases; what comes back is whole, whatever moment it was taken at."""
    store = Store(url)
    key = store.new_notebook("Vat", "Ines", {"x": 0}).id
    end = threading.Event()

    def write():
        revision = 1
        while not end.is_set():
            store.append(key, "note", {"text": "written meanwhile"}, "Ines")
            revision, _ = store.save(
                key, 1, {"x": revision}, "Ines", revision=revision, history={"past": [str(revision)]}
            )

    writer = threading.Thread(target=write)
    writer.start()
    status, _, problem = sumwright("notebook", "backup", str(tmp_path / "all.zip"), store=url)
    end.set()
    writer.join()
    assert (status, problem) == (0, "")
    with zipfile.ZipFile(tmp_path / "all.zip") as packed:
        assert packed.namelist() == ["manifest.json", f"notebooks/{key}.zip"]
    other = f"sqlite:///{tmp_path / 'other.db'}"
    status, out, _ = sumwright("notebook", "restore", str(tmp_path / "all.zip"), "--json", store=other)
    assert status == 0 and [r["what"] for r in json.loads(out)] == ["added"]
    restored = Store(other)
    assert restored.verify(key) == []
    entries, now = restored.entries(key), store.entries(key)
    assert entries == now[: len(entries)]
    assert [
        r["what"]
        for r in json.loads(sumwright("notebook", "restore", str(tmp_path / "all.zip"), "--json", store=other)[1])
    ] == ["same"]
    store.close()


def test_serve_check_says_what_is_right_or_wrong_and_ends(sumwright, tmp_path):
    status, out, _ = sumwright("serve", "--check")
    assert status == 0 and "Settings and store are good" in out
    (tmp_path / "data" / "notebook.db").write_bytes(b"spoilt" * 1000)
    status, _, problem = sumwright("serve", "--check")
    assert status == 2 and "notebook.db cannot be opened" in problem
    assert "sign_in is 'oauth' and PANEL_OAUTH_PROVIDER is not set" in sumwright("serve", sign_in="oauth")[2]
