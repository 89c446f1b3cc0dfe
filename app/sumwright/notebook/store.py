"""The store: notebooks, their sheets at work and their log, in SQLite or PostgreSQL by one code path.

Every public method is one transaction and may be called from any thread. An entry is on the disk when `append`
returns (SQLite: write-ahead log with full synchronisation; PostgreSQL: its own commit). Whatever the database throws
comes out as one `StoreError` with a sentence fit to show.
"""

from __future__ import annotations

import json
import math
import secrets
import shutil
import sqlite3
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Engine, create_engine, event, func, select, update
from sqlalchemy.engine import make_url
from sqlalchemy.exc import ArgumentError, SQLAlchemyError
from sqlalchemy.orm import Session
from sqlalchemy.pool import NullPool

from sumwright.errors import Conflict, StoreError

from . import entries as log
from .entries import Entry, Flaw
from .migrations import migrate
from .tables import EntryRow, NotebookRow, SheetRow
from .text import InvalidText, canonical, clean_line

STATE_MOST = 4_000_000  # bytes of a sheet's state
HISTORY_MOST = 16_000_000  # bytes of its undo history before compression
ROOM_LEAST = 1_000_000  # bytes free on the disk under which a refusal says that it is full
WAIT = 5.0  # s that a writer waits for another before it gives up


@dataclass(frozen=True, slots=True)
class Notebook:
    """What a list of notebooks shows; times are UTC."""

    id: str
    origin: str
    title: str
    created_at: str
    created_by: str
    archived_at: str | None
    length: int
    head: str
    sheets: tuple[tuple[int, str], ...] = ()
    changed_at: str = ""
    changed_by: str = ""


@dataclass(frozen=True, slots=True)
class Sheet:
    """A sheet as it was last saved. `state` is the page's own JSON object, `history` its undo steps."""

    notebook: str
    number: int
    title: str
    state: dict[str, Any]
    history: dict[str, Any]
    revision: int
    saved_at: str
    saved_by: str


class SheetConflict(Conflict):
    """Somebody else saved the sheet in between; `theirs` is what they saved."""

    def __init__(self, theirs: Sheet):
        super().__init__(
            f"Sheet {theirs.number} was saved by {theirs.saved_by} at {theirs.saved_at}; "
            "take theirs, keep yours, or compare the two."
        )
        self.theirs = theirs


