"""Hostile text and files, through every field, link and import of the real page: none runs, none breaks the sheet.

The browser is told to ignore the content security policy here, so that what is tested is the page's own handling and
not its second line of defence.
"""

from __future__ import annotations

import json
import re

import pytest
from sumwright.files.examples import NAMES, example_text
from sumwright.notebook import bundle
from sumwright.notebook.entries import make_entry
from sumwright.notebook.markdown import note_html
from sumwright.notebook.people import People
from sumwright.notebook.store import Notebook, Sheet, Store
from sumwright.page import FOLDS

from .served import READY, Server, act, browser, open_sheet, saved

pytestmark = pytest.mark.browser

RUN = "window.__ran=(window.__ran||0)+1"
MARKUP = [
    f'<img src=x onerror="{RUN}">',
    f"<svg onload={RUN}>",
    f"<svg><animate onbegin={RUN} attributeName=x dur=1s>",
    f'"><script>{RUN}</script>',
    f"'\"--></style></title></textarea><script>{RUN}</script>",
    f'<iframe srcdoc="<script>parent.{RUN}</script>">',
    f'<a href="javascript:{RUN}">x</a>',
    f"<details open ontoggle={RUN}>",
    f"<math><mtext><table><mglyph><style><!--</style><img title='--&gt;&lt;img src=1 onerror={RUN}&gt;'>",
    f"javascript:{RUN}",
    f"data:text/html,<script>{RUN}</script>",
]
TEXTS = [
    f"{{{{constructor.constructor('{RUN}')()}}}}",
    f"${{{RUN}}}",
    '=HYPERLINK("http://evil.example")',
    "@SUM(1+1)*cmd|' /C calc'!A0",
    "../../../../etc/passwd",
    "..\\..\\windows\\win.ini",
    "file:///etc/passwd",
    "'; DROP TABLE entries; --",
    "%00%0d%0aSet-Cookie: x=1",
    "__proto__",
    "constructor",
    "toString",
    "nan",
    "1e400",
    "-0",
    "9" * 400,
    "a\u202eb\u2066c",
    "\u0007\u001b[31m",
    "\ufeff\u200b\u00ad",
    "Z\u0351\u036b\u0343\u036a\u0302\u036b\u033d\u034f" * 8,
    "👩‍🔬" * 20,
    "x" * 20_000,
]
PAYLOADS = ["".join(MARKUP), *MARKUP[-2:], *TEXTS]

# Types a text into every field there is, as a person would: focus, type, Enter, leave.
TYPE_EVERYWHERE = """async ([text, where]) => {
  const line = window.sumwright.line
  const idle = async () => { for (let k = 0; k < 400 && (line.busy || line.queue.length); k++) await new Promise(r => setTimeout(r, 10)) }
  const fields = [...document.querySelectorAll(where + ' input:not([type=file]):not([type=range]):not([type=checkbox]), ' + where + ' textarea')].filter(f => f.offsetParent && !f.disabled)
  for (const f of fields) {
    if (!f.isConnected) continue
    f.focus()
    f.value = text
    f.dispatchEvent(new Event('input', {bubbles: true}))
    f.dispatchEvent(new KeyboardEvent('keydown', {key: 'Enter', bubbles: true, ctrlKey: f.tagName === 'TEXTAREA'}))
    f.dispatchEvent(new Event('change', {bubbles: true}))
    f.blur()
    await idle()
  }
  await idle()
  return fields.length
}"""


@pytest.fixture(scope="module")
def server(tmp_path_factory):
    data = tmp_path_factory.mktemp("hostile")
    People(data / "people.json").add(f"Mallory {MARKUP[0]}", "author", "a long password")
    started = Server(data, sign_in="password")
    yield started
    started.stop()


@pytest.fixture(scope="module")
def context(server):
    with browser() as opened:
        made = opened.new_context(bypass_csp=True, viewport={"width": 1600, "height": 1000})
        made.outside, made.asked = [], []
        made.on(
            "request",
            lambda r: (
                made.outside.append(r.url)
                if not re.match(rf"(http|ws)://localhost:{server.port}/|blob:|data:|about:", r.url)
                else None
            ),
        )
        made.on("dialog", lambda d: (made.asked.append(d.message), d.dismiss()))
        page = made.new_page()
        page.goto(server.url)
        page.get_by_label("Name").fill(f"Mallory {MARKUP[0]}")
        page.get_by_label("Password").fill("a long password")
        page.get_by_role("button", name="Sign in").click()
        page.wait_for_function(READY)
        page.close()
        yield made
        assert made.outside == [] and made.asked == []
        made.close()


