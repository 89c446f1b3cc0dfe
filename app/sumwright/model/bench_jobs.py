"""The Bench's heavy work, each a job in a process of its own: kept apart from the views, so that a worker starts quickly."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from sumwright.engine.bench.capture import fit_capture
from sumwright.engine.bench.diagnose import diagnose
from sumwright.engine.bench.home import cure
from sumwright.files.capture import read_capture

LISTED = 8  # suspects shown
OUTPUT = "output"


def weigh(design, readings, meter):
    """A job: suspects and the next reading."""
    report = diagnose(design, readings, meter=meter)
    yield None
    return told(report)


def told(report) -> dict[str, Any]:
    """What the fold shows of a diagnosis."""
    first = [s for s in report.suspects if s.group == 1]
    mend = cure(report.diagnosis)
    return {
        "odd": _odd(report),
        "cure": None if mend is None else mend._asdict(),
        "suspects": [s._asdict() for s in report.suspects[:LISTED]],
        "more": max(0, len(first) - LISTED),
        "tell": next((s.tell for s in first if s.tell), "") if len(first) > 1 else "",
        "next": report.next_reading.volts, "bits": report.next_reading.bits, "notes": list(report.notes),
    }  # fmt: skip


def _odd(report) -> str:
    """Said where not even the likeliest suspect may well give these readings; empty where it may."""
    d = report.diagnosis
    lead = int(d.order[0])
    if not len(d.readings) or d.fits()[lead]:
        return ""
    return "No single fault explains these readings: one of them may be wrong, or two things are. What comes nearest:"


def look(path: str, signals: tuple[str, ...], name: str = ""):
    """A job: read a record and say what is in it."""
    c = read_capture(Path(path), name)
    yield None
    np.save(columns_file(path), np.stack([c.time, *c.channels.values()]))  # so that a fit need not read the text again
    return {
        "channels": list(c.channels), "rows": len(c.time), "interval": c.interval, "span": float(c.time[-1] - c.time[0]),
        "time": f"time read in {c.time_unit}" if c.time_stated else "time taken as seconds: its heading names no unit",
        "map": guess(tuple(c.channels), signals),
    }  # fmt: skip


def columns_file(path: str) -> str:
    """Where the columns of a record are put beside it, once it is read."""
    return f"{path}.npy"


def guess(channels: tuple[str, ...], signals: tuple[str, ...]) -> dict[str, str]:
    """Which channel is what, by name; the last unnamed one is taken for the output."""
    folded = {s.casefold(): s for s in signals}
    found = {c: folded.get(c.casefold(), OUTPUT if c.casefold() in ("output", "out", "vout") else "") for c in channels}
    if OUTPUT not in found.values():
        left = [c for c in channels if not found[c]]
        if left:
            found[left[-1]] = OUTPUT
    return found


def fit_record(path: str, design, mapping: dict[str, str]):
    """A job: fit a record that was looked at; `mapping` says of every channel, in their order, what it is."""
    columns = np.load(columns_file(path), mmap_mode="r")
    yield None
    found = {what: np.array(columns[k]) for k, what in enumerate(mapping.values(), start=1) if what}
    output = found.pop(OUTPUT)
    return fit_capture(design, np.array(columns[0]), output, found)
