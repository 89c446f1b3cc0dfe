"""A session's place in the notebook: which sheet is open, saved without being asked, and what others did meanwhile.

It knows the workbench and the desk, and nothing of how either is drawn. Everything that asks the store runs beside
the server's thread; what comes of it is told back inside the session.
"""

from __future__ import annotations

import logging
import re
import threading
import weakref
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from typing import Any

from sumwright.engine.stage import ARRANGEMENTS
from sumwright.errors import NotAllowed, SumwrightError
from sumwright.files.design import design_document, read_design
from sumwright.files.results import to_json
from sumwright.model import demo
from sumwright.model.bench_run import as_text
from sumwright.model.edits import FOLLOW
from sumwright.model.history import Snapshot as Step
from sumwright.model.sums import UNTITLED
from sumwright.model.workbench import SYMBOLS, Workbench
from sumwright.notebook.autosave import Autosave, Mark, Snapshot
from sumwright.notebook.bundle import unpack
from sumwright.notebook.compare import key_results
from sumwright.notebook.desk import SET_ASIDE, Desk
from sumwright.notebook.settings import settings
from sumwright.notebook.shelf import the_store
from sumwright.notebook.sign_in import who_for
from sumwright.notebook.store import Notebook, Sheet
from sumwright.notebook.text import InvalidNotebookFile, InvalidText, canonical, clean_line, other_format, read_json

log = logging.getLogger("sumwright.sitting")

STATE_FORMAT = "sumwright-sheet/1"
STEPS_MOST = 100  # undo steps kept through a reload
_WATCHED = ("design", "unplugged", "follow", "chosen", "symbols", "readings")
_ID = re.compile(r"[a-z2-7]{16}")

SETTLE = 1.0  # s that opening a sheet waits for what another page of this process has yet to save of it

_beside = ThreadPoolExecutor(4, thread_name_prefix="notebook")
_open: weakref.WeakSet[Sitting] = weakref.WeakSet()


