from __future__ import annotations

import socket
from collections.abc import Iterator

import pytest
from aiosmtpd.controller import Controller

from daq.errors import DescriptionError
from daq.service.mail import Mail, post, send_what_waits, settings_of
from daq.storage.lab_book import select


class Post:
    """A mail server that keeps what it gets."""

    def __init__(self) -> None:
        self.got: list[str] = []

    async def handle_DATA(self, server, session, envelope):  # noqa: N802 - the library's name
        self.got.append(envelope.content.decode())
        return "250 kept"


@pytest.fixture
def server() -> Iterator[Controller]:
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    controller = Controller(Post(), hostname="127.0.0.1", port=port)
    controller.start()
    yield controller
    controller.stop()


def mail_of(controller: Controller) -> Mail:
    to = ("watch@lab.example",)
    return Mail(host="127.0.0.1", port=controller.port, sender="bench@lab.example", to=to, tls=False)


def test_a_message_is_sent_once(tmp_path, server):
    post(tmp_path, "start", "lantern: complete", "Booking 1: complete.")

    assert send_what_waits(tmp_path, mail_of(server)) == 1
    assert send_what_waits(tmp_path, mail_of(server)) == 0

    (message,) = server.handler.got
    assert "Subject: lantern: complete" in message
    assert "Booking 1: complete." in message


def test_a_dead_server_loses_nothing(tmp_path, server):
    dead = Mail(host="127.0.0.1", port=1, sender="a@lab.example", to=("b@lab.example",), tls=False)
    post(tmp_path, "start", "first", "one")
    post(tmp_path, "start", "second", "two")

    assert send_what_waits(tmp_path, dead) == 0
    assert "refused" in select(tmp_path, "messages")[0]["error"].lower()

    assert send_what_waits(tmp_path, mail_of(server)) == 2
    assert "Subject: first" in server.handler.got[0]
    assert "Subject: second" in server.handler.got[1]


def test_without_mail_settings_messages_wait(tmp_path):
    post(tmp_path, "start", "first", "one")

    assert send_what_waits(tmp_path, settings_of(tmp_path).mail) == 0
    assert select(tmp_path, "messages")[0]["sent_utc"] is None


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[mail]\nhost = 'a'\nsender = 'b'\nto = ['c']\nprt = 25\n", "Did you mean 'port'"),
        ("[mail]\nhost = 'a'\nsender = 'b'\nto = ['c']\npassword = 'x'\n", "password_variable"),
        ("[mail\n", "cannot be read"),
    ],
)
def test_settings_that_cannot_be_read_are_sentences_and_no_password_stands_in_a_file(tmp_path, text, words):
    (tmp_path / "lab.toml").write_text(text)

    with pytest.raises(DescriptionError, match=words):
        settings_of(tmp_path)
