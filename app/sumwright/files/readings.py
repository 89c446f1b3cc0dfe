"""Readings files: a CSV with one column a signal, `output`, and perhaps `uncertainty`.

Read as people and spreadsheets write it: comma, semicolon or tab between the cells,
decimal point or comma, engineering notation, a unit behind a column's name as in
`north [V]` or `north (mV)`, a byte order mark or none. What cannot be meant is
refused with its line and column; nothing is skipped in silence.
"""

from __future__ import annotations

import csv
import io
import math
import os
import re
from pathlib import Path

import numpy as np

from sumwright.engine.bench.readings import Readings
from sumwright.engine.stage import OUTPUT, Design
from sumwright.errors import InvalidQuantity, InvalidReadings, shown
from sumwright.files.text import decode, read_text
from sumwright.quantity import parse_quantity

UNCERTAINTY = "uncertainty"
MOST_BYTES = 16 * 1024 * 1024
MOST_ROWS = 200_000
MOST_VOLTS = 1e5
_UNITS = {"v": 1.0, "mv": 1e-3, "uv": 1e-6, "µv": 1e-6, "μv": 1e-6, "kv": 1e3, "volt": 1.0, "volts": 1.0}
_WITH_UNIT = re.compile(r"(.*?)\s*(?:\[([^\]]*)\]|\(([^)]*)\)|/\s*(\w+))\s*")


def read_readings(source: os.PathLike | str | bytes, design: Design, name: str = "The readings file") -> Readings:
    """The readings in a file, with every signal of the design in its place.

    Parameters
    ----------
    source : path, or bytes
        The file, or what is in it.
    design : Design
        Names the signals.

    Raises
    ------
    InvalidReadings
        With the line, the column and what is allowed there.
    """
    if isinstance(source, bytes):
        text = decode(source, InvalidReadings, name, MOST_BYTES)
    else:
        name = shown(os.fspath(source), 120)
        refuse_large(source, MOST_BYTES, name)
        text = read_text(source, InvalidReadings, MOST_BYTES)
    return parse_readings(text, design, name)


def refuse_large(path, most: int, name: str) -> None:
    """Refuse a file by its size on disk, before a byte of it is read."""
    try:
        size = Path(path).stat().st_size
    except (OSError, ValueError):
        return  # the reader says why it cannot be opened
    if size > most:
        raise InvalidReadings(f"{name} is {size / 2**20:.0f} MB; at most {most / 2**20:g} MB is read.")


def parse_readings(text: str, design: Design, name: str = "The readings") -> Readings:
    """The same from a text, for what is pasted."""
    text = text.removeprefix("\ufeff")
    if "\x00" in text:
        raise InvalidReadings(f"{name} holds zero bytes; it is not a text file.")
    first = next((k for k, line in enumerate(text.splitlines()) if line.strip()), None)
    if first is None:
        raise InvalidReadings(f"{name} is empty; its first line must name the signals and output.")
    separator = separator_of(text.splitlines()[first])
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    columns: list[tuple[str, float]] | None = None
    rows: list[list[float]] = []
    lines: list[int] = []
    try:
        for cells in reader:
            if not any(c.strip() for c in cells):
                continue
            line = reader.line_num
            if columns is None:
                columns = _columns(cells, design, name, line)
                continue
            rows.append(_row(cells, columns, separator, name, line))
            lines.append(line)
            if len(rows) > MOST_ROWS:
                raise InvalidReadings(f"{name} has more than {MOST_ROWS} readings, the most that are read.")
    except csv.Error as problem:
        raise InvalidReadings(f"{name}, line {reader.line_num} cannot be read: {problem}.") from None
    if columns is None:
        raise InvalidReadings(f"{name} holds separators only; its first line must name the signals and output.")
    if not rows:
        raise InvalidReadings(f"{name} has a heading but no readings.")
    table = np.array(rows)
    at = {column: i for i, (column, _) in enumerate(columns)}
    names = design.signal_names
    volts = np.zeros((len(rows), len(names)))
    for k, signal in enumerate(names):
        if signal in at:
            volts[:, k] = table[:, at[signal]]
    uncertainty = table[:, at[UNCERTAINTY]] if UNCERTAINTY in at and UNCERTAINTY not in names else None
    unnamed = tuple(n for n in names if n not in at)
    return Readings(names, volts, table[:, at[OUTPUT]], uncertainty, tuple(lines), unnamed)