def unharmed(page, server):
    """Nothing ran, nothing was complained of, and the sheet still follows the hand."""
    assert page.evaluate("() => window.__ran") is None
    assert [c for c in page.complaints if "Failed to load resource" not in c] == []
    signal = page.evaluate("() => window.sumwright.state.signals.order[0]")
    low, high = page.evaluate(
        "n => { const r = window.sumwright.state.signals.rows.find(r => r.name === n); return [r.low, r.high] }", signal
    )
    act(page, do="value", signal=signal, value=low)
    act(page, do="value", signal=signal, value=(low + high) / 2)
    shown = page.evaluate("n => window.sumwright.state.signals.rows.find(r => r.name === n).value", signal)
    assert shown == pytest.approx((low + high) / 2)


WHERE = (*FOLDS, "new")


@pytest.mark.parametrize("fold", WHERE)
def test_every_text_field_of_every_fold(context, server, fold):
    page = open_sheet(context, server.url)
    if fold != "new" and fold not in page.evaluate(
        "() => [...document.querySelectorAll('#crease a')].map(a => a.hash.slice(1))"
    ):
        pytest.fail(f"there is no fold {fold}")
    page.evaluate("f => { location.hash = f }", fold)
    page.wait_for_selector(f"#f-{fold}:not([hidden])")
    page.wait_for_load_state("networkidle")
    where = "body" if fold == "curves" else f"#f-{fold}"  # the strips and the drawing are there in every fold
    for text in PAYLOADS[::3] if fold in ("curves", "bench") else PAYLOADS:
        page.evaluate(TYPE_EVERYWHERE, [text, where])
    unharmed(page, server)
    page.reload()
    page.wait_for_function(READY)
    unharmed(page, server)
    page.close()


@pytest.mark.parametrize("what", ["name", "title"])
def test_what_was_taken_is_shown_as_it_was_typed_and_comes_back(context, server, what):
    page = open_sheet(context, server.url)
    for text in MARKUP[:4]:
        message = {
            "name": {
                "do": "name",
                "signal": page.evaluate("() => window.sumwright.state.signals.order[0]"),
                "text": text,
            },
            "title": {"do": "title", "text": text},
        }[what]
        act(page, **message)
    saved(page)
    page.evaluate("() => { location.hash = 'log' }")
    page.get_by_role("button", name="Freeze now").click()
    page.wait_for_selector("#entry-1")
    page.get_by_role("button", name="Compare frozen A with the sheet").click()
    unharmed(page, server)
    page.reload()
    page.wait_for_function(READY)
    if what == "title":
        assert page.evaluate("() => window.sumwright.state.title") == MARKUP[3]
        assert page.title().startswith(MARKUP[3][:20])
    unharmed(page, server)
    page.close()


def test_notes_with_links_that_are_none(context, server):
    links = [
        f"[x](javascript:{RUN})", f"[x](JaVaScRiPt:{RUN})", f"[x](java\tscript:{RUN})", f"<javascript:{RUN}>",
        "[x](data:text/html;base64,PHNjcmlwdD4=)", "[x](vbscript:x)", "[x](file:///etc/passwd)", f"[x]: javascript:{RUN}\n\n[x]",
        f'[x](http://a.example "onmouseover={RUN}")', "![x](http://evil.example/pixel.png)", f"`<img src=x onerror={RUN}>`",
        f"```html\n<script>{RUN}</script>\n```", f"a|b\n-|-\n<b onclick={RUN}>|c", "[x](//evil.example)", "[x](/bench/logout)",
        *MARKUP,
    ]  # fmt: skip
    page = open_sheet(context, server.url)
    act(page, do="value", signal="north", value=1.0)
    saved(page)
    page.evaluate("() => { location.hash = 'log' }")
    for k, text in enumerate(links, start=1):
        page.get_by_label("Text of the entry").fill(text)
        page.get_by_role("button", name="Write it").click()
        page.wait_for_selector(f"#entry-{k}")
    schemes = page.locator(".log a").evaluate_all("all => all.map(a => a.getAttribute('href'))")
    assert schemes and all(re.match(r"https?://", s) for s in schemes if s is not None), schemes
    assert page.locator(".log img, .log script, .log svg, .log iframe, .log style, .log form").count() == 0
    page.evaluate(
        "() => addEventListener('click', e => e.preventDefault(), true)"
    )  # a link of http itself may be followed
    page.locator(".log .said *").evaluate_all("all => all.forEach(e => { e.dispatchEvent(new MouseEvent('mouseover')); e.dispatchEvent(new MouseEvent('click', {cancelable: true})) })")  # fmt: skip
    attributes = page.locator(".log .said *").evaluate_all(
        "all => [...new Set(all.flatMap(e => e.getAttributeNames()))]"
    )
    assert set(attributes) <= {"href", "rel", "target", "start", "title"}
    unharmed(page, server)
    page.close()


