"""A drawer of resistors as CSV: value, tolerance, count, note; or a bare list, one value a line.

Read as people write it: comma, semicolon or tab between the cells, decimal point or
comma, `4k7` or `4700`, a byte order mark or none. A line that cannot be meant is refused
with its number; nothing is skipped in silence.
"""

from __future__ import annotations

import csv
import os

from sumwright.engine.realise.drawer import Bin, Drawer
from sumwright.errors import InvalidQuantity, InvalidReadings, shown
from sumwright.files.text import decode, read_text
from sumwright.quantity import parse_quantity, parse_resistor_code

COLUMNS = ("value", "tolerance", "count", "note")
# Other headings people give those columns.
ALSO = {"resistance": "value", "ohm": "value", "ohms": "value", "quantity": "count", "qty": "count"}
MOST_BYTES = 32 * 1024 * 1024
MOST_LINES = 1_000_000
MOST_COUNT = 10**9


def read_drawer(source: os.PathLike | str | bytes) -> Drawer:
    """What a drawer file holds.

    Parameters
    ----------
    source : path, or bytes
        The file, or what is in it.

    Returns
    -------
    Drawer
        One bin a value and tolerance, rising; lines of the same kind are added up.
        Without a `count` column every value is there as often as wanted.

    Raises
    ------
    InvalidReadings
        With the line and what is allowed there.
    """
    if isinstance(source, bytes):
        text = decode(source, InvalidReadings, "The drawer", MOST_BYTES)
    else:
        text = read_text(source, InvalidReadings, MOST_BYTES)
    lines = text.splitlines()
    start = next((k for k, line in enumerate(lines) if line.strip()), None)
    if start is None:
        raise InvalidReadings(
            "The drawer is empty; its first line must name the columns: value, tolerance, count, note."
        )
    head = lines[start]
    separator = max(",;\t", key=head.count) if any(s in head for s in ",;\t") else ","
    if _bare(head):
        columns, start = ["value"], start - 1
    else:
        columns = _columns(next(csv.reader([head], delimiter=separator)), start + 1)
    if len(lines) > MOST_LINES:
        raise InvalidReadings(f"The drawer has {len(lines)} lines; at most {MOST_LINES} are read.")

    found: dict[tuple[float, float | None], list] = {}
    cache: dict[tuple[str, str], tuple[float, float | None]] = {}
    try:
        reader = csv.reader(lines[start + 1 :], delimiter=separator, strict=True)
        for cells in reader:
            line = start + 1 + reader.line_num
            if not any(c.strip() for c in cells):
                continue
            if len(cells) > len(columns) and any(c.strip() for c in cells[len(columns) :]):
                raise InvalidReadings(
                    f"Line {line} of the drawer has {len(cells)} cells, the heading {len(columns)}; a decimal comma needs semicolons between the cells, or quotes."
                )
            row = dict(zip(columns, (c.strip() for c in cells), strict=False))
            key = (row.get("value", ""), row.get("tolerance", ""))
            if key not in cache:
                cache[key] = _kind(*key, line)
            value = cache[key]
            count = _count(row.get("count", ""), line) if "count" in columns else None
            kept = found.setdefault(value, [0, ""])
            kept[0] = None if count is None else kept[0] + count
            kept[1] = kept[1] or row.get("note", "")[:200]
    except csv.Error as problem:
        raise InvalidReadings(f"Line {start + 1 + reader.line_num} of the drawer cannot be read: {problem}.") from None
    if not found:
        raise InvalidReadings("The drawer has a heading but no resistors.")
    order = sorted(found, key=lambda k: (k[0], k[1] if k[1] is not None else 2.0))
    return Drawer(tuple(Bin(value, tolerance, *found[value, tolerance]) for value, tolerance in order))


def _bare(line: str) -> bool:
    """Whether the first line is a value already: a list without a heading. A comma there could part two cells."""
    if "," in line:
        return False
    try:
        _kind(line.strip(), "", 1)
    except InvalidReadings:
        return False
    return True


def _columns(names: list[str], line: int) -> list[str]:
    columns = [ALSO.get(n.strip().lower(), n.strip().lower()) for n in names]
    while columns and not columns[-1]:
        columns.pop()
    for name in columns:
        if name not in COLUMNS:
            raise InvalidReadings(
                f"Line {line} of the drawer names a column {shown(name)}; allowed are {', '.join(COLUMNS)}, in any order."
            )
        if columns.count(name) > 1:
            raise InvalidReadings(f"Line {line} of the drawer names the column '{name}' twice.")
    if "value" not in columns:
        raise InvalidReadings(
            f"Line {line} of the drawer names no column 'value'; the first line must be a heading such as value,tolerance,count,note."
        )
    return columns


def _kind(value: str, tolerance: str, line: int) -> tuple[float, float | None]:
    """Value [ohm] and tolerance of one line; a marking such as 4K7J gives both."""
    where = f"Line {line} of the drawer, value"
    marked = None
    try:
        ohm = parse_quantity(value, "Ω", where)
    except InvalidQuantity as problem:
        try:
            ohm, marked = parse_resistor_code(value)
        except InvalidQuantity:
            raise InvalidReadings(str(problem)) from None
    if not 1e-6 <= ohm <= 1e15:
        raise InvalidReadings(f"{where}: {shown(value)} is no resistor; it must be above 0 Ω.")
    if not tolerance:
        return ohm, marked
    where = f"Line {line} of the drawer, tolerance"
    try:
        limit = parse_quantity(tolerance.lstrip("±").strip(), "", where)
    except InvalidQuantity as problem:
        raise InvalidReadings(str(problem)) from None
    if not 0 <= limit < 1:
        raise InvalidReadings(f"{where}: {shown(tolerance)} must be from 0 to under 1; write 1 % or 0.01.")
    return ohm, limit


def _count(text: str, line: int) -> int:
    where = f"Line {line} of the drawer, count"
    digits = text.removeprefix("+")
    if not (digits.isascii() and digits.isdigit()) or len(digits) > 12 or int(digits) > MOST_COUNT:
        raise InvalidReadings(f"{where}: {shown(text)} must be a whole number from 0 to {MOST_COUNT}.")
    return int(digits)
