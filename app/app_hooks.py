"""Hooks of the served directory: the server reads these once when it starts."""

from sumwright.notebook.web import guard
from sumwright.serving import send_at_once

guard()  # now: the server class must carry it before the server is made


def on_server_loaded(server_context):
    """Before the first visit."""
    send_at_once()
