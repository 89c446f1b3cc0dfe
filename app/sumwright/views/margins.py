"""The margin column: every check, tightest first, as a gauge with its reason."""

from __future__ import annotations

from typing import Any

from sumwright.engine.cautions import cautions
from sumwright.engine.checks import headline
from sumwright.quantity import unbroken


def show(bench: Any) -> list[dict[str, Any]]:
    """Every check as plain data; `ratio` is its margin in parts of its allowance, `first` marks the headline."""
    shown: list[dict[str, Any]] = []
    first = headline(bench.analysis.checks) if bench.analysis.checks else None
    for check in bench.analysis.checks:
        ratio = None
        if check.margin is not None and check.allowance:
            ratio = float(check.margin / abs(check.allowance))
        shown.append({
            "key": check.key, "title": check.title, "status": check.status, "margin": check.margin, "unit": check.unit,
            "ratio": ratio, "why": unbroken(check.why), "advice": unbroken(check.advice),
            "first": check is first,
        })  # fmt: skip
    return shown


def warnings(analysis: Any) -> list[dict[str, Any]]:
    """The usual cautions: those this design gives reason for first, then those that hold of any."""
    return [{"title": c.title, "text": unbroken(c.text), "present": c.present} for c in cautions(analysis)]
