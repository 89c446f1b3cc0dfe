"""Who gets in, what every answer carries, and what a reader cannot do whatever is sent over the websocket."""

from __future__ import annotations

import json
import re
import socket
import urllib.parse
from http.cookies import SimpleCookie

import pytest
from sumwright.notebook.people import People
from sumwright.notebook.sign_in import PER_NAME_AND_ADDRESS, Brake, _own_path
from sumwright.notebook.store import Store
from sumwright.notebook.web import with_nonce

from .served import READY, Server, act, browser, open_sheet, saved

PASSWORDS = {"Ines": "the author's own", "Rea": "the reader's own", "Kim": "the keeper's own"}
ROLES = {"Ines": "author", "Rea": "reader", "Kim": "keeper"}


@pytest.fixture(scope="module")
def lab(tmp_path_factory):
    """A server for a lab: people, two processes, a path before its addresses."""
    data = tmp_path_factory.mktemp("lab")
    for name, password in PASSWORDS.items():
        People(data / "people.json").add(name, ROLES[name], password)
    started = Server(data, sign_in="password", prefix="/bench", processes=2, log_level="debug")
    yield started
    started.stop()


@pytest.fixture(scope="module")
def alone(tmp_path_factory):
    """Plain `panel serve app`."""
    started = Server(tmp_path_factory.mktemp("alone"), plain=True)
    yield started
    started.stop()


@pytest.fixture(scope="module")
def chromium():
    with browser() as opened:
        yield opened


def sign_in(context, server, name, password=None):
    page = context.new_page()
    page.goto(server.url)
    page.get_by_label("Name").fill(name)
    page.get_by_label("Password").fill(password or PASSWORDS[name])
    page.get_by_role("button", name="Sign in").click()
    return page


# ---------------------------------------------------------------- without sign-in


def test_plain_serving_answers_on_this_machine_alone(alone):
    assert alone.get("/app")[0] == 200
    others = {a[4][0] for a in socket.getaddrinfo(socket.gethostname(), None, socket.AF_INET)} - {"127.0.0.1"}
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as s:
        s.connect(("192.0.2.1", 9))  # sends nothing; says which address of this machine faces outwards
        others.add(s.getsockname()[0])
    for address in others - {"127.0.0.1"}:
        for path in ("/app", "/app/ws", "/static/js/bokeh.min.js", "/app/static/core.js"):
            status, _, body = alone.get(path, host=address)
            assert (status, b"no sign-in" in body) == (403, True), (address, path)


@pytest.mark.parametrize(
    "name", ["evil.example", "evil.example:80", "localhost.evil.example", "127.0.0.1.evil.example", "169.254.169.254"]
)
def test_a_name_that_was_made_to_point_here_is_refused(alone, name):
    assert alone.get("/app", {"Host": name})[0] == 403
    assert alone.get("/app/ws", {"Host": name, "Upgrade": "websocket", "Connection": "Upgrade", "Sec-WebSocket-Key": "x" * 24, "Sec-WebSocket-Version": "13", "Origin": f"http://{name}"})[0] == 403  # fmt: skip


@pytest.mark.parametrize(
    "origin", ["http://evil.example", "null", "http://localhost:1", "https://localhost.evil.example"]
)
def test_a_websocket_from_another_origin_is_refused(alone, origin):
    status, _, _ = alone.get(
        "/app/ws",
        {"Upgrade": "websocket", "Connection": "Upgrade", "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==",
         "Sec-WebSocket-Version": "13", "Origin": origin, "Sec-WebSocket-Protocol": "bokeh, x"},
    )  # fmt: skip
    assert status == 403


@pytest.mark.parametrize(
    "path",
    [
        "/app",
        "/app/static/core.js",
        "/health",
        "/nosuch",
        "/static/js/bokeh.min.js",
        "/app/autoload.js?bokeh-autoload-element=1",
    ],
)
def test_every_answer_carries_the_headers(alone, path):
    _, headers, _ = alone.get(path)
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert headers["X-Frame-Options"] == "DENY"
    assert headers["Referrer-Policy"] == "no-referrer"
    rules = dict(rule.strip().split(" ", 1) for rule in headers["Content-Security-Policy"].split(";"))
    assert rules["default-src"] == "'none'" and rules["frame-ancestors"] == "'none'" and rules["base-uri"] == "'none'"
    assert "unsafe-eval" not in headers["Content-Security-Policy"]
    assert "unsafe-inline" not in rules.get("script-src", "")
    assert "Tornado" not in headers["Server"]


