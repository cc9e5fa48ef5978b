"""A paced clock goes so many times as fast as the wall clock, and misses no moment of its own."""

import pytest

from simulators.pace import PacedClock


class Wall:
    """A wall clock that passes only while somebody sleeps on it."""

    def __init__(self) -> None:
        self.now_ns = 5_000

    def sleep(self, seconds: float) -> None:
        self.now_ns += round(seconds * 1e9)


@pytest.mark.parametrize("times", [1.0, 10.0, 100.0])
def test_the_wall_clock_passes_so_many_times_less(times):
    wall = Wall()
    clock = PacedClock(0, times, lambda: wall.now_ns, wall.sleep)

    for second in range(1, 101):
        clock.sleep_until(second * 10**9)
        assert clock.now_ns() == second * 10**9

    assert (wall.now_ns - 5_000) == pytest.approx(100e9 / times, rel=1e-9)


def test_a_clock_that_is_behind_does_not_wait():
    wall = Wall()
    clock = PacedClock(0, 10.0, lambda: wall.now_ns, wall.sleep)
    wall.now_ns += 60 * 10**9

    clock.sleep_until(10 * 10**9)

    assert wall.now_ns == 5_000 + 60 * 10**9
