"""A power meter: busy while its gate is open, then mean, variance of the mean and number of readings."""

from __future__ import annotations

from simulators.clock import VirtualClock
from simulators.powermeter import PowerMeter

S = 1_000_000_000


def test_a_power_meter_reads_out_when_its_gate_has_closed() -> None:
    clock, asked = VirtualClock(0), []

    def read(open_ns: int, close_ns: int) -> tuple[float, float, int]:
        asked.append((open_ns, close_ns))
        return 2.5, 0.01, 20

    session = PowerMeter("meter", read, clock).session(lambda data: None)
    session.feed(b"*CLS;:CONF:POW:TIM 2;:INIT\n")

    busy = session.feed(b"FETC?;:STAT:OPER:COND?\n")
    clock.sleep_until(2 * S)
    fetched = session.feed(b"FETC?\n")

    assert busy == b"BUSY;16\n"
    assert fetched == b"1,+2.500000000000E+00,+1.000000000000E-02,20,2.000000000\n"
    assert asked == [(0, 2 * S)]


def test_there_is_nothing_to_fetch_before_a_gate_or_after_an_abort() -> None:
    clock = VirtualClock(0)
    session = PowerMeter("meter", lambda open_ns, close_ns: (1.0, 1.0, 2), clock).session(lambda data: None)
    session.feed(b"*CLS;:INIT;:ABOR\n")

    assert session.feed(b"FETC?;:SYST:ERR?\n").startswith(b"-230")
    assert session.feed(b"CONF:POW:TIM 0;:SYST:ERR?\n").startswith(b"-222")
