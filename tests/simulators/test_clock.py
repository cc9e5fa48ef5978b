"""The virtual clock: time passes only while everybody who passes time waits, and then at once."""

from __future__ import annotations

import threading

import pytest

from daq.ports import Clock
from simulators.clock import Participant, VirtualClock

S = 1_000_000_000
ORIGIN = 1_796_144_400 * S
JOIN_S = 30.0


@pytest.fixture
def clock() -> VirtualClock:
    return VirtualClock(ORIGIN)


def test_it_starts_where_it_is_told_and_its_utc_goes_with_it() -> None:
    clock: Clock = VirtualClock(ORIGIN, start_ns=5 * S)

    clock.sleep_until(7 * S)

    assert (clock.now_ns(), clock.utc_ns(), clock.kind) == (7 * S, ORIGIN + 7 * S, "virtual")


def test_ten_hours_of_short_sleeps_pass_within_the_test(clock: VirtualClock) -> None:
    for _ in range(36_000):
        clock.sleep_until(clock.now_ns() + S)

    assert clock.now_ns() == 36_000 * S


def test_a_sleep_into_the_past_moves_nothing(clock: VirtualClock) -> None:
    clock.sleep_until(3 * S)

    clock.sleep_until(2 * S)

    assert clock.now_ns() == 3 * S


def test_calls_come_at_their_time_and_ties_in_the_order_asked(clock: VirtualClock) -> None:
    seen: list[tuple[str, int]] = []
    for name, at_s in (("c", 3), ("a", 1), ("b", 3), ("never", 9)):
        clock.call_at(at_s * S, lambda name=name: seen.append((name, clock.now_ns())))  # type: ignore[misc]

    clock.sleep_until(4 * S)

    assert seen == [("a", S), ("c", 3 * S), ("b", 3 * S)]


def test_a_call_for_the_past_comes_at_the_next_waiting(clock: VirtualClock) -> None:
    seen: list[int] = []
    clock.sleep_until(2 * S)

    clock.call_at(S, lambda: seen.append(clock.now_ns()))
    before = list(seen)
    clock.sleep_until(5 * S)

    assert (before, seen) == ([], [2 * S])


def test_a_call_may_ask_for_the_next_call(clock: VirtualClock) -> None:
    seen: list[int] = []

    def tick() -> None:
        seen.append(clock.now_ns() // S)
        clock.call_at(clock.now_ns() + S, tick)

    clock.call_at(S, tick)
    clock.sleep_until(4 * S)

    assert seen == [1, 2, 3, 4]


def test_a_call_that_waits_is_refused_instead_of_hanging(clock: VirtualClock) -> None:
    clock.call_at(S, lambda: clock.sleep_until(2 * S))

    with pytest.raises(RuntimeError, match="must not wait"):
        clock.sleep_until(3 * S)


def test_a_flag_ends_the_waiting_when_it_is_raised(clock: VirtualClock) -> None:
    flag = clock.event()
    clock.call_at(2 * S, flag.set)

    came = flag.wait_until(10 * S)

    assert (came, flag.is_set(), clock.now_ns()) == (True, True, 2 * S)


def test_a_flag_that_stays_down_ends_the_waiting_at_the_deadline(clock: VirtualClock) -> None:
    flag = clock.event()
    flag.set()
    flag.clear()

    came = flag.wait_until(10 * S)

    assert (came, clock.now_ns()) == (False, 10 * S)


def test_time_moves_only_when_every_registered_thread_waits(clock: VirtualClock) -> None:
    """Sleepers with different steps see exactly the merged times, whatever the scheduler does."""
    seen: list[tuple[int, str]] = []

    def sleep(share: Participant, name: str, step_ns: int, steps: int) -> None:
        with share:
            for step in range(1, steps + 1):
                clock.sleep_until(step * step_ns)
                seen.append((clock.now_ns(), name))

    plans = [("a", 10, 300), ("b", 27, 100), ("c", 1001, 2)]
    threads = [
        threading.Thread(target=sleep, args=(clock.register(), name, step_ns, steps), daemon=True)
        for name, step_ns, steps in plans
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(JOIN_S)

    wanted = [(step * step_ns, name) for name, step_ns, n in plans for step in range(1, n + 1)]
    assert [at for at, _ in seen] == sorted(at for at, _ in wanted)
    assert sorted(seen) == sorted(wanted)


def test_a_registered_thread_that_has_not_begun_holds_time(clock: VirtualClock) -> None:
    begun, seen = threading.Event(), list[str]()
    early, late = clock.register(), clock.register()

    def sleep(share: Participant, name: str, at_ns: int) -> None:
        with share:
            begun.wait(JOIN_S) if name == "late" else begun.set()
            clock.sleep_until(at_ns)
            seen.append(name)

    threads = [
        threading.Thread(target=sleep, args=(early, "early", 9 * S), daemon=True),
        threading.Thread(target=sleep, args=(late, "late", 2 * S), daemon=True),
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(JOIN_S)

    assert (seen, clock.now_ns()) == (["late", "early"], 9 * S)


def test_a_thread_that_leaves_holds_time_no_longer(clock: VirtualClock) -> None:
    mine, other = clock.register(), clock.register()
    leaver = threading.Thread(target=lambda: other.__enter__().__exit__(None, None, None), daemon=True)

    with mine:
        leaver.start()
        clock.sleep_until(S)
    leaver.join(JOIN_S)

    assert clock.now_ns() == S


def test_a_flag_between_threads_is_seen_before_time_moves(clock: VirtualClock) -> None:
    """The raiser goes on to wait at once; the woken thread, however slow, still sees the raiser's time."""
    flag, seen = clock.event(), list[int]()
    waiting, raising = clock.register(), clock.register()

    def wait() -> None:
        with waiting:
            flag.wait_until(100 * S)
            seen.append(clock.now_ns())

    waiter = threading.Thread(target=wait, daemon=True)
    with raising:
        waiter.start()
        clock.sleep_until(3 * S)
        flag.set()
        clock.sleep_until(50 * S)
    waiter.join(JOIN_S)

    assert seen == [3 * S]


def test_an_unknown_address_is_refused(clock: VirtualClock) -> None:
    with pytest.raises(ConnectionRefusedError, match="nobody serves"):
        clock.connect("tcp://127.0.0.1:1", 1.0)
