"""A scope's or logger's CSV: any preamble, a time column, any channels, up to five million rows.

The head is read to find where the numbers begin, what separates them and what the
columns are called. A plain body goes to NumPy's reader at once. One that it refuses, or
with decimal commas, is read in blocks, each checked for its number of cells line by
line; only when a block is not plain numbers is it gone through cell by cell, to
name the line and column.
"""

from __future__ import annotations

import itertools
import os
import re
import warnings
from pathlib import Path
from typing import BinaryIO, NamedTuple

import numpy as np

from sumwright.errors import InvalidReadings, shown
from sumwright.files.readings import refuse_large

MOST_BYTES = 700 * 1024 * 1024
MOST_ROWS = 5_000_000
MOST_COLUMNS = 33
HEAD = 256 * 1024
BLOCK = 8 * 1024 * 1024
RUN = 4  # lines of numbers in a row that make the body
_TIMES = {
    "s": 1.0, "sec": 1.0, "second": 1.0, "seconds": 1.0, "ms": 1e-3, "msec": 1e-3, "millisecond": 1e-3, "milliseconds": 1e-3,
    "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "usec": 1e-6, "microsecond": 1e-6, "microseconds": 1e-6, "ns": 1e-9, "nsec": 1e-9,
    "min": 60.0, "minutes": 60.0, "h": 3600.0, "hours": 3600.0,
}  # fmt: skip
_VOLTS = {"v": 1.0, "volt": 1.0, "volts": 1.0, "mv": 1e-3, "uv": 1e-6, "µv": 1e-6, "μv": 1e-6, "kv": 1e3}
_SCALE = {**_TIMES, **_VOLTS, "": 1.0}
_UNIT = re.compile(r"(.*?)\s*[\[(]\s*([^\])]*)\s*[\])]\s*")
_SLASHED = re.compile(r"(.*\S)\s*/\s*(\S+)")
_TRAILING = re.compile(r"(.*\S)[\s_,]+(\S+)")  # a time column alone: "time ms"
# what a person reads: of the ways to write a unit, one
_WRITTEN = {1.0: "s", 1e-3: "ms", 1e-6: "µs", 1e-9: "ns", 60.0: "min", 3600.0: "h"}


class Capture(NamedTuple):
    """A record: `time` (N,) [s], rising; `channels` by name (N,) [V]."""

    time: np.ndarray
    channels: dict[str, np.ndarray]
    preamble: tuple[str, ...]
    first_line: int  # of the numbers
    time_unit: str = "s"  # in which the file gives it
    time_stated: bool = False  # whether its heading says so; else seconds are taken

    @property
    def interval(self) -> float:
        """Mean sampling interval [s]."""
        return float((self.time[-1] - self.time[0]) / (len(self.time) - 1))


class _Shape(NamedTuple):
    """What the head tells of the body."""

    start: int  # byte where the numbers begin
    line: int  # its line
    separator: str
    decimal_comma: bool
    columns: int
    names: tuple[str, ...]
    scales: tuple[float, ...]
    preamble: tuple[str, ...]
    time_stated: bool


def read_capture(source: os.PathLike | str | bytes, name: str = "") -> Capture:
    """The record in a file.

    Parameters
    ----------
    source : path, or bytes
    name : str, optional
        What its errors call it; by default its path.

    Raises
    ------
    InvalidReadings
        With the line: no numbers, too few or too many columns or rows, a cell that is no
        number, a row with another number of cells, time running backwards.
    """
    if isinstance(source, bytes):
        import io

        name = name or "The capture"
        if len(source) > MOST_BYTES:
            raise InvalidReadings(f"{name} is {len(source) / 2**20:.0f} MB; at most {MOST_BYTES / 2**20:g} MB is read.")
        return _read(io.BytesIO(source), name)
    name = name or shown(os.fspath(source), 120)
    refuse_large(source, MOST_BYTES, name)
    try:
        path = Path(source)
        with path.open("rb") as stream:
            return _read(stream, name, path)
    except IsADirectoryError:
        raise InvalidReadings(f"{name} is a folder; a file is wanted.") from None
    except FileNotFoundError:
        raise InvalidReadings(f"{name} does not exist.") from None
    except OSError as problem:
        raise InvalidReadings(f"{name} cannot be read: {problem.strerror}.") from None


