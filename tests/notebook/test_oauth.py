"""Signing in by the lab's own identity service: Panel's provider comes through, the role comes from the people file."""

from __future__ import annotations

import http.server
import json
import re
import threading
import urllib.parse

import pytest
from sumwright.errors import NotAllowed
from sumwright.notebook.people import People, Person
from sumwright.notebook.settings import Settings
from sumwright.notebook.sign_in import who_for

from .served import READY, Server, act, browser, saved


def test_the_role_of_somebody_from_outside_is_the_people_files(tmp_path):
    People(tmp_path / "people.json").add("ines@lab.example", "author", None)
    ours = Settings(data=tmp_path, sign_in="oauth")
    assert who_for("ines@lab.example", ours)() == Person("ines@lab.example", "author")
    for stranger in ("mallory@evil.example", "guest", "", None):
        with pytest.raises(NotAllowed, match="not among the people"):
            who_for(stranger, ours)()
    let_in = Settings(data=tmp_path, sign_in="oauth", stranger="reader")
    assert who_for("visitor@lab.example", let_in)() == Person("visitor@lab.example", "reader")
    with pytest.raises(NotAllowed):
        who_for(None, let_in)()
    with pytest.raises(NotAllowed, match="no sign-in"):
        who_for("ines", Settings(data=tmp_path))


class Identity(http.server.BaseHTTPRequestHandler):
    """The least of an OAuth 2.0 service (RFC 6749, authorization code): everybody who comes is Ines."""

    def do_GET(self):
        url = urllib.parse.urlsplit(self.path)
        asked = dict(urllib.parse.parse_qsl(url.query))
        if url.path == "/authorize":
            back = asked["redirect_uri"] + "?" + urllib.parse.urlencode({"code": "c0de", "state": asked["state"]})
            self.send_response(302)
            self.send_header("Location", back)
            self.end_headers()
        else:
            self._say({"email": "ines@lab.example", "name": "Ines"})

    def do_POST(self):
        sent = dict(urllib.parse.parse_qsl(self.rfile.read(int(self.headers["Content-Length"])).decode()))
        assert sent["code"] == "c0de" and sent["client_secret"] == "s3cret-of-the-client"
        self._say({"access_token": "t0ken-of-access", "token_type": "bearer", "expires_in": 3600})

    def _say(self, held):
        body = json.dumps(held).encode()
        self.send_response(200)
        self.send_header("Content-Type", "application/json")
        self.send_header("Content-Length", str(len(body)))
        self.end_headers()
        self.wfile.write(body)

    def log_message(self, *args):
        pass


@pytest.mark.browser
def test_a_person_comes_in_by_an_identity_service(tmp_path, monkeypatch):
    service = http.server.ThreadingHTTPServer(("127.0.0.1", 0), Identity)
    threading.Thread(target=service.serve_forever, daemon=True).start()
    place = f"http://localhost:{service.server_port}"
    People(tmp_path / "people.json").add("ines@lab.example", "author", None)
    from .served import free_port

    port = free_port()
    extra = {
        "AUTHORIZE_URL": f"{place}/authorize",
        "TOKEN_URL": f"{place}/token",
        "USER_URL": f"{place}/user",
        "USER_KEY": "email",
    }
    server = Server(
        tmp_path, port=port, sign_in="oauth",
        more={
            "PANEL_OAUTH_PROVIDER": "generic", "PANEL_OAUTH_KEY": "client", "PANEL_OAUTH_SECRET": "s3cret-of-the-client",
            "PANEL_OAUTH_REDIRECT_URI": f"http://localhost:{port}/login", "PANEL_OAUTH_EXTRA_PARAMS": repr(extra),
            "PANEL_OAUTH_JWT_USER": "email", "PANEL_OAUTH_ENCRYPTION": "Zm9yIHRoaXMgdGVzdCBhbG9uZSwgMzIgYnl0ZXMgISE=",
        },
    )  # fmt: skip
    try:
        assert server.get("/app")[0] == 302
        with browser() as opened:
            context = opened.new_context()
            page = context.new_page()
            page.goto(server.url)
            page.wait_for_function(READY)
            act(page, do="value", signal="north", value=2.0)
            saved(page)
            assert re.search("notebook=[a-z2-7]{16}", page.url)
            page.evaluate("() => { location.hash = 'log' }")
            page.get_by_text("ines@lab.example, author").wait_for()
            assert all(
                c["httpOnly"] and c["sameSite"] == "Lax"
                for c in context.cookies()
                if c["name"] in ("user", "access_token")
            )
            People(tmp_path / "people.json").remove("ines@lab.example")
            page.reload()
            page.get_by_text("not among the people").wait_for()
            context.close()
        assert "s3cret-of-the-client" not in server.log.read_text() and "t0ken-of-access" not in server.log.read_text()
    finally:
        server.stop()
        service.shutdown()