class Store:
    """A notebook store at a database address.

    Parameters
    ----------
    url : str or Path
        `sqlite:///file`, a path (SQLite too), or `postgresql://...`.

    Raises
    ------
    StoreError
        If it cannot be reached, read or written, or was made by a newer version.
    """

    def __init__(self, url: str | Path):
        self._engine = _engine(url)
        self.place = _place(self._engine)
        with self._problems("opened"), self._engine.begin() as connection:
            migrate(connection)

    def close(self) -> None:
        self._engine.dispose()

    def ready(self) -> None:
        """StoreError unless the store answers."""
        with self._session("read") as session:
            session.execute(select(func.count()).select_from(NotebookRow)).scalar_one()

    # notebooks ---------------------------------------------------------------------------------------------------

    def new_notebook(
        self, title: str, author: str, state: dict[str, Any], *, history: dict[str, Any] | None = None
    ) -> Notebook:
        """A new notebook with one sheet."""
        title, author = clean_line("The notebook's title", title), clean_line("The author", author)
        key, now = new_id(), log.utc_now()
        with self._session("written") as session:
            session.add(
                NotebookRow(
                    id=key, origin=key, title=title, created_at=now, created_by=author, length=0, head=log.FIRST
                )
            )
            session.flush()
            session.add(_sheet_row(key, 1, "Sheet 1", state, history or {}, author, now))
        return self.notebook(key)

    def notebook(self, key: str) -> Notebook:
        """The notebook of that id; StoreError if there is none."""
        with self._session("read") as session:
            found = self._notebooks(session, NotebookRow.id == key)
        if not found:
            raise StoreError(f"There is no notebook {str(key)[:40]!r} in this store.")
        return found[0]

    def notebooks(self, *, archived: bool = False, text: str = "", most: int = 500) -> list[Notebook]:
        """Notebooks, last changed first; `text` is looked for in titles and people."""
        with self._session("read") as session:
            found = self._notebooks(
                session, NotebookRow.archived_at.is_not(None) if archived else NotebookRow.archived_at.is_(None)
            )
        words = log.fold(text).split()
        found = [n for n in found if all(w in log.fold(f"{n.title} {n.created_by} {n.changed_by}") for w in words)]
        return sorted(found, key=lambda n: n.changed_at, reverse=True)[:most]

    def rename(self, key: str, title: str) -> None:
        """Give the notebook another title."""
        title = clean_line("The notebook's title", title)
        with self._session("written") as session:
            self._locked(session, key).title = title

    def archive(self, key: str, author: str, *, back: bool = False) -> None:
        """Put the notebook away, or take it back out; nothing is ever deleted."""
        with self._session("written") as session:
            row = self._locked(session, key)
            row.archived_at, row.archived_by = (None, None) if back else (log.utc_now(), author)

    # sheets ------------------------------------------------------------------------------------------------------

    def new_sheet(self, key: str, title: str, author: str, state: dict[str, Any]) -> Sheet:
        """One more sheet in the notebook."""
        title = clean_line("The sheet's title", title)
        with self._session("written") as session:
            self._open_for_writing(session, key)
            most = session.scalar(select(func.max(SheetRow.number)).where(SheetRow.notebook == key)) or 0
            row = _sheet_row(key, most + 1, title, state, {}, author, log.utc_now())
            session.add(row)
            session.flush()
            return _sheet(row)

    def sheet(self, key: str, number: int) -> Sheet:
        """A sheet as last saved; StoreError if there is none."""
        with self._session("read") as session:
            row = session.get(SheetRow, (key, number))
            if row is None:
                raise StoreError(f"There is no sheet {number} in notebook {str(key)[:40]!r}.")
            return _sheet(row)

    def revision(self, key: str, number: int) -> tuple[int, str, str]:
        """Revision, who saved it last, and when: cheap enough to ask every few seconds."""
        with self._session("read") as session:
            found = session.execute(
                select(SheetRow.revision, SheetRow.saved_by, SheetRow.saved_at).where(
                    SheetRow.notebook == key, SheetRow.number == number
                )
            ).one_or_none()
        if found is None:
            raise StoreError(f"There is no sheet {number} in notebook {str(key)[:40]!r}.")
        return found[0], found[1], found[2]

    def save(
        self,
        key: str,
        number: int,
        state: dict[str, Any],
        author: str,
        *,
        revision: int,
        history: dict[str, Any] | None = None,
        title: str | None = None,
    ) -> tuple[int, str]:
        """Save the sheet if nobody did since `revision`; its new revision and the time.

        Raises
        ------
        SheetConflict
            If somebody else saved it in between; it carries what they saved, and nothing was written.
        StoreError
            If it could not be written.
        """
        now = log.utc_now()
        values: dict[str, Any] = {
            "state": _state_text(state), "revision": revision + 1, "saved_at": now, "saved_by": author
        }  # fmt: skip
        if history is not None:
            values["history"] = _history_bytes(history)
        if title is not None:
            values["title"] = clean_line("The sheet's title", title)
        with self._session("written") as session:
            self._open_for_writing(session, key, lock=False)
            done = session.execute(
                update(SheetRow)
                .where(SheetRow.notebook == key, SheetRow.number == number, SheetRow.revision == revision)
                .values(**values)
            )
            if done.rowcount == 1:  # type: ignore[attr-defined]
                return revision + 1, now
        raise SheetConflict(self.sheet(key, number))

    # entries -----------------------------------------------------------------------------------------------------

    def append(self, key: str, kind: str, body: dict[str, Any], author: str, *, sheet: int | None = None) -> Entry:
        """Write an entry at the end of the log; it is on the disk when this returns."""
        body, author = log.checked_body(kind, body), clean_line("The author", author)
        with self._session("written") as session:
            notebook = self._open_for_writing(session, key)
            if kind == "correction" and body["of"] > notebook.length:
                raise InvalidText(f"Entry {body['of']} cannot be corrected: the log has {notebook.length} entries.")
            if sheet is not None and session.get(SheetRow, (key, sheet)) is None:
                raise StoreError(f"There is no sheet {sheet} in notebook {key!r}.")
            last = session.get(EntryRow, (key, notebook.length)) if notebook.length else None
            entry = log.make_entry(
                notebook.origin, _entry(last) if last else None, kind, body, author, sheet, log.utc_now()
            )
            session.add(_entry_row(key, entry))
            notebook.length, notebook.head = entry.number, entry.sha256
        return entry

    def entries(
        self, key: str, *, text: str = "", kind: str | None = None, after: int = 0, most: int | None = None
    ) -> list[Entry]:
        """Entries in order, all of whose words are found in them, at most the newest `most`."""
        question = select(EntryRow).where(EntryRow.notebook == key, EntryRow.number > after)
        if kind is not None:
            question = question.where(EntryRow.kind == kind)
        for word in log.fold(text[:200]).split():
            question = question.where(EntryRow.words.contains(word, autoescape=True))
        question = question.order_by(EntryRow.number.desc())
        with self._session("read") as session:
            rows = session.scalars(question if most is None else question.limit(most)).all()
            return [_entry(row) for row in reversed(rows)]

    def entry(self, key: str, number: int) -> Entry:
        """One entry; StoreError if there is none."""
        with self._session("read") as session:
            row = session.get(EntryRow, (key, number))
            if row is None:
                raise StoreError(f"There is no entry {number} in notebook {str(key)[:40]!r}.")
            return _entry(row)

    def search(self, text: str, *, most: int = 200) -> list[tuple[Notebook, Entry]]:
        """Entries of all notebooks not archived in which every word is found, newest first."""
        words = log.fold(text[:200]).split()
        if not words:
            return []
        question = select(EntryRow).join(NotebookRow, NotebookRow.id == EntryRow.notebook)
        question = question.where(NotebookRow.archived_at.is_(None))
        for word in words:
            question = question.where(EntryRow.words.contains(word, autoescape=True))
        with self._session("read") as session:
            rows = session.scalars(question.order_by(EntryRow.at.desc()).limit(most)).all()
            books = {n.id: n for n in self._notebooks(session, NotebookRow.id.in_({row.notebook for row in rows}))}
            return [(books[row.notebook], _entry(row)) for row in rows]

    def verify(self, key: str) -> list[Flaw]:
        """Where the log of the notebook was changed after it was written; empty when it was not."""
        notebook = self.notebook(key)
        entries = self.entries(key)
        found = log.flaws(notebook.origin, entries)
        if len(entries) != notebook.length or (entries and entries[-1].sha256 != notebook.head):
            found.append(Flaw(len(entries) + 1, f"the log had {notebook.length} entries; {len(entries)} are found"))
        return found

    # a whole notebook --------------------------------------------------------------------------------------------

    def whole(self, key: str) -> tuple[Notebook, list[Sheet], list[Entry]]:
        """Everything of a notebook, read at one moment."""
        with self._session("read") as session:
            found = self._notebooks(session, NotebookRow.id == key)
            if not found:
                raise StoreError(f"There is no notebook {str(key)[:40]!r} in this store.")
            sheets = session.scalars(select(SheetRow).where(SheetRow.notebook == key).order_by(SheetRow.number)).all()
            rows = session.scalars(select(EntryRow).where(EntryRow.notebook == key).order_by(EntryRow.number)).all()
            return found[0], [_sheet(row) for row in sheets], [_entry(row) for row in rows]

    def put(self, notebook: Notebook, sheets: list[Sheet], entries: list[Entry]) -> Notebook:
        """Add a whole notebook whose chain holds, under a new id when its own is taken; nothing is overwritten."""
        if flawed := log.flaws(notebook.origin, entries):
            raise StoreError(f"The log of {notebook.title!r} does not hold: {flawed[0].why}.")
        if len({sheet.number for sheet in sheets}) != len(sheets) or not sheets:
            raise StoreError(f"The notebook {notebook.title!r} needs sheets with numbers of their own.")
        with self._session("written") as session:
            taken = session.get(NotebookRow, notebook.id) is not None
            key = new_id() if taken else notebook.id
            title = f"{notebook.title[:190]} (copy)" if taken else notebook.title
            session.add(
                NotebookRow(
                    id=key, origin=notebook.origin, title=title, created_at=notebook.created_at,
                    created_by=notebook.created_by, archived_at=notebook.archived_at,
                    length=len(entries), head=entries[-1].sha256 if entries else log.FIRST,
                )
            )  # fmt: skip
            session.flush()
            for sheet in sheets:
                session.add(
                    _sheet_row(
                        key, sheet.number, sheet.title, sheet.state, sheet.history, sheet.saved_by, sheet.saved_at
                    )
                )
            session.add_all(_entry_row(key, entry) for entry in entries)
        return self.notebook(key)

    # inside ------------------------------------------------------------------------------------------------------

    def _notebooks(self, session: Session, which: Any) -> list[Notebook]:
        rows = session.scalars(select(NotebookRow).where(which)).all()
        keys = [row.id for row in rows]
        last: dict[str, list[tuple[int, str, str, str]]] = {}
        for key, number, title, at, by in session.execute(
            select(SheetRow.notebook, SheetRow.number, SheetRow.title, SheetRow.saved_at, SheetRow.saved_by)
            .where(SheetRow.notebook.in_(keys))
            .order_by(SheetRow.number)
        ):
            last.setdefault(key, []).append((number, title, at, by))
        found = []
        for row in rows:
            sheets = last.get(row.id, [])
            newest = max(sheets, key=lambda s: s[2], default=(0, "", row.created_at, row.created_by))
            found.append(
                Notebook(
                    row.id, row.origin, row.title, row.created_at, row.created_by, row.archived_at, row.length,
                    row.head, tuple((s[0], s[1]) for s in sheets), newest[2], newest[3],
                )
            )  # fmt: skip
        return found

    def _locked(self, session: Session, key: str) -> NotebookRow:
        row = session.scalar(select(NotebookRow).where(NotebookRow.id == key).with_for_update())
        if row is None:
            raise StoreError(f"There is no notebook {str(key)[:40]!r} in this store.")
        return row

    def _open_for_writing(self, session: Session, key: str, *, lock: bool = True) -> NotebookRow:
        row = self._locked(session, key) if lock else session.get(NotebookRow, key)
        if row is None:
            raise StoreError(f"There is no notebook {str(key)[:40]!r} in this store.")
        if row.archived_at is not None:
            raise StoreError(f"The notebook {row.title!r} is archived; take it out of the archive to write in it.")
        return row

    @contextmanager
    def _session(self, doing: str) -> Iterator[Session]:
        with self._problems(doing), Session(self._engine, expire_on_commit=False) as session:
            if self._engine.dialect.name == "sqlite":
                session.connection(
                    execution_options={"sumwright_begin": "DEFERRED" if doing == "read" else "IMMEDIATE"}
                )
            elif doing == "read":
                session.connection(execution_options={"isolation_level": "REPEATABLE READ"})
            yield session
            session.commit()

    @contextmanager
    def _problems(self, doing: str) -> Iterator[None]:
        try:
            yield
        except (SQLAlchemyError, sqlite3.Error, json.JSONDecodeError, zlib.error) as error:
            cause = " ".join(str(getattr(error, "orig", None) or error).split())[:200]
            if self._engine.dialect.name == "sqlite" and _room(self.place) < ROOM_LEAST:
                cause += "; the disk it is on is full, make room there"
            raise StoreError(f"The notebook store {self.place} cannot be {doing}: {cause}.") from error


