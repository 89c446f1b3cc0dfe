"""JSON that keeps what the usual reader throws away: keys that stand twice, and numbers past the end.

The standard module lets the last of two equal keys win and turns 1e400 into
infinity. Here a doubled key is remembered on its object and what is not finite
stays recognisable, so that the reader above can name the path of the culprit.
"""

from __future__ import annotations

import json
import math
from typing import Any

from sumwright.errors import SumwrightError, shown

MOST_DEPTH = 32


class Object(dict):
    """A JSON object; `twice` lists keys that stand more than once in it."""

    twice: tuple[str, ...] = ()


def _object(pairs: list[tuple[str, Any]]) -> Object:
    result = Object(pairs)
    if len(result) < len(pairs):
        seen: set[str] = set()
        result.twice = tuple(key for key, _ in pairs if key in seen or seen.add(key))  # type: ignore[func-returns-value]
    return result


def _whole(digits: str) -> int | float:
    # Converting thousands of digits takes quadratic time and Python refuses it; as a float it is infinite anyway.
    return int(digits) if len(digits) < 400 else math.copysign(math.inf, -1 if digits[0] == "-" else 1)


def load(text: str, error: type[SumwrightError]) -> Any:
    """The value of a JSON text; NaN and Infinity come through as such floats.

    Raises
    ------
    error
        If it is not JSON, or nested deeper than 32; the sentence says where.
    """
    _refuse_depth(text, error)
    try:
        return json.loads(text, object_pairs_hook=_object, parse_int=_whole)
    except json.JSONDecodeError as problem:
        if not text.strip():
            raise error("The text is empty; a JSON object is wanted.") from None
        # A text that breaks off in mid-string reaches the end too: a line end inside one is another error.
        if problem.pos >= len(text.rstrip()) or problem.msg.startswith("Unterminated"):
            raise error(
                f"The JSON text is cut short: it ends with what begins at line {problem.lineno} still open."
            ) from None
        found = shown(text[problem.pos : problem.pos + 12])
        raise error(
            f"The JSON text cannot be read at line {problem.lineno}, column {problem.colno}, at {found}: {problem.msg}."
        ) from None


def _refuse_depth(text: str, error: type[SumwrightError]) -> None:
    """A bomb of brackets must not reach the recursive reader."""
    if deeper_than(text, MOST_DEPTH):
        raise error(f"The JSON text is nested deeper than {MOST_DEPTH}; a design needs 5.")


def deeper_than(text: str, most: int) -> bool:
    """Whether brackets outside strings nest deeper than `most`; reads the text once, without recursion."""
    depth, inside, escaped = 0, False, False
    for character in text:
        if inside:
            if escaped:
                escaped = False
            elif character == "\\":
                escaped = True
            elif character == '"':
                inside = False
        elif character == '"':
            inside = True
        elif character in "[{":
            depth += 1
            if depth > most:
                return True
        elif character in "]}":
            depth -= 1
    return False