def _read(stream: BinaryIO, name: str, path: Path | None = None) -> Capture:
    head = stream.read(HEAD)
    if head.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InvalidReadings(f"{name} is UTF-16; save it as UTF-8 or plain text.")
    shape = _shape(head, name)
    stream.seek(shape.start)
    table = None if path is None else _at_once(path, shape, head)
    if table is None:
        table = _body(stream, shape, name)
    time = table[0] * shape.scales[0]
    if len(time) < 2:
        raise InvalidReadings(f"{name} has a single row of numbers; a record has two or more.")
    step = np.diff(time)
    if (step < 0).any():
        row = int(np.argmax(step < 0)) + 1
        raise InvalidReadings(
            f"{name}, line {shape.line + row}: time runs backwards, from {time[row - 1]:.9g} s to {time[row]:.9g} s."
        )
    if time[-1] == time[0]:
        raise InvalidReadings(
            f"{name}, line {shape.line}: every time is {time[0]:.9g} s; the first column must be time."
        )
    if (step == 0).any():
        time = _spread_equal(time)
    channels = {n: c * k for n, c, k in zip(shape.names[1:], table[1:], shape.scales[1:], strict=True)}
    unit = _WRITTEN[shape.scales[0]]
    return Capture(time, channels, shape.preamble, shape.line, unit, shape.time_stated)


def _spread_equal(time):
    """Times printed too coarsely repeat; the samples in between are spread evenly."""
    values, first = np.unique(time, return_index=True)
    return np.interp(np.arange(len(time)), [*first, len(time)], [*values, 2 * values[-1] - values[-2]])


# -- the head --------------------------------------------------------------------


def _shape(head: bytes, name: str) -> _Shape:
    coding = _coding(head)
    text = head.decode(coding, errors="replace")
    lines = text.split("\n")
    if len(head) == HEAD:
        lines = lines[:-1]
    for separator in ("\t", ";", ",", " "):
        for comma in (False, True) if separator != "," else (False,):
            found = _first_run(lines, separator, comma)
            if found is not None:
                at, columns = found
                return _described(lines, at, columns, separator, comma, coding, name)
    if broken := _broken_off(lines):
        at, what = broken
        raise InvalidReadings(
            f"{name}, line {at + 1} is {shown(what, 60)}, which is not a row of numbers like the one before it."
        )
    if any(line.strip() for line in lines):
        raise InvalidReadings(
            f"{name} has no table of numbers in its first {HEAD // 1024} kB; rows of time and one or more channels are wanted."
        )
    raise InvalidReadings(f"{name} is empty.")


def _broken_off(lines):
    """Where a table that had begun ends too soon: line from 0 and its text, or None."""
    for separator, comma in (("\t", False), ("\t", True), (";", False), (";", True), (",", False)):
        for i, (line, after) in enumerate(itertools.pairwise(lines)):
            count = _numbers(line, separator, comma)
            if count >= 2 and after.strip() and _numbers(after, separator, comma) != count:
                return i + 1, after.strip()
    return None


def _first_run(lines, separator, comma):
    """Line and cell count of the first few rows that are all numbers, two cells or more."""
    run, columns, longest = 0, 0, 0
    for i, line in enumerate(lines):
        count = _numbers(line, separator, comma)
        if count >= 2 and (run == 0 or count == columns):
            run, columns = run + 1, count
        else:
            longest = max(longest, run)
            run, columns = (1, count) if count >= 2 else (0, 0)
        last = all(not x.strip() for x in lines[i + 1 :]) if run else False
        if run >= RUN or (run and last and run >= longest):
            return i - run + 1, columns
    return None


