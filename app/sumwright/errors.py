"""Every deliberate error: one sentence, fit to show a person.

A sentence names the thing, the value it holds and what is allowed. The page and
the command catch `SumwrightError` and show the sentence; nothing below them does.
"""


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
