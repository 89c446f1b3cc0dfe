"""The password file: salted slow hashes, roles, and nothing that can be read off it."""

from __future__ import annotations

import json
import stat

import pytest
from sumwright.errors import StoreError
from sumwright.notebook.people import ROLES, People, Person, local_person, may
from sumwright.notebook.text import InvalidText


@pytest.fixture
def people(tmp_path):
    return People(tmp_path / "kept" / "people.json")


def test_the_right_password_opens_and_no_other(people):
    people.add("Ines", "author", "correct horse 7")
    assert people.check("Ines", "correct horse 7")
    for wrong in ("correct horse 8", "", "correct horse 7 ", "CORRECT HORSE 7", "x" * 100_000):
        assert not people.check("Ines", wrong)
    assert not people.check("ines", "correct horse 7")
    assert not people.check("nobody", "correct horse 7")


def test_the_file_holds_argon2id_hashes_with_a_salt_each_and_is_its_owners_alone(people):
    people.add("Ines", "author", "the same one")
    people.add("Tomas", "reader", "the same one")
    text = people.path.read_text()
    held = json.loads(text)["people"]
    assert "the same one" not in text
    assert held["Ines"]["password"] != held["Tomas"]["password"]
    # RFC 9106, section 4, second recommended option: t=3, m=2^16 KiB, p=4.
    assert held["Ines"]["password"].startswith("$argon2id$v=19$m=65536,t=3,p=4$")
    assert stat.S_IMODE(people.path.stat().st_mode) == 0o600


def test_a_change_by_another_process_counts_at_once(people):
    people.add("Ines", "author", "long enough")
    other = People(people.path)
    assert other.person("Ines") == Person("Ines", "author")
    people.set_role("Ines", "reader")
    assert other.person("Ines").role == "reader"
    people.remove("Ines")
    assert other.person("Ines") is None and not other.check("Ines", "long enough")


def test_a_person_without_a_password_cannot_sign_in_with_one(people):
    people.add("Kim", "keeper", None)
    assert people.person("Kim").role == "keeper"
    for tried in ("", "None", "null"):
        assert not people.check("Kim", tried)


@pytest.mark.parametrize(
    ("name", "role", "password", "says"),
    [
        ("Ines", "boss", "long enough", "reader, author, keeper; it is 'boss'"),
        ("Ines", "author", "short", "10 to 1000 characters; this one has 5"),
        ("Ines", "author", "x" * 1001, "this one has 1001"),
        ("", "author", "long enough", "empty"),
        ("In\x1bes", "author", "long enough", r"U\+001B"),
        ("\u202eIn", "author", "long enough", "reorders"),
    ],
)
def test_what_does_not_go_is_refused_and_the_file_stays(people, name, role, password, says):
    people.add("Tomas", "reader", "long enough")
    before = people.path.read_bytes()
    with pytest.raises(InvalidText, match=says):
        people.add(name, role, password)
    assert people.path.read_bytes() == before


@pytest.mark.parametrize(
    "text",
    ["", "[]", "{", '{"format":"x"}', '{"format":"sumwright-people/1","people":{"a":{"role":"god","password":null}}}'],
)
def test_a_spoilt_file_lets_nobody_in_and_says_which_it_is(people, text):
    people.add("Ines", "author", "long enough")
    people.path.write_text(text)
    with pytest.raises(StoreError, match=r"people\.json"):
        people.check("Ines", "long enough")


def test_each_role_may_what_the_one_below_it_may():
    for action in ("read", "export"):
        assert [may(r, action) for r in ROLES] == [True, True, True]
    for action in ("save", "write", "new", "import", "rename"):
        assert [may(r, action) for r in ROLES] == [False, True, True]
    assert [may(r, "archive") for r in ROLES] == [False, False, True]
    with pytest.raises(ValueError, match="no such action"):
        may("keeper", "wriet")


def test_without_sign_in_the_author_is_the_operating_systems_user(monkeypatch):
    monkeypatch.setenv("LOGNAME", "ines")
    assert local_person() == Person("ines", "keeper")
    for name in ("LOGNAME", "USER", "LNAME", "USERNAME"):
        monkeypatch.delenv(name, raising=False)
    assert local_person().name