def test_markdown_itself_still_works():
    made = note_html(
        "**b** *i* [x](https://a.example/?q=1&r=2)\n\n1. one\n2. two\n\n| a | b |\n|---|---|\n| 1 | 2 |\n\n~~s~~ `c`"
    )
    for piece in (
        "<strong>b</strong>",
        "<em>i</em>",
        'href="https://a.example/?q=1&amp;r=2"',
        'target="_blank"',
        "noopener",
        "<ol>",
        "<td>1</td>",
        "<s>s</s>",
        "<code>c</code>",
    ):
        assert piece in made


def _hostile_design(text):
    design = json.loads(example_text(NAMES[0]))
    old = design["signals"][0]["name"]
    design["title"] = text
    design["op_amp"]["name"] = text
    return json.loads(json.dumps(design).replace(json.dumps(old), json.dumps(text)))


def test_design_files_with_hostile_names(context, server):
    page = open_sheet(context, server.url)
    for text in [*MARKUP[:5], "a\u202eb", "../../x", "constructor", "__proto__"]:
        act(page, do="open", text=json.dumps(_hostile_design(text)))
        unharmed(page, server)
    saved(page)
    page.reload()
    page.wait_for_function(READY)
    unharmed(page, server)
    page.close()


NO_DESIGNS = [
    "", "[]", "null", "0", '"x"', "{}", "[" * 100_000, '{"a":' * 100_000, '{"signals":' + "[" * 50_000,
    '{"format":"sumwright-design/1","format":"x"}', "\x00\x01\x02", "NaN", '{"title":1e999}', "9" * 100_000,
    "<!DOCTYPE html><script>window.__ran=1</script>", "PK\x03\x04",
]  # fmt: skip


def test_files_that_are_no_design_are_refused_and_the_sheet_keeps_what_it_had(context, server):
    page = open_sheet(context, server.url)
    had = page.evaluate("() => JSON.stringify(window.sumwright.state.signals)")
    for text in NO_DESIGNS:
        act(page, do="open", text=text)
        assert page.evaluate("() => JSON.stringify(window.sumwright.state.signals)") == had, text[:60]
        assert page.evaluate("() => document.body.classList.contains('noted')"), text[:60]
        act(page, do="undo")  # something else is done: the sentence goes
    unharmed(page, server)
    page.close()


MESSAGES = [
    "", "null", "[]", "0", '"x"', "{", '{"acts":0}', '{"acts":{}}', '{"acts":[null,0,[],"x"]}', '{"acts":[{"do":null}]}',
    '{"acts":[{"do":"__class__"}]}', '{"acts":[{"do":"fold","fold":"../x","message":{}}]}', '{"acts":[{"do":"turn","fold":"__init__"}]}',
    '{"acts":[{"do":"turn","fold":{}}]}', '{"acts":[{"do":"fold","fold":"log","message":[]}]}', '{"acts":[{"do":"fold","fold":"log","message":{"ask":["x"]}}]}',
    '{"acts":[{"do":"fold","fold":"log","message":{"ask":"part","part":-1}}]}', '{"acts":[{"do":"fold","fold":"log","message":{"ask":"part","part":1e9}}]}',
    '{"acts":[{"do":"fold","fold":"log","message":{"ask":"compare","a":"x","b":{},"token":"t"}}]}', '{"acts":[{"do":"value","signal":"north","value":1e999}]}',
    '{"acts":[{"do":"value","signal":{},"value":[]}]}', '{"seq":"x","acts":[{"do":"title","text":{}}]}', '{"seq":1e999,"acts":[]}',
    '{"acts":[{"do":"fold","fold":"log","message":{"ask":"import","token":"t","part":0,"parts":1,"data":"@@@"}}]}',
    '{"acts":[{"do":"fold","fold":"log","message":{"ask":"import","token":"t","part":3,"parts":5,"data":""}}]}',
    json.dumps({"acts": [{"do": "undo"}] * 5000}), '{"acts":[' + "[" * 5000, '{"a":' * 2000,
]  # fmt: skip


