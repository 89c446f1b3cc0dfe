"""Undo and redo of what was read on the bench, in step with that of the design."""

from __future__ import annotations

from typing import Any

from sumwright.model.history import Snapshot

MOST = 200


class ReadingSteps:
    """Readings as they were before each change, with what the sheet was then.

    A change of readings is taken back when the sheet is as it was when they were read; until then the design's
    own steps, which came later, go first.
    """

    def __init__(self) -> None:
        self.past: list[tuple[Snapshot, dict[str, Any]]] = []
        self.future: list[tuple[Snapshot, dict[str, Any]]] = []

    def record(self, sheet: Snapshot, before: dict[str, Any]) -> None:
        """The readings are about to change from `before`."""
        self.past = [*self.past, (sheet, before)][-MOST:]
        self.future = []

    def undo(self, sheet: Snapshot, now: dict[str, Any], *, alone: bool) -> dict[str, Any] | None:
        """The readings before the last change, if that is next in turn; `alone`: the design has no step to take back."""
        return _turn(self.past, self.future, sheet, now, alone)

    def redo(self, sheet: Snapshot, now: dict[str, Any], *, alone: bool) -> dict[str, Any] | None:
        """The readings last taken back, if they are next in turn."""
        return _turn(self.future, self.past, sheet, now, alone)


def _turn(source, target, sheet, now, alone):
    if not source or not (alone or source[-1][0] == sheet):
        return None
    then, readings = source.pop()
    target.append((then, now))
    return readings
