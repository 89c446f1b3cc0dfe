"""A person at the store: every act is allowed or refused here, on the server, whatever a button or a message says.

The page holds a desk and never the store. The role is looked up at each act, so a change of it counts at once, also
for pages that are open.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from . import bundle
from .autosave import Snapshot
from .entries import Entry, Flaw
from .people import Person, require
from .store import Notebook, Sheet, Store
from .text import InvalidText

SET_ASIDE = "Set aside"


class Desk:
    """What one signed-in person does with the notebooks.

    Parameters
    ----------
    store : Store or callable
        Where the notebooks are; a callable gives the store, or raises StoreError while it cannot be reached.
    who : callable
        Gives the person as they are now; NotAllowed when there is nobody any more.
    """

    def __init__(self, store: Store | Callable[[], Store], who: Callable[[], Person]):
        self._where, self._who = store, who

    @property
    def _store(self) -> Store:
        return self._where if isinstance(self._where, Store) else self._where()

    @property
    def person(self) -> Person:
        return self._who()

    def may(self, action: str) -> bool:
        """Whether the person may now; for what to show. Each act asks again."""
        return self._who().may(action)

    def require(self, action: str) -> Person:
        """The person, or NotAllowed."""
        person = self._who()
        require(person, action)
        return person

    # looking
    def notebooks(self, *, text: str = "", archived: bool = False) -> list[Notebook]:
        self.require("read")
        return self._store.notebooks(text=text, archived=archived)

    def notebook(self, key: str) -> Notebook:
        self.require("read")
        return self._store.notebook(key)

    def sheet(self, key: str, number: int) -> Sheet:
        self.require("read")
        return self._store.sheet(key, number)

    def revision(self, key: str, number: int) -> tuple[int, str, str]:
        self.require("read")
        return self._store.revision(key, number)

    def entries(self, key: str, *, text: str = "", kind: str | None = None, most: int | None = None) -> list[Entry]:
        self.require("read")
        return self._store.entries(key, text=text, kind=kind, most=most)

    def entry(self, key: str, number: int) -> Entry:
        self.require("read")
        return self._store.entry(key, number)

    def search(self, text: str) -> list[tuple[Notebook, Entry]]:
        self.require("read")
        return self._store.search(text)

    def verify(self, key: str) -> list[Flaw]:
        self.require("read")
        return self._store.verify(key)

    def export(self, key: str) -> bytes:
        self.require("export")
        return bundle.export_notebook(self._store, key)

    # writing
    def new_notebook(self, title: str, state: dict[str, Any], history: dict[str, Any] | None = None) -> Notebook:
        return self._store.new_notebook(title, self.require("new").name, state, history=history)

    def new_sheet(self, key: str, title: str, state: dict[str, Any]) -> Sheet:
        return self._store.new_sheet(key, title, self.require("new").name, state)

    def rename(self, key: str, title: str) -> None:
        self.require("rename")
        self._store.rename(key, title)

    def archive(self, key: str, *, back: bool = False) -> None:
        self._store.archive(key, self.require("archive").name, back=back)

    def import_notebook(self, data: bytes) -> Notebook:
        self.require("import")
        return bundle.import_notebook(self._store, data)

    def append(self, key: str, kind: str, body: dict[str, Any], *, sheet: int | None = None) -> Entry:
        return self._store.append(key, kind, body, self.require("write").name, sheet=sheet)

    def save(self, key: str, number: int, snapshot: Snapshot, revision: int) -> tuple[int, str]:
        """What `Autosave` calls."""
        person = self.require("save")
        return self._store.save(
            key, number, snapshot.state, person.name, revision=revision, history=snapshot.history
        )  # fmt: skip

    def set_aside(self, theirs: Sheet) -> Entry:
        """Keep what somebody else saved as a frozen design, before it is saved over."""
        design = theirs.state.get("design")
        if not isinstance(design, dict):
            raise InvalidText("The sheet saved elsewhere holds no design; it cannot be set aside.")
        body = {
            "title": f"{SET_ASIDE}: as {theirs.saved_by} saved it at {theirs.saved_at[:19].replace('T', ' ')} UTC",
            "design": design,
            "unplugged": list(theirs.state.get("unplugged") or ()),
        }
        return self.append(theirs.notebook, "frozen", body, sheet=theirs.number)
