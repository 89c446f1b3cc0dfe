"""The stores that the notebook's tests run on: SQLite in a folder, and a PostgreSQL cluster started for the run."""

from __future__ import annotations

import os
import pwd
import shutil
import subprocess
import tempfile
import uuid
from pathlib import Path

import psycopg
import pytest
from sumwright.notebook.store import Store

NEEDS = (
    "The notebook's tests need PostgreSQL's own programs (initdb, pg_ctl): apt-get install postgresql. "
    "As root they also need a user to run it as: the package makes `postgres`."
)


class Cluster:
    """A PostgreSQL server on a socket in a folder of its own; no port is opened."""

    def __init__(self, bin_folder: Path):
        self._bin = bin_folder
        self.folder = Path(tempfile.mkdtemp(prefix="pg-", dir="/tmp" if Path("/tmp").is_dir() else None))
        self._as: dict[str, object] = {}
        self._reused: str | None = None
        if os.geteuid() == 0:
            owner = pwd.getpwnam("postgres")
            os.chown(self.folder, owner.pw_uid, owner.pw_gid)
            self._as = {"user": owner.pw_uid, "group": owner.pw_gid, "extra_groups": []}
        self._run("initdb", "--pgdata", self._data, "--username", "sumwright", "--auth", "trust", "--no-sync")
        self.start()

    @property
    def _data(self) -> str:
        return str(self.folder / "data")

    def _run(self, program: str, *arguments: str) -> None:
        done = subprocess.run(
            [str(self._bin / program), *arguments],
            cwd=self.folder, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True, **self._as,
        )  # fmt: skip
        assert done.returncode == 0, f"{program} failed: {done.stderr}"

    def start(self) -> None:
        options = f"-c listen_addresses='' -c unix_socket_directories='{self.folder}' -c fsync=off -c max_wal_size=64MB -c min_wal_size=32MB"
        log = str(self.folder / "log")
        self._run("pg_ctl", "start", "--wait", "--pgdata", self._data, "--log", log, "--options", options)

    def stop(self, mode: str = "immediate") -> None:
        self._run("pg_ctl", "stop", "--wait", "--pgdata", self._data, "--mode", mode)

    def url(self, database: str = "postgres") -> str:
        return f"postgresql://sumwright@/{database}?host={self.folder}"

    def new_database(self) -> str:
        name = f"t{uuid.uuid4().hex[:12]}"
        with psycopg.connect(self.url(), autocommit=True) as connection:
            connection.execute(f"CREATE DATABASE {name}")
        return self.url(name)

    def empty_database(self) -> str:
        """One database for test after test, emptied: a new one is three hundred files, which the disk feels."""
        if self._reused is None:
            self._reused = self.new_database()
        with psycopg.connect(self._reused, autocommit=True) as connection:
            connection.execute(
                "SELECT pg_terminate_backend(pid) FROM pg_stat_activity "
                "WHERE datname = current_database() AND pid <> pg_backend_pid()"
            )
            connection.execute("DROP SCHEMA public CASCADE")
            connection.execute("CREATE SCHEMA public")
        return self._reused


def _programs() -> Path:
    folders = [Path(p).parent for p in [shutil.which("initdb")] if p]
    folders += sorted(Path("/usr/lib/postgresql").glob("*/bin"), reverse=True)
    for folder in folders:
        if (folder / "initdb").exists() and (folder / "pg_ctl").exists():
            return folder
    pytest.fail(NEEDS, pytrace=False)


@pytest.fixture(scope="session")
def cluster():
    try:
        started = Cluster(_programs())
    except KeyError:
        pytest.fail(NEEDS, pytrace=False)
    yield started
    started.stop()
    shutil.rmtree(started.folder, ignore_errors=True)


@pytest.fixture(params=["sqlite", pytest.param("postgresql", marks=pytest.mark.store)])
def url(request, tmp_path):
    """The address of a store that does not exist yet."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'data' / 'notebook.db'}"
    return request.getfixturevalue("cluster").empty_database()


@pytest.fixture
def store(url):
    made = Store(url)
    yield made
    made.close()


@pytest.fixture
def sqlite_store(tmp_path):
    made = Store(tmp_path / "first" / "notebook.db")
    yield made
    made.close()