class Sitting:
    """What one open page has to do with the notebook.

    Parameters
    ----------
    desk : Desk
        The person at the store.
    notebook, sheet : str and int, optional
        What the link names; without them the demonstration is shown, and becomes a notebook at its first change.
    """

    def __init__(self, desk: Desk, notebook: str = "", sheet: int = 1):
        self.desk = desk
        self.key = ""
        self.number = 1
        self.problem = ""  # why the sheet that was asked for is not shown
        self.autosave: Autosave | None = None
        self._page: Any = lambda: None
        self._quiet = False
        self.archived = False
        self._told = ""
        self._untitled = False  # the notebook was begun here, with a sheet that had no title yet
        self._making = threading.Lock()
        self._spelled: dict[int, tuple[Step, str]] = {}
        self._stored_steps: tuple[int, ...] | None = None
        found = None
        if notebook:
            try:
                if not _ID.fullmatch(notebook):
                    raise InvalidNotebookFile(f"The link names the notebook {notebook[:40]!r}, which is none.")
                settle(notebook, sheet)
                found = desk.sheet(notebook, sheet)
                self.workbench = self._workbench(found)
                self.archived = desk.notebook(notebook).archived_at is not None
            except SumwrightError as error:
                self.problem, found = (
                    f"{error} This is the demonstration; nothing you do here changes that notebook.",
                    None,
                )
        if found is None:
            self.workbench = Workbench(demo.design(), on="north")
        else:
            self.key, self.number = found.notebook, found.number
        self._saved_at = found.saved_at if found else ""
        self._revision = found.revision if found else 0

    # ------------------------------------------------------------ the page

    def attach(self, page: Any) -> None:
        """Save from now on what changes on the page's workbench, and tell the page how that goes."""
        self._page = weakref.ref(page)
        self.workbench.param.watch(self._changed, list(_WATCHED))
        self._begin_saving(self._revision, self._saved_at)
        _open.add(self)
        page.extras["place"] = self.place
        if self.key:
            self._tell(Mark("saved", self._saved_at))

    @property
    def place(self) -> dict[str, Any]:
        """What the address of the page says."""
        return {"notebook": self.key, "sheet": self.number} if self.key else {}

    def may(self, action: str) -> None:
        """The page's gate: everybody who is let in may move things on their own screen; nobody else may.

        What reaches the store passes the desk, act by act, whatever this lets through.
        """
        self.desk.require("read")

    def aside(self, work: Callable[[], Any], then: Callable[[Any], None], refused: Callable[[str], None]) -> None:
        """Do `work` beside the server's thread; then, in the session, `then` with its result or `refused` with one sentence."""

        def run() -> None:
            page = self._page()
            try:
                result = work()
            except SumwrightError as error:
                sentence = str(error)
                answer = lambda: refused(sentence)  # noqa: E731 - what to call is all that differs
            else:
                answer = lambda: then(result)  # noqa: E731
            if page is not None:
                page.later(answer)

        _beside.submit(run).add_done_callback(_report)

    def close(self) -> None:
        """The session is over; what is not saved yet is saved all the same."""
        if self.autosave is not None:
            self.autosave.close()
        self._page = lambda: None

    # ------------------------------------------------------------ saving

    def _begin_saving(self, revision: int, at: str) -> None:
        self.autosave = Autosave(self._save, revision, self._tell, saved_at=at)

    def _changed(self, *_events: Any) -> None:
        if self._quiet or self.autosave is None:
            return
        try:
            may = self.desk.may("save")
        except NotAllowed:
            may = False
        if may and not self.archived:
            self.autosave.changed(self._snapshot)
        elif (page := self._page()) is not None:
            why = "This notebook is archived" if may else "You look as a reader"
            page.say_saved(state="reader", why=f"{why}: what you move here is not kept.")

    def _save(self, snapshot: Snapshot, revision: int) -> tuple[int, str]:
        """In a thread of `Autosave`: write the sheet, or begin a notebook with it."""
        with self._making:
            if not self.key:
                return 1, self._make(snapshot)
        saved = self.desk.save(self.key, self.number, snapshot, max(revision, 1))
        self._give_title()
        return saved

    def _give_title(self) -> None:
        """A notebook begun before its sheet had a title takes the first one it gets."""
        title = self.workbench.title
        if not self._untitled or title == UNTITLED:
            return
        self._untitled = False
        try:
            if self.desk.notebook(self.key).title == UNTITLED:  # nobody has renamed it meanwhile
                self.desk.rename(self.key, clean_line("The title", title))
        except SumwrightError:  # the sheet is saved, and that is what counts
            return
        if (page := self._page()) is not None:
            page.later(self._fold_news)

    def begin_notebook(self) -> None:
        """Make the notebook that the sheet as it stands goes into, if there is none yet; in a thread."""
        with self._making:
            if not self.key and self.autosave is not None:
                self.autosave.follow(1, self._make(self._snapshot()))

    def _make(self, snapshot: Snapshot) -> str:
        try:
            title = clean_line("The title", self.workbench.title)
        except InvalidText:  # no reason to keep nothing: the notebook can be given another one
            title = "Untitled sheet"
        made = self.desk.new_notebook(title, snapshot.state, snapshot.history)
        self.key, self.number = made.id, 1
        self._untitled = title == UNTITLED
        if snapshot.history is None:
            self._stored_steps = None  # it has yet to go there
        if (page := self._page()) is not None:
            page.extras["place"] = self.place
            page.refresh_sheet()
            page.later(self._fold_news)
        return made.changed_at

    def state(self) -> dict[str, Any]:
        """The sheet as the store keeps it."""
        return state_of(self.workbench)

    def _snapshot(self) -> Snapshot:
        """What is saved now; in a thread of `Autosave`. The history goes along only when it is another one."""
        bench = self.workbench
        past, future = list(bench.history.past)[-STEPS_MOST:], list(bench.history.future)[-STEPS_MOST:]
        state = state_of(bench)
        steps = tuple(id(step) for step in (*past, None, *future))
        if steps == self._stored_steps:
            return Snapshot(state)
        spelled = {
            id(step): self._spelled.get(id(step)) or (step, canonical(step_document(step))) for step in past + future
        }
        self._spelled, self._stored_steps = spelled, steps  # each step is kept alive here, so no id is used again
        return Snapshot(
            state, {"past": [spelled[id(s)][1] for s in past], "future": [spelled[id(s)][1] for s in future]}
        )  # fmt: skip

    def _tell(self, mark: Mark) -> None:
        if mark.kind in ("unsaved", "elsewhere"):
            self._stored_steps = None  # the store may not have what was sent: send the history again
        page = self._page()
        if page is None:
            return
        state = {"elsewhere": "changed"}.get(mark.kind, mark.kind)
        by = mark.theirs.saved_by if mark.theirs else ""
        page.say_saved(state=state, at=mark.at, by=by, why=mark.why, again=mark.again)
        if mark.kind == "unsaved" and mark.why != self._told:
            page.say(f"{mark.why} What is on the sheet is kept here and tried again.", bad=True)
        if mark.kind == "saved" and self._told:
            page.say("The notebook can be written again; everything on the sheet is saved.")
        if mark.kind != "saving":
            self._told = mark.why if mark.kind == "unsaved" else ""
        if mark.kind in ("elsewhere", "saved"):
            page.later(self._fold_news)

    def _fold_news(self) -> None:
        page = self._page()
        if page is not None and (fold := page.folds.get("log")) is not None:
            fold.news()

    # ------------------------------------------------------------ others

    def look_around(self) -> None:
        """Ask what others did to the sheet; called every few seconds while the page is open."""
        autosave = self.autosave
        if not self.key or autosave is None or not autosave.clean or autosave.mark.kind != "saved":
            return
        key, number, known = self.key, self.number, autosave.revision

        def ask() -> Sheet | None:
            return self.desk.sheet(key, number) if self.desk.revision(key, number)[0] != known else None

        self.aside(ask, self._others, lambda sentence: None)

    def _others(self, theirs: Sheet | None) -> None:
        """Somebody else saved the sheet and nothing here waits to be saved: show theirs, and say so."""
        autosave, page = self.autosave, self._page()
        if (
            theirs is None
            or autosave is None
            or page is None
            or not autosave.clean
            or theirs.revision <= autosave.revision
        ):
            return
        if not self.show(theirs):
            return
        autosave.follow(theirs.revision, theirs.saved_at)
        page.refresh_sheet()
        if theirs.saved_by == self.desk.person.name:
            page.say(
                "You changed this sheet on another page; it is shown as you left it there. Undo gives back what was here."
            )
        else:
            page.say(
                f"{theirs.saved_by} changed this sheet; it is shown as they left it. Undo gives back what you had."
            )

    def show(self, theirs: Sheet) -> bool:
        """Put a stored sheet on the workbench; what was there is one undo step back."""
        before = self.workbench.snapshot
        try:
            step, symbols = read_state(theirs.state)
            past, future = read_history(theirs.history)
        except SumwrightError as error:
            if (page := self._page()) is not None:
                page.say(str(error), bad=True)
            return False
        self._quiet = True
        try:
            self.workbench.replace_quietly(step)
            self.workbench.symbols = symbols
            self.workbench.readings = readings_of(theirs.state)
            self.workbench.history.past[:] = [*past, before] if before != step else past
            self.workbench.history.future[:] = future
        finally:
            self._quiet = False
        self._stored_steps = None
        return True

    def take_theirs(self) -> None:
        """After a conflict: theirs on the sheet, mine one undo step back."""
        self.desk.require("read")
        autosave = self.autosave
        if autosave is None or autosave.mark.theirs is None:
            return
        mine = self.workbench.readings
        if self.show(autosave.mark.theirs):
            autosave.take_theirs()
            if mine.get("taken") and mine != self.workbench.readings:
                self.workbench.lay_aside(mine)

    def keep_mine(self) -> None:
        """After a conflict: theirs is set aside in the log as a frozen design, then mine is saved. In a thread."""
        autosave = self.autosave
        if autosave is not None and (theirs := autosave.mark.theirs) is not None:
            self.desk.require("save")
            self.desk.set_aside(theirs)
            self._set_readings_aside(theirs)
            autosave.keep_mine()

    def _set_readings_aside(self, theirs: Sheet) -> None:
        """What they read on the bench, into the log as well, unless it is what stands here."""
        held = readings_of(theirs.state)
        if held.get("taken") and held != self.workbench.readings:
            title = f"{SET_ASIDE}: readings as {theirs.saved_by} left them"
            of_output, others = as_text(held)
            if of_output:
                self.desk.append(theirs.notebook, "readings", {"title": title, "csv": of_output}, sheet=theirs.number)
            if others:
                self.desk.append(theirs.notebook, "note", {"text": f"{title}\n{others}"}, sheet=theirs.number)

    def import_notebook(self, data: bytes) -> Notebook:
        """Take in a notebook file whose sheets this version can open, or nothing of it."""
        for sheet in unpack(data)[1]:
            read_state(sheet.state)
        return self.desk.import_notebook(data)

    # ------------------------------------------------------------ contents

    def frozen(self, title: str) -> dict[str, Any]:
        """The sheet as the content of a frozen entry: values, key results, margins."""
        bench = self.workbench
        if bench.problem:
            raise InvalidNotebookFile(f"The sheet cannot be frozen while it cannot be analysed: {bench.problem}")
        results, checks = key_results(plain(to_json(bench.analysis)))
        return {
            "title": title, "design": design_document(bench.design), "unplugged": list(bench.unplugged),
            "results": results, "checks": checks,
        }  # fmt: skip

    def _workbench(self, sheet: Sheet) -> Workbench:
        step, symbols = read_state(sheet.state)
        past, future = read_history(sheet.history)
        readings = readings_of(sheet.state)
        bench = Workbench(
            step.design,
            unplugged=step.unplugged,
            follow=step.follow,
            chosen=step.chosen,
            symbols=symbols,
            readings=readings,
        )
        bench.history.past[:], bench.history.future[:] = past, future
        return bench


