"""A session's page without a browser: what it sends, what it refuses, and that nothing of it stays."""

import asyncio
import gc
import json
import posixpath
import re
import threading
import types
import weakref
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.stage import ARRANGEMENTS
from sumwright.errors import NotAllowed
from sumwright.model import acts
from sumwright.page import FOLDS, Page, fold_classes

TEMPLATE = (Path(__file__).parents[1] / "app/sumwright/views/sheet.html").read_text(encoding="utf-8")


class Browser:
    """The other end of the wire: keeps what it was sent, as the browser does."""

    def __init__(self, page):
        self.frames, self.state = [], {}
        page.wire._send_msg = self.hear

    def hear(self, text):
        self.frames.append(json.loads(text))
        self.state.update(self.frames[-1])


@pytest.fixture
def page():
    page = Page()
    yield page
    page.close()


def test_every_fold_is_there():
    assert set(fold_classes()) == set(FOLDS)


def test_every_module_of_the_sheet_is_fetched_at_once():
    static = Path(__file__).parents[1] / "app/static"
    named = set(re.findall(r'"([\w/]+)"', re.search(r"for module in \[(.*?)\]", TEMPLATE).group(1)))
    needed, ahead = set(), ["core", "folds/curves"]
    while ahead:
        module = ahead.pop()
        if module in needed:
            continue
        needed.add(module)
        text = (static / f"{module}.js").read_text(encoding="utf-8")
        for found in re.findall(r"^import .*?'(\.[\w./]+)\.js'", text, re.MULTILINE):
            ahead.append(posixpath.normpath(posixpath.join(posixpath.dirname(module), found)))
    assert named == needed


def test_one_message_is_answered_by_one_frame(page):
    browser = Browser(page)
    page.receive({"seq": 7, "acts": [{"do": "value", "signal": "north", "value": 1.0}, {"do": "let_go"}]})
    assert [f["seq"] for f in browser.frames] == [7]


def test_a_frame_after_a_move_carries_only_what_moved(page):
    browser = Browser(page)
    page.receive({"seq": 1, "acts": []})
    for seq, volts in enumerate((1.0, 1.2), 2):
        page.receive({"seq": seq, "acts": [{"do": "value", "signal": "north", "value": volts}]})
    last = browser.frames[-1]
    assert "live" in last
    assert "plate" not in last
    assert "signals" not in last
    assert len(json.dumps(last)) < 8000


def test_what_was_sent_piece_by_piece_is_the_whole(page):
    browser = Browser(page)
    page.receive({"seq": 1, "acts": [], "whole": True})
    for seq, act in enumerate(
        [
            {"do": "value", "signal": "north", "value": 1.0},
            {"do": "weight", "signal": "east", "text": "0.2"},
            {"do": "plug", "signal": "south", "out": True},
            {"do": "arrange", "arrangement": "two-stage"},
            {"do": "undo"},
        ],
        2,
    ):
        page.receive({"seq": seq, "acts": [act]})
    whole = {k: json.loads(v) for k, v in page.frame(whole=True).items()}
    for key, value in whole.items():
        assert browser.state[key] == value, key


def test_what_changes_the_sheet_asks_first_and_what_does_not_is_free():
    asked = []

    def may(action):
        asked.append(action)
        raise NotAllowed("You may read this sheet, not change it.")

    page = Page(may=may)
    browser = Browser(page)
    before = page.workbench.snapshot
    for name in acts.ACTS:
        page.receive({"seq": 1, "acts": [{"do": name, "signal": "north", "text": "1", "value": 1.0, "out": True}]})
    assert page.workbench.snapshot == before
    assert set(asked) == set(acts.ACTS) - acts.FREE
    assert all(
        f["refusals"][0]["not_allowed"] for f in browser.frames if "refusals" in f and f["refusals"][0]["do"] in asked
    )
    page.close()


@pytest.mark.parametrize(
    "message",
    [{}, {"acts": None}, {"acts": [1, None, "x"]}, {"acts": [{"do": ["value"]}]}, {"acts": [{"do": "fold", "fold": {}}]},
     {"acts": [{"do": "turn", "fold": "<b>"}]}, {"seq": "1", "acts": [{"do": "value"}]}, {"acts": [{}] * 1000}],
)  # fmt: skip
def test_messages_of_the_wrong_shape_do_nothing(page, message):
    Browser(page)
    before = page.workbench.snapshot
    page.receive(message)
    assert page.workbench.snapshot == before


async def a_visit():
    """A session from beginning to end, as a server's loop has it; what must be gone afterwards."""
    page = Page()
    Browser(page)
    for key in fold_classes():
        page.receive({"seq": 1, "acts": [{"do": "turn", "fold": key}]})
    page.receive({"seq": 2, "acts": [{"do": "value", "signal": "north", "value": 1.0}]})
    await asyncio.sleep(0.2)
    page.close()
    await asyncio.sleep(0.2)
    return [weakref.ref(page), weakref.ref(page.workbench)]


