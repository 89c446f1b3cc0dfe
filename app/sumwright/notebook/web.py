"""What every answer of the server carries and every request must pass, however the app is started.

`guard` changes Bokeh's server class once, before any server is made: from the hooks of the served directory for plain
`panel serve app`, and from `sumwright serve`.
"""

from __future__ import annotations

import logging
import re
import secrets
from collections.abc import Callable
from typing import Any

from bokeh.server.tornado import BokehTornado
from tornado.httputil import HTTPHeaders, HTTPServerRequest
from tornado.web import OutputTransform, RequestHandler

from sumwright.errors import SumwrightError

from .settings import Settings, settings

_log = logging.getLogger("sumwright.web")
_MARK = "_sumwright_guarded"
_SCRIPT = re.compile(rb"<script\b([^>]*)>(.*?)</script\s*>", re.IGNORECASE | re.DOTALL)
_HERE = ("127.0.0.1", "::1", "::ffff:127.0.0.1")
# Only on pages that run the sheet: its modules reach the browser as blobs, and Bokeh sets styles by style elements.
_PAGE_POLICY = (
    "default-src 'none'; script-src 'self' blob: 'nonce-{nonce}'; style-src 'self' 'unsafe-inline'; img-src 'self' data: blob:; "
    "font-src 'self' data:; connect-src 'self' blob: {sockets}; worker-src 'self' blob:; manifest-src 'self'; "
    "base-uri 'none'; form-action 'self'; frame-ancestors 'none'; object-src 'none'"
)
_OTHER_POLICY = "default-src 'none'; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"


def with_nonce(body: bytes, nonce: str) -> bytes:
    """The HTML with the nonce on each of its scripts: what is added to the page later has none and does not run."""
    mark = b' nonce="' + nonce.encode("ascii") + b'"'
    return _SCRIPT.sub(lambda m: b"<script" + mark + m.group(1) + b">" + m.group(2) + b"</script>", body)


def policy(nonce: str, host: str, https: bool) -> str:
    """The content security policy of a page (CSP 3): scripts of this server, of this answer, and the sheet's blobs."""
    name = host if re.fullmatch(r"[A-Za-z0-9.:\[\]-]{1,260}", host) else ""
    sockets = f"{'wss' if https else 'ws'}://{name}" if name else ""
    return _PAGE_POLICY.format(nonce=nonce, sockets=sockets)


class Headers(OutputTransform):
    """Adds the headers, and marks cookies, on the way out."""

    def __init__(self, request: HTTPServerRequest):
        self._request = request

    def transform_first_chunk(
        self, status_code: int, headers: HTTPHeaders, chunk: bytes, finishing: bool
    ) -> tuple[int, HTTPHeaders, bytes]:
        https = self._request.protocol == "https" or settings().https
        if headers.get("Content-Type", "").startswith("text/html"):
            nonce = secrets.token_urlsafe(18)
            chunk = with_nonce(chunk, nonce)
            if "Content-Length" in headers:
                headers["Content-Length"] = str(len(chunk))
            headers.pop("Etag", None)
            headers["Content-Security-Policy"] = policy(nonce, self._request.host, https)
            headers["Cache-Control"] = "no-store"  # it holds a session's token
        else:
            headers["Content-Security-Policy"] = _OTHER_POLICY
            if "Cache-Control" not in headers:
                headers["Cache-Control"] = "no-cache"  # ask each time: modules of two versions must not meet
        headers["X-Content-Type-Options"] = "nosniff"
        headers["X-Frame-Options"] = "DENY"
        headers["Referrer-Policy"] = "no-referrer"
        headers["Cross-Origin-Opener-Policy"] = "same-origin"
        headers["Cross-Origin-Resource-Policy"] = "same-origin"
        headers["Permissions-Policy"] = "camera=(), microphone=(), geolocation=(), usb=(), serial=()"
        headers["Server"] = "Sumwright"
        if https:
            headers["Strict-Transport-Security"] = "max-age=31536000"
        if cookies := headers.get_list("Set-Cookie"):
            del headers["Set-Cookie"]
            for cookie in cookies:
                headers.add("Set-Cookie", _marked(cookie, https))
        return status_code, headers, chunk


