"""Links over TCP, serial ports and RFC 2217 boxes on the real clock: the same promises as in virtual time."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from daq.devices.clock import RealClock
from daq.devices.links import Link
from daq.devices.locks import Hold, hold, place_of
from daq.devices.wire import Wire
from daq.errors import DeviceError
from simulators.telnet import COM_PORT_OPTION, IAC, SB, SE, Rfc2217Box, escaped, taken_apart
from tests.daq.devices.real import JOIN_S, KINDS, Port, on_port
from tests.daq.devices.test_links import IDENTITY, Device

WIRE = Wire(
    identity_reply=r"LANTERN,\w+,\d+", timeout_s=2.0, quiet_s=0.01, late_s=0.2
)  # late replies of these tests come after 0.05 s at most


@pytest.fixture
def clock() -> RealClock:
    return RealClock()


@pytest.fixture
def device(clock: RealClock) -> Device:
    return Device(clock)


@pytest.mark.parametrize("kind", KINDS)
class TestRealLink:
    @pytest.fixture
    def port(self, kind: str, device: Device, tmp_path: Path) -> Iterator[Port]:
        with on_port(kind, device, tmp_path) as port:
            yield port

    @pytest.fixture
    def link(self, clock: RealClock, port: Port) -> Iterator[Link]:
        with Link(clock, port.address, WIRE, "counter") as link:
            yield link

    def test_it_is_open_once_the_identity_has_come(self, link: Link) -> None:
        assert (link.identity, link.stale, link.resyncs) == (IDENTITY, 0, 0)

    def test_every_question_has_its_own_reply(self, link: Link) -> None:
        assert [link.ask("N?", r"\d+")[0] for _ in range(20)] == [str(number) for number in range(1, 21)]

    def test_a_long_reply_comes_whole(self, link: Link) -> None:
        with pytest.raises(DeviceError, match=r"b'x+'"):
            link.ask("LONG?", ".*")

        assert link.ask("N?", r"\d+")[0] == "1"

    @pytest.mark.parametrize(("fault", "failure"), [("silent", "timeout"), ("garbage", "garbage")])
    def test_a_spoilt_reply_fails_loudly_and_the_next_is_right(
        self, link: Link, device: Device, fault: str, failure: str
    ) -> None:
        device.faults = {device.lines + 1: (fault, 0.0)}

        with pytest.raises(DeviceError) as caught:
            link.ask("ARM", "ok", timeout_s=0.2)

        assert caught.value.kind == failure
        assert link.ask("N?", r"\d+")[0] == "1"

    def test_a_late_reply_is_nobody_elses(self, link: Link, device: Device) -> None:
        device.faults = {device.lines + 1: ("late", 0.05)}
        with pytest.raises(DeviceError):
            link.ask("BUSY?", "[01]", timeout_s=0.01)

        assert link.ask("N?", r"\d+")[0] == "1"
        assert link.stale == 1

    def test_two_threads_get_replies_of_their_own(self, link: Link) -> None:
        patterns, wrong = {"N?": r"\d+", "ARM": "ok"}, list[str]()

        def ask(text: str) -> None:
            for _ in range(50):
                try:
                    link.ask(text, patterns[text])
                except DeviceError as error:
                    wrong.append(str(error))

        threads = [threading.Thread(target=ask, args=(text,), daemon=True) for text in patterns]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join(JOIN_S)

        assert wrong == []

    def test_closing_from_another_thread_wakes_the_reader(
        self, link: Link, device: Device, kind: str
    ) -> None:
        """Over VISA it wakes at its deadline only."""
        patience_s = 1.0 if kind == "hislip" else JOIN_S
        device.faults = {device.lines + 1: ("silent", 0.0)}
        kinds, began_s = list[str](), time.monotonic()

        def ask() -> None:
            try:
                link.ask("N?", r"\d+", timeout_s=patience_s)
            except DeviceError as error:
                kinds.append(error.kind)

        reader = threading.Thread(target=ask, daemon=True)
        reader.start()
        while not device.asked:
            assert time.monotonic() < began_s + JOIN_S
        link.close()
        reader.join(JOIN_S)

        assert kinds == ["lost"]
        assert time.monotonic() < began_s + JOIN_S / 2

    def test_a_second_client_is_refused_with_the_holder_named(self, link: Link, clock: RealClock) -> None:
        with pytest.raises(DeviceError, match="in use by this program itself") as refusal:
            Link(clock, link._address, WIRE, "spare").open()

        assert refusal.value.kind == "refused"
        assert link.ask("N?", r"\d+")[0] == "1"

    def test_the_address_is_free_again_when_the_link_is_closed(self, link: Link, clock: RealClock) -> None:
        link.close()

        with Link(clock, link._address, WIRE, "spare") as spare:
            assert spare.ask("N?", r"\d+")[0] == "1"


@pytest.mark.parametrize("kind", ["tcp", "socket", "rfc2217", "hislip", "vxi11"])
def test_a_device_that_goes_away_is_a_lost_link_until_it_is_back(
    kind: str, clock: RealClock, device: Device, tmp_path: Path
) -> None:
    with on_port(kind, device, tmp_path) as port, Link(clock, port.address, WIRE, "counter") as link:
        port.close()
        failures = list[str]()
        while "lost" not in failures:
            try:
                link.ask("N?", r"\d+", timeout_s=0.05)
            except DeviceError as error:
                failures.append(error.kind)
        port.open()
        link.recover()

        assert int(link.ask("N?", r"\d+")[0]) >= 1


def test_a_serial_port_that_is_not_there_is_a_lost_link(clock: RealClock, tmp_path: Path) -> None:
    with pytest.raises(DeviceError, match="nobody answers") as lost:
        Link(clock, f"serial:{tmp_path / 'nowhere'}", WIRE, "counter").open()

    assert lost.value.kind == "lost"


def test_line_settings_reach_the_port(clock: RealClock, device: Device, tmp_path: Path) -> None:
    with on_port("serial", device, tmp_path) as port:
        address = f"{port.address}?baud=115200&bits=7&parity=E&stop=2"
        with Link(clock, address, WIRE, "counter") as link:
            settings = link._lines._connection._port.get_settings()  # type: ignore[union-attr]

    assert (settings["baudrate"], settings["bytesize"]) == (115200, 7)
    assert (settings["parity"], settings["stopbits"]) == ("E", 2)


HOLDER = """
import sys, pathlib
from daq.devices.locks import hold
hold("tcp://127.0.0.1:7801", "counter", pathlib.Path(sys.argv[1]))
print("held", flush=True)
sys.stdin.read()
"""


def test_a_lock_is_freed_by_the_death_of_its_holder_and_names_it_while_it_lives(tmp_path: Path) -> None:
    words = [sys.executable, "-c", HOLDER, str(tmp_path)]
    with subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as holder:
        assert holder.stdout is not None
        holder.stdout.readline()

        with pytest.raises(
            DeviceError, match=rf"in use by process {holder.pid} .*as device counter, since 2"
        ):
            hold("socket://localhost:7801", "spare", tmp_path)
        holder.kill()
        holder.wait()

        held = hold("tcp://127.0.0.1:7801", "spare", tmp_path)
        held.release()
        held.release()


def test_a_second_rig_that_names_a_held_address_is_refused(tmp_path: Path) -> None:
    held: Hold = hold("rfc2217://127.0.0.1:7801", "counter", tmp_path)

    with pytest.raises(DeviceError, match="mend the address in the rig file"):
        hold("tcp://127.0.0.1:7801", "spare", tmp_path)
    held.release()


def test_an_address_is_one_however_it_is_written(tmp_path: Path) -> None:
    (tmp_path / "port").symlink_to("/dev/null")

    assert place_of("tcp://localhost:7801") == place_of("rfc2217://127.0.0.1:7801")
    assert place_of(f"serial:{tmp_path / 'port'}?baud=9600") == place_of("serial:/dev/null")
    assert place_of("tcp://127.0.0.1:7801") != place_of("tcp://127.0.0.1:7802")


def test_a_byte_255_is_doubled_both_ways() -> None:
    """RFC 854 and RFC 2217: data may hold the mark of a command."""
    data = bytes(range(256))

    plain, answers, rest = taken_apart(escaped(data))

    assert (plain, answers, rest) == (data, b"", b"")


@pytest.mark.parametrize("command", [1, 2, 3, 4, 5, 12])
def test_the_box_repeats_a_line_setting_with_its_own_number(command: int) -> None:
    """RFC 2217: option 44; SET-BAUDRATE 1, SET-CONTROL 5, PURGE-DATA 12; the server's are 100 higher."""
    assert (COM_PORT_OPTION, IAC, SB, SE) == (44, 255, 250, 240)
    asked = bytes([255, 250, 44, command]) + b"\x00\x00\x25\x80" + bytes([255, 240])

    answer = Rfc2217Box(Device(RealClock())).session(lambda data: None).feed(asked)

    assert answer == bytes([255, 250, 44, command + 100]) + b"\x00\x00\x25\x80" + bytes([255, 240])


def test_telnet_may_come_in_any_pieces() -> None:
    stream = (
        b"N" + bytes([255, 251, 44]) + b"?" + bytes([255, 255]) + bytes([255, 250, 44, 1, 9, 255, 240]) + b"!"
    )
    whole = taken_apart(stream)

    plain, answers, rest = b"", b"", b""
    for place in range(len(stream)):
        more, answer, rest = taken_apart(rest + stream[place : place + 1])
        plain, answers = plain + more, answers + answer

    assert (plain, answers, rest) == whole
    assert plain == b"N?\xff!"