def _numbers(line, separator, comma):
    """How many cells, if all of them are numbers; else 0."""
    text = line.strip().rstrip(separator) if separator != " " else line.strip()
    if not text:
        return 0
    cells = text.split() if separator == " " else text.split(separator)
    for cell in cells:
        c = cell.strip().strip('"')
        if comma:
            if "." in c:
                return 0
            c = c.replace(",", ".")
        try:
            float(c)
        except ValueError:
            return 0
        if "_" in c:
            return 0
    return len(cells)


def _described(lines, at, columns, separator, comma, coding, name):
    if columns > MOST_COLUMNS:
        raise InvalidReadings(f"{name}, line {at + 1} has {columns} columns; at most {MOST_COLUMNS} are read.")
    heads = []
    for line in lines[max(0, at - 2) : at]:
        cells = [c.strip().strip('"').strip() for c in line.strip().split(None if separator == " " else separator)]
        while len(cells) > columns and not cells[-1]:
            cells.pop()
        if len(cells) == columns and any(cells):
            heads.append(cells)
    names, units = [""] * columns, [""] * columns
    if heads:
        names = list(heads[0])
        if len(heads) == 2:
            if _bare(heads[1][0]) in _TIMES and all(_bare(c) in _SCALE for c in heads[1]):
                units = [_bare(c) for c in heads[1]]
            else:
                names = list(heads[1])
    for k, text in enumerate(names):
        known = _TIMES if k == 0 else _VOLTS
        for way in (_UNIT, _SLASHED, *([_TRAILING] if k == 0 else [])):
            inside = way.fullmatch(text)
            if inside and inside[2].strip().casefold() in known and not units[k]:
                names[k], units[k] = inside[1].strip(), inside[2].strip().casefold()
        if k == 0 and not units[0]:
            other = _UNIT.fullmatch(text)
            if text.casefold() in _TIMES:  # headed by its unit alone
                units[0] = text.casefold()
            elif other and other[2].strip():
                raise InvalidReadings(
                    f"{name}, line {at}: time is in {shown(other[2].strip(), 20)}; it must be in s, ms, µs, ns, min or h."
                )
    plain, used = [], set()
    for k, text in enumerate(names):
        word = " ".join("".join(c for c in text if c.isprintable()).split())[:60] or (
            "time" if k == 0 else f"channel {k}"
        )
        while word in used:
            word += " '"
        used.add(word)
        plain.append(word)
    start = len("\n".join(lines[:at]).encode(coding)) + (1 if at else 0)
    return _Shape(
        start, at + 1, separator, comma, columns, tuple(plain), tuple(_SCALE.get(u, 1.0) for u in units),
        tuple(x.strip()[:200] for x in lines[:at] if x.strip())[:40], bool(units[0]),
    )  # fmt: skip


def _coding(head: bytes) -> str:
    """UTF-8, with or without its mark, where all lines of the head are; else Latin-1, which takes any byte."""
    if head.startswith(b"\xef\xbb\xbf"):
        return "utf-8-sig"
    try:
        head[: head.rfind(b"\n") + 1 or None].decode("utf-8")
        return "utf-8"
    except UnicodeDecodeError:
        return "latin-1"


def _bare(cell):
    return cell.strip("()[] ").casefold()


# -- the body --------------------------------------------------------------------


def _at_once(path: Path, shape: _Shape, head: bytes):
    """The columns by NumPy's own reader, which is the fastest; None where it balks, and the blocks say why."""
    if shape.decimal_comma or b'"' in head or not path.is_file():
        return None
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # empty lines at the end are nothing to tell anybody
            table = np.loadtxt(
                path, delimiter=None if shape.separator == " " else shape.separator, skiprows=shape.line - 1, comments=None,
                max_rows=MOST_ROWS + 1, encoding="latin-1", ndmin=2,
            )  # fmt: skip
    except ValueError:
        return None
    if table.shape[1] != shape.columns or len(table) > MOST_ROWS or not np.isfinite(table).all():
        return None
    return [np.ascontiguousarray(table[:, k]) for k in range(shape.columns)]


