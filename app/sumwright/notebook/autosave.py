"""Saving without being asked: the newest state of a sheet is on the disk within a second of the last change.

The page hands over a function that makes the state (its designs are frozen, so this may run later and elsewhere) and
goes on; threads of this module make it, write it, and tell how that went. A write that fails is tried again until it
succeeds; a sheet that somebody else saved in between is never written over: it waits for the person to choose.
"""

from __future__ import annotations

import atexit
import heapq
import itertools
import logging
import os
import threading
import time
from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

from sumwright.errors import SumwrightError

from .entries import utc_now
from .store import Sheet, SheetConflict

DELAY = 0.5  # s from a change to the write that holds it; further changes in between ride along
RETRIES = (1.0, 2.0, 5.0)  # s between tries; the last one again and again
TRIES_ALONE = 720  # about an hour, for a page that was closed while the store was away

_log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class Mark:
    """What stands beside the title. `kind` is saved, saving, unsaved or elsewhere; times are UTC."""

    kind: str
    at: str  # saved: when; unsaved: since when; elsewhere: when theirs was saved
    why: str = ""
    again: float = 0.0  # s until the next try
    theirs: Sheet | None = None


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What is saved: the state, and the undo history when it changed since the last save (None: keep the stored one)."""

    state: dict[str, Any]
    history: dict[str, Any] | None = None


class Autosave:
    """Saves one sheet for one open page.

    Parameters
    ----------
    save : callable
        `save(snapshot, revision)` writes and returns (new revision, time); raises SheetConflict or SumwrightError.
    revision : int
        The revision the page started from.
    told : callable
        Called with a `Mark` at each change of it, from another thread: it must only pass it on.
    """

    def __init__(
        self,
        save: Callable[[Snapshot, int], tuple[int, str]],
        revision: int,
        told: Callable[[Mark], None],
        *,
        saved_at: str = "",
        delay: float = DELAY,
    ):
        self._save, self._told, self._delay = save, told, delay
        self._lock = threading.RLock()
        self._idle = threading.Condition(self._lock)
        self._pending: Callable[[], Snapshot] | None = None
        self._since = ""  # of the oldest change not yet on the disk
        self._waiting = self._busy = self._closed = False
        self._failures = 0
        self.revision = revision
        self.mark = Mark("saved", saved_at)

    def changed(self, make: Callable[[], Snapshot]) -> None:
        """The sheet changed: `make` gives what to save, and replaces whatever was still to be saved."""
        with self._lock:
            if self._closed:
                return
            self._pending = make
            self._since = self._since or utc_now()
            if self.mark.kind == "saved":
                self._tell(Mark("saving", self._since))
            if self.mark.kind != "elsewhere":
                self._schedule(self._delay if not self._failures else _wait(self._failures))

    def keep_mine(self) -> None:
        """After a conflict: save this page's state over theirs (which the caller has put aside)."""
        with self._lock:
            if self.mark.theirs is not None:
                self.revision = self.mark.theirs.revision
                self._tell(Mark("saving", self._since))
                self._schedule(0.0)

    def take_theirs(self) -> Sheet | None:
        """After a conflict: forget this page's unsaved state and go on from theirs, which is returned."""
        with self._lock:
            theirs = self.mark.theirs
            if theirs is not None:
                self._pending, self._since, self.revision = None, "", theirs.revision
                self._tell(Mark("saved", theirs.saved_at))
            return theirs

    @property
    def clean(self) -> bool:
        """Whether nothing is waiting to be saved."""
        with self._lock:
            return self._pending is None and not self._busy

    def follow(self, revision: int, at: str) -> None:
        """The page shows what somebody else saved: go on from there."""
        with self._lock:
            self.revision = revision
            self._tell(Mark("saved", at))

    def now(self) -> None:
        """Try at once instead of waiting for the next turn."""
        with self._lock:
            if self._pending is not None and self.mark.kind != "elsewhere":
                self._schedule(0.0, force=True)

    def wait(self, timeout: float) -> bool:
        """Wait until nothing is left to save; False when the time is over first."""
        with self._idle:
            return self._idle.wait_for(lambda: self._pending is None and not self._busy, timeout)

    def close(self) -> None:
        """The page is gone: what is left is saved, or tried until it is; no mark is told any more."""
        with self._lock:
            self._told = _nobody
            self._closed = True
        self.now()

    def _schedule(self, delay: float, *, force: bool = False) -> None:
        if force or not (self._waiting or self._busy):
            self._waiting = True
            _threads.at(time.monotonic() + delay, self)

    def _run(self) -> None:
        with self._lock:
            self._waiting = False
            if self._busy or self._pending is None or self.mark.kind == "elsewhere":
                return
            make, self._pending, self._busy = self._pending, None, True
            since, self._since = self._since, ""
            revision = self.revision
        saved = conflict = problem = None
        try:
            saved = self._save(make(), revision)
        except SheetConflict as error:
            conflict = error
        except SumwrightError as error:
            problem = str(error)
        finally:
            with self._idle:
                self._busy = False
                if saved is None:
                    self._pending = self._pending or make
                    self._since = since
                self._after(saved, conflict, problem or "an error in the program; see its log")
                self._idle.notify_all()

    def _after(self, saved: tuple[int, str] | None, conflict: SheetConflict | None, problem: str) -> None:
        if saved is not None:
            self._failures = 0
            self.revision = saved[0]
            if self._pending is None:
                self._tell(Mark("saved", saved[1]))
            else:
                self._tell(Mark("saving", self._since))
                self._schedule(self._delay)
        elif conflict is not None:
            self._tell(Mark("elsewhere", conflict.theirs.saved_at, str(conflict), theirs=conflict.theirs))
        else:
            self._failures += 1
            again = _wait(self._failures)
            self._tell(Mark("unsaved", self._since, problem, again))
            if not self._closed or self._failures < TRIES_ALONE:
                self._schedule(again)

    def _tell(self, mark: Mark) -> None:
        self.mark = mark
        self._told(mark)


