"""A server in a process of its own, and a browser, for the tests of the notebook that need both."""

from __future__ import annotations

import contextlib
import http.client
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path

import pytest
from support.browser import chromium

APP = Path(__file__).parents[2] / "app"
CHROMIUM = next((p for p in map(shutil.which, ("chromium", "chromium-browser", "google-chrome")) if p), None)
NEEDS = "The notebook's tests drive the page in Chromium, which is not found: apt-get install chromium."
CHROMIUM_OPTIONS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
]  # fmt: skip
READY = "() => window.sumwright && window.sumwrightWire"


def free_port() -> int:
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


class Server:
    """`sumwright serve` (or plain `panel serve app`) with settings of its own; logs go to a file in its data folder."""

    def __init__(
        self,
        data: Path,
        *,
        plain: bool = False,
        port: int | None = None,
        more: dict[str, str] | None = None,
        **settings,
    ):
        self.data, self.port = data, port or free_port()
        data.mkdir(parents=True, exist_ok=True)
        self.log = data / "server.log"
        self.prefix = str(settings.get("prefix", ""))
        self._environment = {
            k: v for k, v in os.environ.items() if not k.startswith(("SUMWRIGHT_", "PANEL_", "BOKEH_"))
        }
        self._environment |= {"SUMWRIGHT_DATA": str(data), "SUMWRIGHT_PORT": str(self.port), "SUMWRIGHT_LOG": "json"}
        self._environment |= {f"SUMWRIGHT_{k.upper()}": str(v) for k, v in settings.items()} | (more or {})
        self._command = [sys.executable, "-m", "sumwright.command", "serve"]
        if plain:
            self._command = [sys.executable, "-m", "panel", "serve", str(APP), "--port", str(self.port)]
        self.start()

    def start(self) -> None:
        with self.log.open("ab") as log:
            self.process = subprocess.Popen(
                self._command, env=self._environment, stdout=log, stderr=log, start_new_session=True
            )
        end = time.monotonic() + 60
        while time.monotonic() < end:
            with contextlib.suppress(OSError):
                if self.get("/health")[0] == 200:
                    return
            assert self.process.poll() is None, f"the server ended: {self.log.read_text()[-3000:]}"
            time.sleep(0.1)
        raise AssertionError(f"the server does not answer: {self.log.read_text()[-3000:]}")

    @property
    def url(self) -> str:
        return f"http://localhost:{self.port}{self.prefix}/app"

    def get(self, path: str, headers: dict[str, str] | None = None, host: str = "127.0.0.1", data: bytes | None = None):
        """(status, headers, body) of one request; redirects are not followed."""
        connection = http.client.HTTPConnection(host, self.port, timeout=30)
        with contextlib.closing(connection):
            sent = dict(headers or {})
            if data is not None:
                sent.setdefault("Content-Type", "application/x-www-form-urlencoded")
            connection.request("GET" if data is None else "POST", self.prefix + path, data, sent)
            answer = connection.getresponse()
            # An accepted websocket has no body to read.
            return answer.status, answer.headers, b"" if answer.status == 101 else answer.read()

    def kill(self) -> None:
        """SIGKILL to the server and its processes: the power cut."""
        with contextlib.suppress(ProcessLookupError):
            os.killpg(self.process.pid, signal.SIGKILL)
        self.process.wait()

    def stop(self) -> None:
        with contextlib.suppress(ProcessLookupError):
            os.killpg(self.process.pid, signal.SIGTERM)
        try:
            self.process.wait(15)
        except subprocess.TimeoutExpired:
            self.kill()


@contextlib.contextmanager
def browser():
    """Chromium, headless; fails with what to install when it is not there."""
    if CHROMIUM is None:
        pytest.fail(NEEDS, pytrace=False)
    with chromium(executable_path=CHROMIUM, args=CHROMIUM_OPTIONS) as opened:
        yield opened


def open_sheet(context, url: str):
    """A page with the sheet on it, its wire joined; what it complains of gathers in `page.complaints`."""
    page = context.new_page()
    page.complaints = []
    page.on("pageerror", lambda error: page.complaints.append(str(error)))
    page.on("console", lambda m: page.complaints.append(m.text) if m.type == "error" else None)
    page.goto(url)
    page.wait_for_function(READY)
    return page


def act(page, **what) -> None:
    """Send one act over the wire and wait until the frame that answers it is shown."""
    page.evaluate(
        """async what => {
          const line = window.sumwright.line
          line.act(what)
          const wanted = line.seq + (line.queue.length ? 1 : 0)
          for (let k = 0; k < 400 && line.shown < wanted; k++) await new Promise(r => setTimeout(r, 25))
          if (line.shown < wanted) throw new Error('no answer to ' + JSON.stringify(what).slice(0, 200))
        }""",
        what,
    )


def saved(page, state: str = "saved", timeout: float = 15.0) -> None:
    """Wait until the mark beside the title says so."""
    page.wait_for_function("s => window.sumwright.state.saved?.state === s", arg=state, timeout=timeout * 1000)


def value_of(page, name: str) -> float:
    return page.evaluate("n => window.sumwright.state.signals.rows.find(r => r.name === n).value", name)
