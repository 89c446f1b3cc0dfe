"""The search for choices as a job in steps: arrangement by arrangement, with progress and what is found so far."""

from __future__ import annotations

import queue
import threading
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

from sumwright.engine.analysis import Analysis
from sumwright.engine.arrangement import able, check_able, wanted_weights
from sumwright.engine.realise.choices import Choice, Realisation, is_another, rank, realise
from sumwright.engine.realise.drawer import Drawer
from sumwright.engine.stage import Cell, Design
from sumwright.errors import CannotRealise, SumwrightError

SECONDS = 12.0  # for all arrangements together
TOLD_EVERY = 0.1  # s, between two reports of progress


def search_steps(
    design: Design,
    arrangement: str | None = None,
    pairs: bool = False,
    drawer: Drawer | None = None,
    least_leg: float | None = None,
) -> Iterator[dict[str, Any]]:
    """Find the choices; yields `{"share", "arrangement", "choices"}` and returns a `Realisation`.

    Parameters
    ----------
    design : Design
    arrangement : str, optional
        Look at this one alone; otherwise at each that can, but for those whose cells are a plainer one's.
    pairs : bool
        Let two resistors stand for one.
    drawer : Drawer, optional
        From this drawer alone.
    least_leg : float, optional
        Least leg that any signal's source may see [ohm].

    Raises
    ------
    CannotRealise
        If nothing can make the weights.
    """
    if arrangement is not None:
        check_able(design, arrangement)
        names: list[str] = [arrangement]
    else:
        wanted_weights(design)
        names = [name for name in able(design) if not is_another(design, name)]
    least_input = dict.fromkeys(design.signal_names, least_leg) if least_leg else None
    choices: list[Choice] = []
    bounds: dict[str, float] = {}
    proved: dict[str, bool] = {}
    notes: list[str] = []
    for k, name in enumerate(names):
        told: queue.Queue[tuple[str, Any]] = queue.Queue()

        def work(name=name, told=told):
            try:
                found = realise(
                    design, arrangement=name, pairs=pairs, drawer=drawer, least_input=least_input,
                    seconds=SECONDS / len(names),
                    watch=lambda done, told=told: told.put(("share", done)),
                )  # fmt: skip
                told.put(("found", found))
            except Exception as problem:  # handed on to the thread that asked
                told.put(("failed", problem))

        threading.Thread(target=work, daemon=True).start()
        share = 0.0
        while True:
            try:
                kind, value = told.get(timeout=TOLD_EVERY)
            except queue.Empty:
                yield {"share": (k + share) / len(names), "arrangement": name, "choices": ()}
                continue
            if kind == "share":
                share = max(share, value)
                continue
            break
        if kind == "failed":
            if not isinstance(value, CannotRealise) or len(names) == 1:
                raise value
            notes.append(str(value))
            continue
        choices += [replace(c, short=_short(design, c)) for c in value.choices]
        bounds |= value.bounds
        proved |= value.proved
        notes += [n for n in value.notes if n not in notes]
        choices.sort(key=rank)
        yield {"share": (k + 1) / len(names), "arrangement": name, "choices": tuple(choices)}
    if not choices:
        raise SumwrightError(" ".join(notes) or "No set of values was found.")
    return Realisation(tuple(choices), bounds, proved, tuple(notes))


def with_cells(design: Design, cells: tuple[Cell, ...]) -> Design:
    """The design with another set of cells; feedback capacitors, which a set does not have, stay with their op amps.

    Where the number of op amps changes, each gets the one that the last has now.
    """
    old = [cell.feedback_capacitance for cell in design.cells] or [0.0]
    kept = old if len(old) == len(cells) else [old[-1]] * len(cells)
    return replace(design, cells=tuple(replace(c, feedback_capacitance=f) for c, f in zip(cells, kept, strict=True)))


def _short(design: Design, choice: Choice) -> tuple[str, ...]:
    """Titles of the checks that would fall short with a choice, worst first; empty where it cannot be analysed."""
    try:
        checks = Analysis(with_cells(design, choice.cells)).checks
    except SumwrightError:
        return ()
    return tuple(check.title for check in checks if check.status == "short")
