"""A real server with the real app, and how to wait for its page."""

from __future__ import annotations

import contextlib
import os
import socket
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from urllib.request import urlopen

ROOT = Path(__file__).resolve().parents[2]
READY = "!!(window.sumwright && sumwright.line.wire && !sumwright.line.busy && window.Bokeh && Bokeh.documents.length && Bokeh.documents[0].is_idle)"


def free_port() -> int:
    """A port nobody listens on just now."""
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


@contextlib.contextmanager
def served(*more, options=(), environment=None):
    """`panel serve app` and whatever `more` on a free port, with a data folder of its own; yields the process and the address."""
    port = free_port()
    with tempfile.TemporaryDirectory(prefix="sumwright-served-") as data:
        log = Path(data) / "server.log"
        with log.open("wb") as out:
            process = subprocess.Popen(
                [sys.executable, "-m", "panel", "serve", "app", *more, "--port", str(port), *options],
                cwd=ROOT, stdout=out, stderr=out,
                env={**os.environ, "SUMWRIGHT_DATA": data, **(environment or {})},
            )  # fmt: skip
            process.log = log
            try:
                url = f"http://localhost:{port}"
                for _ in range(300):
                    try:
                        urlopen(f"{url}/app", timeout=20).read()
                        break
                    except OSError:
                        if process.poll() is not None:
                            break
                        time.sleep(0.1)
                else:
                    raise AssertionError("The server did not answer within 30 s.\n" + log.read_text()[-2000:])
                if process.poll() is not None:
                    raise AssertionError("The server did not start; it says:\n" + log.read_text()[-2000:])
                yield process, url
            finally:
                process.terminate()
                process.wait(10)


def wait(page, condition: str, seconds: float = 20.0):
    """Until the JavaScript expression `condition` holds; its value.

    Playwright's own `wait_for_function` evaluates text in the page, which the
    page's content security policy forbids.
    """
    end = time.monotonic() + seconds
    while True:
        found = page.evaluate(condition)
        if found:
            return found
        if time.monotonic() > end:
            raise AssertionError(f"not within {seconds:g} s: {condition}")
        page.wait_for_timeout(15)


def settled(page):
    """Until everything asked for is answered and painted."""
    return wait(page, READY + " && !sumwright.line.queue.length")
