"""The stage held beside the one on the sheet: kept for the session, shown in every plot."""

from __future__ import annotations

from typing import Any

from sumwright.engine.analysis import Analysis

KEY = "held stage"


def hold(context) -> None:
    """Hold the stage as it is now."""
    context.extras[KEY] = context.workbench.analysis


def hold_design(context, design, unplugged=()) -> None:
    """Hold another design (a frozen one), perhaps with cables out."""
    context.extras[KEY] = Analysis(design, unplugged)


def let_go(context) -> None:
    """Hold nothing."""
    context.extras.pop(KEY, None)


def held_of(context) -> Any:
    """The analysis held, or None."""
    return context.extras.get(KEY)


def held_differences(context, analysis) -> dict[str, Any]:
    """Each margin held, now, and by how much it moved."""
    held = held_of(context)
    if held is None:
        return {"held": None, "rows": []}
    then = {c.key: c for c in held.checks}
    rows = []
    for now in analysis.checks:
        old = then.get(now.key)
        difference = None
        if old is not None and old.margin is not None and now.margin is not None:
            difference = now.margin - old.margin
        rows.append(
            [now.title, now.unit, old.margin if old else None, old.status if old else "unknown", now.margin, now.status,
             difference]
        )  # fmt: skip
    return {"held": held.design.title, "rows": rows}