def test_each_answer_has_a_nonce_of_its_own(alone):
    nonces = set()
    for _ in range(3):
        _, headers, body = alone.get("/app")
        nonce = re.search(r"'nonce-([\w-]+)'", headers["Content-Security-Policy"])[1]
        assert body.count(f'nonce="{nonce}"'.encode()) == len(re.findall(rb"<script\b", body)) > 3
        assert int(headers["Content-Length"]) == len(body)
        nonces.add(nonce)
    assert len(nonces) == 3


def test_text_that_looks_like_a_script_inside_one_is_left_alone():
    body = b'<p>&lt;script></p><script type="x">a = "\\u003cscript>"</script><SCRIPT src="y"></SCRIPT >'
    assert with_nonce(body, "N").count(b'nonce="N"') == 2
    assert b'a = "\\u003cscript>"' in with_nonce(body, "N")


def test_an_injected_script_or_handler_does_not_run(chromium, alone):
    context = chromium.new_context()
    page = open_sheet(context, alone.url)
    page.evaluate(
        """() => { window.ran = []
          document.body.insertAdjacentHTML('beforeend', '<img src="data:," onerror="window.ran.push(1)"><a id="js" href="javascript:window.ran.push(2)">x</a>')
          const s = document.createElement('script'); s.textContent = 'window.ran.push(3)'; document.body.append(s)
          const f = document.createElement('iframe'); f.src = 'http://evil.example/'; document.body.append(f)
          try { new Function('window.ran.push(4)')() } catch {} }"""
    )
    page.locator("#js").evaluate("a => a.click()")
    page.wait_for_timeout(400)
    # The page's own `evaluate` runs outside the policy, so its `new Function` may pass: the other three must not.
    assert set(page.evaluate("() => window.ran")) <= {4}
    context.close()


def test_health_and_readiness_say_nothing_but_that(alone):
    assert json.loads(alone.get("/health")[2]) == {"status": "alive"}
    assert json.loads(alone.get("/ready")[2]) == {"status": "ready"}


@pytest.mark.browser
def test_a_spoilt_store_is_told_by_readiness_and_to_the_person_and_left_alone(chromium, tmp_path):
    (tmp_path / "d").mkdir()
    (tmp_path / "d" / "notebook.db").write_bytes(b"spoilt" * 1000)
    server = Server(tmp_path / "d", plain=True)
    assert server.get("/health")[0] == 200
    status, _, body = server.get("/ready")
    assert status == 503 and str(tmp_path).encode() not in body
    context = chromium.new_context()
    page = open_sheet(context, server.url)
    act(page, do="value", signal="north", value=5.0)
    saved(page, "unsaved")
    page.wait_for_function("() => document.querySelector('#note').innerText.includes('notebook.db')")
    (tmp_path / "d" / "notebook.db").unlink()  # the keeper puts it aside: a new one is made, and what waits is saved
    saved(page)
    context.close()
    server.stop()


# ---------------------------------------------------------------- with sign-in


def test_without_signing_in_there_is_the_way_in_and_nothing_else(lab):
    status, headers, _ = lab.get("/app?notebook=aaaaaaaaaaaaaaaa&sheet=1")
    assert status == 302 and "login" in headers["Location"]
    assert lab.get("/health")[0] == 200
    status, _, _ = lab.get(
        "/app/ws",
        {"Upgrade": "websocket", "Connection": "Upgrade", "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==",
         "Sec-WebSocket-Version": "13", "Origin": f"http://localhost:{lab.port}", "Sec-WebSocket-Protocol": "bokeh, x"},
    )  # fmt: skip
    assert status in (302, 403)


def _form(lab):
    status, headers, body = lab.get("/login")
    assert status == 200
    token = re.search(rb'name="_xsrf" value="([^"]+)"', body)[1].decode()
    cookie = SimpleCookie(headers["Set-Cookie"])
    return token, f"_xsrf={cookie['_xsrf'].value}", headers


