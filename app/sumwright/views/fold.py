"""What a fold of the sheet is: the contract between a fold's module and the page.

A fold lives in `views/<key>.py`, with a class of the same name capitalised, and
draws itself in `static/folds/<key>.js`. It is made when a person first opens it
and is asked to show something only while it is open.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any


class Context:
    """What the page gives a fold.

    Attributes
    ----------
    workbench
        The sheet's state (`model.workbench.Workbench`): read `design`, `analysis`,
        `on`, `theme`; change through its methods.
    jobs
        `jobs.Jobs`: heavy work outside the server's thread.
    refresh
        Call it when the fold has something new to show of its own accord (a job's
        progress): the page sends the fold's `show()`.
    refresh_sheet
        Call it after changing the workbench: the page sends the whole frame. Not
        needed inside `handle`, which is followed by a frame anyway.
    say
        Say one sentence in the line under the strips; `say(text, bad=True)` in red.
    may
        `may(action)` raises NotAllowed if the person may not; `handle` is called
        only after `may("fold <key>")`.
    extras
        Free dictionary shared by the session's folds and the page (the notebook's
        place, say).
    """

    def __init__(
        self, workbench: Any, jobs: Any, refresh: Callable, refresh_sheet: Callable, say: Callable, may: Callable,
        extras: dict[str, Any],
    ):  # fmt: skip
        self.workbench = workbench
        self.jobs = jobs
        self.refresh = refresh
        self.refresh_sheet = refresh_sheet
        self.say = say
        self.may = may
        self.extras = extras


class Fold:
    """Base of every fold."""

    title = ""  # the word in the row of folds
    slots: tuple[str, ...] = ()  # names of its Bokeh figures
    plain = False  # `show` gives nothing but JSON's own types: packed faster

    def __init__(self, context: Context):
        self.context = context
        self.workbench = context.workbench

    def figures(self) -> dict[str, Any]:
        """Its Bokeh figures by slot, made once, when the fold is first opened."""
        return {}

    def show(self) -> dict:
        """What the browser needs to draw the fold as things are.

        Called inside a hold: figures' data are updated here too, changed columns
        only. Numbers are SI; NumPy arrays and named tuples are welcome.
        """
        return {}

    def handle(self, message: dict) -> dict | None:
        """Act on a message from the fold's own module.

        Check every field of `message` (use `sumwright.fields`): it comes from a
        browser. What is returned is sent to the module's `heard(reply)`. Raise a SumwrightError to refuse.
        """
        return None

    def close(self) -> None:
        """The session is over: let go of what would keep it in memory."""
