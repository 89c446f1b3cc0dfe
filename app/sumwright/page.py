"""The page: the only module that knows both the model and the views.

One `Page` a session. The browser sends acts, a few at a time; the page lets the
workbench do them, and answers with one frame: everything on the sheet that may
have moved, as plain data. The browser acknowledges a frame by sending its next
acts, so a fast hand never gets ahead of the picture.
"""

from __future__ import annotations

import html
import importlib
import importlib.util
import logging
from collections.abc import Callable
from contextlib import nullcontext
from functools import lru_cache
from pathlib import Path
from typing import Any

import panel as pn
from tornado.ioloop import IOLoop

from sumwright.errors import CannotRealise, NotAllowed, SumwrightError
from sumwright.jobs import Jobs
from sumwright.model import acts, demo
from sumwright.model.workbench import Workbench
from sumwright.quantity import unbroken
from sumwright.sitting import Sitting, begin
from sumwright.views import margins, plate, signals, stage
from sumwright.views.fold import Context, Fold
from sumwright.views.wire import Packed, Wire, packed, packed_plain

log = logging.getLogger(__name__)

# The folds, in the order of the work. One whose module is not installed is not listed.
FOLDS = ("curves", "choices", "budget", "response", "bench", "log", "report")

ACTS_MOST = 64  # in one message
FILE_NAME_MOST = 80  # characters of a file's name in a sentence
LOOK_AROUND = 4000  # ms between looks at what others did to the sheet
LOOK_AFTER_OPENING = 1200  # ms to the first of them
_TEMPLATE = Path(__file__).parent / "views" / "sheet.html"


class _Paper(pn.Template):
    """The document's template. Panel spells out the whole page anew for each panel that is added; a word will do."""

    def __repr__(self, *_: Any) -> str:
        return "the sheet"


@lru_cache(maxsize=1)
def _paper() -> Any:
    """The template read and compiled, once a process."""
    return _Paper(_TEMPLATE.read_text(encoding="utf-8")).template


def fold_classes() -> dict[str, type[Fold]]:
    """The fold classes there are, by key."""
    found = {}
    for key in FOLDS:
        name = f"sumwright.views.{key}"
        if not importlib.util.find_spec(name):
            continue
        try:
            found[key] = getattr(importlib.import_module(name), key.capitalize())
        except ImportError:  # one fold that cannot be loaded must not take the sheet with it
            log.exception("The fold %s is left out.", key)
    return found


