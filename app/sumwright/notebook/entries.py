"""Entries of a notebook: what each kind holds, and the chain of hashes that shows any later change.

An entry's SHA-256 covers its own content and the hash of the entry before it, so an entry cannot be altered, removed
or put in between without every later hash failing. The chain shows honest mistakes and casual edits; it is no
signature: who can rewrite the whole store can also compute a whole new chain.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from .text import InvalidText, canonical, clean_line, clean_note, sha256

ENTRY_FORMAT = "sumwright-entry/1"
FIRST = "0" * 64  # the forerunner of the first entry
KINDS = ("note", "frozen", "readings", "capture", "decision", "correction")
BODY_MOST = 8_000_000  # bytes of one entry's content, as JSON

_KEYS = {
    "note": {"text"},
    "decision": {"text"},
    "correction": {"text", "of"},
    "frozen": {"title", "design", "unplugged", "results", "checks"},
    "readings": {"title", "csv", "fit"},
    "capture": {"title", "csv", "about"},
}
_NEEDED = {
    "note": {"text"},
    "decision": {"text"},
    "correction": {"text", "of"},
    "frozen": {"title", "design"},
    "readings": {"title", "csv"},
    "capture": {"title", "csv"},
}


@dataclass(frozen=True, slots=True)
class Entry:
    """One line of the log; `at` is UTC in ISO 8601 with microseconds, `sheet` None when it is of the whole notebook."""

    number: int
    kind: str
    at: str
    author: str
    sheet: int | None
    body: dict[str, Any]
    previous: str
    sha256: str

    def as_dict(self) -> dict[str, Any]:
        return {name: getattr(self, name) for name in self.__slots__}

    @property
    def summary(self) -> str:
        """One line for lists: the title, or the first line of the text."""
        if self.kind in ("note", "decision"):
            return first_line(self.body["text"])
        if self.kind == "correction":
            return f"of entry {self.body['of']}: {first_line(self.body['text'])}"
        return str(self.body["title"])


@dataclass(frozen=True, slots=True)
class Flaw:
    """Where a chain breaks: the entry's number and one sentence."""

    number: int
    why: str


def first_line(text: str, most: int = 120) -> str:
    """The first line that is not blank, shortened with an ellipsis."""
    line = next((line.strip() for line in text.splitlines() if line.strip()), "")
    return line if len(line) <= most else line[: most - 1].rstrip() + "…"


