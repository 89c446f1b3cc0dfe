"""Op amps to choose from: classes with representative figures, and well-known types.

Every figure carries where it comes from. The classes are invented; the types are
industry standards made by several firms, whose sheets differ: a figure here starts
a design, the data sheet in hand finishes it.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, fields
from functools import cache
from importlib.resources import files

from .stage import OpAmp

OWN_LIST = "from your own list"


@dataclass(frozen=True)
class Entry:
    """One op amp of a list: its figures, and the source of each by name."""

    op_amp: OpAmp
    kind: str  # class, type, own
    note: str
    sources: dict[str, str]

    @property
    def name(self) -> str:
        return self.op_amp.name


FIGURES = tuple(f.name for f in fields(OpAmp) if f.name != "name")


@cache
def catalogue() -> tuple[Entry, ...]:
    """The list that comes with the project, classes first."""
    text = files(__package__).joinpath("op_amps.json").read_text(encoding="utf-8")
    data = json.loads(text)
    sources = data["sources"]
    entries = []
    for part in data["parts"]:
        figures = {key: value for key, (value, _) in part["figures"].items()}
        marks = {key: sources[mark] for key, (_, mark) in part["figures"].items()}
        entries.append(Entry(OpAmp(name=part["name"], **figures), part["kind"], part["note"], marks))
    return tuple(entries)


def own(op_amp: OpAmp) -> Entry:
    """An entry for an op amp of the person's own list."""
    return Entry(op_amp, "own", "", dict.fromkeys(FIGURES, OWN_LIST))


def find(name: str, entries: tuple[Entry, ...] | None = None) -> Entry | None:
    """The entry of that name, capitals aside; None if there is none."""
    wanted = name.strip().casefold()
    return next((e for e in entries or catalogue() if e.name.casefold() == wanted), None)