def separator_of(head: str) -> str:
    """Which of tab, semicolon and comma separates the cells of a heading."""
    for mark in ("\t", ";"):
        if mark in head:
            return mark
    return ","


def _columns(cells, design, name, line):
    """(signal, factor to volts) of every column."""
    while cells and not cells[-1].strip():
        cells = cells[:-1]
    allowed = (*design.signal_names, OUTPUT, UNCERTAINTY)
    folded = {a.casefold(): a for a in reversed(allowed)}
    columns: list[tuple[str, float]] = []
    for k, cell in enumerate(cells, start=1):
        text = " ".join(cell.split())
        found, factor = _known(text, allowed, folded), 1.0
        if found is None and (parts := _WITH_UNIT.fullmatch(text)):
            found = _known(parts[1], allowed, folded)
            unit = next((p for p in parts.groups()[1:] if p is not None), "").strip()
            if found is not None:
                if unit.casefold() not in _UNITS or unit == "MV":
                    raise InvalidReadings(
                        f"{name}, line {line}, column {k} is in {shown(unit)}; a column must be in V, mV, µV or kV."
                    )
                factor = _UNITS[unit.casefold()]
        if found is None:
            raise InvalidReadings(
                f"{name}, line {line}, column {k} is named {shown(text)}; allowed are the signals "
                f"{_few(design.signal_names)}, and output and uncertainty."
            )
        if any(found == c for c, _ in columns):
            raise InvalidReadings(f"{name}, line {line} names the column {shown(found)} twice.")
        columns.append((found, factor))
    if not any(c == OUTPUT for c, _ in columns):
        raise InvalidReadings(f"{name}, line {line} names no column output; one column must be what was read.")
    return columns


def _known(text, allowed, folded):
    return text if text in allowed else folded.get(text.casefold())


def _few(names):
    return ", ".join(shown(n) for n in names[:8]) + (" and more" if len(names) > 8 else "")


def _row(cells, columns, separator, name, line):
    extra = cells[len(columns) :]
    if len(cells) < len(columns) or any(c.strip() for c in extra):
        hint = "; a decimal comma needs semicolons between the cells" if separator == "," and extra else ""
        raise InvalidReadings(f"{name}, line {line} has {len(cells)} cells, the heading {len(columns)}{hint}.")
    out = []
    for k, (cell, (column, factor)) in enumerate(zip(cells, columns, strict=False), start=1):
        volts = number(cell, separator, f"{name}, line {line}, column {k} ({column})") * factor
        if abs(volts) > MOST_VOLTS:
            raise InvalidReadings(
                f"{name}, line {line}, column {k} ({column}): {shown(cell)} is over {MOST_VOLTS:g} V."
            )
        if column == UNCERTAINTY and not volts > 0:
            raise InvalidReadings(f"{name}, line {line}, column {k} (uncertainty): {shown(cell)} must be above 0 V.")
        out.append(volts)
    return out


def number(cell: str, separator: str, where: str) -> float:
    """A cell in volts: plain, with a decimal comma, or in engineering notation."""
    text = cell.strip()
    if separator != "," and text.count(",") == 1 and "." not in text:
        text = text.replace(",", ".")
    try:
        value = float(text)
        if math.isfinite(value) and "_" not in text:
            return value
    except ValueError:
        pass
    try:
        return parse_quantity(text, "V", where)
    except InvalidQuantity as problem:
        raise InvalidReadings(str(problem)) from None