def _marked(cookie: str, https: bool) -> str:
    """The cookie with SameSite, and Secure where browsers come by HTTPS; whoever set it."""
    have = cookie.lower()
    if "samesite" not in have:
        cookie += "; SameSite=Lax"
    if https and "; secure" not in have:
        cookie += "; Secure"
    return cookie


class _Refused(RequestHandler):
    """To whoever comes from another machine while there is no sign-in."""

    def prepare(self) -> None:
        self.set_status(403)
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        self.finish(
            "This server has no sign-in and answers only on the machine it runs on. To open it to others, set sign_in "
            "and start it by: sumwright serve\n"
        )


class _Health(RequestHandler):
    """The process answers; asks nothing else."""

    def get(self) -> None:
        self.set_header("Cache-Control", "no-store")
        self.finish({"status": "alive"})


class _Ready(RequestHandler):
    """The process can do its work: its store answers."""

    async def get(self) -> None:
        from tornado.ioloop import IOLoop

        self.set_header("Cache-Control", "no-store")
        try:
            await IOLoop.current().run_in_executor(None, _ask_store)
        except SumwrightError:
            self.set_status(503)
            self.finish({"status": "not ready", "store": "does not answer"})
        else:
            self.finish({"status": "ready"})


def _ask_store() -> None:
    from .shelf import the_store

    the_store().ready()


def allowed(request: HTTPServerRequest, ours: Settings, signed_in: bool) -> bool:
    """Whether a request may be looked at: without sign-in only from this machine and by one of its names.

    The name is looked at because a page elsewhere can have its own name point at this machine and would then be of the
    same origin as the server.
    """
    if signed_in or ours.trust_network:
        return True
    if request.remote_ip not in _HERE and request.remote_ip != "":
        return False
    name = re.sub(r":\d+$", "", request.host or "").strip("[]").lower()
    named = {re.sub(r":\d+$", "", origin).strip("[]").lower() for origin in ours.origins}
    return name in ("localhost", "127.0.0.1", "::1") or name in named


def guard() -> None:
    """Have every Bokeh server made from now on add the headers and pass the guard. Calling it again changes nothing."""
    if getattr(BokehTornado, _MARK, False):
        return
    plain_init: Callable[..., None] = BokehTornado.__init__
    plain_find = BokehTornado.find_handler

    def init(self: BokehTornado, *args: Any, **kwargs: Any) -> None:
        ours = settings()
        patterns = kwargs["extra_patterns"] = list(kwargs.get("extra_patterns") or [])
        patterns[:0] = [(r"/health", _Health), (r"/ready", _Ready)]
        kwargs.setdefault("xsrf_cookie_kwargs", {"httponly": True, "samesite": "Lax", "secure": ours.https})
        most = ours.upload_mb * 1_000_000
        kwargs["websocket_max_message_size_bytes"] = min(kwargs.get("websocket_max_message_size_bytes") or most, most)
        plain_init(self, *args, **kwargs)
        self.add_transform(Headers)

    def find_handler(self: BokehTornado, request: HTTPServerRequest, **kwargs: Any) -> Any:
        provider = self.auth_provider
        signed_in = bool(provider.get_user or provider.get_user_async)
        if request.path in (f"{self.prefix}/health", f"{self.prefix}/ready") or allowed(request, settings(), signed_in):
            return plain_find(self, request, **kwargs)
        _log.warning("refused a request from %s", request.remote_ip)
        return self.get_handler_delegate(request, _Refused, {})

    BokehTornado.__init__ = init  # type: ignore[method-assign]
    BokehTornado.find_handler = find_handler  # type: ignore[method-assign]
    setattr(BokehTornado, _MARK, True)
