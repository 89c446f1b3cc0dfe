"""A headless Chromium for tests: found on the machine, or the test fails with what to install."""

import atexit
import contextlib
import shutil
from pathlib import Path

NAMES = ("chromium", "chromium-browser", "google-chrome", "google-chrome-stable")
WHAT_TO_INSTALL = "No Chromium was found. Debian and Ubuntu: sudo apt-get install chromium fonts-liberation"


def chromium_path():
    """Where Chromium is; fails with what to install if there is none."""
    for name in NAMES:
        if found := shutil.which(name):
            return found
    raise AssertionError(WHAT_TO_INSTALL)


def fonts_are_liberation():
    """Fail with what to install unless the fonts that pictures were made with are here."""
    folders = (Path("/usr/share/fonts"), Path.home() / ".fonts", Path.home() / ".local/share/fonts")
    if not any(folder.rglob("LiberationSans-Regular.*") for folder in folders if folder.exists()):
        raise AssertionError(
            "The fonts of the pictures are missing. Debian and Ubuntu: sudo apt-get install fonts-liberation"
        )
    return True


def playwright():
    """The one Playwright of this process: a second beside it refuses to start, and fixtures of several rooms overlap.

    It is kept on Playwright's own module, since this module can be imported under two names.
    """
    from playwright import sync_api

    if not hasattr(sync_api, "started_for_tests"):
        started = sync_api.started_for_tests = sync_api.sync_playwright().start()

        def stop():
            with contextlib.suppress(Exception):  # the process ends anyway
                started.stop()

        atexit.register(stop)
    return sync_api.started_for_tests


@contextlib.contextmanager
def chromium(**options):
    """A browser of Playwright's, closed at the end."""
    path = chromium_path()
    chosen = {
        "executable_path": path,
        "args": ["--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
                 "--disable-component-update", "--disable-sync", "--font-render-hinting=none"],
    }  # fmt: skip
    browser = playwright().chromium.launch(**{**chosen, **options})
    try:
        yield browser
    finally:
        browser.close()
