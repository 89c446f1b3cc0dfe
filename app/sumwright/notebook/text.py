"""Text and JSON from outside: what is let in, and how it is written where a spreadsheet may open it.

A text that is refused is never altered: the sentence says what is wrong, and what was typed stays with the person.
"""

from __future__ import annotations

import hashlib
import json
import re
import unicodedata
from typing import Any

from sumwright.errors import SumwrightError
from sumwright.files.strict_json import deeper_than

TITLE_MOST = 200  # characters
NOTE_MOST = 100_000  # characters
JSON_DEPTH_MOST = 64
JSON_BYTES_MOST = 16_000_000

# Embeddings, overrides and isolates reorder what stands beside them (Unicode Standard Annex 9, 2.1 to 2.5), so a
# line can read as something it is not. The plain marks U+200E and U+200F only lean on their neighbours: let in.
_REORDER = frozenset("\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")
_SPREADSHEET_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n")


class InvalidText(SumwrightError, ValueError):
    """A text cannot be kept; the sentence names it, the culprit and what is allowed."""


class InvalidNotebookFile(SumwrightError, ValueError):
    """A notebook file cannot be read; nothing of it was kept."""


def clean_line(what: str, text: object, *, most: int = TITLE_MOST, empty: bool = False) -> str:
    """One line of text, outer blanks removed; InvalidText for controls, reordering marks, or too long a text."""
    line = _clean(what, text, most=most, allowed="").strip()
    if not line and not empty:
        raise InvalidText(f"{what} is empty; it must hold 1 to {most} characters.")
    return line


def clean_note(what: str, text: object, *, most: int = NOTE_MOST) -> str:
    """Text of many lines, line ends as one newline; otherwise as `clean_line`."""
    if isinstance(text, str):
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    note = _clean(what, text, most=most, allowed="\n\t")
    if not note.strip():
        raise InvalidText(f"{what} is empty; it must hold 1 to {most} characters.")
    return note


def _clean(what: str, text: object, *, most: int, allowed: str) -> str:
    if not isinstance(text, str):
        raise InvalidText(f"{what} must be a text; it is {type(text).__name__}.")
    if len(text) > most:
        raise InvalidText(f"{what} has {len(text)} characters; at most {most} are kept.")
    for place, character in enumerate(text, start=1):
        if character in allowed:
            continue
        kind = unicodedata.category(character)
        if kind in ("Cc", "Cs") or character in "\u2028\u2029":
            raise InvalidText(
                f"{what} holds the control character U+{ord(character):04X} at place {place}; take it out."
            )
        if character in _REORDER:
            raise InvalidText(
                f"{what} holds U+{ord(character):04X} at place {place}, which reorders the text around it; take it out."
            )
    return unicodedata.normalize("NFC", text)


def other_format(what: str, held: object, known: str) -> InvalidNotebookFile:
    """The refusal of a format that is not `known`; a later one of the same kind is told apart."""
    if isinstance(held, str) and re.fullmatch(rf"{re.escape(known.split('/')[0])}/[0-9]{{1,6}}", held):
        return InvalidNotebookFile(
            f"{what} was made by a newer version of Sumwright: its format is {held!r} and this version reads {known!r}. "
            "Bring this one up to date to open it."
        )
    return InvalidNotebookFile(
        f"The format of {what[0].lower()}{what[1:]} is {str(held)[:60]!r}; it must be {known!r}."
    )


def canonical(value: Any) -> str:
    """The one spelling of a JSON value that is hashed: keys sorted, no blanks, no NaN, characters as they are."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def sha256(data: str | bytes) -> str:
    """SHA-256 in hexadecimal, of UTF-8 when it is text."""
    return hashlib.sha256(data.encode("utf-8") if isinstance(data, str) else data).hexdigest()


def read_json(what: str, data: bytes | str, *, most: int = JSON_BYTES_MOST, depth: int = JSON_DEPTH_MOST) -> Any:
    """JSON from outside: size and nesting are limited before it is parsed, NaN and doubled keys are refused.

    Raises
    ------
    InvalidNotebookFile
        With one sentence that names `what` and the reason.
    """
    if len(data) > most:
        raise InvalidNotebookFile(f"{what} has {len(data)} bytes; at most {most} are read.")
    try:
        text = data.decode("utf-8") if isinstance(data, bytes) else data
    except UnicodeDecodeError as error:
        raise InvalidNotebookFile(f"{what} is not UTF-8 at byte {error.start}.") from None
    _refuse_deep(what, text, depth)
    try:
        return json.loads(text, parse_constant=_refuse_constant, object_pairs_hook=_once)
    except (ValueError, RecursionError) as error:
        raise InvalidNotebookFile(f"{what} is not JSON: {error}.") from None


def _refuse_deep(what: str, text: str, most: int) -> None:
    """No parser is handed a text that would exhaust its stack."""
    if deeper_than(text, most):
        raise InvalidNotebookFile(f"{what} is nested deeper than {most} levels.")


def _refuse_constant(name: str) -> None:
    raise ValueError(f"{name} is not a finite number")


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    made = dict(pairs)
    if len(made) != len(pairs):
        seen: set[str] = set()
        for key, _ in pairs:
            if key in seen:
                raise ValueError(f"the key {key!r} stands there twice")
            seen.add(key)
    return made


def csv_cell(text: object) -> str:
    """A cell that no spreadsheet takes for a formula: one that starts like one gets an apostrophe before it."""
    cell = "" if text is None else str(text)
    return "'" + cell if cell.startswith(_SPREADSHEET_STARTS) else cell
