"""`sumwright people`: who may come in, and as what."""

from __future__ import annotations

import argparse
import getpass
import sys

from sumwright.errors import SumwrightError
from sumwright.notebook.people import ROLES, People
from sumwright.notebook.settings import read_settings
from sumwright.verbs.common import print_json, table


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("act", choices=("add", "list", "role", "remove"), help="what to do")
    parser.add_argument("name", nargs="?", help="whom")
    parser.add_argument("--role", choices=ROLES, help="reader: looks; author: writes too; keeper: archives too")
    parser.add_argument(
        "--no-password", action="store_true", help="for somebody who comes in by OAuth or OpenID Connect"
    )
    parser.add_argument("--json", action="store_true", help="list as JSON")


def run(args: argparse.Namespace) -> int:
    people = People(read_settings().people_file)
    if args.act == "list":
        found = people.names()
        if args.json:
            print_json([{"name": p.name, "role": p.role} for p in found])
        else:
            print(table(("name", "role"), [(p.name, p.role) for p in found], text_columns=2))
        return 0
    if not args.name:
        raise SumwrightError(f"sumwright people {args.act} wants a name.")
    if args.act == "remove":
        people.remove(args.name)
    elif args.act == "role":
        if not args.role:
            raise SumwrightError("sumwright people role wants --role reader, author or keeper.")
        people.set_role(args.name, args.role)
    else:
        people.add(args.name, args.role or "author", None if args.no_password else _password())
    return 0


def _password() -> str:
    """Typed twice at a terminal and never shown; one line of standard input otherwise."""
    if not sys.stdin.isatty():
        return sys.stdin.readline().rstrip("\n")
    first = getpass.getpass("Password: ")
    if getpass.getpass("Once more: ") != first:
        raise SumwrightError("The two passwords differ; nothing was changed.")
    return first
