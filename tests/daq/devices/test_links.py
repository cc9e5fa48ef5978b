"""Links: every reply belongs to its command, or the command fails loudly."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
import pytest

from daq.devices.clock import RealClock
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.ports import Clock
from simulators.clock import VirtualClock
from simulators.hosts import Host, Listener, Send, Session, run_real, serve

S = 1_000_000_000
ADDRESS = "tcp://127.0.0.1:7802"
IDENTITY = "LANTERN,COUNTER,1"
WIRE = Wire(identity="*IDN?", identity_reply=r"LANTERN,\w+,\d+")
JOIN_S = 30.0

Fault = tuple[str, float]


@dataclass
class Device:
    """Counts the questions it is asked; `faults` spoil the reply to the n-th line, from 1."""

    clock: Clock
    faults: Mapping[int, Fault] = field(default_factory=dict)
    identity: str = IDENTITY
    lines: int = 0
    asked: list[int] = field(default_factory=list)
    fed: list[bytes] = field(default_factory=list)
    boxed: bool = False  # late replies go to the newest connection
    sends: list[Send] = field(default_factory=list)

    def session(self, send: Send) -> Session:
        self.sends.append(send)
        return DeviceSession(self, send)

    def reply(self, line: bytes) -> bytes:
        """`N?` gives a number of its own to every question, so that no reply can pass for another."""
        if line == b"N?":
            self.asked.append(len(self.asked) + 1)
            return b"%d\n" % self.asked[-1]
        replies = {b"BUSY?": b"0\n", b"ARM": b"ok\n", b"LONG?": b"x" * 300 + b"\n", b"ENDLESS?": b"x" * 300}
        return self.identity.encode() + b"\n" if line == b"*IDN?" else replies.get(line, b"")


class DeviceSession:
    def __init__(self, device: Device, send: Send) -> None:
        self._device, self._send, self._rest = device, send, b""

    def feed(self, data: bytes) -> bytes:
        self._device.fed.append(data)
        *lines, self._rest = (self._rest + data).split(b"\n")
        return b"".join(self._answer(line) for line in lines)

    def _answer(self, line: bytes) -> bytes:
        self._device.lines += 1
        kind, seconds = self._device.faults.get(self._device.lines, ("none", 0.0))
        reply = self._device.reply(line)
        if kind == "late":
            clock = self._device.clock
            clock.call_at(clock.now_ns() + round(seconds * S), lambda: self._send_late(reply))
        spoilt = {"silent": b"", "late": b"", "half": reply[:-2], "garbage": b"\xff?\n", "doubled": reply * 2}
        return spoilt.get(kind, reply)

    def _send_late(self, reply: bytes) -> None:
        send = self._device.sends[-1] if self._device.boxed else self._send
        send(reply)


class BlindLink(Link):
    """A link that does not look before a command: it resynchronises only after an upset."""

    def _step_in(self, urgent: int) -> None:
        if self._in_step_at != urgent:
            self._resync(b"", urgent)


@pytest.mark.parametrize("transport", ["direct", "tcp"])
class TestLink:
    @pytest.fixture
    def clock(self) -> VirtualClock:
        return VirtualClock(0)

    @pytest.fixture
    def device(self, clock: VirtualClock) -> Device:
        return Device(clock)

    @pytest.fixture
    def host(self, clock: VirtualClock, device: Device, transport: str) -> Iterator[Host]:
        with serve(clock, ADDRESS, device, transport) as host:
            yield host

    @pytest.fixture
    def link(self, clock: VirtualClock, host: Host) -> Iterator[Link]:
        with Link(clock, ADDRESS, WIRE, "counter") as link:
            yield link

    def spoil(self, device: Device, *faults: Fault) -> None:
        """Spoil the replies to the next lines."""
        device.faults = {device.lines + 1 + place: fault for place, fault in enumerate(faults)}

    def test_it_is_open_once_the_identity_has_come(self, link: Link) -> None:
        assert (link.identity, link.stale, link.resyncs) == (IDENTITY, 0, 0)

    def test_a_command_is_one_write_with_its_end(self, link: Link, device: Device) -> None:
        link.ask("N?", r"\d+")
        link.tell("HUSH")

        assert device.fed == [b"*IDN?\n", b"N?\n", b"HUSH\n"]

    def test_the_match_is_handed_back(self, link: Link) -> None:
        match = link.ask("*IDN?", r"(?P<maker>\w+),(?P<kind>\w+),\d+")

        assert match["kind"] == "COUNTER"

    def test_a_reply_is_matched_whole(self, link: Link) -> None:
        with pytest.raises(DeviceError, match=r"'ok' in reply to 'ARM'") as caught:
            link.ask("ARM", "o")

        assert caught.value.kind == "garbage"

    @pytest.mark.parametrize(
        ("fault", "kind", "what"),
        [
            (("silent", 0.0), "timeout", "nothing came in reply to 'ARM'"),
            (("half", 0.0), "timeout", "only b'o' came in reply to 'ARM'"),
            (("late", 0.6), "timeout", "nothing came in reply to 'ARM'"),
            (("garbage", 0.0), "garbage", r"b'\\xff\?' in reply to 'ARM'"),
        ],
    )
    def test_a_spoilt_reply_fails_loudly_and_the_next_is_right(
        self, link: Link, device: Device, fault: Fault, kind: str, what: str
    ) -> None:
        self.spoil(device, fault)

        with pytest.raises(DeviceError, match=what) as caught:
            link.ask("ARM", "ok")

        assert (caught.value.kind, caught.value.where) == (kind, f"counter on {ADDRESS}")
        assert caught.value.remedy
        assert link.ask("N?", r"\d+")[0] == "1"
        assert link.resyncs == 1

    def test_silence_lasts_as_long_as_it_was_told(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        began_ns = clock.now_ns()
        self.spoil(device, ("silent", 0.0))

        with pytest.raises(DeviceError):
            link.ask("ARM", "ok", timeout_s=7.5)

        assert clock.now_ns() - began_ns == 7.5 * S

    def test_a_slow_reply_within_its_time_is_no_upset(self, link: Link, device: Device) -> None:
        self.spoil(device, ("late", 5.0))

        match = link.ask("N?", r"\d+", timeout_s=5.0)

        assert (match[0], link.resyncs) == ("1", 0)

    @pytest.mark.parametrize("kind", ["silent", "half", "garbage", "late"])
    def test_what_is_safe_to_repeat_is_asked_again(self, link: Link, device: Device, kind: str) -> None:
        self.spoil(device, (kind, 0.6))

        match = link.ask("N?", r"\d+", safe_to_repeat=True)

        assert (match[0], device.asked) == ("2", [1, 2])

    def test_repeats_have_an_end(self, link: Link, device: Device) -> None:
        silent = ("silent", 0.0)
        none = ("none", 0.0)
        self.spoil(device, silent, none, silent, none, silent)  # between them, the identity

        with pytest.raises(DeviceError, match="nothing came"):
            link.ask("N?", r"\d+", safe_to_repeat=True)

        assert len(device.asked) == 1 + WIRE.repeats

    def test_nothing_else_is_ever_repeated(self, link: Link, device: Device) -> None:
        self.spoil(device, ("silent", 0.0))

        with pytest.raises(DeviceError):
            link.ask("N?", r"\d+")

        assert device.asked == [1]

    def test_a_doubled_reply_is_taken_once(self, link: Link, device: Device) -> None:
        self.spoil(device, ("doubled", 0.0))

        read = [link.ask("N?", r"\d+")[0] for _ in range(3)]

        assert (read, link.stale, link.resyncs) == (["1", "2", "3"], 1, 1)

    def test_two_different_replies_to_one_command_are_both_refused(self, link: Link, device: Device) -> None:
        """The first of them may be a late one, the second ours: which is which cannot be known."""
        device.identity = f"{IDENTITY}\nLANTERN,COUNTER,2"

        with pytest.raises(DeviceError, match="behind the reply"):
            link.ask("*IDN?", r"LANTERN,COUNTER,\d")

    def test_a_late_reply_is_caught_by_looking_before_the_command(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        read = self.two_questions_with_a_late_zero(link, device, clock)

        assert (read, link.stale) == ("1", 1)

    def test_without_looking_the_late_reply_would_be_taken(
        self, host: Host, device: Device, clock: VirtualClock
    ) -> None:
        wire = replace(WIRE, late_s=0.0)
        with BlindLink(clock, ADDRESS, wire, "counter") as blind:
            read = self.two_questions_with_a_late_zero(blind, device, clock)

        assert (read, device.asked) == ("0", [1])

    def two_questions_with_a_late_zero(self, link: Link, device: Device, clock: VirtualClock) -> str:
        """Return the answer to N? behind a "0" that came late, during the gate: it looks like a count."""
        none = ("none", 0.0)
        self.spoil(device, ("late", 0.8), none, none, ("late", 0.01))  # BUSY?, identity, BUSY?, N?
        link.ask("BUSY?", "[01]", safe_to_repeat=True)
        clock.sleep_until(clock.now_ns() + 9 * S)
        return link.ask("N?", r"\d+")[0]

    @pytest.mark.parametrize(("late_s", "read"), [(1.5, "1"), (0.0, "0")])
    def test_a_reply_that_is_owed_is_awaited_before_the_next_question(
        self, host: Host, device: Device, clock: VirtualClock, late_s: float, read: str
    ) -> None:
        """Or else it lands between question and answer: with nothing awaited, the "0" of the status does."""
        with Link(clock, ADDRESS, replace(WIRE, late_s=late_s), "counter") as link:
            self.spoil(device, ("late", 0.9), ("none", 0.0), ("late", 0.45))  # BUSY?, identity, N?
            with pytest.raises(DeviceError):
                link.ask("BUSY?", "[01]")

            assert link.ask("N?", r"\d+")[0] == read

    def test_what_was_owed_is_awaited_no_longer_than_it_takes(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        began_ns = clock.now_ns()
        self.spoil(device, ("late", 0.9))
        with pytest.raises(DeviceError):
            link.ask("BUSY?", "[01]")

        link.ask("N?", r"\d+")

        assert clock.now_ns() - began_ns == round((0.9 + WIRE.quiet_s) * S)

    def test_what_was_not_paid_in_its_time_is_owed_no_longer(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        self.spoil(device, ("silent", 0.0))
        link.ask("N?", r"\d+", safe_to_repeat=True)
        began_ns = clock.now_ns()
        self.spoil(device, ("garbage", 0.0))

        link.ask("N?", r"\d+", safe_to_repeat=True)

        assert clock.now_ns() - began_ns == WIRE.quiet_s * S

    def test_the_quiet_time_is_waited_whatever_is_owed(
        self, host: Host, device: Device, clock: VirtualClock
    ) -> None:
        with Link(clock, ADDRESS, replace(WIRE, late_s=0.0), "counter") as link:
            began_ns = clock.now_ns()
            self.spoil(device, ("silent", 0.0))

            link.ask("N?", r"\d+", safe_to_repeat=True)

        assert clock.now_ns() - began_ns == (WIRE.timeout_s + WIRE.quiet_s) * S

    def test_a_command_that_has_no_reply_is_owed_none(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        began_ns = clock.now_ns()
        link.tell("HUSH")
        self.spoil(device, ("garbage", 0.0))

        link.ask("N?", r"\d+", safe_to_repeat=True)

        assert clock.now_ns() - began_ns == WIRE.quiet_s * S

    def test_what_the_lost_connection_was_owed_may_come_over_the_new_one(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        """As a serial-to-LAN box may bring it."""
        device.boxed = True
        self.spoil(device, ("late", 0.9), ("none", 0.0), ("late", 0.45))  # BUSY?, identity, N?
        with pytest.raises(DeviceError):
            link.ask("BUSY?", "[01]")

        link.recover()

        assert (link.ask("N?", r"\d+")[0], link.stale) == ("1", 1)

    def test_a_late_identity_does_not_upset_the_next_command(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        self.spoil(device, ("silent", 0.0), ("late", 0.6), ("late", 0.3))
        with pytest.raises(DeviceError):
            link.ask("ARM", "ok")

        read = [link.ask("N?", r"\d+")[0] for _ in range(3)]
        clock.sleep_until(clock.now_ns() + 9 * S)

        assert read == ["1", "2", "3"]
        assert link.ask("N?", r"\d+")[0] == "4"

    def test_a_stale_reply_before_the_identity_is_dropped(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        """It comes later than any reply should, while the identity itself is awaited."""
        self.spoil(device, ("late", 1.7), ("late", 0.3))
        with pytest.raises(DeviceError):
            link.ask("N?", r"\d+")

        assert link.ask("N?", r"\d+")[0] == "2"
        assert (link.stale, link.resyncs) == (1, 1)

    def test_a_device_that_stays_silent_is_given_up(self, link: Link, device: Device) -> None:
        self.spoil(device, *[("silent", 0.0)] * 20)
        with pytest.raises(DeviceError):
            link.ask("ARM", "ok")

        with pytest.raises(DeviceError, match=r"nothing came in reply to '\*IDN\?'") as caught:
            link.ask("ARM", "ok")

        assert caught.value.kind == "timeout"

    @pytest.mark.parametrize("question", ["LONG?", "ENDLESS?"])
    def test_a_line_is_bounded_with_and_without_its_end(self, link: Link, question: str) -> None:
        with pytest.raises(DeviceError, match=r"b'x+'") as caught:
            link.ask(question, ".*")

        assert caught.value.kind == "garbage"

    def test_a_flood_is_bounded(self, link: Link, device: Device, host: Host, clock: VirtualClock) -> None:
        """A device that never falls silent is said to do so, and holds nobody."""
        self.spoil(device, ("late", 0.6), *[("late", 0.6 + 0.02 * place) for place in range(200)])
        for _ in range(150):
            link.tell("N?")

        clock.sleep_until(clock.now_ns() + 6 * S // 10)

        with pytest.raises(DeviceError, match="does not fall silent"):
            link.ask("N?", r"\d+")

    def test_another_device_at_the_address_is_refused(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        device.identity = "LANTERN,STAGE,1"

        with pytest.raises(DeviceError, match=r"is 'LANTERN,STAGE,1' and not LANTERN,COUNTER,1") as caught:
            link.recover()

        assert caught.value.kind == "garbage"
        with pytest.raises(DeviceError, match="not open"):
            link.ask("N?", r"\d+")

    def test_an_identity_of_another_make_is_refused_at_the_first_opening(
        self, host: Host, device: Device, clock: VirtualClock
    ) -> None:
        device.identity = "KETTLE 3"

        with pytest.raises(DeviceError, match=r"'KETTLE 3' and not one like LANTERN"):
            Link(clock, ADDRESS, WIRE, "counter").open()

    def test_a_device_that_dies_is_a_lost_link_until_it_is_back(self, link: Link, host: Host) -> None:
        kinds = list[str]()
        steps: list[Callable[[], object]] = [lambda: link.ask("N?", r"\d+"), link.recover, link.recover]
        host.close()
        for step in steps:
            with pytest.raises(DeviceError) as caught:
                step()
            kinds.append(caught.value.kind)

        host.open()
        link.recover()

        assert kinds == ["lost", "lost", "lost"]
        assert link.ask("N?", r"\d+")[0] == "1"

    def test_a_device_that_dies_while_it_is_asked_is_lost_at_once(
        self, link: Link, device: Device, host: Host, clock: VirtualClock
    ) -> None:
        began_ns = clock.now_ns()
        self.spoil(device, ("silent", 0.0))
        clock.call_at(began_ns + S // 5, host.close)

        with pytest.raises(DeviceError, match="closed the link") as caught:
            link.ask("N?", r"\d+", safe_to_repeat=True)

        assert (caught.value.kind, clock.now_ns() - began_ns) == ("lost", S // 5)

    def test_a_closed_link_says_so(self, link: Link) -> None:
        link.close()
        link.close()

        uses: list[Callable[[], None]] = [lambda: link.tell("HUSH"), lambda: link.send_now(b"STOP\n")]
        for use in uses:
            with pytest.raises(DeviceError, match="not open") as caught:
                use()
            assert caught.value.kind == "lost"

    def test_a_stop_goes_past_a_command_that_waits(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        """It reaches the device at once, the waiting command fails, and nothing of it is sent again."""
        self.spoil(device, ("late", 0.4))
        stopped_ns = clock.now_ns() + S // 10
        seen = list[tuple[int, bytes]]()

        def stop() -> None:
            link.send_now(b"STOP\n")
            seen.append((clock.now_ns(), device.fed[-1]))

        clock.call_at(stopped_ns, stop)
        with pytest.raises(DeviceError, match="a stop was sent") as caught:
            link.ask("N?", r"\d+", safe_to_repeat=True)

        assert (caught.value.kind, seen) == ("refused", [(stopped_ns, b"STOP\n")])
        assert device.fed[-2:] == [b"N?\n", b"STOP\n"]
        assert (link.ask("N?", r"\d+")[0], link.resyncs) == ("2", 1)

    @pytest.mark.parametrize("after_s", [0.1, 1.2])
    def test_a_command_begun_before_a_stop_is_not_sent_after_it(
        self, link: Link, device: Device, clock: VirtualClock, after_s: float
    ) -> None:
        """It was still waiting for what was owed, or for the identity, when the stop came."""
        self.spoil(device, ("silent", 0.0), ("late", 0.4))
        with pytest.raises(DeviceError):
            link.ask("N?", r"\d+")
        clock.call_at(clock.now_ns() + round(after_s * S), lambda: link.send_now(b"STOP\n"))

        with pytest.raises(DeviceError, match="a stop was sent"):
            link.ask("ARM", "ok", safe_to_repeat=True)

        assert device.fed.count(b"STOP\n") == 1
        assert b"ARM\n" not in device.fed

    def test_two_threads_get_replies_of_their_own(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        """Every reply says what was asked; some are late, so that the one waits for the other's reply."""
        self.spoil(device, *[("late", 0.1) if place % 7 == 0 else ("none", 0.0) for place in range(800)])
        wrong, done = list[str](), list[str]()
        clock_shares = {text: clock.register() for text in ("N?", "ARM")}
        patterns = {"N?": r"\d+", "ARM": "ok"}

        def ask(text: str) -> None:
            with clock_shares[text]:
                for _ in range(300):
                    try:
                        link.ask(text, patterns[text])
                        done.append(text)
                    except DeviceError as error:
                        wrong.append(str(error))

        threads = [threading.Thread(target=ask, args=(text,), daemon=True) for text in patterns]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join(JOIN_S)

        assert (wrong, sorted(done)) == ([], ["ARM"] * 300 + ["N?"] * 300)

    def test_a_thread_does_not_wait_for_ever_for_its_turn(
        self, link: Link, device: Device, clock: VirtualClock
    ) -> None:
        self.spoil(device, ("late", 100.0))
        shares, errors = [clock.register(), clock.register()], list[DeviceError]()

        def hold() -> None:
            with shares[0]:
                link.ask("N?", r"\d+", timeout_s=200.0)

        def queue() -> None:
            with shares[1]:
                clock.sleep_until(clock.now_ns() + S)
                with pytest.raises(DeviceError, match="busy") as caught:
                    link.ask("N?", r"\d+")
                errors.append(caught.value)

        threads = [threading.Thread(target=work, daemon=True) for work in (hold, queue)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join(JOIN_S)

        assert [error.kind for error in errors] == ["timeout"]

    @pytest.mark.parametrize(("identity", "opens"), [("LANTERN,COUNTER,7,1.2", True), ("0", False)])
    def test_an_identity_has_four_fields_by_default(
        self, host: Host, device: Device, clock: VirtualClock, identity: str, opens: bool
    ) -> None:
        """A number that was left over from an earlier program is none."""
        device.identity, link = identity, Link(clock, ADDRESS, Wire(), "counter")

        try:
            link.open()
        except DeviceError:
            assert not opens
        else:
            assert opens
        link.close()

    def test_the_ends_of_line_are_the_wires(self, host: Host, clock: VirtualClock, device: Device) -> None:
        device.identity = IDENTITY + "\r"
        wire = Wire(identity_reply=WIRE.identity_reply, send_end=" \n", reply_end="\r\n")

        with pytest.raises(DeviceError, match=r"reply to '\*IDN\?'"):
            Link(clock, ADDRESS, wire, "counter").open()

        assert device.fed[0] == b"*IDN? \n"


def test_nobody_at_the_address_is_a_lost_link() -> None:
    link = Link(VirtualClock(0), ADDRESS, WIRE, "counter")

    with pytest.raises(DeviceError, match="nobody answers") as caught:
        link.open()

    assert (caught.value.kind, caught.value.where) == ("lost", f"counter on {ADDRESS}")


def storm_faults(seed: int) -> dict[int, Fault]:
    random = np.random.default_rng(seed)
    kinds = ("silent", "half", "garbage", "doubled", "late", "late")
    spoilt = np.flatnonzero(random.random(20_000) < 0.05)
    return {int(line): (kinds[random.integers(6)], float(random.uniform(0.6, 1.2))) for line in spoilt}


@dataclass
class Storm:
    """What a storm of faults left: gates with the right number, loud failures, wrong numbers, the digest."""

    good: int = 0
    loud: int = 0
    wrong: int = 0
    injected: int = 0
    trace: list[tuple[int, str]] = field(default_factory=list)


def run_storm(make: Callable[..., Link], seed: int, transport: str) -> Storm:
    """Count 2000 gates of 9 s; each has a number of its own, so that no stale count can pass."""
    clock, storm = VirtualClock(0), Storm()
    device = Device(clock)
    with serve(clock, ADDRESS, device, transport), make(clock, ADDRESS, WIRE, "counter") as link:
        device.faults = storm_faults(seed)
        for _ in range(2000):
            outcome = count_a_gate(clock, link, device)
            setattr(storm, outcome, getattr(storm, outcome) + 1)
            storm.trace.append((clock.now_ns(), outcome))
        storm.injected = sum(line <= device.lines for line in device.faults)
    return storm


def count_a_gate(clock: Clock, link: Link, device: Device) -> str:
    try:
        link.ask("ARM", "ok")
        clock.sleep_until(clock.now_ns() + 9 * S)
        while link.ask("BUSY?", "[01]", safe_to_repeat=True)[0] == "1":
            clock.sleep_until(clock.now_ns() + S // 20)
        number = link.ask("N?", r"\d+", safe_to_repeat=True)[0]
    except DeviceError:
        return "loud"
    return "good" if int(number) == device.asked[-1] else "wrong"


def test_no_count_is_silently_wrong_in_a_storm_of_faults() -> None:
    storm = run_storm(Link, 1, "direct")

    assert storm.injected >= 300
    assert (storm.wrong, storm.good + storm.loud) == (0, 2000)
    assert storm.good >= 2000 - storm.injected


def test_the_same_storm_fools_a_link_that_does_not_look() -> None:
    storm = run_storm(BlindLink, 1, "direct")

    assert storm.wrong > 0


def test_a_storm_leaves_the_same_trace_on_both_transports_and_twice() -> None:
    traces = [run_storm(Link, 2, transport).trace for transport in ("direct", "direct", "tcp")]

    assert traces[0] == traces[1] == traces[2]
    assert traces[0] != run_storm(Link, 3, "direct").trace


def test_over_a_real_port_a_device_that_dies_comes_back() -> None:
    clock = RealClock()
    device, kinds, listeners = Device(clock), list[str](), [Listener("tcp://127.0.0.1:0", Device(clock))]
    address = listeners[0].address
    wire = Wire(identity_reply=WIRE.identity_reply, timeout_s=10.0, quiet_s=0.001)

    def answer(listener: Listener) -> tuple[threading.Event, threading.Thread]:
        stop = threading.Event()
        thread = threading.Thread(target=run_real, args=([listener], stop), daemon=True)
        thread.start()
        return stop, thread

    stop, thread = answer(listeners[0])
    with Link(clock, address, wire, "counter") as link:
        first = link.ask("N?", r"\d+")[0]
        stop.set()
        thread.join(JOIN_S)
        steps: list[Callable[[], object]] = [lambda: link.ask("N?", r"\d+"), link.recover]
        for step in steps:
            with pytest.raises(DeviceError) as caught:
                step()
            kinds.append(caught.value.kind)
        stop, thread = answer(Listener(address, device))
        link.recover()
        second = link.ask("N?", r"\d+")[0]
    stop.set()
    thread.join(JOIN_S)

    assert (first, kinds, second) == ("1", ["lost", "lost"], "1")