def settle(notebook: str, number: int) -> None:
    """Have saved what other pages of this process still hold of a sheet: a page that is loaded anew finds its last move."""
    for other in list(_open):
        saving = other.autosave
        if (other.key, other.number) == (notebook, number) and saving is not None and saving.mark.kind == "saving":
            saving.now()
            saving.wait(SETTLE)


def begin(user: str | None, arguments: Mapping[str, list[bytes]]) -> Sitting:
    """The sitting of a new session, from who is signed in and what the link says."""

    def one(name: str) -> str:
        held = arguments.get(name) or [b""]
        return held[0][:80].decode("utf-8", "replace")

    number = one("sheet")
    return Sitting(
        Desk(the_store, who_for(user, settings())),
        one("notebook"),
        int(number) if re.fullmatch(r"[0-9]{1,6}", number) else 1,
    )


# ---------------------------------------------------------------- a sheet as JSON, and back


def state_of(bench: Workbench) -> dict[str, Any]:
    """The sheet at work as the store keeps it."""
    state = {"format": STATE_FORMAT, **step_document(bench.snapshot), "symbols": bench.symbols}
    return {**state, "readings": bench.readings} if bench.readings else state


def readings_of(state: dict[str, Any]) -> dict[str, Any]:
    """What was read on the bench; the Bench checks it when it takes it up."""
    held = state.get("readings")
    return held if isinstance(held, dict) else {}


