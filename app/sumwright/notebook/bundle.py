"""A whole notebook as one open file: a zip of JSON and CSV with a manifest of checksums, and the way back in.

In the zip: `manifest.json` (SHA-256 and size of every other file), `notebook.json`, `sheets/N.json` (a sheet at work
and its undo history), `log/NNNN.json` (an entry as it was hashed), `log.csv` (the same for a spreadsheet), and, for
people and for the command line only, `designs/NNNN.json` (a frozen design as a design file) and `tables/NNNN.csv`
(readings and captures). Reading never touches the disk: every name must be one of these, every size is counted while it
is unpacked, and the chain of hashes must hold.
"""

from __future__ import annotations

import csv
import io
import re
import zipfile
import zlib
from dataclasses import dataclass
from typing import Any

from .entries import KINDS, Entry, checked_body, flaws, utc_now
from .store import HISTORY_MOST, STATE_MOST, Notebook, Sheet, Store
from .text import InvalidNotebookFile, InvalidText, canonical, clean_line, csv_cell, other_format, read_json, sha256

FORMAT = "sumwright-notebook/1"
BACKUP_FORMAT = "sumwright-backup/1"
FILE_MOST = 64_000_000  # bytes of the zip
UNPACKED_MOST = 256_000_000  # bytes of all that is in it
MEMBER_MOST = 24_000_000  # bytes of one file in it
COUNT_MOST = 20_000  # files in it

_NAMES = re.compile(
    r"manifest\.json|notebook\.json|log\.csv|sheets/[1-9][0-9]{0,4}\.json|log/[0-9]{4,7}\.json"
    r"|designs/[0-9]{4,7}\.json|tables/[0-9]{4,7}\.csv"
)
_TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z")
_ID = re.compile(r"[a-z2-7]{16}")
_HASH = re.compile(r"[0-9a-f]{64}")


@dataclass(frozen=True, slots=True)
class Restored:
    """What a restore did with one notebook: `added`, `same` (it was there already) or `copied` (it differed)."""

    title: str
    id: str
    what: str


def is_id(text: str) -> bool:
    """Whether a text is what a notebook's id looks like."""
    return _ID.fullmatch(text) is not None


def export_notebook(store: Store, key: str) -> bytes:
    """The notebook of that id as a zip."""
    notebook, sheets, entries = store.whole(key)
    return pack(notebook, sheets, entries)


def pack(notebook: Notebook, sheets: list[Sheet], entries: list[Entry]) -> bytes:
    """Write a notebook, its sheets and its log as a zip."""
    files: dict[str, bytes] = {
        "notebook.json": _json(
            {
                "id": notebook.id, "origin": notebook.origin, "title": notebook.title,
                "created_at": notebook.created_at, "created_by": notebook.created_by,
                "archived_at": notebook.archived_at, "length": notebook.length, "head": notebook.head,
            }
        ),
        "log.csv": _log_table(entries),
    }  # fmt: skip
    for sheet in sheets:
        files[f"sheets/{sheet.number}.json"] = _json(
            {
                "number": sheet.number, "title": sheet.title, "state": sheet.state, "history": sheet.history,
                "saved_at": sheet.saved_at, "saved_by": sheet.saved_by,
            }
        )  # fmt: skip
    for entry in entries:
        files[f"log/{entry.number:04d}.json"] = _json(entry.as_dict())
        if entry.kind == "frozen":
            files[f"designs/{entry.number:04d}.json"] = _json(entry.body["design"])
        if "csv" in entry.body:
            files[f"tables/{entry.number:04d}.csv"] = entry.body["csv"].encode("utf-8")
    return _zip({"format": FORMAT, "notebook": notebook.id, "made": utc_now()}, files)


def import_notebook(store: Store, data: bytes, *, author: str | None = None) -> Notebook:
    """Add a notebook from a zip; under a new id when its own is taken, so that nothing is overwritten.

    Raises
    ------
    InvalidNotebookFile
        If anything in it is not as `pack` writes it; nothing of it is kept then.
    """
    notebook, sheets, entries = unpack(data)
    return store.put(notebook, sheets, entries)


