"""SCPI: how a simulated instrument reads messages and reports its status."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from simulators.clock import VirtualClock
from simulators.counters import CAPACITY, GatedCounter
from simulators.scpi import spellings
from simulators.status import QUEUE, Event, Summary

S = 1_000_000_000


class Bench:
    """A counter that finds 1000 counts a second and reads out in 0.1 s, and one line to it."""

    def __init__(self, rate_hz: int = 1000) -> None:
        self.clock = VirtualClock(0)
        self.drawn: list[tuple[int, int]] = []
        self._rate_hz = rate_hz
        self.session = GatedCounter("counter", self._count, 0.1, self.clock).session(lambda data: None)
        self.ask("*CLS")

    def _count(self, open_ns: int, close_ns: int) -> tuple[int, ...]:
        self.drawn.append((open_ns, close_ns))
        return (self._rate_hz * (close_ns - open_ns) // S,)

    def ask(self, line: str) -> str:
        return self.session.feed(line.encode() + b"\n").decode().removesuffix("\n")

    def wait(self, seconds: float) -> None:
        self.clock.sleep_until(self.clock.now_ns() + round(seconds * S))


def test_a_divided_gate_gives_the_count_of_every_part() -> None:
    bench = Bench()
    assert bench.ask("CONF:TOT:SLIC 4;:SYST:ERR?") == '0,"No error"'
    bench.ask("CONF:TOT:TIM 2;:INIT")

    bench.wait(2.1)

    assert bench.ask("FETC?") == "1,2.000000000,0,2000,500,500,500,500"


@pytest.mark.parametrize("parts", ["-1", "2.5", "1001"])
def test_a_gate_is_divided_into_whole_parts_only(parts: str) -> None:
    assert Bench().ask(f"CONF:TOT:SLIC {parts};:SYST:ERR?") == '-222,"Data out of range"'


def test_a_gate_counts_for_its_width_then_reads_out_then_gives_its_count() -> None:
    bench = Bench()
    bench.wait(5.0)

    armed = bench.ask("CONF:TOT:TIM 2.2;:INIT;:SYST:ERR?;:TOT:NUMB?")

    assert armed == '0,"No error";1'
    assert [bench.ask("STAT:OPER:COND?"), bench.ask("FETC?")] == ["16", "BUSY"]
    bench.wait(2.2)
    assert [bench.ask("STAT:OPER:COND?"), bench.ask("FETC?")] == ["256", "BUSY"]
    bench.wait(0.1)
    assert [bench.ask("STAT:OPER:COND?"), bench.ask("FETC?")] == ["0", "1,2.200000000,0,2200"]
    assert bench.ask("FETC?") == "1,2.200000000,0,2200"
    assert bench.drawn == [(5 * S, 5 * S + 2_200_000_000)]


def test_a_gate_that_is_open_refuses_another_one_and_another_width() -> None:
    bench = Bench()
    bench.ask("INIT")

    errors = bench.ask("INIT;:CONF:TOT:TIM 3;:SYST:ERR?;ERR?;ERR?")

    assert errors == '-213,"Init ignored";-221,"Settings conflict";0,"No error"'
    assert bench.ask("CONF:TOT:TIM?") == "1.000000000"


def test_abort_and_reset_forget_the_gate() -> None:
    bench = Bench()
    for forget in ("ABOR", "*RST"):
        bench.ask(f"INIT;{forget}")
        bench.wait(5.0)

        assert bench.ask("FETC?;:SYST:ERR?") == '-230,"Data corrupt or stale"'


def test_a_full_register_says_so() -> None:
    bench = Bench(rate_hz=10_000_000)
    bench.ask("CONF:TOT:TIM 500;:INIT")
    bench.wait(500.1)

    assert bench.ask("FETC?") == f"1,500.000000000,1,{CAPACITY}"


def test_headers_have_a_short_and_a_long_form_and_optional_nodes() -> None:
    assert spellings("SYSTem:ERRor[:NEXT]?") == {
        "SYST:ERR?",
        "SYST:ERROR?",
        "SYSTEM:ERR?",
        "SYSTEM:ERROR?",
        "SYST:ERR:NEXT?",
        "SYST:ERROR:NEXT?",
        "SYSTEM:ERR:NEXT?",
        "SYSTEM:ERROR:NEXT?",
    }


@pytest.mark.parametrize(
    "message",
    ["configure:totalize:timed 2", ":CONF:TOT:TIM 2.0E0", " Conf:Totalize:TIM  +2. ", "*CLS;CONF:TOT:TIM 2;"],
)
def test_every_way_of_writing_a_setting_sets_it(message: str) -> None:
    bench = Bench()

    bench.ask(message)

    assert bench.ask("CONF:TOT:TIM?;:SYST:ERR?") == '2.000000000;0,"No error"'


def test_a_header_without_a_colon_goes_on_where_the_last_one_was() -> None:
    bench = Bench()

    assert bench.ask("STAT:OPER:COND?;*STB?;ENAB 16;ENAB?;:SYST:VERS?") == "0;16;16;1999.0"
    assert bench.ask("STAT:OPER:COND?;SYST:VERS?;:SYST:ERR?") == "0"
    assert bench.ask("SYST:ERR?") == '-113,"Undefined header"'


@pytest.mark.parametrize(
    ("message", "number", "bit"),
    [
        ("VOLT 3", -113, Event.COMMAND_ERROR),
        ("FETCH", -113, Event.COMMAND_ERROR),
        ("CONFIG:TOT:TIM 1", -113, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM", -109, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM 1,2", -108, Event.COMMAND_ERROR),
        ("INIT 1", -108, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM NAN", -104, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM INF", -104, Event.COMMAND_ERROR),
        ('CONF:TOT:TIM "1;2"', -104, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM \x00", -101, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM 1\xb5", -101, Event.COMMAND_ERROR),
        ("CONF:TOT:TIM 1E999", -222, Event.EXECUTION_ERROR),
        ("CONF:TOT:TIM 0", -222, Event.EXECUTION_ERROR),
        ("*ESE 256", -222, Event.EXECUTION_ERROR),
        ("FETC?", -230, Event.EXECUTION_ERROR),
    ],
)
def test_what_is_wrong_is_queued_raises_its_event_bit_and_has_no_reply(
    message: str, number: int, bit: Event
) -> None:
    bench = Bench()

    reply = bench.ask(message)

    assert reply == ""
    assert bench.ask("*ESR?") == str(int(bit))
    assert bench.ask("SYST:ERR?").startswith(f"{number},")
    assert bench.ask("CONF:TOT:TIM?;:STAT:OPER:COND?") == "1.000000000;0"


def test_a_command_error_ends_the_message_and_an_execution_error_does_not() -> None:
    bench = Bench()

    assert bench.ask("CONF:TOT:TIM X;:INIT") == ""
    assert bench.ask("STAT:OPER:COND?") == "0"
    assert bench.ask("*ESE 300;:STAT:OPER:COND?") == "0"


def test_errors_come_out_in_the_order_they_went_in_and_a_full_queue_says_so() -> None:
    bench = Bench()
    bench.ask("INIT 1")
    for _ in range(QUEUE):
        bench.ask("VOLT 3")

    errors = [bench.ask("SYST:ERR?") for _ in range(QUEUE + 1)]

    middle = ['-113,"Undefined header"'] * (QUEUE - 2)
    assert errors == ['-108,"Parameter not allowed"', *middle, '-350,"Queue overflow"', '0,"No error"']


def test_power_on_is_reported_once() -> None:
    counter = GatedCounter("counter", lambda open_ns, close_ns: (0,), 0.0, VirtualClock(0))
    session = counter.session(lambda data: None)

    assert session.feed(b"*ESR?;*ESR?\n") == b"128;0\n"


def test_the_status_byte_sums_up_errors_events_and_operation() -> None:
    bench = Bench()
    bench.ask("*ESE 32;*SRE 255;:STAT:OPER:ENAB 16")
    assert bench.ask("*STB?;*SRE?;*ESE?") == "0;191;32"  # bit 6 of the enable register is ignored

    bench.ask("VOLT 3")
    bench.ask("INIT")

    wanted = Summary.ERROR_QUEUE | Summary.EVENT | Summary.OPERATION | Summary.MASTER
    assert bench.ask("*STB?") == str(int(wanted))
    assert bench.ask("*IDN?;*STB?").endswith(f";{int(wanted | Summary.MESSAGE)}")
    bench.ask("ABOR;*CLS")
    assert bench.ask("*STB?") == "0"


def test_the_operation_event_is_latched_until_it_is_read() -> None:
    bench = Bench()
    bench.ask("INIT;:STAT:OPER:ENAB 16;*STB?;:ABOR")

    events = bench.ask("STAT:OPER?;OPER:EVEN?")

    assert events == "16;0"


def test_preset_disables_the_status_groups_but_not_the_event_register() -> None:
    bench = Bench()
    bench.ask("*ESE 1;:STAT:OPER:ENAB 16;:STAT:QUESTIONABLE:ENAB 1;:STAT:PRESET")

    assert bench.ask("STAT:OPER:ENAB?;:STAT:QUESTIONABLE:ENAB?;*ESE?") == "0;0;1"


def test_operation_complete_is_over_at_once() -> None:
    bench = Bench()

    assert bench.ask("*OPC;*WAI;*OPC?;*TST?;*ESR?") == f"1;0;{int(Event.OPERATION_COMPLETE)}"


@given(message=st.text(max_size=80))
def test_any_text_is_answered_or_queued_and_the_next_command_understood(message: str) -> None:
    bench = Bench()

    bench.ask(message.replace("\n", ""))

    assert bench.ask("*CLS;:SYST:ERR?") == '0,"No error"'
