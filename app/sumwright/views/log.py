"""The fold Log: the notebook itself, newest entry first; notes, frozen designs, compare, search, export and import.

What the store holds is asked for beside the server's thread and only when something changed, never with each frame of
a drag. Who may do what is the desk's to say; a message from a browser is only a wish.
"""

from __future__ import annotations

import base64
import binascii
import math
import re
import secrets
from collections.abc import Callable
from typing import Any

from sumwright import fields
from sumwright.errors import InvalidDesign, InvalidQuantity, NotAllowed, SumwrightError
from sumwright.files.design import read_design
from sumwright.notebook.bundle import FILE_MOST
from sumwright.notebook.compare import Change, Comparison, compare
from sumwright.notebook.entries import Entry
from sumwright.notebook.markdown import note_html
from sumwright.notebook.text import NOTE_MOST, TITLE_MOST, InvalidText
from sumwright.quantity import format_fixed, format_quantity

from .fold import Context, Fold
from .held import hold_design

PAGE = 100  # entries shown at first, and with each "more"
BOOKS = 60  # notebooks in the list
HITS = 40  # entries found in all notebooks
PART = 1_500_000  # bytes of a file in one message
_UNSCALED = ("%", "°", "°C", "V/V")  # units that are not written with a prefix
_ERROR = re.compile("error (present|highest|lowest), (expanded 95|worst case)")
_AT = {"present": "at the present values", "highest": "at the highest corner", "lowest": "at the lowest corner"}
SHEET = "sheet"  # what stands for the sheet at work where two designs are compared