def _wait(failures: int) -> float:
    return RETRIES[min(failures, len(RETRIES)) - 1]


def _nobody(_mark: Mark) -> None:
    """Where the marks of a closed page go."""


class _Threads:
    """One clock and a few writers for all sheets of the process; started at first use, so after any fork."""

    def __init__(self) -> None:
        self._due: list[tuple[float, int, Autosave]] = []
        self._order = itertools.count()
        self._change = threading.Condition()
        self._clock: threading.Thread | None = None
        self._writers: ThreadPoolExecutor | None = None

    def at(self, due: float, autosave: Autosave) -> None:
        with self._change:
            if self._clock is None:
                self._writers = ThreadPoolExecutor(2, thread_name_prefix="autosave")
                self._clock = threading.Thread(target=self._tick, name="autosave clock", daemon=True)
                self._clock.start()
            heapq.heappush(self._due, (due, next(self._order), autosave))
            self._change.notify()

    def _tick(self) -> None:
        while True:
            with self._change:
                while not self._due or self._due[0][0] > time.monotonic():
                    self._change.wait(self._due[0][0] - time.monotonic() if self._due else None)
                autosave = heapq.heappop(self._due)[2]
                assert self._writers is not None
                writers = self._writers
            try:
                writers.submit(autosave._run).add_done_callback(_report)
            except RuntimeError:  # the interpreter is shutting down: no new work is taken
                return
            del autosave  # else the last sheet saved would be kept in memory until the next one is


def _report(future: Future[None]) -> None:
    if (error := future.exception()) is not None:
        _log.error("a sheet could not be saved", exc_info=error)


_threads = _Threads()


def _after_fork() -> None:
    global _threads
    _threads = _Threads()


def _before_the_end() -> None:
    """The server was told to stop: what waits for its turn is saved now."""
    with _threads._change:
        left = [autosave for _, _, autosave in _threads._due]
    for autosave in left:
        autosave._run()


atexit.register(_before_the_end)
if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_after_fork)
