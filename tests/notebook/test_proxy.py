"""The shipped nginx configuration in front of a server, with TLS, as a lab would run it; all on loopback."""

from __future__ import annotations

import contextlib
import http.client
import json
import re
import shutil
import ssl
import subprocess
import time
from pathlib import Path

import pytest
from sumwright.notebook.people import People

from .served import READY, Server, act, browser, free_port, saved

CONFIGURATION = Path(__file__).parents[2] / "assets" / "deploy" / "nginx.conf"
NGINX = shutil.which("nginx") or shutil.which("nginx", path="/usr/sbin:/usr/local/sbin")
OPENSSL = shutil.which("openssl")


@pytest.fixture(scope="module")
def front(tmp_path_factory):
    """(port of nginx, the server behind it); the configuration is the shipped one but for names, ports and paths."""
    if NGINX is None or OPENSSL is None:
        pytest.fail("The proxy test needs nginx and openssl: apt-get install nginx-light openssl.", pytrace=False)
    folder = tmp_path_factory.mktemp("front")
    People(folder / "data" / "people.json").add("Ines", "author", "the author's own")
    port, plain = free_port(), free_port()
    server = Server(
        folder / "data", sign_in="password", proxy="true", https="true", origins=f"localhost:{port}", processes=2
    )
    subprocess.run(
        [OPENSSL, "req", "-x509", "-newkey", "rsa:2048", "-nodes", "-days", "2", "-subj", "/CN=localhost",
         "-addext", "subjectAltName=DNS:localhost", "-keyout", str(folder / "key.pem"), "-out", str(folder / "cert.pem")],
        check=True, capture_output=True,
    )  # fmt: skip
    site = CONFIGURATION.read_text()
    for old, new in (
        ("BENCH.LAB.EXAMPLE", "localhost"), ("/etc/ssl/sumwright", str(folder)), ("listen 443", f"listen 127.0.0.1:{port}"),
        ("listen 80", f"listen 127.0.0.1:{plain}"), ("127.0.0.1:5006", f"127.0.0.1:{server.port}"),
        ("proxy_set_header Host $host;", f"proxy_set_header Host $host:{port};"),
    ):  # fmt: skip
        assert old in site
        site = site.replace(old, new)
    paths = "".join(
        f"{kind}_temp_path {folder}/{kind};\n" for kind in ("client_body", "proxy", "fastcgi", "uwsgi", "scgi")
    )
    (folder / "nginx.conf").write_text(
        f"daemon off;\npid {folder}/pid;\nerror_log {folder}/error.log;\nworker_processes 1;\nevents {{}}\n"
        f"http {{\naccess_log off;\n{paths}{site}\n}}\n"
    )
    folder.chmod(0o755)
    process = subprocess.Popen([NGINX, "-p", str(folder), "-c", str(folder / "nginx.conf")], stderr=subprocess.PIPE)
    end = time.monotonic() + 30
    while time.monotonic() < end:
        with contextlib.suppress(OSError):
            if ask(port, "/health")[0] == 200:
                break
        assert process.poll() is None, process.stderr.read().decode()
        time.sleep(0.1)
    yield port, plain, server
    process.terminate()
    process.wait(15)
    process.stderr.close()
    server.stop()


def ask(port, path, headers=None, *, secure=True):
    context = ssl._create_unverified_context()  # made a moment ago by nobody in particular
    made = http.client.HTTPSConnection if secure else http.client.HTTPConnection
    connection = made("localhost", port, timeout=30, **({"context": context} if secure else {}))
    with contextlib.closing(connection):
        connection.request("GET", path, headers=headers or {})
        answer = connection.getresponse()
        return answer.status, answer.headers, answer.read()


def test_http_leads_to_https(front):
    _, plain, _ = front
    status, headers, _ = ask(plain, "/app?notebook=x", secure=False)
    assert status == 301 and headers["Location"].startswith("https://localhost/app?notebook=x")


def test_headers_come_through_and_browsers_stay_with_https(front):
    port, _, _ = front
    status, headers, body = ask(port, "/login")
    assert status == 200
    assert headers["Strict-Transport-Security"] and headers["X-Content-Type-Options"] == "nosniff"
    assert "wss://localhost" in headers["Content-Security-Policy"]
    assert all("Secure" in c and "HttpOnly" in c for c in headers.get_all("Set-Cookie"))
    assert len(headers.get_all("Content-Security-Policy")) == 1
    assert body


def test_the_address_a_browser_claims_is_not_believed(front):
    port, _, server = front
    ask(port, "/login", {"X-Real-IP": "203.0.113.9", "X-Forwarded-For": "203.0.113.9", "X-Forwarded-Proto": "http"})
    status, headers, _ = ask(port, "/login", {"X-Forwarded-Proto": "http"})
    assert status == 200 and headers["Strict-Transport-Security"]
    assert "203.0.113.9" not in server.log.read_text()


def test_a_flood_of_sign_ins_is_slowed_in_front_of_the_server(front):
    port, _, _ = front
    answers = [ask(port, "/login")[0] for _ in range(25)]
    assert answers[0] == 200 and 503 in answers


@pytest.mark.browser
def test_a_person_signs_in_and_works_through_it(front):
    port, _, server = front
    time.sleep(4)  # two more sign-ins are let through after the flood
    with browser() as opened:
        context = opened.new_context(ignore_https_errors=True)
        page = context.new_page()
        complaints = []
        page.on("console", lambda m: complaints.append(m.text) if m.type == "error" else None)
        page.goto(f"https://localhost:{port}/app")
        page.get_by_label("Name").fill("Ines")
        page.get_by_label("Password").fill("the author's own")
        page.get_by_role("button", name="Sign in").click()
        page.wait_for_function(READY)
        act(page, do="value", signal="north", value=3.25)
        saved(page)
        assert re.search("notebook=[a-z2-7]{16}", page.url)
        assert {c["secure"] for c in context.cookies()} == {True}
        assert complaints == []
        context.close()
    events = [json.loads(line) for line in server.log.read_text().splitlines()]
    assert any(e["event"] == "signed in from 127.0.0.1" for e in events)
