"""Which op amp: every entry of a list tried in the stage, check by check."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import NamedTuple

from .catalogue import Entry, catalogue
from .stage import Design, replace


class Trial(NamedTuple):
    """One op amp in the stage: its checks by key, and how many fall short or are tight."""

    name: str
    kind: str
    note: str
    short: int
    tight: int
    room: float  # least margin over its allowance, unknown ones aside
    tightest: str  # title of that check
    checks: dict[str, tuple[str, str, float | None, str]]  # key: title, status, margin, unit


def try_one(design: Design, entry: Entry) -> Trial:
    """The stage with that op amp in every cell."""
    from .analysis import Analysis

    checks = Analysis(replace(design, op_amp=entry.op_amp)).checks
    known = [c for c in checks if c.status != "unknown"]
    least = min(known, key=lambda c: c.room, default=None)
    return Trial(
        entry.name, entry.kind, entry.note, sum(c.status == "short" for c in checks),
        sum(c.status == "tight" for c in checks), least.room if least else 0.0, least.title if least else "",
        {c.key: (c.title, c.status, c.margin, c.unit) for c in checks},
    )  # fmt: skip


def try_all(design: Design, entries: Iterable[Entry] | None = None) -> Iterator[Trial]:
    """Each entry in turn; a generator, so that a table can fill while it goes on."""
    for entry in catalogue() if entries is None else entries:
        yield try_one(design, entry)


def ranked(trials: Iterable[Trial]) -> list[Trial]:
    """Fewest short first, then fewest tight, then most room at the tightest."""
    return sorted(trials, key=lambda t: (t.short, t.tight, -t.room))
