"""`python -m dashboard LAB`: serve the live page of a lab until told to end."""

from __future__ import annotations

import argparse
import logging
import os
import signal
import socket
import sys
import threading
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path

from daq.errors import DaqError, DescriptionError, StorageError
from daq.storage.lab import runs
from daq.storage.people import people
from dashboard.access import LONGEST_BODY
from dashboard.senders import is_loopback

# What the proxy says of a request is believed only from this computer.
PROXY = {
    "trusted_proxy": "127.0.0.1",
    "trusted_proxy_count": 1,
    "trusted_proxy_headers": {"x-forwarded-for", "x-forwarded-host", "x-forwarded-proto"},
    "clear_untrusted_proxy_headers": True,
}


def main(argv: Sequence[str] | None = None) -> int:
    """Return the exit status: 0 told to end, 1 port taken, 2 nobody can log in, 4 no such lab or run."""
    asked = _parser().parse_args(argv)
    try:
        _check(asked)
        listening = _listen(asked.host, asked.port)
    except DaqError as error:
        sys.stderr.write(f"{error}\n")
        return error.exit_status
    with listening:
        return _serve(listening, asked)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m dashboard", description="Serve the live page of a lab.")
    parser.add_argument("lab", type=Path, metavar="LAB", help="folder that holds the runs")
    parser.add_argument("--host", default="127.0.0.1", help="address to listen on (this computer alone)")
    parser.add_argument("--port", type=int, default=0, help="port to listen on; 0 takes a free one")
    parser.add_argument(
        "--name", action="append", default=[], help="a name by which others call this computer (repeatable)"
    )
    parser.add_argument(
        "--behind-proxy", action="store_true", help="a TLS proxy on this computer passes requests on"
    )
    parser.add_argument(
        "--until-eof", action="store_true", help="end when standard input ends, with whoever started it"
    )
    parser.add_argument("--run", metavar="NAME", help="show this run; without it, always the newest")
    return parser


def _check(asked: argparse.Namespace) -> None:
    lab, run = asked.lab, asked.run
    if not lab.is_dir():
        raise StorageError(
            "there is no such lab folder", where=str(lab), remedy="Give the folder that holds runs"
        )
    if _is_reached_from_afar(asked) and not people(lab):
        what = f"{asked.host}: refusing to be reached from other computers while nobody can log in."
        first = f"tercet people {lab} add NAME --role operator"
        raise DescriptionError((f"{what} Let somebody in first: {first}",))
    if run is not None and run not in {folder.name for folder in runs(lab)}:
        raise StorageError(
            f"there is no run {run!r}", where=str(lab), remedy="Give the name of a folder in runs"
        )


def _is_reached_from_afar(asked: argparse.Namespace) -> bool:
    return asked.behind_proxy or not is_loopback(asked.host)


def _listen(host: str, port: int) -> socket.socket:
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    try:
        return socket.create_server((host, port), family=family)
    except (OSError, OverflowError) as error:
        raise DaqError(
            f"cannot listen ({error})",
            where=f"{host}:{port}",
            remedy="Choose another --port, or 0 for a free one",
        ) from error


def _serve(listening: socket.socket, asked: argparse.Namespace) -> int:
    from waitress.server import create_server

    from dashboard.app import build

    logging.getLogger("waitress").setLevel(logging.ERROR)
    afar = _is_reached_from_afar(asked)
    names = frozenset(name.lower() for name in asked.name) if afar else None
    server = create_server(
        build(asked.lab, asked.run, names, closed=afar).server,
        sockets=[listening],
        ident=None,
        max_request_body_size=LONGEST_BODY,
        **(PROXY if asked.behind_proxy else {}),
    )
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    host, port = listening.getsockname()[:2]
    with suppress(KeyboardInterrupt):
        _say_where(host, port, plain=afar and not asked.behind_proxy)
        if asked.until_eof:
            threading.Thread(target=_end_with_the_other, daemon=True).start()
        server.run()  # waitress ends it on KeyboardInterrupt
    return 0


def _end_with_the_other() -> None:
    """End when whoever started the page is gone, also when it was killed."""
    sys.stdin.read()
    os.kill(os.getpid(), signal.SIGTERM)


def _say_where(host: str, port: int, plain: bool) -> None:
    sys.stdout.write(f"page: http://{f'[{host}]' if ':' in host else host}:{port}/\n")
    sys.stdout.flush()
    if plain:
        sys.stderr.write("Passwords cross the network readable by others: put a TLS proxy in front.\n")


if __name__ == "__main__":
    sys.exit(main())