def _body(stream: BinaryIO, shape: _Shape, name: str) -> list[np.ndarray]:
    """Columns of numbers, block by block."""
    parts: list[np.ndarray] = []
    rest, line, rows = b"", shape.line, 0
    while True:
        block = stream.read(BLOCK)
        data = rest + block
        if block:
            cut = data.rfind(b"\n") + 1
            if not cut and len(data) > 2 * BLOCK:
                raise InvalidReadings(f"{name}, line {line} has no end; it is not a table.")
            data, rest = data[:cut], data[cut:]
        else:
            rest = b""
        if data.strip():
            values, count = _block(data, shape, name, line)
            rows += len(values)
            if rows > MOST_ROWS:
                raise InvalidReadings(
                    f"{name} has more than {MOST_ROWS:,} rows; at most that many are read.".replace(",", " ")
                )
            parts.append(values)
            line += count
        else:
            line += data.count(b"\n")
        if not block:
            break
    columns = []
    for k in range(shape.columns):  # one column at a time, so that no second copy of the whole is held
        columns.append(np.concatenate([p[:, k] for p in parts]))
    return columns


def _block(data: bytes, shape: _Shape, name: str, line: int):
    """(rows, columns) of one block, and its number of lines."""
    lines = data.count(b"\n") + (not data.endswith(b"\n"))
    text = data.replace(b"\r", b"")
    if shape.decimal_comma:
        text = text.replace(b",", b".")
    if _regular(text, shape):
        flat = text
        if shape.separator != " ":
            flat = flat.replace(shape.separator.encode(), b" ")
        flat = flat.replace(b"\n", b" ")
        values = _parsed(flat)
        rows = text.count(b"\n") + (not text.endswith(b"\n"))
        if values is not None and len(values) == rows * shape.columns and np.isfinite(values).all():
            return values.reshape(-1, shape.columns), lines
    return _cell_by_cell(text, shape, name, line), lines


def _regular(text: bytes, shape: _Shape) -> bool:
    """Whether every line has the same number of separators (or, with blanks between, need not)."""
    if b'"' in text or b"_" in text:
        return False
    if shape.separator == " ":
        return True
    array = np.frombuffer(text, dtype=np.uint8)
    ends = np.flatnonzero(array == 10)
    starts = np.concatenate([[0], ends + 1])
    starts = starts[starts < len(array)]
    counts = np.add.reduceat((array == ord(shape.separator)).view(np.uint8), starts, dtype=np.int64)
    return bool((counts == counts[0]).all()) and int(counts[0]) in (shape.columns - 1, shape.columns)


def _parsed(flat: bytes):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            return np.fromstring(flat, dtype=float, sep=" ")
        except (ValueError, DeprecationWarning):
            return None


def _cell_by_cell(text: bytes, shape: _Shape, name: str, line: int) -> np.ndarray:
    """The slow way, which knows where it is."""
    rows = []
    for i, raw in enumerate(text.decode("latin-1").split("\n")):
        row = raw.strip()
        if not row:
            continue
        if shape.separator == " ":
            cells = row.split()
        else:
            cells = row.split(shape.separator)
            if len(cells) == shape.columns + 1 and not cells[-1].strip():
                cells.pop()
        if len(cells) != shape.columns:
            raise InvalidReadings(
                f"{name}, line {line + i} has {len(cells)} cells; the rows above have {shape.columns}."
            )
        out = []
        for k, cell in enumerate(cells):
            bare = cell.strip().strip('"').strip()
            try:
                value = float(bare)
            except ValueError:
                value = np.nan
            if not np.isfinite(value) or "_" in bare:
                raise InvalidReadings(
                    f"{name}, line {line + i}, column {k + 1} ({shape.names[k]}): {shown(bare)} is not a finite number."
                )
            out.append(value)
        rows.append(out)
    return np.array(rows, dtype=float).reshape(-1, shape.columns)