def test_messages_that_no_page_would_send(context, server):
    page = open_sheet(context, server.url)
    page.evaluate("() => { location.hash = 'log' }")
    page.wait_for_selector("#f-log:not([hidden])")
    for message in MESSAGES:
        page.evaluate("m => window.sumwrightWire.send(m)", message)
    page.evaluate("() => window.sumwrightWire.send('x'.repeat(5_000_000))")
    unharmed(page, server)
    page.close()


@pytest.mark.parametrize(
    "query",
    ["notebook=<script>window.__ran=1</script>", "notebook=%00", "notebook=" + "a" * 5000, "notebook=a&notebook=b", "sheet=-1", "notebook=aaaaaaaaaaaaaaaa&sheet=99999999999999",
     "entry=<img src=x onerror=window.__ran=1>", "notebook=%ff%fe", "fold=__proto__#__proto__", "#<img src=x onerror=window.__ran=1>", "#constructor"],
)  # fmt: skip
def test_links_that_lead_nowhere(context, server, query):
    page = open_sheet(context, server.url + ("" if query.startswith("#") else "?") + query)
    unharmed(page, server)
    page.close()


def test_a_notebook_file_made_by_an_attacker(context, server, tmp_path):
    """Its hashes hold, for it was made to: every text in it is hostile, its state and history are not of this page."""
    evil, at = MARKUP[0], "2024-05-01T10:00:00.000000Z"
    key = "aaaaaaaaaaaaaaaa"
    design = _hostile_design(evil)
    bodies = [
        ("note", {"text": "\n\n".join(MARKUP)}),
        ("frozen", {"title": evil, "design": design, "unplugged": [evil], "results": {evil: [evil, evil]}, "checks": [{"title": evil, "margin": evil, "unit": evil, "status": evil}]}),
        ("frozen", {"title": evil, "design": {"signals": evil, "cells": 7}, "results": evil and {}}),
        ("readings", {"title": evil, "csv": f"{evil},output\n=1+1,2\n"}),
        ("capture", {"title": evil, "csv": evil, "about": {evil: evil}}),
        ("correction", {"of": 1, "text": evil}),
    ]  # fmt: skip
    entries = []
    for kind, body in bodies:
        entries.append(make_entry(key, entries[-1] if entries else None, kind, body, evil, 1, at))
    sheets = [
        Sheet(key, 1, evil, {"format": "sumwright-sheet/1", "design": design, "unplugged": [], "follow": "nearest", "symbols": "IEC 60617"}, {"past": [evil, "[" * 90, 7, None, "{}"], "future": evil}, 1, at, evil),
        Sheet(key, 2, evil, {"format": evil, "design": evil}, {}, 1, at, evil),
        Sheet(key, 3, evil, {"format": "sumwright-sheet/1", "design": design, "unplugged": {"a": 1}, "follow": [], "symbols": {}}, {}, 1, at, evil),
    ]  # fmt: skip
    data = bundle.pack(Notebook(key, key, evil, at, evil, None, len(entries), entries[-1].sha256), sheets, entries)
    (tmp_path / "evil.zip").write_bytes(data)
    page = open_sheet(context, server.url + "#log")
    page.get_by_label("Notebook file").set_input_files(tmp_path / "evil.zip")
    page.wait_for_function(
        "() => document.getElementById('note').textContent.includes('stored sheet')"
    )  # refused whole
    store = Store(server.data / "notebook.db")
    came = bundle.import_notebook(
        store, data
    ).id  # as the command line would: what is in the store is not trusted either
    store.close()
    page.goto(server.url + f"?notebook={came}&sheet=1#log")
    page.wait_for_function(READY)
    page.wait_for_selector("#entry-6")
    for name in (
        "Compare frozen A with the sheet",
        "Compare frozen B with the sheet",
        "Put frozen B on the sheet",
        "Put frozen A on the sheet",
        "Verify",
        "Notebooks",
    ):
        page.get_by_role("button", name=name, exact=True).click()
        page.wait_for_timeout(250)
    unharmed(page, server)
    for number in (2, 3):
        page.goto(server.url + f"?notebook={came}&sheet={number}")
        page.wait_for_function(READY)
        assert page.evaluate("() => document.body.classList.contains('noted')")
        unharmed(page, server)
    page.close()


def test_nothing_left_the_data_folder_and_the_logs_still_hold(server):
    names = {p.name for p in server.data.rglob("*")}
    assert names <= {
        "notebook.db",
        "notebook.db-wal",
        "notebook.db-shm",
        "people.json",
        "cookie-secret",
        "sign-ins.db",
        "server.log",
    }
    store = Store(server.data / "notebook.db")
    for notebook in store.notebooks():
        assert store.verify(notebook.id) == []
