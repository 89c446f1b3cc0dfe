"""Undo and redo over frozen snapshots of the choices."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

from sumwright.engine.stage import Design

MOST = 500  # steps kept; a snapshot shares every unchanged part with its neighbours


class Snapshot(NamedTuple):
    """Every choice that undo gives back."""

    design: Design
    unplugged: tuple[str, ...] = ()
    follow: str = "nearest"
    chosen: str = ""  # the arrangement the person chose, where its cells have another's legs


@dataclass
class History:
    """What was before and what was taken back; the present is kept by its owner.

    A change announced with a `hand` (a drag, say) that is the hand of the step
    before it is the same step: one drag undoes at once. `let_go` ends it.
    """

    past: list[Snapshot] = field(default_factory=list)
    future: list[Snapshot] = field(default_factory=list)
    hand: str = ""

    def record(self, before: Snapshot, hand: str = "") -> None:
        """Remember the state before a change; anything taken back is given up."""
        if not (hand and hand == self.hand and self.past):
            self.past.append(before)
            del self.past[:-MOST]
        self.hand = hand
        self.future.clear()

    def let_go(self) -> None:
        """End the step under way: the next change is a step of its own."""
        self.hand = ""

    def undo(self, present: Snapshot) -> Snapshot | None:
        """The state to go back to, or None."""
        return self._move(self.past, self.future, present)

    def redo(self, present: Snapshot) -> Snapshot | None:
        """The state to go forward to, or None."""
        return self._move(self.future, self.past, present)

    def _move(self, source, other, present):
        self.let_go()
        if not source:
            return None
        other.append(present)
        return source.pop()
