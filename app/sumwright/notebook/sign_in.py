"""Coming in: the password page, the cookie, the brake on guessing, and which person a session is.

Panel's own OAuth and OpenID Connect providers take the place of the password page where the settings say so; the role
comes from the people file in both.
"""

from __future__ import annotations

import asyncio
import contextlib
import hashlib
import html
import logging
import sqlite3
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

from bokeh.server.auth_provider import AuthProvider
from tornado.web import RequestHandler

from sumwright.errors import NotAllowed, StoreError

from .people import People, Person, local_person
from .settings import Settings

PER_NAME_AND_ADDRESS = 5  # failed sign-ins of one name from one address ...
PER_ADDRESS = 20  # ... and of all names from one address ...
PER_NAME = 50  # ... and of one name from everywhere ...
WITHIN = 900.0  # s ... before the next is not even looked at
COOKIE = "user"  # the name under which Panel looks for it

_log = logging.getLogger("sumwright.sign_in")


def who_for(user: str | None, settings: Settings) -> Callable[[], Person]:
    """A function that says who the signed-in `user` is now; it raises NotAllowed once they are nobody any more."""
    if settings.sign_in == "none":
        person = local_person() if user is None else None
        if person is None:
            raise NotAllowed("There is no sign-in on this server, yet somebody is signed in; open the page anew.")
        return lambda: person
    people = People(settings.people_file)

    def who() -> Person:
        person = people.person(user) if user else None
        if person is None and user and settings.sign_in == "oauth" and settings.stranger:
            return Person(user[:200], settings.stranger)
        if person is None:
            raise NotAllowed("You are not among the people of this server any more; ask its keeper.")
        return person

    return who


class Brake:
    """Counts failed sign-ins, for all processes of a server together, and says when to look at no more of them.

    Kept in a small SQLite file of its own in the data folder, names and addresses only as hashes.
    """

    def __init__(self, path: Path):
        self.path = path

    def _connect(self) -> contextlib.closing[sqlite3.Connection]:
        self.path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        connection = sqlite3.connect(self.path, timeout=5, isolation_level=None)
        connection.execute("CREATE TABLE IF NOT EXISTS failures (what TEXT NOT NULL, at REAL NOT NULL)")
        return contextlib.closing(connection)

    def _limits(self, name: str, address: str) -> dict[str, int]:
        return {
            _hashed("both", name, address): PER_NAME_AND_ADDRESS,
            _hashed("address", address): PER_ADDRESS,
            _hashed("name", name): PER_NAME,
        }

    def wait(self, name: str, address: str) -> float:
        """Seconds until a sign-in of that name from that address is looked at; 0 for now."""
        now, longest = time.time(), 0.0
        with self._problems(), self._connect() as connection:
            for what, most in self._limits(name, address).items():
                times = [
                    row[0]
                    for row in connection.execute(
                        "SELECT at FROM failures WHERE what = ? AND at > ? ORDER BY at DESC LIMIT ?",
                        (what, now - WITHIN, most),
                    )
                ]
                if len(times) == most:
                    longest = max(longest, times[-1] + WITHIN - now)
        return longest

    def failed(self, name: str, address: str) -> None:
        """Remember a failed sign-in."""
        now = time.time()
        with self._problems(), self._connect() as connection:
            connection.execute("DELETE FROM failures WHERE at <= ?", (now - WITHIN,))
            connection.executemany(
                "INSERT INTO failures VALUES (?, ?)", [(what, now) for what in self._limits(name, address)]
            )

    def succeeded(self, name: str, address: str) -> None:
        """Forget what this name failed from this address; what the address failed with other names stays."""
        with self._problems(), self._connect() as connection:
            connection.execute("DELETE FROM failures WHERE what = ?", (_hashed("both", name, address),))

    @contextlib.contextmanager
    def _problems(self) -> Any:
        try:
            yield
        except (sqlite3.Error, OSError) as error:
            raise StoreError(f"The count of failed sign-ins {self.path} cannot be kept: {error}.") from error


def _hashed(*parts: str) -> str:
    return hashlib.sha256("\0".join(parts).encode("utf-8", "surrogatepass")).hexdigest()


