"""Folds without a server: no event loop runs, whatever a browser test in the same process left behind."""

import asyncio

import pytest


@pytest.fixture(autouse=True)
def no_running_loop():
    """Playwright's synchronous driver leaves its loop marked as running in the thread; folds would start jobs on it."""
    left = asyncio._get_running_loop()
    asyncio._set_running_loop(None)
    yield
    asyncio._set_running_loop(left)
