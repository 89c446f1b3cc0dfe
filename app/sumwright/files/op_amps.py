"""A person's own list of op amps: CSV in and out, one op amp a row.

The header names the figures as the design file does, plus `name`; values may be
numbers or engineering notation. An empty field is allowed only where the design
file allows null.
"""

from __future__ import annotations

import csv
import io
from typing import Any

from sumwright.engine.catalogue import FIGURES, Entry, own
from sumwright.engine.stage import OpAmp
from sumwright.errors import InvalidDesign, InvalidQuantity

from .design import _op_amp

MOST_ROWS = 2000
MAY_BE_EMPTY = ("second_pole", "thermal_resistance", "junction_most")
COLUMNS = ("name", *FIGURES)


def read_op_amps(text: str) -> tuple[Entry, ...]:
    """The op amps of a CSV text.

    Raises
    ------
    InvalidDesign
        Naming the line and the column of the first thing wrong.
    """
    text = text.lstrip("\ufeff").replace("\r\n", "\n").replace("\r", "\n")
    first = next((line for line in text.splitlines() if line.strip()), "")
    mark = next((m for m in (";", "\t") if m in first), ",")  # as spreadsheets of other countries save it
    try:
        rows = list(csv.reader(io.StringIO(text), skipinitialspace=True, delimiter=mark))
    except csv.Error as error:
        raise InvalidDesign(f"the list of op amps cannot be read as CSV: {error}.", "") from None
    numbered = [(i + 1, r) for i, r in enumerate(rows) if any(f.strip() for f in r)]
    if not numbered:
        raise InvalidDesign("the list of op amps is empty; its first line must name the columns.", "header")
    at, header = numbered[0]
    names = [f.strip() for f in header]
    for name in names:
        if name not in COLUMNS:
            raise InvalidDesign(
                f"line {at}: {name!r} is not a figure of an op amp; allowed are {', '.join(COLUMNS)}.", name
            )
        if names.count(name) > 1:
            raise InvalidDesign(f"line {at}: the column {name} is there twice.", name)
    missing = [c for c in COLUMNS if c not in names]
    if missing:
        raise InvalidDesign(
            f"line {at}: the column {missing[0]} is missing; needed are {', '.join(COLUMNS)}.", missing[0]
        )
    if len(numbered) - 1 > MOST_ROWS:
        raise InvalidDesign(f"the list holds {len(numbered) - 1} op amps; at most {MOST_ROWS} are read.", "")
    entries: list[Any] = []
    seen: dict[str, Any] = {}
    for line, row in numbered[1:]:
        if len(row) != len(names):
            raise InvalidDesign(f"line {line} has {len(row)} fields, the header has {len(names)}.", str(line))
        fields = {n: f.strip() for n, f in zip(names, row, strict=True)}
        values: dict[str, object] = {k: (None if v == "" and k in MAY_BE_EMPTY else v) for k, v in fields.items()}
        try:
            amp = _op_amp(values)
        except (InvalidDesign, InvalidQuantity) as error:
            raise InvalidDesign(f"line {line}: {error}", getattr(error, "key", "")) from error
        if amp.name.casefold() in seen:
            raise InvalidDesign(
                f"line {line}: {amp.name!r} is there already, in line {seen[amp.name.casefold()]}.", "name"
            )
        seen[amp.name.casefold()] = line
        entries.append(own(amp))
    return tuple(entries)


def write_op_amps(op_amps) -> str:
    """The CSV text of a list of `OpAmp` or `Entry`."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(COLUMNS)
    for item in op_amps:
        amp: OpAmp = item.op_amp if isinstance(item, Entry) else item
        writer.writerow(["" if (v := getattr(amp, c)) is None else v for c in COLUMNS])
    return out.getvalue()