def _post(lab, name, password, *, query="", token=None, cookie=None):
    have_token, have_cookie, _ = _form(lab)
    data = {"username": name, "password": password, "_xsrf": have_token if token is None else token}
    return lab.get(
        f"/login{query}",
        {"Cookie": have_cookie if cookie is None else cookie},
        data=urllib.parse.urlencode(data).encode(),
    )


def test_a_sign_in_needs_the_forms_own_token(lab):
    assert _post(lab, "Ines", PASSWORDS["Ines"], token="")[0] == 403
    assert _post(lab, "Ines", PASSWORDS["Ines"], cookie="")[0] == 403
    assert _post(lab, "Ines", PASSWORDS["Ines"])[0] == 302


def test_the_cookies_are_out_of_reach_of_scripts_and_of_other_sites(lab):
    _, _, form = _form(lab)
    _, headers, _ = _post(lab, "Ines", PASSWORDS["Ines"])
    for cookie in [*form.get_all("Set-Cookie"), *headers.get_all("Set-Cookie")]:
        assert "HttpOnly" in cookie and re.search("samesite=lax", cookie, re.I), cookie
    user = next(c for c in headers.get_all("Set-Cookie") if c.startswith("user="))
    assert "Path=/bench/" in user and "Ines" not in user and "expires=" in user.lower()


def test_behind_https_cookies_are_secure_and_browsers_stay(tmp_path):
    People(tmp_path / "people.json").add("Ines", "author", PASSWORDS["Ines"])
    server = Server(tmp_path, sign_in="password", https="true")
    _, headers, _ = server.get("/login")
    assert "max-age" in headers["Strict-Transport-Security"]
    assert all("Secure" in c for c in headers.get_all("Set-Cookie"))
    assert "wss://" in headers["Content-Security-Policy"]
    server.stop()


@pytest.mark.parametrize(
    "asked",
    [
        "//evil.example/",
        "https://evil.example",
        "/\\evil.example",
        "\\\\evil.example",
        "javascript:alert(1)",
        "/a\r\nSet-Cookie: x=1",
        "",
    ],
)
def test_after_signing_in_one_stays_on_this_server(lab, asked):
    assert _own_path(asked, "/bench") == "/bench/"
    status, headers, _ = _post(lab, "Ines", PASSWORDS["Ines"], query="?" + urllib.parse.urlencode({"next": asked}))
    assert (status, headers["Location"]) == (302, "/bench/")
    assert _own_path("/bench/app?notebook=a&sheet=1", "/bench") == "/bench/app?notebook=a&sheet=1"


def test_guessing_is_braked_by_name_and_address_and_by_address(tmp_path):
    brake = Brake(tmp_path / "b.db")
    for _ in range(PER_NAME_AND_ADDRESS):
        assert brake.wait("Ines", "192.0.2.1") == 0
        brake.failed("Ines", "192.0.2.1")
    assert 0 < brake.wait("Ines", "192.0.2.1") <= 900
    assert brake.wait("Ines", "192.0.2.2") == 0 and brake.wait("Tomas", "192.0.2.1") == 0
    assert Brake(tmp_path / "b.db").wait("Ines", "192.0.2.1") > 0  # another process, or after a restart
    for k in range(20):
        brake.failed(f"n{k}", "192.0.2.3")
    assert brake.wait("anybody", "192.0.2.3") > 0
    brake.failed("Kim", "192.0.2.4")
    brake.succeeded("Kim", "192.0.2.4")
    assert brake.wait("Kim", "192.0.2.4") == 0
    assert b"Ines" not in (tmp_path / "b.db").read_bytes()


def test_too_many_wrong_passwords_close_the_door_even_to_the_right_one(lab):
    for _ in range(PER_NAME_AND_ADDRESS):
        status, _, body = _post(lab, "Rea<script>", "wrong")
        assert (
            status == 403
            and b"do not belong together" in body
            and b"<script>" not in body.replace(b"<script nonce", b"")
        )
    status, headers, _ = _post(lab, "Rea<script>", "wrong")
    assert status == 429 and int(headers["Retry-After"]) > 0


def test_a_body_larger_than_any_form_is_not_read(lab):
    token, cookie, _ = _form(lab)
    body = urllib.parse.urlencode({"username": "Ines", "password": "x" * 2_000_000, "_xsrf": token}).encode()
    try:
        status, _, _ = lab.get("/login", {"Cookie": cookie}, data=body)
    except (BrokenPipeError, ConnectionResetError):
        status = 400  # closed while it was still being sent
    assert status == 400
    assert lab.get("/health")[0] == 200