class Page:
    """One session: a workbench, the wire, and the folds opened so far.

    Parameters
    ----------
    workbench : Workbench, optional
        Default: the demonstration.
    may : callable, optional
        `may(action)` raises NotAllowed when the person must not; default: anyone may.
    """

    def __init__(self, workbench: Workbench | None = None, may: Callable[[str], None] | None = None):
        self.workbench = workbench or Workbench(demo.design(), on="north")
        self.may = may or (lambda action: None)
        self.jobs = Jobs()
        self.extras: dict[str, Any] = {}
        self.saved: dict[str, Any] = {"state": "none"}
        self.wire = Wire(receive=self.receive)
        self.classes = fold_classes()
        self.slots = {
            f"{key}_{slot}": pn.Row(margin=0, sizing_mode="stretch_both")
            for key, cls in self.classes.items()
            for slot in cls.slots
        }
        self.folds: dict[str, Fold] = {}
        self.open = ""
        self._doc: Any = None
        self._loop: Any = None  # the server's, known once the page is in a document
        self._warned: tuple[Any, list[dict[str, Any]]] | None = None
        self._sent: dict[str, str] = {}  # what the browser has, by key
        self._packed: dict[
            str, tuple[Any, Packed]
        ] = {}  # the part a text was made from: the same object, the same text
        self.sitting: Sitting | None = None
        self.turn_to(next(iter(self.classes), ""))

    # ------------------------------------------------------------ folds

    def turn_to(self, key: str) -> None:
        """Open a fold; only the open one is kept up to date."""
        if key not in self.classes:
            return
        self.open = key
        if key in self.folds:
            return
        fold = self.folds[key] = self.classes[key](
            Context(self.workbench, self.jobs, self.refresh, self.refresh_sheet, self.say, self._may, self.extras)
        )
        for slot, figure in fold.figures().items():
            self.slots[f"{key}_{slot}"].objects = [pn.pane.Bokeh(figure, margin=0)]

    def _may(self, action: str) -> None:
        self.may(action)

    # ------------------------------------------------------------ frames

    def frame(self, whole: bool = False) -> dict[str, Any]:
        """Everything on the sheet that differs from what the browser has; with `whole`, everything."""
        bench = self.workbench
        shown: dict[str, Any] = {
            "title": bench.title,
            "invented": demo.is_demo(bench.design),
            "theme": bench.theme,
            "undo": bench.can_undo,
            "redo": bench.can_redo,
            "saved": self.saved,
            "place": self.extras.get("place", {}),
            "problem": unbroken(bench.problem),
            "signals": signals.show(bench),
            "stage": stage.show(bench),
            "plate": plate.show(bench),
            "margins": margins.show(bench),
            "cautions": self._cautions(),
            "cable_out": signals.cable_out(bench),
            "live": {"signals": signals.live(bench), "stage": stage.live(bench)},
        }
        texts = {}
        for key, value in shown.items():
            made, text = self._packed.get(key, (None, None))
            texts[key] = text if text is not None and value is made else packed_plain(value)
            if key in ("plate", "cautions"):  # large, remembered where they are made, and never changed in place
                self._packed[key] = (value, texts[key])
        changed = {k: v for k, v in texts.items() if whole or self._sent.get(k) != v}
        if "signals" in changed or "stage" in changed:
            changed["live"] = texts["live"]  # new rows come bare
        self._sent = texts
        if fold := self.folds.get(self.open):
            pack = packed_plain if fold.plain else packed
            changed["fold"] = pack({"key": self.open, **self._shown(fold)})
        return changed

    def _cautions(self) -> list[dict[str, Any]]:
        """The cautions, asked for anew only when the stage is another: a drag changes none."""
        analysis = self.workbench.analysis
        if self._warned is None or self._warned[0] is not analysis.power:
            self._warned = (analysis.power, margins.warnings(analysis))
        return self._warned[1]

    def _shown(self, fold: Fold) -> dict[str, Any]:
        try:
            return {"shown": fold.show()}
        except SumwrightError as error:
            return {"refused": str(error)}

    def refresh(self) -> None:
        """Send what the open fold shows, of the server's own accord."""
        self._later(lambda: self._send(lambda: {"fold": {"key": self.open, **self._shown(self.folds[self.open])}}))

    def refresh_sheet(self) -> None:
        """Send a whole frame, of the server's own accord."""
        self._later(lambda: self._send(lambda: self.frame(whole=True)))

    def later(self, act: Callable[[], None]) -> None:
        """Do something inside the session's lock, from whatever thread; nothing if the session is over."""
        self._later(act)

    def sit(self, sitting: Sitting) -> None:
        """Keep the sheet in the notebook: saved without being asked, shared, with its log."""
        self.sitting = sitting
        self.extras["sitting"] = sitting
        sitting.attach(self)

    def say(self, text: str, bad: bool = False) -> None:
        """One sentence in the line under the strips."""
        self._later(lambda: self._send(lambda: {"note": {"text": unbroken(text), "bad": bad}}))

    def say_saved(self, **state: Any) -> None:
        """What stands beside the title: `state` is none, saving, saved, unsaved or changed; `at`, `by` with it."""
        self.saved = state
        self._later(lambda: self._send(lambda: {"saved": state}))

    def _send(self, make: Callable[[], dict[str, Any]]) -> None:
        """Make and send in one hold, so that figures and frame go in one message."""
        with pn.io.hold():
            self.wire.send(make())

    def _later(self, send: Callable[[], None]) -> None:
        """Send inside the session's lock; nothing if the session is not there (yet, or any more)."""
        loop = self._loop
        if loop is not None:
            loop.add_callback(self._next, send)

    def _next(self, send: Callable[[], None]) -> None:
        """On the server's thread: a document that is asked from another one while it holds its events back may lose the wish."""
        doc = self._doc
        if doc is not None and doc.session_context is not None:
            doc.add_next_tick_callback(send)

    # ------------------------------------------------------------ messages

    def receive(self, message: dict[str, Any]) -> None:
        """Do what the browser asks, and answer with one frame."""
        asked = message.get("acts")
        asked = asked[:ACTS_MOST] if isinstance(asked, list) else []
        answer: dict[str, Any] = {"seq": message.get("seq") if isinstance(message.get("seq"), int) else 0}
        refusals, heard = [], []
        with pn.io.hold():
            for act in asked:
                if not isinstance(act, dict):
                    continue
                try:
                    reply = self._do(act)
                except SumwrightError as error:
                    refusals.append(_refusal(act, error))
                else:
                    if reply is not None:
                        heard.append({"do": act.get("do"), **reply})
            answer.update(self.frame(whole=message.get("whole") is True))
            if refusals:
                answer["refusals"] = refusals
            if heard:
                answer["heard"] = heard
            self.wire.send(answer)

    def _do(self, act: dict[str, Any]) -> dict[str, Any] | None:
        name = act.get("do")
        if not isinstance(name, str):
            return None
        if name == "turn":
            self.turn_to(str(act.get("fold")))
            return None
        if name == "fold":
            key = str(act.get("fold"))
            if key not in self.folds:
                return None
            self.may(f"fold {key}")
            message = act.get("message")
            reply = self.folds[key].handle(message if isinstance(message, dict) else {})
            return None if reply is None else {"fold": key, "reply": reply}
        if name not in acts.ACTS:
            return None
        if name not in acts.FREE:
            self.may(name)
        reply = acts.ACTS[name](self.workbench, act)
        if name == "save" and reply is not None and self.workbench.unplugged:
            pulled = ", ".join(f"“{n}”" for n in self.workbench.unplugged)
            reply["note"] = f"Saved with every cable in: a design file has no place for a cable that is out ({pulled})."
        return reply

    # ------------------------------------------------------------ the document

    def template(self) -> pn.Template:
        """The document, with the first frame in it, so that the sheet is drawn before the session answers."""
        page = _Paper(_paper())
        page.add_panel("wire", self.wire)
        for name, row in self.slots.items():
            page.add_panel(name, row)
        page.add_variable("slots", list(self.slots))
        page.add_variable("static", _static_place())
        page.add_variable("sheet_theme", self.workbench.theme)
        start = {"folds": [{"key": k, "title": c.title or k.capitalize()} for k, c in self.classes.items()]}
        start.update(self.frame(whole=True))
        if self.sitting is not None and self.sitting.problem:
            start["note"] = {"text": self.sitting.problem, "bad": True}
        page.add_variable("start", _for_script(start))
        return page

    def servable(self) -> pn.Template:
        """Put the page in the present session's document."""
        self._doc = pn.state.curdoc
        if self._doc is not None:
            # Panel says where its files are only in the process that answered the page; when the websocket reaches
            # another one, or comes back after a restart, its style sheets would be asked for outside.
            self._doc._template_variables.setdefault("dist_url", pn.io.resources.LOCAL_DIST)
        page = self.template()
        if self._doc is not None and self._doc.session_context is not None:
            self._loop = IOLoop.current()
            pn.state.on_session_destroyed(lambda context: self.close())
            if self.sitting is not None:
                self._doc.add_periodic_callback(self.sitting.look_around, LOOK_AROUND)
                # a page loaded anew right after a move may be ahead of another process that has yet to save it
                self._doc.add_timeout_callback(self.sitting.look_around, LOOK_AFTER_OPENING)
        # all roots at once: each by itself would have the whole document's models gathered anew
        with self._doc.models.freeze() if self._doc is not None else nullcontext():
            return page.servable(title=f"{self.workbench.title} · Sumwright")

    def close(self) -> None:
        """The session is over: stop its jobs and break what would keep it in memory."""
        self.jobs.close()
        if self.sitting is not None:
            self.sitting.close()
        self.extras.clear()
        for fold in self.folds.values():
            fold.close()
        self.folds.clear()
        self.slots.clear()
        self.wire.receive = None
        self._doc = self._loop = None


