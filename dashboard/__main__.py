"""`python -m dashboard LAB`: serve the live page of a lab until told to end."""

from __future__ import annotations

import argparse
import logging
import signal
import socket
import sys
from collections.abc import Sequence
from pathlib import Path

from daq.errors import DaqError, DescriptionError, StorageError
from daq.storage.lab import runs
from dashboard.access import LONGEST_BODY, is_loopback


def main(argv: Sequence[str] | None = None) -> int:
    """Return the exit status: 0 told to end, 1 the port is taken, 2 off loopback, 4 no such lab or run."""
    asked = _parser().parse_args(argv)
    try:
        _check(asked.lab, asked.host, asked.run)
        listening = _listen(asked.host, asked.port)
    except DaqError as error:
        sys.stderr.write(f"{error}\n")
        return error.exit_status
    with listening:
        return _serve(listening, asked.lab, asked.run)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="python -m dashboard", description="Serve the live page of a lab.")
    parser.add_argument("lab", type=Path, metavar="LAB", help="folder that holds the runs")
    parser.add_argument("--host", default="127.0.0.1", help="address to listen on (this computer alone)")
    parser.add_argument("--port", type=int, default=0, help="port to listen on; 0 takes a free one")
    parser.add_argument("--run", metavar="NAME", help="show this run; without it, always the newest")
    return parser


def _check(lab: Path, host: str, run: str | None) -> None:
    if not is_loopback(host):
        what = f"{host}: refusing to listen off this computer, because the page has no passwords yet."
        raise DescriptionError((f"{what} Use --host 127.0.0.1 and reach it through an SSH tunnel.",))
    if not lab.is_dir():
        raise StorageError(
            "there is no such lab folder", where=str(lab), remedy="Give the folder that holds runs"
        )
    if run is not None and run not in {folder.name for folder in runs(lab)}:
        raise StorageError(
            f"there is no run {run!r}", where=str(lab), remedy="Give the name of a folder in runs"
        )


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


def _serve(listening: socket.socket, lab: Path, run: str | None) -> int:
    from waitress.server import create_server

    from dashboard.app import build

    logging.getLogger("waitress").setLevel(logging.ERROR)
    server = create_server(
        build(lab, run).server, sockets=[listening], ident=None, max_request_body_size=LONGEST_BODY
    )
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    host, port = listening.getsockname()[:2]
    sys.stdout.write(f"page: http://{f'[{host}]' if ':' in host else host}:{port}/\n")
    sys.stdout.flush()
    server.run()  # waitress ends it on KeyboardInterrupt
    return 0


if __name__ == "__main__":
    sys.exit(main())
