"""`sumwright serve`: the sheet for one person or a lab, with everything set right before the first visit."""

from __future__ import annotations

import argparse
import contextlib
import importlib.util
import os
import signal
from dataclasses import replace
from pathlib import Path
from typing import Any

import sumwright
from sumwright.errors import SumwrightError
from sumwright.notebook.settings import Settings, read_settings
from sumwright.verbs.common import whole

BODY_MOST = 100_000  # bytes


def arguments(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--address", metavar="ADDRESS", help="address to listen on (127.0.0.1)")
    parser.add_argument("--port", metavar="PORT", help="port to listen on (5006)")
    parser.add_argument("--processes", metavar="N", help="server processes (1)")
    parser.add_argument("--show", action="store_true", help="open the sheet in this machine's browser")
    parser.add_argument("--folder", action="store_true", help="print the folder that panel serve would take, then end")
    parser.add_argument("--check", action="store_true", help="check the settings and the store, then end")


def run(args: argparse.Namespace) -> int:
    if args.folder:
        print(app_folder())
        return 0
    ours = read_settings()
    if args.address is not None:
        ours = replace(ours, address=args.address)
    if args.port is not None:
        ours = replace(ours, port=whole(args.port, "--port", 1, 65535))
    if args.processes is not None:
        ours = replace(ours, processes=whole(args.processes, "--processes", 1, 64))
    ours.check_serving()
    if args.check:
        return _check(ours)
    return serve(ours, show=args.show)


def app_folder() -> Path:
    """The folder that is served: in a checkout `app` itself, else what the package holds under the same name."""
    package = Path(sumwright.__file__).parent
    for folder in (package.parent, package / "app"):  # in a checkout the second only links to the first
        if (folder / "main.py").is_file() and (folder / "static").is_dir():
            return folder
    raise SumwrightError(
        f"The page (main.py and static) is neither in {package.parent} nor in {package / 'app'}; install Sumwright again."
    )


def _check(ours: Settings) -> int:
    from sumwright.notebook.store import Store

    store = Store(ours.store_url)
    store.ready()
    print(
        f"Settings and store are good: {store.place}, sign-in {ours.sign_in}, http://{ours.address}:{ours.port}{ours.prefix}/"
    )
    store.close()
    return 0


def serve(ours: Settings, *, show: bool = False) -> int:
    """Serve until stopped."""
    from panel.command.serve import Serve
    from panel.config import config

    from sumwright.notebook import logs, settings, sign_in, web

    settings.use(ours)
    secret = ours.cookie_secret()
    logs.set_up(ours.log, ours.log_level)
    web.guard()
    config.cookie_secret = secret

    class Ours(Serve):
        """Panel's own way to serve, with our people at the door."""

        def customize_kwargs(self, args: argparse.Namespace, server_kwargs: dict[str, Any]) -> dict[str, Any]:
            kwargs = super().customize_kwargs(args, server_kwargs)
            kwargs.update(secret_key=secret.encode(), sign_sessions=True)
            # Nothing but a sign-in form comes as a request body; files come over the websocket.
            kwargs.setdefault("http_server_kwargs", {})["max_body_size"] = BODY_MOST
            if ours.sign_in == "password":
                kwargs["auth_provider"] = sign_in.SignIn(ours)
            return kwargs

    _refuse_unset_oauth(ours, config)
    parser = argparse.ArgumentParser(prog="sumwright serve")
    command = Ours(parser)
    folder = str(app_folder())
    words = [folder, "--address", ours.address, "--port", str(ours.port), "--num-procs", str(ours.processes)]
    words += ["--liveness", "--session-token-expiration", "300", "--enable-xsrf-cookies", "--log-level", ours.log_level]
    words += ["--cookie-path", f"{ours.prefix}/", "--oauth-expiry-days", str(ours.session_hours / 24)]
    if ours.prefix:
        words += ["--prefix", ours.prefix]
    if ours.proxy:
        words += ["--use-xheaders"]
    if show:
        words += ["--show"]
    for origin in ours.ensure_reachable_by():
        words += ["--allow-websocket-origin", origin]
    if ours.processes > 1:
        _pass_on_the_end()
    try:
        command.invoke(parser.parse_args(words))
    except ValueError as error:  # Panel's own word on its PANEL_* settings
        raise SumwrightError(str(error)) from None
    return 0


def _pass_on_the_end() -> None:
    """Have SIGTERM reach the server's processes when their parent alone is told to stop, and the parent wait for them.

    Tornado's parent only waits for its children; were it to die of the signal, they would go on serving, or be cut off
    with a sheet not yet saved where the parent is a container's first process.
    """
    children: list[int] = []
    parent, plain_fork = os.getpid(), os.fork

    def fork() -> int:
        child = plain_fork()
        if child:
            children.append(child)
        return child

    def pass_on(number: int, _frame: Any) -> None:
        if os.getpid() != parent or not children:  # nothing is served yet
            signal.signal(number, signal.SIG_DFL)
            os.kill(os.getpid(), number)
        for child in children:
            with contextlib.suppress(ProcessLookupError):
                os.kill(child, number)

    os.fork = fork
    signal.signal(signal.SIGTERM, pass_on)


def _refuse_unset_oauth(ours: Settings, config: Any) -> None:
    if ours.sign_in == "oauth" and not config.oauth_provider:
        raise SumwrightError(
            "sign_in is 'oauth' and PANEL_OAUTH_PROVIDER is not set; set Panel's PANEL_OAUTH_* variables."
        )
    if ours.sign_in == "oauth" and importlib.util.find_spec("cryptography") is None:
        raise SumwrightError(
            "sign_in is 'oauth', which needs the cryptography library: pip install 'sumwright[oauth]'."
        )
    if ours.sign_in != "oauth" and config.oauth_provider:
        raise SumwrightError(f"PANEL_OAUTH_PROVIDER is set and sign_in is {ours.sign_in!r}; set sign_in to oauth.")
