"""Settings: typed, from a file and the environment, and safe together or refused."""

from __future__ import annotations

from pathlib import Path

import pytest
from sumwright.notebook.people import People
from sumwright.notebook.settings import InvalidSetting, Settings, read_settings


def settings_from(tmp_path, toml="", **environment):
    place = tmp_path / "s.toml"
    place.write_text(toml)
    return read_settings({"SUMWRIGHT_SETTINGS": str(place), **environment})


def test_the_environment_wins_over_the_file_and_the_file_over_what_is_built_in(tmp_path):
    found = settings_from(tmp_path, "port = 5100\nprocesses = 2\norigins = ['lab.example']", SUMWRIGHT_PORT="5200")
    assert (found.port, found.processes, found.origins, found.address) == (5200, 2, ("lab.example",), "127.0.0.1")
    assert read_settings({"XDG_CONFIG_HOME": str(tmp_path)}) == read_settings({})


def test_a_path_for_the_store_is_sqlite_and_nothing_is_in_the_data_folder(tmp_path):
    assert settings_from(tmp_path, SUMWRIGHT_STORE=str(tmp_path / "x.db")).store_url == f"sqlite:///{tmp_path / 'x.db'}"
    assert settings_from(tmp_path, SUMWRIGHT_STORE="postgresql://lab/x").store_url == "postgresql://lab/x"
    assert settings_from(tmp_path, SUMWRIGHT_DATA="/srv/d").store_url == "sqlite:////srv/d/notebook.db"
    assert settings_from(tmp_path, SUMWRIGHT_DATA="/srv/d").people_file == Path("/srv/d/people.json")


@pytest.mark.parametrize(
    ("toml", "environment", "says"),
    [
        ("port = '5006'", {}, r"port in .*s\.toml is '5006'; it must be a whole number from 1 to 65535"),
        ("port = 5006.0", {}, "whole number"),
        ("port = true", {}, "whole number"),
        ("colour = 'red'", {}, r"sets 'colour', which is no setting; there are address"),
        ("proxy = 'yes'", {}, "'yes'; it must be true or false"),
        ("origins = 'lab.example'", {}, "must be a list of hosts"),
        ("origins = ['http://lab.example']", {}, "must be a list of hosts"),
        ("origins = ['*']", {}, "must be a list of hosts"),
        ("sign_in = 'ldap'", {}, "one of 'none', 'password', 'oauth'"),
        ("stranger = 'boss'", {}, "one of '', 'reader', 'author', 'keeper'"),
        ("prefix = 'bench'", {}, "a path such as /bench"),
        ("prefix = '/a/../b?x'", {}, "a path such as /bench"),
        ("address = '127.0.0.1 --evil'", {}, "must be an address"),
        ("data = ''", {}, "must be a path"),
        ("data = 7", {}, "must be a text"),
        ("port = = 3", {}, "is not TOML"),
        ("", {"SUMWRIGHT_PORT": "many"}, "SUMWRIGHT_PORT is 'many'; it must be a whole number"),
        ("", {"SUMWRIGHT_PORT": "0"}, "SUMWRIGHT_PORT is 0"),
        ("", {"SUMWRIGHT_HTTPS": "maybe"}, "SUMWRIGHT_HTTPS is 'maybe'; it must be true or false"),
        ("", {"SUMWRIGHT_PROT": "5006"}, "SUMWRIGHT_PROT is no setting; there are SUMWRIGHT_ADDRESS"),
        ("", {"SUMWRIGHT_SETTINGS": "/nonexistent/x.toml"}, r"/nonexistent/x\.toml cannot be read: No such file"),
    ],
)
def test_a_wrong_setting_is_named_with_what_is_allowed(tmp_path, toml, environment, says):
    with pytest.raises(InvalidSetting, match=says):
        settings_from(tmp_path, toml, **environment)


@pytest.mark.parametrize(
    ("given", "says"),
    [
        ({"address": "0.0.0.0"}, "whoever reaches the server could write"),
        ({"proxy": True}, "behind a proxy set sign_in"),
        ({"sign_in": "password"}, "holds nobody"),
        ({"sign_in": "oauth", "address": "0.0.0.0"}, "name the hosts"),
        ({"sign_in": "oauth", "trust_network": True}, "for a server without sign-in"),
    ],
)
def test_what_is_unsafe_together_is_refused(tmp_path, given, says):
    with pytest.raises(InvalidSetting, match=says):
        Settings(data=tmp_path, **given).check_serving()


@pytest.mark.parametrize(
    "given",
    [
        {},
        {"address": "::1"},
        {"address": "0.0.0.0", "trust_network": True},
        {"address": "0.0.0.0", "sign_in": "password", "origins": ("lab.example",)},
        {"proxy": True, "sign_in": "password"},
    ],
)
def test_what_is_safe_together_is_taken(tmp_path, given):
    People(tmp_path / "people.json").add("Kim", "keeper", None)
    Settings(data=tmp_path, **given).check_serving()


def test_the_cookie_secret_is_made_once_and_is_its_owners_alone(tmp_path):
    ours = Settings(data=tmp_path / "new")
    secret = ours.cookie_secret()
    assert len(secret) >= 48
    assert Settings(data=tmp_path / "new").cookie_secret() == secret
    assert (tmp_path / "new" / "cookie-secret").stat().st_mode & 0o777 == 0o600
    assert Settings(data=tmp_path / "other").cookie_secret() != secret