def unpack(data: bytes) -> tuple[Notebook, list[Sheet], list[Entry]]:
    """Read and check a notebook's zip, whoever made it."""
    _, files = _unzip(data, _NAMES, FORMAT)
    try:
        about = _object("notebook.json", read_json("notebook.json", files.pop("notebook.json")))
    except KeyError:
        raise InvalidNotebookFile("The notebook file holds no notebook.json.") from None
    try:
        sheets, entries = [], []
        for name, held in sorted(files.items(), key=_by_number):
            if name.startswith("sheets/"):
                sheets.append(_sheet(name, _object(name, read_json(name, held)), about))
            elif name.startswith("log/"):
                entries.append(_entry(name, _object(name, read_json(name, held))))
        notebook = Notebook(
            id=_matched("notebook.json, id", about["id"], _ID),
            origin=_matched("notebook.json, origin", about["origin"], _ID),
            title=clean_line("notebook.json, title", about["title"]),
            created_at=_matched("notebook.json, created_at", about["created_at"], _TIME),
            created_by=clean_line("notebook.json, created_by", about["created_by"]),
            archived_at=None
            if about["archived_at"] is None
            else _matched("notebook.json, archived_at", about["archived_at"], _TIME),
            length=_count("notebook.json, length", about["length"]),
            head=_matched("notebook.json, head", about["head"], _HASH),
        )
    except KeyError as error:
        raise InvalidNotebookFile(f"The notebook file lacks {error}.") from None
    except InvalidText as error:
        raise InvalidNotebookFile(f"The notebook file cannot be taken in: {error}") from None
    if not sheets:
        raise InvalidNotebookFile("The notebook file holds no sheet.")
    if len({sheet.number for sheet in sheets}) != len(sheets):
        raise InvalidNotebookFile("The notebook file holds a sheet number twice.")
    if flawed := flaws(notebook.origin, entries):
        raise InvalidNotebookFile(f"The log of the notebook file does not hold: {flawed[0].why}.")
    if len(entries) != notebook.length or (entries and entries[-1].sha256 != notebook.head):
        raise InvalidNotebookFile(f"The log had {notebook.length} entries; {len(entries)} are in the notebook file.")
    return notebook, sheets, entries


def backup(store: Store) -> bytes:
    """Every notebook, archived ones too, as one zip of notebook files; each is read at one moment while others write."""
    files = {}
    for notebook in [*store.notebooks(most=10**9), *store.notebooks(archived=True, most=10**9)]:
        files[f"notebooks/{notebook.id}.zip"] = export_notebook(store, notebook.id)
    return _zip({"format": BACKUP_FORMAT, "made": utc_now()}, files)


def restore(store: Store, data: bytes) -> list[Restored]:
    """Bring back what a backup holds and the store does not; a notebook that differs is added as a copy.

    Nothing in the store is changed, so a restore may be run twice and while people work.
    """
    _, files = _unzip(data, re.compile(r"notebooks/[a-z2-7]{16}\.zip"), BACKUP_FORMAT, most=FILE_MOST, whole=2**40)
    read = {name: unpack(held) for name, held in sorted(files.items())}  # all is checked before any is written
    there = {n.id: n for n in [*store.notebooks(most=10**9), *store.notebooks(archived=True, most=10**9)]}
    done = []
    for notebook, sheets, entries in read.values():
        if notebook.id in there:
            _, sheets_now, entries_now = store.whole(notebook.id)
            if _content(sheets) == _content(sheets_now) and entries == entries_now[: len(entries)]:
                done.append(Restored(notebook.title, notebook.id, "same"))
                continue
        added = store.put(notebook, sheets, entries)
        done.append(Restored(added.title, added.id, "copied" if added.id != notebook.id else "added"))
    return done


def _content(sheets: list[Sheet]) -> list[tuple[Any, ...]]:
    return [(s.number, s.title, canonical(s.state), canonical(s.history)) for s in sheets]


def _json(value: Any) -> bytes:
    return (canonical(value) + "\n").encode("utf-8")


def _log_table(entries: list[Entry]) -> bytes:
    out = io.StringIO(newline="")
    table = csv.writer(out)
    table.writerow(["number", "time (UTC)", "author", "kind", "sheet", "text", "sha256"])
    for e in entries:
        text = e.body.get("text", e.summary)
        table.writerow([e.number, e.at, csv_cell(e.author), e.kind, e.sheet or "", csv_cell(text), e.sha256])
    return out.getvalue().encode("utf-8")


def _zip(about: dict[str, Any], files: dict[str, bytes]) -> bytes:
    sums = {name: {"bytes": len(held), "sha256": sha256(held)} for name, held in sorted(files.items())}
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as packed:
        packed.writestr("manifest.json", _json({**about, "files": sums}))
        for name in sorted(files):
            packed.writestr(name, files[name])
    return out.getvalue()