def test_a_forged_cookie_is_nobody(lab):
    for cookie in ("user=Kim", "user=2|1:0|10:1700000000|4:user|4:S2lt|" + "0" * 64, "is_guest=1"):
        status, headers, _ = lab.get("/app", {"Cookie": cookie})
        assert status == 302 and "login" in headers["Location"]


@pytest.mark.browser
def test_the_author_signs_in_writes_and_signs_out(chromium, lab):
    context = chromium.new_context()
    page = sign_in(context, lab, "Ines")
    page.wait_for_function(READY)
    act(page, do="value", signal="north", value=5.0)
    saved(page)
    page.evaluate("() => { location.hash = 'log' }")
    page.get_by_label("Text of the entry").fill("signed")
    page.get_by_role("button", name="Write it").click()
    page.wait_for_selector("#entry-1")
    assert page.locator("#entry-1 .who").inner_text() == "Ines"  # from the sign-in, not typed
    assert page.get_by_text("Ines, author").is_visible()
    page.goto(lab.url.replace("/app", "/logout"))
    page.goto(lab.url)
    assert "login" in page.url
    context.close()


@pytest.mark.browser
def test_with_two_processes_every_sheet_works_whichever_gets_the_websocket(chromium, lab):
    context = chromium.new_context()
    sign_in(context, lab, "Ines").wait_for_function(READY)
    used: set[int] = set()
    for k in range(40):  # which process answers is the system's choice: until both did, and four at least
        page = open_sheet(context, lab.url)
        act(page, do="value", signal="north", value=k / 10)
        saved(page)
        assert page.complaints == []
        page.close()
        events = [json.loads(line) for line in lab.log.read_text().splitlines()]
        used |= {e["process"] for e in events if e["event"] == "WebSocket connection opened"}
        if len(used) == 2 and k >= 3:
            break
    assert len(used) == 2
    context.close()


@pytest.mark.browser
@pytest.mark.store
def test_two_processes_share_a_postgresql_store_and_follow_each_other(chromium, cluster, tmp_path):
    server = Server(tmp_path, store=cluster.new_database(), processes=2)
    context = chromium.new_context()
    page = open_sheet(context, server.url)
    act(page, do="value", signal="north", value=1.25)
    saved(page)
    others = [open_sheet(context, page.url) for _ in range(3)]
    act(page, do="value", signal="north", value=2.75)
    saved(page)
    for other in others:  # whichever process has them
        other.wait_for_function(
            "() => window.sumwright.state.signals.rows.find(r => r.name === 'north').value === 2.75", timeout=20000
        )
        other.wait_for_function("() => document.querySelector('#note').innerText.includes('changed this sheet')")
        assert other.complaints == []
    assert server.get("/ready")[0] == 200
    assert not (tmp_path / "notebook.db").exists()
    context.close()
    server.stop()


READERS_TRIES = [
    {"do": "fold", "fold": "log", "message": {"ask": "write", "token": "t", "kind": "note", "text": "by a reader"}},
    {"do": "fold", "fold": "log", "message": {"ask": "write", "token": "t", "kind": "decision", "text": "by a reader"}},
    {
        "do": "fold",
        "fold": "log",
        "message": {"ask": "write", "token": "t", "kind": "correction", "of": 1, "text": "x"},
    },
    {"do": "fold", "fold": "log", "message": {"ask": "freeze", "token": "t", "title": "by a reader"}},
    {"do": "fold", "fold": "log", "message": {"ask": "new book", "token": "t", "title": "by a reader"}},
    {"do": "fold", "fold": "log", "message": {"ask": "new sheet", "token": "t", "title": "by a reader"}},
    {"do": "fold", "fold": "log", "message": {"ask": "rename", "token": "t", "title": "by a reader"}},
    {"do": "fold", "fold": "log", "message": {"ask": "archive", "token": "t", "id": "KEY", "back": False}},
    {
        "do": "fold",
        "fold": "log",
        "message": {"ask": "import", "token": "t", "part": 0, "parts": 1, "data": "UEsDBA=="},
    },
    {"do": "fold", "fold": "log", "message": {"ask": "resolve", "token": "t", "choice": "mine"}},
]


