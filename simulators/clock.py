"""The virtual clock: time jumps to the next deadline once everybody who passes time waits.

Simulated hosts answer inside the client's `send`, under the clock's lock (`simulators.hosts`): no byte is
ever on its way while somebody waits, so a command takes no virtual time and nothing in flight can be
overtaken. All simulators live in the process that owns the clock.
"""

from __future__ import annotations

import errno
import heapq
import itertools
import threading
from collections.abc import Callable
from typing import Protocol, cast

from daq.ports import Connection, Signal


class Readable(Connection, Protocol):
    """A connection to a host on this clock."""

    def readable(self) -> bool:
        """Return whether `recv` would give bytes or the end of the stream."""


class Participant:
    """A thread's share in the clock, counted from `register` on; enter it in the thread it stands for."""

    def __init__(self, join: Callable[[], None], leave: Callable[[], None]) -> None:
        self._join, self._leave = join, leave

    def __enter__(self) -> Participant:
        self._join()
        return self

    def __exit__(self, *_: object) -> None:
        self._leave()


class VirtualClock:
    """A run clock whose time passes only while every registered thread waits for it.

    Without registration any waiting thread moves time, which is right for one thread. When several threads
    pass time, each of them is registered (`register`), the first one included.

    Parameters
    ----------
    origin_utc_ns
        UTC at run time 0, nanoseconds since 1970-01-01.
    start_ns
        Run time to begin at: a resumed rehearsal goes on where its last gate closed.
    """

    kind = "virtual"

    def __init__(self, origin_utc_ns: int, start_ns: int = 0) -> None:
        self.lock = threading.RLock()  # hosts answer under it, one at a time
        self._turn = threading.Condition(self.lock)
        self._origin_utc_ns, self._now = origin_utc_ns, start_ns
        self._calls: list[tuple[int, int, Callable[[], None]]] = []
        self._order = itertools.count()
        self._waits: list[_Wait] = []
        self._registered, self._members = 0, set[int]()
        self._caller: int | None = None  # the thread that runs a `call_at` function right now
        self._addresses: dict[str, Callable[[], Connection]] = {}

    def now_ns(self) -> int:
        """Return the run time [ns]."""
        return self._now

    def utc_ns(self) -> int:
        """Return the simulated UTC, nanoseconds since 1970-01-01."""
        return self._origin_utc_ns + self._now

    def step_utc(self, by_ns: int) -> None:
        """Let UTC jump, as a clock does that is set; run time does not notice."""
        self._origin_utc_ns += by_ns

    def sleep_until(self, at_ns: int) -> None:
        """Return when the run time has reached `at_ns`."""
        self.wait(_never, at_ns)

    def event(self) -> Signal:
        """Return a new flag whose waiters pass virtual time."""
        return _VirtualSignal(self)

    def call_at(self, at_ns: int, function: Callable[[], None]) -> None:
        """Call a function, which must not wait, when time reaches `at_ns`; if past, at the next waiting."""
        with self.lock:
            heapq.heappush(self._calls, (at_ns, next(self._order), function))

    def wait_readable(self, connection: Connection, until_ns: int) -> bool:
        """Wait until bytes (or the end of the stream) can be read, at most until `until_ns`."""
        return self.wait(cast(Readable, connection).readable, until_ns)

    def connect(self, address: str, timeout_s: float) -> Connection:
        """Open a byte stream to the host that was published under an address, at once.

        Raises
        ------
        ConnectionRefusedError
            When nobody serves the address on this clock.
        """
        with self.lock:
            if address not in self._addresses:
                raise ConnectionRefusedError(errno.ECONNREFUSED, f"nobody serves {address} on this clock")
            return self._addresses[address]()

    def publish(self, address: str, connect: Callable[[], Connection]) -> None:
        """Let `connect` find a host; raises OSError when the address is taken."""
        with self.lock:
            if address in self._addresses:
                raise OSError(errno.EADDRINUSE, f"{address} is served already on this clock")
            self._addresses[address] = connect

    def withdraw(self, address: str) -> None:
        """Refuse further connections to an address."""
        with self.lock:
            self._addresses.pop(address, None)

    def register(self) -> Participant:
        """Return the share of a thread in the clock; time stands until that thread waits or leaves."""
        with self.lock:
            self._registered += 1
        return Participant(self._join, self._leave)

    def _join(self) -> None:
        with self.lock:
            self._members.add(threading.get_ident())

    def _leave(self) -> None:
        with self.lock:
            self._members.discard(threading.get_ident())
            self._registered -= 1
            self._turn.notify_all()

    def wake(self) -> None:
        """Let whoever waits look again; under the lock."""
        if self._waits:
            self._turn.notify_all()

    def wait(self, ready: Callable[[], bool], until_ns: int) -> bool:
        """Pass time until `ready`, at most until `until_ns`; return whether it is ready."""
        if not self._calls and ready():
            return True
        me = threading.get_ident()
        if self._caller == me:
            raise RuntimeError("a function given to call_at must not wait")
        with self.lock:
            self._run_due()
            wait = _Wait(ready, until_ns, me in self._members)
            self._waits.append(wait)
            try:
                return self._pass_time(wait)
            finally:
                self._waits.remove(wait)
                self.wake()  # who still waits must look again whether time may go on

    def _pass_time(self, wait: _Wait) -> bool:
        while not wait.over(self._now):
            if self._all_wait():
                self._jump()
            else:
                self._turn.wait()
        return wait.ready()

    def _all_wait(self) -> bool:
        members = 0
        for wait in self._waits:
            if wait.over(self._now):
                return False
            members += wait.member
        return members >= self._registered and self._caller is None

    def _jump(self) -> None:
        until_ns = min([wait.until_ns for wait in self._waits])
        to_ns = min(until_ns, self._calls[0][0]) if self._calls else until_ns
        self._passed(to_ns)
        self._now = to_ns
        self._run_due()
        if len(self._waits) > 1:
            self._turn.notify_all()

    def _passed(self, to_ns: int) -> None:
        """Let time pass before it jumps; here it needs none."""

    def _due(self) -> bool:
        return bool(self._calls) and self._calls[0][0] <= self._now

    def _run_due(self) -> None:
        # Functions run without the lock: one that takes a link's write lock cannot lock the clock out.
        while self._caller is None and self._due():
            _, _, function = heapq.heappop(self._calls)
            self._caller = threading.get_ident()
            self.lock.release()
            try:
                function()
            finally:
                self.lock.acquire()
                self._caller = None


class _Wait:
    """A thread that waits: for what, until when, and whether time stands without it."""

    __slots__ = ("member", "ready", "until_ns")

    def __init__(self, ready: Callable[[], bool], until_ns: int, member: bool) -> None:
        self.ready, self.until_ns, self.member = ready, until_ns, member

    def over(self, now_ns: int) -> bool:
        return self.until_ns <= now_ns or self.ready()


class _VirtualSignal:
    """A flag on a virtual clock."""

    def __init__(self, clock: VirtualClock) -> None:
        self._clock = clock
        self._up = False

    def set(self) -> None:
        with self._clock.lock:
            self._up = True
            self._clock.wake()

    def clear(self) -> None:
        self._up = False

    def is_set(self) -> bool:
        return self._up

    def wait_until(self, at_ns: int) -> bool:
        return self._clock.wait(self.is_set, at_ns)


def _never() -> bool:
    return False