def _room(place: str) -> float:
    """Bytes free where a file is; infinite where nobody can say."""
    try:
        return shutil.disk_usage(Path(place).parent).free
    except OSError:
        return math.inf


def new_id() -> str:
    """A notebook's id: 80 random bits in the alphabet of RFC 4648 base 32, lower case, good in links and file names."""
    return "".join(secrets.choice("abcdefghijklmnopqrstuvwxyz234567") for _ in range(16))


def _engine(url: str | Path) -> Engine:
    try:
        address = make_url(f"sqlite:///{url}" if isinstance(url, Path) else url)
    except ArgumentError:
        raise StoreError(
            "The store's address is not a database address: write a path, sqlite:///PATH or postgresql://USER@HOST/NAME."
        ) from None
    backend = address.get_backend_name()
    if backend == "sqlite":
        if address.database in (None, "", ":memory:"):
            raise StoreError("The store's address names no file; write sqlite:///PATH.")
        folder = Path(address.database).parent
        try:
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        except OSError as error:
            raise StoreError(f"The folder {folder} of the notebook store cannot be made: {error.strerror}.") from error
        # No pool: a connection to a file costs microseconds, and none outlives a file that is moved or restored.
        engine = create_engine(address, poolclass=NullPool, connect_args={"timeout": WAIT})
        event.listen(engine, "connect", _sqlite_set_up)
        event.listen(engine, "begin", _sqlite_begin)
        return engine
    if backend != "postgresql":
        raise StoreError(f"The store's address is of {backend!r}; it may be of sqlite or postgresql.")
    if address.drivername == "postgresql":
        address = address.set(drivername="postgresql+psycopg")
    try:
        return create_engine(
            address,
            pool_pre_ping=True,
            pool_size=4,
            max_overflow=8,
            pool_timeout=WAIT,
            connect_args={"connect_timeout": int(WAIT), "options": "-c lock_timeout=5000 -c statement_timeout=30000"},
        )
    except ModuleNotFoundError:
        raise StoreError(
            "The store's address is of postgresql, whose driver is not installed: pip install 'sumwright[postgres]'."
        ) from None


