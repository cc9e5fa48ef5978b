"""A sign of life goes only while the sequencer moves on; a second machine speaks up when it stops."""

from __future__ import annotations

import threading
from collections.abc import Iterator

import pytest

from daq.service.heartbeat import GRACE_S, Pulse, send_heartbeat
from daq.service.settings import Heartbeat
from daq.service.silence import Listener, listening


class Watch:
    """A clock that is set by hand."""

    now_s = 0.0

    def __call__(self) -> float:
        return self.now_s


@pytest.fixture
def heard(monkeypatch) -> Iterator[tuple[Listener, str]]:
    monkeypatch.setenv("TERCET_TEST_TOKEN", "a word")
    listener = Listener(after_s=600.0, heard_s=0.0)
    server = listening("127.0.0.1", 0, "a word", listener, lambda: 1000.0)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield listener, f"http://127.0.0.1:{server.server_address[1]}/"
    server.shutdown()
    thread.join()
    server.server_close()


def test_a_heartbeat_is_heard(heard):
    listener, address = heard

    arrived = send_heartbeat(Heartbeat(address=address, token="${TERCET_TEST_TOKEN}"), Pulse())

    assert arrived
    assert listener.heard_s == 1000.0


def test_a_heartbeat_without_the_word_is_not_heard(heard):
    listener, address = heard

    assert not send_heartbeat(Heartbeat(address=address), Pulse())
    assert listener.heard_s == 0.0


def test_a_network_that_is_away_is_no_fault():
    assert not send_heartbeat(Heartbeat(address="http://127.0.0.1:9/"), Pulse())


def test_no_timer_vouches_for_a_sequencer_that_stands_still(heard):
    listener, address = heard
    clock = Watch()
    pulse = Pulse(clock)
    pulse.expect(60.0)

    clock.now_s = GRACE_S + 2 * 60.0 + 1.0

    assert not pulse.lives
    assert not send_heartbeat(Heartbeat(address=address, token="${TERCET_TEST_TOKEN}"), pulse)
    assert listener.heard_s == 0.0


def test_a_visit_or_a_bounded_wait_is_a_sign_of_life():
    clock = Watch()
    pulse = Pulse(clock)
    clock.now_s = 10 * GRACE_S

    pulse.beat()

    assert pulse.lives


def test_silence_is_told_once_and_its_end_once():
    listener = Listener(after_s=600.0, heard_s=0.0)

    said = [listener.look(now_s) for now_s in (599.0, 601.0, 700.0)]
    listener.hear(800.0)
    said += [listener.look(now_s) for now_s in (801.0, 802.0)]

    assert [bool(text) for text in said] == [False, True, False, True, False]
    assert "I do not know whether it is running" in said[1]
