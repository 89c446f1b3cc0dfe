"""What the server needs before the first visit, so that plain `panel serve app` has it."""

from __future__ import annotations

from bokeh.server.views.ws import WSHandler

_MARK = "_sumwright_nodelay"


def send_at_once() -> None:
    """Turn TCP_NODELAY on for every websocket that opens from now on.

    A Bokeh message is several small writes; without it each waits for the
    delayed acknowledgement of the one before, 40 ms a time, which a person
    dragging a slider sees. Calling it again changes nothing.
    """
    if getattr(WSHandler, _MARK, False):
        return
    plain_open = WSHandler.open

    def open(self, *args, **kwargs):
        self.set_nodelay(True)
        return plain_open(self, *args, **kwargs)

    WSHandler.open = open  # type: ignore[method-assign]
    setattr(WSHandler, _MARK, True)
