"""`sumwright notebook`: look after the notebooks from the command line, also while they are being served."""

from __future__ import annotations

import argparse
from pathlib import Path

from sumwright.errors import SumwrightError
from sumwright.files.text import write_whole
from sumwright.notebook import bundle
from sumwright.notebook.people import local_person
from sumwright.notebook.settings import read_settings
from sumwright.notebook.store import Store
from sumwright.verbs.common import print_json, read_whole, table

ACTS = ("list", "verify", "export", "import", "archive", "unarchive", "backup", "restore")


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("act", choices=ACTS, help="what to do")
    parser.add_argument("what", nargs="?", help="a notebook's id (verify, export, archive, unarchive) or a file")
    parser.add_argument("-o", "--output", metavar="FILE", type=Path, help="file to export to")
    parser.add_argument("--json", action="store_true", help="print a JSON document instead of a table")


def run(args: argparse.Namespace) -> int:
    store = Store(read_settings().store_url)
    try:
        return _ACTS[args.act](store, args)
    finally:
        store.close()


def _list(store: Store, args: argparse.Namespace) -> int:
    found = [(n, "") for n in store.notebooks(most=10**9)] + [
        (n, "archived") for n in store.notebooks(archived=True, most=10**9)
    ]
    if args.json:
        print_json(
            [
                {"id": n.id, "title": n.title, "sheets": len(n.sheets), "entries": n.length, "changed_at": n.changed_at,
                 "changed_by": n.changed_by, "archived": bool(n.archived_at)}
                for n, _ in found
            ]
        )  # fmt: skip
    else:
        rows = [(n.id, n.title, n.changed_by, n.changed_at[:19] + "Z", note, str(n.length)) for n, note in found]
        print(table(("id", "title", "last by", "last at", "", "entries"), rows, text_columns=5))
    return 0


def _verify(store: Store, args: argparse.Namespace) -> int:
    """Exit 1 when a log was changed after it was written."""
    every = [*store.notebooks(most=10**9), *store.notebooks(archived=True, most=10**9)]
    found = [store.notebook(args.what)] if args.what else every
    flawed = [(n, flaw) for n in found for flaw in store.verify(n.id)]
    if args.json:
        print_json(
            {"notebooks": len(found), "flaws": [{"notebook": n.id, "entry": f.number, "why": f.why} for n, f in flawed]}
        )
    else:
        for n, flaw in flawed:
            print(f"{n.id}: {flaw.why}")
        print(f"{len(found)} notebooks looked through, {len(flawed)} flaws found.")
    return 1 if flawed else 0


def _export(store: Store, args: argparse.Namespace) -> int:
    key = _wanted(args, "a notebook's id")
    write_whole(args.output or Path(f"{key}.zip"), bundle.export_notebook(store, key))
    return 0


def _import(store: Store, args: argparse.Namespace) -> int:
    came = bundle.import_notebook(store, read_whole(_wanted(args, "a notebook file"), bundle.FILE_MOST))
    print(f"{came.id}  {came.title}")
    return 0


def _archive(store: Store, args: argparse.Namespace) -> int:
    store.archive(_wanted(args, "a notebook's id"), local_person().name, back=args.act == "unarchive")
    return 0


def _backup(store: Store, args: argparse.Namespace) -> int:
    write_whole(Path(_wanted(args, "a file to write")), bundle.backup(store))
    return 0


def _restore(store: Store, args: argparse.Namespace) -> int:
    done = bundle.restore(store, read_whole(_wanted(args, "a backup file"), 2**34))
    if args.json:
        print_json([{"id": r.id, "title": r.title, "what": r.what} for r in done])
    else:
        print(table(("id", "title", "what"), [(r.id, r.title, r.what) for r in done], text_columns=3))
    return 0


def _wanted(args: argparse.Namespace, what: str) -> str:
    if not args.what:
        raise SumwrightError(f"sumwright notebook {args.act} wants {what}.")
    return args.what


_ACTS = {
    "list": _list, "verify": _verify, "export": _export, "import": _import, "archive": _archive,
    "unarchive": _archive, "backup": _backup, "restore": _restore,
}  # fmt: skip