def _place(engine: Engine) -> str:
    """The store's address without its password."""
    return (
        str(engine.url.database) if engine.dialect.name == "sqlite" else engine.url.render_as_string(hide_password=True)
    )


def _sqlite_set_up(connection: Any, _record: Any) -> None:
    connection.isolation_level = None  # `begin` says which transaction it is, not the driver
    for pragma in ("journal_mode = WAL", "synchronous = FULL", "foreign_keys = ON", "trusted_schema = OFF"):
        connection.execute(f"PRAGMA {pragma}")


def _sqlite_begin(connection: Any) -> None:
    # A transaction that reads first and writes later can be refused half way; one that says so at once waits its turn.
    connection.exec_driver_sql(f"BEGIN {connection.get_execution_options().get('sumwright_begin', 'IMMEDIATE')}")


def _state_text(state: dict[str, Any]) -> str:
    return _json_bytes("sheet", state, STATE_MOST).decode("utf-8")


def _history_bytes(history: dict[str, Any]) -> bytes:
    return zlib.compress(_json_bytes("undo history", history, HISTORY_MOST), 1)


def _json_bytes(what: str, value: dict[str, Any], most: int) -> bytes:
    try:
        data = canonical(value).encode("utf-8")
    except (ValueError, TypeError, RecursionError) as error:
        raise InvalidText(f"The {what} cannot be written as JSON: {error}.") from None
    if len(data) > most:
        raise InvalidText(f"The {what} has {len(data)} bytes as JSON; at most {most} are kept.")
    return data


def _sheet_row(
    key: str, number: int, title: str, state: dict[str, Any], history: dict[str, Any], author: str, at: str
) -> SheetRow:
    return SheetRow(
        notebook=key, number=number, title=title, state=_state_text(state), history=_history_bytes(history),
        revision=1, saved_at=at, saved_by=author,
    )  # fmt: skip


def _sheet(row: SheetRow) -> Sheet:
    unpack = zlib.decompressobj()
    history = unpack.decompress(row.history, HISTORY_MOST)
    return Sheet(
        row.notebook, row.number, row.title, json.loads(row.state), json.loads(history), row.revision, row.saved_at,
        row.saved_by,
    )  # fmt: skip


def _entry(row: EntryRow) -> Entry:
    return Entry(
        row.number, row.kind, row.at, row.author, row.sheet, json.loads(row.body), row.previous, row.sha256
    )  # fmt: skip


def _entry_row(key: str, entry: Entry) -> EntryRow:
    return EntryRow(
        notebook=key, number=entry.number, kind=entry.kind, at=entry.at, author=entry.author, sheet=entry.sheet,
        body=canonical(entry.body), previous=entry.previous, sha256=entry.sha256,
        words=log.words_of(entry.kind, entry.author, entry.body),
    )  # fmt: skip
