"""What the verbs share: reading their inputs, and printing tables or JSON."""

from __future__ import annotations

import argparse
import json
import os
import unicodedata
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from sumwright.engine.stage import Design
from sumwright.errors import InvalidDesign, InvalidQuantity, SumwrightError, shown
from sumwright.files.design import read_design
from sumwright.files.text import check_writable


def add_design(parser: argparse.ArgumentParser) -> None:
    """The design file every verb starts from."""
    parser.add_argument("design", metavar="DESIGN", type=Path, help="design file (JSON)")


def add_json(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--json", action="store_true", help="print a JSON document instead of tables")


def load_design(path: Path, *, realised: bool = True) -> Design:
    """The design in a file, for a verb that needs its resistors (`realised`) or not.

    Raises
    ------
    InvalidDesign
        The sentence begins with the file's name where it does not name it already.
    """
    try:
        design = read_design(path)
    except InvalidDesign as problem:
        text = str(problem)
        if text.startswith(shown(str(path), 120)):
            raise
        raise InvalidDesign(f"{shown(str(path), 120)}: {text}", problem.key) from None
    if realised and not design.cells:
        raise InvalidDesign(
            f"{shown(str(path), 120)} has no cells: it is not realised yet; run sumwright realise on it first.", "cells"
        )
    return design


def check_outputs(outputs: Iterable[Path | None], inputs: Iterable[Path | str | None]) -> None:
    """Refuse, before anything is written, an output that cannot be or that would replace an input or another output.

    Raises
    ------
    SumwrightError
    """
    taken = {os.path.realpath(name): "is read by this command" for name in inputs if name is not None}
    for path in outputs:
        if path is None:
            continue
        check_writable(path)
        place = os.path.realpath(path)
        if place in taken:
            raise SumwrightError(f"{shown(str(path), 120)} {taken[place]}; name another file to write.")
        taken[place] = "is written by this command already"


def whole(text: str, name: str, least: int, most: int) -> int:
    """A whole number from the command line.

    Raises
    ------
    InvalidQuantity
        If it is not one, or outside the limits.
    """
    try:
        number = int(text) if len(text) < 20 else None
    except ValueError:
        number = None
    if number is None or not least <= number <= most:
        raise InvalidQuantity(f"{name} is {shown(text)}; it must be a whole number from {least} to {most}.")
    return number


def read_whole(name: str, most: int) -> bytes:
    """A file's bytes; SumwrightError if it cannot be read or has more than `most`."""
    try:
        with Path(name).open("rb") as held:
            data = held.read(most + 1)
    except (OSError, ValueError) as error:
        raise SumwrightError(
            f"{shown(name, 120)} cannot be read: {getattr(error, 'strerror', None) or error}."
        ) from None
    if len(data) > most:
        raise SumwrightError(f"{shown(name, 120)} is larger than {most} bytes, the most that is read.")
    return data


def print_json(document: Any) -> None:
    """A JSON document on stdout; ASCII only, so that no terminal setting can spoil it."""
    print(json.dumps(document, indent=2, allow_nan=False))


def plain(text: str) -> str:
    """A name as a terminal may show it: control characters are left out."""
    return "".join(c for c in text if unicodedata.category(c) not in ("Cc", "Cf", "Cs", "Zl", "Zp"))


def table(head: Sequence[str], rows: Iterable[Sequence[str]], *, text_columns: int = 1) -> str:
    """Rows in aligned columns: the first `text_columns` to the left, figures to the right."""
    body = [[plain(str(cell)) for cell in row] for row in rows]
    columns = [[str(h), *(row[k] for row in body)] for k, h in enumerate(head)]
    widths = [max(_width(cell) for cell in column) for column in columns]
    lines = []
    for row in [list(head), *body]:
        cells = []
        for k, cell in enumerate(row):
            gap = " " * (widths[k] - _width(cell))
            cells.append(cell + gap if k < text_columns else gap + cell)
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def _width(text: str) -> int:
    """Columns a terminal gives a text: wide East Asian characters take two, combining marks none."""
    return sum(0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)
