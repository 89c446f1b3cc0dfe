"""What the server writes down: when, where, what happened; never what a design, a note or a password holds.

Libraries put messages from browsers into their log lines and values into their exceptions. From them only the fixed
part of a line is kept, and of an exception its type and where it came from.
"""

from __future__ import annotations

import json
import logging
import re
import sys
import traceback
from datetime import UTC, datetime
from typing import Any

# Loggers whose lines carry what a browser sent.
_CARRIERS = ("bokeh.server.protocol_handler", "bokeh.server.views.ws", "bokeh.server.session", "bokeh.document")
_OURS = "sumwright"
_SECRETS = re.compile(r"(?i)\b(token|bokeh-session-id|code|state|access_token|id_token|password)=[^&\s]+")
_PASSWORD_IN_URL = re.compile(r"(\w+://[^:/@\s]+):[^@\s]+@")


class Formatter(logging.Formatter):
    """One line an event; as JSON, or as text for a person at a terminal."""

    def __init__(self, kind: str = "text"):
        super().__init__()
        self._kind = kind

    def format(self, record: logging.LogRecord) -> str:
        at = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
        event: dict[str, Any] = {
            "at": at,
            "level": record.levelname.lower(),
            "logger": record.name,
            "event": _event(record),
        }
        if record.process:
            event["process"] = record.process
        if record.exc_info and record.exc_info[0] is not None:
            event["exception"] = record.exc_info[0].__name__
            event["where"] = [
                f"{frame.filename.rsplit('/', 2)[-1]}:{frame.lineno} {frame.name}"
                for frame in traceback.extract_tb(record.exc_info[2])[-8:]
            ]
        if self._kind == "json":
            return json.dumps(event, ensure_ascii=True)
        line = f"{at} {event['level']:7} {record.name}: {event['event']}"
        if "exception" in event:
            line += f" [{event['exception']} at {' < '.join(reversed(event['where']))}]"
        return line.translate({ord(c): repr(c)[1:-1] for c in map(chr, range(32))})


def _event(record: logging.LogRecord) -> str:
    if record.name.startswith(_CARRIERS):
        text = str(record.msg)
        return text.split("%r", 1)[0].strip(" :\n") if "%r" in text else " ".join(text.split())[:200]
    if record.name.startswith(_OURS) or record.levelno < logging.ERROR or not record.exc_info:
        text = " ".join(record.getMessage().split())
    else:  # a library's report of an exception: its message may quote values
        text = " ".join(str(record.msg).split())
    return _PASSWORD_IN_URL.sub(r"\1:***@", _SECRETS.sub(r"\1=***", text))[:500]


def set_up(kind: str = "text", level: str = "info") -> None:
    """Send every log line of the process to standard error in our form."""
    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(Formatter(kind))
    root = logging.getLogger()
    root.handlers[:] = [handler]
    root.setLevel(level.upper())
    for name in ("bokeh", "panel", "tornado", "tornado.access", "tornado.application", "tornado.general", "sumwright"):
        logger = logging.getLogger(name)
        logger.handlers.clear()
        logger.propagate = True
        logger.setLevel(logging.NOTSET)
    logging.getLogger("sqlalchemy").setLevel(logging.WARNING)
    if level != "debug":
        for name in ("bokeh.server.views.ws", "bokeh.server.tornado", "tornado.access", "asyncio"):
            logging.getLogger(name).setLevel(logging.WARNING)
