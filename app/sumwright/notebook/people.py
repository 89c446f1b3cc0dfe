"""Who is there and what they may: three roles, and a password file with salted slow hashes.

The file is JSON, `{"format": "sumwright-people/1", "people": {name: {"role": ..., "password": hash or null}}}`, readable
by its owner alone. A person without a password signs in by the lab's own identity service (OAuth, OpenID Connect).
Hashes are Argon2id with a salt each (RFC 9106; the parameters are those of section 4's second recommendation).
"""

from __future__ import annotations

import getpass
import json
import os
import secrets
import tempfile
import threading
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import argon2

from sumwright.errors import NotAllowed, StoreError

from .text import InvalidNotebookFile, InvalidText, clean_line, read_json

FORMAT = "sumwright-people/1"
ROLES = ("reader", "author", "keeper")
PASSWORD_LEAST = 10  # characters
PASSWORD_MOST = 1000  # characters, so that no one makes the hash work on megabytes

# What each role may, the lower ones included. Looking and moving sliders on one's own screen needs no leave.
_MAY = {
    "reader": frozenset({"read", "export"}),
    "author": frozenset({"save", "write", "new", "import", "rename"}),
    "keeper": frozenset({"archive"}),
}
ACTIONS = frozenset().union(*_MAY.values())

# RFC 9106, section 4: time 3, 64 MiB, 4 lanes, salt 16, tag 32 bytes.
_hasher = argon2.PasswordHasher(time_cost=3, memory_cost=65536, parallelism=4, hash_len=32, salt_len=16)
_NO_SUCH = _hasher.hash(secrets.token_urlsafe(24))  # so that an unknown name takes as long as a wrong password


@dataclass(frozen=True, slots=True)
class Person:
    """Who sits in front of the sheet: the name entries are signed with, and the role."""

    name: str
    role: str

    def may(self, action: str) -> bool:
        return may(self.role, action)


def may(role: str, action: str) -> bool:
    """Whether a role permits an action; ValueError for an action nobody knows, so that no typing error lets one in."""
    if action not in ACTIONS:
        raise ValueError(f"no such action: {action}")
    rank = ROLES.index(role)
    return any(action in _MAY[lower] for lower in ROLES[: rank + 1])


def require(person: Person, action: str) -> None:
    """NotAllowed unless the person's role permits the action."""
    if not person.may(action):
        least = next(role for role in ROLES if may(role, action))
        raise NotAllowed(
            f"{person.name} is signed in as {person.role}; to {action} takes the role {least}. Nothing was changed."
        )


def local_person() -> Person:
    """Without sign-in: the operating system's user, who may everything on this machine."""
    try:
        name = getpass.getuser()
    except (OSError, KeyError):  # no such user in the password database, as in some containers
        name = f"user {os.getuid()}" if hasattr(os, "getuid") else "local"
    return Person(clean_line("The user's name", name, most=200), "keeper")


class People:
    """The password file. Read anew when it changes, so that a removed person is out at the next act."""

    def __init__(self, path: Path):
        self.path = path
        self._lock = threading.Lock()
        self._stamp: tuple[int, int, int] | None = None
        self._held: dict[str, dict[str, str | None]] = {}

    def names(self) -> list[Person]:
        """Everybody in the file, by name."""
        return [Person(name, str(held["role"])) for name, held in sorted(self._read().items())]

    def person(self, name: str) -> Person | None:
        """The person of that name, None if there is none."""
        held = self._read().get(name)
        return None if held is None else Person(name, str(held["role"]))

    def check(self, name: str, password: str) -> bool:
        """Whether the password is that person's; as slow for a name that is not there."""
        held = self._read().get(name) or {}
        known = held.get("password")
        try:
            right = _hasher.verify(known or _NO_SUCH, password[:PASSWORD_MOST])
        except (argon2.exceptions.VerificationError, argon2.exceptions.InvalidHashError):
            return False
        return right and known is not None and len(password) <= PASSWORD_MOST

    def add(self, name: str, role: str, password: str | None) -> None:
        """Add a person, or give one another role or password; without a password for OAuth only."""
        name = clean_line("The person's name", name)
        if role not in ROLES:
            raise InvalidText(f"A role is one of {', '.join(ROLES)}; it is {role!r}.")
        if password is not None and not PASSWORD_LEAST <= len(password) <= PASSWORD_MOST:
            raise InvalidText(
                f"A password has {PASSWORD_LEAST} to {PASSWORD_MOST} characters; this one has {len(password)}."
            )
        hashed = None if password is None else _hasher.hash(password)
        self._change(lambda people: people.update({name: {"role": role, "password": hashed}}))

    def set_role(self, name: str, role: str) -> None:
        """Give a person another role, the password staying as it is."""
        if role not in ROLES:
            raise InvalidText(f"A role is one of {', '.join(ROLES)}; it is {role!r}.")
        self._known(name)
        self._change(lambda people: people[name].update(role=role))

    def remove(self, name: str) -> None:
        """Take a person out; what they wrote stays signed with their name."""
        self._known(name)
        self._change(lambda people: people.pop(name))

    def _known(self, name: str) -> None:
        if name not in self._read():
            raise InvalidText(f"There is nobody named {name!r} in {self.path}.")

    def _read(self) -> dict[str, dict[str, str | None]]:
        with self._lock:
            try:
                found = self.path.stat()
            except FileNotFoundError:
                return {}
            except OSError as error:
                raise StoreError(f"The people file {self.path} cannot be read: {error.strerror}.") from error
            stamp = (found.st_mtime_ns, found.st_size, found.st_ino)
            if stamp != self._stamp:
                self._held = self._parse()
                self._stamp = stamp
            return self._held

    def _parse(self) -> dict[str, dict[str, str | None]]:
        try:
            held = read_json(f"The people file {self.path}", self.path.read_bytes())
        except (OSError, InvalidNotebookFile) as error:
            raise StoreError(f"The people file {self.path} cannot be used: {error}") from None
        people = held.get("people") if isinstance(held, dict) and held.get("format") == FORMAT else None
        if not isinstance(people, dict):
            raise StoreError(f"The people file {self.path} is not of the format {FORMAT}.")
        for name, about in people.items():
            if not isinstance(about, dict) or about.get("role") not in ROLES or about.keys() != {"role", "password"}:
                raise StoreError(f"The people file {self.path} says of {name!r} what it must not; write it anew.")
        return people

    def _change(self, change: Callable[[dict[str, dict[str, str | None]]], object]) -> None:
        people = {name: dict(held) for name, held in self._read().items()}
        change(people)
        write_private(self.path, json.dumps({"format": FORMAT, "people": people}, indent=1, ensure_ascii=False) + "\n")


def write_private(path: Path, text: str) -> None:
    """Write a file whole or not at all, readable by its owner alone."""
    try:
        path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")  # mkstemp makes it 0600
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as out:
                out.write(text)
                out.flush()
                os.fsync(out.fileno())
            Path(temporary).replace(path)
        except BaseException:
            Path(temporary).unlink(missing_ok=True)
            raise
    except OSError as error:
        raise StoreError(f"{path} cannot be written: {error.strerror}.") from error
