"""A table as data: raw numbers in SI units, and how a person reads them.

One table serves the document, the CSV file and the Markdown summary, so that none
of them can say another number than the engine found.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np

from sumwright.files.bill import safe_cell
from sumwright.quantity import THIN, format_fixed, format_percent, format_quantity, format_resistor

from .axes import prefix_of


@dataclass(frozen=True)
class Column:
    """One column.

    `form` says how it is read: `text`; `fixed` with `decimals` in the base unit;
    `scaled`, one SI prefix for the whole column so that the points align;
    `figures`, each with its own prefix; `resistor`, as parts are marked; `percent`, of a
    fraction, with `decimals`; `measured`, each with its own unit. What is `only_file`
    stands in files and not in documents.
    """

    title: str
    unit: str = ""
    form: str = "text"
    decimals: int = 3
    sign: bool = False
    only_file: bool = False

    @property
    def numeric(self) -> bool:
        return self.form != "text"


class Measured(NamedTuple):
    """A number with a unit of its own."""

    value: float | None
    unit: str


@dataclass(frozen=True)
class Table:
    """Rows of raw values under `columns`; None is what does not exist."""

    key: str
    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Any, ...], ...]
    note: str = ""
    marked: frozenset[int] = field(default_factory=frozenset)  # rows that fall short

    @property
    def shown(self) -> list[int]:
        """The columns a document shows."""
        return [j for j, c in enumerate(self.columns) if not c.only_file]

    @property
    def heads(self) -> list[str]:
        """Column heads with the unit their numbers are in."""
        heads = []
        for j in self.shown:
            c = self.columns[j]
            unit = c.unit
            if c.form == "scaled":
                unit = prefix_of(self._numbers(j))[1] + c.unit
            elif c.form == "percent":
                unit = "%"
            elif c.form in ("figures", "resistor", "measured"):
                unit = ""
            heads.append(f"{c.title}, {unit}" if unit and c.title else c.title or unit)
        return heads

    @property
    def cells(self) -> list[list[str]]:
        """Every cell as it is read."""
        forms = [(j, self._writer(j)) for j in self.shown]
        return [[write(row[j]) for j, write in forms] for row in self.rows]

    @property
    def numeric(self) -> list[bool]:
        """Which shown columns hold numbers."""
        return [self.columns[j].numeric for j in self.shown]

    def _numbers(self, j: int) -> list[float]:
        return [float(r[j]) for r in self.rows if isinstance(r[j], int | float | np.number) and math.isfinite(r[j])]

    def _writer(self, j: int):
        c = self.columns[j]
        if c.form == "fixed":
            places = fixed_decimals(self._numbers(j), c.decimals)
            return lambda v: format_fixed(v, "", places, sign=c.sign)
        if c.form == "scaled":
            factor = prefix_of(self._numbers(j))[0]
            places = scaled_decimals(self._numbers(j), factor, c.decimals)
            return lambda v: format_fixed(None if v is None else v / factor, "", places, sign=c.sign)
        if c.form == "figures":
            return lambda v: format_quantity(v, c.unit, c.decimals, sign=c.sign)
        if c.form == "resistor":
            return lambda v: "" if v is None else format_resistor(v)
        if c.form == "percent":
            places = fixed_decimals([v * 100 for v in self._numbers(j)], c.decimals)
            return lambda v: format_fixed(None if v is None else v * 100, "", places, sign=c.sign)
        if c.form == "measured":
            return lambda v: measure(v.value, v.unit, c.sign)
        return lambda v: "" if v is None else str(v)


def scaled_decimals(numbers: Sequence[float], factor: float, figures: int) -> int:
    """Decimals that give the largest of `numbers` that many significant figures."""
    most = max((abs(v) for v in numbers), default=0.0) / factor
    if most == 0:
        return 0
    return max(0, figures - 1 - math.floor(math.log10(most) + 1e-9))


def fixed_decimals(numbers: Sequence[float], wanted: int) -> int:
    """Decimals of a column, fewer where the largest of `numbers` would take more than eight figures."""
    most = max((abs(v) for v in numbers), default=0.0)
    return wanted if most < 1e3 else max(0, min(wanted, 7 - math.floor(math.log10(most))))


def measure(value: float | None, unit: str, sign: bool = False) -> str:
    """A number with its own unit, as the margins have it."""
    if value is None:
        return "–"
    if unit == "%":
        return format_percent(value / 100, 3, sign=sign)
    if unit in ("°", "°C", "K"):
        return format_fixed(value, "", 1, sign=sign) + (unit if unit == "°" else f"{THIN}{unit}")
    if unit == "V" and 0.02 <= abs(value) < 1e4:
        return format_fixed(value, "V", 3, sign=sign)
    return format_quantity(value, unit, 3, sign=sign)


# Files ------------------------------------------------------------------------------------------


def csv_text(table: Table) -> str:
    """The table as CSV: UTF-8, SI base units in the head, numbers as numbers, texts that no spreadsheet runs."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow([safe_cell(_csv_head(c)) for c in table.columns])
    for row in table.rows:
        writer.writerow([_csv_value(v) for v in row])
    return out.getvalue()


def _csv_head(c: Column) -> str:
    unit = "ohm" if c.form == "resistor" else "1" if c.form == "percent" else c.unit.replace("Ω", "ohm")
    return f"{c.title} [{unit}]" if unit and c.form != "text" else c.title


def _csv_value(value: Any) -> str:
    if isinstance(value, Measured):
        value = value.value
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int | float | np.number):
        number = float(value)
        return repr(int(number)) if number.is_integer() and abs(number) < 1e15 else repr(number)
    return safe_cell(str(value))


def markdown(table: Table) -> str:
    """The table in Markdown; nothing in a cell can end it or become markup."""
    lines = [
        "| " + " | ".join(plain_markdown(h) for h in table.heads) + " |",
        "|" + "|".join("---:" if n else ":---" for n in table.numeric) + "|",
    ]
    lines += ["| " + " | ".join(plain_markdown(cell) for cell in row) + " |" for row in table.cells]
    return "\n".join(lines)


def plain_markdown(text: str) -> str:
    """A text that Markdown shows as it is."""
    flat = " ".join(text.split())
    for c in "\\`*_[]<>|#~&":
        flat = flat.replace(c, "\\" + c)
    return flat


__all__ = [
    "Column",
    "Measured",
    "Table",
    "csv_text",
    "fixed_decimals",
    "markdown",
    "measure",
    "plain_markdown",
    "safe_cell",
    "scaled_decimals",
]
