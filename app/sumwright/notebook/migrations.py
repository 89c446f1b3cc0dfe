"""How a store made by any earlier version becomes one that this version reads.

Each step takes the store from one schema to the next, inside one transaction, and is never edited once released: it
builds what was true then, not what `tables` says now. A store of a newer schema is refused and left alone.
"""

from __future__ import annotations

import json

from sqlalchemy import Connection, inspect, text

from sumwright.errors import StoreError

from .entries import FIRST, utc_now, words_of

_BUSY = 7_360_118_201  # any number of our own: names the lock that keeps two processes from migrating at once


def _first(connection: Connection) -> None:
    """Schema 1: notebooks, sheets, entries."""
    blob = "BYTEA" if connection.dialect.name == "postgresql" else "BLOB"
    for statement in (
        "CREATE TABLE notebooks (id VARCHAR(32) PRIMARY KEY, title VARCHAR(200) NOT NULL,"
        " created_at VARCHAR(32) NOT NULL, created_by VARCHAR(200) NOT NULL,"
        " archived_at VARCHAR(32), archived_by VARCHAR(200))",
        "CREATE TABLE sheets (notebook VARCHAR(32) NOT NULL REFERENCES notebooks (id), number INTEGER NOT NULL,"
        f" title VARCHAR(200) NOT NULL, state TEXT NOT NULL, history {blob} NOT NULL, revision INTEGER NOT NULL,"
        " saved_at VARCHAR(32) NOT NULL, saved_by VARCHAR(200) NOT NULL, PRIMARY KEY (notebook, number))",
        "CREATE TABLE entries (notebook VARCHAR(32) NOT NULL REFERENCES notebooks (id), number INTEGER NOT NULL,"
        " kind VARCHAR(16) NOT NULL, at VARCHAR(32) NOT NULL, author VARCHAR(200) NOT NULL, sheet INTEGER,"
        " body TEXT NOT NULL, previous VARCHAR(64) NOT NULL, sha256 VARCHAR(64) NOT NULL,"
        " PRIMARY KEY (notebook, number))",
    ):
        connection.execute(text(statement))


def _copies_and_length(connection: Connection) -> None:
    """Schema 2: a copy keeps the name its hashes cover, and a notebook knows how long its log is."""
    connection.execute(text("ALTER TABLE notebooks ADD COLUMN origin VARCHAR(32)"))
    connection.execute(text("UPDATE notebooks SET origin = id"))
    connection.execute(text("ALTER TABLE notebooks ADD COLUMN length INTEGER NOT NULL DEFAULT 0"))
    connection.execute(text(f"ALTER TABLE notebooks ADD COLUMN head VARCHAR(64) NOT NULL DEFAULT '{FIRST}'"))
    connection.execute(
        text(
            "UPDATE notebooks SET"
            " length = (SELECT COUNT(*) FROM entries WHERE entries.notebook = notebooks.id),"
            " head = COALESCE((SELECT sha256 FROM entries WHERE entries.notebook = notebooks.id"
            " ORDER BY number DESC LIMIT 1), head)"
        )
    )


def _searchable(connection: Connection) -> None:
    """Schema 3: what a search looks through, folded once at writing."""
    connection.execute(text("ALTER TABLE entries ADD COLUMN words TEXT NOT NULL DEFAULT ''"))
    for notebook, number, kind, author, body in connection.execute(
        text("SELECT notebook, number, kind, author, body FROM entries")
    ).all():
        connection.execute(
            text("UPDATE entries SET words = :words WHERE notebook = :notebook AND number = :number"),
            {"words": words_of(kind, author, json.loads(body)), "notebook": notebook, "number": number},
        )


def _written_once(connection: Connection) -> None:
    """Schema 4: the database itself refuses to change or delete an entry."""
    if connection.dialect.name == "postgresql":
        connection.execute(
            text(
                "CREATE OR REPLACE FUNCTION sumwright_entries_are_written_once() RETURNS trigger AS"
                " $$ BEGIN RAISE EXCEPTION 'entries are written once'; END $$ LANGUAGE plpgsql"
            )
        )
        connection.execute(
            text(
                "CREATE TRIGGER entries_written_once BEFORE UPDATE OR DELETE ON entries"
                " FOR EACH ROW EXECUTE FUNCTION sumwright_entries_are_written_once()"
            )
        )
        return
    for act in ("UPDATE", "DELETE"):
        connection.execute(
            text(
                f"CREATE TRIGGER entries_no_{act.lower()} BEFORE {act} ON entries"
                " BEGIN SELECT RAISE(ABORT, 'entries are written once'); END"
            )
        )


STEPS = (_first, _copies_and_length, _searchable, _written_once)
SCHEMA = len(STEPS)


def schema_of(connection: Connection) -> int:
    """The schema the store has; 0 for an empty one."""
    if not inspect(connection).has_table("schema_versions"):
        return 0
    return connection.execute(text("SELECT COALESCE(MAX(version), 0) FROM schema_versions")).scalar_one()


def migrate(connection: Connection, *, upto: int = SCHEMA) -> int:
    """Bring the store to schema `upto`, inside the caller's transaction; the schema it had before.

    Raises
    ------
    StoreError
        If the store is of a newer schema than this version knows, or holds tables of something else.
    """
    if connection.dialect.name == "postgresql":
        connection.execute(text("SELECT pg_advisory_xact_lock(:key)"), {"key": _BUSY})
    had = schema_of(connection)
    if had > SCHEMA:
        raise StoreError(
            f"The notebook store has schema {had}, made by a newer Sumwright; this one knows up to {SCHEMA}. "
            "Update Sumwright; nothing was changed."
        )
    if had == 0:
        if inspect(connection).has_table("notebooks"):
            raise StoreError("The database holds a table 'notebooks' that is not Sumwright's; give it one of its own.")
        if upto:
            connection.execute(
                text("CREATE TABLE schema_versions (version INTEGER PRIMARY KEY, applied_at VARCHAR(32) NOT NULL)")
            )
    for version in range(had, upto):
        STEPS[version](connection)
        connection.execute(
            text("INSERT INTO schema_versions (version, applied_at) VALUES (:version, :at)"),
            {"version": version + 1, "at": utc_now()},
        )
    return had