def step_document(step: Step) -> dict[str, Any]:
    """One state of the sheet as JSON."""
    held = {"design": design_document(step.design), "unplugged": list(step.unplugged), "follow": step.follow}
    return {**held, "chosen": step.chosen} if step.chosen else held


def read_state(state: dict[str, Any]) -> tuple[Step, str]:
    """A stored state, checked as if it came from anywhere: it may have come in a notebook file.

    Raises
    ------
    SumwrightError
        If it is not one, with the design's own sentence where the design is at fault.
    """
    if state.get("format") != STATE_FORMAT:
        raise other_format("The stored sheet", state.get("format"), STATE_FORMAT)
    symbols = state.get("symbols", SYMBOLS[0])
    if symbols not in SYMBOLS:
        raise InvalidNotebookFile(
            f"The symbols of the stored sheet are {str(symbols)[:40]!r}; they are one of {SYMBOLS}."
        )
    return read_step(state), symbols


def read_step(held: dict[str, Any]) -> Step:
    """One state from JSON, checked."""
    design = read_design(held.get("design") if isinstance(held.get("design"), dict) else {})
    unplugged, follow = held.get("unplugged", []), held.get("follow", "nearest")
    if not isinstance(unplugged, list) or not set(map(str, unplugged)) <= set(design.signal_names):
        raise InvalidNotebookFile("The stored sheet has cables out of signals that it does not have.")
    if follow not in FOLLOW:
        raise InvalidNotebookFile(
            f"follow of the stored sheet is {str(follow)[:40]!r}; it is one of {', '.join(FOLLOW)}."
        )
    chosen = held.get("chosen", "")
    return Step(design, tuple(unplugged), follow, chosen if chosen in ARRANGEMENTS else "")


def read_history(history: dict[str, Any]) -> tuple[list[Step], list[Step]]:
    """The stored undo steps. One that cannot be read ends its side: the sheet matters more than its history."""
    sides = []
    for side in ("past", "future"):
        steps: list[Step] = []
        held = history.get(side)
        for text in reversed(held[-STEPS_MOST:] if isinstance(held, list) else []):
            try:
                step = read_json("An undo step", text if isinstance(text, str) else "")
                steps.append(read_step(step if isinstance(step, dict) else {}))
            except SumwrightError:
                break
        sides.append(steps[::-1])
    return sides[0], sides[1]


def plain(value: Any) -> Any:
    """What is not finite as null, so that it can be kept."""
    if isinstance(value, float):
        return value if value - value == 0.0 else None
    if isinstance(value, dict):
        return {k: plain(v) for k, v in value.items()}
    return [plain(v) for v in value] if isinstance(value, list | tuple) else value


def _report(future: Any) -> None:
    if (error := future.exception()) is not None:
        log.error("work beside the server failed", exc_info=error)
