"""The example designs that come with the package, all in invented scenarios."""

from __future__ import annotations

from importlib.resources import files

from sumwright.engine.stage import Design
from sumwright.errors import InvalidDesign, shown
from sumwright.files.design import read_design

# The finished design somebody sees first, then the others as they are listed.
NAMES = ("glasshouse-vent", "village-hall-bus", "tide-gauge", "lock-gate-switches")


def example_text(name: str) -> str:
    """The design file of that example.

    Raises
    ------
    InvalidDesign
        If there is no example of that name.
    """
    if name not in NAMES:
        raise InvalidDesign(f"{shown(name)} is not an example; there are {', '.join(NAMES)}.")
    return (files("sumwright") / "examples" / f"{name}.json").read_text(encoding="utf-8")


def example(name: str = NAMES[0]) -> Design:
    """A fresh copy of an example; without a name, the demo."""
    return read_design(example_text(name))


__all__ = ["NAMES", "example", "example_text"]
