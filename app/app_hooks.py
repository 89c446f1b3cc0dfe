"""Hooks of the served directory: the server reads these once when it starts."""

from sumwright.serving import send_at_once


def on_server_loaded(server_context):
    """Before the first visit."""
    send_at_once()
