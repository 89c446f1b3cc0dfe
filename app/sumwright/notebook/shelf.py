"""The one store of this process, opened when it is first asked for and again after it could not be."""

from __future__ import annotations

import threading

from .settings import settings
from .store import Store

_lock = threading.Lock()
_held: list[Store] = []


def the_store() -> Store:
    """The store that the settings name.

    Raises
    ------
    StoreError
        If it cannot be opened; the next call tries again.
    """
    with _lock:
        if not _held:
            _held.append(Store(settings().store_url))
        return _held[0]


def put_back() -> None:
    """Close the store; the next call of `the_store` opens it anew."""
    with _lock:
        while _held:
            _held.pop().close()
