"""The `sumwright` command: a table of verbs, and how every one of them ends.

Exit 0: done. Exit 2: bad input or an output that could not be written, one line on
stderr. Exit 1: a verb's own finding (`analyse --strict` when a check falls short).
"""

from __future__ import annotations

import argparse
import contextlib
import errno
import importlib
import io
import os
import sys
from typing import NamedTuple, NoReturn

from sumwright import __version__
from sumwright.errors import SumwrightError


class Verb(NamedTuple):
    """One verb; its module has `arguments(parser)` and `run(args) -> int`, and is imported when asked for."""

    name: str
    module: str
    summary: str


# A new verb is a module in sumwright/verbs and a line here.
VERBS = (
    Verb("analyse", "sumwright.verbs.analyse", "everything the design does: DC, headroom, errors, AC, noise, heat"),
    Verb("realise", "sumwright.verbs.realise", "resistors that can be bought, or are in the drawer, best set first"),
    Verb("plan", "sumwright.verbs.plan", "the bring-up run: what to apply, what to expect, between which limits"),
    Verb(
        "diagnose", "sumwright.verbs.diagnose", "fit, verdicts, suspects and the next reading, from readings of a board"
    ),
    Verb("report", "sumwright.verbs.report", "the design report: one HTML file that stands alone and prints well"),
    Verb("serve", "sumwright.verbs.serve", "the sheet in a browser, for one person or a lab"),
    Verb(
        "notebook", "sumwright.verbs.notebook", "list, verify, export, import, archive, back up and restore notebooks"
    ),
    Verb("people", "sumwright.verbs.people", "who may sign in to a server, and as what"),
)


class _Closed(io.TextIOBase):
    """Stands for a standard output that was closed before the command began."""

    def write(self, text: str) -> int:
        raise OSError(errno.EBADF, "Standard output is closed")


class _Parser(argparse.ArgumentParser):
    """Refuses in one line."""

    def error(self, message: str) -> NoReturn:
        raise SumwrightError(f"{message}; see {self.prog} --help".replace("\n", " "))


def parser() -> argparse.ArgumentParser:
    """The whole command line, for help and for completion."""
    top = _Parser(
        prog="sumwright",
        description="Design, check and bring up weighted-sum (summing amplifier) stages.",
        epilog="Exit 0: done. Exit 2: bad input, one line on stderr. Exit 1: a check falls short (with --strict).",
        allow_abbrev=False,
    )
    top.add_argument("--version", action="version", version=f"sumwright {__version__}")
    verbs = top.add_subparsers(dest="verb", metavar="VERB", required=True, parser_class=_Parser)
    for verb in VERBS:
        verbs.add_parser(verb.name, help=verb.summary, description=verb.summary, allow_abbrev=False, add_help=False)
    return top


def main(argv: list[str] | None = None) -> int:
    """Run the command; what it returns is the exit status."""
    words = sys.argv[1:] if argv is None else argv
    if sys.stdout is None:
        sys.stdout = _Closed()
    # Tables carry true minus and ohm signs; a terminal that cannot show one gets a question mark, not a crash.
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")
    try:
        status = _run(list(words))
        sys.stdout.flush()
        return status
    except SumwrightError as problem:
        return _refuse(str(problem))
    except BrokenPipeError:
        # The reader has had enough (a pager, head): that is no fault to speak of. The status still tells.
        # Python flushes once more at exit; give it somewhere to go.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 2
    except OSError as problem:
        return _refuse(f"{problem.strerror or problem}.")
    except KeyboardInterrupt:
        _refuse("Stopped.")
        return 130


def _run(words: list[str]) -> int:
    top = parser()
    chosen = next((verb for verb in VERBS if words and verb.name == words[0]), None)
    if chosen is None:
        top.parse_args(words)  # help, version, or an unknown verb
        raise SumwrightError("A verb is wanted; see sumwright --help")
    module = importlib.import_module(chosen.module)
    own = _Parser(prog=f"sumwright {chosen.name}", description=chosen.summary, allow_abbrev=False)
    module.arguments(own)
    return module.run(own.parse_args(words[1:])) or 0


def _refuse(sentence: str) -> int:
    line = " ".join(sentence.split())
    # stderr itself may be closed; the exit status still tells.
    with contextlib.suppress(OSError, ValueError):
        if sys.stderr is not None:  # print would take standard output instead
            print(f"sumwright: {line}", file=sys.stderr, flush=True)
    return 2


if __name__ == "__main__":
    sys.exit(main())