@pytest.mark.browser
def test_what_a_reader_can_and_cannot_do_over_the_websocket(chromium, lab):
    """A reader looks, moves things on their own screen, searches, compares and exports; the store never changes.

    The messages go straight into the websocket, and the widget models are set directly, past every button.
    """
    store = Store(lab.data / "notebook.db")
    writer = chromium.new_context()
    page = sign_in(writer, lab, "Ines")
    page.wait_for_function(READY)
    act(page, do="value", signal="north", value=4.5)
    saved(page)
    link = page.url
    key = re.search("notebook=([a-z2-7]{16})", link)[1]
    store.append(key, "note", {"text": "kept"}, "Ines")
    before, books = store.whole(key), len(store.notebooks())
    writer.close()

    context = chromium.new_context()
    sign_in(context, lab, "Rea").wait_for_function(READY)
    page = open_sheet(context, link)
    page.evaluate("() => { location.hash = 'log' }")
    page.wait_for_selector("#entry-1")
    assert not page.get_by_role("button", name="Write it").is_visible()
    assert not page.get_by_role("button", name="Correct entry 1").is_visible()
    for tried in READERS_TRIES:
        message = json.dumps({"seq": 900, "acts": [tried]}).replace("KEY", key)
        answer = page.evaluate(
            """text => new Promise(done => { const l = window.sumwright.line, plain = l.heard.bind(l)
              l.heard = frame => { if (frame.seq === 900) { l.heard = plain; done(frame.refusals ?? []) } else plain(frame) }
              window.sumwrightWire.send(text) })""",
            message,
        )
        assert [r.get("not_allowed") for r in answer] == [True], (tried, answer)
        assert "Rea is signed in as reader" in answer[0]["text"]
    # Their own screen moves, and is not kept.
    act(page, do="value", signal="north", value=9.0)
    page.wait_for_function("() => window.sumwright.state.saved.state === 'reader'")
    # Straight into the models of the session: what a browser may patch reaches no store.
    page.evaluate(
        """() => { for (const model of Bokeh.documents[0]._all_models.values()) {
             for (const [name, value] of Object.entries({name: 'keeper', tags: ['keeper'], data: {role: 'keeper'}}))
               try { if (name in model.attributes) model.setv({[name]: value}) } catch {} } }"""
    )
    page.wait_for_timeout(1500)
    assert store.whole(key) == before and len(store.notebooks()) == books
    # What a reader may: search, compare, verify, export.
    act(page, do="fold", fold="log", message={"ask": "search", "token": "s", "text": "kept"})
    page.wait_for_selector("#entry-1")
    with page.expect_download():
        page.get_by_role("button", name="Export").click()
    context.close()


@pytest.mark.browser
def test_a_person_taken_out_can_do_nothing_more_not_even_on_an_open_page(chromium, lab):
    people = People(lab.data / "people.json")
    people.add("Leo", "author", "here for a while")
    context = chromium.new_context()
    page = sign_in(context, lab, "Leo", "here for a while")
    page.wait_for_function(READY)
    act(page, do="value", signal="north", value=1.0)
    saved(page)
    key = re.search("notebook=([a-z2-7]{16})", page.url)[1]
    people.remove("Leo")
    act(page, do="value", signal="north", value=2.0)
    page.wait_for_timeout(1200)
    state = Store(lab.data / "notebook.db").sheet(key, 1).state
    assert next(s["value"] for s in state["design"]["signals"] if s["name"] == "north") == 1
    page.reload()
    assert "login" in page.url
    context.close()


def test_the_servers_log_is_structured_and_holds_no_content_and_no_secret(lab):
    _post(lab, "Kim", "quite wrong a password")
    _post(lab, "Kim", PASSWORDS["Kim"])
    text = lab.log.read_text()
    events = [json.loads(line) for line in text.splitlines()]
    assert {"signed in from 127.0.0.1", "sign-in failed from 127.0.0.1"} <= {e["event"] for e in events}
    for secret in (
        *PASSWORDS.values(),
        "quite wrong a password",
        "by a reader",
        "resistance",
        "Grain hopper",
        (lab.data / "cookie-secret").read_text().strip(),
    ):
        assert secret not in text, secret