def test_a_closed_session_is_collected():
    # in a thread of its own: the browser's tests leave an event loop running in this one
    with ThreadPoolExecutor(1) as pool:
        watched = pool.submit(asyncio.run, a_visit()).result()
    gc.collect()
    assert [w() for w in watched] == [None] * len(watched)


NUMBERS = st.sampled_from(
    [
        "1e-12",
        "1e-6",
        "0.001",
        "0.5",
        "1",
        "-1",
        "0",
        "12",
        "-12",
        "60",
        "4k7",
        "1M",
        "1e9",
        "1e12",
        "-1e6",
        "1e30",
        "300",
        "",
    ]
)
FIGURES = [(group, figure) for group, figures in acts.UNITS.items() for figure in figures]
ACTS = st.one_of(
    st.builds(lambda s, v: {"do": "value", "signal": s, "value": v}, st.sampled_from(["tare", "north"]), st.floats(-1e6, 1e6)),
    st.builds(lambda s, f, t: {"do": "signal", "signal": s, "figure": f, "text": t}, st.sampled_from(["tare", "north"]),
              st.sampled_from(sorted(acts.SIGNAL_UNITS)), NUMBERS),
    st.builds(lambda s, t: {"do": "weight", "signal": s, "text": t}, st.sampled_from(["tare", "north", "west"]), NUMBERS),
    st.builds(lambda t: {"do": "offset", "text": t}, NUMBERS),
    st.builds(lambda p, t: {"do": "part", "part": p, "text": t},
              st.sampled_from(["0/feedback", "0/plus_ground", "0/minus/tare", "0/plus/north", "1/feedback"]), NUMBERS),
    st.builds(lambda t: {"do": "capacitor", "cell": 0, "text": t}, NUMBERS),
    st.builds(lambda f, t: {"do": "figure", "group": f[0], "figure": f[1], "text": t}, st.sampled_from(FIGURES), NUMBERS),
    st.builds(lambda w: {"do": "arrange", "arrangement": w}, st.sampled_from(ARRANGEMENTS)),
    st.builds(lambda w: {"do": "follow", "follow": w}, st.sampled_from(["nearest", "exact", "kept"])),
    st.builds(lambda s, o: {"do": "plug", "signal": s, "out": o}, st.sampled_from(["tare", "north", "east"]), st.booleans()),
    st.sampled_from([{"do": "add"}, {"do": "undo"}, {"do": "redo"}, {"do": "remove", "signal": "east"}]),
)  # fmt: skip


@settings(max_examples=60, deadline=None)
@given(st.lists(ACTS, min_size=1, max_size=12))
def test_whatever_a_person_types_the_sheet_answers(steps):
    page = Page()
    browser = Browser(page)
    for seq, act in enumerate(steps, 1):
        page.receive({"seq": seq, "acts": [act]})
        assert browser.frames[-1]["seq"] == seq, act
    page.close()


def test_a_bad_file_is_refused_by_its_name_and_the_sheet_keeps_what_it_had(page):
    browser, title = Browser(page), page.workbench.title
    page.receive({"seq": 1, "acts": [{"do": "open", "text": "{nope", "field": None, "name": "broken.json"}]})
    (refusal,) = browser.frames[-1]["refusals"]
    assert refusal["text"].startswith("“broken.json”: ")
    assert refusal["text"].endswith(". The sheet keeps what it had.")
    assert page.workbench.title == title


def test_saving_with_a_cable_out_says_that_the_file_has_no_place_for_it(page):
    browser = Browser(page)
    page.receive({"seq": 1, "acts": [{"do": "save"}]})
    assert "note" not in browser.frames[-1]["heard"][0]
    page.receive({"seq": 2, "acts": [{"do": "plug", "signal": "north", "out": True}, {"do": "save"}]})
    (saved,) = [h for h in browser.frames[-1]["heard"] if h["do"] == "save"]
    assert "“north”" in saved["note"]
    assert "cable" in saved["note"]


def test_a_thread_never_touches_the_document_itself(page):
    """A document that holds its events back while the page sends could lose the wish of a thread that asks it just then."""
    asked, here = [], threading.get_ident()

    class Document:
        session_context = object()

        def add_next_tick_callback(self, send):
            assert threading.get_ident() == here
            send()

    page._doc, page._loop = Document(), types.SimpleNamespace(add_callback=lambda *call: asked.append(call))
    browser = Browser(page)
    with ThreadPoolExecutor(1) as beside:
        beside.submit(page.say_saved, state="saved", at="").result()
    assert browser.frames == []
    for act, *arguments in asked:
        act(*arguments)
    assert browser.frames == [{"saved": {"state": "saved", "at": ""}}]
