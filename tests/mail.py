"""A mail server that keeps what it gets, on a free port of this computer."""

from __future__ import annotations

import socket
from collections.abc import Iterator
from contextlib import contextmanager

from aiosmtpd.controller import Controller


class Post:
    """Keeps every message."""

    def __init__(self) -> None:
        self.got: list[str] = []

    async def handle_DATA(self, server, session, envelope):  # noqa: N802 - the library's name
        self.got.append(envelope.content.decode())
        return "250 kept"


@contextmanager
def mail_server() -> Iterator[Controller]:
    """Run a server; `handler.got` is what it has got, `port` where it listens."""
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    controller = Controller(Post(), hostname="127.0.0.1", port=port)
    controller.start()
    try:
        yield controller
    finally:
        controller.stop()


def address_of(controller: Controller) -> str:
    """Return where to send mail, as settings of a lab write it."""
    to = "from=bench@lab.example&to=watch@lab.example&mode=insecure"
    return f"mailto://127.0.0.1:{controller.port}?{to}"