class Log(Fold):
    """The notebook of the open sheet."""

    title = "Log"

    def __init__(self, context: Context):
        super().__init__(context)
        self._sitting = context.extras.get("sitting")
        self._most = PAGE
        self._query = ""
        self._books: list[dict[str, Any]] | None = None
        self._hits: list[dict[str, Any]] = []
        self._listing: dict[str, Any] = {}
        self._compared: dict[str, Any] | None = None
        self._done: dict[str, Any] | None = None
        self._file: bytes = b""
        self._coming: list[bytes] = []
        self.news()

    # ------------------------------------------------------------ what is shown

    def show(self) -> dict[str, Any]:
        if self._sitting is None:
            return {"none": True}
        place = self._sitting.place
        mark = self._sitting.autosave.mark if self._sitting.autosave else None
        conflict = None
        if mark is not None and mark.theirs is not None:
            conflict = {"by": mark.theirs.saved_by, "at": mark.theirs.saved_at}
        return {
            **self._listing, "place": place, "query": self._query, "books": self._books, "hits": self._hits, "compared": self._compared,
            "done": self._done, "conflict": conflict, "may": self._may(),
        }  # fmt: skip

    def _may(self) -> dict[str, Any]:
        try:
            person = self._sitting.desk.person
        except NotAllowed:
            return {"name": "", "role": ""}
        actions = ("write", "save", "new", "import", "archive", "rename")
        return {"name": person.name, "role": person.role, **{a: person.may(a) for a in actions}}

    def news(self) -> None:
        """Something in the notebook changed: read it again, then show it."""
        if self._sitting is None or not self._sitting.key:
            self._listing = {"entries": [], "more": False, "title": "", "sheets": []}
            self.context.refresh()
            return
        key, query, most, desk = self._sitting.key, self._query, self._most, self._sitting.desk

        def read() -> dict[str, Any]:
            notebook = desk.notebook(key)
            found = desk.entries(key, text=query, most=most + 1)
            frozen = desk.entries(key, kind="frozen")
            letters = {e.number: letter(k) for k, e in enumerate(frozen)}
            return {
                "title": notebook.title,
                "archived": notebook.archived_at is not None,
                "sheets": [list(s) for s in notebook.sheets],
                "entries": [shown_entry(e, letters) for e in reversed(found[-most:])],
                "more": len(found) > most,
                "frozen": [[e.number, letters[e.number], str(e.body["title"])] for e in reversed(frozen)],
                "length": notebook.length,
            }

        self._sitting.aside(read, self._listed, self._refused)

    def _listed(self, listing: dict[str, Any]) -> None:
        self._listing = listing
        self.context.refresh()

    def _refused(self, sentence: str) -> None:
        self._done = {"refused": sentence, "token": (self._done or {}).get("token"), "id": secrets.token_hex(4)}
        self.context.refresh()

    # ------------------------------------------------------------ what is asked

    def handle(self, message: dict) -> dict | None:
        if self._sitting is None:
            raise InvalidQuantity("This sheet has no notebook.")
        asked = message.get("ask")
        if not isinstance(asked, str) or asked not in _ASKED:
            raise InvalidQuantity("The log was asked for something it does not know.")
        return _ASKED[asked](self, message)

    def _do(self, message: dict, work: Callable[[], Any], then: Callable[[Any], dict[str, Any] | None]) -> None:
        """Do something at the desk beside the server's thread; the browser hears by the token it sent."""
        token = fields.text(message, "token", 40)
        self._done = {"token": token, "busy": True}

        def finished(result: Any) -> None:
            self._done = {"token": token, "id": secrets.token_hex(4), **(then(result) or {})}
            self.news()

        self._sitting.aside(work, finished, self._refused)

    def _key(self) -> str:
        """The open notebook; the sheet has none until it is first saved."""
        if not self._sitting.key:
            raise InvalidText(
                "This sheet is not in a notebook yet: change something on it, or begin a notebook with it."
            )
        return self._sitting.key

    def _write(self, message: dict) -> None:
        kind = fields.one_of(message, "kind", ("note", "decision", "correction"))
        body: dict[str, Any] = {"text": fields.text(message, "text", NOTE_MOST + 1)}
        if kind == "correction":
            body["of"] = fields.whole(message, "of", 1, 10**7)
        sitting = self._sitting
        sitting.desk.require("write")
        self._do(message, lambda: self._append(kind, body), lambda entry: {"number": entry.number})

    def _freeze(self, message: dict) -> None:
        title = fields.text(message, "title", TITLE_MOST + 1).strip() or "as the sheet stands"
        self._sitting.desk.require("write")
        body = self._sitting.frozen(title)
        self._do(message, lambda: self._append("frozen", body), lambda entry: {"number": entry.number})

    def _append(self, kind: str, body: dict[str, Any]) -> Entry:
        """In a thread: a first entry makes the notebook that it goes into."""
        sitting = self._sitting
        if not sitting.key:
            sitting.begin_notebook()
        return sitting.desk.append(sitting.key, kind, body, sheet=sitting.number)

    def _search(self, message: dict) -> None:
        self._query, self._most = fields.text(message, "text", 200), PAGE
        self.news()

    def _more(self, message: dict) -> None:
        self._most = min(self._most + PAGE, 10_000)
        self.news()

    def _compare(self, message: dict) -> None:
        sides = [message.get("a"), message.get("b")]
        for side in sides:
            if side != SHEET and (type(side) is not int or not 1 <= side <= 10**7):
                raise InvalidQuantity("What is compared is a frozen entry's number, or the sheet.")
        key = self._key() if any(side != SHEET for side in sides) else ""
        desk = self._sitting.desk
        present = self._sitting.frozen("the sheet")

        def read() -> Comparison:
            bodies = [present if side == SHEET else _frozen(desk.entry(key, side)) for side in sides]
            return compare(*bodies)

        self._do(message, read, lambda found: self._compared_now(sides, found))

    def _conflict(self, message: dict) -> None:
        """Theirs and mine side by side."""
        mark = self._sitting.autosave.mark if self._sitting.autosave else None
        if mark is None or mark.theirs is None:
            raise InvalidText("Nobody else has changed this sheet.")
        theirs = {
            "title": "theirs",
            "design": mark.theirs.state.get("design") or {},
            "unplugged": mark.theirs.state.get("unplugged"),
        }
        mine = {**self._sitting.frozen("mine"), "results": {}, "checks": []}
        self._compared_now(["theirs", "mine"], compare(theirs, mine))

    def _compared_now(self, sides: list[Any], found: Comparison) -> None:
        results = [c for c in found.results if _moved(c)]
        same = found.same_results + len(found.results) - len(results)
        self._compared = {
            "a": sides[0], "b": sides[1], "values": [_row(c) for c in found.values],
            "results": [_row(c) for c in results], "same": [found.same_values, same],
        }  # fmt: skip

    def _resolve(self, message: dict) -> None:
        choice = fields.one_of(message, "choice", ("theirs", "mine"))
        if choice == "theirs":
            self._sitting.take_theirs()
            self._compared = None
            self.news()
            return
        self._sitting.desk.require("save")
        self._do(message, self._sitting.keep_mine, lambda _: None)

    def _use(self, message: dict) -> None:
        """A frozen design back on the sheet, as one undo step."""
        key, number = self._key(), fields.whole(message, "number", 1, 10**7)
        desk, bench = self._sitting.desk, self.workbench

        def put(entry: Entry) -> dict[str, Any]:
            try:
                bench.put(read_design(_frozen(entry)["design"]))
                for name in entry.body.get("unplugged") or ():
                    bench.plug(name, True)
            except (SumwrightError, KeyError) as error:
                return {"refused": str(error)}
            self.context.refresh_sheet()
            return {"used": number}

        self._do(message, lambda: desk.entry(key, number), put)

    def _hold(self, message: dict) -> None:
        """A frozen design held beside the sheet, in the plots and margins of Budget and Response."""
        key, number = self._key(), fields.whole(message, "number", 1, 10**7)
        desk = self._sitting.desk

        def put(entry: Entry) -> dict[str, Any]:
            try:
                hold_design(self.context, read_design(_frozen(entry)["design"]), entry.body.get("unplugged") or ())
            except (SumwrightError, KeyError) as error:
                return {"refused": str(error)}
            return {"held": number}

        self._do(message, lambda: desk.entry(key, number), put)

    def _list_books(self, message: dict) -> None:
        text, archived = fields.text(message, "text", 200), message.get("archived") is True
        desk = self._sitting.desk

        def read() -> dict[str, list[dict[str, Any]]]:
            books = [
                {
                    "id": n.id, "title": n.title, "by": n.changed_by, "at": n.changed_at, "entries": n.length,
                    "sheets": [list(s) for s in n.sheets[:20]], "archived": n.archived_at is not None,
                }
                for n in desk.notebooks(text=text, archived=archived)[:BOOKS]
            ]  # fmt: skip
            found = [
                {
                    "id": n.id, "title": n.title, "number": e.number, "sheet": e.sheet or n.sheets[0][0], "by": e.author,
                    "at": e.at, "summary": f"{e.kind}: {e.summary}",
                }
                for n, e in ([] if archived else desk.search(text)[:HITS])
            ]  # fmt: skip
            return {"books": books, "hits": found}

        def listed(found: dict[str, list[dict[str, Any]]]) -> dict[str, Any]:
            self._books, self._hits = found["books"], found["hits"]
            return {}

        self._do(message, read, listed)

    def _new_book(self, message: dict) -> None:
        title, sitting = fields.text(message, "title", TITLE_MOST + 1), self._sitting
        sitting.desk.require("new")
        state = sitting.state()
        self._do(
            message, lambda: sitting.desk.new_notebook(title, state), lambda n: {"go": {"notebook": n.id, "sheet": 1}}
        )

    def _new_sheet(self, message: dict) -> None:
        title, sitting, key = fields.text(message, "title", TITLE_MOST + 1), self._sitting, self._key()
        sitting.desk.require("new")
        state = sitting.state()
        self._do(
            message, lambda: sitting.desk.new_sheet(key, title, state),
            lambda s: {"go": {"notebook": s.notebook, "sheet": s.number}},
        )  # fmt: skip

    def _rename(self, message: dict) -> None:
        title, key, desk = fields.text(message, "title", TITLE_MOST + 1), self._key(), self._sitting.desk
        desk.require("rename")
        self._do(message, lambda: desk.rename(key, title), lambda _: None)

    def _archive(self, message: dict) -> None:
        key, back, desk = fields.text(message, "id", 40), fields.truth(message, "back"), self._sitting.desk
        desk.require("archive")

        def done(_: None) -> dict[str, Any]:
            self._books = None
            if key == self._sitting.key:  # this page's own notebook: it says at once that nothing is kept, or is again
                self._sitting.archived = not back
            return {"archived": not back}

        self._do(message, lambda: desk.archive(key, back=back), done)

    def _verify(self, message: dict) -> None:
        key, desk = self._key(), self._sitting.desk
        self._do(
            message, lambda: desk.verify(key),
            lambda found: {"verified": [flaw.why for flaw in found[:20]], "length": self._listing.get("length", 0)},
        )  # fmt: skip

    # files: they pass in parts, so that no message is large and the sheet moves on meanwhile
    def _export(self, message: dict) -> None:
        key, desk = self._key(), self._sitting.desk

        def packed(data: bytes) -> dict[str, Any]:
            self._file = data
            return {"file": {"parts": -(-len(data) // PART), "name": f"notebook-{key}.zip"}}

        self._do(message, lambda: desk.export(key), packed)

    def _table(self, message: dict) -> None:
        """The readings or the capture of an entry, as they were written."""
        key, number, desk = self._key(), fields.whole(message, "number", 1, 10**7), self._sitting.desk
        desk.require("export")

        def packed(entry: Entry) -> dict[str, Any]:
            if "csv" not in entry.body:
                return {"refused": f"Entry {number} is a {entry.kind}; it holds no table."}
            self._file = entry.body["csv"].encode("utf-8")
            return {"file": {"parts": max(1, -(-len(self._file) // PART)), "name": f"{entry.kind}-{number}.csv"}}

        self._do(message, lambda: desk.entry(key, number), packed)

    def _part(self, message: dict) -> dict[str, Any]:
        k = fields.whole(message, "part", 0, 10**4)
        data = self._file[k * PART : (k + 1) * PART]
        if (k + 1) * PART >= len(self._file):
            self._file = b""
        return {"part": k, "data": base64.b64encode(data).decode("ascii")}

    def _import(self, message: dict) -> dict[str, Any] | None:
        """One part of a notebook file; with the last one it is read whole and put in, or refused whole."""
        sitting = self._sitting
        sitting.desk.require("import")
        k, parts = fields.whole(message, "part", 0, 10**3), fields.whole(message, "parts", 1, 10**3)
        if k == 0:
            self._coming = []
        if k != len(self._coming) or k >= parts:
            self._coming = []
            raise InvalidQuantity("The notebook file came in the wrong order; choose it again.")
        try:
            data = base64.b64decode(fields.text(message, "data", 2 * PART), validate=True)
        except (binascii.Error, ValueError):
            self._coming = []
            raise InvalidQuantity("The notebook file was spoilt on its way; choose it again.") from None
        self._coming.append(data)
        if sum(map(len, self._coming)) > FILE_MOST:
            self._coming = []
            raise InvalidQuantity(f"A notebook file has at most {FILE_MOST // 10**6} MB.")
        if k + 1 < parts:
            return {"next": k + 1}
        whole, self._coming = b"".join(self._coming), []
        self._do(
            message,
            lambda: sitting.import_notebook(whole),
            lambda n: {"go": {"notebook": n.id, "sheet": n.sheets[0][0]}},
        )
        return None

    def close(self) -> None:
        self._sitting = None
        self._file, self._coming, self._listing = b"", [], {}


_ASKED: dict[str, Callable[[Log, dict], dict | None]] = {
    "write": Log._write, "freeze": Log._freeze, "search": Log._search, "more": Log._more, "compare": Log._compare,
    "conflict": Log._conflict, "resolve": Log._resolve, "use": Log._use, "hold": Log._hold, "books": Log._list_books,
    "new book": Log._new_book, "new sheet": Log._new_sheet, "rename": Log._rename, "archive": Log._archive,
    "verify": Log._verify, "export": Log._export, "table": Log._table, "part": Log._part, "import": Log._import,
}  # fmt: skip


def letter(k: int) -> str:
    """The k-th letter name, k from 0: A to Z, AA, AB, ..."""
    name = ""
    k += 1
    while k:
        k, rest = divmod(k - 1, 26)
        name = chr(65 + rest) + name
    return name


def shown_entry(entry: Entry, letters: dict[int, str]) -> dict[str, Any]:
    """An entry as the log shows it; its note as HTML that has been cleaned."""
    row = {
        "number": entry.number, "kind": entry.kind, "at": entry.at, "author": entry.author, "sheet": entry.sheet,
        "sum": entry.sha256[:12],
    }  # fmt: skip
    if "text" in entry.body:
        row["html"] = note_html(entry.body["text"])
    else:
        row["text"] = str(entry.body.get("title", ""))
    if "csv" in entry.body:
        row["table"] = True
    if entry.kind == "frozen":
        row["letter"] = letters.get(entry.number, "")
    if entry.kind == "correction":
        row["of"] = entry.body["of"]
    return row


def _frozen(entry: Entry) -> dict[str, Any]:
    if entry.kind != "frozen":
        raise InvalidDesign(
            f"Entry {entry.number} is a {entry.kind}; only frozen designs can be compared or put on the sheet."
        )
    return entry.body


def _moved(change: Change) -> bool:
    """A result that differs where a person looks, in its first four figures."""
    return _text(change.before, change.unit, 4) != _text(change.after, change.unit, 4)


def _row(change: Change) -> list[str]:
    """A line of the comparison, with as many figures as it takes to see the difference."""
    for digits in (4, 6, 9):
        sides = [_text(side, change.unit, digits) for side in (change.before, change.after)]
        if sides[0] != sides[1]:
            break
    return [_spoken(change.what), *sides]


def _spoken(what: str) -> str:
    """A result by the words the sheet has for it; frozen designs keep the names they were frozen with."""
    return _ERROR.sub(lambda m: f"error {_AT[m[1]]}, {'95 %' if m[2] == 'expanded 95' else m[2]}", what)


def _text(value: Any, unit: str, digits: int) -> str:
    if value is None:
        return "none"
    if isinstance(value, bool | str):
        return str(value)
    if unit in _UNSCALED and math.isfinite(value) and (value == 0 or 1e-4 <= abs(value) < 1e4):
        lead = math.floor(math.log10(abs(value))) if value else 0
        return format_fixed(value, "" if unit == "V/V" else unit, max(0, digits - 1 - lead))
    return format_quantity(value, unit, digits, trim=True)