def _refusal(act: dict[str, Any], error: SumwrightError) -> dict[str, Any]:
    """One refused act as the browser gets it: its field keeps what was typed, the sentence stands beside it."""
    text = unbroken(str(error))
    if act.get("do") == "open" and isinstance(act.get("name"), str):
        text = f"“{act['name'][:FILE_NAME_MOST]}”: {text.rstrip('.')}. The sheet keeps what it had."
    refused: dict[str, Any] = {"do": act.get("do"), "field": act.get("field"), "text": text}
    if isinstance(error, CannotRealise) and act.get("do") in acts.RETAKEN:
        refused["able"] = list(error.able)
        refused["act"] = {k: v for k, v in act.items() if isinstance(v, str | int | float | bool)}
    if isinstance(error, NotAllowed):
        refused["not_allowed"] = True
    return refused


def _for_script(payload: dict[str, Any]) -> str:
    """JSON that may stand in a script element: no `<` closes it early."""
    return packed(payload).replace("<", "\\u003c").replace("\u2028", "\\u2028").replace("\u2029", "\\u2029")


def _static_place() -> str:
    """Where `static/` is, relative to the document, so that any prefix works."""
    context = pn.state.curdoc.session_context if pn.state.curdoc is not None else None
    path = getattr(getattr(context, "request", None), "path", "/app") or "/app"
    if path.endswith("/"):
        return "static"
    return f"{path.rsplit('/', 1)[-1] or 'app'}/static"


class Refused:
    """The document of somebody who is signed in and has no place here: one sentence."""

    def __init__(self, sentence: str):
        self.sentence = sentence

    def servable(self) -> Any:
        return pn.pane.HTML(f"<p>{html.escape(self.sentence)}</p>").servable(title="Sumwright")


def build_page() -> Page | Refused:
    """The page of a new session: the sheet that the link names, or the demonstration."""
    try:
        sitting = begin(pn.state.user, pn.state.session_args)
        sitting.may("read")
    except SumwrightError as error:
        return Refused(str(error))
    page = Page(sitting.workbench, sitting.may)
    page.sit(sitting)
    return page


__all__ = ["FOLDS", "Page", "Refused", "build_page", "fold_classes"]