def utc_now() -> str:
    """Now in UTC, ISO 8601, microseconds and `Z`: texts in this form sort as the times do."""
    return datetime.now(UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def checked_body(kind: str, body: dict[str, Any]) -> dict[str, Any]:
    """The content of an entry of that kind, its texts cleaned; InvalidText says what does not belong."""
    if kind not in KINDS:
        raise InvalidText(f"An entry's kind is one of {', '.join(KINDS)}; it is {kind!r}.")
    if not isinstance(body, dict):
        raise InvalidText(f"The content of an entry must be an object; it is {type(body).__name__}.")
    for key in sorted(map(str, body.keys() - _KEYS[kind])):
        raise InvalidText(f"An entry of kind {kind} holds {', '.join(sorted(_KEYS[kind]))}; {key!r} is none of them.")
    for key in sorted(_NEEDED[kind] - body.keys()):
        raise InvalidText(f"An entry of kind {kind} needs {key!r}.")
    clean = dict(body)
    if "text" in clean:
        clean["text"] = clean_note(f"The {kind}", clean["text"])
    if "title" in clean:
        clean["title"] = clean_line(f"The title of the {kind}", clean["title"])
    if "csv" in clean:
        clean["csv"] = clean_note(f"The table of the {kind}", clean["csv"], most=BODY_MOST)
    if kind == "correction" and (type(clean["of"]) is not int or clean["of"] < 1):
        raise InvalidText(f"A correction names the entry it corrects by its number; it names {clean['of']!r}.")
    for key in ("design", "results", "fit", "about"):
        if clean.get(key) is not None and not isinstance(clean[key], dict):
            raise InvalidText(f"{key} of an entry of kind {kind} must be an object; it is {type(clean[key]).__name__}.")
    try:
        size = len(canonical(clean).encode("utf-8"))
    except (ValueError, TypeError, RecursionError) as error:
        raise InvalidText(f"The content of the {kind} cannot be written as JSON: {error}.") from None
    if size > BODY_MOST:
        raise InvalidText(f"The content of the {kind} has {size} bytes; at most {BODY_MOST} are kept.")
    return clean


def entry_hash(origin: str, entry: Entry) -> str:
    """SHA-256 over the entry's content, its forerunner's hash and the notebook it was first written in."""
    return sha256(
        canonical(
            {
                "format": ENTRY_FORMAT,
                "notebook": origin,
                "number": entry.number,
                "kind": entry.kind,
                "at": entry.at,
                "author": entry.author,
                "sheet": entry.sheet,
                "body": entry.body,
                "previous": entry.previous,
            }
        )
    )


def make_entry(
    origin: str, previous: Entry | None, kind: str, body: dict[str, Any], author: str, sheet: int | None, at: str
) -> Entry:
    """The entry that follows `previous` (None: the first), hashed."""
    number = 1 if previous is None else previous.number + 1
    draft = Entry(number, kind, at, author, sheet, body, FIRST if previous is None else previous.sha256, "")
    return Entry(number, kind, at, author, sheet, body, draft.previous, entry_hash(origin, draft))


def flaws(origin: str, entries: Iterable[Entry]) -> list[Flaw]:
    """Every place where the chain does not hold, in order; empty when it does."""
    found = []
    previous, expected = FIRST, 1
    for entry in entries:
        if entry.number != expected:
            found.append(Flaw(entry.number, f"entry {expected} is missing: the next one found is {entry.number}"))
        if entry.previous != previous:
            found.append(Flaw(entry.number, f"entry {entry.number} does not follow the one before it"))
        if entry_hash(origin, entry) != entry.sha256:
            found.append(Flaw(entry.number, f"entry {entry.number} was changed after it was written"))
        previous, expected = entry.sha256, entry.number + 1
    return found


def decisions_of(entries: Iterable[Entry]) -> list[tuple[str, str, str, str]]:
    """Decisions and what corrected them, in order, as a report lists them: time, author, text, which entry."""
    listed: set[int] = set()
    found = []
    for entry in entries:
        if entry.kind == "decision":
            which = f"entry {entry.number}"
        elif entry.kind == "correction" and entry.body["of"] in listed:
            which = f"entry {entry.number}, corrects entry {entry.body['of']}"
        else:
            continue
        listed.add(entry.number)
        found.append((f"{entry.at[:16].replace('T', ' ')} UTC", entry.author, entry.body["text"], which))
    return found


def words_of(kind: str, author: str, body: dict[str, Any]) -> str:
    """What a search looks through: text, title, people, signals and parts, folded for comparison without case."""
    design = body.get("design") or {}
    parts = [kind, author, str(body.get("text", "")), str(body.get("title", ""))]
    if isinstance(design, dict):
        parts.append(str(design.get("title", "")))
        signals = design.get("signals")
        parts += [str(s.get("name", "")) for s in signals if isinstance(s, dict)] if isinstance(signals, list) else []
        op_amp = design.get("op_amp")
        parts.append(str(op_amp.get("name", "")) if isinstance(op_amp, dict) else "")
        resistor = design.get("resistor")
        parts.append(str(resistor.get("series", "")) if isinstance(resistor, dict) else "")
    return fold(" ".join(part for part in parts if part))[:200_000]


def fold(text: str) -> str:
    """Text for comparison without case, one blank between words."""
    return " ".join(text.casefold().split())
