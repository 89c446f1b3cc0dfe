"""A headless Chromium for tests: found on the machine, or the test fails with what to install."""

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


@contextlib.contextmanager
def chromium(**options):
    """A browser of Playwright's, closed at the end."""
    from playwright.sync_api import sync_playwright

    path = chromium_path()
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(
            executable_path=path,
            args=["--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
                  "--disable-component-update", "--disable-sync", "--font-render-hinting=none"],
            **options,
        )  # fmt: skip
        try:
            yield browser
        finally:
            browser.close()