def _unzip(
    data: bytes, names: re.Pattern[str], form: str, *, most: int = MEMBER_MOST, whole: int = UNPACKED_MOST
) -> tuple[dict[str, Any], dict[str, bytes]]:
    """The manifest and the files of a zip, every limit checked before and again while unpacking."""
    if form == FORMAT and len(data) > FILE_MOST:
        raise InvalidNotebookFile(f"The notebook file has {len(data)} bytes; at most {FILE_MOST} are read.")
    files: dict[str, bytes] = {}
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as packed:
            members = packed.infolist()
            if len(members) > COUNT_MOST:
                raise InvalidNotebookFile(f"The zip holds {len(members)} files; at most {COUNT_MOST} are read.")
            left = whole
            for member in members:
                name = member.filename
                if name != "manifest.json" and not names.fullmatch(name):
                    raise InvalidNotebookFile(f"The zip holds {name[:80]!r}, which does not belong in it.")
                if name in files:
                    raise InvalidNotebookFile(f"The zip holds {name} twice.")
                if member.flag_bits & 1:
                    raise InvalidNotebookFile(f"{name} in the zip is encrypted; it must be open.")
                if member.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED):
                    raise InvalidNotebookFile(
                        f"{name} in the zip is packed by method {member.compress_type}; use deflate."
                    )
                room = min(most, left)
                with packed.open(member) as stream:  # the size the zip states is not believed
                    held = stream.read(room + 1)
                if len(held) > room:
                    raise InvalidNotebookFile(f"{name} in the zip unpacks to more than {room} bytes.")
                left -= len(held)
                files[name] = held
    except (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError, RuntimeError, ValueError, OSError) as error:
        if isinstance(error, InvalidNotebookFile):
            raise
        raise InvalidNotebookFile(f"The file is not a zip that can be read: {error}.") from None
    if "manifest.json" not in files:
        raise InvalidNotebookFile("The zip holds no manifest.json; it is not one of Sumwright's.")
    manifest = _object("manifest.json", read_json("manifest.json", files.pop("manifest.json")))
    if manifest.get("format") != form:
        raise other_format("The file", manifest.get("format"), form)
    sums = _object("manifest.json, files", manifest.get("files"))
    for name in sorted(sums.keys() ^ files.keys()):
        raise InvalidNotebookFile(f"{name[:80]!r} stands in only one of the zip and its manifest.")
    for name, held in files.items():
        if _object(f"manifest.json, {name}", sums[name]).get("sha256") != sha256(held):
            raise InvalidNotebookFile(f"{name} in the zip is not what its manifest says: its SHA-256 differs.")
    return manifest, files


def _by_number(item: tuple[str, bytes]) -> tuple[str, int]:
    folder, _, name = item[0].rpartition("/")
    digits = name.split(".")[0]
    return folder, int(digits) if digits.isdigit() else 0


def _object(what: str, value: Any) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise InvalidNotebookFile(f"{what} must be an object; it is {type(value).__name__}.")
    return value


def _matched(what: str, value: Any, pattern: re.Pattern[str]) -> str:
    if not isinstance(value, str) or not pattern.fullmatch(value):
        raise InvalidNotebookFile(f"{what} is {str(value)[:60]!r}, which is not what belongs there.")
    return value


def _count(what: str, value: Any) -> int:
    if type(value) is not int or not 0 <= value <= 10**7:
        raise InvalidNotebookFile(f"{what} is {str(value)[:60]!r}; it must be a whole number from 0.")
    return value


def _sheet(name: str, held: dict[str, Any], about: dict[str, Any]) -> Sheet:
    for key, most in (("state", STATE_MOST), ("history", HISTORY_MOST)):
        if len(canonical(_object(f"{name}, {key}", held.get(key))).encode("utf-8", "surrogatepass")) > most:
            raise InvalidNotebookFile(f"{name}, {key} is larger than {most} bytes.")
    return Sheet(
        notebook=str(about.get("id")),
        number=_count(f"{name}, number", held["number"]),
        title=clean_line(f"{name}, title", held["title"]),
        state=held["state"],
        history=held["history"],
        revision=1,
        saved_at=_matched(f"{name}, saved_at", held["saved_at"], _TIME),
        saved_by=clean_line(f"{name}, saved_by", held["saved_by"]),
    )


def _entry(name: str, held: dict[str, Any]) -> Entry:
    if held.get("kind") not in KINDS:
        raise InvalidNotebookFile(f"{name}, kind is {str(held.get('kind'))[:40]!r}; it is one of {', '.join(KINDS)}.")
    body = _object(f"{name}, body", held["body"])
    checked_body(held["kind"], body)
    sheet = held["sheet"]
    return Entry(
        number=_count(f"{name}, number", held["number"]),
        kind=held["kind"],
        at=_matched(f"{name}, at", held["at"], _TIME),
        author=clean_line(f"{name}, author", held["author"]),
        sheet=None if sheet is None else _count(f"{name}, sheet", sheet),
        body=body,
        previous=_matched(f"{name}, previous", held["previous"], _HASH),
        sha256=_matched(f"{name}, sha256", held["sha256"], _HASH),
    )
