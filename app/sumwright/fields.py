"""Checks of what a browser sent: each takes one field of a message, or refuses it."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from sumwright.errors import InvalidQuantity


def text(message: dict, key: str, most: int = 200) -> str:
    """A text of at most `most` characters."""
    value = message.get(key)
    if not isinstance(value, str):
        raise InvalidQuantity(f"{key} must be a text.")
    if len(value) > most:
        raise InvalidQuantity(f"{key} may have {most} characters; it has {len(value)}.")
    return value


def number(message: dict, key: str, low: float = -math.inf, high: float = math.inf) -> float:
    """A finite number from `low` to `high`."""
    value = message.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise InvalidQuantity(f"{key} must be a finite number.")
    if not low <= value <= high:
        raise InvalidQuantity(f"{key} must be from {low:g} to {high:g}; it is {value:g}.")
    return float(value)


def whole(message: dict, key: str, low: int, high: int) -> int:
    """A whole number from `low` to `high`."""
    value = number(message, key, low, high)
    if value != int(value):
        raise InvalidQuantity(f"{key} must be a whole number; it is {value:g}.")
    return int(value)


def one_of(message: dict, key: str, allowed: Iterable[Any]) -> Any:
    """One of the allowed values."""
    value = message.get(key)
    for each in allowed:
        if type(value) is type(each) and value == each:
            return each
    raise InvalidQuantity(f"{key} is not one of what is allowed there.")


def truth(message: dict, key: str) -> bool:
    """True or false."""
    value = message.get(key)
    if not isinstance(value, bool):
        raise InvalidQuantity(f"{key} must be true or false.")
    return value


def texts(message: dict, key: str, most: int = 64, characters: int = 200) -> tuple[str, ...]:
    """A list of at most `most` texts."""
    value = message.get(key)
    if not isinstance(value, list) or len(value) > most:
        raise InvalidQuantity(f"{key} must be a list of at most {most} texts.")
    if not all(isinstance(v, str) and len(v) <= characters for v in value):
        raise InvalidQuantity(f"{key} must hold texts of at most {characters} characters.")
    return tuple(value)
