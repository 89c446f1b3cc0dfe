"""Every deliberate error: one sentence, fit to show a person.

A sentence names the thing, the value it holds and what is allowed. The page and
the command catch `SumwrightError` and show the sentence; nothing below them does.
"""

from __future__ import annotations

import unicodedata


class SumwrightError(Exception):
    """Base of every error this project raises on purpose."""


class InvalidQuantity(SumwrightError, ValueError):
    """A number, or a text standing for one, is outside what is allowed."""


class InvalidDesign(SumwrightError, ValueError):
    """A design does not describe a stage; `key` is the path of the culprit, e.g. `signals[2].weight`."""

    def __init__(self, message, key=""):
        super().__init__(message)
        self.key = key


class CannotRealise(SumwrightError, ValueError):
    """An arrangement cannot make the wanted weights; `able` lists those that can."""

    def __init__(self, message, able=()):
        super().__init__(message)
        self.able = tuple(able)


class InvalidReadings(SumwrightError, ValueError):
    """A readings, drawer or capture file cannot be used; the sentence names the line."""


class StoreError(SumwrightError, OSError):
    """The notebook store cannot be read or written."""


class Conflict(SumwrightError, RuntimeError):
    """Somebody else saved the same sheet in between."""


class NotAllowed(SumwrightError, PermissionError):
    """The signed-in person's role does not permit this."""


def shown(value: object, most: int = 48) -> str:
    """How an error quotes what it found: one line, bounded, with nothing invisible in it.

    Texts come in quotes with control and direction characters written out, long ones
    are cut, and containers are described rather than printed, so that a hostile file
    cannot write over the terminal or fill it.
    """
    if value is None:
        return "null"
    if value is True or value is False:
        return "true" if value else "false"
    if isinstance(value, str):
        text = value if len(value) <= most else value[: most - 1] + "…"
        return '"' + "".join(_visible(c) for c in text) + '"'
    if isinstance(value, bool | int | float):
        try:
            text = repr(value)
        except ValueError:  # an int of more digits than Python prints
            return "a whole number of thousands of digits"
        text = text.removesuffix(".0")
        return text if len(text) <= most else text[: most - 1] + "…"
    if isinstance(value, dict):
        return f"an object of {len(value)} keys" if len(value) != 1 else "an object of 1 key"
    if isinstance(value, list | tuple):
        return f"a list of {len(value)}"
    return f"a {type(value).__name__}"


def _visible(character: str) -> str:
    if character == " " or unicodedata.category(character)[0] not in "CZ":
        return character
    return f"\\u{ord(character):04x}"
