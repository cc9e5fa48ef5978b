"""Blocks of known length: IEEE 488.2, sect. 8.7.9; `#42048` announces 2048 bytes, `#0` an unknown number."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import pytest

from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.errors import DeviceError
from simulators.clock import VirtualClock
from simulators.hosts import Send, Session, serve

ADDRESS = "tcp://127.0.0.1:7802"


@dataclass
class Digitiser:
    """Answers DATA? with the bytes that a test sets."""

    reply: bytes = b""

    def session(self, send: Send) -> Session:
        return self

    def feed(self, data: bytes) -> bytes:
        return {b"*IDN?\n": b"LANTERN,DIGITISER,1,1\n"}.get(data, self.reply)


@pytest.fixture
def digitiser() -> Digitiser:
    return Digitiser()


@pytest.fixture(params=["direct", "tcp"])
def link(request: pytest.FixtureRequest, digitiser: Digitiser) -> Iterator[Link]:
    clock = VirtualClock(0)
    with serve(clock, ADDRESS, digitiser, request.param), Link(clock, ADDRESS, Wire(), "digitiser") as link:
        yield link


@pytest.mark.parametrize(
    ("reply", "payload"),
    [
        (b"#13\x01\x02\x03\n", b"\x01\x02\x03"),
        (b"#42048" + b"\n" * 2048 + b"\n", b"\n" * 2048),
        (b"#10\n", b""),
        (b"#6300000" + b"#0\n" * 100_000 + b"\n", b"#0\n" * 100_000),
    ],
)
def test_a_block_may_hold_anything(link: Link, digitiser: Digitiser, reply: bytes, payload: bytes) -> None:
    digitiser.reply = reply

    assert link.ask_block("DATA?", 1_000_000) == payload
    assert link.ask_block("DATA?", 1_000_000) == payload
    assert link.resyncs == 0


@pytest.mark.parametrize(
    ("reply", "kind"),
    [
        (b"#0abc\n", "garbage"),
        (b"12\n", "garbage"),
        (b"#1x\n", "garbage"),
        (b"#71000001", "garbage"),
        (b"#13\x01\x02\x03x", "garbage"),
        (b"#13\x01\x02\x03\nmore", "garbage"),
        (b"#13\x01", "timeout"),
        (b"", "timeout"),
    ],
)
def test_what_is_no_whole_block_fails_loudly(
    link: Link, digitiser: Digitiser, reply: bytes, kind: str
) -> None:
    digitiser.reply = reply

    with pytest.raises(DeviceError) as caught:
        link.ask_block("DATA?", 1_000_000)

    assert caught.value.kind == kind
    digitiser.reply = b"#12ok\n"
    assert link.ask_block("DATA?", 10) == b"ok"
    assert link.resyncs == 1
