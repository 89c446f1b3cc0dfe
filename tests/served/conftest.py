"""One server and one browser for all served tests; a page of its own for each."""

import re

import pytest
from sumwright.files.design import write_design
from sumwright.model import demo

from tests.served.serving import served, settled
from tests.support.browser import chromium


@pytest.fixture(scope="session")
def server():
    """The process and the address of a server that runs for all tests."""
    with served() as (process, url):
        yield process, url


@pytest.fixture(scope="session")
def browser():
    with chromium() as browser:
        yield browser


class Watch:
    """What a page said and asked for."""

    def __init__(self, page, origin):
        self.said, self.outside = [], []
        page.on("console", lambda m: self.said.append(m.text) if m.type in ("error", "warning") else None)
        page.on("pageerror", lambda e: self.said.append(str(e)))
        host = re.sub(r"^http", "", origin)
        page.on(
            "request",
            lambda r: (
                None
                if re.sub(r"^(http|ws)", "", r.url).startswith(host) or r.url.startswith(("data:", "blob:"))
                else self.outside.append(r.url)
            ),
        )


def _fresh(server, browser):
    context = browser.new_context(viewport={"width": 1280, "height": 720}, accept_downloads=True)
    page = context.new_page()
    page.watch = Watch(page, server[1])
    page.goto(f"{server[1]}/app")
    settled(page)
    return page


def _was_well(page):
    said, outside = list(page.watch.said), list(page.watch.outside)
    page.watch.said.clear()
    page.watch.outside.clear()
    assert said == []
    assert outside == []


@pytest.fixture
def fresh(server, browser):
    """A sheet nobody has touched; it must have said nothing wrong, and asked nobody else, when the test ends."""
    page = _fresh(server, browser)
    yield page
    page.context.close()
    _was_well(page)


@pytest.fixture(scope="module")
def _shared(server, browser):
    page = _fresh(server, browser)
    yield page
    page.context.close()


@pytest.fixture
def sheet(_shared):
    """A sheet with the demonstration on it, opened once for a module and put back before each test: much quicker."""
    page = _shared
    page.evaluate("location.hash = 'curves'; document.activeElement?.blur()")
    page.keyboard.press("Escape")
    page.evaluate(
        """text => { for (const b of document.querySelectorAll('#drawer:not([hidden]) .top .act:last-child, .foot [aria-pressed=true]')) b.click()
             for (const act of [{do: 'open', text}, {do: 'on', signal: 'north'}, {do: 'follow', follow: 'nearest'},
               {do: 'theme', theme: 'light'}, {do: 'symbols', symbols: 'IEC 60617'}]) sumwright.act(act)
             sumwright.note(null) }""",
        write_design(demo.design()),
    )
    settled(page)
    yield page
    _was_well(page)
