"""The one object that owns a sheet's state: choices go in, an analysis comes out.

Anyone may set a choice. Only `_solve` sets `design`, `analysis` and `problem`,
and it never sets a choice, so each change travels one way and stops. Changes a
person makes go through `edit`, which also makes the undo step.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import fields, replace
from typing import Any

import param

from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import arrangement_of
from sumwright.engine.stage import Ambient, Design, Load, OpAmp, Reference, ResistorKind, Supply, Target
from sumwright.errors import InvalidDesign, SumwrightError
from sumwright.model import edits
from sumwright.model.bench_history import ReadingSteps
from sumwright.model.history import History, Snapshot

SYMBOLS = ("IEC 60617", "IEEE 315")
THEMES = ("light", "dark")
_DESIGN_FIELDS = tuple(f.name for f in fields(Design))


class Workbench(param.Parameterized):
    """A sheet: what is chosen, and what follows from it."""

    # the design, one choice a part of its file
    title = param.String("", doc="What the sheet is called.")
    signals = param.ClassSelector(class_=tuple, default=(), doc="The signals, in the order of their rows.")
    target = param.ClassSelector(class_=Target, doc="What is asked of the output.")
    reference = param.ClassSelector(class_=Reference, allow_None=True, doc="Where an offset comes from.")
    supply = param.ClassSelector(class_=Supply, doc="The rails.")
    load = param.ClassSelector(class_=Load, doc="What the output drives.")
    ambient = param.ClassSelector(class_=Ambient, doc="The temperatures around it.")
    resistor = param.ClassSelector(class_=ResistorKind, doc="What resistors it is built from.")
    op_amp = param.ClassSelector(class_=OpAmp, doc="The figures of its op amps.")
    stray_capacitance = param.Number(0.0, bounds=(0, None), doc="At each inverting node [F].")
    noise_band = param.Tuple((0.1, 1e5), length=2, doc="Band of the RMS noise [Hz].")
    cells = param.ClassSelector(class_=tuple, default=(), doc="The op amps with their resistors.")

    # the sheet
    unplugged = param.ClassSelector(class_=tuple, default=(), doc="Signals whose cable is out.")
    follow = param.Selector(default="nearest", objects=list(edits.FOLLOW), doc="How resistors follow a weight.")
    chosen = param.String("", doc="The arrangement chosen; shown as long as the cells are what it makes.")
    on = param.String("", doc="The signal under the hand.")
    symbols = param.Selector(default=SYMBOLS[0], objects=list(SYMBOLS), doc="Resistor symbols of the drawing.")
    theme = param.Selector(default=THEMES[0], objects=list(THEMES), doc="Light or dark paper.")

    readings = param.Dict(
        default={}, doc="The bench's readings and meter as plain data; replaced, never changed in place."
    )

    # what follows
    design = param.ClassSelector(class_=Design, constant=True, doc="The choices as one frozen design.")
    analysis = param.ClassSelector(class_=Analysis, constant=True, doc="Of the last design that could be analysed.")
    problem = param.String("", constant=True, doc="Empty while `analysis` is of the present design.")

    def __init__(self, design: Design, **params: Any):
        self.history = History()
        self._cleared: tuple[Snapshot, dict[str, Any]] | None = None  # readings taken away, and what the sheet was then
        self._steps = ReadingSteps()
        self._first = False  # whether those come before what was read since
        self._before = 0  # steps of the readings at that time
        self._styles: dict[str, int] = {}
        design = edits.realised(design)
        choices = {name: getattr(design, name) for name in _DESIGN_FIELDS}
        widest = max(design.signals, key=lambda s: abs(s.weight) * (s.high - s.low))
        params.setdefault("on", widest.name)
        super().__init__(**choices, **params)

    @param.depends(*_DESIGN_FIELDS, "unplugged", watch=True, on_init=True)
    def _solve(self):
        design = Design(**{name: getattr(self, name) for name in _DESIGN_FIELDS})
        try:
            analysis = Analysis(design, self.unplugged, self.analysis)
            if not math.isfinite(analysis.dc.output):  # the one result nothing on the sheet can do without
                raise InvalidDesign("The node equations have no finite solution with these values.")
        except SumwrightError as error:
            self._follows(design=design, problem=str(error))  # the last good analysis stays on the sheet
        else:
            self._follows(design=design, analysis=analysis, problem="")

    def _follows(self, **results: Any) -> None:
        """Set results: `param.edit_constant` for these three alone, which a drag does sixty times a second."""
        for name, value in results.items():
            if value is getattr(self, name):
                continue
            self.param[name].constant = False
            try:
                setattr(self, name, value)
            finally:
                self.param[name].constant = True

    def style(self, name: str) -> int:
        """The number of a signal's colour, dash and marker; it keeps it through reordering and renaming."""
        if name not in self._styles:
            taken = {self._styles[n] for n in self.signal_names if n in self._styles}
            self._styles[name] = next(k for k in range(len(taken) + 1) if k not in taken)
        return self._styles[name]

    @property
    def signal_names(self) -> tuple[str, ...]:
        """The signals in the order of the person."""
        return tuple(s.name for s in self.signals)

    # ------------------------------------------------------------ changes a person makes

    @property
    def snapshot(self) -> Snapshot:
        """Every choice that undo gives back."""
        return Snapshot(self.design, self.unplugged, self.follow, self.chosen)

    @property
    def arrangement(self) -> str | None:
        """The arrangement the sheet shows: the one chosen, if these cells are what it makes, else what they are."""
        made = arrangement_of(self.cells)
        return self.chosen if edits.same_legs(self.design, self.chosen, made) else made

    def edit(self, change: Callable[..., Design], *args: Any, hand: str = "") -> None:
        """Replace the design by `change(design, *args)`, as one undo step.

        Changes announced with the same `hand` one after the other (the moves of a
        drag) are one step. Nothing happens to the sheet if `change` refuses.
        """
        self._put(change(self.design, *args), hand=hand)

    def put(self, design: Design) -> None:
        """Another whole design on the sheet (a file, a new sum), as one undo step."""
        design = edits.realised(design)
        before, self._styles = self._styles, {}  # names of other sheets hold no colours here
        try:
            self._put(design, unplugged=(), chosen="")
        except SumwrightError:
            self._styles = before
            raise

    def arrange(self, change: Callable[[Design], Design], arrangement: str) -> None:
        """`change` the design to cells of `arrangement`, and remember that it was chosen."""
        self._put(change(self.design), chosen=arrangement)

    def follow_weights(self, follow: str) -> None:
        """Choose how resistors follow; `exact` and `nearest` change none by themselves."""
        self._put(self.design, follow=follow)

    def plug(self, name: str, out: bool) -> None:
        """Pull a signal's cable out, or plug it in."""
        self.design.signal(name)
        rest = tuple(n for n in self.unplugged if n != name)
        self._put(self.design, unplugged=(*rest, name) if out else rest)

    def read(self, readings: dict[str, Any]) -> None:
        """Other readings, as one undo step."""
        self._steps.record(self.snapshot, self.readings)
        self.readings = readings

    def clear_readings(self, left: dict[str, Any]) -> None:
        """Take the bench's readings away, leaving `left`; the next undo gives them back."""
        self._cleared, self._first, self._before = (self.snapshot, self.readings), False, len(self._steps.past)
        self.readings = left

    def lay_aside(self, readings: dict[str, Any]) -> None:
        """Readings that another person's version replaced: the next undo brings them back, before theirs where both read a step."""
        self._cleared, self._first, self._before = (self.snapshot, readings), True, len(self._steps.past)

    @property
    def cleared(self) -> dict[str, Any]:
        """The readings that were taken away and not given back; `{}` if there are none."""
        return self._cleared[1] if self._cleared else {}

    def bring_back_readings(self) -> None:
        """The readings that were taken away, beside those taken since: where both read the same step, the later in the list counts."""
        gone, self._cleared = self.cleared, None
        sides = {}
        for k in ("taken", "asked"):
            both = [gone.get(k, ()), self.readings.get(k, ())]
            sides[k] = [t for side in (reversed(both) if self._first else both) for t in side]
        self.readings = {**gone, **self.readings, **sides}

    @property
    def can_undo(self) -> bool:
        """Whether there is a step to take back."""
        return bool(self.history.past or self._steps.past) or self._cleared is not None

    @property
    def can_redo(self) -> bool:
        """Whether there is a step to put on again."""
        return bool(self.history.future or self._steps.future)

    def undo(self) -> bool:
        """Take the last step back; False if there is none."""
        alone = not self.history.past
        if self._cleared and len(self._steps.past) <= self._before and (alone or self._cleared[0] == self.snapshot):
            self.bring_back_readings()
            return True
        readings = self._steps.undo(self.snapshot, self.readings, alone=alone)
        if readings is not None:
            self.readings = readings
            return True
        return self._restore(self.history.undo(self.snapshot))

    def redo(self) -> bool:
        """Put the step last taken back on again; False if there is none."""
        readings = self._steps.redo(self.snapshot, self.readings, alone=not self.history.future)
        if readings is not None:
            self.readings = readings
            return True
        return self._restore(self.history.redo(self.snapshot))

    def replace_quietly(self, snapshot: Snapshot) -> None:
        """Show another state without an undo step (a stored sheet, another person's change)."""
        self._restore(snapshot)

    def _put(self, design: Design, *, unplugged=None, follow=None, chosen=None, hand: str = "") -> None:
        before = self.snapshot
        unplugged = self.unplugged if unplugged is None else unplugged
        after = Snapshot(
            design, unplugged, self.follow if follow is None else follow, self.chosen if chosen is None else chosen
        )
        gone = set(after.unplugged) - set(design.signal_names)
        if gone and len(design.signals) == len(before.design.signals):  # renamed: the cable stays out
            names = dict(zip(before.design.signal_names, design.signal_names, strict=True))
            after = after._replace(unplugged=tuple(names[n] for n in after.unplugged))
        elif gone:
            after = after._replace(unplugged=tuple(n for n in after.unplugged if n not in gone))
        if after == before:
            return
        check_size(design)
        self._try(after)
        self.history.record(before, hand)
        self._steps.future = []

    def _try(self, after: Snapshot) -> None:
        """Show `after`, or refuse it and keep what was if it cannot be analysed."""
        before = self.snapshot
        self._show(after)
        if self.problem:
            problem = self.problem
            self._show(before)
            raise InvalidDesign(problem)

    def _restore(self, snapshot: Snapshot | None) -> bool:
        if snapshot is None:
            return False
        self._show(snapshot)
        return True

    def _show(self, s: Snapshot) -> None:
        choices: dict[str, Any] = {n: getattr(s.design, n) for n in _DESIGN_FIELDS}
        on = self.on if self.on in s.design.signal_names else s.design.signals[0].name
        old = self.design.signal_names
        if self.on not in s.design.signal_names and self.on in old and len(old) == len(s.design.signals):
            on = s.design.signal_names[old.index(self.on)]  # renamed under the hand
        if len(old) == len(s.design.signals):
            for was, now in zip(old, s.design.signal_names, strict=True):
                if was not in s.design.signal_names and was in self._styles:
                    self._styles[now] = self._styles[was]
        choices.update(unplugged=s.unplugged, follow=s.follow, chosen=s.chosen, on=on)
        changed = {n: v for n, v in choices.items() if v is not getattr(self, n)}
        if len(changed) == 1:
            ((name, value),) = changed.items()
            setattr(self, name, value)  # the path of a moving slider
        elif changed:
            self.param.update(**changed)


def check_size(design: Design) -> None:
    """Refuse what no sheet can draw.

    Raises
    ------
    InvalidDesign
        If there are more signals than a sheet holds.
    """
    if len(design.signals) > edits.SIGNALS_MOST:
        raise InvalidDesign(
            f"A sheet holds {edits.SIGNALS_MOST} signals; this design has {len(design.signals)}.", "signals"
        )


def renamed(design: Design, title: str) -> Design:
    """The design under another title."""
    title = " ".join(str(title).split())[:200]
    if not title:
        raise InvalidDesign("A sheet needs a title.", "title")
    return replace(design, title=title)