_PAGE = """<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>Sumwright: sign in</title>
<meta name="viewport" content="width=device-width, initial-scale=1">
<style>
:root {{ color-scheme: light dark; --paper: #F4F6F4; --ink: #15212B; --line: #7A8890; --accent: #B3122F }}
@media (prefers-color-scheme: dark) {{ :root {{ --paper: #11191E; --ink: #E6ECEA; --line: #77878E; --accent: #FF7A85 }} }}
body {{ background: var(--paper); color: var(--ink); font: 17px/1.4 "Liberation Sans", Arial, sans-serif; margin: 12vh auto; max-width: 340px; padding: 0 18px }}
h1 {{ font: italic 25px/1.2 "Liberation Serif", "Times New Roman", serif; border-bottom: 1px solid; padding-bottom: 8px }}
label {{ display: block; margin-top: 18px }}
input {{ font: inherit; color: inherit; background: none; border: 0; border-bottom: 1.5px dotted var(--line); width: 100%; padding: 4px 0; min-height: 32px }}
button {{ font: inherit; font-weight: 600; color: inherit; background: none; border: 0; border-bottom: 1px solid; margin-top: 24px; padding: 4px 0; min-height: 32px; cursor: pointer }}
:focus-visible {{ outline: 2px solid var(--ink); outline-offset: 2px }}
[role=alert] {{ color: var(--accent) }}
</style></head><body><main><h1>Sumwright</h1>{message}
<form method="post" action="{action}">{xsrf}
<label>Name<input name="username" autocomplete="username" required maxlength="200" autofocus></label>
<label>Password<input name="password" type="password" autocomplete="current-password" required maxlength="1000"></label>
<button type="submit">Sign in</button></form></main></body></html>"""

_OUT = """<!DOCTYPE html><html lang="en"><head><meta charset="utf-8"><title>Sumwright: signed out</title></head>
<body><main><h1>Signed out</h1><p><a href="{login}">Sign in</a></p></main></body></html>"""

_hashing = ThreadPoolExecutor(2, thread_name_prefix="password")  # each takes 64 MiB: no more at a time


class SignIn(AuthProvider):
    """Bokeh's hook for people: who a request comes from, and the pages to come in and go out by."""

    def __init__(self, settings: Settings):
        self._settings = settings
        people, brake = People(settings.people_file), Brake(settings.data / "sign-ins.db")
        context = {"ours": settings, "people": people, "brake": brake}
        self._login = type("Login", (_Login,), context)
        self._logout = type("Logout", (_Logout,), context)
        self._people = people
        super().__init__()

    @property
    def get_user(self) -> Callable[[RequestHandler], str | None]:
        def get_user(handler: RequestHandler) -> str | None:
            held = handler.get_secure_cookie(COOKIE, max_age_days=self._settings.session_hours / 24)
            name = held.decode("utf-8", "replace") if held else None
            return name if name and self._people.person(name) else None

        return get_user

    @property
    def login_url(self) -> str:
        return "/login"

    @property
    def login_handler(self) -> type[RequestHandler]:
        return self._login

    @property
    def logout_url(self) -> str:
        return "/logout"

    @property
    def logout_handler(self) -> type[RequestHandler]:
        return self._logout


class _Door(RequestHandler):
    ours: Settings
    people: People
    brake: Brake

    @property
    def _prefix(self) -> str:
        return getattr(self.application, "_prefix", "")


class _Login(_Door):
    def get(self) -> None:
        self._show("")

    async def post(self) -> None:
        name = self.get_body_argument("username", "", strip=False)[:200]
        password = self.get_body_argument("password", "", strip=False)
        address = self.request.remote_ip or ""
        if (wait := self.brake.wait(name, address)) > 0:
            _log.warning("sign-in refused: too many failed ones from %s", address)
            self.set_status(429)
            self.set_header("Retry-After", str(int(wait) + 1))
            self._show(f"Too many failed sign-ins. Try again in {int(wait / 60) + 1} minutes.")
            return
        right = await asyncio.get_running_loop().run_in_executor(_hashing, self.people.check, name, password)
        if not right:
            self.brake.failed(name, address)
            _log.warning("sign-in failed from %s", address)
            self.set_status(403)
            self._show("That name and password do not belong together.")
            return
        self.brake.succeeded(name, address)
        _log.info("signed in from %s", address)
        self.set_secure_cookie(
            COOKIE, name, expires_days=self.ours.session_hours / 24, httponly=True, samesite="Lax", secure=self.ours.https,
            path=self._prefix + "/",
        )  # fmt: skip
        self.redirect(_own_path(self.get_query_argument("next", ""), self._prefix))

    def _show(self, message: str) -> None:
        query = self.request.query
        self.finish(
            _PAGE.format(
                message=f'<p role="alert">{html.escape(message)}</p>' if message else "",
                action=html.escape(f"{self._prefix}/login" + (f"?{query}" if query else "")),
                xsrf=self.xsrf_form_html() if self.settings.get("xsrf_cookies") else "",
            )
        )


class _Logout(_Door):
    def get(self) -> None:
        for name in (COOKIE, "id_token", "access_token", "refresh_token", "oauth_expiry"):
            self.clear_cookie(name, path=self._prefix + "/")
        self.finish(_OUT.format(login=html.escape(f"{self._prefix}/login")))


def _own_path(asked: str, prefix: str) -> str:
    """Where to go after signing in: only a path of this server, never another one."""
    home = f"{prefix}/"
    if not asked.startswith("/") or asked.startswith("//") or "\\" in asked or any(ord(c) <= 32 for c in asked):
        return home
    return asked
